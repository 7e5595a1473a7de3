"""Putting rows of a block in their final place."""

from __future__ import annotations

import numpy as np

from perdure._kernels.folders import kernel

__all__ = ["merge_repeats", "place_rows"]


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


@kernel
def merge_repeats(pointer, column, count):  # type: ignore[no-untyped-def]
    """Add up entries of equal column that stand side by side in a row, in place; returns the entries left.

    pointer (n_row + 1,), column (n,), count (n, n_replicate). Trap: the search for strong components never ends on a
    graph with repeated edges.
    """
    to = 0
    begin = pointer[0]
    for i in range(pointer.shape[0] - 1):
        end = pointer[i + 1]
        first = to
        for e in range(begin, end):
            if to > first and column[to - 1] == column[e]:
                for r in range(count.shape[1]):
                    count[to - 1, r] += count[e, r]
            else:
                column[to] = column[e]
                for r in range(count.shape[1]):
                    count[to, r] = count[e, r]
                to += 1
        begin = end
        pointer[i + 1] = to
    return to
