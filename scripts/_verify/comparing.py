"""Estimates beside reference values, one row per case, quantity and seed, and what is counted over rows."""

from __future__ import annotations

import json
import math
import os
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from itertools import groupby
from pathlib import Path
from typing import Any

import numpy as np

import perdure
from perdure import Quantity
from perdure.errors import PerdureError
from reference.cases import TABLES, reference_case
from reference.known import Known, known, quantity

__all__ = [
    "Compared",
    "Row",
    "Total",
    "case_names",
    "compare",
    "covers",
    "row_of",
    "rows_of_case",
    "to_json",
    "total",
    "totals_by_class",
    "without_part",
    "write_whole",
]

NORMAL = 1.959963984540054  # two-sided 95 percent point of the normal law
# Numbers that a method makes by counting the same thing twice (a spell of one step) differ from the truth by rounding.
ROUNDING = 1e-12
CLASSES = {"map": "map", "noisy-map": "noisy map", "noisy-flow": "noisy flow", "flow": "chaotic flow"}
# Marginals and the matrix are not compared: a few intervals and no matrix save a quarter of the time.
OUTPUT = {"intervals": 8, "matrix": False}

Progress = Callable[[str], None]
Change = Callable[[Quantity], Quantity]


@dataclass(frozen=True)
class Row:
    """One comparison; `estimate`, `low` or `high` is None where the run gives no such number."""

    case: str
    quantity: str
    source: str
    truth: float
    truth_error: float
    estimate: float | None
    low: float | None
    high: float | None
    covered: bool
    seed: int
    system_class: str

    @property
    def half_width(self) -> float | None:
        """Half the width of the interval; None where it has no two ends or no value."""
        if self.estimate is None or self.low is None or self.high is None:
            return None
        return 0.5 * (self.high - self.low)


def covers(truth: float, truth_error: float, found: Quantity) -> bool:
    """Whether the interval holds the truth, widened in quadrature by 1.96 standard errors of the truth itself.

    An interval with one end is a bound (an event never seen); without any end there is nothing that could hold it.
    """
    if found.low is None and found.high is None:
        return False
    slack = ROUNDING * max(abs(truth), 1e-300)

    def reach(end: float) -> float:
        own = 0.0 if found.value is None else abs(found.value - end)
        return math.hypot(own, NORMAL * truth_error) - own + slack

    above = found.low is None or found.low - reach(found.low) <= truth
    below = found.high is None or truth <= found.high + reach(found.high)
    return above and below


def without_part(found: Quantity, part: str) -> Quantity:
    """The number with one part of its error left out: both half-widths shrink as the standard error does.

    Thus the quantile and the scale (logarithm, log odds) on which the interval was made are kept.
    """
    whole = found.error
    if found.value is None or found.low is None or found.high is None or not whole:
        return found
    parts = {name: size for name, size in found.parts.items() if name != part}
    share = math.sqrt(sum(size * size for size in parts.values())) / whole
    low, high = (found.value + share * (end - found.value) for end in (found.low, found.high))
    return Quantity(found.value, low, high, parts, found.unit, found.reason)


def scalars(case: str) -> list[Known]:
    """Reference values of a case that are one number; not the share of an event that is never met."""
    return [
        item
        for item in known(case)
        if isinstance(item.value, float) and not (item.value == 0.0 and item.number.startswith("share"))
    ]


def case_names() -> tuple[str, ...]:
    """Reference cases with at least one number to compare."""
    held = {name for name in TABLES if name not in WITHOUT_VALUES}
    return tuple(name for name in TABLES if name in held and scalars(name))


# Boole's map has no stationary law, hence no values.
WITHOUT_VALUES = {"P10-boole-infinite"}


def row_of(item: Known, system_class: str, found: Quantity, seed: int) -> Row:
    """A reference value beside the number found."""
    # other uncertainties are bounds on rounding and quadrature, far below any error here
    error = item.uncertainty if item.source.startswith("computed") else 0.0
    return Row(
        case=item.case,
        quantity=f"{item.number} {item.regime}".rstrip(),
        source=item.source,
        truth=item.value,
        truth_error=error,
        estimate=found.value,
        low=found.low,
        high=found.high,
        covered=covers(item.value, error, found),
        seed=seed,
        system_class=system_class,
    )


