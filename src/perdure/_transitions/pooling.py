"""Weighted rows of many sweeps, pooled: by the weights that flew, so that the pool is balanced as the law itself is."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.ensemble import merge_rows
from perdure._records import Floats, Integers

__all__ = ["Pool", "PooledRows", "row_sums"]


class PooledRows(Protocol):
    """Rows with the keys of their cells, ascending: those of a sweep, or a pool of them."""

    @property
    def keys(self) -> Integers: ...
    @property
    def pointer(self) -> Integers: ...
    @property
    def column(self) -> Integers: ...
    @property
    def total(self) -> NDArray[np.float32]: ...
    @property
    def sums(self) -> Floats: ...
    @property
    def weight(self) -> Floats: ...
    @property
    def slot_pointer(self) -> Integers: ...
    @property
    def slot(self) -> NDArray[Any]: ...
    @property
    def slot_total(self) -> NDArray[np.float32]: ...
    @property
    def bursts(self) -> Integers: ...


@dataclass(frozen=True)
class Merged:
    """What `PooledRows` names."""

    keys: Integers
    pointer: Integers
    column: Integers
    total: NDArray[np.float32]
    sums: Floats
    weight: Floats
    slot_pointer: Integers
    slot: NDArray[Any]
    slot_total: NDArray[np.float32]
    bursts: Integers


class Pool:
    """Adds up rows of sweeps.

    Rows wait in a stack in which each is at least twice as long as the next, so that every entry is copied only
    as often as the stack is high; memory stays within twice that of the sum.
    """

    def __init__(self) -> None:
        self.n_sweep = 0
        self._stack: list[PooledRows] = []

    def add(self, rows: PooledRows, n_sweep: int = 1) -> None:
        """Add the rows of a sweep."""
        self.n_sweep += n_sweep
        self._stack.append(rows)
        while len(self._stack) > 1 and len(self._stack[-2].column) <= 2 * len(self._stack[-1].column):
            last = self._stack.pop()
            self._stack.append(merged(self._stack.pop(), last))

    @property
    def nbytes(self) -> int:
        """Memory of the rows."""
        names = ("pointer", "column", "total", "sums", "weight", "slot_pointer", "slot", "slot_total")
        return sum(getattr(rows, name).nbytes for rows in self._stack for name in names)

    def whole(self) -> PooledRows:
        """All rows added up."""
        while len(self._stack) > 1:
            last = self._stack.pop()
            self._stack.append(merged(self._stack.pop(), last))
        return self._stack[0]


def merged(one: PooledRows, two: PooledRows) -> Merged:
    """Sum of two sets of rows."""
    keys = np.union1d(one.keys, two.keys)
    at_one, at_two = np.searchsorted(keys, one.keys), np.searchsorted(keys, two.keys)

    def rows(name: str, column: str, total: str) -> tuple[Integers, Any, Any]:
        a = spread(getattr(one, name), at_one, len(keys)), getattr(one, column), getattr(one, total)
        b = spread(getattr(two, name), at_two, len(keys)), getattr(two, column), getattr(two, total)
        size = len(a[1]) + len(b[1])
        pointer = np.empty(len(keys) + 1, dtype=np.int64)
        out_column = np.empty(size, dtype=a[1].dtype)
        out_total = np.empty((size, a[2].shape[1]), dtype=np.float32)
        n = merge_rows(*a, *b, pointer, out_column, out_total)
        return pointer, out_column[:n].copy(), out_total[:n].copy()

    sums, weight = np.zeros((len(keys), *one.sums.shape[1:])), np.zeros((len(keys), one.weight.shape[1]))
    for at, part in ((at_one, one), (at_two, two)):
        sums[at] += part.sums
        weight[at] += part.weight
    bursts = np.zeros(len(keys), dtype=np.int64)
    bursts[at_one] += one.bursts
    bursts[at_two] += two.bursts
    return Merged(
        keys,
        *rows("pointer", "column", "total"),
        sums,
        weight,
        *rows("slot_pointer", "slot", "slot_total"),
        bursts,
    )


def spread(pointer: Integers, at: Integers, n_row: int) -> Integers:
    """Row offsets with empty rows put in: row i becomes row at[i] of n_row."""
    lengths = np.zeros(n_row, dtype=np.int64)
    lengths[at] = np.diff(pointer)
    return np.concatenate([[0], np.cumsum(lengths)])


def row_sums(pointer: Integers, total: NDArray[np.float32]) -> Floats:
    """Sums over the entries of each row in double precision, shape (n_row, n_replicate)."""
    row = np.repeat(np.arange(len(pointer) - 1), np.diff(pointer))
    columns = [np.bincount(row, weights=part, minlength=len(pointer) - 1) for part in total.T]
    return np.stack(columns, axis=1)
