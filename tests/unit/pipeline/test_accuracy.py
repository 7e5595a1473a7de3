"""Accuracy on request: what is reached, what is told when it is not, and requests that make no sense."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from typing import Any

import pytest

import perdure
from helpers.statistics import assert_agrees
from perdure import Budget, Case, Result
from perdure._pipeline.prepare import prepare
from perdure._pipeline.steering import FIRST, steered
from perdure._pipeline.watch import Clock, silent
from perdure.errors import CaseError
from reference.cases import reference_case
from reference.known import known, quantity

# A fish stock, W. E. Ricker (1954), in logarithms. With few states a replicate many rounds can be taken.
STOCK: dict[str, Any] = {"cells": {"counts": {"y": 64}}, "bursts": {"per_cell": 8}, "output": {"intervals": 16}}
NAME = "P11-noisy-ricker"


@cache
def stock(accuracy: float, budget: Budget | None = None) -> Result:
    return perdure.estimate(reference_case(NAME, **STOCK), accuracy=accuracy, budget=budget, workers=2)


def relative_half_width(result: Result, event: str, number: str) -> float:
    found = getattr(result.events[event], number)
    return float((found.high - found.low) / (2.0 * found.value))


@pytest.mark.parametrize("accuracy", [0.05, 0.01])
def test_an_accuracy_is_reached_and_true(accuracy: float) -> None:
    """Every share and return period is as narrow as wanted, and off by no more than five errors."""
    result = stock(accuracy)
    assert result.checks_passed
    assert result.outcome == "one-regime"
    assert all(target.met and target.wanted == accuracy and target.reason == "" for target in result.targets)
    for target in result.targets:
        assert target.reached == pytest.approx(relative_half_width(result, target.event, target.number), rel=1e-12)
        assert 0.0 < target.reached <= accuracy
    for item in known(NAME):
        if item.number.startswith("share"):
            found = quantity(result, item.number)
            assert_agrees(found.value, item.value, found.error)
            with pytest.raises(AssertionError):
                assert_agrees(found.value, (1.0 + 5.0 * accuracy) * item.value, found.error)


@pytest.mark.parametrize("accuracy", [0.05, 0.01])
def test_intervals_of_a_steered_run_hold_the_truth(accuracy: float) -> None:
    """Of eight shares and return periods, those of one event alike, one event may miss."""
    result, held = stock(accuracy), []
    for event in ("A", "B", "C", "E"):
        (share,) = [item.value for item in known(NAME) if item.number == f"share {event}"]
        rate = [item.value for item in known(NAME) if item.number == f"entry rate {event}"]
        found = result.events[event]
        held.append(found.share.low <= share <= found.share.high)
        held += [found.return_period.low <= 1.0 / value <= found.return_period.high for value in rate]
    assert len(held) == 7
    assert sum(held) >= 5


def test_a_finer_accuracy_takes_more_bursts() -> None:
    """Half-widths fall with the square root of the bursts: the finer run cannot do with those of the coarser."""
    coarse, fine = stock(0.05), stock(0.01)
    bursts = [sum(stage.bursts for stage in result.effort) for result in (coarse, fine)]
    assert bursts[1] > 1.2 * bursts[0]
    assert max(t.reached for t in fine.targets) < max(t.reached for t in coarse.targets)
    assert max(t.reached for t in coarse.targets) > 0.01


def test_targets_name_every_event() -> None:
    """Share and return period of each, in the order of the case, with the gain over an even spread of the bursts."""
    targets = stock(0.05).targets
    events = [event for event in ("A", "B", "C", "E") for _ in range(2)]
    assert [target.event for target in targets] == events
    assert [target.number for target in targets] == ["share", "return_period"] * 4
    for target in targets:
        assert target.uniform is not None
        assert 1.0 < target.uniform < 10.0


def test_a_run_without_accuracy_has_no_targets() -> None:
    result = perdure.estimate(reference_case(NAME, **(STOCK | {"bursts": {"per_cell": 8, "sweeps": 16}})))
    assert result.targets == ()


def test_an_accuracy_in_the_case_counts_and_the_argument_replaces_it() -> None:
    case = reference_case(NAME, accuracy=0.05, **STOCK)
    assert [t.wanted for t in perdure.estimate(case, workers=2).targets] == [0.05] * 8
    assert [t.wanted for t in perdure.estimate(case, workers=2, accuracy=0.2).targets] == [0.2] * 8


def test_a_steered_run_does_not_depend_on_the_workers() -> None:
    one, two = perdure.estimate(reference_case(NAME, **STOCK), accuracy=0.01, workers=1), stock(0.01)
    assert one.matrix().count.tobytes() == two.matrix().count.tobytes()
    assert one.targets == two.targets
    assert [(s.name, s.sweeps, s.bursts) for s in one.effort] == [(s.name, s.sweeps, s.bursts) for s in two.effort]
    assert one.matrix().count.tobytes() != stock(0.05).matrix().count.tobytes()


# --------------------------------------------------------------------------------------- what is not reached


@pytest.mark.parametrize(
    ("budget", "name"), [(Budget(steps=1e6), "1e+06 steps"), (Budget(minutes=1e-5), "1e-05 minutes")]
)
def test_a_budget_that_is_too_small(budget: Budget, name: str) -> None:
    """Numbers are given all the same; the reason names the budget and the largest part of the error."""
    result = stock(0.0005, budget)
    assert result.checks_passed
    assert result.outcome == "one-regime"
    assert len(result.targets) == 8
    for target in result.targets:
        assert not target.met
        assert target.reached is not None
        assert target.reached > 0.0005
        assert f"the budget of {name} is spent" in target.reason
        quantity = getattr(result.events[target.event], target.number)
        largest = max(quantity.parts, key=lambda part: quantity.parts[part])
        assert f"its largest part of the error is {largest}" in target.reason


def tripling(**more: Any) -> Case:
    tables: dict[str, Any] = {
        "system": {"kind": "map", "state": ["x"], "equations": {"x": "3*x % 1"}},
        "cells": {"lower": {"x": 0.0}, "upper": {"x": 1.0}, "counts": {"x": 27}},
        "events": {"left": {"when": "x < 0.25"}, "never": {"when": "x > 2"}},
        "output": {"intervals": 16},
    }
    return Case(title="Tripling circle", **(tables | more))


def test_an_event_never_seen_does_not_keep_a_run_going() -> None:
    """It ends after some rounds, well within its budget; the other event has its number, 1/4 and 1/(1/4 - 1/12)."""
    result = perdure.estimate(tripling(bursts={"steps": 64}), accuracy=0.05, workers=2)
    left, never = result.targets[:2], result.targets[2:]
    assert [target.event for target in never] == ["never", "never"]
    for target in never:
        assert not target.met
        assert target.reached is None
        assert target.uniform is None
        assert "never seen in" in target.reason
        assert "budget" not in target.reason
    assert all(target.met for target in left)
    assert result.checks_passed
    share, period = result.events["left"].share, result.events["left"].return_period
    assert_agrees(share.value, 0.25, share.error)
    assert_agrees(period.value, 6.0, period.error)
    assert sum(stage.steps for stage in result.effort) < 0.2 * 2e10


def test_a_step_that_is_given_and_too_long_is_the_reason() -> None:
    """No number of bursts helps, and a step that was given is not halved."""
    bursts = {"scheme": "euler-maruyama", "step": 0.1, "duration": 2.0}
    case = reference_case("P18-double-well", cells={"counts": {"x": 32}}, bursts=bursts)
    result = perdure.estimate(case, accuracy=0.02, workers=2)
    assert result.checks_passed
    assert result.plan.step == 0.1
    for target in result.targets:
        assert not target.met
        assert "the error of the time step 0.1 is too large" in target.reason
        assert "smaller [bursts] step" in target.reason
    assert {target.number for target in result.targets} == {"share"}


def test_a_step_that_was_found_is_halved_until_it_will_do() -> None:
    """The same step, but as if the pilot had found it: all bursts are sent anew, and those given up are counted."""
    bursts = {"scheme": "euler-maruyama", "duration": 2.0}
    events = {"D": {"when": "0.5 < x < 1.5"}}
    case = reference_case("P18-double-well", cells={"counts": {"x": 32}}, bursts=bursts, events=events)
    ready = prepare(case, silent, Clock(), FIRST)
    long = replace(ready, plan=replace(ready.plan, step=0.1, n_step=20, stride=4))
    run, found, targets = steered(long, 0.02, None, Clock(), silent, 2)
    made = run.ready.plan
    assert made.step in (0.05, 0.025, 0.0125)
    assert made.duration == pytest.approx(2.0)
    assert made.stride * made.step == pytest.approx(0.4)
    assert "halved" in made.found["time step"]
    (target,) = targets
    assert target.met
    share = found.judged[0].regime.events["D"].share
    (exact,) = [item.value for item in known("P18-double-well") if item.number == "share D"]
    assert_agrees(share.value, exact, share.error)
    given_up = [stage for stage in run.stages if stage.name == "longer time step"]
    assert len(given_up) == round(math.log2(0.1 / made.step))
    assert all(stage.bursts > 0 and stage.steps >= 20 * stage.bursts for stage in given_up)


def test_an_event_that_is_never_left_does_not_keep_a_run_from_its_accuracy() -> None:
    """Its share is one and it has no return period: neither can be made more accurate."""
    case = tripling(bursts={"steps": 64}, events={"left": {"when": "x < 0.25"}, "all": {"when": "x > -1"}})
    result = perdure.estimate(case, accuracy=0.05, workers=2)
    assert result.events["all"].share.value == 1.0
    assert not [target.reason for target in result.targets if "never seen" in target.reason]
    assert result.checks_passed


def test_a_budget_is_kept() -> None:
    """From the first round on; the pilot is not counted, and ten percent more is allowed for the last sweep."""
    result = perdure.estimate(tripling(bursts={"steps": 64}), accuracy=1e-4, budget=Budget(steps=1e7), workers=2)
    assert result.checks_passed
    assert sum(stage.steps for stage in result.effort if stage.name != "pilot") <= 1.1e7


# ----------------------------------------------------------------------------------- requests without sense

PLAIN = tripling(bursts={"reseed": False})
NO_EVENTS = tripling(events={})


@pytest.mark.parametrize(
    ("case", "accuracy", "budget", "place", "found", "allowed"),
    [
        (tripling(), 0, None, "accuracy", "found 0", "between 0 and 1"),
        (tripling(), 1.5, None, "accuracy", "found 1.5", "between 0 and 1"),
        (tripling(), math.nan, None, "accuracy", "found nan", "between 0 and 1"),
        (tripling(), 0.1, Budget(steps=-1.0), "budget steps", "found -1.0", "above 0"),
        (tripling(), 0.1, Budget(minutes=0.0), "budget minutes", "found 0.0", "above 0"),
        (tripling(), 0.1, Budget(memory=-2.0), "budget memory", "found -2.0", "above 0"),
        (tripling(), None, Budget(steps=1e6), "budget", "found a budget without an accuracy", "accuracy"),
        (PLAIN, 0.1, None, "[bursts] reseed", "found false beside accuracy 0.1", "leave"),
        (NO_EVENTS, 0.1, None, "accuracy", "found accuracy 0.1 without events", "[events]"),
    ],
)
def test_requests_that_are_refused(
    case: Case, accuracy: float | None, budget: Budget | None, place: str, found: str, allowed: str
) -> None:
    """One error, before any burst is flown, with the place, what was found, what is allowed and what to do."""
    with pytest.raises(CaseError) as caught:
        perdure.estimate(case, accuracy=accuracy, budget=budget, progress=refuse)
    text = str(caught.value)
    for part in (place, found, allowed, "<python>"):
        assert part in text
    assert "\n" not in text
    # after what is allowed comes what to do
    assert any(word in text.rsplit(";", 1)[1] for word in ("give", "leave")), text
    assert caught.value.exit_status == 2


def refuse(stage: str, done: int, total: int) -> None:
    raise AssertionError(f"work was begun: {stage} {done} of {total}")


def test_requests_that_are_taken() -> None:
    """Negative control: the ends of the range, and a budget in full."""
    budget = Budget(steps=1e6, minutes=1.0, memory=1e9)
    assert perdure.estimate(tripling(bursts={"steps": 64}), accuracy=0.999, budget=budget).targets
