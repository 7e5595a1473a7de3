"""Numbers of trajectories: values by hand; errors and chances calibrated on synthetic batches."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import f as fisher
from scipy.stats import kstest, ttest_1samp
from scipy.stats import t as student

from helpers.statistics import assert_agrees
from helpers.synthetic_estimate import expression, make_case
from perdure._crosscheck.numbers import Found, Named, number_found, numbers_of, units_of
from perdure._records import (
    CaseRecord,
    Event,
    EventResult,
    Observable,
    ObservableResult,
    Quantity,
    Regime,
)
from perdure._statistics import quantile

# Kolmogorov's limit law passes this with probability 2 exp(-2 * 2.7**2) = 9e-7 (A. N. Kolmogorov, 1933).
LARGEST = 2.7
STEP = 0.25
N_BATCH = 8


def number(value: float | None, unit: str = "1", high: float | None = 1e9) -> Quantity:
    return Quantity(value, 0.0, high, {}, unit)


def case_of(events: tuple[str, ...] = ("high",), observables: tuple[str, ...] = ("level",)) -> CaseRecord:
    return replace(
        make_case(),
        events=tuple(Event(name, expression("level > 0")) for name in events),
        observables=tuple(Observable(name, expression("level"), "m") for name in observables),
    )


def event_of(**changes: Quantity) -> EventResult:
    made = EventResult(number(0.1), number(0.2, "1/days"), number(5.0, "days"), number(0.5, "days"))
    return replace(made, **changes)


def regime_of(
    event: EventResult | None = None, mean: float | None = 1.0, variance: float | None = 1.0, names: int = 1
) -> Regime:
    observed = ObservableResult(number(mean, "m"), number(variance, "m^2"))
    return Regime(
        weight=number(1.0),
        cell=np.arange(3),
        mass=np.full(3, 1.0 / 3.0),
        period=1,
        residual=0.0,
        eigenvalue=1.0,
        events={"high": event or event_of(), "low": event_of()} if names else {},
        observables={"level": observed},
        marginals={},
    )


def numbers(
    batches: np.ndarray,
    units: list[np.ndarray] | None = None,
    case: CaseRecord | None = None,
    regime: Regime | None = None,
    centre: float = 0.0,
    independent: bool = True,
) -> dict[tuple[str, str], Named]:
    """By name and number; every trajectory a unit of its own unless given."""
    own = [np.array([k]) for k in range(batches.shape[2])]
    rows = numbers_of(
        case or case_of(), regime or regime_of(), batches, own if units is None else units, STEP, np.array([centre]),
        independent,
    )  # fmt: skip
    return {(row.name, row.number): row for row in rows}


def value_of(named: Named) -> float:
    assert named.found.quantity.value is not None
    return named.found.quantity.value


def batches_of(inside: np.ndarray, entries: np.ndarray, first: np.ndarray, second: np.ndarray) -> np.ndarray:
    return np.stack(np.broadcast_arrays(inside, entries, first, second), axis=1).astype(float)


# ------------------------------------------------------------------------------------------- units


def test_twins_of_the_same_start_are_a_unit() -> None:
    """Four starts, twins at 4 to 7; of the second only the twin is of this regime, of the third none."""
    found_units = units_of(np.array([0, 3, 4, 5, 7]), 4)
    assert [unit.tolist() for unit in found_units] == [[0, 4], [5], [3, 7]]
    assert units_of(np.array([], dtype=int), 4) == []


# ------------------------------------------------------------------------------------ values by hand


def by_hand() -> np.ndarray:
    """Two batches of three trajectories."""
    return batches_of(
        np.array([[0.1, 0.0, 0.2], [0.3, 0.0, 0.0]]),
        np.array([[0.02, 0.0, 0.04], [0.06, 0.0, 0.0]]),
        np.array([[1.0, 2.0, 3.0], [1.0, 4.0, 1.0]]),
        np.array([[5.0, 5.0, 11.0], [3.0, 17.0, 7.0]]),
    )


def test_values_of_an_event() -> None:
    """Share 0.1; 0.02 entries a step of a quarter day: 0.08 a day, one in 12.5 days, for 1.25 days."""
    rows = numbers(by_hand())
    share, rate, period, spell = (rows["high", name] for name in ("share", "entry_rate", "return_period", "mean_spell"))
    assert [value_of(row) for row in (share, rate, period, spell)] == pytest.approx([0.1, 0.08, 12.5, 1.25])
    units = [row.found.quantity.unit for row in (share, rate, period, spell)]
    assert units == ["1", "1/days", "days", "days"]
    assert [row.subject for row in rows.values()] == ["event"] * 4 + ["observable"] * 2
    assert share.density == number(0.1)
    # magnitudes: the spread of the share is more than the share
    assert [row.found.size for row in (share, rate, period)] == pytest.approx([0.3, 0.08, 12.5])
    # batches with time inside, and with entries
    assert [row.found.hits for row in (share, rate, period, spell)] == [3, 3, 3, 3]
    assert share.found.spread == pytest.approx(0.3)
    assert (rate.found.spread, period.found.spread, spell.found.spread) == (None, None, None)
    # the means of the trajectories are 0.2, 0 and 0.1
    assert share.found.quantity.error == pytest.approx(0.1 / math.sqrt(3.0))
    assert share.found.freedom == 2
    # the batches of a trajectory differ by 0.2, 0 and 0.2, variances 0.02, 0 and 0.02 of six batches
    assert share.found.along == pytest.approx(math.sqrt(0.04 / 3.0 / 6.0))
    assert share.found.ratio == pytest.approx(0.01 / 3.0 / (0.04 / 18.0))


def test_values_of_an_observable() -> None:
    """Sums about the centre 10: mean 12, variance 8 - 4."""
    rows = numbers(by_hand(), centre=10.0)
    mean, variance = rows["level", "mean"], rows["level", "variance"]
    assert (value_of(mean), value_of(variance)) == pytest.approx((12.0, 4.0))
    assert mean.found.spread == pytest.approx(2.0)
    assert variance.found.spread is None
    assert (mean.found.hits, variance.found.hits) == (6, 6)
    # what sums about a centre are rounded to: the squares, and that of the centre
    assert mean.found.size == pytest.approx(12.0)
    assert variance.found.size == pytest.approx(108.0)
    # trajectories' means 1, 3 and 2; of x^2 less four times x: 4 - 4, 11 - 12 and 9 - 8
    assert mean.found.quantity.error == pytest.approx(1.0 / math.sqrt(3.0))
    assert variance.found.quantity.error == pytest.approx(1.0 / math.sqrt(3.0))
    assert (mean.found.quantity.unit, variance.found.quantity.unit) == ("m", "m^2")
    assert [row.subject for row in (mean, variance)] == ["observable", "observable"]


def test_two_events_and_their_rows() -> None:
    """Rows of the sums: two of each event, then two of each observable."""
    x = np.zeros((4, 6, 5))
    x[:, 0], x[:, 1], x[:, 2], x[:, 3], x[:, 4], x[:, 5] = 0.5, 0.25, 0.125, 0.03125, 3.0, 10.0
    rows = numbers(x, case=case_of(("high", "low")))
    assert value_of(rows["low", "share"]) == 0.125
    assert value_of(rows["low", "entry_rate"]) == 0.125
    assert value_of(rows["high", "mean_spell"]) == pytest.approx(0.5)
    assert value_of(rows["level", "variance"]) == pytest.approx(1.0)


def test_what_the_density_has_not_is_left_out() -> None:
    nothing = Quantity(None, None, None, {}, "1", "none")
    rows = numbers(by_hand(), regime=regime_of(event_of(mean_spell=nothing, share=nothing), None, 1.0))
    assert set(rows) == {("high", "entry_rate"), ("high", "return_period"), ("level", "variance")}
    # a bound for what was never seen is compared
    bound = Quantity(None, 0.0, 1e-4, {}, "1")
    rows = numbers(by_hand(), regime=regime_of(event_of(share=bound), 1.0, None))
    assert rows["high", "share"].density == bound
    assert ("level", "variance") not in rows


def test_an_event_that_is_never_met() -> None:
    """No period and no spell; the share is 0 with an error of 0."""
    x = by_hand()
    x[:, :2] = 0.0
    rows = numbers(x)
    assert set(rows) == {("high", "share"), ("high", "entry_rate"), ("level", "mean"), ("level", "variance")}
    share = rows["high", "share"].found
    assert (share.quantity.value, share.quantity.error, share.hits, share.ratio) == (0.0, 0.0, 0, 1.0)
    assert min(share.ratio_p, share.trend_p) > 0.1


def test_an_event_that_is_never_left() -> None:
    x = by_hand()
    x[:, 0], x[:, 1] = 1.0, 0.0
    rows = numbers(x)
    assert value_of(rows["high", "share"]) == 1.0
    assert rows["high", "share"].found.spread == 0.0
    assert ("high", "return_period") not in rows


@pytest.mark.parametrize("n", [0, 1])
def test_fewer_than_two_starts_give_no_numbers(n: int) -> None:
    units = [np.array([0, 1])] * n
    assert numbers(by_hand(), units) == {}


def test_trajectories_of_other_regimes_do_not_count() -> None:
    rows = numbers(by_hand(), [np.array([0]), np.array([2])])
    assert value_of(rows["high", "share"]) == pytest.approx(0.15)
    rows = numbers(by_hand(), [np.array([0, 1]), np.array([2])])
    assert value_of(rows["high", "share"]) == pytest.approx(0.1), "units count evenly, not trajectories"
    assert rows["high", "share"].found.freedom == 1


# ------------------------------------------------------------------------------------- calibration

MEAN, DEVIATION, N_UNIT = 3.0, 0.5, 20


def of_batches(each: np.ndarray, independent: bool = True) -> Found:
    """A mean from batches (n_batch, n_unit)."""
    x = each[:, None, :]
    mean = x.mean(axis=(0, 2))
    return number_found(x, mean, float(mean[0]), {0: 1.0}, "real", "1", each.size, DEVIATION, independent=independent)


def many(make: Callable[[np.random.Generator], np.ndarray], n_seed: int, seed: int = 1) -> list[Found]:
    rng = np.random.default_rng(seed)
    return [of_batches(make(rng)) for _ in range(n_seed)]


def plain(rng: np.random.Generator) -> np.ndarray:
    return np.asarray(rng.normal(MEAN, DEVIATION, (N_BATCH, N_UNIT)))


def starts_apart(rng: np.random.Generator) -> np.ndarray:
    """Starts differ by as much as batches do."""
    return np.asarray(plain(rng) + rng.normal(0.0, DEVIATION, N_UNIT))


def drifting(rng: np.random.Generator) -> np.ndarray:
    return np.asarray(plain(rng) + DEVIATION * np.linspace(0.0, 2.0, N_BATCH)[:, None])


def covered(results: list[Found], exact: float) -> tuple[float, float]:
    """Part of the intervals that hold the exact value, and its standard error."""
    ends = np.array([[f.quantity.low, f.quantity.high] for f in results], dtype=float)
    part = np.mean((ends[:, 0] <= exact) & (exact <= ends[:, 1]))
    return float(part), math.sqrt(0.95 * 0.05 / len(results))


def distance_from_even(chances: list[float]) -> float:
    """Kolmogorov-Smirnov distance from the even law, times the root of the number."""
    return float(kstest(chances, "uniform").statistic * math.sqrt(len(chances)))


@pytest.fixture(scope="module")
def alike() -> list[Found]:
    return many(plain, 3000)


def test_errors_are_those_of_means(alike: list[Found]) -> None:
    """Both ways of reckoning have the variance over batches and starts; intervals hold the mean 95 times in 100."""
    exact = DEVIATION**2 / (N_BATCH * N_UNIT)
    for squares in ([f.quantity.error**2 for f in alike if f.quantity.error], [f.along**2 for f in alike]):
        error = np.std(squares) / math.sqrt(len(alike))
        assert_agrees(np.mean(squares), exact, error)
        with pytest.raises(AssertionError):
            assert_agrees(np.mean(squares), 1.1 * exact, error)
    assert_agrees(covered(alike, MEAN)[0], 0.95, covered(alike, MEAN)[1])
    part, error = covered(alike, MEAN + math.sqrt(exact))
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error)


def test_chances_are_those_of_fisher_and_student() -> None:
    each = plain(np.random.default_rng(7))
    result = of_batches(each)
    whole = each.mean(axis=0)
    ratio = whole.var(ddof=1) / (each.var(axis=0, ddof=1).mean() / N_BATCH)
    assert result.ratio == pytest.approx(ratio)
    assert result.ratio_p == pytest.approx(fisher.sf(ratio, N_UNIT - 1, N_UNIT * (N_BATCH - 1)))
    half = each[: N_BATCH // 2].mean(axis=0) - each[N_BATCH // 2 :].mean(axis=0)
    assert result.trend_p == pytest.approx(ttest_1samp(half, 0.0).pvalue)


def test_chances_are_even_where_starts_are_alike(alike: list[Found]) -> None:
    assert distance_from_even([f.ratio_p for f in alike]) < LARGEST
    assert distance_from_even([f.trend_p for f in alike]) < LARGEST
    # the law of Fisher: its mean is d/(d - 2) with the d of the batches
    ratio = np.array([f.ratio for f in alike])
    freedom = N_UNIT * (N_BATCH - 1)
    assert_agrees(ratio.mean(), freedom / (freedom - 2.0), ratio.std() / math.sqrt(len(ratio)))


def test_starts_that_differ_are_noticed() -> None:
    """Then the spread between starts still gives the error, and that along them does not."""
    results = many(starts_apart, 400)
    assert np.mean([f.ratio_p < 1e-3 for f in results]) > 0.95
    assert distance_from_even([f.trend_p for f in results]) < LARGEST, "they do not drift"
    part, error = covered(results, MEAN)
    assert_agrees(part, 0.95, error)
    half = [quantile(f.freedom) * f.along for f in results]
    inside = np.mean([abs((f.quantity.value or 0.0) - MEAN) <= h for f, h in zip(results, half, strict=True)])
    with pytest.raises(AssertionError):
        assert_agrees(inside, 0.95, error)


def test_a_drift_is_noticed() -> None:
    results = many(drifting, 400)
    assert np.mean([f.trend_p < 1e-3 for f in results]) > 0.9
    assert np.mean([f.ratio_p for f in results]) > 0.5, "starts are alike, and batches spread more"


def test_twins_that_stay_together_count_once() -> None:
    """Intervals hold the mean if twins are a unit; taken as two trajectories they are too narrow (control)."""
    rng = np.random.default_rng(2)
    apart, together = [], []
    for _ in range(400):
        each = rng.normal(MEAN, DEVIATION, (N_BATCH, 10))
        x = batches_of(0.0, 0.0, np.concatenate([each, each], axis=1), 1e4)
        for units, results in (
            (units_of(np.arange(20), 10), together),
            ([np.array([k]) for k in range(20)], apart),
        ):
            results.append(numbers(x, units)["level", "mean"].found)
    assert_agrees(covered(together, MEAN)[0], 0.95, covered(together, MEAN)[1])
    part, error = covered(apart, MEAN)
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error)


def renewal(rng: np.random.Generator) -> np.ndarray:
    """Time inside and entries of a long run: a number of visits, of lengths with mean 2 steps, in 4000 steps."""
    visits = rng.poisson(80.0, (N_BATCH, N_UNIT))
    inside = visits + rng.poisson(visits)
    return batches_of(inside / 4000.0, visits / 4000.0, 0.0, 0.0)


@pytest.mark.parametrize(
    ("name", "exact"),
    [("share", 0.04), ("entry_rate", 0.08), ("return_period", 12.5), ("mean_spell", 0.5)],
)
def test_intervals_of_event_numbers_hold_the_truth(name: str, exact: float) -> None:
    """What time inside and entries have in common enters: the mean spell knows nothing of the number of visits."""
    rng = np.random.default_rng(3)
    results = [numbers(renewal(rng))["high", name].found for _ in range(1500)]
    part, error = covered(results, exact)
    # to first order: a relative error of 1 percent
    assert_agrees(part, 0.95, error, allowance=0.005)
    part, error = covered(results, exact * 1.03)
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error, allowance=0.005)
    told = np.mean([f.quantity.error or 0.0 for f in results])
    true = np.std([f.quantity.value or 0.0 for f in results])
    # mean of a standard deviation of 20: 1.3 percent low
    assert told == pytest.approx(true, rel=0.08)
    if name == "mean_spell":
        visits = N_BATCH * N_UNIT * 80
        assert true == pytest.approx(STEP / math.sqrt(visits), rel=0.08)
        # negative control: the errors of share and rate, as if they were independent
        apart = exact * math.hypot(math.sqrt(1.25 / visits), math.sqrt(1.0 / visits))
        assert told < 0.7 * apart


def test_the_variance_of_an_observable_has_its_own_error() -> None:
    """Of normal values that are independent: 2 sigma^4 / n; about a centre that is not the mean."""
    rng, n = np.random.default_rng(4), 50
    results = []
    for _ in range(1000):
        z = rng.normal(1.0, 2.0, (N_BATCH, n, N_UNIT))
        x = batches_of(0.0, 0.0, z.mean(axis=1), (z**2).mean(axis=1))
        results.append(numbers(x, centre=100.0)["level", "variance"].found)
    part, error = covered(results, 4.0)
    assert_agrees(part, 0.95, error, allowance=0.01)
    told = np.mean([(f.quantity.error or 0.0) ** 2 for f in results])
    assert told == pytest.approx(32.0 / (N_BATCH * n * N_UNIT), rel=0.05)
    part, error = covered(results, 4.3)
    with pytest.raises(AssertionError):
        assert_agrees(part, 0.95, error, allowance=0.01)


def test_starts_that_are_not_forgotten_have_the_spread_between_them() -> None:
    """The error is not that of a mean of independent starts, root 20 times less; what is said of starts is the same."""
    each = starts_apart(np.random.default_rng(8)) + DEVIATION * np.linspace(0.0, 1.0, N_BATCH)[:, None]
    plainly, held = of_batches(each), of_batches(each, False)
    spread = each.mean(axis=0).std(ddof=1)
    assert held.quantity.error == pytest.approx(spread)
    assert plainly.quantity.error == pytest.approx(spread / math.sqrt(N_UNIT))
    assert (held.ratio, held.ratio_p, held.along) == (plainly.ratio, plainly.ratio_p, plainly.along)
    # a drift is no longer beyond chance
    half = each[: N_BATCH // 2].mean(axis=0) - each[N_BATCH // 2 :].mean(axis=0)
    distance = abs(half.mean()) / half.std(ddof=1)
    assert held.trend_p == pytest.approx(2.0 * student.sf(distance, N_UNIT - 1))
    assert held.trend_p > plainly.trend_p
    rows = numbers(by_hand(), independent=False)
    assert rows["high", "share"].found.quantity.error == pytest.approx(0.1)


def test_phases_of_a_cycle_are_no_sample() -> None:
    """Ten starts on a cycle that is met in few phases: the mean over starts is off by more than its error says.

    The mean over a cycle that is looked at in one phase per start, cos(phase), with phases that all lie in a quarter.
    """
    rng = np.random.default_rng(9)
    phase = rng.uniform(0.0, 0.5 * math.pi, N_UNIT)
    each = np.tile(np.cos(phase), (N_BATCH, 1)) + 1e-3 * rng.standard_normal((N_BATCH, N_UNIT))
    for independent, holds in ((True, False), (False, True)):
        told = of_batches(each, independent).quantity
        assert told.low is not None
        assert (told.low <= 0.0) == holds


# ---------------------------------------------------------------------------------------- rounding


def test_trajectories_at_rest_differ_by_nothing() -> None:
    """Rounding of long sums is no difference between starts; a difference of 10^-9 is one."""
    rng = np.random.default_rng(5)
    still = MEAN * (1.0 + 1e-14 * rng.standard_normal((N_BATCH, N_UNIT)))
    result = of_batches(still)
    assert (result.quantity.error, result.along, result.ratio) == (0.0, 0.0, 1.0)
    assert min(result.ratio_p, result.trend_p) > 0.1
    apart = of_batches(still + 1e-9 * np.arange(N_UNIT))
    assert apart.ratio > 1e6
    assert apart.ratio_p < 1e-12
    assert (apart.quantity.error or 0.0) > 1e-10


def test_starts_that_rest_at_different_places_are_infinitely_uneven() -> None:
    result = of_batches(np.tile(np.arange(1.0, N_UNIT + 1.0), (N_BATCH, 1)))
    assert result.ratio == math.inf
    assert result.ratio_p == 0.0
    assert result.trend_p == 1.0


def test_a_large_centre_is_what_a_variance_is_rounded_to() -> None:
    """Sums about 0 of a state at rest near 1e6: squares of 1e12 leave 1e-4 of rounding, which is no spread."""
    rng = np.random.default_rng(6)
    noise = 1e-4 * rng.standard_normal((N_BATCH, N_UNIT))
    x = batches_of(0.0, 0.0, 1e6, 1e12 + 1.0 + noise)
    told = numbers(x)["level", "variance"].found
    assert (told.quantity.error, told.ratio) == (0.0, 1.0)
    # the same spread about the mean itself is one
    x = batches_of(0.0, 0.0, 0.0, 1.0 + noise)
    assert (numbers(x)["level", "variance"].found.quantity.error or 0.0) > 0.0
