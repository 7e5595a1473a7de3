"""Noisy motion in a symmetric double well."""

from __future__ import annotations

from perdure.systems.base import Fact, NamedSystem

__all__ = ["DOUBLE_WELL"]

BOLTZMANN = "law exp(-2 V/sigma^2) with V = x^4/4 - x^2/2, normalised by quadrature to 30 digits"

DOUBLE_WELL = NamedSystem(
    name="double_well",
    tables={
        "title": "Overdamped motion in a double well with noise",
        "system": {
            "kind": "noisy-flow",
            "state": ["x"],
            "parameters": {"sigma": 0.5},
            "equations": {"x": "x - x**3"},
            "noise": {"x": "sigma"},
        },
        "events": {"right": {"when": "x > 1"}, "barrier": {"when": "-0.3 < x < 0.3"}},
        "observables": {"x": "x", "x2": "x**2"},
    },
    facts=(
        Fact("share right", 0.1907464560254666, 0.0, BOLTZMANN),
        Fact("share barrier", 0.06503224550532602, 0.0, BOLTZMANN),
        Fact("mean x", 0.0, 0.0, "symmetry"),
        Fact("mean x2", 0.8521361521783343, 0.0, BOLTZMANN),
        Fact("mean passage time from -1 to 1", 41.03428026873671, 0.0, "nested quadrature of the law to 30 digits"),
    ),
)
