"""The results of a run as text, for `run` and `show`."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

from perdure._cli.budget import covered
from perdure._cli.comparison import summary_lines
from perdure._cli.numbers import (
    EVENT_NUMBERS,
    PARTS,
    aligned,
    event_numbers,
    observable_numbers,
    part_cells,
    parts_of,
    percent,
    quantity_cells,
)
from perdure._cli.rounding import seconds_text
from perdure._cli.steering import reached_text

if TYPE_CHECKING:
    from perdure._records import EventResult, Quantity, Regime, Target
    from perdure._result import DensityFile, Result

__all__ = ["results_text"]

CAUTION = "Screening estimate of a model; local codes and licensed practice decide."


def results_text(result: Result | DensityFile, *, verbose: bool = False) -> str:
    """Title, outcome, numbers with their errors, accuracies asked for, cost and caution.

    Parameters
    ----------
    result : Result or DensityFile
    verbose : bool
        Adds what every stage took.
    """
    blocks = [[result.title, f"outcome: {result.outcome.replace('-', ' ')}"]]
    blocks[0] += [f"  {message}" for message in result.messages]
    if not result.checks_passed:
        blocks[0].append("  a stated check failed: do not rely on the numbers before the messages above are dealt with")
    parts = _shown_parts(result.regimes)
    for position, regime in enumerate(result.regimes):
        if len(result.regimes) > 1:
            blocks.append([_regime_title(regime, position, len(result.regimes))])
        blocks += _regime_blocks(regime, parts)
    blocks.append(
        aligned([["outside share", *quantity_cells(result.outside_share)]], ("", "value", "95 percent interval"))
    )
    blocks.append([covered(result)])
    if result.targets:
        blocks.append(_targets(result.targets))
    if result.crosscheck is not None:
        blocks.append(summary_lines(result.crosscheck, result.time_unit))
    blocks.append(_cost(result, verbose) + _effort(result, verbose))
    if result.caution:
        blocks.append([result.caution, CAUTION])
    return "\n\n".join("\n".join(block) for block in blocks)


def _regime_title(regime: Regime, position: int, n_regime: int) -> str:
    value, interval = quantity_cells(regime.weight)
    between = f", 95 percent interval {interval}" if interval else ""
    return f"regime {position + 1} of {n_regime}: weight {value}{between}"


def _shown_numbers(event: EventResult) -> list[tuple[str, Quantity]]:
    """The entry rate is told by the return period."""
    return [(what, number) for what, number in event_numbers(event) if what != EVENT_NUMBERS["entry_rate"]]


def _shown_parts(regimes: Sequence[Regime]) -> tuple[str, ...]:
    """Parts of the error that get a column; none where all errors are those of sampling alone, told by one line."""
    numbers = [n for regime in regimes for event in regime.events.values() for n in _shown_numbers(event)]
    numbers += [n for regime in regimes for o in regime.observables.values() for n in observable_numbers(o)]
    parts = parts_of(quantity for _, quantity in numbers)
    return parts if set(parts) - {"sampling"} else ()


def _regime_blocks(regime: Regime, parts: Sequence[str]) -> list[list[str]]:
    """A table of events and one of observables; without the one that has no rows."""
    events = [row for name, event in regime.events.items() for row in _rows(name, _shown_numbers(event), parts)]
    observables = [row for name, o in regime.observables.items() for row in _rows(name, observable_numbers(o), parts)]
    head = ("", "value", "95 percent interval", *(PARTS.get(part, part) for part in parts))
    return [aligned(rows, (what, *head)) for what, rows in (("event", events), ("observable", observables)) if rows]


def _rows(name: str, numbers: Iterable[tuple[str, Quantity]], parts: Sequence[str]) -> list[list[str]]:
    """One row per number; the name stands in the first only."""
    rows, told = [], ""
    for position, (what, quantity) in enumerate(numbers):
        cells = quantity_cells(quantity)
        if quantity.value is None and quantity.reason and cells[0] == told:
            cells = ("none, as above", "")
        else:
            told = cells[0]
        rows.append(["" if position else name, what, *cells, *part_cells(quantity, parts)])
    return rows


def _targets(targets: Sequence[Target]) -> list[str]:
    """A table of the accuracies asked for: half-widths of the 95 percent intervals over the values."""
    rows = [
        [
            target.event,
            EVENT_NUMBERS.get(target.number, target.number),
            f"{target.wanted:g}",
            reached_text(target),
            "met" if target.met else f"not met: {target.reason or 'no reason is on record'}",
        ]
        for target in targets
    ]
    return aligned(rows, ("accuracy of event", "", "wanted", "reached", ""))


def _effort(result: Result | DensityFile, verbose: bool) -> list[str]:
    """Where the bursts went: by stage, and to which cells."""
    lines = []
    total = sum(stage.bursts for stage in result.effort)
    if total:
        shares = (f"{stage.name} {percent(stage.bursts / total)}" for stage in result.effort)
        lines.append(f"bursts by stage: {', '.join(shares)}")
    if verbose:
        lines += [
            f"  {stage.name}: sweeps {stage.sweeps}, bursts {stage.bursts}, steps {stage.steps}, "
            f"time {seconds_text(stage.seconds)}"
            for stage in result.effort
        ]
    focus = result.focus
    if focus is not None:
        cells, masses = focus
        several = len(masses) > 1
        held = [
            f"{percent(mass)} of the mass{f' of regime {k}' if several else ''}" for k, mass in enumerate(masses, 1)
        ]
        which = f", which hold {' and '.join(held)}" if held else ""
        lines.append(f"half of the bursts went to {percent(cells)} of the cells{which}")
    return lines


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
