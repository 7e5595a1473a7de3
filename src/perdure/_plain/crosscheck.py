"""A crosscheck as plain data."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from perdure._plain.results import finite, finite_list, plain_quantity
from perdure._records import Comparison, Crosscheck, Distance, Growth, MarginalComparison, Predictability

__all__ = ["plain_crosscheck"]


def plain_crosscheck(found: Crosscheck) -> dict[str, Any]:
    """Verdict, comparisons, starts and exponents; of several regimes the first stands outside, all under "regimes"."""
    n_regime = len(found.starts.in_regime) - 1
    regimes = [plain_regime_part(found, regime) for regime in range(n_regime)]
    return {
        "verdict": found.verdict,
        "level": finite(found.level),
        "messages": list(found.messages),
        **(regimes[0] if regimes else {}),
        "starts": {name: finite(v) if isinstance(v, float) else v for name, v in asdict(found.starts).items()}
        | {"in_regime": list(found.starts.in_regime)},
        "cells": plain_distance(found.cells),
        "memory": plain_quantity(found.memory),
        "trajectories": {
            "scheme": found.scheme,
            "step": finite(found.step),
            "duration": finite(found.duration),
            "dropped": finite(found.dropped),
            "steps": int(found.steps),
            "seconds": finite(found.seconds),
        },
        "arbiter": None
        if found.arbiter is None
        else {
            "duration": finite(found.arbiter.duration),
            "pieces": found.arbiter.n_piece,
            "deviation": finite(found.arbiter.deviation),
        },
        "regimes": regimes,
    }


def plain_regime_part(found: Crosscheck, regime: int) -> dict[str, Any]:
    """Comparisons and exponents of one regime."""
    told: dict[str, dict[str, Any]] = {"event": {}, "observable": {}}
    for row in found.comparisons:
        if row.regime == regime:
            told[row.subject].setdefault(row.name, {})[row.number] = plain_comparison(row)
    marginals = {m.component: plain_marginal(m) for m in found.marginals if m.regime == regime}
    part: dict[str, Any] = {"events": told["event"], "observables": told["observable"], "marginals": marginals}
    exponents = [item for item in found.predictability if item.regime == regime]
    return part | (plain_predictability(exponents[0]) if exponents else nothing())


def nothing() -> dict[str, Any]:
    """In place of exponents that were not computed."""
    return dict.fromkeys(("sum_check", "entropy", "dimension", "growth")) | {"lyapunov": [], "hypotheses": []}


def plain_comparison(row: Comparison) -> dict[str, Any]:
    return {
        "density": plain_quantity(row.density),
        "trajectories": plain_quantity(row.trajectories),
        "distance": finite(row.distance),
        "p_value": finite(row.p_value),
        "verdict": row.verdict,
        "reason": row.reason,
        "effective": {kind: finite(size) for kind, size in row.effective.items()},
        "length": finite(row.length),
    }


def plain_distance(distance: Distance) -> dict[str, Any]:
    return {"value": finite(distance.value), "expected": finite(distance.expected)}


def plain_marginal(row: MarginalComparison) -> dict[str, Any]:
    return {
        "verdict": row.verdict,
        "reason": row.reason,
        "p_value": finite(row.p_value),
        "total_variation": plain_distance(row.total_variation),
        "kolmogorov_smirnov": plain_distance(row.kolmogorov_smirnov),
        "wasserstein": plain_distance(row.wasserstein) | {"unit": row.unit},
        "edges": finite_list(row.edges),
        "mass": finite_list(row.mass),
        "error": finite_list(row.error),
    }


def plain_predictability(item: Predictability) -> dict[str, Any]:
    return {
        "lyapunov": [plain_quantity(exponent) for exponent in item.exponents],
        "sum_check": {
            "trajectories": plain_quantity(item.total),
            "density": plain_quantity(item.total_density),
            "distance": finite(item.distance),
            "verdict": item.verdict,
        },
        "entropy": plain_quantity(item.entropy),
        "dimension": plain_quantity(item.dimension),
        "growth": plain_growth(item.growth),
        "hypotheses": list(item.hypotheses),
    }


def plain_growth(growth: Growth) -> dict[str, Any]:
    return {
        "from": finite(growth.begin),
        "to": finite(growth.end),
        "time": plain_quantity(growth.time),
        "early": finite(growth.early),
        "late": finite(growth.late),
        "pairs": growth.n_pair,
        "parted": growth.n_parted,
    }
