"""From a value and its standard error to a 95 percent interval."""

from __future__ import annotations

import math

from perdure._records import Quantity

__all__ = ["interval", "quantile", "upper_bound"]

LEVEL = 0.95


def quantile(freedom: float) -> float:
    """Two-sided 95 percent point of Student's t with `freedom` degrees of freedom (at least 1)."""
    from scipy.special import stdtrit

    return float(stdtrit(max(freedom, 1.0), 0.5 + LEVEL / 2))


def upper_bound(effective: float) -> float:
    """Largest probability that still gives no hit in `effective` bursts with chance 5 percent: 1 - 0.05^(1/n)."""
    return -math.expm1(math.log(1.0 - LEVEL) / max(effective, 1.0))


def interval(value: float, error: float, freedom: float, unit: str, kind: str) -> Quantity:
    """Quantity with a t interval on the scale on which the error is closest to normal.

    `kind` is "share" (logit scale, stays within 0 and 1), "positive" (log scale) or "real". The first-order
    error is carried to that scale by its derivative.
    """
    if not math.isfinite(value):
        return Quantity(None, None, None, {}, unit, "not finite on the cells of the long run")
    t = quantile(freedom) * error
    if kind == "share" and 0.0 < value < 1.0:
        half = t / (value * (1.0 - value))
        odds = math.log(value / (1.0 - value))
        low, high = 1.0 / (1.0 + math.exp(min(half - odds, 700.0))), 1.0 / (1.0 + math.exp(-half - odds))
    elif kind == "positive" and value > 0.0:
        factor = math.exp(min(t / value, 700.0))
        low, high = value / factor, value * factor
    else:
        low, high = value - t, value + t
    return Quantity(value, low, high, {"sampling": error}, unit)
