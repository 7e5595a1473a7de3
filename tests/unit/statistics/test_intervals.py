"""Intervals: their ranges, their coverage in simulation, and bounds for what was never seen."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binom, norm, t

from helpers.statistics import assert_agrees
from perdure._records import Quantity
from perdure._statistics import intervals
from perdure._statistics.intervals import Shift, cells_part, interval, parts_needed, quantile, upper_bound


def ends(found: Quantity) -> tuple[float, float]:
    assert found.low is not None
    assert found.high is not None
    return found.low, found.high


@pytest.mark.parametrize("freedom", [1.0, 2.5, 7.0, 100.0, 1e9])
def test_quantile_is_that_of_student(freedom: float) -> None:
    assert quantile(freedom) == pytest.approx(t.ppf(0.975, freedom), rel=1e-9)


def test_fewer_than_one_degree_of_freedom_counts_as_one() -> None:
    assert quantile(0.3) == quantile(1.0)


@pytest.mark.parametrize("error", [1e-12, 1e-3, 0.3, 1e3, 1e300])
@pytest.mark.parametrize("value", [1e-300, 1e-9, 0.02, 0.5, 0.999999, 1.0 - 2.0**-53])
def test_shares_stay_between_zero_and_one(value: float, error: float) -> None:
    low, high = ends(interval(value, error, 7.0, "1", "share"))
    assert 0.0 <= low <= value * (1.0 + 4e-16)
    assert value * (1.0 - 4e-16) <= high <= 1.0


@pytest.mark.parametrize("error", [1e-12, 1e-3, 5.0, 1e300])
@pytest.mark.parametrize("value", [1e-300, 1e-3, 40.0])
def test_positive_numbers_stay_positive(value: float, error: float) -> None:
    found = interval(value, error, 7.0, "s", "positive")
    low, high = ends(found)
    assert 0.0 <= low <= value <= high
    assert found.unit == "s"


@pytest.mark.parametrize(("kind", "value"), [("share", 0.3), ("positive", 4.0), ("real", -2.0)])
def test_small_errors_give_the_plain_interval(kind: str, value: float) -> None:
    """To first order all scales agree; and the standard error is kept as given."""
    found = interval(value, 1e-6, 12.0, "1", kind)
    half = quantile(12.0) * 1e-6
    assert ends(found) == pytest.approx((value - half, value + half), abs=1e-4 * half)
    assert found.error == 1e-6


@pytest.mark.parametrize(("kind", "value"), [("share", 0.0), ("share", 1.0), ("positive", 0.0)])
def test_values_at_the_end_of_their_range(kind: str, value: float) -> None:
    """Nothing to take the logarithm of: the plain interval."""
    found = interval(value, 0.1, 1e9, "1", kind)
    assert ends(found) == pytest.approx((value - 0.196, value + 0.196), abs=1e-4)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_no_number_no_interval(value: float) -> None:
    found = interval(value, 0.1, 7.0, "1", "real")
    assert (found.value, found.low, found.high) == (None, None, None)
    assert "not finite" in found.reason


def covered(freedom: int, taken: float, n: int = 20_000) -> tuple[float, float]:
    """Part of intervals that hold the truth, and its standard error; `taken` is the freedom that they claim."""
    rng = np.random.default_rng(5)
    value, error = rng.standard_normal(n), np.sqrt(rng.chisquare(freedom, n) / freedom)
    found = [interval(float(v), float(e), taken, "1", "real") for v, e in zip(value, error, strict=True)]
    part = np.mean([low <= 0.0 <= high for low, high in map(ends, found)])
    return float(part), math.sqrt(0.95 * 0.05 / n)


@pytest.mark.parametrize("freedom", [3, 14])
def test_coverage(freedom: int) -> None:
    """95 percent of intervals hold the truth; with a normal in place of Student's law they do not (control)."""
    part, error = covered(freedom, freedom)
    assert_agrees(part, 0.95, error)
    part, error = covered(freedom, 1e9)
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error)


@pytest.mark.parametrize("p", [0.005, 0.006, 0.008])
def test_coverage_of_small_shares(p: float) -> None:
    """About 4 hits in 600 draws, summed over the binomial law: intervals on the logit scale hold the truth.

    Hits are whole numbers, so that the nominal level cannot be met exactly; the plain scale misses far more (control).
    """
    n, hits = 600, np.arange(1, 60)
    weight = binom.pmf(hits, n, p)
    part = {}
    for kind in ("share", "real"):
        found = [interval(k / n, math.sqrt(k / n * (1.0 - k / n) / n), 1e9, "1", kind) for k in hits.tolist()]
        inside = [low <= p <= high for low, high in map(ends, found)]
        part[kind] = float(weight @ np.array(inside))
    seen = weight.sum()
    assert 0.95 <= part["share"] / seen <= 0.98
    assert part["real"] / seen < 0.9