def rows_of_case(
    name: str,
    seeds: Iterable[int],
    progress: Progress,
    changes: Sequence[Change] = (lambda found: found,),
    **tables: Any,
) -> list[list[Row]]:
    """Rows of a case, a list for each of `changes`, which alter the numbers found; keyword tables go into the case.

    A run that stops with an error gives rows without numbers, which cover nothing.
    """
    lists: list[list[Row]] = [[] for _ in changes]
    for seed in seeds:
        progress(f"{name}, seed {seed}")
        case = reference_case(name, seed=seed, output=OUTPUT, **tables)
        try:
            result = perdure.estimate(case)
        except PerdureError as error:
            result = None
            progress(f"{name}, seed {seed}: {error}")
        for item in scalars(name):
            found = NOTHING
            if result is not None:
                try:
                    found = quantity(result, item.number, item.regime)
                except (AssertionError, LookupError):
                    progress(f"{name}, seed {seed}: {result.outcome}, so there is no {item.number} {item.regime}")
            for rows, change in zip(lists, changes, strict=True):
                rows.append(row_of(item, CLASSES[case.system.kind], change(found), seed))
    return lists


NOTHING = Quantity(None, None, None, {}, "1", "the run gave no such number")


@dataclass(frozen=True)
class Compared:
    """The rows of one quantity over the seeds, summed up.

    Attributes
    ----------
    n_covered, n_seed, n_found : int
        Seeds whose interval holds the truth, all seeds, and those that gave a value.
    mean : float
        Mean estimate over the seeds; nan without any.
    low, high : float or None
        The interval of median width; None without any.
    half_width, rms : float
        Median half-width, and root of the mean square of estimate less truth; nan without any.
    """

    first: Row
    n_covered: int
    n_seed: int
    n_found: int
    mean: float
    low: float | None
    high: float | None
    half_width: float
    rms: float

    @property
    def is_identity(self) -> bool:
        """Right to rounding with every seed: nothing about error bars can be learnt from it."""
        return self.n_found == self.n_seed and self.rms <= ROUNDING * abs(self.first.truth)

    @property
    def ratio(self) -> float:
        """Median half-width over root-mean-square error; nan where that is not known or rounding alone."""
        return self.half_width / self.rms if self.rms > ROUNDING * abs(self.first.truth) else math.nan


def compare(rows: Sequence[Row]) -> list[Compared]:
    """Rows of any number of cases, summed up by quantity, in the order of first appearance."""
    found: dict[tuple[str, str], list[Row]] = {}
    for row in rows:
        found.setdefault((row.case, row.quantity), []).append(row)
    return [_compared(one) for one in found.values()]


def _compared(rows: list[Row]) -> Compared:
    values = [row.estimate for row in rows if row.estimate is not None]
    whole = sorted((row for row in rows if row.half_width is not None), key=lambda row: row.half_width or 0.0)
    middle = whole[(len(whole) - 1) // 2] if whole else rows[0]
    truth = rows[0].truth
    return Compared(
        first=rows[0],
        n_covered=sum(row.covered for row in rows),
        n_seed=len(rows),
        n_found=len(values),
        mean=float(np.mean(values)) if values else math.nan,
        low=middle.low,
        high=middle.high,
        half_width=float(np.median([row.half_width for row in whole])) if whole else math.nan,
        rms=float(np.sqrt(np.mean([(value - truth) ** 2 for value in values]))) if values else math.nan,
    )


@dataclass(frozen=True)
class Total:
    """Coverage, 0 to 1, over all comparisons, and the median over quantities of half-width over error."""

    name: str
    n: int
    covered: float
    ratio: float


def total(name: str, compared: Sequence[Compared]) -> Total:
    """Sum over quantities, those left out that are right to rounding whatever the error bars."""
    told = [one for one in compared if not one.is_identity]
    n = sum(one.n_seed for one in told)
    ratios = [one.ratio for one in told if not math.isnan(one.ratio)]
    return Total(
        name,
        n,
        sum(one.n_covered for one in told) / n if n else math.nan,
        float(np.median(ratios)) if ratios else math.nan,
    )


def totals_by_class(compared: Sequence[Compared]) -> list[Total]:
    """The total of each class of system that occurs."""
    ordered = sorted(compared, key=lambda one: list(CLASSES.values()).index(one.first.system_class))
    return [total(name, list(group)) for name, group in groupby(ordered, key=lambda one: one.first.system_class)]


def to_json(rows: Sequence[Row]) -> list[dict[str, Any]]:
    """One object per row."""
    names = ("case", "quantity", "source", "truth", "truth_error", "estimate", "low", "high", "covered", "seed")
    return [{name: getattr(row, name) for name in names} | {"class": row.system_class} for row in rows]


def write_whole(path: Path, rows: Sequence[Row]) -> None:
    """Write the rows as JSON beside the target, then rename: there is never half a file."""
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        part.write_text(json.dumps(to_json(rows), indent=1, allow_nan=False) + "\n", encoding="utf-8")
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)
