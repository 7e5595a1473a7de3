"""Commands, messages and exit statuses, on a stand-in for the engine."""

from __future__ import annotations

import dataclasses
import errno
import json
import sys
import threading
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from perdure import Budget, __version__
from perdure._cli.main import cli, main
from perdure._records import Target
from perdure.errors import CaseError, DensityFileError, NoAttractorError, OutputError, ResourceError
from unit.cli.fakes import COST, LOOP, MAP, PLAN, SHA256, Engine, FakeResult

Capture = pytest.CaptureFixture[str]


def raising(error: BaseException) -> Callable[[], None]:
    def work() -> None:
        raise error

    return work


def test_run_prints_results_and_saves(engine: Engine, capsys: Capture) -> None:
    assert main(["run", "loop.toml"]) == 0
    out, err = capsys.readouterr()
    assert out.startswith("Convection loop\noutcome: one regime\n")
    assert out.endswith(f"\nsaved in loop.h5 (SHA-256 {SHA256})\n")
    assert err.splitlines() == ["pilot", "bursts 3/400"]
    assert engine.result.saved == [Path("loop.h5")]
    assert engine.log == [("load_case", Path("loop.toml")), ("estimate", (7, None, "perdure run loop.toml"))]


def test_run_hands_on_workers_seed_and_output(engine: Engine, tmp_path: Path) -> None:
    target = tmp_path / "results" / "a.h5"
    target.parent.mkdir()
    big = 2**80
    assert main(["run", "loop.toml", "-o", str(target), "--workers", "3", "--seed", str(big)]) == 0
    assert engine.log[-1] == ("estimate", (big, 3, f"perdure run loop.toml --seed {big}"))
    assert engine.result.saved == [target]


def test_run_json_is_one_object(engine: Engine, capsys: Capture) -> None:
    assert main(["run", "loop.toml", "--json"]) == 0
    content = json.loads(capsys.readouterr().out)
    assert content == {**engine.result.to_dict(), "file": "loop.h5", "file_sha256": SHA256, "schema": 1}


def test_show_json_is_the_result_alone(engine: Engine, capsys: Capture) -> None:
    assert main(["show", "loop.toml", "--json"]) == 0
    assert json.loads(capsys.readouterr().out) == engine.result.to_dict()
    assert engine.log == [("open_file", Path("loop.toml"))]


def test_show_prints_the_same_table_as_run(engine: Engine, capsys: Capture) -> None:
    assert main(["run", "loop.toml"]) == 0
    table = capsys.readouterr().out.rsplit("\n\nsaved in", 1)[0]
    assert main(["show", "loop.toml"]) == 0
    assert capsys.readouterr().out == table + "\n"


