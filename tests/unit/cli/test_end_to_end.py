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
reseed = false
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


# ------------------------------------------------------------------------------------- accuracy on request

STEERED = (
    CASE.replace("per_cell = 32\nreseed = false\n", "").replace("steps = 2\n", "steps = 64\n")
    .replace("[events.never]\nwhen = \"x > 2\"\n", "")
)  # fmt: skip


@pytest.fixture
def steered(folder: Path) -> Path:
    (folder / "circle.toml").write_text(STEERED, encoding="utf-8")
    return folder


def test_an_accuracy_is_reached(steered: Path, capsys: Capture) -> None:
    """Status 0; the targets in the object, the file and the table; the truth, 1/4 and every sixth step, inside."""
    assert main(["run", "circle.toml", "--quiet", "--json", "--accuracy", "0.02", "--workers", "2"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    run = json.loads(out)
    targets = [(t["event"], t["number"], t["wanted"], t["met"], t["reason"]) for t in run["targets"]]
    assert targets == [("left", number, 0.02, True, "") for number in ("share", "return_period")]
    for number, truth in (("share", 0.25), ("return_period", 6.0)):
        found = run["regimes"][0]["events"]["left"][number]
        assert found["low"] <= truth <= found["high"]
        assert (found["high"] - found["low"]) / 2.0 <= 0.02 * found["value"]
    assert main(["show", "circle.h5"]) == 0
    lines = [line.split() for line in capsys.readouterr().out.splitlines()]
    assert ["accuracy", "of", "event", "wanted", "reached"] in [line[:5] for line in lines]
    with perdure.open("circle.h5") as file:
        assert [target.met for target in file.targets] == [True, True]
        assert "--accuracy 0.02" in file.command


def test_an_accuracy_that_is_not_reached(steered: Path, capsys: Capture) -> None:
    """Status 1 and the file; the reason on standard error and in the table, where no check of the numbers failed."""
    assert main(["run", "circle.toml", "--accuracy", "0.0001", "--budget-steps", "1e6", "--workers", "2"]) == 1
    out, err = capsys.readouterr()
    assert (steered / "circle.h5").exists()
    assert "event left: the accuracy of the share of time was not reached: wanted 0.0001" in err
    assert "the budget of 1e+06 steps is spent" in err
    assert "not met: the budget of 1e+06 steps is spent" in out
    assert "circle.h5 is saved, but an accuracy was not reached (exit status 1)" in err
    assert "a stated check failed" not in err + out


def test_an_accuracy_in_the_case_file_steers_the_run(steered: Path, capsys: Capture) -> None:
    text = STEERED.replace("seed = 3", "seed = 3\naccuracy = 0.05")
    (steered / "circle.toml").write_text(text, encoding="utf-8")
    for options, wanted in (((), 0.05), (("--accuracy", "0.1"), 0.1)):
        assert main(["run", "circle.toml", "--quiet", "--json", *options]) == 0
        assert [t["wanted"] for t in json.loads(capsys.readouterr().out)["targets"]] == [wanted, wanted]


@pytest.mark.parametrize(
    ("options", "told"),
    [
        (["--accuracy", "0"], "--accuracy"),
        (["--accuracy", "1.5"], "--accuracy"),
        (["--budget-steps", "1e6"], "without an accuracy"),
        (["--accuracy", "0.1", "--budget-steps", "-1"], "--budget-steps"),
    ],
)
def test_requests_without_sense_leave_no_file(steered: Path, capsys: Capture, options: list[str], told: str) -> None:
    assert main(["run", "circle.toml", *options]) == 2
    err = capsys.readouterr().err
    for part in (told, "found", "allowed"):
        assert part in err
    assert not (steered / "circle.h5").exists()


def test_plain_bursts_have_no_accuracy(folder: Path, capsys: Capture) -> None:
    """The case of the other tests asks for plain bursts."""
    assert main(["run", "circle.toml", "--accuracy", "0.05"]) == 2
    (line,) = capsys.readouterr().err.splitlines()
    assert "circle.toml, [bursts] reseed: found false beside accuracy 0.05" in line
    assert not (folder / "circle.h5").exists()
