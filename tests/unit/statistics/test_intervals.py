"""Intervals: their ranges, their coverage in simulation, and bounds for what was never seen."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.stats import binom, t

from helpers.statistics import assert_agrees
from perdure._records import Quantity
from perdure._statistics.intervals import cells_part, interval, quantile, upper_bound


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
    both = interval(2.0, 0.03, 1e9, "1", "real", 0.04)
    assert alone.high is not None
    assert both.high is not None
    assert (both.high - 2.0) / (alone.high - 2.0) == pytest.approx(5.0 / 3.0)
    assert both.parts == {"sampling": 0.03, "cells": 0.04}
