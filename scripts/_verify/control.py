"""Negative control: without the part of the error from cell size the intervals must fail to hold the truth."""

from __future__ import annotations

from collections.abc import Sequence

from _verify.comparing import Progress, Total, compare, rows_of_case, total, without_part

__all__ = ["CHAOTIC", "SHORT", "control_section", "tells"]

CHAOTIC = (
    "P01-logistic", "P05-chebyshev3", "P13-henon", "P14-lozi", "P15-baker", "P22-lorenz63", "P23-roessler",
)  # fmt: skip
SHORT = ("P01-logistic", "P05-chebyshev3", "P13-henon", "P14-lozi")
# Plain bursts: reseeded ones start from the law within a cell and have next to no error from cell size.
PLAIN = {"reseed": False}
FAILS_BELOW = 0.85


def tells(without: Total, whole: Total) -> bool:
    """Whether the count without the part fails visibly, and that with it is better."""
    return without.covered < FAILS_BELOW and whole.covered > without.covered


def control_section(names: Sequence[str], n_seed: int, progress: Progress) -> bool:
    """Print coverage with and without the part `cells`, by case; whether the control tells them apart."""
    lists = [
        rows_of_case(
            name,
            range(1, n_seed + 1),
            progress,
            (lambda found: found, lambda found: without_part(found, "cells")),
            bursts=PLAIN,
        )
        for name in names
    ]
    print(f"{'plain bursts':<18}{'comparisons':>12}{'with the part cells':>22}{'without it':>14}")
    for name, (rows, bare) in zip(names, lists, strict=True):
        print_line(total(name, compare(rows)), total(name, compare(bare)))
    whole = total("all", compare([row for rows, _ in lists for row in rows]))
    without = total("all", compare([row for _, bare in lists for row in bare]))
    print_line(whole, without)
    print(f"\ncriterion: without the part coverage is below {FAILS_BELOW:.0%}, and with it higher")
    return tells(without, whole)


def print_line(whole: Total, without: Total) -> None:
    print(f"{whole.name:<18}{whole.n:>12}{whole.covered:>22.1%}{without.covered:>14.1%}")
