"""Tables ``[cells]``, ``[bursts]``, ``[output]``, ``[crosscheck]`` and ``[study]``."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from perdure._case import grammar
from perdure._case.checking import by_component, check_table, sub_table
from perdure._case.positions import Path
from perdure._case.problems import Problems, listed, show
from perdure._case.system import Declared
from perdure._case.tables import BurstsTable, CellsTable, CrosscheckTable, OutputTable
from perdure._records import BurstOptions, CellOptions, OutputOptions

SEEDS = ("uniform", "sobol")
SCHEMES = {"flow": ("rk4",), "noisy-flow": ("euler-maruyama", "weak2"), "map": (), "noisy-map": ()}
MOST_CELLS = 2**62  # keys of cells are 64-bit whole numbers


def read_cells(problems: Problems, tables: Mapping[str, Any], declared: Declared) -> CellOptions:
    """Table ``[cells]``; defaults after a mistake."""
    found_before = len(problems)
    raw = dict(sub_table(problems, tables, "cells") or {})
    for key in ("lower", "upper", "counts"):
        raw[key] = by_component(problems, raw.get(key), declared.state, ("cells", key))
        if raw[key] is None:
            del raw[key]
    table = check_table(problems, CellsTable, raw, ("cells",))
    if table.method == "kmeans":
        problems.add(
            ("cells", "method"),
            'found "kmeans"; k-means cells are not available in this version yet; allowed: "boxes"; write '
            'method = "boxes" or leave it out',
        )
    elif table.method not in (None, "boxes"):
        problems.add(("cells", "method"), f'found {show(table.method)}; allowed: "boxes"; correct it or leave it out')
    if table.count is not None and table.counts:
        problems.add(("cells", "count"), "found count beside counts; allowed: one of the two; remove the other")
    if len(problems) > found_before:
        return CellOptions()
    _check_domain(problems, table, declared)
    if math.prod(table.counts.values()) >= MOST_CELLS:
        problems.add(
            ("cells", "counts"),
            f"found {math.prod(table.counts.values()):.3g} cells; allowed: fewer than 2**62; lower the counts",
        )
    if len(problems) > found_before:
        return CellOptions()
    return CellOptions(
        lower={name: float(value) for name, value in table.lower.items()},
        upper={name: float(value) for name, value in table.upper.items()},
        counts=dict(table.counts),
        count=table.count,
        periodic=tuple(table.periodic),
    )


def _check_domain(problems: Problems, table: CellsTable, declared: Declared) -> None:
    for name, low in table.lower.items():
        high = table.upper.get(name, math.inf)
        if not low < high or (high < math.inf and math.isinf(float(high) - float(low))):
            problems.add(
                ("cells", "lower", name),
                f"found lower {low!r}, upper {high!r} for {name!r}; allowed: lower below upper, a finite "
                "width; swap or correct them",
            )
    for index, name in enumerate(table.periodic):
        path: Path = ("cells", "periodic", index)
        if declared.state is not None and name not in declared.state:
            close = grammar.nearest(name, declared.state)
            remedy = f"did you mean {close!r}?" if close else "remove or correct it"
            problems.add(path, f"found the unknown state name {name!r}; allowed: {listed(declared.state)}; {remedy}")
        elif name in table.periodic[:index]:
            problems.add(path, f"found {name!r} a second time; allowed: each name once; remove one")
        elif name not in table.lower or name not in table.upper:
            problems.add(
                path,
                f"found {name!r} without both ends; allowed: periodic components with lower and upper, which "
                f"give the period; write for example lower = {{{name} = 0.0}} and upper = {{{name} = "
                f"{math.tau!r}}}",
            )


def read_bursts(problems: Problems, tables: Mapping[str, Any], declared: Declared) -> BurstOptions:
    """Table ``[bursts]``, checked against the kind of the system."""
    table = check_table(problems, BurstsTable, sub_table(problems, tables, "bursts") or {}, ("bursts",))
    kind = declared.kind
    if table.duration is not None and table.steps is not None:
        problems.add(("bursts", "steps"), "found steps beside duration; allowed: one of the two; remove the other")
    if kind is not None:
        is_flow = kind.endswith("flow")
        for key, other in (("steps", "duration"),) if is_flow else (("duration", "steps"), ("step", "steps")):
            if getattr(table, key) is not None:
                problems.add(
                    ("bursts", key),
                    f"found {key} in a {kind}; allowed: {other}; give the length of a burst by it",
                )
        _check_scheme(problems, table.scheme, kind)
    if table.duration is not None and table.step is not None and table.step > table.duration:
        problems.add(
            ("bursts", "step"),
            f"found step {table.step!r} above duration {table.duration!r}; allowed: at most the duration; lower it",
        )
    if table.sweeps is not None and table.reseed is False:
        problems.add(
            ("bursts", "sweeps"),
            "found sweeps beside reseed = false; allowed: sweeps of reseeded bursts only; write reseed = true, or "
            "remove sweeps",
        )
    if table.seeds not in (None, *SEEDS):
        close = grammar.nearest(table.seeds, SEEDS)
        remedy = f"did you mean {close!r}?" if close else "choose one or leave it out"
        problems.add(("bursts", "seeds"), f"found {show(table.seeds)}; allowed: {listed(SEEDS)}; {remedy}")
    return BurstOptions(
        duration=None if table.duration is None else float(table.duration),
        steps=table.steps,
        step=None if table.step is None else float(table.step),
        per_cell=table.per_cell,
        seeds=table.seeds or "sobol",
        scheme=table.scheme,
        reseed=table.reseed,
        sweeps=table.sweeps,
    )


def _check_scheme(problems: Problems, scheme: str | None, kind: str) -> None:
    if scheme is None or scheme in SCHEMES[kind]:
        return
    allowed = listed(SCHEMES[kind]) if SCHEMES[kind] else f"no scheme in a {kind}"
    close = grammar.nearest(scheme, SCHEMES[kind])
    remedy = f"did you mean {close!r}?" if close else "correct it or leave it out"
    problems.add(("bursts", "scheme"), f"found {show(scheme)}; allowed: {allowed}; {remedy}")


def read_output(problems: Problems, tables: Mapping[str, Any]) -> OutputOptions:
    """Table ``[output]``."""
    table = check_table(problems, OutputTable, sub_table(problems, tables, "output") or {}, ("output",))
    return OutputOptions(matrix=table.matrix, intervals=table.intervals)


def read_crosscheck(problems: Problems, tables: Mapping[str, Any]) -> dict[str, Any]:
    """Table ``[crosscheck]``: the keys that were given."""
    given = sub_table(problems, tables, "crosscheck") or {}
    check_table(problems, CrosscheckTable, given, ("crosscheck",))
    return dict(given)


def read_study(problems: Problems, tables: Mapping[str, Any]) -> dict[str, Any]:
    """Table ``[study]``, kept as it is."""
    return dict(sub_table(problems, tables, "study") or {})
