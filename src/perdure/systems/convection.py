"""Convection in three variables."""

from __future__ import annotations

from perdure.systems.base import Fact, NamedSystem

__all__ = ["CONVECTION"]

LONG_RUNS = (
    "long trajectories of an independent program: classical Runge-Kutta steps 0.005 and 0.0025, 16 starts, total time "
    "2.4e7; standard error of batch means or between starts, whichever is larger"
)

CONVECTION = NamedSystem(
    name="convection",
    tables={
        "title": "Convection in three variables (E. N. Lorenz, J. Atmos. Sci. 20 (1963) 130-141)",
        "system": {
            "kind": "flow",
            "state": ["x", "y", "z"],
            "parameters": {"sigma": 10.0, "rho": 28.0, "beta": 8.0 / 3.0},
            "equations": {"x": "sigma*(y - x)", "y": "x*(rho - z) - y", "z": "x*y - beta*z"},
        },
        "events": {"right": {"when": "x > 10"}, "left": {"when": "x < -10"}, "top": {"when": "z > 40"}},
        "observables": {"z": "z", "x2": "x**2"},
    },
    facts=(
        Fact("share right", 0.13220908921263874, 3.0200380587063403e-05, LONG_RUNS),
        Fact("share left", 0.13217664879154853, 3.0214272381711952e-05, LONG_RUNS),
        Fact("share top", 0.021653348316541723, 2.4977730423045696e-06, LONG_RUNS),
        Fact("mean z", 23.549825245947158, 0.00017245142779912537, LONG_RUNS),
        Fact("mean x2", 62.79953802009661, 0.00045975556114436904, LONG_RUNS),
        Fact("largest Lyapunov exponent", 0.9056, 1e-4, "J. C. Sprott, Chaos and Time-Series Analysis, Oxford 2003"),
    ),
)
