"""An invented crosscheck with everything that a density file can hold of one."""

from __future__ import annotations

import numpy as np

from perdure._records import (
    Arbiter,
    Comparison,
    Crosscheck,
    Distance,
    Growth,
    MarginalComparison,
    Predictability,
    Quantity,
    Starts,
)

__all__ = ["make_crosscheck"]


def make_crosscheck(verdict: str = "agrees", *, n_regime: int = 1, seed: int = 11) -> Crosscheck:
    """One with events, observables, marginals and exponents for each regime; some numbers are missing."""
    rng = np.random.default_rng(seed)
    regimes = range(n_regime)
    return Crosscheck(
        verdict=verdict,
        level=0.05,
        messages=("invented: « ρ »",) if verdict != "agrees" else (),
        scheme="three-eighths",
        step=0.004,
        duration=4096.0,
        dropped=1024.0,
        steps=131_072_000,
        memory=Quantity(7.5, None, None, {}, "days") if n_regime == 1 else none("not converged", "days"),
        comparisons=tuple(row for r in regimes for row in comparisons(r, verdict)),
        marginals=tuple(marginal(r, name, rng) for r in regimes for name in ("level", "mass")),
        cells=Distance(0.02, 0.018),
        starts=Starts(
            256, 3, 128, 1.0, 0.5, True, "high, share", 1.25, 0.2, (*[100] * n_regime, 28), 0, 0.001, "alike"
        ),
        predictability=tuple(predictability(r) for r in regimes),
        arbiter=Arbiter(0.5, 16, 1.5e-6) if n_regime == 1 else None,
        seconds=2.5,
        command="perdure crosscheck pegel.h5",
        created="2024-05-06T07:08:10+00:00",
    )


def none(reason: str, unit: str = "1") -> Quantity:
    return Quantity(None, None, None, {}, unit, reason)


def comparisons(regime: int, verdict: str) -> tuple[Comparison, ...]:
    """A share with the verdict, an entry rate without a value, a mean that is too short to tell."""
    return (
        Comparison(
            regime=regime,
            subject="event",
            name="coût élevé",
            number="share",
            density=Quantity(0.25, 0.24, 0.26, {"sampling": 0.004, "cells": 0.001}),
            trajectories=Quantity(0.255, 0.25, 0.26, {"sampling": 0.0025}),
            distance=1.1,
            p_value=0.3,
            verdict=verdict,
            reason="" if verdict == "agrees" else "a reason",
            effective={"batch means": 2.5e5, "matrix": 3e5},
        ),
        Comparison(
            regime=regime,
            subject="event",
            name="coût élevé",
            number="entry_rate",
            density=Quantity(None, 0.0, 1e-5, {}, "1/days", "never seen: upper bound"),
            trajectories=Quantity(0.0, 0.0, 0.0, {"sampling": 0.0}, "1/days"),
            distance=0.0,
            p_value=1.0,
            verdict="not compared",
            reason="one of the two has no value",
        ),
        Comparison(
            regime=regime,
            subject="observable",
            name="mean level",
            number="mean",
            density=Quantity(1.5, 1.4, 1.6, {"sampling": 0.04}, "m"),
            trajectories=Quantity(1.4, 1.0, 1.8, {"sampling": 0.2}, "m"),
            distance=None,
            p_value=None,
            verdict="too short to tell",
            reason="the trajectories' error is 5 times that of the density",
            effective={"batch means": 80.0},
            length=102_400.0,
        ),
    )


def marginal(regime: int, name: str, rng: np.random.Generator) -> MarginalComparison:
    mass = rng.dirichlet(np.ones(8))
    return MarginalComparison(
        regime=regime,
        component=name,
        edges=np.linspace(-2.0, 3.0, 9),
        mass=mass,
        error=0.01 * mass,
        total_variation=Distance(0.004, 0.003),
        kolmogorov_smirnov=Distance(0.002, 0.0015),
        wasserstein=Distance(0.01, 0.012),
        p_value=0.4 if name == "level" else None,
        verdict="agrees",
        reason="",
        unit="m",
    )


def predictability(regime: int) -> Predictability:
    unit = "1/days"
    return Predictability(
        regime=regime,
        exponents=(
            Quantity(0.5, 0.49, 0.51, {"sampling": 0.005}, unit),
            Quantity(0.0, -0.01, 0.01, {"sampling": 0.005}, unit),
            none("lost in rounding", unit),
        ),
        total=none("lost in rounding", unit),
        total_density=Quantity(-3.0, -3.1, -2.9, {"sampling": 0.04, "cells": 0.01}, unit),
        distance=None,
        verdict="not compared",
        entropy=Quantity(0.5, 0.49, 0.51, {"sampling": 0.005}, unit),
        dimension=none("lost in rounding"),
        growth=Growth(1e-8, 0.1, Quantity(30.0, 29.0, 31.0, {"sampling": 0.5}, "days"), 25.0, None, 64, 60),
        hypotheses=("what has to hold",),
    )
