"""Systems of two wells that the crosscheck is tried on, and a number that is off by a known amount."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from perdure import Quantity

__all__ = ["SLOW_WELL", "TWO_WAYS", "moved"]

# Settles near -1 or 1, by its start, and never changes.
TWO_WAYS: dict[str, Any] = {
    "system": {
        "kind": "noisy-map",
        "state": ["x"],
        "equations": {"x": "x + 0.3*x*(1 - x*x) + 0.05*(e - 0.5)"},
        "draws": {"e": "uniform"},
    },
    "events": {"high": {"when": "x > 1"}},
}
# Changes wells about once in some hundred time units.
SLOW_WELL: dict[str, Any] = {
    "system": {
        "kind": "noisy-flow",
        "state": ["x"],
        "equations": {"x": "x - x**3 + 0.05"},
        "noise": {"x": "0.33"},
    },
    "events": {"right": {"when": "x > 0"}},
}


def moved(number: Quantity, half_widths: float) -> Quantity:
    """The number and its interval moved by so many half-widths of the interval; it has one."""
    assert number.value is not None
    assert number.low is not None
    assert number.high is not None
    shift = 0.5 * half_widths * (number.high - number.low)
    return replace(number, value=number.value + shift, low=number.low + shift, high=number.high + shift)
