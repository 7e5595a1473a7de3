"""Case and plan as JSON text, and back.

A case comes back as data: its expressions carry their text only (no source, no names), a system given by a
function has no equations. To run it again, read its `text` as a case file.
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict, fields
from typing import Any

import numpy as np

from perdure._records import (
    BoxGrid,
    BurstOptions,
    CaseRecord,
    CellOptions,
    Event,
    Expression,
    Floats,
    Integers,
    Observable,
    OutputOptions,
    Parameter,
    Plan,
    System,
)

__all__ = ["case_from_json", "case_to_json", "from_json", "plan_from_json", "plan_to_json", "to_json"]


def to_json(value: Any) -> str:
    """Strict JSON: nan becomes null, infinities the texts "inf" and "-inf", dates their ISO form."""
    return json.dumps(plain(value), ensure_ascii=False, allow_nan=False)


def from_json(text: str) -> Any:
    return json.loads(text)


def plain(value: Any) -> Any:
    """The same value in types that JSON has."""
    if isinstance(value, np.ndarray | np.generic):
        value = value.tolist()
    if isinstance(value, float) and not math.isfinite(value):
        return None if math.isnan(value) else str(value)
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple | set | frozenset):
        return [plain(item) for item in value]
    return value if isinstance(value, str | int | float | None) else str(value)


def number(value: float | str | None) -> float:
    """A number that went through `to_json`."""
    return math.nan if value is None else float(value)


def case_to_json(case: CaseRecord) -> str:
    """All of a case but its text, seed and compiled parts; without `accuracy` where none is asked for."""
    system = case.system
    return to_json(
        {
            "title": case.title,
            **({} if case.accuracy is None else {"accuracy": case.accuracy}),
            "caution": case.caution,
            "source_name": case.source_name,
            "system": {
                "kind": system.kind,
                "state": system.state,
                "units": system.units,
                "time_unit": system.time_unit,
                "parameters": {name: asdict(value) for name, value in system.parameters.items()},
                "equations": [e.text for e in system.equations],
                "noise": [[e.text for e in row] for row in system.noise],
                "draws": system.draws,
            },
            "events": [
                {
                    "name": e.name,
                    "condition": e.condition.text,
                    "until": None if e.until is None else e.until.text,
                }
                for e in case.events
            ],
            "observables": [
                {"name": o.name, "expression": o.expression.text, "unit": o.unit} for o in case.observables
            ],
            "cells": asdict(case.cells),
            "bursts": asdict(case.bursts),
            "output": asdict(case.output),
            "crosscheck": case.crosscheck,
            "study": case.study,
        }
    )


def case_from_json(described: str, *, text: str, seed: str) -> CaseRecord:
    """Case of `case_to_json`, with its verbatim text and its seed (decimal)."""
    data = from_json(described)
    system = data["system"]
    return CaseRecord(
        title=data["title"],
        seed=int(seed),
        accuracy=number(data["accuracy"]) if "accuracy" in data else None,
        caution=data["caution"],
        system=System(
            kind=system["kind"],
            state=tuple(system["state"]),
            units=tuple(system["units"]),
            time_unit=system["time_unit"],
            parameters={
                name: Parameter(number(value["value"]), value["unit"], value["doc"])
                for name, value in system["parameters"].items()
            },
            equations=tuple(bare(e) for e in system["equations"]),
            noise=tuple(tuple(bare(e) for e in row) for row in system["noise"]),
            draws=tuple((name, law) for name, law in system["draws"]),
        ),
        events=tuple(
            Event(e["name"], bare(e["condition"]), None if e["until"] is None else bare(e["until"]))
            for e in data["events"]
        ),
        observables=tuple(Observable(o["name"], bare(o["expression"]), o["unit"]) for o in data["observables"]),
        cells=CellOptions(**known(CellOptions, data["cells"])),
        bursts=BurstOptions(**known(BurstOptions, data["bursts"])),
        output=OutputOptions(**known(OutputOptions, data["output"])),
        crosscheck=data["crosscheck"],
        study=data["study"],
        text=text,
        source_name=data["source_name"],
    )


def bare(text: str) -> Expression:
    return Expression(text, "", frozenset())


def known(record: type[Any], data: Mapping[str, Any]) -> dict[str, Any]:
    """The entries of `data` that are fields of `record`; lists become tuples."""
    names = {field.name for field in fields(record)}
    return {key: tuple(v) if isinstance(v, list) else v for key, v in data.items() if key in names}


def plan_to_json(plan: Plan) -> str:
    """All of a plan but `seed_keys` and `seed_share`."""
    return to_json(
        {
            "bounded": bool(plan.bounded),
            "step": plan.step,
            "n_step": plan.n_step,
            "duration": plan.duration,
            "per_cell": plan.per_cell,
            "n_replicate": plan.n_replicate,
            "stride": plan.stride,
            "scheme": plan.scheme,
            "grid": {
                "lower": plan.grid.lower,
                "width": plan.grid.width,
                "counts": plan.grid.counts,
                "periodic": plan.grid.periodic,
            },
            "axis_lower": plan.axis_lower,
            "axis_upper": plan.axis_upper,
            "found": plan.found,
            "pilot": plan.pilot,
        }
    )


def plan_from_json(described: str, *, seed_keys: Integers, seed_share: Floats) -> Plan:
    """Plan of `plan_to_json`, with its two long arrays."""
    data = from_json(described)
    grid = data["grid"]
    return Plan(
        grid=BoxGrid(
            np.array([number(v) for v in grid["lower"]]),
            np.array([number(v) for v in grid["width"]]),
            np.array(grid["counts"], dtype=np.int64),
            np.array(grid["periodic"], dtype=bool),
        ),
        bounded=data["bounded"],
        seed_keys=seed_keys,
        seed_share=seed_share,
        step=number(data["step"]),
        n_step=data["n_step"],
        per_cell=data["per_cell"],
        n_replicate=data["n_replicate"],
        stride=data["stride"],
        scheme=data["scheme"],
        axis_lower=np.array([number(v) for v in data["axis_lower"]]),
        axis_upper=np.array([number(v) for v in data["axis_upper"]]),
        found=data["found"],
        pilot={name: number(value) for name, value in data["pilot"].items()},
    )
