"""The arithmetic of scripts/verify.py on made-up rows, and its independent quadrature on known laws."""

from __future__ import annotations

import ast
import importlib
import json
import math
import re
import sys
from pathlib import Path
from types import ModuleType, SimpleNamespace
from typing import Any

import numpy as np
import pytest

from perdure import Quantity
from perdure._records import Target
from reference.known import Known, known

SCRIPTS = Path(__file__).resolve().parents[2] / "scripts"


def section(name: str) -> ModuleType:
    """A module of the script."""
    if str(SCRIPTS) not in sys.path:
        sys.path.append(str(SCRIPTS))
    return importlib.import_module(f"_verify.{name}")


comparing, coverage, control = section("comparing"), section("coverage"), section("control")
convection, accuracy, longrun, truths = (section(n) for n in ("convection", "accuracy", "longrun", "truths"))

LEVEL = 1.959963984540054


def number(value: float | None, low: float | None, high: float | None, **parts: float) -> Quantity:
    return Quantity(value, low, high, parts)


def made_up(value: float = 1.0, half: float = 0.1, truth: float = 1.0, seed: int = 1, **more: Any) -> Any:
    """A row of the share of an event A with a symmetric interval."""
    item = Known(more.get("case", "X"), more.get("number", "share A"), "", truth, 0.0, "closed form")
    return comparing.row_of(item, more.get("system_class", "map"), number(value, value - half, value + half), seed)


# --------------------------------------------------------------------------------------- covered or not


@pytest.mark.parametrize(("truth", "held"), [(0.89, False), (0.9, True), (1.0, True), (1.2, True), (1.21, False)])
def test_an_interval_holds_what_lies_between_its_ends(truth: float, held: bool) -> None:
    assert comparing.covers(truth, 0.0, number(1.0, 0.9, 1.2)) is held


def test_the_error_of_the_truth_widens_each_side_in_quadrature() -> None:
    """Own half-widths 0.3 below and 0.4 above; 1.96 errors of the truth are 0.4 and 0.3: both reach 0.5."""
    found = number(1.0, 0.7, 1.4)
    assert comparing.covers(0.501, 0.4 / LEVEL, found)
    assert not comparing.covers(0.499, 0.4 / LEVEL, found)
    assert comparing.covers(1.499, 0.3 / LEVEL, found)
    assert not comparing.covers(1.501, 0.3 / LEVEL, found)


def test_bounds_hold_on_their_open_side_and_no_number_holds_nothing() -> None:
    assert comparing.covers(0.01, 0.0, number(None, 0.0, 0.02))
    assert not comparing.covers(0.03, 0.0, number(None, 0.0, 0.02))
    assert comparing.covers(1e9, 0.0, number(None, 50.0, None))
    assert not comparing.covers(49.0, 0.0, number(None, 50.0, None))
    assert not comparing.covers(0.5, 0.0, number(None, None, None))


def test_only_values_from_long_runs_have_an_error_of_their_own() -> None:
    found = number(1.0, 0.9, 1.1)
    long_run = Known("X", "share A", "", 1.15, 0.1, "computed for this table: long trajectories")
    bound = Known("X", "share A", "", 1.15, 0.1, "quadrature")
    assert comparing.row_of(long_run, "map", found, 1).covered
    assert comparing.row_of(long_run, "map", found, 1).truth_error == 0.1
    assert not comparing.row_of(bound, "map", found, 1).covered
    assert comparing.row_of(bound, "map", found, 1).truth_error == 0.0


# ------------------------------------------------------------------------------------- ratios and totals


def test_rows_of_a_quantity_are_summed_up_over_the_seeds() -> None:
    """Values 1.1, 0.8, 1.3 of truth 1: errors 0.1, 0.2, 0.3; half-widths 0.1, 0.5, 0.2."""
    rows = [made_up(v, h, seed=k) for k, (v, h) in enumerate([(1.1, 0.1), (0.8, 0.5), (1.3, 0.2)])]
    (one,) = comparing.compare(rows)
    assert (one.n_covered, one.n_seed) == (2, 3)
    assert one.mean == pytest.approx(3.2 / 3)
    assert one.half_width == pytest.approx(0.2)
    assert (one.low, one.high) == pytest.approx((1.1, 1.5))
    assert one.rms == pytest.approx(math.sqrt(0.14 / 3))
    assert one.ratio == pytest.approx(0.2 / math.sqrt(0.14 / 3))


