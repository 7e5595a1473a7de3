"""Rows arrive block by block in the order of discovery and leave as one tally in the order of the keys."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.assemble import merge_repeats, place_rows
from perdure._records import Floats, Integers, Plan, SlotRows, Tally

__all__ = ["Collected", "RowStore", "with_outside", "without"]


class Rows(Protocol):
    """What `RowStore` keeps of a block."""

    @property
    def pointer(self) -> Integers: ...
    @property
    def count(self) -> NDArray[Any]: ...
    @property
    def sums(self) -> Floats: ...
    @property
    def slot_pointer(self) -> Integers: ...
    @property
    def slot(self) -> NDArray[Any]: ...
    @property
    def slot_count(self) -> NDArray[Any]: ...


@dataclass(frozen=True)
class Collected:
    """All rows, in the order of the keys.

    Attributes
    ----------
    tally : Tally
    sums : ndarray, shape (n_cell, n_replicate, n_sum)
    slots : SlotRows
    sent : ndarray of int64, shape (n_cell,)
        Bursts sent from each cell, whatever they weigh.
    """

    tally: Tally
    sums: Floats
    slots: SlotRows
    sent: Integers


class RowStore:
    """Keeps finished blocks compactly until all rows are there."""

    def __init__(self, n_replicate: int) -> None:
        self.n_replicate = n_replicate
        self._rows: list[tuple[Integers, NDArray[Any], NDArray[Any]]] = []
        self._slots: list[tuple[Integers, NDArray[Any], NDArray[Any]]] = []
        self._sums: list[Floats] = []

    def add(self, block: Rows, column: NDArray[np.int32]) -> None:
        """Take a block whose targets were numbered as `column` (in the order of discovery)."""
        self._rows.append((block.pointer, column, block.count))
        self._slots.append((block.slot_pointer, block.slot, block.slot_count))
        self._sums.append(block.sums)

    def finish(self, order: Integers, plan: Plan, n_interval: int, n_known: int) -> Collected:
        """Everything in a new order; the store is empty afterwards.

        `order[k]` is the number, by discovery, of the cell that comes k-th. Of the `n_known` cells that were named
        those beyond `len(order)` were sent no bursts: they count as outside.
        """
        n = len(order)
        rank = np.full(n_known + 2, n, dtype=np.int32)
        rank[order] = np.arange(n, dtype=np.int32)
        rank[-1] = n + 1
        slot_type = self._slots[0][1].dtype
        pointer, column, count = joined(self._rows, rank[:n], rank, np.int32, self.n_replicate, ascending=True)
        slots = joined(self._slots, rank[:n], None, slot_type, self.n_replicate, ascending=False)
        sums = np.concatenate(self._sums)[order]
        self._sums = []
        bursts = np.full((n, self.n_replicate), plan.per_cell // self.n_replicate, dtype=np.int64)
        tally = Tally(pointer, column, count, bursts)
        if n_known > n:
            tally = merged(tally)
        return Collected(tally, sums, SlotRows(*slots, plan.n_step // plan.stride, n_interval), bursts.sum(axis=1))


def with_outside(collected: Collected, row: Rows, column: NDArray[np.int32], n_burst: int) -> Collected:
    """The outside state becomes the last cell, with a row of its own.

    `column` numbers the targets of the row as in the tally (n_cell: outside again, n_cell + 1: blown up); `n_burst`
    is the number of its bursts. Columns of blown-up bursts move on by one.
    """
    tally, slots = collected.tally, collected.slots
    n, n_rep = tally.bursts.shape

    def renamed(names: NDArray[np.int32]) -> NDArray[np.int32]:
        return np.where(names == n + 1, n + 2, names).astype(np.int32)

    order = np.argsort(column, kind="stable")
    grown = Tally(
        np.append(tally.pointer, tally.pointer[-1] + len(column)),
        np.concatenate([renamed(tally.column), renamed(column[order])]),
        np.concatenate([tally.count, row.count[order]]),
        np.concatenate([tally.bursts, np.full((1, n_rep), n_burst // n_rep)]),
    )
    grown = merged(grown)
    more = SlotRows(
        np.append(slots.pointer, slots.pointer[-1] + len(row.slot)),
        np.concatenate([slots.column, row.slot]),
        np.concatenate([slots.count, row.slot_count]),
        slots.n_sample,
        slots.n_interval,
    )
    sent = np.append(collected.sent, n_burst)
    return Collected(grown, np.concatenate([collected.sums, row.sums]), more, sent)


def without(collected: Collected, drop: NDArray[np.bool_]) -> Collected:
    """Without the cells marked in drop (n_cell,): bursts that ended in one of them ended outside."""
    tally, slots, keep = collected.tally, collected.slots, ~drop
    n = int(keep.sum())
    names = np.full(len(drop) + 2, n, dtype=np.int32)
    names[:-2][keep] = np.arange(n, dtype=np.int32)
    names[-1] = n + 1
    pointer, column, count = kept_rows(tally.pointer, tally.column, tally.count, keep)
    column = names[column]
    row = np.repeat(np.arange(n), np.diff(pointer))
    order = np.lexsort((column, row))
    kept = merged(Tally(pointer, column[order], count[order], tally.bursts[keep]))
    more = SlotRows(*kept_rows(slots.pointer, slots.column, slots.count, keep), slots.n_sample, slots.n_interval)
    return Collected(kept, collected.sums[keep], more, collected.sent[keep])


def kept_rows(
    pointer: Integers, column: NDArray[Any], count: NDArray[Any], keep: NDArray[np.bool_]
) -> tuple[Integers, NDArray[Any], NDArray[Any]]:
    """The rows marked in keep (n_row,) of compressed rows."""
    lengths = np.diff(pointer)
    entry = np.repeat(keep, lengths)
    return np.concatenate([[0], np.cumsum(lengths[keep])]), column[entry], count[entry]


def joined(
    blocks: list[tuple[Integers, NDArray[Any], NDArray[Any]]],
    rank: NDArray[np.int32],
    rename: NDArray[np.int32] | None,
    dtype: Any,
    n_replicate: int,
    *,
    ascending: bool,
) -> tuple[Integers, NDArray[Any], NDArray[Any]]:
    """Concatenate the rows of blocks, put row i in place `rank[i]`, rename the columns; blocks are used up."""
    lengths = np.concatenate([np.diff(pointer) for pointer, _, _ in blocks])
    pointer = np.zeros(len(lengths) + 1, dtype=np.int64)
    pointer[1:][rank] = lengths
    np.cumsum(pointer, out=pointer)
    column = np.empty(int(pointer[-1]), dtype=dtype)
    widest: Sequence[Any] = [count.dtype for _, _, count in blocks]
    count = np.empty((int(pointer[-1]), n_replicate), dtype=np.result_type(*widest))
    names = np.zeros(0, dtype=np.int32) if rename is None else rename
    at = 0
    while blocks:
        block = blocks.pop(0)
        place_rows(*block, rank[at : at + len(block[0]) - 1], pointer, names, ascending, column, count)
        at += len(block[0]) - 1
    return pointer, column, count


def merged(tally: Tally) -> Tally:
    """Tally whose rows name each column once; its arrays are used up."""
    # sums of repeats may need one more byte than the counts
    peak = int(tally.bursts.max(initial=0))
    count = tally.count.astype(np.promote_types(tally.count.dtype, np.min_scalar_type(peak)), copy=False)
    n_entry = merge_repeats(tally.pointer, tally.column, count)
    return Tally(tally.pointer, tally.column[:n_entry], count[:n_entry], tally.bursts)
