"""Spectrum, entropy, dimension and growth time from rates and times whose truth is known."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure._crosscheck.predictability import (
    MOST_LOST,
    SURE,
    Spectrum,
    dimension_of,
    entropy_of,
    growth_of,
    hypotheses,
    spectrum_of,
    withdrawn,
)
from perdure._crosscheck.tangents import BEGIN, END, Bare, Parting, stretching
from perdure._records import Growth, Quantity
from perdure._statistics import quantile

UNIT = "1/day"
NONE_LOST = np.zeros(6)


def spectrum(*means: float, error: float = 1e-3, n: int = 64, floor: float = 0.0, independent: bool = True) -> Spectrum:
    """From rates with these means exactly, and this standard error of each."""
    noise = np.random.default_rng(1).standard_normal((len(means), n))
    noise -= noise.mean(axis=1, keepdims=True)
    noise *= error * math.sqrt(n) / noise.std(axis=1, ddof=1, keepdims=True)
    return spectrum_of(np.array(means)[:, None] + noise, NONE_LOST[: len(means)], UNIT, floor, independent)


def values(found: Spectrum) -> list[float | None]:
    return [number.value for number in found.exponents]


def point(number: Quantity) -> float:
    assert number.value is not None
    return number.value


# --------------------------------------------------------------------------------------- spectrum


def test_exponents_are_sorted_means_with_the_error_of_independent_rates() -> None:
    rate = np.random.default_rng(2).normal([[-3.0], [0.5], [0.1]], [[0.2], [0.4], [0.3]], (3, 40))
    found = spectrum_of(rate, NONE_LOST[:3], UNIT, 0.0)
    assert values(found) == pytest.approx([rate[1].mean(), rate[2].mean(), rate[0].mean()])
    assert [number.error for number in found.exponents] == pytest.approx(
        [rate[k].std(ddof=1) / math.sqrt(40) for k in (1, 2, 0)]
    )
    half = quantile(39.0) * rate[1].std(ddof=1) / math.sqrt(40)
    assert found.exponents[0].high == pytest.approx(rate[1].mean() + half)
    assert found.exponents[0].unit == found.total.unit == UNIT
    np.testing.assert_array_equal(found.each, rate[[1, 2, 0]])
    # what rates have in common shows in their sum
    assert found.total.value == pytest.approx(rate.sum(axis=0).mean())
    assert found.total.error == pytest.approx(rate.sum(axis=0).std(ddof=1) / math.sqrt(40))


def test_the_sum_of_rates_that_cancel_is_exact() -> None:
    rate = np.random.default_rng(3).normal(0.4, 0.1, 30)
    found = spectrum_of(np.array([rate, -rate - 1.0]), NONE_LOST[:2], UNIT, 0.0)
    assert found.total.value == pytest.approx(-1.0)
    assert found.total.error == pytest.approx(0.0, abs=1e-15)
    assert (found.exponents[0].error or 0.0) > 0.01


def test_what_differences_leave_open_is_part_of_the_error() -> None:
    """Of each exponent once, of a sum as often as there are exponents in it: they may err together."""
    found = spectrum(0.5, 0.25, -2.0, error=3e-3, floor=4e-3)
    assert [number.error for number in found.exponents] == pytest.approx([5e-3] * 3)
    assert found.exponents[0].parts == pytest.approx({"sampling": 3e-3, "differences": 4e-3})
    assert found.total.parts["differences"] == pytest.approx(12e-3)
    assert entropy_of(found, UNIT).parts["differences"] == pytest.approx(8e-3)
    assert dimension_of(found, False).parts["differences"] == pytest.approx(3 * 4e-3 / 2.0)
    assert found.error(found.each[0], 2) == pytest.approx(math.hypot(3e-3, 8e-3))


def test_starts_that_are_not_forgotten_have_the_spread_between_them() -> None:
    """8 times as much for 64 starts."""
    found, plain = spectrum(0.5, -2.0, independent=False), spectrum(0.5, -2.0)
    assert found.exponents[0].error == pytest.approx(8e-3)
    for one, two in ((found.total, plain.total), (dimension_of(found, False), dimension_of(plain, False))):
        assert one.value == pytest.approx(two.value)
        assert one.error == pytest.approx(8.0 * (two.error or 0.0))


def test_numbers_are_withdrawn_with_a_reason() -> None:
    """Then neither entropy nor dimension is told."""
    held = spectrum(0.5, 0.0, -2.0)
    found = withdrawn(held, "pairs stay together")
    for number in (*found.exponents, found.total, entropy_of(found, UNIT), dimension_of(found, False)):
        assert (number.value, number.low, number.high) == (None, None, None)
        assert number.reason == "pairs stay together"
        assert number.error is None
    assert len(found.exponents) == 3
    np.testing.assert_array_equal(found.each, held.each)


def test_exponents_lost_in_rounding_have_no_value() -> None:
    """Only those of which too many vectors were lost; then the sum has none either, and no dimension is told."""
    rate = np.random.default_rng(5).normal([[-30.0], [0.5], [0.0]], 1e-3, (3, 20))
    found = spectrum_of(rate, np.array([2.0 * MOST_LOST, 0.0, 0.5 * MOST_LOST]), UNIT, 0.0)
    assert values(found)[:2] == pytest.approx([0.5, 0.0], abs=1e-3)
    last = found.exponents[2]
    assert (last.value, last.low, last.high, last.unit) == (None, None, None, UNIT)
    assert "lost in rounding" in last.reason
    assert found.total.value is None
    assert found.total.reason == last.reason
    dimension = dimension_of(found, False)
    assert dimension.value is None
    assert dimension.reason == last.reason
    assert entropy_of(found, UNIT).value is None
    assert entropy_of(found, UNIT).reason == last.reason
    seen = spectrum_of(rate, np.full(3, MOST_LOST), UNIT, 0.0)
    assert None not in values(seen)


# ---------------------------------------------------------------------------------------- entropy


def test_entropy_is_the_sum_of_the_positive_exponents() -> None:
    found = entropy_of(spectrum(0.5, 0.25, 0.0, -2.0), UNIT)
    assert found.value == pytest.approx(0.75)
    assert found.unit == UNIT
    each = spectrum(0.5, 0.25, 0.0, -2.0).each
    assert found.error == pytest.approx(each[:2].sum(axis=0).std(ddof=1) / 8.0)
    assert found.reason == ""


@pytest.mark.parametrize(
    ("second", "expected"), [(0.99 * SURE * 1e-3, 0.5), (1.01 * SURE * 1e-3, 0.5 + 1.01 * SURE * 1e-3)]
)
def test_an_exponent_that_may_be_zero_does_not_count(second: float, expected: float) -> None:
    assert entropy_of(spectrum(0.5, second, -2.0), UNIT).value == pytest.approx(expected)


def test_what_differences_leave_open_may_be_zero() -> None:
    assert entropy_of(spectrum(0.5, 0.02, -2.0), UNIT).value == pytest.approx(0.52)
    assert entropy_of(spectrum(0.5, 0.02, -2.0, floor=0.01), UNIT).value == pytest.approx(0.5)
    assert dimension_of(spectrum(-0.02, -2.0), False).value == 0.0
    assert dimension_of(spectrum(-0.02, -2.0, floor=0.01), False).value == pytest.approx(1.0)
    # two exponents may err together: a sum of -0.05 is within three times 0.02
    assert dimension_of(spectrum(1.0, -1.05), False).value == pytest.approx(1.0 + 1.0 / 1.05)
    assert dimension_of(spectrum(1.0, -1.05, floor=0.01), False).value == 2.0


@pytest.mark.parametrize("means", [(-1.0, -2.0), (0.0, -1.0), (2e-3, -1.0)])
def test_no_positive_exponent_no_entropy(means: tuple[float, ...]) -> None:
    found = entropy_of(spectrum(*means), UNIT)
    assert (found.value, found.low, found.high) == (0.0, 0.0, 0.0)
    assert found.reason == "no exponent is positive"


# -------------------------------------------------------------------------------------- dimension


@pytest.mark.parametrize(
    ("means", "exact"),
    [
        # a map of two components, a flow, one whose second sum is negative, two positive exponents
        ((0.4, -1.6), 1.25),
        ((0.9, 0.0, -14.4), 2.0625),
        ((0.3, -0.5, -2.0), 1.6),
        ((0.5, 0.2, -0.4, -1.2), 3.25),
    ],
)
def test_dimension_by_kaplan_and_yorke(means: tuple[float, ...], exact: float) -> None:
    """j + (sum of the first j)/|the next|, j the most whose sum is not negative."""
    found = dimension_of(spectrum(*means), False)
    assert found.value == pytest.approx(exact)
    assert (found.unit, found.reason) == ("1", "")
    assert (found.error or 0.0) > 0.0


def test_dimension_of_a_cycle_is_one() -> None:
    found = dimension_of(spectrum(0.0, -2.0), False)
    assert found.value == pytest.approx(1.0, abs=1e-12)
    # an exponent that is a little below zero by chance is zero
    for first in (-0.9 * SURE * 1e-3, 0.9 * SURE * 1e-3):
        found = dimension_of(spectrum(first, -2.0), False)
        assert abs(point(found) - 1.0) <= SURE * (found.error or 0.0)
    # negative control: one that is surely below zero is none
    assert dimension_of(spectrum(-1.1 * SURE * 1e-3, -2.0), False).value == 0.0


def test_dimension_of_a_torus_is_two() -> None:
    found = dimension_of(spectrum(0.0, 0.0, -1.5), False)
    assert point(found) == pytest.approx(2.0, abs=1e-12)


def test_dimension_of_a_fixed_point_is_zero() -> None:
    found = dimension_of(spectrum(-0.5, -0.7, -3.0), False)
    assert (found.value, found.low, found.high) == (0.0, 0.0, 0.0)
    assert "all exponents are negative" in found.reason


@pytest.mark.parametrize("means", [(1.0, -1.0), (0.9, 0.3, -0.3, -0.9), (0.5,), (1.0, 0.5)])
def test_dimension_where_volumes_do_not_shrink(means: tuple[float, ...]) -> None:
    n = len(means)
    found = dimension_of(spectrum(*means), False)
    assert (found.value, found.low, found.high) == (float(n), float(n), float(n))
    assert found.reason == "volumes do not shrink"


def test_dimension_where_volumes_shrink_a_little() -> None:
    """The negative control of the case before: a sum that is surely negative."""
    found = dimension_of(spectrum(1.0, -1.01), False)
    assert found.value == pytest.approx(1.0 + 1.0 / 1.01)


def test_no_dimension_with_noise() -> None:
    found = dimension_of(spectrum(0.9, -1.0), True)
    assert (found.value, found.low, found.high) == (None, None, None)
    assert "noise" in found.reason
    assert entropy_of(spectrum(0.9, -1.0), UNIT).value == pytest.approx(0.9)


def covered(exact: float, taken: Callable[[Spectrum], Quantity], n_seed: int = 2000) -> tuple[float, float]:
    """Part of intervals that hold the truth, and its standard error: rates that have something in common."""
    rng = np.random.default_rng(6)
    means = np.array([0.9, 0.2, -3.0])[:, None]
    mix = np.array([[0.3, 0.0, 0.0], [0.1, 0.2, 0.0], [-0.4, -0.2, 0.1]])
    hits = 0
    for _ in range(n_seed):
        found = taken(spectrum_of(means + mix @ rng.standard_normal((3, 64)), NONE_LOST[:3], UNIT, 0.0))
        assert found.low is not None
        assert found.high is not None
        hits += found.low <= exact <= found.high
    return hits / n_seed, math.sqrt(0.95 * 0.05 / n_seed)


@pytest.mark.parametrize("what", ["dimension", "entropy", "total"])
def test_intervals_hold_the_truth(what: str) -> None:
    """95 percent of them; around a value that is a tenth off they do not (control)."""
    exact, taken = {
        "dimension": (2.0 + 1.1 / 3.0, lambda s: dimension_of(s, False)),
        "entropy": (1.1, lambda s: entropy_of(s, UNIT)),
        "total": (-1.9, lambda s: s.total),
    }[what]
    part, error = covered(exact, taken)
    # to first order in errors of two percent
    assert_agrees(part, 0.95, error, allowance=0.005)
    part, error = covered(1.1 * exact, taken, 300)
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error, allowance=0.005)


def test_spectrum_of_a_real_cycle(bare_of: Callable[..., Bare]) -> None:
    """From the tangent vectors of a flow that ends in a cycle: one exponent that is zero, dimension 1, no entropy."""
    angle = np.linspace(0.0, 6.0, 16)
    bare = bare_of("cycle", step=0.02, scale=0.7, middle=0.0, magnitude=1.5)
    state = np.array([np.cos(angle), np.sin(angle)])
    rngs = np.random.default_rng(7).spawn(1)
    rates = stretching(bare, state, 2, 20, rngs, 1, lambda rate: False, 2e5, lambda done, total: None)
    found = spectrum_of(rates.rate, rates.lost, UNIT, bare.floor(20))
    assert dimension_of(found, False).value == pytest.approx(1.0, abs=1e-6)
    assert entropy_of(found, UNIT).value == 0.0


# ------------------------------------------------------------------------------------- hypotheses


def test_hypotheses_name_what_has_to_hold() -> None:
    plain = hypotheses(noisy=False, is_flow=False)
    assert any("SRB measure" in told for told in plain)
    assert any("Kaplan-Yorke" in told for told in plain)
    flow = hypotheses(noisy=False, is_flow=True)
    assert flow[: len(plain)] == plain
    assert "one exponent that is zero" in flow[-1]
    noisy = hypotheses(noisy=True, is_flow=True)
    assert any("same noise" in told for told in noisy)
    assert not any("Kaplan-Yorke" in told for told in noisy)


# ----------------------------------------------------------------------------------------- growth


def growth(time: np.ndarray) -> Growth:
    return growth_of(Parting(time), "day", "not used")


def test_growth_of_known_times() -> None:
    """401 pairs that parted at 1, 2, ..., 401 in any order: the ranks tell."""
    time = np.random.default_rng(8).permutation(np.arange(1.0, 402.0))
    found = growth(time)
    assert (found.begin, found.end, found.n_pair, found.n_parted) == (BEGIN, END, 401, 401)
    assert found.time.value == 201.0
    assert found.time.unit == "day"
    # 0.98 root(401) ranks to either side
    assert (found.time.low, found.time.high) == (181.0, 221.0)
    assert found.time.error == pytest.approx(40.0 / 3.92)
    assert (found.early, found.late) == (21.0, 381.0)


def test_pairs_that_never_part_leave_the_end_open() -> None:
    """Of 100 pairs 8 never parted: no time by which 95 percent had; with 4, there is one (control)."""
    time = np.arange(1.0, 101.0)
    time[92:] = np.inf
    found = growth(time)
    assert (found.n_pair, found.n_parted) == (100, 92)
    assert found.time.value == 51.0
    assert (found.early, found.late) == (6.0, None)
    time = np.arange(1.0, 101.0)
    time[96:] = np.inf
    assert growth(time).late == 96.0


@pytest.mark.parametrize(("n_parted", "has_value"), [(59, False), (60, True), (0, False)])
def test_too_few_pairs_that_part(n_parted: int, has_value: bool) -> None:
    """Fewer than half and a root of their number: the median is not known."""
    time = np.full(100, np.inf)
    time[:n_parted] = np.arange(n_parted)
    found = growth(time)
    assert (found.time.value is not None) == has_value
    assert (found.n_pair, found.n_parted) == (100, n_parted)
    if not has_value:
        assert f"{n_parted} of 100 pairs parted" in found.time.reason
        assert (found.early, found.late) == (None, None)


def test_no_pairs_no_growth() -> None:
    found = growth_of(None, "day", "they stay together")
    assert (found.time.value, found.time.reason, found.time.unit) == (None, "they stay together", "day")
    assert (found.n_pair, found.n_parted, found.early, found.late) == (0, 0, None, None)


def test_the_interval_of_the_median_holds_it() -> None:
    """Exponential times, median ln 2; around a median that is a third off it does not (control)."""
    rng, n_seed = np.random.default_rng(9), 3000
    found = [growth(rng.exponential(size=128)).time for _ in range(n_seed)]
    ends = np.array([[number.low, number.high] for number in found], dtype=float)
    error = math.sqrt(0.95 * 0.05 / n_seed)
    # ranks are whole numbers, a rank is up to 0.7 percent of the chance at the ends of 95 percent of 128
    allowance = 2.0 * 0.007
    part = np.mean((ends[:, 0] <= math.log(2.0)) & (math.log(2.0) <= ends[:, 1]))
    assert_agrees(part, 0.95, error, allowance=allowance)
    wrong = 1.33 * math.log(2.0)
    part = np.mean((ends[:, 0] <= wrong) & (wrong <= ends[:, 1]))
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error, allowance=allowance)
