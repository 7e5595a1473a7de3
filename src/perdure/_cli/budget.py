"""The error budget as text: which parts are in the errors, and the table of ``perdure show --budget``."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

from perdure._cli.numbers import (
    PARTS,
    aligned,
    event_numbers,
    observable_numbers,
    part_cells,
    parts_of,
    quantity_cells,
)
from perdure._cli.rounding import rounded

if TYPE_CHECKING:
    from perdure._records import Quantity
    from perdure._result import DensityFile, Result

__all__ = ["budget_text", "covered"]


def budget_text(result: Result | DensityFile) -> str:
    """Title, a row per number with its value, half-width of its interval and standard error by part."""
    rows = list(_numbers(result))
    parts = parts_of(quantity for _, quantity in rows)
    head = ["number", "value", "half-width", *(PARTS.get(part, part) for part in parts)]
    cells = [[name, quantity_cells(q)[0], _half_width(q), *part_cells(q, parts)] for name, q in rows]
    notes = [
        "half-width: of the 95 percent interval; the columns after it: standard error by part, whose squares add up to "
        "that of the value",
        covered(result),
        "the masses of the marginals have their parts in the density file and in --json",
    ]
    return "\n\n".join([result.title, "\n".join(aligned(cells, head)), "\n".join(notes)])


def _numbers(result: Result | DensityFile) -> Iterator[tuple[str, Quantity]]:
    """Name and number of every row, regime by regime."""
    for position, regime in enumerate(result.regimes):
        place = f"regime {position + 1}, " if len(result.regimes) > 1 else ""
        if place:
            yield f"{place}weight", regime.weight
        for name, event in regime.events.items():
            yield from ((f"{place}{name}, {what}", number) for what, number in event_numbers(event))
        for name, observable in regime.observables.items():
            yield from ((f"{place}{name}, {what}", number) for what, number in observable_numbers(observable))
    yield "outside share", result.outside_share


def _half_width(quantity: Quantity) -> str:
    if quantity.value is None or quantity.low is None or quantity.high is None:
        return ""
    half = 0.5 * (quantity.high - quantity.low)
    return rounded(half, half)[0]


def covered(result: Result | DensityFile) -> str:
    """Which parts of the error budget are in the errors shown; nobody shall take them for the whole."""
    kinds = [kind for kind in _kinds(result) if kind[1].error]
    parts = parts_of(quantity for _, quantity in kinds) or ("sampling",)
    told = []
    for part in parts:
        without = {kind for kind, quantity in kinds if part not in quantity.parts}
        named = dict.fromkeys(kind for kind, _ in kinds if kind in without)
        missing = f" (missing in: {', '.join(named)})" if named else ""
        told.append(f"{PARTS.get(part, part)}{missing}")
    # A map has no time step.
    due = [part for part in PARTS if part != "step" or result.kind.endswith("flow")]
    absent = [PARTS[part] for part in due if part not in parts]
    rest = f"; not in them: {', '.join(absent)}" if absent else ""
    return f"errors and intervals include: {', '.join(told)}{rest}"


def _kinds(result: Result | DensityFile) -> Iterator[tuple[str, Quantity]]:
    """Every number of the results, each with what it is."""
    for regime in result.regimes:
        for event in regime.events.values():
            yield from event_numbers(event)
        for observable in regime.observables.values():
            yield from observable_numbers(observable)
    yield "outside share", result.outside_share
