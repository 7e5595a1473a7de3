"""Ulam's matrix at coarser cells, from the same bursts: rows of a block are averaged, columns summed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array

from perdure._records import BoxGrid, Floats, Integers, Tally

__all__ = ["Lumped", "lumped"]


@dataclass(frozen=True)
class Lumped:
    """A closed class on coarser cells.

    Attributes
    ----------
    tally : Tally
        Of the blocks, with one replicate.
    block : ndarray of int64, shape (n,)
        Block of each member of the class.
    share : ndarray, shape (n,)
        Part of the bursts of its block that a member sent.
    """

    tally: Tally
    block: Integers
    share: Floats

    def lifted(self, mass: Floats) -> Floats:
        """Mass of the blocks shared out among their members by the bursts that they sent, shape (n,)."""
        return np.asarray(mass[self.block] * self.share)


def lumped(tally: Tally, members: Integers, grid: BoxGrid, keys: Integers, factor: int) -> Lumped:
    """Blocks of `factor` boxes along every axis; a member beyond the keys (the outside state) is a block of its own.

    `members` are the cells of a closed class, ascending; keys (n_cell,) are those of all boxes in `grid`.
    """
    inside = members[members < len(keys)]
    index = grid.indices(keys[inside]) // factor
    _, block = np.unique(index, axis=0, return_inverse=True)
    block = block.astype(np.int64).reshape(-1)
    if len(inside) < len(members):
        block = np.append(block, block.max() + 1)
    n_block = int(block.max()) + 1
    place = np.full(tally.n_cell + 2, n_block, dtype=np.int64)
    place[members] = block
    lengths = tally.pointer[members + 1] - tally.pointer[members]
    at = np.repeat(tally.pointer[members] - np.concatenate([[0], np.cumsum(lengths)[:-1]]), lengths)
    at += np.arange(len(at))
    exact = np.float64 if np.issubdtype(tally.count.dtype, np.floating) else np.int64
    total = tally.count[at].sum(axis=1, dtype=exact)
    row = np.repeat(block, lengths)
    matrix = csr_array((total, (row, place[tally.column[at]])), shape=(n_block, n_block + 1))
    matrix.sum_duplicates()
    bursts = np.asarray(matrix.sum(axis=1), dtype=exact).reshape(-1, 1)
    coarse = Tally(matrix.indptr.astype(np.int64), matrix.indices.astype(np.int32), matrix.data.reshape(-1, 1), bursts)
    sent = tally.bursts[members].sum(axis=1).astype(float)
    return Lumped(coarse, block, sent / np.bincount(block, weights=sent)[block])
