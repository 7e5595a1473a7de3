"""Ricker's stock and recruitment map with noise, in the logarithm of the stock."""

from __future__ import annotations

from perdure.systems.base import Fact, NamedSystem

__all__ = ["RICKER"]

NYSTROM = "Nystrom solution of the one-step kernel on Gauss-Legendre panels, two panelings agree to 1e-12"

RICKER = NamedSystem(
    name="ricker",
    tables={
        "title": "Noisy stock and recruitment (W. E. Ricker, J. Fish. Res. Board Can. 11 (1954) 559-623), y = ln stock",
        "system": {
            "kind": "noisy-map",
            "state": ["y"],
            "parameters": {"r": 2.9, "s": 0.15},
            "equations": {"y": "y + r*(1 - exp(y)) + s*w"},
            "draws": {"w": "normal"},
        },
        "events": {"poor": {"when": "exp(y) < 0.2"}, "rich": {"when": "exp(y) > 1.5"}},
        "observables": {"stock": "exp(y)", "y": "y"},
    },
    facts=(
        Fact("share poor", 0.244113941898, 1e-12, NYSTROM),
        Fact("entry rate poor", 0.23733009187507, 1e-12, NYSTROM),
        Fact("share rich", 0.309430865325877, 1e-12, NYSTROM),
        Fact("mean stock", 1.0, 0.0, "the mean growth r (1 - stock) of y is zero in the long run"),
        Fact("mean y", -0.6169075356816, 1e-12, NYSTROM),
        Fact("Lyapunov exponent", 0.289973801415, 1e-11, NYSTROM),
    ),
)
