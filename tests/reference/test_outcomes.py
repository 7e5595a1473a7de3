"""Systems without a single plain answer: several regimes, cycles, leaks, narrow domains, rare and rough events."""

from __future__ import annotations

import math
from functools import cache
from typing import Any

import numpy as np
import pytest

import perdure
from helpers.statistics import assert_agrees
from perdure import Case, Result
from perdure.errors import NoAttractorError
from reference.cases import flat_map, reference_case
from reference.known import known, quantity, sampling

OU_SMALL: dict[str, Any] = {
    "cells": {"counts": {"x": 128}},
    "bursts": {"per_cell": 128, "duration": 0.5, "step": 0.05},
}


def reference(name: str, number: str) -> Any:
    """A reference value of a case."""
    (value,) = [item.value for item in known(name) if item.number == number]
    return value


# ------------------------------------------------------------------------------------- several regimes


@cache
def three_sinks() -> Result:
    return perdure.estimate(reference_case("P29-triple-gradient", bursts={"per_cell": 64}))


def places(result: Result) -> list[float]:
    return [float(regime.observables["x"].mean.value) for regime in result.regimes]


def test_three_sinks_are_three_regimes_of_one_cell_each() -> None:
    result = three_sinks()
    assert result.outcome == "several-regimes"
    assert result.checks_passed
    sinks = reference("P29-triple-gradient", "positions")
    # a burst ends within its cell of the sink, and its mean lies no further off than its start
    assert sorted(places(result)) == pytest.approx(sinks, abs=float(result.grid.width[0]))
    assert sum(regime.weight.value for regime in result.regimes) == pytest.approx(1.0, abs=1e-9)
    for regime, place in zip(result.regimes, places(result), strict=True):
        assert len(regime.cell) == 1
        assert regime.events["right"].share.value == (1.0 if place > 1.0 else None)


def test_basins_of_three_sinks_end_at_the_saddles() -> None:
    """All bursts of a cell that no saddle crosses end in the sink on its side, to rounding of the solve."""
    result = three_sinks()
    assert result.basins is not None
    low, high = reference("P29-triple-gradient", "basin edges")
    centre, width = result.grid.centres(result.keys)[:, 0], result.grid.width[0]
    where = places(result)
    sides = [(-2.0, centre < low - width), (0.0, (centre > low + width) & (centre < high - width))]
    for sink, cells in [*sides, (2.0, centre > high + width)]:
        column = int(np.argmin(np.abs(np.array(where) - sink)))
        assert cells.sum() > 50
        assert np.all(result.basins[cells, column] > 1.0 - 1e-6)


def test_weights_of_three_sinks_are_the_lengths_of_their_basins() -> None:
    """The cells in use reach from sink to sink; the two that hold a saddle count for either side."""
    result = three_sinks()
    low, high = reference("P29-triple-gradient", "basin edges")
    centre = result.grid.centres(result.keys)[:, 0]
    for regime, place in zip(result.regimes, places(result), strict=True):
        inside = (centre < low) if place < low else (centre > high) if place > high else np.abs(centre) < high
        assert regime.weight.value == pytest.approx(inside.mean(), abs=2.0 / len(centre))


def test_two_halves_are_two_regimes_of_equal_weight() -> None:
    cells = {"counts": {"x": 256}, "lower": {"x": 0.0}, "upper": {"x": 1.0}}
    result = perdure.estimate(reference_case("P30-two-logistic", cells=cells, bursts={"per_cell": 256}))
    assert result.outcome == "several-regimes"
    assert [regime.period for regime in result.regimes] == [1, 1]
    weights = [regime.weight.value for regime in result.regimes]
    assert weights == pytest.approx(reference("P30-two-logistic", "weights"), abs=1e-12)
    assert quantity(result, "share A", "right").value is None
    assert any("2 regimes" in line for line in result.messages)


# --------------------------------------------------------------------------------------------- cycles


def logistic(r: float, **more: Any) -> Result:
    return perdure.estimate(reference_case("P01-logistic", **more).with_parameters(r=r))


def assert_is_cycle(result: Result, period: int, mean: float) -> None:
    assert result.outcome == "periodic", result.messages
    (regime,) = result.regimes
    assert regime.period == period
    assert any("periodic" in line for line in result.messages)
    # half of the points of either cycle lie between 0.25 and 0.75
    assert regime.events["D"].share.value == pytest.approx(0.5, abs=1e-12)
    # a burst starts within a cell of the cycle and nears it
    assert regime.observables["x"].mean.value == pytest.approx(mean, abs=2.0 * float(result.grid.width[0]))


def mean_of_cycle(r: float) -> float:
    """Mean of the stable cycle of the logistic map, by iteration over a multiple of its length."""
    x = 0.3
    for _ in range(5000):
        x = r * x * (1.0 - x)
    total = 0.0
    for _ in range(64):
        x = r * x * (1.0 - x)
        total += x
    return total / 64


