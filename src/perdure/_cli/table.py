"""The results of a run as text, for `run` and `show`."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from perdure._cli.rounding import bound, rounded, rounded_like, seconds_text

if TYPE_CHECKING:
    from perdure._records import Quantity, Regime
    from perdure._result import DensityFile, Result

__all__ = ["quantity_cells", "results_text"]

CAUTION = "Screening estimate of a model; local codes and licensed practice decide."
# Two-sided 95 percent point of the normal law, to size the digits of an interval without a standard error.
NORMAL_95 = 1.96


def results_text(result: Result | DensityFile, *, verbose: bool = False) -> str:
    """Title, outcome, numbers with their errors, cost and caution.

    Parameters
    ----------
    result : Result or DensityFile
    verbose : bool
        Adds the seconds of every stage.
    """
    blocks = [[result.title, f"outcome: {result.outcome.replace('-', ' ')}"]]
    blocks[0] += [f"  {message}" for message in result.messages]
    if not result.checks_passed:
        blocks[0].append("  a stated check failed: do not rely on the numbers before the messages above are dealt with")
    for position, regime in enumerate(result.regimes):
        if len(result.regimes) > 1:
            blocks.append([_regime_title(regime, position, len(result.regimes))])
        blocks += _regime_blocks(regime)
    blocks.append(
        _table([["outside share", *quantity_cells(result.outside_share)]], ("", "value", "95 percent interval"))
    )
    blocks.append([_covered(result)])
    blocks.append(_cost(result, verbose))
    if result.caution:
        blocks.append([result.caution, CAUTION])
    return "\n\n".join("\n".join(block) for block in blocks)


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
    if quantity.high is not None:
        return f"< {bound(quantity.high, upper=True)}{unit} ({reason or 'never seen'})"
    if quantity.low is not None:
        return f"> {bound(quantity.low, upper=False)}{unit} ({reason or 'lower bound'})"
    return f"none: {reason or 'no reason is on record'}"


def _regime_title(regime: Regime, position: int, n_regime: int) -> str:
    value, interval = quantity_cells(regime.weight)
    between = f", 95 percent interval {interval}" if interval else ""
    return f"regime {position + 1} of {n_regime}: weight {value}{between}"


def _regime_blocks(regime: Regime) -> list[list[str]]:
    """A table of events and one of observables; without the one that has no rows."""
    events = [
        row
        for name, event in regime.events.items()
        for row in _rows(
            name,
            [
                ("share of time", event.share),
                ("return period", event.return_period),
                ("mean spell", event.mean_spell),
            ],
        )
    ]
    observables = [
        row
        for name, observable in regime.observables.items()
        for row in _rows(name, [("mean", observable.mean), ("variance", observable.variance)])
    ]
    tables = (("event", events), ("observable", observables))
    return [_table(rows, (head, "", "value", "95 percent interval")) for head, rows in tables if rows]


def _rows(name: str, numbers: Iterable[tuple[str, Quantity]]) -> list[list[str]]:
    """One row per number; the name stands in the first only."""
    rows, told = [], ""
    for position, (what, quantity) in enumerate(numbers):
        cells = quantity_cells(quantity)
        if quantity.value is None and quantity.reason and cells[0] == told:
            cells = ("none, as above", "")
        else:
            told = cells[0]
        rows.append(["" if position else name, what, *cells])
    return rows


def _table(rows: Sequence[Sequence[str]], head: Sequence[str]) -> list[str]:
    """Columns aligned on the left, two blanks apart.

    A text before an empty last column, such as a long reason, runs on and widens no column.
    """
    lines = [list(head), *(list(row) for row in rows)]
    n_column = len(head)
    widths = [max((len(line[k]) for line in lines if k < n_column - 2 or line[-1]), default=0) for k in range(n_column)]
    texts = ["  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)) for line in lines]
    return [text.rstrip() for text in texts]


def _covered(result: Result | DensityFile) -> str:
    """Which parts of the error budget are in the errors shown; nobody shall take them for the whole."""
    numbers = [result.outside_share]
    for regime in result.regimes:
        numbers += [number for event in regime.events.values() for number in (event.share, event.return_period)]
        numbers += [observable.mean for observable in regime.observables.values()]
    parts = sorted({part for number in numbers for part in number.parts})
    if set(parts) <= {"sampling"}:
        return "errors and intervals are those of sampling alone; not in them: cell size and time step"
    steps = [("step", "time step")] if result.kind.endswith("flow") else []
    missing = [name for part, name in (("cells", "cell size"), *steps) if part not in parts]
    rest = f"; not in them: {' and '.join(missing)}" if missing else ""
    return f"errors and intervals include: {', '.join(parts)}{rest}"


def _cost(result: Result | DensityFile, verbose: bool) -> list[str]:
    """What the numbers cost: cells, bursts, steps, seconds."""
    counts, timings = result.counts, result.timings
    parts = [f"cells {result.n_cell}"]
    parts += [f"{name} {counts[name]}" for name in ("bursts", "steps") if name in counts]
    if counts.get("blown_up"):
        parts.append(f"blown up {counts['blown_up']}")
    parts.append(f"time {seconds_text(sum(timings.values()))}")
    lines = [", ".join(parts)]
    if verbose:
        lines += [f"  {stage}: {seconds_text(seconds)}" for stage, seconds in timings.items()]
    return lines
