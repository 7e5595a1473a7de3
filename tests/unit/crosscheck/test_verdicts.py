"""From two numbers to a verdict: differences, chances, Holm's rule, and every branch of the judgement."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import t as student

from helpers.statistics import assert_agrees
from perdure._crosscheck.numbers import Found, Named
from perdure._crosscheck.verdicts import (
    DENSITY_FREEDOM,
    FEWEST_HITS,
    FINE,
    SELDOM,
    SMALL,
    UNEVEN,
    Judged,
    Weighed,
    density_error,
    holm,
    judged,
    two_sided,
    uneven,
    weighed,
)
from perdure._records import AGREES, DISAGREES, NONE, TOO_SHORT, Quantity
from perdure._statistics import interval, quantile

FACTOR = quantile(DENSITY_FREEDOM)
# Half-width over value below which nobody asks for more, as a standard error.
FINE_ERROR = FINE / quantile(1e9)


def density_of(value: float | None, error: float = 0.0, kind: str = "real") -> Quantity:
    if value is None:
        return Quantity(None, 0.0, 1e-3, {}, "1")
    return interval(value, error, DENSITY_FREEDOM, "1", kind)


def found_of(value: float | None, error: float = 0.0, **changes: float | None) -> Found:
    quantity = Quantity(None, None, None) if value is None else interval(value, error, 63, "1", "real")
    made = Found(quantity, 63, error, 1.0, 0.5, 0.5, 512, None, 0.0)
    return replace(made, **changes)


def named_of(density: Quantity, found: Found, subject: str = "observable") -> Named:
    return Named(subject, "level", "share" if subject == "event" else "mean", density, found)


def weight(density: Quantity, found: Found, subject: str = "observable", expected: float = math.inf) -> Weighed:
    return weighed(named_of(density, found, subject), expected)


def verdict(
    density: Quantity,
    found: Found,
    subject: str = "observable",
    *,
    rejected: bool = False,
    is_uneven: bool = False,
    expected: float = math.inf,
) -> Judged:
    named = named_of(density, found, subject)
    return judged(named, weighed(named, expected), rejected, is_uneven)


# ------------------------------------------------------------------------------------------ chances


@pytest.mark.parametrize("freedom", [1.0, 7.0, 63.0])
@pytest.mark.parametrize("distance", [0.0, 0.3, -2.0, 40.0])
def test_chance_is_that_of_student(distance: float, freedom: float) -> None:
    assert two_sided(distance, freedom) == pytest.approx(2.0 * student.sf(abs(distance), freedom), rel=1e-10)


def test_an_infinite_distance_has_no_chance() -> None:
    assert two_sided(math.inf, 7.0) == 0.0


def test_holm_by_hand() -> None:
    """Five at the level 0.05: allowed are 0.01, 0.0125, 1/60, 0.025 and 0.05, the first that fails ends it."""
    assert holm([0.04, 0.001, 0.02, 0.012, 0.9], 0.05) == [False, True, False, True, False]
    assert holm([0.011, 0.012, 0.013, 0.014, 0.015], 0.05) == [False] * 5
    assert holm([0.01, 0.0125, 0.0166, 0.025, 0.05], 0.05) == [True] * 5
    # 0.001, 0.01 and 0.0126 pass 0.01, 0.0125 and 1/60; 0.026 does not pass 0.025, so that 0.03 is not asked
    assert holm([0.01, 0.0126, 0.001, 0.026, 0.03], 0.05) == [True, True, True, False, False]


def test_holm_leaves_out_what_is_not_tested() -> None:
    """Neither rejected nor counted: with None for three of five, 0.02 is rejected."""
    assert holm([None, 0.02, None, 0.04, None], 0.05) == [False, True, False, True, False]
    assert holm([0.9, 0.02, 0.9, 0.04, 0.9], 0.05) == [False] * 5
    assert holm([None, None], 0.05) == [False, False]
    assert holm([], 0.05) == []


def test_holm_keeps_the_order_of_equals() -> None:
    assert holm([0.02, 0.02], 0.05) == [True, True]
    assert holm([0.03, 0.03], 0.05) == [False, False]


def test_holm_holds_the_level_of_the_family() -> None:
    """Twenty hypotheses, five of them wrong: a true one is rejected with chance 5 percent at most.

    Negative control: each at the level by itself.
    """
    rng, level, n_run = np.random.default_rng(1), 0.05, 4000
    false_alarm, alone, power = 0, 0, 0
    for _ in range(n_run):
        p = rng.uniform(size=20)
        p[15:] = rng.uniform(size=5) * 1e-5
        rejected = holm(p.tolist(), level)
        false_alarm += any(rejected[:15])
        alone += bool(np.any(p[:15] <= level))
        power += all(rejected[15:])
    error = math.sqrt(level * (1.0 - level) / n_run)
    # with the wrong ones gone, 15 are left: 1 - (1 - 0.05/15)^15
    assert_agrees(false_alarm / n_run, 1.0 - (1.0 - level / 15.0) ** 15, error)
    with pytest.raises(AssertionError):
        assert_agrees(alone / n_run, level, error)
    assert power == n_run


def verdicts_of_a_family(rng: np.random.Generator, shift: float, n: int = 20) -> tuple[list[bool], list[float]]:
    """Which of n numbers are rejected: errors of the density from 8 replicates, of the trajectories from 64 starts.

    `shift` in standard errors of the difference.
    """
    chances = []
    for _ in range(n):
        own, other = 0.3, 0.4
        said = interval(
            float(5.0 + other * rng.standard_normal()), other * math.sqrt(rng.chisquare(7) / 7), 7, "1", "real"
        )
        value = float(5.0 + 0.5 * shift + own * rng.standard_normal())
        told = found_of(value, own * math.sqrt(rng.chisquare(63) / 63))
        chances.append(weight(said, told).p_value or 0.0)
    return holm(chances, 0.05), chances


def test_right_numbers_are_seldom_rejected() -> None:
    """No more often than the level in any of twenty; wrong by ten standard errors they are (control)."""
    rng, n_run = np.random.default_rng(2), 1500
    runs = [verdicts_of_a_family(rng, 0.0) for _ in range(n_run)]
    alarms = np.mean([any(rejected) for rejected, _ in runs])
    error = math.sqrt(0.05 * 0.95 / n_run)
    assert alarms <= 0.05 + 5.0 * error
    assert alarms > 0.001, "no use if it never happens"
    single = np.mean([p <= 0.05 for _, chances in runs for p in chances])
    assert single <= 0.05 + 5.0 * math.sqrt(0.05 * 0.95 / (20 * n_run))
    wrong = np.mean([np.mean(verdicts_of_a_family(rng, 10.0)[0]) for _ in range(50)])
    assert wrong > 0.8


# ----------------------------------------------------------------------------------------- weighing


def test_difference_over_its_error() -> None:
    told = weight(density_of(10.0, 0.3), found_of(10.5, 0.4))
    assert (told.own, told.other) == pytest.approx((0.4, 0.3))
    assert told.distance == pytest.approx(1.0)
    assert told.p_value == pytest.approx(2.0 * student.sf(1.0, DENSITY_FREEDOM))
    assert told.wanted == pytest.approx(0.3)
    assert weight(density_of(10.0, 0.3), found_of(9.5, 0.4)).distance == pytest.approx(-1.0)


def test_the_smaller_degrees_of_freedom_count() -> None:
    told = weight(density_of(10.0, 0.3), found_of(10.5, 0.4, freedom=3))
    assert told.p_value == pytest.approx(2.0 * student.sf(1.0, 3))


def test_the_side_of_an_interval_that_is_not_even() -> None:
    """A share near 0 reaches further up than down; the end beyond which the other number lies is taken."""
    density = density_of(0.01, 0.006, "share")
    assert density.low is not None
    assert density.high is not None
    up, down = (density.high - 0.01) / FACTOR, (0.01 - density.low) / FACTOR
    assert up > 1.5 * down
    assert density_error(density, 0.02) == pytest.approx(up)
    assert density_error(density, 0.005) == pytest.approx(down)
    assert weight(density, found_of(0.02)).other == pytest.approx(up)
    assert weight(density, found_of(0.005)).other == pytest.approx(down)


def test_a_bound_of_the_density_counts_as_its_error() -> None:
    """Never seen by the density, seen by the trajectories: how far above 0 is its bound."""
    told = weight(density_of(None), found_of(1e-3, 0.0, hits=100), "event", 100.0)
    assert told.other == pytest.approx(1e-3 / FACTOR)
    assert told.distance == pytest.approx(FACTOR)
    assert density_error(Quantity(1.0, None, None), 2.0) == 0.0


@pytest.mark.parametrize(
    ("density", "found"),
    [
        (Quantity(None, None, None), found_of(1.0)),
        (Quantity(1.0, None, None), found_of(1.0)),
        (density_of(1.0), found_of(None)),
    ],
)
def test_without_a_number_there_is_nothing_to_weigh(density: Quantity, found: Found) -> None:
    told = weight(density, found)
    assert (told.distance, told.p_value) == (None, None)
    assert verdict(density, found).verdict == NONE


def test_numbers_without_error_differ_beyond_a_millionth() -> None:
    """Of their magnitude, which is what is left of the way in: 5 of it are a difference, 0.5 are none."""
    exact = Quantity(2.0, 2.0, 2.0, {"sampling": 0.0})
    far = weight(exact, found_of(2.0 + 1e-5, size=2.0))
    assert far.distance == pytest.approx(5.0, rel=1e-6)
    assert (far.p_value or 0.0) < 2e-3
    near = weight(exact, found_of(2.0 + 1e-6, size=2.0))
    assert near.distance == pytest.approx(0.5, rel=1e-6)
    assert (near.p_value or 0.0) > 0.5
    # the sharpness that is asked for does not know of it
    assert near.own == 0.0
    assert near.wanted == pytest.approx(2.0 * FINE_ERROR)


def test_a_millionth_is_added_to_other_errors() -> None:
    told = weight(density_of(10.0, 0.3), found_of(10.5, 0.4, size=1.2e6))
    assert told.distance == pytest.approx(0.5 / math.hypot(0.5, 1.2e6 * SMALL))


def test_nothing_on_both_sides_is_the_same() -> None:
    told = weight(Quantity(0.0, 0.0, 0.0, {"sampling": 0.0}), found_of(0.0))
    assert (told.distance, told.p_value) == (0.0, 1.0)


@pytest.mark.parametrize(
    ("hits", "expected", "count"), [(4, 9.0, 9.0), (16, 9.0, 16.0), (0, 0.2, 1.0), (0, 25.0, 25.0)]
)
def test_few_visits_have_the_error_of_a_count(hits: int, expected: float, count: float) -> None:
    """The larger number over the root of the visits, seen or expected, at least one."""
    told = weight(density_of(0.02, 0.001), found_of(0.01, 1e-4, hits=hits), "event", expected)
    assert told.own == pytest.approx(0.02 / math.sqrt(count))
    # a larger spread between starts is kept
    told = weight(density_of(0.02, 0.001), found_of(0.01, 0.03, hits=hits), "event", expected)
    assert told.own == pytest.approx(0.03)


def test_many_visits_and_observables_have_the_error_between_starts() -> None:
    told = weight(density_of(0.02, 0.001), found_of(0.01, 1e-4, hits=FEWEST_HITS), "event", 9.0)
    assert told.own == pytest.approx(1e-4)
    told = weight(density_of(0.02, 0.001), found_of(0.01, 1e-4, hits=4))
    assert told.own == pytest.approx(1e-4)


@pytest.mark.parametrize(
    ("subject", "value", "spread", "scale"),
    [
        ("observable", 3.0, None, 3.0),
        ("observable", 3.0, 8.0, 8.0),
        ("observable", -9.0, 8.0, 9.0),
        ("event", 0.3, 0.45, 0.3),
    ],
)
def test_nobody_asks_for_more_than_a_thousandth(subject: str, value: float, spread: float | None, scale: float) -> None:
    """Of the number, or of the spread of what is averaged where that is larger."""
    told = weight(density_of(value, 1e-9), found_of(value, 1e-9, spread=spread), subject, 100.0)
    assert told.wanted == pytest.approx(FINE_ERROR * scale)
    told = weight(density_of(value, 1.0), found_of(value, 1e-9, spread=spread), subject, 100.0)
    assert told.wanted == pytest.approx(1.0)


# ------------------------------------------------------------------------------------------- uneven


@pytest.mark.parametrize(
    ("ratio", "ratio_p", "trend_p", "hits", "expected"),
    [
        (1.0, 0.5, 0.5, 512, False),
        (2.1, 0.5e-3 * SELDOM, 0.5, 512, True),
        # not so many times as large, or not beyond chance
        (UNEVEN, 0.0, 0.5, 512, False),
        (50.0, 1.5e-3 * SELDOM, 0.5, 512, False),
        (1.0, 0.5, 0.5e-3 * SELDOM, 512, True),
        (1.0, 0.5, 1.5e-3 * SELDOM, 512, False),
        # an event met too seldom
        (50.0, 0.0, 0.0, 4 * FEWEST_HITS - 1, False),
        (50.0, 0.0, 0.0, 4 * FEWEST_HITS, True),
        (math.inf, 0.0, 1.0, 512, True),
    ],
)
def test_uneven_starts(ratio: float, ratio_p: float, trend_p: float, hits: int, expected: bool) -> None:
    found = found_of(1.0, 0.1, ratio=ratio, ratio_p=ratio_p, trend_p=trend_p, hits=hits)
    assert uneven(found, 1e-3) == expected


# --------------------------------------------------------------------------------------- judgement


def test_a_number_that_agrees() -> None:
    found = verdict(density_of(10.0, 0.3), found_of(10.1, 0.2))
    assert (found.verdict, found.reason, found.longer) == (AGREES, "", None)


def test_a_number_that_disagrees() -> None:
    found = verdict(density_of(10.0, 0.3), found_of(12.0, 0.4), rejected=True)
    assert (found.verdict, found.longer) == (DISAGREES, None)
    assert found.reason == "the difference is 4.0 of its standard errors"


def test_trajectories_that_are_not_as_sharp() -> None:
    """The error must fall by 3, so that they must be 9 times as long; up to 5 percent more is let pass."""
    found = verdict(density_of(10.0, 0.1), found_of(10.1, 0.3))
    assert found.verdict == TOO_SHORT
    assert found.longer == pytest.approx(9.0)
    assert found.reason == "the trajectories' error is 3 times that of the density"
    assert verdict(density_of(10.0, 0.1), found_of(10.1, 0.104)).verdict == AGREES
    assert verdict(density_of(10.0, 0.1), found_of(10.1, 0.106)).verdict == TOO_SHORT


def test_a_density_without_error_is_held_to_a_thousandth() -> None:
    exact = Quantity(10.0, 10.0, 10.0, {"sampling": 0.0})
    assert verdict(exact, found_of(10.0, 10.0 * FINE_ERROR)).verdict == AGREES
    assert verdict(exact, found_of(10.0, 20.0 * FINE_ERROR)).verdict == TOO_SHORT
    nothing = Quantity(0.0, 0.0, 0.0, {"sampling": 0.0})
    found = verdict(nothing, found_of(0.0, 0.1))
    assert found.verdict == TOO_SHORT
    assert found.longer is None, "no length is enough"
    assert found.reason == "the trajectories' error is inf times that of the density"


def test_uneven_starts_come_before_a_difference() -> None:
    found = verdict(density_of(10.0, 0.1), found_of(12.0, 0.3), rejected=True, is_uneven=True)
    assert found.verdict == TOO_SHORT
    assert "starts differ" in found.reason
    assert found.longer == pytest.approx(9.0)
    found = verdict(density_of(10.0, 0.3), found_of(10.0, 0.1), is_uneven=True)
    assert found.longer == 1.0


def test_no_value_comes_before_all() -> None:
    found = verdict(density_of(10.0, 0.1), found_of(None), rejected=True, is_uneven=True)
    assert (found.verdict, found.reason) == (NONE, "one of the two has no value")


def test_an_event_that_neither_side_met() -> None:
    found = verdict(density_of(None), found_of(0.0, 0.0, hits=0), "event", expected=0.0)
    assert (found.verdict, found.reason) == (AGREES, "met by neither side")


def test_an_event_that_only_the_density_met() -> None:
    """The trajectories should have been there: too short if it is a question of chance, disagreement if not."""
    density = density_of(1e-3, 1e-5)
    short = weight(density, found_of(0.0, 0.0, hits=0), "event", 2.0)
    assert (short.p_value or 0.0) > 0.05
    found = verdict(density, found_of(0.0, 0.0, hits=0), "event", expected=2.0)
    assert found.verdict == TOO_SHORT
    assert found.reason == "the event was met in 0 batches only"
    assert found.longer is not None
    assert found.longer >= FEWEST_HITS / 0.25
    long = weight(density, found_of(0.0, 0.0, hits=0), "event", 400.0)
    assert (long.p_value or 0.0) < 1e-5


def test_an_event_met_too_seldom() -> None:
    found = verdict(density_of(0.01, 0.05), found_of(0.01, 1e-4, hits=10), "event", expected=10.0)
    assert found.verdict == TOO_SHORT
    assert found.reason == "the event was met in 10 batches only"
    assert found.longer == pytest.approx(2.5)
    enough = verdict(density_of(0.01, 0.05), found_of(0.01, 1e-4, hits=FEWEST_HITS), "event", expected=10.0)
    assert enough.verdict == AGREES
    # an observable is not met in batches
    assert verdict(density_of(0.01, 0.05), found_of(0.01, 1e-4, hits=10)).verdict == AGREES


def test_an_event_that_only_the_trajectories_met() -> None:
    found = verdict(density_of(None), found_of(1e-6, 1e-7, hits=3), "event", expected=0.0)
    assert found.verdict == TOO_SHORT
    far = weight(density_of(None), found_of(0.5, 0.01, hits=500), "event", 0.0)
    assert (far.p_value or 0.0) < 1e-6
