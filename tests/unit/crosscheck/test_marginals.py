"""Distances between marginals: by hand, against scipy, what sampling alone gives, and chances."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from scipy.stats import ks_2samp, norm, wasserstein_distance
from scipy.stats import t as student

from helpers.statistics import assert_agrees
from perdure._crosscheck.marginals import (
    FINE,
    MarginalFound,
    cell_distance,
    density_errors,
    distances,
    furthest,
    marginal_found,
    marginal_judged,
)
from perdure._crosscheck.verdicts import DENSITY_FREEDOM
from perdure._records import AGREES, DISAGREES, TOO_SHORT, Distance, Marginal, MarginalComparison
from perdure._statistics import quantile

N_INTERVAL = 12
EDGES = np.linspace(-3.0, 3.0, N_INTERVAL + 1)


def normal_masses(shift: float = 0.0, scale: float = 1.0) -> np.ndarray:
    """Masses below the axis, in its intervals, and above it."""
    inner = norm.cdf((EDGES - shift) / scale)
    return np.diff(np.concatenate([[0.0], inner, [1.0]]))


def marginal_of(mass: np.ndarray, error: float = 0.0) -> Marginal:
    """From masses with both ends, and a relative error of each."""
    inner = mass[1:-1]
    return Marginal(EDGES, inner, error * inner, float(mass[0]), float(mass[-1]), "m")


def counts_of(mass: np.ndarray, n: int, size: int, rng: np.random.Generator) -> np.ndarray:
    """Histograms of n trajectories of so many independent points."""
    return rng.multinomial(size, mass, n).astype(np.int64)


def units_of(n: int) -> list[np.ndarray]:
    return [np.array([k]) for k in range(n)]


# --------------------------------------------------------------------------------------- distances


def test_distances_by_hand() -> None:
    """0.3 goes from the first of three intervals of widths 1, 2 and 4 to the last."""
    gap = np.array([[0.0, -0.3, 0.0, 0.3, 0.0]])
    total, largest, transport = distances(gap, np.array([1.0, 2.0, 4.0]))
    assert total[0] == pytest.approx(0.3)
    assert largest[0] == pytest.approx(0.3)
    # even within intervals: from the middle of the first to that of the last, 0.5 + 2 + 2
    assert transport[0] == pytest.approx(0.3 * 4.5)


def test_a_difference_may_change_its_sign_within_an_interval() -> None:
    """0.1 too much on either side of 0.2 too little: each goes from the middle of its interval to a half of the next.

    Over the second interval the difference of the distribution functions falls from 0.1 to -0.1: two triangles.
    """
    _, largest, transport = distances(np.array([[0.0, 0.1, -0.2, 0.1, 0.0]]), np.ones(3))
    assert largest[0] == pytest.approx(0.1)
    assert transport[0] == pytest.approx(2.0 * 0.1 * (0.5 + 0.25))


def test_mass_beyond_the_ends_stands_at_the_ends() -> None:
    """0.1 from below the axis to above it: over its whole width, 7."""
    total, largest, transport = distances(np.array([[-0.1, 0.0, 0.0, 0.0, 0.1]]), np.array([1.0, 2.0, 4.0]))
    assert (total[0], largest[0]) == pytest.approx((0.1, 0.1))
    assert transport[0] == pytest.approx(0.7)


def test_no_difference_no_distance() -> None:
    found = distances(np.zeros((2, 5)), np.ones(3))
    np.testing.assert_array_equal(found, np.zeros((3, 2)))


def fine_points(mass: np.ndarray, n: int = 4000) -> tuple[np.ndarray, np.ndarray]:
    """Points spread evenly within the intervals, or at the ends, and their weights."""
    part = (np.arange(n) + 0.5) / n
    points = np.concatenate([[EDGES[0]], *(a + part * (z - a) for a, z in pairwise(EDGES)), [EDGES[-1]]])
    weight = np.concatenate([[mass[0]], np.repeat(mass[1:-1] / n, n), [mass[-1]]])
    return points, weight


LAWS = {
    "shifted": (normal_masses(), normal_masses(0.4)),
    "both wider and shifted": (normal_masses(), normal_masses(-0.3, 1.6)),
    "wider": (normal_masses(), normal_masses(0.0, 1.3)),
    "ragged": tuple(np.random.default_rng(1).dirichlet(np.ones(N_INTERVAL + 2), 2)),
}


@pytest.mark.parametrize("law", list(LAWS))
def test_transport_is_that_of_scipy(law: str) -> None:
    """On 4000 points an interval, both laws even within intervals and at the ends beyond them."""
    one, two = LAWS[law]
    points, weight = fine_points(one)
    _, other = fine_points(two)
    exact = wasserstein_distance(points, points, weight, other)
    found = distances((one - two)[None], np.diff(EDGES))[2][0]
    # a step of a 4000th of an interval
    assert_agrees(found, exact, 0.0, allowance=0.5 / 4000)
    with pytest.raises(AssertionError):
        assert_agrees(found, 1.02 * exact, 0.0, allowance=0.5 / 4000)


@pytest.mark.parametrize("law", list(LAWS))
def test_largest_difference_is_that_of_scipy(law: str) -> None:
    """Samples whose histograms are the masses, to the rounding of 2 10^5 points."""
    one, two = LAWS[law]
    n = 200_000
    samples = []
    for mass in (one, two):
        count = np.diff(np.round(np.concatenate([[0.0], np.cumsum(mass)]) * n)).astype(int)
        edges = np.concatenate([[-4.0], EDGES, [4.0]])
        # beyond the ends even on an interval of its own, beyond which the difference is 0
        samples.append(
            np.concatenate(
                [np.linspace(a, z, c, endpoint=False) for a, z, c in zip(edges, edges[1:], count, strict=False)]
            )
        )
    exact = ks_2samp(*samples, method="asymp").statistic
    found = distances((one - two)[None], np.diff(EDGES))[1][0]
    assert_agrees(found, exact, 0.0, allowance=4.0 / n)
    with pytest.raises(AssertionError):
        assert_agrees(found, 1.02 * exact, 0.0, allowance=4.0 / n)


@pytest.mark.parametrize("law", list(LAWS))
def test_total_variation_is_the_mass_that_must_move(law: str) -> None:
    one, two = LAWS[law]
    total, largest, _ = distances((one - two)[None], np.diff(EDGES))
    assert total[0] == pytest.approx(1.0 - np.minimum(one, two).sum())
    assert largest[0] <= total[0] + 1e-15


# ------------------------------------------------------------------------------------------- found


def test_masses_and_errors_by_hand() -> None:
    """Two units, of which the second are twins; a unit counts once, whatever its length."""
    counts = np.array([[1, 2, 3, 4], [0, 20, 20, 0], [0, 0, 10, 10]])
    marginal = Marginal(np.array([0.0, 1.0, 2.0]), np.array([0.3, 0.4]), np.zeros(2), 0.1, 0.2)
    found = marginal_found("x", marginal, counts, [np.array([0]), np.array([1, 2])], True, np.random.default_rng(1))
    # parts 0.1, 0.2, 0.3, 0.4 and 0, 1/3, 1/2, 1/6
    mean = np.array([0.05, 4.0 / 15.0, 0.4, 17.0 / 60.0])
    np.testing.assert_allclose(found.mass, mean[1:-1])
    theirs = np.array([0.1, 0.3, 0.4, 0.2])
    spread = np.array([0.05, 1.0 / 15.0, 0.1, 7.0 / 60.0])
    # few points: no less than the error of a count of them, 1, 22, 33 and 14
    own = np.maximum(spread, np.maximum(mean, theirs) / np.sqrt([1.0, 22.0, 33.0, 14.0]))
    assert own == pytest.approx([0.1, *spread[1:]])
    np.testing.assert_allclose(found.error, own[1:-1])
    gap = mean - theirs
    assert found.total_variation.value == pytest.approx(0.5 * np.abs(gap).sum())
    assert found.kolmogorov_smirnov.value == pytest.approx(np.abs(np.cumsum(gap)).max())
    below = np.cumsum(gap)
    assert np.all(below[:-1] < 0.0)
    assert found.wasserstein.value == pytest.approx(-0.5 * (below[0] + 2.0 * below[1] + below[2]))
    assert found.p_value == furthest(gap, own, np.zeros(4), 1.0)
    assert (found.component, found.marginal) == ("x", marginal)


def test_the_pair_of_slots_that_is_furthest_off() -> None:
    """0.02 too much in the second slot and too little in the fourth, ten errors of a pair of slots each.

    Pairs from the first slot on are three, from the second on four, of which the larger number counts.
    """
    gap = np.array([0.0, 0.02, 0.0, -0.02, 0.0, 0.0])
    chance = 2.0 * student.sf(10.0, 7.0)
    assert furthest(gap, np.full(6, 1e-3), np.zeros(6), 7.0) == pytest.approx(4.0 * chance)
    assert furthest(gap, np.zeros(6), np.full(6, 1e-3), 7.0) == pytest.approx(4.0 * chance)
    # errors of both sides are independent, those of neighbours may not be
    both = furthest(gap, np.full(6, 0.8e-3), np.full(6, 0.6e-3), 7.0)
    assert both == pytest.approx(4.0 * chance)
    # more than a certainty there is not
    assert furthest(gap, np.ones(6), np.zeros(6), 7.0) == 1.0


def test_a_point_of_mass_between_two_slots_is_in_one_or_the_other() -> None:
    own = np.full(6, 1e-6)
    for at in (1, 2, 3):
        gap = np.zeros(6)
        gap[at], gap[at + 1] = 0.3, -0.3
        assert furthest(gap, own, np.zeros(6), 7.0) > 0.3
        # negative control: two slots further it is somewhere else
        gap = np.zeros(6)
        gap[at], gap[at + 2] = 0.3, -0.3
        assert furthest(gap, own, np.zeros(6), 7.0) < 1e-10


def test_differences_without_any_error() -> None:
    """Below a thousandth in all there is none; above, what has no error on either side is off for certain."""
    gap = np.array([0.0, 0.9e-3, 0.0, -0.9e-3])
    assert furthest(gap, np.zeros(4), np.zeros(4), 7.0) == 1.0
    assert furthest(10.0 * gap, np.zeros(4), np.zeros(4), 7.0) == 0.0
    assert furthest(np.zeros(4), np.zeros(4), np.zeros(4), 7.0) == 1.0


@pytest.fixture(scope="module")
def right() -> list[MarginalFound]:
    """Trajectories with the law of a density that is exact."""
    rng = np.random.default_rng(2)
    marginal = marginal_of(normal_masses())
    return [
        marginal_found("x", marginal, counts_of(normal_masses(), 64, 500, rng), units_of(64), True, rng)
        for _ in range(300)
    ]


def test_masses_of_intervals_have_their_errors(right: list[MarginalFound]) -> None:
    """Binomial: p (1 - p) over all points."""
    exact = normal_masses()[1:-1]
    variance = exact * (1.0 - exact) / (64 * 500)
    mass = np.array([found.mass for found in right])
    assert_agrees(mass.mean(axis=0), exact, np.sqrt(variance / 300))
    told = np.array([found.error**2 for found in right])
    assert_agrees(told.mean(axis=0), variance, told.std(axis=0) / math.sqrt(300))
    with pytest.raises(AssertionError):
        assert_agrees(told.mean(axis=0), 1.1 * variance, told.std(axis=0) / math.sqrt(300))


@pytest.mark.parametrize("name", ["total_variation", "kolmogorov_smirnov", "wasserstein"])
def test_what_sampling_alone_gives(right: list[MarginalFound], name: str) -> None:
    """Where both sides are right, distances are on average what is expected; where one is wrong, far more (control).

    The spread of 64 trajectories about their own mean is root(63/64) of that about the truth.
    """
    pairs = [getattr(found, name) for found in right]
    value = np.array([pair.value for pair in pairs])
    expected = np.array([pair.expected for pair in pairs])
    error = math.hypot(value.std(), expected.std()) / math.sqrt(len(pairs))
    assert_agrees(value.mean() * math.sqrt(63.0 / 64.0), expected.mean(), error)
    rng = np.random.default_rng(3)
    counts = counts_of(normal_masses(0.05), 64, 500, rng)
    wrong = getattr(marginal_found("x", marginal_of(normal_masses()), counts, units_of(64), True, rng), name)
    assert wrong.value > 2.0 * wrong.expected
    with pytest.raises(AssertionError):
        assert_agrees(wrong.value, expected.mean(), error)


def test_what_sampling_of_the_density_adds() -> None:
    """With an error of the density like that of the trajectories, expected distances are root 2 times as large."""
    rng = np.random.default_rng(4)
    mass = normal_masses()
    plain, both = [], []
    for _ in range(100):
        counts = counts_of(mass, 64, 500, rng)
        own = marginal_found("x", marginal_of(mass), counts, units_of(64), True, rng)
        noisy = replace(marginal_of(mass), error=np.array(own.error))
        plain.append(own)
        both.append(marginal_found("x", noisy, counts, units_of(64), True, rng))
    ratio = np.mean([f.total_variation.expected for f in both]) / np.mean([f.total_variation.expected for f in plain])
    assert ratio == pytest.approx(math.sqrt(2.0), rel=0.03)
    assert np.mean([f.other for f in both]) == pytest.approx(np.mean([f.own for f in both]), rel=0.05)
    assert [f.other for f in plain] == [0.0] * 100
    np.testing.assert_allclose([f.own for f in plain], [f.total_variation.expected for f in plain])


def test_what_one_interval_has_too_much_the_others_lack() -> None:
    """With an error of the density in a single interval: on average root(2/pi) of it, less the part of its own mass."""
    rng, mass = np.random.default_rng(11), normal_masses()
    error = np.zeros(N_INTERVAL)
    error[5] = 0.01
    counts = counts_of(mass, 64, 500, rng)
    found = [
        marginal_found("x", replace(marginal_of(mass), error=error), counts, units_of(64), True, rng).other
        for _ in range(30)
    ]
    mean = counts.sum(axis=0)[6] / counts.sum()
    spread = np.std(found) / math.sqrt(30.0)
    assert_agrees(np.mean(found), math.sqrt(2.0 / math.pi) * 0.01 * (1.0 - mean), spread)
    with pytest.raises(AssertionError):
        assert_agrees(np.mean(found), math.sqrt(2.0 / math.pi) * 0.01 * 0.5, spread)


def test_chances_hold_where_both_are_right(right: list[MarginalFound]) -> None:
    """Below 5 percent no more often than that; of trajectories with another law always (control)."""
    p = np.array([found.p_value for found in right])
    assert np.mean(p <= 0.05) <= 0.05 + 5.0 * math.sqrt(0.05 * 0.95 / len(p))
    rng = np.random.default_rng(5)
    for shift, scale in ((0.15, 1.0), (0.0, 1.15)):
        counts = counts_of(normal_masses(shift, scale), 64, 500, rng)
        wrong = marginal_found("x", marginal_of(normal_masses()), counts, units_of(64), True, rng)
        assert wrong.p_value < 1e-3


def test_chances_hold_with_errors_of_the_density_from_few_replicates() -> None:
    """The density's masses scatter as well, with errors from 8 replicates."""
    rng, mass = np.random.default_rng(6), normal_masses()
    p = []
    for _ in range(400):
        replicate = counts_of(mass, 8, 4000, rng) / 4000.0
        theirs, error = replicate.mean(axis=0), replicate.std(axis=0, ddof=1) / math.sqrt(8.0)
        marginal = Marginal(EDGES, theirs[1:-1], error[1:-1], float(theirs[0]), float(theirs[-1]))
        p.append(marginal_found("x", marginal, counts_of(mass, 64, 500, rng), units_of(64), True, rng).p_value)
    assert np.mean(np.array(p) <= 0.05) <= 0.05 + 5.0 * math.sqrt(0.05 * 0.95 / len(p))
    assert min(p) < 0.9, "no use if it is always 1"


