"""``perdure check``: is the case right, and what would a run do and cost?"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from perdure._cli.invocation import verbose_option
from perdure._cli.output import json_text, print_text
from perdure._cli.rounding import seconds_text

if TYPE_CHECKING:
    from perdure._case import Case
    from perdure._records import Plan

SCHEMA = 1


@click.command(short_help="Check a case; print what a run would do and cost.")
@click.argument("case", type=click.Path(exists=True, dir_okay=False, readable=True, path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the plan as one JSON object.")
@verbose_option
def check(case: Path, as_json: bool, verbose: bool) -> int:
    """Check CASE, a TOML file, and print the plan of a run: what the case gives, and what was found
    for the rest.

    Nothing is estimated or saved. Exit status 2 with every mistake on standard error.
    """
    from perdure._case import load_case

    checked = load_case(case)
    # Only now: the engine takes a second to load, and the mistakes of a case should not wait for it.
    from perdure._pipeline import forecast_cost, plan

    made = plan(checked)
    cost = forecast_cost(checked, made)
    print_text(json_text(plan_dict(checked, made, cost)) if as_json else plan_text(checked, made, cost))
    return 0


def plan_dict(case: Case, plan: Plan, cost: Mapping[str, float]) -> dict[str, Any]:
    """The plan as plain data, for ``--json``."""
    system, grid = case.system, plan.grid
    axes = [
        {
            "name": name,
            "unit": unit,
            "lower": float(lower),
            "upper": float(upper),
            "count": max(1, round(float((upper - lower) / width))),
            "width": float(width),
            "periodic": bool(periodic),
        }
        # the lattice itself goes on beyond the ends of an open axis
        for name, unit, lower, upper, width, periodic in zip(
            system.state, system.units, plan.axis_lower, plan.axis_upper, grid.width, grid.periodic, strict=True
        )
    ]
    return {
        "title": case.title,
        "kind": system.kind,
        "time_unit": system.time_unit,
        "dimension": len(axes),
        "axes": axes,
        "bounded": plan.bounded,
        "pilot_cells": len(plan.seed_keys),
        "scheme": plan.scheme,
        "step": plan.step,
        "steps_per_burst": plan.n_step,
        "burst_length": plan.duration,
        "bursts_per_cell": plan.per_cell,
        "replicates": plan.n_replicate,
        "found": dict(plan.found),
        "expected": {name: float(number) for name, number in cost.items()},
        "schema": SCHEMA,
    }


def plan_text(case: Case, plan: Plan, cost: Mapping[str, float]) -> str:
    """The plan for a reader: one line a fact, then what the pilot found and why."""
    facts = plan_dict(case, plan, cost)
    is_flow = case.system.is_flow
    rows = [("system", f"{facts['kind']}, dimension {facts['dimension']}")]
    rows += [(f"axis {axis['name']}", _axis_text(axis)) for axis in facts["axes"]]
    rows.append(("domain", _domain_text(plan)))
    rows.append(("pilot cells", f"{facts['pilot_cells']}"))
    if is_flow:
        rows.append(("burst length", f"{plan.duration:.6g} {facts['time_unit']} ({plan.n_step} steps)"))
        rows.append(("time step", f"{plan.step:.6g} {facts['time_unit']}"))
    else:
        rows.append(("burst length", f"{plan.n_step} steps"))
    rows.append(("scheme", plan.scheme))
    rows.append(("bursts per cell", f"{plan.per_cell}"))
    rows.append(("replicates", f"{plan.n_replicate}"))
    rows += [
        ("expected cells", f"{cost['cells']:.3g}"),
        ("expected bursts", f"{cost['bursts']:.3g}"),
        ("expected steps", f"{cost['steps']:.3g}"),
        ("expected memory", _memory_text(cost["memory_bytes"])),
        ("expected time", seconds_text(cost["seconds"])),
    ]
    width = max(len(name) for name, _ in rows)
    lines = [case.title, *(f"  {name.ljust(width)}  {text}" for name, text in rows)]
    if plan.found:
        lines += ["", "left open by the case, and found so:"]
        lines += [f"  {name}: {reason}" for name, reason in plan.found.items()]
    else:
        lines += ["", "the case gives all of this"]
    return "\n".join(lines)


def _axis_text(axis: Mapping[str, Any]) -> str:
    unit = "" if axis["unit"] == "1" else f" {axis['unit']}"
    boxes = "box" if axis["count"] == 1 else "boxes"
    ends = f"{axis['lower']:.6g} to {axis['upper']:.6g}{unit}"
    text = f"{ends}, {axis['count']} {boxes} of width {axis['width']:.4g}{unit}"
    return text + (", periodic" if axis["periodic"] else "")


def _domain_text(plan: Plan) -> str:
    if plan.bounded:
        return "bounded: what leaves it is counted as outside"
    return "open: cells are added beyond these ends as far as bursts go"


def _memory_text(size: float) -> str:
    return f"{size / 1e6:.0f} MB" if size < 1e9 else f"{size / 1e9:.1f} GB"
