"""Putting rows of a block in their final place."""

from __future__ import annotations

import numpy as np

from perdure._kernels.folders import kernel

__all__ = ["place_rows"]


@kernel
def place_rows(block_pointer, block_column, block_count, place, pointer, rename, ascending, column, count):  # type: ignore[no-untyped-def]
    """Copy row i of a block to row place[i] of the whole.

    block_pointer (n + 1,), block_column (m,), block_count (m, n_replicate); place (n,) int32; pointer (n_row + 1,)
    final offsets; rename: new name of each column, length 0 to keep them; `ascending` sorts a row by new name.
    Fills column and count.
    """
    for i in range(place.shape[0]):
        a, z = block_pointer[i], block_pointer[i + 1]
        to = pointer[place[i]]
        names = np.empty(z - a, dtype=np.int64)
        for e in range(a, z):
            names[e - a] = rename[block_column[e]] if rename.shape[0] > 0 else block_column[e]
        order = np.arange(z - a)
        if ascending:
            for k in range(1, z - a):
                if names[k] < names[k - 1]:
                    order = np.argsort(names)
                    break
        for k in range(z - a):
            column[to + k] = names[order[k]]
            for r in range(count.shape[1]):
                count[to + k, r] = block_count[a + order[k], r]