def test_starts_that_are_not_forgotten_have_the_spread_between_them() -> None:
    """Errors and what sampling gives are 8 times as large for 64 starts; the distances are the same."""
    counts = counts_of(normal_masses(), 64, 500, np.random.default_rng(12))
    made = [
        marginal_found("x", marginal_of(normal_masses()), counts, units_of(64), independent, np.random.default_rng(13))
        for independent in (True, False)
    ]
    np.testing.assert_allclose(made[1].error, 8.0 * made[0].error)
    assert made[1].own == pytest.approx(8.0 * made[0].own)
    assert made[1].total_variation.value == made[0].total_variation.value
    assert made[1].total_variation.expected == pytest.approx(8.0 * made[0].total_variation.expected)


def test_twins_that_stay_together_count_once() -> None:
    """Histograms of which two and two are the same: as units errors are root 2 times those of single ones."""
    rng = np.random.default_rng(7)
    counts = np.tile(counts_of(normal_masses(), 40, 500, rng), (2, 1))
    units = [np.array([k, k + 40]) for k in range(40)]
    together = marginal_found("x", marginal_of(normal_masses()), counts, units, True, rng)
    apart = marginal_found("x", marginal_of(normal_masses()), counts, units_of(80), True, rng)
    np.testing.assert_allclose(together.error, apart.error * math.sqrt(79.0 / 39.0), rtol=1e-9)