def test_a_missing_number_counts_as_not_covered() -> None:
    item = Known("X", "share A", "", 1.0, 0.0, "closed form")
    rows = [made_up(), comparing.row_of(item, "map", comparing.NOTHING, 2)]
    (one,) = comparing.compare(rows)
    assert (one.n_covered, one.n_seed) == (1, 2)
    (none,) = comparing.compare(rows[1:])
    assert (none.n_covered, none.n_seed) == (0, 1)
    assert math.isnan(none.ratio)
    assert comparing.total("all", [none]).covered == 0.0


def test_numbers_that_are_right_to_rounding_are_not_in_the_totals() -> None:
    exact = [made_up(1.0 + 2e-16, 1e-15, number="mean spell A", seed=k) for k in range(4)]
    rows = [*exact, made_up(1.5), made_up(1.05, seed=2)]
    compared = comparing.compare(rows)
    assert [one.is_identity for one in compared] == [True, False]
    whole = comparing.total("all", compared)
    assert (whole.n, whole.covered) == (2, 0.5)
    # but they are where one seed gave no number
    item = Known("X", "mean spell A", "", 1.0, 0.0, "closed form")
    whole = comparing.total("all", comparing.compare([*rows, comparing.row_of(item, "map", comparing.NOTHING, 5)]))
    assert (whole.n, whole.covered) == (7, pytest.approx(5 / 7))


def test_totals_are_by_class_and_overall() -> None:
    rows = [made_up(1.05, system_class="map"), made_up(1.5, case="Y", system_class="chaotic flow")]
    rows += [made_up(1.02, case="Z", system_class="map")]
    compared = comparing.compare(rows)
    assert [(one.name, one.n, one.covered) for one in comparing.totals_by_class(compared)] == [
        ("map", 2, 1.0),
        ("chaotic flow", 1, 0.0),
    ]
    whole = comparing.total("all", compared)
    assert whole.covered == pytest.approx(2 / 3)
    assert whole.ratio == pytest.approx(np.median([0.1 / 0.05, 0.1 / 0.5, 0.1 / 0.02]))


def judge(*classes: tuple[str, int, float, float]) -> list[str]:
    """Failures of classes (name, comparisons, coverage, ratio)."""
    made = [comparing.Total(*one) for one in classes]
    n = sum(one.n for one in made)
    whole = comparing.Total("all", n, sum(one.n * one.covered for one in made) / n, max(one.ratio for one in made))
    return list(coverage.failures(whole, made))


@pytest.mark.parametrize(
    ("classes", "n_failed"),
    [
        ([("map", 100, 0.95, 1.5)], 0),
        ([("map", 100, 0.89, 1.5)], 1),
        ([("map", 100, 1.0, 1.5)], 1),
        ([("map", 100, 0.95, 3.1)], 1),
        ([("map", 900, 0.96, 1.5), ("noisy flow", 100, 0.85, 1.5)], 1),
        ([("map", 100, 0.5, 4.0)], 3),
        ([("map", 100, math.nan, math.nan)], 3),
    ],
)
def test_criteria_fail_one_by_one(classes: list[tuple[str, int, float, float]], n_failed: int) -> None:
    assert len(judge(*classes)) == n_failed


def seeded(spread: float, half: float, n: int = 400) -> list[Any]:
    """Rows of normal estimates about the truth 1."""
    values = 1.0 + spread * np.random.default_rng(1).standard_normal(n)
    return [made_up(float(v), half, seed=k) for k, v in enumerate(values)]


def test_normal_errors_with_honest_bars_pass_and_with_bars_of_half_the_size_fail() -> None:
    """Negative control of the whole count: 95 percent against the 67 percent within 0.98 standard errors."""
    for half, passes in ((LEVEL, True), (0.5 * LEVEL, False), (4.0 * LEVEL, False)):
        compared = comparing.compare(seeded(0.01, 0.01 * half))
        whole, classes = comparing.total("all", compared), comparing.totals_by_class(compared)
        assert (coverage.failures(whole, classes) == []) is passes


# -------------------------------------------------------------------------------------------- the control


def test_a_part_is_taken_out_of_the_interval_in_quadrature() -> None:
    """Parts 3 and 4 make 5: without the 4 each half-width is 3/5 of what it was."""
    found = comparing.without_part(number(10.0, 5.0, 20.0, sampling=3.0, cells=4.0), "cells")
    assert (found.low, found.high) == pytest.approx((7.0, 16.0))
    assert found.parts == {"sampling": 3.0}


def test_a_number_without_that_part_or_without_a_value_is_left_as_it_is() -> None:
    plain, bound = number(10.0, 5.0, 20.0, sampling=3.0), number(None, 0.0, 0.1)
    assert comparing.without_part(plain, "cells").low == 5.0
    assert comparing.without_part(bound, "cells") == bound