@pytest.mark.parametrize("n", [1.0, 30.0, 1e4, 1e12])
def test_upper_bound(n: float) -> None:
    """The probability with which nothing is seen in n bursts with chance 5 percent; 3 / n for large n."""
    bound = upper_bound(n)
    assert n * math.log1p(-bound) == pytest.approx(math.log(0.05))
    if n > 1e3:
        assert bound == pytest.approx(3.0 / n, rel=2e-3)


def test_upper_bound_of_less_than_one_burst() -> None:
    assert upper_bound(0.1) == upper_bound(1.0) == pytest.approx(0.95)


def test_part_from_cell_size() -> None:
    """Errors c h^p of a number: the part is half of what is left at h, or more where differences shrink faster."""
    for order, least, most in ((1.0, 0.5, 0.5001), (0.5, 0.49, 0.51), (2.0, 0.5, 1.5)):
        error = [scale**order for scale in (1.0, 2.0, 4.0)]
        part = cells_part((7.0 + error[0], 7.0 + error[1], 7.0 + error[2]))
        assert least <= part <= most
    assert cells_part((1.0, 1.0, 1.0)) == 0.0
    # one small difference between two large ones is chance
    assert cells_part((1.0, 1.0, 1.4)) == pytest.approx(0.05)
    assert cells_part((1.0, float("nan"), 1.0)) == 0.0


def test_parts_add_in_quadrature() -> None:
    alone = interval(2.0, 0.03, 1e9, "1", "real")
    both = interval(2.0, 0.03, 1e9, "1", "real", {"cells": 0.04})
    assert alone.high is not None
    assert both.high is not None
    assert (both.high - 2.0) / (alone.high - 2.0) == pytest.approx(5.0 / 3.0)
    assert both.parts == {"sampling": 0.03, "cells": 0.04}


def test_each_part_has_its_own_law() -> None:
    """Sampling by Student's t, the others by the normal; all in quadrature, and each kept."""
    found = interval(2.0, 0.03, 3.0, "1", "real", {"cells": 0.02, "step": 0.05})
    half = math.sqrt((t.ppf(0.975, 3) * 0.03) ** 2 + norm.ppf(0.975) ** 2 * (0.02**2 + 0.05**2))
    assert ends(found) == pytest.approx((2.0 - half, 2.0 + half), rel=1e-9)
    assert found.parts == {"sampling": 0.03, "cells": 0.02, "step": 0.05}
    assert found.error == pytest.approx(math.sqrt(0.03**2 + 0.02**2 + 0.05**2))
    # negative control: one law for all parts is narrower, or wider
    alike = [quantile(f) * found.error for f in (3.0, 1e9)]  # type: ignore[operator]
    assert alike[1] < 0.9 * half
    assert alike[0] > 1.1 * half


def test_parts_widen_a_share_on_its_own_scale() -> None:
    """The upper end is that of `ends`; the lower one reaches down as far as the bias by itself would."""
    found, half = interval(0.2, 0.0, 7.0, "1", "share", {"step": 0.01}), quantile(1e9) * 0.01
    low, high = intervals.ends(0.2, half, "share")
    assert ends(found) == (0.2 - half, high)
    odds = [math.log(p / (1.0 - p)) for p in (low, 0.2, high)]
    assert odds[1] - odds[0] == pytest.approx(odds[2] - odds[1]) == pytest.approx(half / 0.16)


def test_a_bias_as_large_as_the_number_reaches_down_to_zero() -> None:
    """Sampling alone does not: a number that was seen is not zero."""
    assert interval(0.03, 0.001, 7.0, "1", "share", {"cells": 0.03}).low == 0.0
    assert interval(0.03, 0.001, 7.0, "1", "positive", {"cells": 0.03}).low == 0.0
    assert interval(0.03, 0.03, 7.0, "1", "share").low > 0.0


@pytest.mark.parametrize(("kind", "value"), [("share", 0.3), ("positive", 4.0), ("real", -2.0), ("real", 1e6)])
def test_rounding_is_never_left_out(kind: str, value: float) -> None:
    """A number without any error is right to 1e-12 of itself, no more: sums are rounded."""
    low, high = ends(interval(value, 0.0, 7.0, "1", kind))
    assert low < value < high
    assert (high - low) / 2.0 == pytest.approx(1e-12 * abs(value), rel=1e-3)
    assert intervals.ends(value, 0.5e-12 * abs(value), kind) == (low, high)
    assert intervals.ends(value, 2e-12 * abs(value), kind) != (low, high)


