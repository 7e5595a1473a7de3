"""``perdure crosscheck``, ``run --crosscheck`` and ``show --crosscheck`` on a stand-in for the engine."""

from __future__ import annotations

import contextlib
import json
from dataclasses import replace
from pathlib import Path
from types import TracebackType
from typing import Any

import pytest

import perdure._store
from helpers.synthetic_crosscheck import make_crosscheck
from perdure._cli.comparison import crosscheck_text, summary_lines
from perdure._cli.main import main
from perdure._records import Crosscheck
from perdure.errors import OutputError
from unit.cli.fakes import SHA256, Engine, FakeResult

Capture = pytest.CaptureFixture[str]


class Opened(contextlib.AbstractContextManager["FakeResult"]):
    """A file that was opened."""

    def __init__(self, result: FakeResult) -> None:
        self.result = result

    def __enter__(self) -> FakeResult:
        return self.result

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        return None


@pytest.fixture
def added(engine: Engine, monkeypatch: pytest.MonkeyPatch) -> list[Crosscheck]:
    """What was put into files; the engine finds agreement."""
    found: list[Crosscheck] = []

    def add(path: Path, crosscheck: Crosscheck) -> str:
        found.append(crosscheck)
        return SHA256

    engine.found = make_crosscheck()
    monkeypatch.setattr(perdure._store, "add_crosscheck", add, raising=False)
    monkeypatch.setattr(perdure._store, "check_target", lambda path: None, raising=False)
    return found


@pytest.fixture
def file(engine: Engine, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Path:
    import sys

    path = tmp_path / "loop.h5"
    path.write_bytes(b"")
    module: Any = sys.modules["perdure._result"]
    monkeypatch.setattr(module, "open_file", lambda path: Opened(engine.result))
    return path


def test_it_is_added_and_printed(engine: Engine, added: list[Crosscheck], file: Path, capsys: Capture) -> None:
    assert main(["crosscheck", str(file)]) == 0
    out, err = capsys.readouterr()
    assert added == [engine.found]
    assert "crosscheck by long trajectories: agrees (5 comparisons" in out
    assert out.endswith(f"\nadded to {file} (SHA-256 {SHA256})\n")
    assert err.splitlines() == ["trajectories 0/400"]
    assert engine.log == [("crosscheck", (None, "perdure crosscheck loop.h5"))]


def test_options_are_handed_on(engine: Engine, added: list[Crosscheck], file: Path) -> None:
    options = [
        "--starts",
        "8",
        "--duration",
        "1e4",
        "--budget-steps",
        "2e9",
        "--budget-minutes",
        "5",
        "--level",
        "0.01",
    ]
    assert main(["crosscheck", str(file), *options, "--workers", "2", "--quiet"]) == 0
    assert engine.asked == {"starts": 8, "duration": 1e4, "steps": 2e9, "minutes": 5.0, "level": 0.01}
    assert engine.log[0][1][0] == 2


@pytest.mark.parametrize("verdict", ["disagrees", "too short to tell"])
def test_anything_but_agreement_is_exit_1(
    engine: Engine, added: list[Crosscheck], file: Path, capsys: Capture, verdict: str
) -> None:
    engine.found = make_crosscheck(verdict)
    assert main(["crosscheck", str(file), "--quiet"]) == 1
    out, err = capsys.readouterr()
    assert out == ""
    assert f"perdure: crosscheck by long trajectories: {verdict}" in err
    assert added == [engine.found]


@pytest.mark.parametrize(
    ("option", "value"),
    [("--starts", "2"), ("--duration", "-1"), ("--level", "1.5"), ("--budget-steps", "many"), ("--workers", "0")],
)
def test_wrong_options_are_refused(
    engine: Engine, added: list[Crosscheck], file: Path, capsys: Capture, option: str, value: str
) -> None:
    assert main(["crosscheck", str(file), option, value]) == 2
    assert option in capsys.readouterr().err
    assert added == []
    assert engine.log == []


def test_a_file_that_cannot_be_written_still_prints(
    engine: Engine, added: list[Crosscheck], file: Path, capsys: Capture, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(path: Path, crosscheck: Crosscheck) -> str:
        raise OutputError("loop.h5: the disk is full", crosscheck)

    monkeypatch.setattr(perdure._store, "add_crosscheck", full)
    assert main(["crosscheck", str(file), "--json"]) == OutputError.exit_status
    out, err = capsys.readouterr()
    assert json.loads(out)["file_sha256"] is None
    assert "the disk is full" in err


def test_run_with_a_crosscheck(engine: Engine, added: list[Crosscheck], capsys: Capture) -> None:
    assert main(["run", "loop.toml", "--crosscheck"]) == 0
    out, _ = capsys.readouterr()
    assert engine.result.saved == [Path("loop.h5")]
    assert added == [engine.found]
    assert "crosscheck by long trajectories: agrees" in out
    assert engine.log[-1] == ("crosscheck", (None, "perdure run loop.toml --crosscheck"))


def test_run_with_a_crosscheck_that_disagrees(engine: Engine, added: list[Crosscheck], capsys: Capture) -> None:
    engine.found = make_crosscheck("disagrees")
    assert main(["run", "loop.toml", "--crosscheck", "--quiet"]) == 1
    assert "crosscheck by long trajectories: disagrees" in capsys.readouterr().err


def test_show_prints_the_comparison(engine: Engine, capsys: Capture) -> None:
    engine.result = replace(engine.result, crosscheck=make_crosscheck())
    assert main(["show", "loop.toml", "--crosscheck"]) == 0
    out, _ = capsys.readouterr()
    assert out.rstrip("\n") == crosscheck_text(engine.result)
    assert main(["show", "loop.toml"]) == 0
    assert "\n".join(summary_lines(engine.result.crosscheck, "s")) in capsys.readouterr().out


def test_show_without_one_says_what_to_do(engine: Engine, capsys: Capture) -> None:
    assert main(["show", "loop.toml", "--crosscheck"]) == 2
    assert "run `perdure crosscheck loop.toml` first" in capsys.readouterr().err
    assert main(["show", "loop.toml", "--crosscheck", "--budget"]) == 2
    assert "--budget: found beside --crosscheck" in capsys.readouterr().err


def test_the_table_has_every_number() -> None:
    text = crosscheck_text(FakeResult(crosscheck=make_crosscheck(n_regime=2)))
    for part in (
        "regime 1, coût élevé, share of time",
        "regime 2, mean level, mean",
        "1.500 ± 0.040 m",
        "1.40 ± 0.20 m",
        "+1.1",
        "2.5e+05 / 3e+05",
        "too short to tell (length 1.02e+05 would do): the trajectories' error is 5 times that of the density",
        "0.004 (0.003)",
        "regime 2, Lyapunov exponents: 0.5000 ± 0.0050 1/days, 0.0000 ± 0.0050 1/days, none: lost in rounding",
        "what has to hold",
    ):
        assert part in text