def test_rare_intervals_have_the_error_of_a_count() -> None:
    """Four points of 64 trajectories: the larger mass over the root of four, if that is more than the spread."""
    counts = np.zeros((64, 4), dtype=np.int64)
    counts[:, 1] = 10_000
    counts[:4, 2] = 1
    marginal = Marginal(np.array([0.0, 1.0, 2.0]), np.array([0.99999, 1e-5]), np.zeros(2), 0.0, 0.0)
    found = marginal_found("x", marginal, counts, units_of(64), True, np.random.default_rng(8))
    assert found.error[1] == pytest.approx(1e-5 / 2.0)


def test_an_interval_that_neither_side_met_is_not_compared() -> None:
    counts = np.tile(np.array([0, 5, 0, 5, 0]), (10, 1))
    marginal = Marginal(np.arange(4.0), np.array([0.5, 0.0, 0.5]), np.zeros(3), 0.0, 0.0)
    found = marginal_found("x", marginal, counts, units_of(10), True, np.random.default_rng(9))
    assert found.p_value == 1.0
    assert found.total_variation == Distance(0.0, 0.0)


def test_errors_of_the_density_on_the_side_of_the_trajectories() -> None:
    """Its ends where it has them, else its standard errors."""
    marginal = replace(
        marginal_of(normal_masses(), 0.1), low=normal_masses()[1:-1] * 0.9, high=normal_masses()[1:-1] * 1.3
    )
    inner = normal_masses()[1:-1]
    factor = quantile(DENSITY_FREEDOM)
    np.testing.assert_allclose(density_errors(marginal, inner * 1.01), 0.3 * inner / factor)
    np.testing.assert_allclose(density_errors(marginal, inner * 0.99), 0.1 * inner / factor)
    np.testing.assert_allclose(density_errors(replace(marginal, low=None), inner), 0.1 * inner)


