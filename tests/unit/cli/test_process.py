"""The command as a process: speed of the help, signals, broken and full outputs."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

import pytest

# A stand-in for the engine whose work prints "begun" and then takes a minute.
STAND_IN = """
import signal, sys, time
# a shell starts its background jobs with this signal ignored, and children inherit that
signal.signal(signal.SIGINT, signal.default_int_handler)
from pathlib import Path
from types import ModuleType
from unit.cli.fakes import Engine
from perdure._cli.main import main

def work():
    try:
        print("begun", flush=True)
        time.sleep(60.0)
    finally:
        Path("cleaned").touch()

engine = Engine()
engine.work = work if "slow" in sys.argv else engine.work
for name in ("_case", "_pipeline", "_result"):
    module = ModuleType("perdure." + name)
    for function in ("load_case", "estimate", "open_file"):
        setattr(module, function, getattr(engine, function))
    sys.modules["perdure." + name] = module
sys.exit(main(sys.argv[2:]))
"""
TESTS = Path(__file__).resolve().parents[2]


def command(speed: str, *arguments: str) -> list[str]:
    return [sys.executable, "-c", STAND_IN, speed, *arguments]


@pytest.fixture
def environment(tmp_path: Path) -> dict[str, str]:
    """Environment of a child that finds the stand-in; ``loop.toml`` is in its folder."""
    (tmp_path / "loop.toml").write_text("[case]\n", encoding="utf-8")
    given = filter(None, os.environ.get("PYTHONPATH", "").split(os.pathsep))
    paths = [str(TESTS), *(os.path.abspath(path) for path in given)]
    return {**os.environ, "PYTHONPATH": os.pathsep.join(paths)}


def test_module_passes_the_exit_status_on() -> None:
    done = subprocess.run([sys.executable, "-m", "perdure", "run"], capture_output=True, text=True)
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.startswith("perdure: Missing argument 'CASE'")


@pytest.mark.parametrize(
    ("number", "text"),
    [(signal.SIGTERM, "perdure: ended by SIGTERM"), (signal.SIGINT, "perdure: interrupted")],
)
def test_a_signal_cleans_up_and_is_status_3(
    environment: dict[str, str], tmp_path: Path, number: signal.Signals, text: str
) -> None:
    with subprocess.Popen(
        command("slow", "run", "loop.toml"),
        cwd=tmp_path,
        env=environment,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    ) as child:
        assert child.stdout is not None
        assert child.stdout.readline() == "begun\n"
        child.send_signal(number)
        _, err = child.communicate(timeout=30)
    assert child.returncode == 3
    assert err.splitlines()[-1].startswith(text)
    assert (tmp_path / "cleaned").exists()
    assert not (tmp_path / "loop.h5").exists()


def test_a_reader_that_goes_away_is_no_error(environment: dict[str, str], tmp_path: Path) -> None:
    reader, writer = os.pipe()
    os.close(reader)
    done = subprocess.run(
        command("quick", "show", "loop.toml"),
        cwd=tmp_path,
        env=environment,
        stdout=writer,
        stderr=subprocess.PIPE,
    )
    os.close(writer)
    assert (done.returncode, done.stderr) == (0, b"")


def test_a_full_disk_is_status_3(environment: dict[str, str], tmp_path: Path) -> None:
    with open("/dev/full", "wb") as full:
        done = subprocess.run(
            command("quick", "show", "loop.toml"),
            cwd=tmp_path,
            env=environment,
            stdout=full,
            stderr=subprocess.PIPE,
        )
    assert done.returncode == 3
    assert done.stderr.startswith(b"perdure: standard output: the results could not be written (No space left")


@pytest.mark.parametrize(("closed", "status"), [("stdout", 0), ("stderr", 0)])
def test_closed_outputs(environment: dict[str, str], tmp_path: Path, closed: str, status: int) -> None:
    number = {"stdout": 1, "stderr": 2}[closed]
    done = subprocess.run(
        ["sh", "-c", f'exec "$@" {number}>&-', "sh", *command("quick", "run", "loop.toml")],
        cwd=tmp_path,
        env=environment,
        capture_output=True,
    )
    assert done.returncode == status


def test_plain_terminals_get_plain_text(environment: dict[str, str], tmp_path: Path) -> None:
    environment["PYTHONIOENCODING"] = "ascii"
    done = subprocess.run(
        command("quick", "show", "loop.toml"), cwd=tmp_path, env=environment, capture_output=True, check=True
    )
    assert b"0.02165 +/- 0.00043" in done.stdout
