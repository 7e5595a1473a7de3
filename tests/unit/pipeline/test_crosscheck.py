"""A crosscheck from a result to a verdict: what it says of right, wrong, split and slow densities."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import perdure
from helpers.synthetic_estimate import assert_same, make_estimate
from helpers.wells import SLOW_WELL, TWO_WAYS, moved
from perdure import Case, Quantity, Result
from perdure._records import Crosscheck
from perdure.errors import EstimateError, UsageError

LOGISTIC: dict[str, Any] = {
    "system": {"kind": "map", "state": ["x"], "parameters": {"r": 4.0}, "equations": {"x": "r*x*(1 - x)"}},
    "events": {"edge": {"when": "x > 0.9"}, "middle": {"when": "0.4 < x and x < 0.6"}},
}


def found(result: Result, **asked: Any) -> Crosscheck:
    crosscheck = perdure.crosscheck(result, **asked).crosscheck
    assert crosscheck is not None
    return crosscheck


@pytest.fixture(scope="module")
def logistic() -> Result:
    return perdure.estimate(Case(title="logistic", seed=5, **LOGISTIC))


@pytest.fixture(scope="module")
def checked(logistic: Result) -> Crosscheck:
    return found(logistic)


def test_a_right_density_agrees(logistic: Result, checked: Crosscheck) -> None:
    assert checked.verdict == "agrees"
    assert {(c.name, c.number) for c in checked.comparisons} == {
        *((name, number) for name in ("edge", "middle") for number in logistic.events[name].__dataclass_fields__),
        ("x", "mean"),
        ("x", "variance"),
    }
    assert {c.verdict for c in checked.comparisons} == {"agrees"}
    assert checked.starts.equal
    assert checked.starts.twins_apart > 0.95
    assert checked.starts.n_trajectory == 128
    # arcsine law
    (share,) = (c for c in checked.comparisons if (c.name, c.number) == ("edge", "share"))
    exact = 1.0 - 2.0 / math.pi * math.asin(math.sqrt(0.9))
    assert share.trajectories.value is not None
    assert share.trajectories.error is not None
    assert abs(share.trajectories.value - exact) < 5.0 * share.trajectories.error
    # as sharp as the density, or an interval of 0.1 percent
    assert share.trajectories.error <= 1.05 * max(share.density.error or 0.0, 0.5e-3 * exact)


def test_nothing_else_of_the_result_changes(logistic: Result) -> None:
    after = perdure.crosscheck(logistic, duration=4096.0)
    assert logistic.crosscheck is None
    assert_same(replace(after.estimate, crosscheck=None), logistic.estimate)


def wrong(result: Result, name: str, half_widths: float) -> Result:
    """The result with one share moved by so many half-widths of its interval."""
    estimate, share = result.estimate, moved(result.events[name].share, half_widths)
    regime = estimate.regimes[0]
    events = {**regime.events, name: replace(regime.events[name], share=share)}
    return Result(replace(estimate, regimes=(replace(regime, events=events),)))


@pytest.mark.parametrize("half_widths", [-5.0, 5.0])
def test_a_wrong_density_disagrees(logistic: Result, half_widths: float) -> None:
    """Negative control of agreement: one share is off, and it alone is blamed."""
    crosscheck = found(wrong(logistic, "middle", half_widths))
    assert crosscheck.verdict == "disagrees"
    blamed = [(c.name, c.number) for c in crosscheck.comparisons if c.verdict == "disagrees"]
    assert blamed == [("middle", "share")]


def test_too_short_is_told_with_a_length_that_does(logistic: Result) -> None:
    short = found(logistic, duration=2048.0)
    assert short.verdict == "too short to tell"
    lengths = [c.length for c in short.comparisons if c.length is not None]
    assert lengths
    assert short.duration == pytest.approx(2048.0, rel=0.2)
    longer = found(logistic, duration=4.0 * max(lengths))
    assert longer.verdict == "agrees"


def test_the_bits_do_not_depend_on_workers(logistic: Result) -> None:
    one, two = (replace(found(logistic, duration=8192.0, workers=n), seconds=0.0, created="") for n in (1, 3))
    assert_same(one, two)


def test_a_file_gives_the_same_as_the_result(logistic: Result, checked: Crosscheck, tmp_path: Path) -> None:
    logistic.save(tmp_path / "logistic.h5")
    with perdure.open(tmp_path / "logistic.h5") as opened:
        again = found(opened)
    assert_same(replace(again, seconds=0.0, created=""), replace(checked, seconds=0.0, created=""))


def test_exponent_entropy_and_dimension_of_the_logistic_map(checked: Crosscheck) -> None:
    (told,) = checked.predictability
    (exponent,) = told.exponents
    assert_within(exponent, math.log(2.0), 0.005)
    assert_within(told.entropy, math.log(2.0), 0.005)
    assert_within(told.total_density, math.log(2.0), 0.005)
    assert told.dimension.value == 1.0
    assert told.verdict == "agrees"
    assert told.growth.time.value is not None
    # e-folding at ln 2 from 1e-8 to 0.1; the last steps are not small
    assert told.growth.time.value == pytest.approx(math.log(1e7) / math.log(2.0), abs=1.5)
    with pytest.raises(AssertionError):
        assert_within(exponent, 0.7, 0.005)


def assert_within(number: Quantity, exact: float, part: float) -> None:
    """Within five of its standard errors, and these below so much of the value."""
    assert number.value is not None
    assert number.error is not None
    assert abs(number.value - exact) <= 5.0 * number.error
    assert number.error <= part * abs(exact)


def test_two_regimes_are_named() -> None:
    case = Case(title="two ways", seed=1, **TWO_WAYS)
    result = perdure.estimate(case)
    assert result.outcome == "several-regimes"
    crosscheck = found(result)
    assert crosscheck.verdict == "agrees"
    assert crosscheck.starts.message.startswith("several regimes, as the density says")
    assert min(crosscheck.starts.in_regime[:2]) >= 30
    assert crosscheck.starts.in_regime[2] == 0
    assert [told.regime for told in crosscheck.predictability] == [0, 1]
    # a density that has one of the two only: starts stay apart for far longer than its memory
    estimate = result.estimate
    half = replace(estimate, regimes=estimate.regimes[:1], outcome="one-regime")
    missed = found(Result(half))
    assert missed.verdict == "disagrees"
    assert not missed.starts.equal
    assert "second regime that the density has not" in missed.starts.message


def test_a_slow_well_is_too_short_and_not_a_second_regime() -> None:
    case = Case(title="slow", seed=3, **SLOW_WELL)
    crosscheck = found(perdure.estimate(case), duration=200.0)
    assert crosscheck.verdict == "too short to tell"
    assert not crosscheck.starts.equal
    assert "likelier too short a run" in crosscheck.starts.message
    assert crosscheck.memory.value is not None
    # Kramers' times of the two wells add up as rates: a memory of some hundred
    assert 50.0 < crosscheck.memory.value < 2000.0
    assert max(c.length or 0.0 for c in crosscheck.comparisons) > 5.0 * crosscheck.memory.value


def test_the_arbiter_shortens_a_step_that_is_too_long() -> None:
    case = Case(
        title="swing",
        system={
            "kind": "flow",
            "state": ["x", "v"],
            "equations": {"x": "v", "v": "2*(1 - x*x)*v - x"},
        },
        bursts={"duration": 2.0, "step": 0.1},
    )
    crosscheck = found(perdure.estimate(case), duration=500.0)
    assert crosscheck.arbiter is not None
    assert crosscheck.arbiter.deviation < 1e-4
    assert crosscheck.step < 0.1
    assert crosscheck.scheme == "three-eighths"
    # van der Pol's cycle: one exponent is zero, the other negative, dimension one
    (told,) = crosscheck.predictability
    first, second = (exponent.value or 0.0 for exponent in told.exponents)
    assert abs(first) < 0.01
    assert second < -1.0
    assert told.dimension.value == pytest.approx(1.0, abs=0.01)


def test_a_function_needs_its_case_beside_a_file(tmp_path: Path) -> None:
    def step(x: float, a: float) -> float:
        return a * x * (1.0 - x)

    system = {"kind": "map", "state": ["x"], "parameters": {"a": 4.0}, "function": step}
    case = Case(title="by a function", system=system, events={"edge": {"when": "x > 0.9"}})
    result = perdure.estimate(case)
    result.save(tmp_path / "function.h5")
    with perdure.open(tmp_path / "function.h5") as opened:
        with pytest.raises(UsageError, match="give case="):
            perdure.crosscheck(opened)
        crosscheck = found(opened, case=case, duration=8192.0)
    assert_within(crosscheck.predictability[0].exponents[0], math.log(2.0), 0.005)


def test_without_a_matrix_there_is_no_memory(logistic: Result) -> None:
    crosscheck = found(Result(replace(logistic.estimate, tally=None)), duration=8192.0)
    assert crosscheck.memory.value is None
    assert "the matrix was not kept" in crosscheck.memory.reason
    assert all("matrix" not in c.effective for c in crosscheck.comparisons)


def test_a_leaking_domain_has_nothing_to_check() -> None:
    with pytest.raises(EstimateError, match="no long-run density to check"):
        perdure.crosscheck(Result(make_estimate(n_regime=0)), case=Case(title="logistic", **LOGISTIC))


@pytest.mark.parametrize(
    ("asked", "match"),
    [
        ({"starts": 1}, "starts: found 1"),
        ({"level": 1.0}, "level: found 1.0"),
        ({"duration": 0.0}, "duration: found 0.0"),
        ({"steps": math.inf}, "steps: found inf"),
        ({"minutes": -1.0}, "minutes: found -1.0"),
    ],
)
def test_wrong_arguments_are_refused(logistic: Result, asked: dict[str, Any], match: str) -> None:
    with pytest.raises(UsageError, match=match):
        perdure.crosscheck(logistic, **asked)


def test_effective_sizes_agree_on_a_process_with_one_memory() -> None:
    """Ornstein-Uhlenbeck: the mean along a time T has the variance 2 s^2 t / T with memory t."""
    case = Case(
        title="memory",
        seed=2,
        system={"kind": "noisy-flow", "state": ["x"], "equations": {"x": "-0.5*x"}, "noise": {"x": "1.0"}},
    )
    crosscheck = found(perdure.estimate(case))
    (mean,) = (c for c in crosscheck.comparisons if c.number == "mean")
    total = 0.75 * crosscheck.duration * crosscheck.starts.n_trajectory
    for size in mean.effective.values():
        assert size == pytest.approx(total / 4.0, rel=0.25)
    assert crosscheck.memory.value == pytest.approx(2.0, rel=0.1)
    assert np.all([c.verdict == "agrees" for c in crosscheck.comparisons])