# ------------------------------------------------------------------------------------------ judged


def found_of(own: float = 1e-3, other: float = 0.0, variation: Distance | None = None) -> MarginalFound:
    some = Distance(0.01, 0.02)
    mass = np.full(N_INTERVAL, 1.0 / N_INTERVAL)
    return MarginalFound(
        "x", marginal_of(normal_masses()), mass, 0.1 * mass, variation or some, some, some, 0.4, own, other
    )


@pytest.mark.parametrize(
    ("own", "other", "rejected", "is_uneven", "verdict", "reason"),
    [
        (1e-3, 0.0, False, False, AGREES, ""),
        (FINE * 1.01, 0.0, False, False, TOO_SHORT, "sampling of the trajectories alone"),
        (0.03, 0.04, False, False, AGREES, ""),
        (0.05, 0.04, False, False, TOO_SHORT, "sampling of the trajectories alone"),
        (0.05, 0.04, True, False, DISAGREES, "further off than chance"),
        (0.05, 0.04, True, True, TOO_SHORT, "starts differ"),
    ],
)
def test_verdicts(own: float, other: float, rejected: bool, is_uneven: bool, verdict: str, reason: str) -> None:
    found = found_of(own, other)
    made = marginal_judged(2, found, rejected, is_uneven)
    assert isinstance(made, MarginalComparison)
    assert made.verdict == verdict
    assert (reason in made.reason) if reason else made.reason == ""
    assert (made.regime, made.component, made.unit, made.p_value) == (2, "x", "m", 0.4)
    np.testing.assert_array_equal(made.edges, EDGES)
    np.testing.assert_array_equal(made.mass, found.mass)


