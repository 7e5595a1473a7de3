"""From a value and its standard error to a 95 percent interval."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from perdure._records import Floats, Quantity

__all__ = ["Shift", "cells_part", "ends", "interval", "parts_needed", "quantile", "upper_bound"]

LEVEL = 0.95
# An earlier change of so many of its standard errors was real; most that one change may be of the one before.
SEEN, SLOWEST = 3.0, 0.75
ROUNDING = 1e-12


def quantile(freedom: float) -> float:
    """Two-sided 95 percent point of Student's t with `freedom` degrees of freedom (at least 1)."""
    from scipy.special import stdtrit

    return float(stdtrit(max(freedom, 1.0), 0.5 + LEVEL / 2))


def upper_bound(effective: float) -> float:
    """Largest probability that still gives no hit in `effective` bursts with chance 5 percent: 1 - 0.05^(1/n)."""
    return -math.expm1(math.log(1.0 - LEVEL) / max(effective, 1.0))


def cells_part(ladder: tuple[float, float, float]) -> float:
    """Standard error from cell size, from a number at cells of width h, 2h and 4h.

    With differences d1 (h to 2h) and d2 (2h to 4h) that shrink by the ratio q = d1/d2, what remains beyond h is the
    geometric tail d1 q/(1 - q). The ratio is kept between 1/2, first order, and 3/4, and the tail is not let fall
    below a quarter of d2, since one small difference may be chance. Half of it counts as standard error.
    """
    h, h2, h4 = ladder
    if not all(math.isfinite(number) for number in ladder):
        return 0.0
    d1, d2 = abs(h - h2), abs(h2 - h4)
    ratio = min(max(d1 / d2 if d2 > 0.0 else 1.0, 0.5), 0.75)
    return float(0.5 * max(d1 * ratio / (1.0 - ratio), 0.25 * d2))


def interval(
    value: float, error: float, freedom: float, unit: str, kind: str, others: Mapping[str, float] | None = None
) -> Quantity:
    """Quantity with a t interval on the scale on which the error is closest to normal.

    `kind` is "share" (logit scale, stays within 0 and 1), "positive" (log scale) or "real". The first-order
    error is carried to that scale by its derivative. `others` are standard errors of the other parts of the budget
    ("cells", "step"); the sampling error and they are added in quadrature.
    """
    if not math.isfinite(value):
        return Quantity(None, None, None, {}, unit, "not finite on the cells of the long run")
    parts = {"sampling": error, **(others or {})}
    shifted = math.hypot(*(quantile(1e9) * part for part in (others or {}).values()), 0.0)
    low, high = ends(value, math.hypot(quantile(freedom) * error, shifted), kind)
    if kind != "real":
        # a bias adds, it does not multiply: on the scale of small values it would not reach far enough down
        low = min(low, max(value - shifted, 0.0))
    return Quantity(value, low, high, parts, unit)


def ends(value: float, half: float, kind: str) -> tuple[float, float]:
    """Ends of an interval of half-width `half` to first order, on the scale of `interval`."""
    # long sums are rounded: a number without any error is still not exact
    half = max(half, ROUNDING * abs(value))
    if kind == "share" and 0.0 < value < 1.0:
        half /= value * (1.0 - value)
        odds = math.log(value / (1.0 - value))
        return 1.0 / (1.0 + math.exp(min(half - odds, 700.0))), 1.0 / (1.0 + math.exp(-half - odds))
    if kind == "positive" and value > 0.0:
        factor = math.exp(min(half / value, 700.0))
        return value / factor, value * factor
    return value - half, value + half


def parts_needed(number: Quantity, accuracy: float) -> float:
    """Sweeps that a number seems to need, over those so far, for a half-width of `accuracy` times its value.

    What sweeps reduce is the sampling error, as their square root, and the drift in the part of the cells, in
    proportion; both are reckoned with the square root. Infinite where the part of the time step alone is too large.
    """
    if number.value is None or number.low is None or number.high is None:
        return math.inf
    half, goal = 0.5 * (number.high - number.low), 0.95 * accuracy * abs(number.value)
    fixed = quantile(1e9) * number.parts.get("step", 0.0)
    if fixed >= 0.9 * goal:
        return math.inf
    return max(half**2 - fixed**2, 0.0) / (goal**2 - fixed**2)


@dataclass(frozen=True)
class Shift:
    """What a change of method does to the averages of a regime.

    Attributes
    ----------
    change : ndarray, shape (n_replicate, n_sum)
        Change that each replicate finds.
    factor : float
        How much of the change is left in the averages, as standard error.
    earlier : ndarray, shape (n_replicate, n_sum), or None
        The change before this one, for changes that go on.
    """

    change: Floats
    factor: float
    earlier: Floats | None = None

    def part(self, mix: Floats) -> Floats:
        """Standard error of linear mixes (n_sum, n_number) of the averages, shape (n_number,).

        The mean square change less what scatter between the replicates alone would give. If the earlier change was
        beyond chance, the ratio q of the two sizes what is still to come, q/(1 - q) of the change: with memory that
        fades like a power of time, blocks that double shrink by a fixed ratio. Then half the scatter counts at least.
        """
        moved, scatter = mean_and_scatter(self.change @ mix)
        size = np.sqrt(np.maximum(moved**2 - scatter, 0.0))
        if self.earlier is None:
            return np.asarray(self.factor * size)
        before, noise = mean_and_scatter(self.earlier @ mix)
        slow = before**2 > SEEN**2 * noise
        ratio = np.clip(np.abs(moved) / np.where(slow, np.abs(before), np.inf), 0.0, SLOWEST)
        size = np.where(slow, np.maximum(size, 0.5 * np.sqrt(scatter)), size)
        return np.asarray((self.factor + ratio / (1.0 - ratio)) * size)


def mean_and_scatter(values: Floats) -> tuple[Floats, Floats]:
    """Mean over replicates (n_replicate, n) and its variance."""
    return values.mean(axis=0), values.var(axis=0, ddof=1) / len(values)
