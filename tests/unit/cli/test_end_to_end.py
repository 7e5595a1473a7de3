"""The commands on the real engine: one small case from file to file."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import perdure
from perdure._cli.main import main

CASE = """
[case]
title = "Tripling circle"
seed = 3
[system]
kind = "map"
state = ["x"]
[system.equations]
x = "3*x % 1"
[cells]
lower = {x = 0.0}
upper = {x = 1.0}
counts = {x = 27}
[bursts]
steps = 2
per_cell = 32
[events.left]
when = "x < 0.25"
[events.never]
when = "x > 2"
[observables]
place = "x"
"""

Capture = pytest.CaptureFixture[str]


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "circle.toml").write_text(CASE, encoding="utf-8")
    return tmp_path


def test_run_show_and_python_agree(folder: Path, capsys: Capture) -> None:
    assert main(["run", "circle.toml", "--quiet", "--json", "--workers", "2"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    run = json.loads(out)
    assert run.pop("file") == "circle.h5"
    assert len(run.pop("file_sha256")) == 64
    assert run.pop("schema") == 1
    assert main(["show", "circle.h5", "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == run
    # the same numbers from Python with another number of threads, to the last bit
    share = perdure.estimate(perdure.load_case("circle.toml"), workers=1).regimes[0].events["left"].share
    assert share.value is not None
    shown = run["regimes"][0]["events"]["left"]["share"]
    assert (shown["value"], shown["low"], shown["high"]) == (share.value, share.low, share.high)


def test_another_seed_gives_other_numbers(folder: Path, capsys: Capture) -> None:
    outputs = []
    for seed in ("3", "4"):
        assert main(["run", "circle.toml", "--quiet", "--json", "--seed", seed]) == 0
        outputs.append(json.loads(capsys.readouterr().out)["regimes"][0]["events"]["left"]["share"]["value"])
    assert outputs[0] != outputs[1]


def test_tables_and_plan(folder: Path, capsys: Capture) -> None:
    assert main(["check", "circle.toml"]) == 0
    assert "  bursts per cell  32" in capsys.readouterr().out.splitlines()
    assert main(["run", "circle.toml"]) == 0
    table = capsys.readouterr().out
    assert "never  share of time  < 0." in table
    assert main(["show", "circle.h5"]) == 0
    shown = capsys.readouterr().out.splitlines()
    assert shown == table.splitlines()[: len(shown)]


def test_mistakes_in_a_case_leave_no_file(folder: Path, capsys: Capture) -> None:
    text = CASE.replace("per_cell = 32", "per_cel = 32").replace("seed = 3", "seed = -3")
    (folder / "circle.toml").write_text(text, encoding="utf-8")
    assert main(["run", "circle.toml"]) == 2
    err = capsys.readouterr().err.splitlines()
    assert len(err) == 2
    assert "per_cell" in " ".join(err)
    assert not (folder / "circle.h5").exists()


def test_a_file_that_is_no_density_file(folder: Path, capsys: Capture) -> None:
    assert main(["show", "circle.toml"]) == 2
    assert capsys.readouterr().err.startswith("perdure: ")
