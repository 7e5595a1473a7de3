"""Distances between the marginals of the density and of the trajectories, beside what sampling alone would give."""

from __future__ import annotations

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
    name: str, marginal: Marginal, counts: Integers, units: list[NDArray[np.int64]], rng: np.random.Generator
) -> MarginalFound:
    """Compare one marginal.

    Parameters
    ----------
    counts : ndarray, shape (n, n_slot)
        Histogram of each trajectory; the first and the last slot lie beyond the ends.
    units : list of arrays
        Trajectories that count as one.
    rng : numpy.random.Generator
        For the draws behind the expected distances.
    """
    from scipy.special import stdtr

    n_unit = len(units)
    part = np.array([counts[unit].sum(axis=0) for unit in units], dtype=float)
    part /= np.maximum(part.sum(axis=1, keepdims=True), 1.0)
    mean = part.mean(axis=0)
    theirs = np.concatenate([[marginal.below], marginal.mass, [marginal.above]])
    own = part.std(axis=0, ddof=1) / np.sqrt(n_unit)
    other = np.concatenate([[0.0], density_errors(marginal, mean[1:-1]), [0.0]])
    # counts of the few that come to a rare interval: their spread says little
    n_hit = (part > 0.0).sum(axis=0)
    own = np.where(n_hit < 25, np.maximum(own, np.maximum(mean, theirs) / np.sqrt(np.maximum(n_hit, 1))), own)
    error = np.hypot(own, other)
    inner = slice(1, -1)
    seen = np.flatnonzero((error > 0.0)[inner]) + 1
    distance = np.abs(mean - theirs)[seen] / error[seen]
    # degrees of freedom as for numbers
    chance = 2.0 * stdtr(min(n_unit - 1.0, DENSITY_FREEDOM), -distance)
    p_value = float(min(1.0, len(seen) * chance.min())) if len(seen) else 1.0
    # draws of both errors: signs on the trajectories keep what neighbours have in common
    sign = rng.choice([-1.0, 1.0], (N_DRAW, n_unit))
    ours = sign @ (part - mean) / n_unit
    # what neighbours have in common in the density is not known: taken to be the same
    shape = np.where(own > 0.0, other / np.where(own > 0.0, own, 1.0), 0.0)
    noise = rng.choice([-1.0, 1.0], (N_DRAW, n_unit)) @ (part - mean) / n_unit * shape
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
    transport = 0.5 * (np.abs(below[:, :-1]) + np.abs(below[:, 1:])) @ width
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
    part = visits / np.maximum(visits.sum(axis=1, keepdims=True), 1)
    mean = part.mean(axis=0)
    error = part.std(axis=0, ddof=1) / np.sqrt(len(part))
    gap = mean - np.append(mass, max(1.0 - mass.sum(), 0.0))
    return Distance(float(0.5 * np.abs(gap).sum()), float(0.5 * np.sqrt(2.0 / np.pi) * error.sum()))
