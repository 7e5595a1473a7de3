"""The quadratic map of the plane."""

from __future__ import annotations

from math import log

from perdure.systems.base import Fact, NamedSystem

__all__ = ["HENON"]

LONG_RUNS = (
    "long trajectories of an independent program: 16 starts, 2.8e9 iterates; standard error of batch means or between "
    "starts, whichever is larger"
)

HENON = NamedSystem(
    name="henon",
    tables={
        "title": "Quadratic map of the plane (M. Henon, Commun. Math. Phys. 50 (1976) 69-77)",
        "system": {
            "kind": "map",
            "state": ["x", "y"],
            "parameters": {"a": 1.4, "b": 0.3},
            "equations": {"x": "1 - a*x**2 + y", "y": "b*x"},
        },
        "events": {"right": {"when": "x > 0.9"}},
        "observables": {"x": "x", "y": "y"},
    },
    facts=(
        Fact("share right", 0.22956075803696038, 1.3297162636715034e-05, LONG_RUNS),
        Fact("mean x", 0.25692301641154414, 7.64947858848254e-06, LONG_RUNS),
        Fact("mean y", 0.07707690464207241, 2.294961239214215e-06, LONG_RUNS),
        Fact("sum of the Lyapunov exponents", log(0.3), 0.0, "the logarithm of the Jacobian determinant, -b, in size"),
    ),
)
