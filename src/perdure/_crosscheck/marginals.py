"""Distances between the marginals of the density and of the trajectories, beside what sampling alone would give."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure._crosscheck.verdicts import DENSITY_FREEDOM
from perdure._records import AGREES, DISAGREES, TOO_SHORT, Distance, Floats, Integers, Marginal, MarginalComparison
from perdure._statistics import quantile

__all__ = ["FINE", "MarginalFound", "cell_distance", "marginal_found", "marginal_judged"]

N_DRAW = 400
# Total variation below which nobody asks for more.
FINE = 2e-3
# Total variation, and mass, below which there is no difference.
SMALL = 1e-3
# Total variation over that from sampling, from which a marginal does not agree.
FAR = 5.0
# Points in a slot per start, or starts that met it, below which the normal law does not hold.
FEWEST_COUNTS = 25


@dataclass(frozen=True)
class MarginalFound:
    """A marginal from both sides: distances and the chance of the interval that is furthest off.

    `own` and `other` are the total variations that sampling of the trajectories, and of the density, would give alone.
    """

    component: str
    marginal: Marginal
    mass: Floats
    error: Floats
    total_variation: Distance
    kolmogorov_smirnov: Distance
    wasserstein: Distance
    p_value: float
    own: float
    other: float


def marginal_found(
    name: str,
    marginal: Marginal,
    counts: Integers,
    units: list[NDArray[np.int64]],
    independent: bool,
    rng: np.random.Generator,
) -> MarginalFound:
    """Compare one marginal.

    Parameters
    ----------
    counts : ndarray, shape (n, n_slot)
        Histogram of each trajectory; the first and the last slot lie beyond the ends.
    units : list of arrays
        Trajectories that count as one.
    independent : bool
        Starts are forgotten; see `numbers_of`.
    rng : numpy.random.Generator
        For the draws behind the expected distances.
    """
    n_unit = len(units)
    part = np.array([counts[unit].sum(axis=0) for unit in units], dtype=float)
    part /= np.maximum(part.sum(axis=1, keepdims=True), 1.0)
    mean = part.mean(axis=0)
    theirs = np.concatenate([[marginal.below], marginal.mass, [marginal.above]])
    less = np.sqrt(n_unit) if independent else 1.0
    own = part.std(axis=0, ddof=1) / less
    other = np.concatenate([[0.0], density_errors(marginal, mean[1:-1]), [0.0]])
    # few of few visits: their spread says little
    count = counts[np.concatenate(units)].sum(axis=0)
    seldom = (count < FEWEST_COUNTS * n_unit) & ((part > 0.0).sum(axis=0) < FEWEST_COUNTS)
    own = np.where(seldom, np.maximum(own, np.maximum(mean, theirs) / np.sqrt(np.maximum(count, 1))), own)
    p_value = furthest(mean - theirs, own, other, min(n_unit - 1.0, DENSITY_FREEDOM))
    inner = slice(1, -1)
    # draws of both errors: signs on the trajectories keep what neighbours have in common
    sign = rng.choice([-1.0, 1.0], (N_DRAW, n_unit))
    ours = sign @ (part - mean) / (np.sqrt(n_unit) * less)
    # what neighbours have in common in the density is not known: taken to be the same
    shape = np.where(own > 0.0, other / np.where(own > 0.0, own, 1.0), 0.0)
    noise = rng.choice([-1.0, 1.0], (N_DRAW, n_unit)) @ (part - mean) / (np.sqrt(n_unit) * less) * shape
    noise -= noise.sum(axis=1, keepdims=True) * mean
    width = np.diff(marginal.edges)
    pairs = zip(distances((mean - theirs)[None], width), distances(ours - noise, width), strict=True)
    total_variation, kolmogorov_smirnov, wasserstein = (Distance(float(a[0]), float(e.mean())) for a, e in pairs)
    return MarginalFound(
        name,
        marginal,
        mean[inner],
        own[inner],
        total_variation,
        kolmogorov_smirnov,
        wasserstein,
        p_value,
        float(distances(ours, width)[0].mean()),
        float(distances(noise, width)[0].mean()),
    )


def furthest(gap: Floats, own: Floats, other: Floats, freedom: float) -> float:
    """Chance of the slot that is furthest off, allowing for their number; gap and errors (n_slot,).

    Slots are taken in pairs, once from the first and once from the second on, and the larger chance counts: a point
    that holds mass and lies at the edge of two slots is in one or the other by rounding. Below `SMALL` nothing differs.
    """
    from scipy.special import stdtr

    if 0.5 * np.abs(gap).sum() < SMALL:
        return 1.0
    chances = []
    for cuts in (np.arange(0, len(gap), 2), np.append(0, np.arange(1, len(gap), 2))):
        apart = np.abs(np.add.reduceat(gap, cuts))
        # neighbours may err together
        error = np.hypot(np.add.reduceat(own, cuts), np.add.reduceat(other, cuts))
        seen = (error > 0.0) | (apart > SMALL)
        with np.errstate(divide="ignore"):
            distance = apart[seen] / error[seen]
        chances.append(min(1.0, seen.sum() * 2.0 * float(stdtr(freedom, -distance).min())) if seen.any() else 1.0)
    return max(chances)


def density_errors(marginal: Marginal, mass: Floats) -> Floats:
    """Standard errors of the density's masses on the side of `mass`, from their 95 percent intervals."""
    if marginal.low is None or marginal.high is None:
        return marginal.error
    end = np.where(mass > marginal.mass, marginal.high - marginal.mass, marginal.mass - marginal.low)
    return np.asarray(np.abs(end) / quantile(DENSITY_FREEDOM))