# ------------------------------------------------------------------------------- what a change tells


def test_a_clear_change_is_the_part() -> None:
    """The mean over replicates less their scatter, in quadrature, times the factor; linear in the mix."""
    change = np.array([[1.0, 0.2], [1.2, -0.2], [0.8, 0.2], [1.0, -0.2]])
    scatter = (0.04 + 0.04) / 3.0 / 4.0
    part = Shift(change, 2.0).part(np.array([[1.0, 0.0, -3.0], [0.0, 1.0, 0.0]]))
    assert part == pytest.approx([2.0 * math.sqrt(1.0 - scatter), 0.0, 6.0 * math.sqrt(1.0 - scatter)])


def noisy_parts(true: float, n: int = 40_000) -> np.ndarray:
    """Parts, shape (n,), that 8 replicates of unit scatter about a true change give."""
    rng = np.random.default_rng(6)
    return np.concatenate([Shift(true + rng.standard_normal((8, 100)), 1.0).part(np.eye(100)) for _ in range(n // 100)])


def test_pure_noise_gives_next_to_no_part() -> None:
    """Without the scatter taken off the mean square would be 1/8; cut off at zero, E max(z^2 - s^2, 0)/8 is left.

    z is standard normal and 7 s^2 chi square with 7 degrees of freedom; there is a part only where |z/s| > 1.
    """
    parts = noisy_parts(0.0)
    square, error = np.mean(parts**2), np.std(parts**2) / math.sqrt(len(parts))
    rng = np.random.default_rng(7)
    left = np.maximum(rng.standard_normal(400_000) ** 2 - rng.chisquare(7, 400_000) / 7, 0.0) / 8.0
    assert_agrees(square, left.mean(), np.hypot(error, left.std() / math.sqrt(400_000)))
    with pytest.raises(AssertionError):
        assert_agrees(square, 1.0 / 8.0, error)
    chance = 2.0 * t.sf(1.0, 7)
    assert chance < 0.36
    assert_agrees(np.mean(parts > 0.0), chance, math.sqrt(chance * (1.0 - chance) / len(parts)))


def test_a_change_beyond_noise_comes_out_on_average() -> None:
    """Mean square of the mean over 8 is true^2 + 1/8; the scatter taken off is unbiased where nothing is cut."""
    square = noisy_parts(3.0) ** 2
    error = square.std() / math.sqrt(len(square))
    assert_agrees(square.mean(), 9.0, error)
    with pytest.raises(AssertionError):
        assert_agrees(square.mean(), 9.0 + 1.0 / 8.0, error)


# --------------------------------------------------------------------------------- sweeps still needed


def wide(half: float, step: float = 0.0) -> Quantity:
    return Quantity(2.0, 2.0 - half, 2.0 + half, {"sampling": 0.1, "step": step})


def test_sweeps_needed() -> None:
    """Half-widths fall with the square root of the sweeps, to 0.95 of the goal for safety; that of the step stays."""
    goal = 0.95 * 0.02 * 2.0
    assert parts_needed(wide(0.1), 0.02) == pytest.approx((0.1 / goal) ** 2)
    assert parts_needed(wide(goal), 0.02) == pytest.approx(1.0)
    assert parts_needed(wide(0.5 * goal), 0.02) < 1.0
    fixed = 0.5 * goal
    step = fixed / norm.ppf(0.975)
    assert parts_needed(wide(0.1, step), 0.02) == pytest.approx((0.1**2 - fixed**2) / (goal**2 - fixed**2))
    # and so they do: what sweeps can reduce, over the root of the sweeps needed, beside what they cannot
    n = parts_needed(wide(0.1, step), 0.02)
    assert math.hypot(math.sqrt((0.1**2 - fixed**2) / n), fixed) == pytest.approx(goal)


def test_no_number_of_sweeps_helps_against_the_step() -> None:
    goal = 0.95 * 0.02 * 2.0
    for part, finite in ((0.89, True), (0.91, False), (5.0, False)):
        assert math.isfinite(parts_needed(wide(0.3, part * goal / norm.ppf(0.975)), 0.02)) == finite


@pytest.mark.parametrize("number", [Quantity(None, 0.0, 0.1), Quantity(1.0, None, 1.1), Quantity(1.0, 0.9, None)])
def test_sweeps_for_a_number_that_is_not_there(number: Quantity) -> None:
    assert parts_needed(number, 0.02) == math.inf
