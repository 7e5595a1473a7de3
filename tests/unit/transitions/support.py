"""Tallies from dense counts, for tests."""

from __future__ import annotations

import numpy as np

from perdure._records import Tally

__all__ = ["dense_counts", "tally_of"]


def tally_of(counts: np.ndarray) -> Tally:
    """Tally of counts (n_cell, n_cell + 2, n_replicate); the last two columns are outside and blown up."""
    rows, column = np.nonzero(counts.any(axis=2))
    entries = counts[rows, column]
    pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=len(counts)))]).astype(np.int64)
    short = np.min_scalar_type(int(entries.max(initial=0)))
    return Tally(pointer, column.astype(np.int32), entries.astype(short), counts.sum(axis=1).astype(np.int64))


def dense_counts(n: int, n_rep: int, size: int, rng: np.random.Generator) -> np.ndarray:
    """Random counts (n, n + 2, n_rep), `size` bursts a row and replicate, about half of the entries zero."""
    chance = rng.exponential(size=(n, n + 2)) * (rng.random((n, n + 2)) < 0.5)
    chance[:, 0] += 1e-3
    chance /= chance.sum(axis=1, keepdims=True)
    return np.stack([rng.multinomial(size, chance) for _ in range(n_rep)], axis=2)