def distances(gap: Floats, width: Floats) -> tuple[Floats, Floats, Floats]:
    """Total variation, Kolmogorov-Smirnov and first Wasserstein distance of differences of mass (n, n_slot).

    The slots beyond the ends count as one interval each, at the end. Within an interval both laws are taken as even.
    """
    below = np.cumsum(gap, axis=1)[:, :-1]
    left, right = np.abs(below[:, :-1]), np.abs(below[:, 1:])
    # where the difference changes its sign within the interval, two triangles
    crossed = below[:, :-1] * below[:, 1:] < 0.0
    total = np.where(crossed, left + right, 1.0)
    transport = np.where(crossed, 0.5 * (left**2 + right**2) / total, 0.5 * (left + right)) @ width
    return 0.5 * np.abs(gap).sum(axis=1), np.abs(below).max(axis=1), transport


def marginal_judged(regime: int, found: MarginalFound, rejected: bool, is_uneven: bool) -> MarginalComparison:
    """Verdict on one marginal."""
    verdict, reason = AGREES, ""
    if is_uneven:
        verdict, reason = TOO_SHORT, "starts differ, or drift: see what is said of the starts"
    elif rejected:
        verdict, reason = DISAGREES, "an interval is further off than chance allows"
    elif found.own > max(found.other, FINE):
        verdict, reason = TOO_SHORT, "sampling of the trajectories alone gives more than that of the density"
    elif found.total_variation.value > max(FAR * found.total_variation.expected, FINE):
        verdict, reason = TOO_SHORT, "far apart, but too few starts to tell"
    return MarginalComparison(
        regime=regime,
        component=found.component,
        edges=found.marginal.edges,
        mass=found.mass,
        error=found.error,
        total_variation=found.total_variation,
        kolmogorov_smirnov=found.kolmogorov_smirnov,
        wasserstein=found.wasserstein,
        p_value=found.p_value,
        verdict=verdict,
        reason=reason,
        unit=found.marginal.unit,
    )


def cell_distance(visits: Integers, mass: Floats) -> Distance:
    """Total variation between visits by group and cell (n_group, n_cell + 1) and the mass (n_cell,) of the cells.

    What sampling of the trajectories alone would give is reckoned from the spread between the groups, for normal
    errors: E|x| = sqrt(2 / pi) times the standard error.
    """
    visits = visits[visits.sum(axis=1) > 0]
    if len(visits) < 2:
        return Distance(math.nan, math.nan)
    part = visits / visits.sum(axis=1, keepdims=True)
    mean = part.mean(axis=0)
    error = part.std(axis=0, ddof=1) / np.sqrt(len(part))
    gap = mean - np.append(mass, max(1.0 - mass.sum(), 0.0))
    return Distance(float(0.5 * np.abs(gap).sum()), float(0.5 * np.sqrt(2.0 / np.pi) * error.sum()))