@pytest.mark.parametrize("more", [[], ["--json"]])
def test_quiet_leaves_errors_only(engine: Engine, capsys: Capture, more: list[str]) -> None:
    assert main(["run", "loop.toml", "--quiet", *more]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert bool(out) == bool(more)


def test_failed_check_is_status_1_and_saved(engine: Engine, capsys: Capture) -> None:
    engine.result = FakeResult(checks_passed=False, messages=("the cover did not close",))
    assert main(["run", "loop.toml", "--quiet"]) == 1
    assert engine.result.saved == [Path("loop.h5")]
    assert capsys.readouterr().err.splitlines() == [
        "perdure: the cover did not close",
        "perdure: loop.h5 is saved, but a stated check failed (exit status 1)",
    ]


UNMET = (
    Target("reversal", "share", 0.02, 0.0195, True),
    Target("reversal", "return_period", 0.02, 0.0341, False, "the budget of steps is spent"),
)


@pytest.mark.parametrize("more", [[], ["--quiet"], ["--json"]])
def test_an_accuracy_that_was_not_reached_is_status_1_and_saved(
    engine: Engine, capsys: Capture, more: list[str]
) -> None:
    engine.result = FakeResult(targets=UNMET)
    assert main(["run", "loop.toml", *more]) == 1
    assert engine.result.saved == [Path("loop.h5")]
    assert capsys.readouterr().err.splitlines()[-2:] == [
        "perdure: event reversal: the accuracy of the return period was not reached: wanted 0.02, reached 0.035: "
        "the budget of steps is spent",
        "perdure: loop.h5 is saved, but an accuracy was not reached (exit status 1)",
    ]


def test_an_accuracy_that_was_reached_is_status_0(engine: Engine, capsys: Capture) -> None:
    """Negative control of the test above."""
    engine.result = FakeResult(targets=UNMET[:1])
    assert main(["run", "loop.toml", "--quiet"]) == 0
    assert capsys.readouterr().err == ""


def test_run_is_steered_only_when_asked_to(engine: Engine) -> None:
    assert main(["run", "loop.toml", "--quiet"]) == 0
    assert engine.steered == {}
    arguments = ["--accuracy", "0.02", "--budget-steps", "2e10", "--budget-minutes", "30", "--budget-memory", "8GB"]
    assert main(["run", "loop.toml", "--quiet", *arguments]) == 0
    assert engine.steered == {"accuracy": 0.02, "budget": Budget(steps=2e10, minutes=30.0, memory=8e9)}
    command = (
        "perdure run loop.toml --accuracy 0.02 --budget-steps 20000000000 --budget-minutes 30 "
        "--budget-memory 8000000000"
    )
    assert engine.log[-1] == ("estimate", (7, None, command))
    # what is on record can be typed again
    assert main([*command.split()[1:], "--quiet"]) == 0
    assert engine.log[-1] == ("estimate", (7, None, command))
    assert main(["run", "loop.toml", "--quiet", "--accuracy", "0.5"]) == 0
    assert engine.steered == {"accuracy": 0.5}


def test_a_budget_may_rest_on_the_accuracy_of_the_case(engine: Engine) -> None:
    engine.case = dataclasses.replace(LOOP, accuracy=0.1)
    assert main(["run", "loop.toml", "--quiet", "--budget-minutes", ".5"]) == 0
    assert engine.steered == {"budget": Budget(minutes=0.5)}


def test_a_budget_without_an_accuracy_is_refused_before_any_work(engine: Engine, capsys: Capture) -> None:
    assert main(["run", "loop.toml", "--budget-minutes", "3", "--budget-memory", "1e9"]) == 2
    assert capsys.readouterr().err == (
        "perdure: --budget-minutes, --budget-memory: found a budget without an accuracy to spend it on; allowed: a "
        "budget beside --accuracy or beside accuracy in [case]; add for example --accuracy 0.05, or leave out "
        "--budget-minutes, --budget-memory\n"
    )
    assert [call for call, _ in engine.log] == ["load_case"]
    assert engine.result.saved == []


@pytest.mark.parametrize(
    ("text", "size"),
    [("8e9", 8e9), ("8GB", 8e9), ("500MB", 5e8), ("1.5 gb", 1.5e9), ("64kB", 64e3), ("2TB", 2e12), ("70b", 70.0)],
)
def test_sizes_of_memory(engine: Engine, text: str, size: float) -> None:
    assert main(["run", "loop.toml", "--quiet", "--accuracy", "0.1", "--budget-memory", text]) == 0
    assert engine.steered["budget"] == Budget(memory=size)


def test_show_prints_the_budget(engine: Engine, capsys: Capture) -> None:
    assert main(["show", "loop.toml", "--budget"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[2] == "number                   value                half-width  sampling"
    assert lines[3] == "reversal, share of time  0.02165 ± 0.00043    0.00086     0.00043"
    assert main(["show", "loop.toml", "--budget", "--json"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("perdure: --budget: found beside --json; allowed: one of the two; leave out --budget")


def test_every_mistake_of_a_case_has_a_line(engine: Engine, capsys: Capture) -> None:
    engine.case = CaseError(["loop.toml, [cells] uper: unknown key", "loop.toml, [case] seed: -1 is negative"])
    assert main(["check", "loop.toml"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.splitlines() == [
        "perdure: loop.toml, [cells] uper: unknown key",
        "perdure: loop.toml, [case] seed: -1 is negative",
    ]


@pytest.mark.parametrize(
    ("error", "status", "text"),
    [
        (NoAttractorError("every start left all bounds"), 2, "every start left all bounds"),
        (ResourceError("a worker was lost"), 3, "a worker was lost"),
        (MemoryError(), 3, "out of memory; ask for fewer cells"),
        (KeyboardInterrupt(), 3, "interrupted"),
        (OSError(errno.ENOSPC, "No space left on device"), 3, "out of resources (No space left on device)"),
        (OSError(errno.EIO, "Input/output error"), 70, "please report it with the case file: OSError"),
        (ValueError("bad\nshape"), 70, "please report it with the case file: ValueError: bad shape; -v adds"),
    ],
)
def test_status_of_what_goes_wrong(
    engine: Engine, capsys: Capture, error: BaseException, status: int, text: str
) -> None:
    engine.work = raising(error)
    assert main(["run", "loop.toml", "--quiet"]) == status
    out, err = capsys.readouterr()
    assert out == ""
    problems = [line for line in err.splitlines() if line]
    assert len(problems) == 1
    assert problems[0].startswith("perdure: ")
    assert text in problems[0]
    assert engine.result.saved == []


def test_traceback_only_with_v(engine: Engine, capsys: Capture) -> None:
    engine.work = raising(ValueError("bad shape"))
    assert main(["run", "loop.toml"]) == 70
    assert "Traceback" not in capsys.readouterr().err
    assert main(["run", "loop.toml", "-v"]) == 70
    err = capsys.readouterr().err
    assert "Traceback" in err
    assert err.splitlines()[-1].endswith("ValueError: bad shape")


@pytest.mark.parametrize("error", [OutputError("a.h5: the disk is full"), KeyboardInterrupt()])
def test_numbers_are_printed_when_the_file_cannot_be_saved(engine: Engine, capsys: Capture, error: Any) -> None:
    engine.result = FakeResult(fault=error)
    status = main(["run", "loop.toml", "--json"])
    assert status == (2 if isinstance(error, OutputError) else 3)
    content = json.loads(capsys.readouterr().out)
    assert (content["title"], content["file"], content["file_sha256"]) == ("Convection loop", None, None)
    assert main(["run", "loop.toml"]) == status
    out = capsys.readouterr().out
    assert "0.02165 ± 0.00043" in out
    assert "saved in" not in out


def test_show_refuses_a_foreign_file(engine: Engine, capsys: Capture, monkeypatch: pytest.MonkeyPatch) -> None:
    def open_file(path: Path) -> None:
        raise DensityFileError(f"{path}: not a density file")

    monkeypatch.setattr(sys.modules["perdure._result"], "open_file", open_file)
    assert main(["show", "loop.toml"]) == 2
    assert capsys.readouterr().err == "perdure: loop.toml: not a density file\n"


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        (["run"], "Missing argument 'CASE'"),
        (["run", "lop.toml"], "'lop.toml' does not exist"),
        (["run", "."], "'.' is a directory"),
        (["run", "loop.toml", "--workers", "0"], "0 is not in the range 1<=x<=1024"),
        (["run", "loop.toml", "--workers", "1025"], "1025 is not in the range"),
        (["run", "loop.toml", "--workers", "two"], "'two' is not a valid integer range"),
        (["run", "loop.toml", "--seed", "-1"], "-1 is not in the range x>=0"),
        (
            ["run", "loop.toml", "--accuracy", "1"],
            "'--accuracy': found '1'; allowed: a number between 0 and 1; give for example 0.05",
        ),
        (["run", "loop.toml", "--accuracy", "0"], "found '0'"),
        (["run", "loop.toml", "--accuracy", "-0.1"], "found '-0.1'"),
        (["run", "loop.toml", "--accuracy", "nan"], "found 'nan'"),
        (["run", "loop.toml", "--accuracy", "5%"], "found '5%'"),
        (["run", "loop.toml", "--budget-steps", "0"], "found '0'; allowed: a number above 0; give for example 2e10"),
        (["run", "loop.toml", "--budget-steps", "1e999"], "found '1e999'"),
        (["run", "loop.toml", "--budget-minutes", "inf"], "found 'inf'"),
        (["run", "loop.toml", "--budget-minutes", "30min"], "found '30min'"),
        (
            ["run", "loop.toml", "--budget-memory", "8 apples"],
            "'--budget-memory': found '8 apples'; allowed: bytes, or a number of kB, MB, GB or TB, above 0",
        ),
        (["run", "loop.toml", "--budget-memory", "GB"], "found 'GB'"),
        (["run", "loop.toml", "--sed", "1"], "No such option '--sed'. Did you mean '--seed'?"),
        (["run", "loop.toml", "-o", "gone/a.h5"], "gone/a.h5: the density file cannot be written"),
        (["run", "loop.toml", "-o", "loop.toml"], "-o loop.toml: this is the case file"),
        (["run", "loop.toml", "-o", "."], "."),
        (["shwo", "a.h5"], "No such command 'shwo'. Did you mean 'show'?"),
        (["check"], "Missing argument 'CASE'"),
        (["show", "a.h5"], "'a.h5' does not exist"),
    ],
)
def test_wrong_arguments_are_status_2_before_any_work(
    engine: Engine, capsys: Capture, arguments: list[str], text: str
) -> None:
    assert main(arguments) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert text in err
    assert all(line.startswith("perdure: ") for line in err.splitlines())
    assert engine.log == []


def test_case_is_recognised_through_a_link(engine: Engine, tmp_path: Path) -> None:
    (tmp_path / "link.h5").symlink_to("loop.toml")
    assert main(["run", "loop.toml", "-o", "link.h5"]) == 2
    assert (tmp_path / "loop.toml").read_text(encoding="utf-8") == "[case]\n"


def test_no_command_prints_help(capsys: Capture) -> None:
    assert main([]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert err.startswith("Usage: perdure ")


def test_version(capsys: Capture) -> None:
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"perdure {__version__}\n"


def test_check_prints_the_plan(engine: Engine, capsys: Capture) -> None:
    assert main(["check", "loop.toml"]) == 0
    out, err = capsys.readouterr()
    assert err == ""
    assert out.splitlines() == [
        "Convection loop",
        "  system           flow, dimension 2",
        "  axis x           -2 to 2 m, 8 boxes of width 0.5 m",
        "  axis z           0 to 1, 4 boxes of width 0.25, periodic",
        "  domain           open: cells are added beyond these ends as far as bursts go",
        "  pilot cells      20",
        "  burst length     0.5 s (100 steps)",
        "  time step        0.005 s",
        "  scheme           rk4",
        "  bursts per cell  64",
        "  replicates       8",
        "  expected cells   24",
        "  expected bursts  1.54e+03",
        "  expected steps   1.54e+05",
        "  expected memory  250 MB",
        "  expected time    12 s",
        "",
        "left open by the case, and found so:",
        "  time step: errors of the pilot below 1e-6",
        "  domain: range of the pilot run",
    ]
    assert engine.result.saved == []


def test_check_json(engine: Engine, capsys: Capture) -> None:
    assert main(["check", "loop.toml", "--json"]) == 0
    content = json.loads(capsys.readouterr().out)
    assert content["schema"] == 1
    assert content["title"] == LOOP.title
    assert content["axes"][1] == {
        "name": "z", "unit": "1", "lower": 0.0, "upper": 1.0, "count": 4, "width": 0.25, "periodic": True,
    }  # fmt: skip
    assert content["found"]["domain"] == "range of the pilot run"
    assert content["expected"]["memory_bytes"] == 2.5e8
    assert (content["step"], content["steps_per_burst"], content["burst_length"]) == (0.005, 100, 0.5)


def test_no_color_reaches_click(monkeypatch: pytest.MonkeyPatch) -> None:
    seen: list[bool | None] = []
    monkeypatch.setattr(cli, "main", lambda *_, color, **__: seen.append(color))
    for value in ("1", ""):
        monkeypatch.setenv("NO_COLOR", value)
        assert main(["--version"]) == 0
    assert seen == [False, None]


def test_outside_the_main_thread(engine: Engine, capsys: Capture) -> None:
    """Signal handlers cannot be set there; the command must still run."""
    statuses: list[int] = []
    thread = threading.Thread(target=lambda: statuses.append(main(["run", "loop.toml", "--quiet"])))
    thread.start()
    thread.join()
    assert statuses == [0]
    assert capsys.readouterr().err == ""


def test_check_of_a_map_has_no_time_step(engine: Engine, capsys: Capture, monkeypatch: pytest.MonkeyPatch) -> None:
    engine.case = MAP
    grid = dataclasses.replace(
        PLAN.grid, lower=PLAN.grid.lower[:1], width=PLAN.grid.width[:1],
        counts=PLAN.grid.counts[:1], periodic=PLAN.grid.periodic[:1],
    )  # fmt: skip
    ends = {"axis_lower": PLAN.axis_lower[:1], "axis_upper": PLAN.axis_upper[:1]}
    made = dataclasses.replace(PLAN, grid=grid, step=1.0, n_step=4, scheme="map", bounded=True, found={}, **ends)
    pipeline = sys.modules["perdure._pipeline"]
    monkeypatch.setattr(pipeline, "plan", lambda case: made)
    monkeypatch.setattr(pipeline, "forecast_cost", lambda case, plan: COST)
    assert main(["check", "loop.toml"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert "  burst length     4 steps" in lines
    assert "  domain           bounded: what leaves it is counted as outside" in lines
    assert not any("time step" in line for line in lines)
    assert lines[-1] == "the case gives all of this"
