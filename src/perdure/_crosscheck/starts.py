"""Dispersed starts, their twins, and what becomes of them."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure._crosscheck.flight import cell_of
from perdure._records import BoxGrid, Floats, Integers
from perdure.errors import NoAttractorError

__all__ = ["TWIN", "Dispersed", "dispersed", "ended", "orders_differ", "twins", "twins_apart"]

# Starts tried for each that is kept, and their distance from their twins, in widths of the domain.
TRIED, TWIN = 4, 1e-9
# Distance of twins, over that of unrelated states, from which they have parted.
APART = 1e-3


@dataclass(frozen=True)
class Dispersed:
    """Starts that stay bounded, state (n_dim, n), and how many were tried and lost."""

    state: Floats
    n_tried: int
    n_lost: int


def dispersed(
    lower: Floats,
    upper: Floats,
    given: NDArray[np.bool_],
    n_start: int,
    fly: Callable[[Floats], Floats],
    rng: np.random.Generator,
) -> Dispersed:
    """Starts after a first flight.

    Half of them begin evenly in the domain, half in one that is twice as wide, except at ends that the case gives.

    Parameters
    ----------
    lower, upper : ndarray, shape (n_dim,)
        Ends of the domain. Units of the state.
    given : ndarray of bool, shape (n_dim, 2)
    fly : callable
        From states to where they are after a while; nan where they left all bounds.

    Raises
    ------
    NoAttractorError
        Fewer than two stay bounded.
    """
    n_tried = TRIED * n_start
    spare = 0.5 * (upper - lower)
    wide = np.arange(n_tried) % 2 == 1
    low = np.where(wide, np.where(given[:, 0], lower, lower - spare)[:, None], lower[:, None])
    high = np.where(wide, np.where(given[:, 1], upper, upper + spare)[:, None], upper[:, None])
    state = fly(rng.uniform(low, high))
    magnitude = np.abs(state - 0.5 * (lower + upper)[:, None]) / (upper - lower)[:, None]
    kept = np.isfinite(state).all(axis=0) & (np.nan_to_num(magnitude, nan=np.inf) < 1e6).all(axis=0)
    if kept.sum() < 2:
        raise NoAttractorError(
            f"crosscheck: {int((~kept).sum())} of {n_tried} trajectories from dispersed starts left all bounds; "
            "allowed: a system with a bounded long run; give [cells] lower and upper so that starts lie in the basin"
        )
    return Dispersed(np.ascontiguousarray(state[:, kept][:, :n_start]), n_tried, int((~kept).sum()))


def twins(state: Floats, width: Floats, rng: np.random.Generator) -> Floats:
    """States (n_dim, n), then as many that are almost the same."""
    nudge = TWIN * width[:, None] * rng.choice([-1.0, 1.0], state.shape)
    return np.concatenate([state, state + nudge], axis=1)


def ended(
    grid: BoxGrid, keys: Integers, cells: Sequence[Integers], stands: Sequence[Floats]
) -> tuple[Integers, NDArray[np.bool_]]:
    """Regime that each trajectory was last seen in, and whether it was seen in another before.

    cells: indices in `keys` of the cells of each regime. stands: states (n_dim, n) at a few times. -1 where a
    trajectory was never in the cells of a regime.
    """
    of_cell = np.full(len(keys) + 1, -1)
    for regime, cell in enumerate(cells):
        of_cell[cell] = regime
    seen = np.array([of_cell[cell_of(grid, keys, stand)] for stand in stands])
    last, moved = np.full(seen.shape[1], -1), np.zeros(seen.shape[1], dtype=bool)
    for row in seen:
        moved |= (row >= 0) & (last >= 0) & (row != last)
        last = np.where(row >= 0, row, last)
    return last, moved


def twins_apart(state: Floats, width: Floats) -> float:
    """Part of the twins, the halves of state (n_dim, n), that are a thousandth as far apart as unrelated states."""
    n_start = state.shape[1] // 2
    first = state[:, :n_start]
    gap = np.abs(first - state[:, n_start:]) / width[:, None]
    # unrelated states: each with the next start
    typical = np.abs(first - np.roll(first, 1, axis=1)) / width[:, None]
    gap, typical = (rows[:, np.isfinite(rows).all(axis=0)].max(axis=0) for rows in (gap, typical))
    return float(np.mean(gap > APART * np.median(typical))) if len(gap) and len(typical) else 0.0


def orders_differ(batches: Floats, n_event: int, n_start: int) -> float:
    """Part of the twins that entered some event in different numbers in some batch; batches (n_batch, n_sum, n)."""
    if not n_event:
        return 0.0
    entries = batches[:, 1 : 2 * n_event : 2]
    n = min(n_start, batches.shape[2] - n_start)
    differ = np.abs(entries[:, :, :n] - entries[:, :, n_start : n_start + n]) > 0.0
    return float(differ.any(axis=(0, 1)).mean()) if n else math.nan
