"""From a value and its standard error to a 95 percent interval."""

from __future__ import annotations

import math

from perdure._records import Quantity

__all__ = ["cells_part", "interval", "quantile", "upper_bound"]

LEVEL = 0.95


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


def interval(value: float, error: float, freedom: float, unit: str, kind: str, cells: float | None = None) -> Quantity:
    """Quantity with a t interval on the scale on which the error is closest to normal.

    `kind` is "share" (logit scale, stays within 0 and 1), "positive" (log scale) or "real". The first-order
    error is carried to that scale by its derivative. `cells` is the part of the error from cell size, None where it is
    not known; the two are added in quadrature.
    """
    if not math.isfinite(value):
        return Quantity(None, None, None, {}, unit, "not finite on the cells of the long run")
    parts = {"sampling": error} if cells is None else {"sampling": error, "cells": cells}
    t = math.hypot(quantile(freedom) * error, quantile(1e9) * (cells or 0.0))
    if kind == "share" and 0.0 < value < 1.0:
        half = t / (value * (1.0 - value))
        odds = math.log(value / (1.0 - value))
        low, high = 1.0 / (1.0 + math.exp(min(half - odds, 700.0))), 1.0 / (1.0 + math.exp(-half - odds))
    elif kind == "positive" and value > 0.0:
        factor = math.exp(min(t / value, 700.0))
        low, high = value / factor, value * factor
    else:
        low, high = value - t, value + t
    return Quantity(value, low, high, parts, unit)