def test_mean_of_a_cycle_of_two_is_its_closed_form() -> None:
    """f(f(x)) = x less the fixed points: r^2 x^2 - r (r + 1) x + r + 1 = 0, so the points sum to (r + 1)/r."""
    assert mean_of_cycle(3.2) == pytest.approx((3.2 + 1.0) / (2.0 * 3.2), rel=1e-12)


@pytest.mark.parametrize(("r", "period"), [(3.2, 2), (3.5, 4)])
def test_a_cycle_is_periodic_with_its_period(r: float, period: int) -> None:
    assert_is_cycle(logistic(r, bursts={"steps": 1}), period, mean_of_cycle(r))


@pytest.mark.parametrize(("r", "period"), [(3.2, 2), (3.5, 4)])
def test_a_cycle_is_one_regime_whatever_the_length_of_a_burst(r: float, period: int) -> None:
    """By default too: bursts of a multiple of the period return to their cell, which is no regime of its own."""
    assert_is_cycle(logistic(r), period, mean_of_cycle(r))


# ---------------------------------------------------------------------------- no long run, or not inside


def test_a_map_without_a_stationary_probability_is_never_given_a_density() -> None:
    cells, bursts = {"counts": {"x": 256}}, {"per_cell": 128, "steps": 16}
    for ends in ({}, {"lower": {"x": -10.0}, "upper": {"x": 10.0}}):
        result = perdure.estimate(reference_case("P10-boole-infinite", cells=cells | ends, bursts=bursts))
        assert not result.checks_passed
        assert result.messages
        assert result.outcome != "one-regime" or any("not settled" in line for line in result.messages)


def slopes(slope: float) -> Result:
    """A tent map on [0, 1]: what passes 1 goes away for good."""
    tables = flat_map("s*x if x < 0.5 else s*(1 - x)", {"right": "x > 0.3"}, parameters={"s": slope})
    ends = {"lower": {"x": 0.0}, "upper": {"x": 1.0}, "counts": {"x": 256}}
    return perdure.estimate(Case(**tables, cells=ends, bursts={"per_cell": 256}))


def test_a_map_that_loses_its_states_leaks() -> None:
    """A part 2.5e-4 of the uniform law is lost in a step, so that pilot trajectories survive; nothing does for ever."""
    result = slopes(2.0005)
    assert result.outcome == "leaking"
    assert not result.checks_passed
    assert result.regimes == ()
    assert dict(result.events) == {}
    assert result.outside_share.value is None
    assert any("leaking" in line and "[cells]" in line for line in result.messages)


def test_a_map_that_keeps_its_states_does_not_leak() -> None:
    """Negative control: the slope at which nothing passes 1."""
    result = slopes(2.0)
    assert result.outcome == "one-regime"
    share = result.events["right"].share
    assert_agrees(share.value, 0.7, sampling(share))


def test_a_map_that_loses_every_pilot_trajectory_is_refused() -> None:
    with pytest.raises(NoAttractorError, match="pilot trajectories"):
        slopes(3.0)


def test_a_flow_whose_states_all_blow_up_is_refused() -> None:
    system = {"kind": "flow", "state": ["x"], "equations": {"x": "x**2 + 1"}}
    with pytest.raises(NoAttractorError, match="8192 of 8192 pilot trajectories") as caught:
        perdure.estimate(Case(system=system))
    assert caught.value.exit_status == 2


# ------------------------------------------------------------------------------------- narrow domains


def test_what_a_box_cuts_off_a_heavy_tail_is_outside_and_counted() -> None:
    """Law 1/(pi (1 + x^2)). Cell means differ from a density with one peak by at most w/4 times its height."""
    cells = {"counts": {"x": 1000}, "lower": {"x": -10.0}, "upper": {"x": 10.0}}
    result = perdure.estimate(reference_case("P09-boole-cauchy", cells=cells, bursts={"per_cell": 256, "steps": 16}))
    assert result.outcome == "one-regime"
    allowance = 0.02 / 4.0 / math.pi
    outside = 1.0 - 2.0 / math.pi * math.atan(10.0)
    assert_agrees(result.outside_share.value, outside, sampling(result.outside_share), allowance=allowance)
    for name in ("A", "B", "C", "D"):
        share = result.events[name].share
        assert_agrees(share.value, reference("P09-boole-cauchy", f"share {name}"), sampling(share), allowance=allowance)
    # the events beyond the domain are counted along the bursts: C lies wholly outside
    assert result.events["C"].share.value > 0.03
    assert sum(result.regimes[0].mass) == pytest.approx(1.0 - result.outside_share.value, abs=1e-12)
    with pytest.raises(AssertionError):
        assert_agrees(0.0, outside, sampling(result.outside_share), allowance=allowance)