def test_a_marginal_that_is_far_off_does_not_agree() -> None:
    """Where a few starts cannot reject it: five times what sampling gives, and more than is asked for."""
    for value, expected, verdict in ((0.11, 0.02, TOO_SHORT), (0.09, 0.02, AGREES), (0.9 * FINE, 0.0, AGREES)):
        made = marginal_judged(0, found_of(variation=Distance(value, expected)), False, False)
        assert made.verdict == verdict
        assert made.reason == ("far apart, but too few starts to tell" if verdict == TOO_SHORT else "")


# ------------------------------------------------------------------------------------------- cells


def test_distance_of_cells_by_hand() -> None:
    """Two groups; the last column is outside of the cells, where the density has 0.2."""
    visits = np.array([[6, 2, 2], [20, 20, 0]])
    # parts 0.6, 0.2, 0.2 and 0.5, 0.5, 0: means 0.55, 0.35, 0.1; errors 0.05, 0.15 and 0.1
    found = cell_distance(visits, np.array([0.5, 0.3]))
    assert found.value == pytest.approx(0.5 * (0.05 + 0.05 + 0.1))
    assert found.expected == pytest.approx(0.5 * math.sqrt(2.0 / math.pi) * 0.3)
    whole = cell_distance(visits, np.array([0.6, 0.4]))
    assert whole.value == pytest.approx(0.5 * (0.05 + 0.05 + 0.1))


