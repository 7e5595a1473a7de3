"""From the pooled rows of reseeded bursts to one tally."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import OUTSIDE
from perdure._records import Integers, SlotRows, Tally
from perdure._transitions.assemble import Collected
from perdure._transitions.pooling import PooledRows, row_sums

__all__ = ["Combined", "combined", "positions"]


@dataclass(frozen=True)
class Combined:
    """Rows of reseeded bursts, and of plain ones where no reseeded burst started.

    Attributes
    ----------
    keys : ndarray of int64, shape (n,)
        Cells, ascending.
    all : Collected
        The cells in this order, then the outside state if it has a row.
    reseeded : ndarray of bool, shape (all.tally.n_cell,)
        Rows made of reseeded bursts.
    strayed : float
        Part of the weight in rows of the pool that were not taken.
    """

    keys: Integers
    all: Collected
    reseeded: NDArray[np.bool_]
    strayed: float


def combined(plain: Collected, plain_keys: Integers, pool: PooledRows, keep: NDArray[np.bool_]) -> Combined:
    """One tally.

    Parameters
    ----------
    plain_keys : ndarray of int64
        Keys of the plain rows, ascending, without the outside state.
    keep : ndarray of bool, shape (len(pool.keys),)
        Rows of the pool to take; entries that end elsewhere are left out.
    """
    at = positions(pool)
    ends_well = (at >= 0) & keep[at]
    total = np.where(ends_well[:, None], pool.total, np.float32(0.0))
    n_rep = total.shape[1]
    names = pool.keys[keep]
    boxes = np.union1d(plain_keys, names[names < OUTSIDE])
    n, n_plain = len(boxes), plain.tally.n_cell
    n_row = n + bool(n_plain > len(plain_keys) or OUTSIDE in names)

    def place(keys: Integers) -> Integers:
        return np.where(keys < OUTSIDE, np.searchsorted(boxes, keys), n)

    rows = place(names)
    # outside is column n with or without a row, blown up the one behind it and behind all rows
    rename = np.concatenate([place(plain_keys), [n], [n_row + 1, n_row + 1]])
    taken = np.zeros(n_row, dtype=bool)
    taken[rows] = True
    spare = ~taken[rename[:n_plain]]
    plain_rows = rename[:n_plain][spare]
    tally, slots = plain.tally, plain.slots
    pointer, column, count = interleaved(
        chosen(tally.pointer, rename[tally.column], padded(tally.count, n_rep), spare, plain_rows),
        chosen(pool.pointer, place(pool.column), total, keep, rows),
        n_row,
    )
    bursts = row_sums(pointer, count)
    flown = pool.weight
    # what bursts to a cell set aside found is left out with them, in proportion
    left = np.zeros_like(flown)
    left[keep] = bursts[rows] / np.where(flown[keep] > 0.0, flown[keep], 1.0)
    sums = np.zeros((n_row, *pool.sums.shape[1:]))
    sums[plain_rows], sums[rows] = padded(plain.sums, n_rep)[spare], pool.sums[keep] * left[keep][:, :, None]
    sent = np.zeros(n_row, dtype=np.int64)
    sent[plain_rows], sent[rows] = plain.sent[spare], pool.bursts[keep]
    weighed = (pool.slot_total * np.repeat(left, np.diff(pool.slot_pointer), axis=0)).astype(np.float32)
    slot_pointer, slot, slot_count = interleaved(
        chosen(slots.pointer, slots.column, padded(slots.count, n_rep), spare, plain_rows),
        chosen(pool.slot_pointer, pool.slot, weighed, keep, rows),
        n_row,
    )
    everything = Collected(
        Tally(pointer, column.astype(np.int32), count, bursts, together=True),
        sums,
        SlotRows(slot_pointer, slot.astype(slots.column.dtype), slot_count, slots.n_sample, slots.n_interval),
        sent,
    )
    weight = flown.sum(axis=1)
    return Combined(boxes, everything, taken, 1.0 - float(weight[keep].sum() / weight.sum()))


def positions(pool: PooledRows) -> Integers:
    """Row of the cell in which each entry ends, shape (n_entry,); -1 where that cell has no row."""
    at = np.minimum(np.searchsorted(pool.keys, pool.column), len(pool.keys) - 1)
    return np.where(pool.keys[at] == pool.column, at, -1)


def padded(values: NDArray[Any], n_replicate: int) -> NDArray[Any]:
    """Values (n, replicates, ...) with empty replicates added: plain bursts may have fewer."""
    missing = n_replicate - values.shape[1]
    return np.pad(values, [(0, 0), (0, missing)] + [(0, 0)] * (values.ndim - 2)) if missing else values


Entries = tuple[Integers, Integers, NDArray[Any], NDArray[np.float32]]


def chosen(
    pointer: Integers, column: NDArray[Any], total: NDArray[Any], use: NDArray[np.bool_], rows: Integers
) -> Entries:
    """Entries above zero of the rows marked in use (n_row,), which become the rows `rows` of the whole.

    Returns those rows, their lengths, and their columns and totals one after the other.
    """
    lengths = np.diff(pointer)
    entry = np.repeat(use, lengths) & (total != 0).any(axis=1)
    live = np.bincount(np.repeat(np.arange(len(use)), lengths)[entry], minlength=len(use))
    return rows, live[use], column[entry], total[entry].astype(np.float32)


def interleaved(one: Entries, two: Entries, n_row: int) -> tuple[Integers, NDArray[Any], NDArray[np.float32]]:
    """Compressed rows from two sources; each row comes from one of them."""
    pointer = np.zeros(n_row + 1, dtype=np.int64)
    for rows, lengths, _, _ in (one, two):
        pointer[rows + 1] = lengths
    np.cumsum(pointer, out=pointer)
    column = np.empty(int(pointer[-1]), dtype=np.int64)
    total = np.empty((int(pointer[-1]), two[3].shape[1]), dtype=np.float32)
    for rows, lengths, columns, totals in (one, two):
        begin = np.concatenate([[0], np.cumsum(lengths)])[:-1]
        at = np.arange(len(columns)) + np.repeat(pointer[rows] - begin, lengths)
        column[at], total[at] = columns, totals
    return pointer, column, total
