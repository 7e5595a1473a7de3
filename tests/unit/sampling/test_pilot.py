"""The pilot: points of the long run, and the rules for burst length and time step on known systems."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure._records import BurstOptions, CellOptions
from perdure._sampling import Pilot, survey
from perdure._sampling.pilot import (
    BURST_FACTOR,
    FEWEST_STEPS,
    MOVED,
    NOISY_FACTOR,
    burst_length,
    local_rate,
    pace,
    shrinking,
    time_step,
)
from perdure.errors import NoAttractorError
from unit.sampling.support import flight_of, system_of


def surveyed(name: str, *parameters: float, cells: CellOptions | None = None) -> Pilot:
    return survey(flight_of(name, parameters or (0.0,)), system_of(name), cells or CellOptions(), BurstOptions())


def mean_and_error(pilot: Pilot, values: np.ndarray) -> tuple[float, float]:
    """Mean and its standard error from the trajectories, which are independent; values (n_point,)."""
    lanes = values.reshape(-1, pilot.n_kept).mean(axis=0)
    return float(lanes.mean()), float(lanes.std(ddof=1) / np.sqrt(pilot.n_kept))


def test_logistic_map() -> None:
    """Arcsine law: mean 1/2, mean square 3/8 (S. M. Ulam, J. von Neumann, Bull. AMS 53 (1947) 1120)."""
    pilot = surveyed("logistic", 4.0)
    x = pilot.points[0]
    assert 0.0 <= x.min() < 1e-6
    assert 1.0 - 1e-6 < x.max() <= 1.0
    assert_agrees(*mean_and_error(pilot, x)[:1], 0.5, mean_and_error(pilot, x)[1])
    square, error = mean_and_error(pilot, x**2)
    assert_agrees(square, 0.375, error)
    other, error = mean_and_error(pilot, surveyed("logistic", 3.9).points[0] ** 2)
    with pytest.raises(AssertionError):
        assert_agrees(other, 0.375, error)


def test_ornstein_uhlenbeck() -> None:
    """Variance sigma^2 / (2 theta); the rate is theta, and steps are a twentieth of its inverse."""
    pilot = surveyed("ornstein", 1.5, 0.9)
    square, error = mean_and_error(pilot, pilot.points[0] ** 2)
    assert_agrees(square, 0.27, error)
    with pytest.raises(AssertionError):
        assert_agrees(square, 0.30, error)
    assert pilot.rate == pytest.approx(1.5, rel=0.03)
    assert pilot.step == pytest.approx(0.05 / pilot.rate)
    assert not pilot.at_rest
    assert pilot.points.shape[1] == 800 * pilot.n_kept


def test_doubling_map_does_not_end_at_zero() -> None:
    """Uniform law, although every plain trajectory is at 0 after 60 steps (negative control)."""
    pilot = surveyed("doubling", cells=CellOptions(lower={"x": 0.0}, upper={"x": 1.0}))
    x = pilot.points[0]
    for power in (1, 2):
        value, error = mean_and_error(pilot, x**power)
        assert_agrees(value, 1.0 / (power + 1.0), error)
    # a small state is refilled in its own last bits only, which makes small states about a tenth too frequent
    assert np.mean(x < 0.01) == pytest.approx(0.01, rel=0.25)
    flight = flight_of("doubling")
    assert np.all(flight.fly(flight.rng.random((1, 500)), 1.0, 60) == 0.0)


def test_no_attractor() -> None:
    """The logistic map with r = 5 sends almost every start away; the message says what to do."""
    with pytest.raises(NoAttractorError) as caught:
        surveyed("logistic", 5.0)
    message = str(caught.value)
    assert re.search(r"\d+ of 8192 pilot trajectories .* became non-finite \(.*\); allowed: .*; check the", message)
    assert "(a number too large, 0/0, or log or sqrt of a negative number)" in message
    assert "[cells] lower and upper" in message


def test_rest_is_noticed() -> None:
    """A damped spiral ends in its fixed point."""
    pilot = surveyed("spiral", 0.5, 2.0, 0.0)
    assert np.abs(pilot.points).max() < 1e-6
    length, why = burst_length(flight_of("spiral", [0.5, 2.0, 0.0]), pilot, False)
    assert length == pytest.approx(5.0 / pilot.rate)
    assert "hardly move" in why


def circle(rate: float, n: int = 2048) -> Pilot:
    """A pilot of the undamped spiral, made by hand: states on circles, turning at `rate`."""
    points = np.random.default_rng(2).standard_normal((2, n))
    return Pilot(points, points[:, :256], rate, 0.01 / rate, 256, 256, False)


@pytest.mark.parametrize(("a", "w"), [(0.0, 2.0), (0.7, 0.0), (-0.4, 30.0), (1e-3, 5e-3)])
def test_local_rate_of_a_linear_flow(a: float, w: float) -> None:
    """Differences change at the rate sqrt(a^2 + w^2); a finite difference over at most 5 percent of change."""
    found = local_rate(flight_of("spiral", [a, w, 0.0]), circle(1.0).points)
    assert found == pytest.approx(np.hypot(a, w), rel=0.05)


def test_pace_of_a_flow_whose_differences_stay() -> None:
    """Phases on a circle at unit speed: no local rate, yet a step moves them by at most a tenth of their spread."""
    flight, system = flight_of("clock"), system_of("clock")
    phase = np.random.default_rng(6).uniform(0.0, 2.0 * np.pi, (1, 4096))
    assert local_rate(flight, phase) < 1e-6
    rate, step = pace(flight, system, phase, BurstOptions())
    assert 0.05 * phase.std() <= step <= 0.1 * phase.std() < 1.0
    assert rate == pytest.approx(0.05 / step)
    # a whole turn seems to be no move at all, so long steps cannot be told by how far they lead
    assert np.quantile(np.abs(flight.fly(phase, 2.0 * np.pi, 1) - phase), 0.75) < 1e-12
    _, step = pace(flight, replace(system, kind="noisy-flow"), phase, BurstOptions())
    assert 0.25 * phase.std() <= step <= 0.5 * phase.std()


def test_pace_keeps_to_the_local_rate_and_the_step_given() -> None:
    """A slow spiral moves little in a twentieth of its time; a step that the case gives is not passed."""
    flight, system, points = flight_of("spiral", [0.3, 0.4, 0.0]), system_of("spiral"), circle(1.0).points
    rate, step = pace(flight, system, points, BurstOptions())
    assert rate == pytest.approx(0.5, rel=0.05)
    assert step == pytest.approx(0.05 / rate)
    assert pace(flight, system, points, BurstOptions(step=0.01))[1] == 0.01


def test_shrinking_ranges_are_noticed() -> None:
    """One component that closes in is enough; a range that stays or grows is none."""
    time = np.arange(200.0)[:, None]
    turn = np.sin(time + np.arange(7.0))
    still, falling, growing = turn, turn * np.exp(-time / 150.0), turn * np.exp(time / 150.0)
    assert shrinking(np.stack([still, falling], axis=1))
    assert not shrinking(np.stack([still, growing], axis=1))
    assert not shrinking(np.stack([still, turn * np.exp(-time / 3000.0)], axis=1))
    assert not shrinking(np.zeros((200, 2, 7)))


@pytest.mark.parametrize(("noisy", "factor"), [(False, BURST_FACTOR), (True, NOISY_FACTOR)])
@pytest.mark.parametrize("w", [0.2, 7.0])
def test_burst_length_of_a_turning_flow(w: float, noisy: bool, factor: float) -> None:
    """States turned by an angle have moved by 2 sin(angle / 2) standard deviations; lags grow by an eighth."""
    length, why = burst_length(flight_of("spiral", [0.0, w, 0.0]), circle(w), noisy)
    exact = factor * 2.0 * np.arcsin(MOVED / 2.0) / w
    # the sample of 256 states has its own standard deviation
    assert 0.9 * exact < length < 1.25 * exact
    assert f"{factor:g} times" in why


@pytest.mark.parametrize("width", [0.5, 1e-5])
def test_time_step_moves_end_points_little(width: float) -> None:
    """Halving the step found moves end points by less than a hundredth of a cell; twice the step would not do."""
    flight, pilot, cell = flight_of("spiral", [0.1, 3.0, 0.0]), circle(3.0), np.full(2, width)
    step, n_step, why = time_step(flight, pilot, 4.0, cell, False, "rk4")
    assert step * n_step == pytest.approx(4.0)
    assert n_step >= FEWEST_STEPS
    assert "of a cell" in why

    def change(n: int) -> float:
        ends = [flight.fly(pilot.points, 4.0 / m, m) for m in (n, 2 * n)]
        return float(np.quantile(np.abs(ends[1] - ends[0]).max(axis=0) / width, 0.99))

    assert change(n_step) < 0.011
    assert n_step == FEWEST_STEPS or change(n_step // 2) > 0.009
    assert (n_step == FEWEST_STEPS) == (width == 0.5)


def test_time_step_of_noisy_flows_is_a_stated_part() -> None:
    """The largest step that divides the burst and is at most that part; the scheme of order 1 gets a smaller one."""
    parts = {}
    for scheme in ("weak2", "euler-maruyama"):
        step, n_step, why = time_step(flight_of("ornstein", [2.0, 0.5]), circle(2.0), 3.0, np.ones(1), True, scheme)
        stated = re.search(rf"([0-9.e-]+) \({scheme}\)", why)
        assert stated is not None
        parts[scheme] = float(stated[1])
        assert step * n_step == pytest.approx(3.0)
        assert step * 2.0 <= parts[scheme] < 3.0 / (n_step - 1) * 2.0
    assert parts["euler-maruyama"] < parts["weak2"] / 5.0