def test_groups_without_visits_are_left_out() -> None:
    """And with one group that has any, there is no spread between them to tell of."""
    visits = np.array([[6, 2, 2], [0, 0, 0], [20, 20, 0]])
    assert cell_distance(visits, np.array([0.5, 0.3])) == cell_distance(visits[[0, 2]], np.array([0.5, 0.3]))
    for few in (visits[:2], visits[1:2]):
        found = cell_distance(few, np.array([0.5, 0.3]))
        assert math.isnan(found.value)
        assert math.isnan(found.expected)


def test_masses_that_are_rounded_to_more_than_one() -> None:
    found = cell_distance(np.array([[5, 5, 0], [5, 5, 0]]), np.array([0.5, 0.5 + 1e-15]))
    assert found.value == pytest.approx(0.0, abs=1e-14)
    assert found.expected == 0.0


def test_expected_distance_of_cells() -> None:
    """Independent visits of eight groups: on average what sampling gives; of another law more (control).

    The standard deviation of eight normal values is on average root(2/7) Gamma(4)/Gamma(7/2) = 0.965 of the true one.
    """
    rng = np.random.default_rng(10)
    mass = rng.dirichlet(np.full(60, 3.0))
    law = np.append(0.95 * mass, 0.05)
    found = [cell_distance(rng.multinomial(20_000, law, 8), 0.95 * mass) for _ in range(300)]
    value, expected = np.array([[f.value, f.expected] for f in found]).T
    short = math.sqrt(2.0 / 7.0) * math.gamma(4.0) / math.gamma(3.5)
    error = math.hypot(value.std(), expected.std()) / math.sqrt(300.0)
    assert_agrees(short * value.mean(), expected.mean(), error)
    wrong = cell_distance(rng.multinomial(20_000, law, 8), 0.95 * rng.permutation(mass))
    with pytest.raises(AssertionError):
        assert_agrees(short * wrong.value, expected.mean(), error)