@pytest.mark.parametrize("duration", [0.5, 0.1])
def test_a_domain_narrower_than_a_gaussian_law_keeps_its_shares(duration: float) -> None:
    """Ends at -2.7 and +2.1 standard deviations, with unequal flux, short and longer bursts.

    Allowance as for noisy flows in general: cell width 2.5/256 raises the noise by w^2/(6 tau 0.81) < 2e-4 of
    itself, the step adds (1.5 x 0.02)^2 = 9e-4; with -ln P up to 6 together below 5e-3.
    """
    cells = {"counts": {"x": 256}, "lower": {"x": -1.0}, "upper": {"x": 1.5}}
    bursts = {"per_cell": 2048, "duration": duration, "step": 0.02}
    result = perdure.estimate(reference_case("P16-ou", cells=cells, bursts=bursts))
    deviation = math.sqrt(reference("P16-ou", "variance x"))
    outside = sum(0.5 * math.erfc(end / deviation / math.sqrt(2.0)) for end in (1.4, 1.1))
    share = result.outside_share
    assert_agrees(share.value, outside, sampling(share), allowance=5e-3 * outside)
    for name in ("A", "B", "D", "E"):
        truth, found = reference("P16-ou", f"share {name}"), result.events[name].share
        assert_agrees(found.value, truth, sampling(found), allowance=5e-3 * truth)


# ------------------------------------------------------------------------------ rare and rough events


def test_an_event_never_seen_has_an_upper_bound_that_holds() -> None:
    share = perdure.estimate(reference_case("P16-ou", **OU_SMALL)).events["far"].share
    truth = 0.5 * math.erfc(4.1 / math.sqrt(2.0 * reference("P16-ou", "variance x")))
    assert share.value is None
    assert share.low == 0.0
    assert 0.0 < truth < share.high < 0.01
    assert "never seen" in share.reason


def test_plain_events_of_a_noisy_flow_have_no_entry_rate() -> None:
    event = perdure.estimate(reference_case("P16-ou", **OU_SMALL)).events["A"]
    assert event.share.value is not None
    for number in (event.entry_rate, event.return_period, event.mean_spell):
        assert number.value is None
        assert number.low is None
        assert number.high is None
        assert "infinitely often" in number.reason


@pytest.mark.parametrize(("event", "has_rate"), [("G", True), ("A", True), ("D", True), ("B", False), ("F", False)])
def test_events_on_components_without_noise_have_a_rate(event: str, has_rate: bool) -> None:
    """x is smooth where noise acts on the velocity alone; test_closed_forms compares the rates."""
    cells = {"counts": {"x": 24, "v": 24}}
    bursts = {"per_cell": 32, "duration": 2.0, "step": 0.05}
    found = perdure.estimate(reference_case("P19-underdamped", cells=cells, bursts=bursts)).events[event]
    assert (found.entry_rate.value is not None) == has_rate
    assert bool(found.return_period.reason) != has_rate


# --------------------------------------------------------------------------------------- reproduction


def numbers_of(result: Result) -> dict[str, Any]:
    """All plain data but the time on the clock."""
    found = result.to_dict()
    for stage in found["effort"]:
        del stage["seconds"]
    return found


def assert_same(one: Result, two: Result) -> None:
    """All numbers and arrays are equal to the last bit."""
    assert numbers_of(one) == numbers_of(two)
    for a, b in zip(one.regimes, two.regimes, strict=True):
        assert a.mass.tobytes() == b.mass.tobytes()
        assert a.cell.tobytes() == b.cell.tobytes()
    assert one.keys.tobytes() == two.keys.tobytes()
    for part in ("pointer", "column", "count", "bursts"):
        assert getattr(one.matrix(), part).tobytes() == getattr(two.matrix(), part).tobytes()


@pytest.mark.parametrize(
    ("name", "settings"),
    [
        ("P01-logistic", {"cells": {"counts": {"x": 512}}, "bursts": {"per_cell": 64}}),
        ("P16-ou", OU_SMALL),
        ("P16-ou", OU_SMALL | {"cells": {"counts": {"x": 96}, "lower": {"x": -0.5}, "upper": {"x": 1.5}}}),
    ],
    ids=["map", "noisy flow", "noisy flow with an outside state"],
)
def test_a_seed_gives_the_same_bits_with_any_number_of_workers(name: str, settings: dict[str, Any]) -> None:
    first = perdure.estimate(reference_case(name, seed=7, **settings), workers=1)
    assert_same(first, perdure.estimate(reference_case(name, seed=7, **settings), workers=2))
    other = perdure.estimate(reference_case(name, seed=8, **settings), workers=2)
    with pytest.raises(AssertionError):
        assert_same(first, other)
    assert first.matrix().count.tobytes() != other.matrix().count.tobytes()
