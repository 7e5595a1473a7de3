"""Table ``[observables]`` -> `Observable`; without it, one per state component."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from perdure._case.checking import check_table, sub_table
from perdure._case.events import label_finding
from perdure._case.formulas import read_value
from perdure._case.positions import Path
from perdure._case.problems import Problems, show
from perdure._case.system import Declared
from perdure._case.tables import ObservableTable
from perdure._records import Expression, Observable, System


def read_observables(
    problems: Problems, tables: Mapping[str, Any], declared: Declared
) -> tuple[Observable, ...] | None:
    """Every observable that could be read; None without a table ``[observables]``."""
    given = sub_table(problems, tables, "observables")
    if given is None:
        return None
    observables = []
    for name, entry in given.items():
        path: Path = ("observables", name)
        finding = label_finding(name)
        if finding:
            problems.add(path, finding)
        table, place = ObservableTable(expression=entry), path
        if isinstance(entry, dict):
            table, place = check_table(problems, ObservableTable, entry, path), (*path, "expression")
            if "expression" not in entry:
                continue
        if declared.state is None:
            continue
        expression = read_value(problems, table.expression, declared.names, place)
        if expression is None:
            continue
        if expression.names.isdisjoint(declared.state):
            problems.add(
                place,
                f"found {show(expression.text)}, which is the same everywhere; allowed: an expression in "
                f"{', '.join(declared.state)}; use a state component in it",
            )
        observables.append(Observable(name, expression, table.unit or "1"))
    return tuple(observables)


def default_observables(system: System) -> tuple[Observable, ...]:
    """One observable per state component, named as it and with its unit."""
    return tuple(
        Observable(name, Expression(text=name, source=f"v_{name}", names=frozenset({name})), unit)
        for name, unit in zip(system.state, system.units, strict=True)
    )
