"""Ornstein-Uhlenbeck process."""

from __future__ import annotations

from math import erf, sqrt

from perdure.systems.base import Fact, NamedSystem

__all__ = ["ORNSTEIN_UHLENBECK"]

THETA, MU, SIGMA = 1.5, 0.4, 0.9
VARIANCE = SIGMA**2 / (2.0 * THETA)
GAUSSIAN = "Gaussian law of variance sigma^2/(2 theta): G. E. Uhlenbeck and L. S. Ornstein, Phys. Rev. 36 (1930) 823"


def below(x: float) -> float:
    """Mass of the law below x."""
    return 0.5 * (1.0 + erf((x - MU) / sqrt(2.0 * VARIANCE)))


ORNSTEIN_UHLENBECK = NamedSystem(
    name="ornstein_uhlenbeck",
    tables={
        "title": "Ornstein-Uhlenbeck process",
        "system": {
            "kind": "noisy-flow",
            "state": ["x"],
            "parameters": {"theta": THETA, "mu": MU, "sigma": SIGMA},
            "equations": {"x": "-theta*(x - mu)"},
            "noise": {"x": "sigma"},
        },
        "events": {"high": {"when": "x > 1"}, "middle": {"when": "0 < x < 0.5"}},
        "observables": {"x": "x"},
    },
    facts=(
        Fact("share high", 1.0 - below(1.0), 0.0, GAUSSIAN),
        Fact("share middle", below(0.5) - below(0.0), 0.0, GAUSSIAN),
        Fact("mean x", MU, 0.0, GAUSSIAN),
        Fact("variance x", VARIANCE, 0.0, GAUSSIAN),
        Fact("memory time", 1.0 / THETA, 0.0, "the correlation decays as exp(-theta t)"),
    ),
)