def test_the_control_tells_a_part_that_matters_from_one_that_does_not() -> None:
    """Estimates off by a bias of 3 sampling errors, which the part `cells` covers; and unbiased ones."""
    for bias, told in ((0.03, True), (0.0, False)):
        rows, bare = [], []
        for k, v in enumerate(1.0 + bias + 0.01 * np.random.default_rng(2).standard_normal(300)):
            item = Known("X", "share A", "", 1.0, 0.0, "closed form")
            half = LEVEL * math.hypot(0.01, 0.03)
            found = number(float(v), float(v) - half, float(v) + half, sampling=0.01, cells=0.03)
            rows.append(comparing.row_of(item, "map", found, k))
            bare.append(comparing.row_of(item, "map", comparing.without_part(found, "cells"), k))
        counts = [comparing.total("all", comparing.compare(part)) for part in (bare, rows)]
        assert control.tells(*counts) is told


# ------------------------------------------------------------------------------------------------ JSON


def test_json_has_these_fields_and_appears_whole(tmp_path: Path) -> None:
    item = Known("X", "share A", "", 1.0, 0.0, "closed form")
    target = tmp_path / "rows.json"
    target.write_text("old", encoding="utf-8")
    comparing.write_whole(target, [made_up(), comparing.row_of(item, "noisy map", comparing.NOTHING, 2)])
    first, second = json.loads(target.read_text(encoding="utf-8"))
    assert first == {
        "case": "X", "quantity": "share A", "source": "closed form", "truth": 1.0, "truth_error": 0.0,
        "estimate": 1.0, "low": 0.9, "high": 1.1, "covered": True, "seed": 1, "class": "map",
    }  # fmt: skip
    assert set(second) == set(first)
    assert [second[name] for name in ("estimate", "low", "high", "covered")] == [None, None, None, False]
    assert list(tmp_path.iterdir()) == [target]


def test_what_cannot_be_written_leaves_the_old_file(tmp_path: Path) -> None:
    target = tmp_path / "rows.json"
    target.write_text("old", encoding="utf-8")
    with pytest.raises(ValueError, match="JSON"):
        comparing.write_whole(target, [made_up(math.nan)])
    assert target.read_text(encoding="utf-8") == "old"
    assert list(tmp_path.iterdir()) == [target]


def test_every_reference_case_has_numbers_of_its_own_events_and_observables() -> None:
    names = comparing.case_names()
    assert len(names) >= 24
    for name in names:
        tables = comparing.TABLES[name]
        held = {*tables["events"], *tables["observables"]}
        numbers = [item.number for item in comparing.scalars(name)]
        assert len(numbers) == len({(item.number, item.regime) for item in comparing.scalars(name)})
        assert {text.rsplit(" ", 1)[1] for text in numbers if " " in text} <= held
    assert set(coverage.SHORT) | set(control.CHAOTIC) <= set(names)


# ---------------------------------------------------------------------- the other sections, and their truths


def outcome(way: str, near: bool = True, held: bool = True, n_step: int = 10**9) -> Any:
    return convection.Outcome(way, "mean z", 1, number(1.0, 0.9, 1.1), n_step, near, held)


def test_criteria_of_the_convection_section() -> None:
    good = [outcome("plain", near=False), *[outcome("reseeded")] * 5]
    assert convection.fails(good) == []
    assert convection.fails(good[:1]) == ["no reseeded run"]
    assert len(convection.fails([*good, outcome("reseeded", near=False)])) == 1
    assert len(convection.fails([*good, *[outcome("reseeded", held=False)] * 2])) == 1
    assert len(convection.fails([*good, outcome("long run", n_step=3 * 10**9)])) == 1


def result_of(stages: tuple[int, ...] = (), **more: Any) -> SimpleNamespace:
    """Stands for a result of 1000 steps."""
    effort = tuple(SimpleNamespace(steps=n) for n in stages)
    return SimpleNamespace(counts={"steps": 1000}, estimate=SimpleNamespace(effort=effort), **({"targets": ()} | more))


def test_the_cost_of_an_even_spread_is_that_of_the_number() -> None:
    targets = (Target("A", "share", 0.05, 0.04, True, uniform=2.5), Target("A", "return_period", 0.05, 0.04, True))
    assert accuracy.uniform_ratio(result_of(targets=targets), "share A") == 2.5
    assert math.isnan(accuracy.uniform_ratio(result_of(targets=targets), "return period A"))
    assert math.isnan(accuracy.uniform_ratio(result_of(), "share A"))


