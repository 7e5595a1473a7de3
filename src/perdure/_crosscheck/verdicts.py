"""From two numbers with their errors to a verdict, with the number of comparisons allowed for.

A number agrees if its difference is no larger than chance allows and the trajectories are as sharp as the density:
their standard error is not above that of the density, or that of an interval of a thousandth of the number. It
disagrees if the difference is too large; what is neither is too short to tell. Chances are allowed for by S. Holm
(Scand. J. Statist. 6 (1979) 65-70): the level given is the chance of any "disagrees" where both sides are right.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from perdure._crosscheck.numbers import Found, Named
from perdure._records import AGREES, DISAGREES, NONE, TOO_SHORT, Quantity
from perdure._statistics import quantile

__all__ = ["FINE", "Judged", "Weighed", "holm", "judged", "two_sided", "uneven", "weighed"]

# Replicates behind an interval of a density, less one.
DENSITY_FREEDOM = 7.0
# Half-width over value below which nobody asks for more, and the standard error that goes with it.
FINE = 1e-3
# Part of a number that is no difference.
SMALL = 1e-6
# Batches with any time inside, below which the normal law does not hold for the trajectories.
FEWEST_HITS = 25
# Starts differ if the variance between them is so many times that along them, and beyond chance.
UNEVEN = 2.0
# Part of the level at which starts that are alike are taken for uneven.
SELDOM = 0.1


@dataclass(frozen=True)
class Weighed:
    """A difference and how likely chance is.

    Attributes
    ----------
    distance : float or None
        Over its standard error.
    p_value : float or None
    own, other : float
        Standard errors of the trajectories and of the density.
    wanted : float
        Standard error of the trajectories that is sharp enough.
    """

    distance: float | None
    p_value: float | None
    own: float
    other: float
    wanted: float


@dataclass(frozen=True)
class Judged:
    """A number with its verdict; `longer` is the factor by which trajectories would have to be longer."""

    named: Named
    weighed: Weighed
    verdict: str
    reason: str
    longer: float | None


def two_sided(distance: float, freedom: float) -> float:
    """Chance that Student's t is further from 0 than `distance`."""
    from scipy.special import stdtr

    return 2.0 * float(stdtr(freedom, -abs(distance)))


def density_error(density: Quantity, value: float) -> float:
    """Standard error of a density's number, on the side of `value`, from its 95 percent interval."""
    centre = density.value or 0.0
    end = density.high if value > centre else density.low
    if end is None:
        return 0.0
    return abs(end - centre) / quantile(DENSITY_FREEDOM)


def weighed(named: Named, expected_hits: float) -> Weighed:
    """Difference of a number from that of the density.

    Parameters
    ----------
    expected_hits : float
        Visits that the density lets expect, for numbers of events.
    """
    density, found = named.density, named.found
    value = found.quantity.value
    if value is None or density.high is None:
        return Weighed(None, None, 0.0, 0.0, 0.0)
    centre = density.value or 0.0
    own, other = found.quantity.error or 0.0, density_error(density, value)
    if named.subject == "event" and found.hits < FEWEST_HITS:
        # few visits: the spread between starts says little, a count has a relative error of one over its root
        count = max(found.hits, expected_hits, 1.0)
        own = max(own, max(value, centre) / math.sqrt(count))
    scale = abs(centre) if found.spread is None or named.subject == "event" else max(abs(centre), found.spread)
    wanted = max(other, FINE * scale / quantile(1e9))
    # what is left of the way in, and rounding, keep two right numbers apart that have no error at all
    error = math.hypot(own, other, SMALL * found.size)
    if error == 0.0:
        return Weighed(0.0, 1.0, own, other, wanted)
    # The smaller of the two degrees of freedom never finds too much (M. R. Mickey and M. B. Brown, Ann. Math. Statist.
    # 37 (1966) 639-642). Welch's would: of many numbers some have a small error from their few replicates by chance.
    freedom = min(found.freedom, DENSITY_FREEDOM)
    distance = (value - centre) / error
    return Weighed(distance, two_sided(distance, freedom), own, other, wanted)


def holm(p_values: Sequence[float | None], level: float) -> list[bool]:
    """Which of the hypotheses are rejected; None is none."""
    order = sorted((p, k) for k, p in enumerate(p_values) if p is not None)
    rejected = [False] * len(p_values)
    for at, (p, k) in enumerate(order):
        if p > level / (len(order) - at):
            break
        rejected[k] = True
    return rejected


def uneven(found: Found, chance: float) -> bool:
    """Whether a number differs between starts, or drifts, beyond a tenth of the chance given."""
    differs = found.ratio > UNEVEN and found.ratio_p < SELDOM * chance
    return found.hits >= 4 * FEWEST_HITS and (differs or found.trend_p < SELDOM * chance)


def judged(named: Named, weight: Weighed, rejected: bool, is_uneven: bool) -> Judged:
    """Verdict on one number."""
    value, found = weight, named.found
    if value.p_value is None:
        return Judged(named, weight, NONE, "one of the two has no value", None)
    longer = max((value.own / value.wanted) ** 2, 1.0) if value.wanted > 0.0 else None
    if is_uneven:
        return Judged(named, weight, TOO_SHORT, "starts differ, or drift: see what is said of the starts", longer)
    if rejected:
        reason = f"the difference is {abs(value.distance or 0.0):.1f} of its standard errors"
        return Judged(named, weight, DISAGREES, reason, None)
    if named.density.value is None and found.hits == 0:
        return Judged(named, weight, AGREES, "met by neither side", None)
    if named.subject == "event" and found.hits < FEWEST_HITS:
        longer = max(longer or 1.0, FEWEST_HITS / max(found.hits, 0.25))
        return Judged(named, weight, TOO_SHORT, f"the event was met in {found.hits} batches only", longer)
    if value.own > value.wanted * 1.05:
        times = value.own / value.wanted if value.wanted > 0.0 else np.inf
        reason = f"the trajectories' error is {times:.2g} times that of the density"
        return Judged(named, weight, TOO_SHORT, reason, longer)
    return Judged(named, weight, AGREES, "", None)
