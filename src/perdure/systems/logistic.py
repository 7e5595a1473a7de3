"""Logistic map at r = 4."""

from __future__ import annotations

from math import asin, log, pi, sqrt

from perdure.systems.base import Fact, NamedSystem

__all__ = ["LOGISTIC"]

ARCSINE = "law 1/(pi sqrt(x (1 - x))): S. M. Ulam and J. von Neumann, Bull. Amer. Math. Soc. 53 (1947) 1120"


def mass(low: float, high: float) -> float:
    """Mass of the arcsine law between two points of [0, 1]."""
    return 2.0 / pi * (asin(sqrt(high)) - asin(sqrt(low)))


LOGISTIC = NamedSystem(
    name="logistic",
    tables={
        "title": "Logistic map at r = 4",
        "system": {
            "kind": "map",
            "state": ["x"],
            "parameters": {"r": 4.0},
            "equations": {"x": "r*x*(1 - x)"},
        },
        "events": {"low": {"when": "x <= 0.1"}, "middle": {"when": "0.45 <= x <= 0.55"}, "high": {"when": "x >= 0.9"}},
        "observables": {"x": "x"},
    },
    facts=(
        Fact("share low", mass(0.0, 0.1), 0.0, ARCSINE),
        Fact("share middle", mass(0.45, 0.55), 0.0, ARCSINE),
        Fact("share high", mass(0.9, 1.0), 0.0, ARCSINE),
        Fact(
            "entry rate low",
            mass(0.0, 0.1) / 2.0,
            0.0,
            "half the share: conjugate to the tent map by x = sin^2(pi t/2)",
        ),
        Fact("mean x", 0.5, 0.0, ARCSINE),
        Fact("variance x", 0.125, 0.0, ARCSINE),
        Fact("Lyapunov exponent", log(2.0), 0.0, "that of the tent map, to which it is conjugate"),
    ),
)