def test_steps_of_all_stages_count_where_they_are_listed() -> None:
    assert longrun.spent(result_of()) == 1000
    assert longrun.spent(result_of((300, 1000, 40))) == 1340


def test_reached_is_half_the_width_over_the_value_and_the_long_run_has_the_same_width(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Interval 0.4 to 0.6 about 0.5: 0.2; a long run of 1000 steps with error 0.1 / 1.96 needs as many steps."""
    item = Known("X", "share A", "", 0.55, 0.0, "closed form")
    run = longrun.LongRun({"share A": longrun.Value(0.5, 0.1 / LEVEL)}, 1000)
    monkeypatch.setattr(accuracy, "quantity", lambda result, name: number(0.5, 0.4, 0.6))
    one = accuracy.reached(item, 0.1, result_of(), run)
    assert (one.reached, one.long_steps) == (pytest.approx(0.2), pytest.approx(1000.0))
    assert (one.is_met, one.held, one.is_refused) == (False, True, False)
    refused = Quantity(None, None, None, {}, "1", "not counted")
    monkeypatch.setattr(accuracy, "quantity", lambda result, name: refused)
    assert accuracy.reached(item, 0.1, result_of(), run).is_refused


def test_criteria_of_the_accuracy_section() -> None:
    def one(size: float, held: bool = True, value: float | None = 1.0, refused: bool = False) -> Any:
        reason = "why" if refused else ""
        return accuracy.Reached("X", "share A", 0.05, size, 1.0, value, held, 1.0, 1.0, reason, refused)

    assert accuracy.fails([one(0.05), one(math.nan, False, None, refused=True)]) == []
    assert len(accuracy.fails([one(0.051)])) == 1
    assert len(accuracy.fails([one(0.01, False)])) == 1
    # a number that was not found is not one that is refused
    assert len(accuracy.fails([*[one(0.01)] * 9, one(math.nan, True, None)])) == 1
    assert len(accuracy.fails([one(math.nan, False, None, refused=True)])) == 1


def test_the_cost_of_a_long_run_follows_the_square_of_the_error() -> None:
    run = longrun.LongRun({"share A": longrun.Value(0.5, 0.01)}, 1000)
    assert longrun.steps_for(run, "share A", 0.005) == pytest.approx(4000.0)


def test_averages_of_a_long_run_have_the_errors_of_their_formulas() -> None:
    """Two trajectories with shares 0.2, 0.4 and entries 0.1, 0.1 per step of 0.5: only the share varies."""
    case = accuracy.load("loop")
    point = np.zeros((2 * len(case.events) + 2 * len(case.observables), 2))
    point[0], point[1] = (0.2, 0.4), (0.1, 0.1)
    found = longrun.averages(case, point, 0.5)
    name = case.events[0].name
    assert found[f"share {name}"].value == pytest.approx(0.3)
    assert found[f"share {name}"].error == pytest.approx(0.1)
    assert found[f"return period {name}"] == longrun.Value(pytest.approx(5.0), pytest.approx(0.0, abs=1e-15))
    assert found[f"mean spell {name}"].value == pytest.approx(1.5)
    assert found[f"mean spell {name}"].error == pytest.approx(0.5)


def test_a_long_run_of_a_known_law_agrees_and_a_wrong_law_is_noticed() -> None:
    """Ornstein-Uhlenbeck, share of x > 1; the step of 0.01 adds 1e-5 at weak order two."""
    case = comparing.reference_case("P16-ou")
    (item,) = [item for item in known("P16-ou") if item.number == "share A"]
    found = longrun.fly(case, 2e6, step=0.01).numbers["share A"]
    assert 0.0 < found.error < 0.01
    assert abs(found.value - item.value) < 5.0 * found.error + 1e-5
    assert abs(found.value - 1.5 * item.value) > 5.0 * found.error + 1e-5


def test_quadrature_of_noisy_maps_gives_the_known_values_of_the_ricker_map() -> None:
    edges = {
        "A": (-math.inf, math.log(0.2)),
        "B": (math.log(0.6), 0.0),
        "C": (math.log(1.5), math.inf),
        "E": (-math.inf, math.log(0.1)),
    }
    found = truths.noisy_ricker(2.9, 2.9, 0.15, edges)
    other = truths.noisy_ricker(2.9, 2.9, 0.16, edges)
    items = [item for item in known("P11-noisy-ricker") if item.number in found]
    assert len(items) >= 10
    for item in items:
        assert found[item.number].value == pytest.approx(item.value, rel=1e-9)
    # negative control: another noise
    assert other["share A"].value != pytest.approx(found["share A"].value, rel=1e-3)


def test_quadrature_of_a_double_well_gives_its_known_shares_and_passage_times() -> None:
    law = truths.boltzmann(lambda x: x - x**3, 0.5, -3.0, 3.0, 1e-4)
    (share,) = [item.value for item in known("P18-double-well") if item.number == "share A"]
    assert 1.0 - law.below(1.0) == pytest.approx(share, rel=1e-9)
    # mean time from -1 to 1 and back: closed form (2/sigma^2) Z int exp(2 V/sigma^2), evaluated with 30 digits
    assert law.commute(-1.0, 1.0) == pytest.approx(82.06856053747342, rel=1e-9)
    # by symmetry half of it
    assert law.up(-1.0, 1.0) == pytest.approx(0.5 * 82.06856053747342, rel=1e-9)
    with pytest.raises(ValueError, match="no place of the grid"):
        law.below(0.123456)


def test_the_table_holds_the_quadrature_of_the_cases() -> None:
    found = {"stock": truths.stock(), "lake": truths.lake()}
    for case, numbers in found.items():
        assert truths.disagreements(case, numbers) == []
        # negative control: other values are noticed, every one
        wrong = {name: longrun.Value(1.0001 * one.value, 0.0) for name, one in numbers.items()}
        assert len(truths.disagreements(case, wrong)) == len(known(case))


def test_the_number_of_sweeps_follows_from_two_trials(monkeypatch: pytest.MonkeyPatch) -> None:
    """Runs of 1e8 steps and 2e6 for each sweep: 1.5e9 steps leave 700 sweeps."""
    monkeypatch.setattr(convection, "case_of", lambda bursts, seed: bursts["sweeps"])
    monkeypatch.setattr(convection.perdure, "estimate", lambda sweeps: 10**8 + 2 * 10**6 * sweeps)
    monkeypatch.setattr(convection, "spent", lambda result: result)
    assert convection.sweeps_meant() == 700


# --------------------------------------------------------------------------------------------- the script


def script(monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    """scripts/verify.py, without running it."""
    section("comparing")
    monkeypatch.delitem(sys.modules, "verify", raising=False)
    return importlib.import_module("verify")


def test_old_python_can_read_the_script() -> None:
    """Otherwise it would report a syntax error instead of its age."""
    source = (SCRIPTS / "verify.py").read_text(encoding="utf-8")
    ast.parse(source, feature_version=(3, 6))
    assert not re.search(r"^from __future__ import annotations", source, re.MULTILINE)


def test_the_script_prepares_the_environment_and_runs_in_it_with_the_same_file_in_mind(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    verify, calls = script(monkeypatch), list[tuple[str, ...]]()

    def run(*command: str) -> int:
        calls.append(command)
        return 1

    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(verify, "is_ready", lambda: False)
    monkeypatch.setattr(verify, "prepare", lambda: calls.append(("prepare",)))
    monkeypatch.setattr(verify, "run", run)
    assert verify.main(["--short", "--json", "rows.json"]) == 1
    place = str(tmp_path.resolve() / "rows.json")
    where = str(SCRIPTS / "verify.py")
    assert calls == [("prepare",), ("python", where, "--short", "--json", "rows.json", "--json", place)]


def test_the_exit_status_tells_whether_all_sections_passed(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    verify, sections = script(monkeypatch), section("sections")
    monkeypatch.setattr(verify, "is_ready", lambda: True)
    monkeypatch.setattr(sys, "path", list(sys.path))
    for passes, status in ((True, 0), (False, 1)):
        monkeypatch.setitem(sections.SECTIONS, "control", lambda options: True)
        monkeypatch.setitem(sections.SECTIONS, "convection", lambda options, passes=passes: passes)
        assert verify.main(["--control", "--convection"]) == status
    assert "== convection: FAILED" in capsys.readouterr().out


@pytest.mark.parametrize("arguments", [["--seeds", "0"], ["--seeds", "many"], ["--sections"]])
def test_wrong_arguments_stop_before_anything_is_prepared(
    arguments: list[str], monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    verify = script(monkeypatch)
    monkeypatch.setattr(verify, "prepare", lambda: pytest.fail("prepared"))
    with pytest.raises(SystemExit) as stopped:
        verify.main(arguments)
    assert stopped.value.code == 2
    assert arguments[0] in capsys.readouterr().err


def test_cases_that_do_not_exist_are_named() -> None:
    sections = section("sections")
    options = SimpleNamespace(cases="P99")
    with pytest.raises(SystemExit, match=r"P99.*P01-logistic"):
        sections.chosen(options, None)
    options = SimpleNamespace(cases="P01,P13")
    assert sections.chosen(options, None) == ["P01-logistic", "P13-henon"]
