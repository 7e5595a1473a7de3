"""Coverage of the 95 percent intervals at default settings."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

from _verify.comparing import Compared, Progress, Row, Total, compare, rows_of_case, total, totals_by_class, write_whole

__all__ = ["SHORT", "coverage_section", "failures"]

# One or more of each class of system, those that run quickly.
SHORT = (
    "P01-logistic", "P05-chebyshev3", "P08-doubling-events", "P11-noisy-ricker", "P13-henon", "P16-ou", "P22-lorenz63",
    "P32-tilted-response",
)  # fmt: skip

LEAST, MOST = 0.90, 0.995
LEAST_OF_A_CLASS = 0.85
WIDEST = 3.0


def coverage_section(names: Sequence[str], n_seed: int, target: Path | None, progress: Progress) -> bool:
    """Run the cases, print a line per quantity and the totals; whether the criteria hold."""
    rows: list[Row] = []
    for name in names:
        (found,) = rows_of_case(name, range(1, n_seed + 1), progress)
        rows += found
        if target is not None:
            write_whole(target, rows)
    compared = compare(rows)
    print_lines(compared)
    whole, classes = total("all", compared), totals_by_class(compared)
    n_identity = sum(one.n_seed for one in compared if one.is_identity)
    print_totals(whole, classes)
    print(f"\nleft out of the totals: {n_identity} comparisons of numbers that are right to rounding with every seed")
    return not failures(whole, classes)


def failures(whole: Total, classes: Sequence[Total]) -> list[str]:
    """Which criteria do not hold; a total of nothing fails."""
    found = []
    if not LEAST <= whole.covered <= MOST:
        found.append(f"all: coverage {whole.covered:.1%} is not within {LEAST:.1%} and {MOST:.1%}")
    found += [
        f"{one.name}: coverage {one.covered:.1%} is not above {LEAST_OF_A_CLASS:.0%}"
        for one in classes
        if not one.covered > LEAST_OF_A_CLASS
    ]
    if not whole.ratio <= WIDEST:
        found.append(f"all: median half-width is {whole.ratio:.2f} times the actual error, above {WIDEST:g}")
    return found


def shortened(source: str) -> str:
    """First words of a source, 24 characters at most."""
    text = source.replace("computed for this table: ", "computed: ").replace("closed form: ", "closed form, ")
    return text if len(text) <= 24 else text[:23] + "…"


def print_lines(compared: Sequence[Compared]) -> None:
    """A line per case and quantity."""
    head = ("case", "quantity", "source", "truth", "mean estimate", "interval of median width", "covered", "ratio")
    rows = [head]
    for one in compared:
        row = one.first
        ends = ["" if end is None else f"{end:.6g}" for end in (one.low, one.high)]
        ratio = "exact" if one.is_identity else "" if math.isnan(one.ratio) else f"{one.ratio:.2f}"
        rows.append(
            (
                row.case, row.quantity, shortened(row.source), f"{row.truth:.6g}",
                "none" if math.isnan(one.mean) else f"{one.mean:.6g}", f"{ends[0]} .. {ends[1]}",
                f"{one.n_covered} of {one.n_seed}", ratio,
            )
        )  # fmt: skip
    widths = [max(len(row[k]) for row in rows) for k in range(len(head))]
    for line in rows:
        print("  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)).rstrip())


def print_totals(whole: Total, classes: Sequence[Total]) -> None:
    """The totals, and the criteria with their verdict."""
    print(f"\n{'class':<14}{'comparisons':>12}{'covered':>10}{'half-width / rms error (median)':>34}")
    for one in (*classes, whole):
        print(f"{one.name:<14}{one.n:>12}{one.covered:>10.1%}{one.ratio:>34.2f}")
    print(
        f"\ncriteria: coverage of all {LEAST:.0%} to {MOST:.1%}, of each class above {LEAST_OF_A_CLASS:.0%}; "
        f"median half-width at most {WIDEST:g} times the root-mean-square error"
    )
    found = failures(whole, classes)
    print("\n".join(f"  FAILED  {text}" for text in found) or "  passed")
