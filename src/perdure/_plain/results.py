"""Numbers, regimes, stages and targets as plain data."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from perdure._records import EventResult, Floats, Marginal, ObservableResult, Quantity, Stage, Target

__all__ = ["finite", "finite_list", "plain_quantity", "plain_regime", "plain_stage", "plain_target"]


def plain_quantity(quantity: Quantity) -> dict[str, Any]:
    """Value, 95 percent interval, parts of the error, unit, and the reason where there is one."""
    entries: dict[str, Any] = {
        "value": finite(quantity.value),
        "low": finite(quantity.low),
        "high": finite(quantity.high),
        "parts": {part: finite(error) for part, error in quantity.parts.items()},
        "unit": quantity.unit,
    }
    if quantity.reason:
        entries["reason"] = quantity.reason
    return entries


def plain_regime(
    weight: Quantity,
    events: Mapping[str, EventResult],
    observables: Mapping[str, ObservableResult],
    marginals: Mapping[str, Marginal],
) -> dict[str, Any]:
    """One regime: weight, events, observables, marginals, modes (none in this version)."""
    return {
        "weight": plain_quantity(weight),
        "events": {
            name: {
                "share": plain_quantity(event.share),
                "entry_rate": plain_quantity(event.entry_rate),
                "return_period": plain_quantity(event.return_period),
                "mean_spell": plain_quantity(event.mean_spell),
            }
            for name, event in events.items()
        },
        "observables": {
            name: {"mean": plain_quantity(observable.mean), "variance": plain_quantity(observable.variance)}
            for name, observable in observables.items()
        },
        "marginals": {
            name: {
                "edges": finite_list(marginal.edges),
                "mass": finite_list(marginal.mass),
                "low": optional_list(marginal.low),
                "high": optional_list(marginal.high),
                "error": finite_list(marginal.error),
                "parts": {part: finite_list(error) for part, error in marginal.parts.items()},
                "below": finite(marginal.below),
                "above": finite(marginal.above),
                "unit": marginal.unit,
            }
            for name, marginal in marginals.items()
        },
        "modes": [],
    }


def plain_stage(stage: Stage) -> dict[str, Any]:
    """Where bursts went: one stage of the run."""
    counted = {"sweeps": int(stage.sweeps), "bursts": int(stage.bursts), "steps": int(stage.steps)}
    return {"stage": stage.name, **counted, "seconds": finite(stage.seconds)}


def plain_target(target: Target) -> dict[str, Any]:
    """An accuracy that was asked for, what was reached, and what limits it where it was not met."""
    return {
        "event": target.event,
        "number": target.number,
        "wanted": finite(target.wanted),
        "reached": finite(target.reached),
        "met": bool(target.met),
        "reason": target.reason,
    }


def finite(value: float | None) -> float | None:
    """A Python float, or None for what JSON cannot hold."""
    if value is None or not math.isfinite(value):
        return None
    return float(value)


def finite_list(values: ArrayLike) -> list[float | None]:
    return [finite(value) for value in np.asarray(values, dtype=float).tolist()]


def optional_list(values: Floats | None) -> list[float | None] | None:
    """None where the numbers were not worked out."""
    return None if values is None else finite_list(values)
