"""The scripts that set perdure up: what they say on unfit machines, when they reuse an environment."""

from __future__ import annotations

import ast
import importlib.util
import json
import re
import subprocess
import sys
import tomllib
from pathlib import Path
from types import ModuleType

import pytest
from packaging.requirements import Requirement
from packaging.utils import canonicalize_name

ROOT = Path(__file__).resolve().parents[2]
SCRIPTS = ROOT / "scripts"

Capture = pytest.CaptureFixture[str]


def load(name: str) -> ModuleType:
    """A script as a module, without running it."""
    spec = importlib.util.spec_from_file_location(name, SCRIPTS / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def environment(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    """`_environment` for a checkout of its own; `steps` lists what it does instead of doing it."""
    module = load("_environment")
    monkeypatch.setattr(module, "ENVIRONMENT", tmp_path / ".venv")
    monkeypatch.setattr(module, "STAMP", tmp_path / ".venv" / "perdure-environment.json")
    monkeypatch.setattr(module, "_BIN", tmp_path / ".venv" / "bin")
    steps: list[str] = []

    def create(wanted: dict[str, object]) -> None:
        steps.append("create")
        module._BIN.mkdir(parents=True, exist_ok=True)
        (module._BIN / "python").touch()

    monkeypatch.setattr(module, "steps", steps, raising=False)
    monkeypatch.setattr(module, "_real_create", module._create, raising=False)
    monkeypatch.setattr(module, "_create", create)
    monkeypatch.setattr(module, "_install", lambda extras: steps.append("install " + ",".join(extras)))
    return module


def steps_of(module: ModuleType, extra: str = "") -> list[str]:
    """What `prepare` does now."""
    module.steps.clear()
    module.prepare(extra)
    return list(module.steps)


def test_environment_is_made_once(environment: ModuleType) -> None:
    assert steps_of(environment) == ["create", "install "]
    assert steps_of(environment) == []


def test_an_extra_is_added_and_kept(environment: ModuleType) -> None:
    assert steps_of(environment) == ["create", "install "]
    assert steps_of(environment, "test") == ["install test"]
    assert steps_of(environment, "test") == []
    assert steps_of(environment) == []


@pytest.mark.parametrize("change", [{"python": "3.11.0 (another)"}, {"inputs": "0" * 64}])
def test_another_python_or_other_packages_make_it_anew(environment: ModuleType, change: dict[str, str]) -> None:
    environment.prepare()
    stamp = json.loads(environment.STAMP.read_text(encoding="utf-8"))
    environment.STAMP.write_text(json.dumps({**stamp, **change}), encoding="utf-8")
    assert steps_of(environment) == ["create", "install "]


@pytest.mark.parametrize("text", ["", "{}", "[]", '{"python": 3'])
def test_an_unfinished_environment_is_made_anew(environment: ModuleType, text: str) -> None:
    environment.prepare()
    environment.STAMP.write_text(text, encoding="utf-8")
    assert steps_of(environment) == ["create", "install "]


def test_a_lost_interpreter_makes_it_anew(environment: ModuleType) -> None:
    environment.prepare()
    environment.program("python").unlink()
    assert steps_of(environment) == ["create", "install "]


def test_a_foreign_folder_is_left_alone(environment: ModuleType, capsys: Capture) -> None:
    environment.ENVIRONMENT.mkdir()
    precious = environment.ENVIRONMENT / "precious"
    precious.touch()
    with pytest.raises(SystemExit) as stop:
        environment.prepare()
    assert stop.value.code == 1
    assert environment.steps == []
    assert precious.exists()
    assert "was not made by this script" in capsys.readouterr().err


def test_inputs_follow_both_files(environment: ModuleType, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(environment, "ROOT", tmp_path)
    monkeypatch.setattr(environment, "CONSTRAINTS", tmp_path / "constraints.txt")
    seen = set()
    for project, constraints in (("a", "b"), ("a", "c"), ("d", "b")):
        (tmp_path / "pyproject.toml").write_text(project, encoding="utf-8")
        (tmp_path / "constraints.txt").write_text(constraints, encoding="utf-8")
        seen.add(environment._inputs())
    assert len(seen) == 3


def test_create_empties_the_folder(environment: ModuleType, monkeypatch: pytest.MonkeyPatch) -> None:
    """A real environment, without pip to be quick."""
    monkeypatch.setattr(environment.shutil, "which", lambda name: "uv")
    old = environment.ENVIRONMENT / "lib" / "old.py"
    old.parent.mkdir(parents=True)
    old.touch()
    environment._real_create({"python": sys.version})
    assert not old.exists()
    assert environment._read_stamp() == {}
    done = subprocess.run([environment.program("python"), "-c", "import sys; print(sys.prefix)"], capture_output=True)
    assert Path(done.stdout.decode().strip()) == environment.ENVIRONMENT


@pytest.mark.parametrize(("uv", "missing"), [(None, "venv and ensurepip"), ("uv", "venv")])
def test_missing_modules_are_named(
    environment: ModuleType, monkeypatch: pytest.MonkeyPatch, capsys: Capture, uv: str | None, missing: str
) -> None:
    monkeypatch.setattr(environment.shutil, "which", lambda name: uv)
    monkeypatch.setattr(environment.importlib.util, "find_spec", lambda name: None)
    with pytest.raises(SystemExit):
        environment._real_create({"python": sys.version})
    err = capsys.readouterr().err
    assert f"comes without {missing}. Install" in err
    assert "python3-venv" in err
    assert not environment.ENVIRONMENT.exists()


@pytest.mark.parametrize("script", ["demo", "test"])
def test_old_python_is_told_so(script: str) -> None:
    code = (
        "import runpy, sys\n"
        "sys.version_info, sys.version = (3, 10, 2), '3.10.2 (main)'\n"
        f"sys.path.insert(0, {str(SCRIPTS)!r})\n"
        f"runpy.run_path({str(SCRIPTS / f'{script}.py')!r}, run_name='__main__')\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True)
    assert done.returncode == 1
    assert done.stderr.startswith("perdure: Python 3.11 or newer is needed, this is 3.10.2")
    assert len(done.stderr.splitlines()) == 1


@pytest.mark.parametrize("script", ["_environment", "demo", "test"])
def test_old_python_can_read_the_scripts(script: str) -> None:
    """Otherwise it would report a syntax error instead of its age."""
    source = (SCRIPTS / f"{script}.py").read_text(encoding="utf-8")
    ast.parse(source, feature_version=(3, 6))
    # 3.6 refuses to compile this import, which the grammar does not tell
    assert not re.search(r"^from __future__ import annotations", source, re.MULTILINE)


def test_all_checks_run_and_a_failed_one_counts(
    environment: ModuleType, monkeypatch: pytest.MonkeyPatch, capsys: Capture
) -> None:
    monkeypatch.setitem(sys.modules, "_environment", environment)
    script = load("test")
    calls: list[tuple[str, ...]] = []

    def run(*command: str) -> int:
        calls.append(command)
        return 2 if command == ("mypy",) else 0

    monkeypatch.setattr(script, "prepare", lambda extra: None)
    monkeypatch.setattr(script, "run", run)
    assert script.main(["-k", "cli"]) == 1
    assert calls == [
        ("ruff", "check", "."),
        ("ruff", "format", "--check", "."),
        ("mypy",),
        ("pytest", "-k", "cli"),
    ]
    assert "== mypy: FAILED (exit status 2)" in capsys.readouterr().out
    monkeypatch.setattr(script, "run", lambda *command: 0)
    assert script.main([]) == 0
    monkeypatch.setattr(script, "run", lambda *command: 5 if command == ("pytest",) else 0)
    assert script.main([]) == 1


def test_demo_stops_at_the_first_failure(environment: ModuleType, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "_environment", environment)
    script = load("demo")
    calls: list[str] = []
    monkeypatch.setattr(script, "prepare", lambda: None)
    monkeypatch.setattr(script, "run", lambda *command: calls.append(command[1]) or 3)
    assert script.main() == 3
    assert calls == ["run"]
    monkeypatch.setattr(script, "run", lambda *command: calls.append(command[1]) or 0)
    assert script.main() == 0
    assert calls == ["run", "run", "show"]


def test_constraints_pin_every_requirement() -> None:
    text = (SCRIPTS / "constraints.txt").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    assert all(re.fullmatch(r"[A-Za-z0-9._-]+==[0-9][A-Za-z0-9.]*", line) for line in lines)
    pinned = {canonicalize_name(name): version for name, version in (line.split("==") for line in lines)}
    assert len(pinned) == len(lines)
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))
    needed = [*project["project"]["dependencies"], *project["project"]["optional-dependencies"]["test"]]
    needed += project["build-system"]["requires"]
    for requirement in map(Requirement, needed):
        assert pinned[canonicalize_name(requirement.name)] in requirement.specifier
