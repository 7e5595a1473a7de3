"""Numbers with their errors as cells of a table, and tables of such cells."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from perdure._cli.rounding import bound, rounded, rounded_like

if TYPE_CHECKING:
    from perdure._records import EventResult, ObservableResult, Quantity

__all__ = [
    "EVENT_NUMBERS",
    "OBSERVABLE_NUMBERS",
    "PARTS",
    "aligned",
    "event_numbers",
    "observable_numbers",
    "part_cells",
    "parts_of",
    "percent",
    "quantity_cells",
]

# Two-sided 95 percent point of the normal law, to size the digits of an interval without a standard error.
NORMAL_95 = 1.96
# Parts of the error budget in their order, as they are called on the screen.
PARTS = {"sampling": "sampling", "cells": "cell size", "step": "time step"}


# Numbers of an event and of an observable, as they are called on the screen.
EVENT_NUMBERS = {
    "share": "share of time",
    "entry_rate": "entry rate",
    "return_period": "return period",
    "mean_spell": "mean spell",
}
OBSERVABLE_NUMBERS = {"mean": "mean", "variance": "variance"}


def event_numbers(event: EventResult) -> list[tuple[str, Quantity]]:
    """What each number of an event is called, and the number."""
    return [(what, getattr(event, name)) for name, what in EVENT_NUMBERS.items()]


def observable_numbers(observable: ObservableResult) -> list[tuple[str, Quantity]]:
    """What each number of an observable is called, and the number."""
    return [(what, getattr(observable, name)) for name, what in OBSERVABLE_NUMBERS.items()]


def quantity_cells(quantity: Quantity) -> tuple[str, str]:
    """A number as (value with error and unit, 95 percent interval).

    Without a number the first text is the bound or the word "none", with the reason; the second is empty.
    """
    unit = "" if quantity.unit == "1" else f" {quantity.unit}"
    if quantity.value is None:
        return _bound_or_none(quantity, unit), ""
    error = quantity.error or 0.0
    value, error_text = rounded(quantity.value, error)
    text = f"{value} ± {error_text}{unit}" if error_text else f"{value}{unit}"
    if quantity.reason:
        text += f" ({quantity.reason})"
    if quantity.low is None or quantity.high is None or quantity.low == quantity.high:
        return text, ""
    digits = error or (quantity.high - quantity.low) / (2.0 * NORMAL_95)
    # A number that is exactly zero has no size to write its ends with.
    size = quantity.value or max(abs(quantity.low), abs(quantity.high))
    low, high = (rounded_like(end, size, digits) for end in (quantity.low, quantity.high))
    return text, f"{low} to {high}"


def _bound_or_none(quantity: Quantity, unit: str) -> str:
    reason = quantity.reason.removesuffix(": upper bound").removesuffix(": lower bound")
    if quantity.high is not None and math.isfinite(quantity.high):
        return f"< {bound(quantity.high, upper=True)}{unit} ({reason or 'never seen'})"
    if quantity.low is not None:
        return f"> {bound(quantity.low, upper=False)}{unit} ({reason or 'lower bound'})"
    return f"none: {reason or 'no reason is on record'}"


def parts_of(quantities: Iterable[Quantity]) -> tuple[str, ...]:
    """Parts of the error budget met in any of the numbers: those of `PARTS` in order, then any other."""
    met = dict.fromkeys(part for quantity in quantities for part in quantity.parts)
    return (*(part for part in PARTS if part in met), *(part for part in met if part not in PARTS))


def part_cells(quantity: Quantity, parts: Sequence[str]) -> list[str]:
    """Standard error of a number by part, two digits each; "-" for a part that is not in it, empty without a number."""
    if quantity.value is None:
        return [""] * len(parts)
    errors = [quantity.parts.get(part) for part in parts]
    return ["-" if error is None else rounded(error, error)[0] for error in errors]


def percent(part: float) -> str:
    """A part between 0 and 1 to two digits of its percentage."""
    return "100 %" if part >= 0.995 else f"{100.0 * part:.2g} %"


def aligned(rows: Sequence[Sequence[str]], head: Sequence[str]) -> list[str]:
    """Columns aligned on the left, two blanks apart.

    A text with nothing but empty cells after it, such as a long reason, runs on and widens no column.
    """
    lines = [list(head), *(list(row) for row in rows)]
    widths = [max((len(line[k]) for line in lines if any(line[k + 1 :])), default=0) for k in range(len(head))]
    texts = ["  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)) for line in lines]
    return [text.rstrip() for text in texts]
