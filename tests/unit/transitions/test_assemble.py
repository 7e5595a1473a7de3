"""From blocks in the order of discovery to one tally in the order of the keys."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from perdure._records import BoxGrid, Tally
from perdure._transitions import Collected, RowStore, with_outside, without
from unit.sampling.support import plan_of

N_REP, N_SLOT, N_SUM = 2, 6, 3
PLAN = plan_of(
    BoxGrid(np.zeros(1), np.ones(1), np.array([50]), np.array([False])),
    per_cell=20,
    n_replicate=N_REP,
    n_step=9,
    stride=2,
)


class Blocks:
    """Dense random rows of `n` cells whose targets are among `n_known` cells, cut into blocks of compressed rows."""

    def __init__(self, n: int, n_known: int, seed: int = 1) -> None:
        rng = np.random.default_rng(seed)
        chance = rng.exponential(size=(n, n_known + 2)) * (rng.random((n, n_known + 2)) < 0.6)
        chance[:, 0] += 1e-3
        chance /= chance.sum(axis=1, keepdims=True)
        self.n, self.n_known = n, n_known
        self.counts = np.stack([rng.multinomial(10, chance) for _ in range(N_REP)], axis=2)
        self.slots = rng.integers(0, 3, (n, N_SLOT, N_REP))
        self.sums = rng.standard_normal((n, N_REP, N_SUM))

    @staticmethod
    def compressed(dense: np.ndarray, dtype: Any) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        rows, column = np.nonzero(dense.any(axis=2))
        pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=len(dense)))])
        return pointer.astype(np.int64), column, dense[rows, column].astype(dtype)

    def store(self, cuts: list[int]) -> RowStore:
        """A store that took the blocks between the cuts, their counts in types of different width."""
        store = RowStore(N_REP)
        for k, (a, z) in enumerate(zip([0, *cuts], [*cuts, self.n], strict=True)):
            pointer, column, count = self.compressed(self.counts[a:z], np.uint8 if k % 2 else np.uint16)
            # as cover.ids names them: -2 outside, -1 blown up
            names = np.where(column >= self.n_known, column - self.n_known - 2, column).astype(np.int32)
            slot_pointer, slot, slot_count = self.compressed(self.slots[a:z], np.uint8)
            block = SimpleNamespace(
                pointer=pointer,
                count=count,
                sums=self.sums[a:z],
                slot_pointer=slot_pointer,
                slot=slot.astype(np.uint16),
                slot_count=slot_count,
            )
            store.add(block, names)
        return store


def dense_of(tally: Tally) -> np.ndarray:
    """Counts (n_cell, n_cell + 2, n_replicate); fails if a row names a column twice or out of order."""
    out = np.zeros((tally.n_cell, tally.n_cell + 2, tally.count.shape[1]), dtype=int)
    for i in range(tally.n_cell):
        part = slice(tally.pointer[i], tally.pointer[i + 1])
        assert (np.diff(tally.column[part].astype(int)) > 0).all()
        out[i, tally.column[part]] = tally.count[part]
    return out


@pytest.mark.parametrize("cuts", [[], [4], [1, 2, 9]])
def test_rows_come_in_the_order_asked_for(cuts: list[int]) -> None:
    """Rows, columns, sums and marginals together; the counts are those that went in."""
    blocks, order = Blocks(12, 12), np.random.default_rng(2).permutation(12)
    found = blocks.store(cuts).finish(order, PLAN, 4, 12)
    expected = blocks.counts[order][:, np.concatenate([order, [12, 13]])]
    np.testing.assert_array_equal(dense_of(found.tally), expected)
    np.testing.assert_array_equal(found.tally.bursts, np.full((12, N_REP), 10))
    np.testing.assert_array_equal(found.sent, np.full(12, 20))
    np.testing.assert_array_equal(found.sums, blocks.sums[order])
    slots = np.zeros_like(blocks.slots)
    for i in range(12):
        part = slice(found.slots.pointer[i], found.slots.pointer[i + 1])
        slots[i, found.slots.column[part]] = found.slots.count[part]
    np.testing.assert_array_equal(slots, blocks.slots[order])
    assert (found.slots.n_sample, found.slots.n_interval) == (4, 4)


def test_cells_without_bursts_count_as_outside() -> None:
    """Known cells that were never sent bursts: arrivals there are added to those outside, each row naming it once."""
    blocks, order = Blocks(8, 11), np.random.default_rng(3).permutation(8)
    found = blocks.store([3]).finish(order, PLAN, 4, 11)
    expected = blocks.counts[order]
    lost = expected[:, 8:12].sum(axis=1, keepdims=True)
    whole = np.concatenate([expected[:, order], lost, expected[:, 12:]], axis=1)
    np.testing.assert_array_equal(dense_of(found.tally), whole)
    np.testing.assert_array_equal(whole.sum(axis=1), found.tally.bursts)


def collected(seed: int = 4) -> tuple[Collected, np.ndarray]:
    blocks = Blocks(9, 9, seed)
    return blocks.store([5]).finish(np.arange(9), PLAN, 4, 9), blocks.counts


def test_with_outside_gives_the_outside_a_row() -> None:
    """Outside becomes cell 9 of 10, its repeated names are added up, blown up moves on to 11."""
    before, counts = collected()
    row = SimpleNamespace(
        pointer=np.array([0, 4]),
        count=np.array([[300, 1], [2, 2], [3, 3], [295, 594]], dtype=np.uint32),
        sums=np.full((1, N_REP, N_SUM), 5.0),
        slot_pointer=np.array([0, 1]),
        slot=np.array([2], dtype=np.uint16),
        slot_count=np.array([[7, 8]], dtype=np.uint32),
    )
    grown = with_outside(before, row, np.array([9, 3, 10, 9], dtype=np.int32), 1200)
    expected = np.zeros((10, 12, N_REP), dtype=int)
    expected[:9, :10], expected[:9, 11] = counts[:, :10], counts[:, 10]
    expected[9, 9], expected[9, 3], expected[9, 11] = [595, 595], [2, 2], [3, 3]
    np.testing.assert_array_equal(dense_of(grown.tally), expected)
    np.testing.assert_array_equal(grown.tally.bursts[-1], [600, 600])
    np.testing.assert_array_equal(expected.sum(axis=1), grown.tally.bursts)
    np.testing.assert_array_equal(grown.sent, [20] * 9 + [1200])
    np.testing.assert_array_equal(grown.sums[:9], before.sums)
    np.testing.assert_array_equal(grown.sums[9], row.sums[0])
    part = slice(grown.slots.pointer[9], grown.slots.pointer[10])
    np.testing.assert_array_equal(grown.slots.column[part], [2])
    np.testing.assert_array_equal(grown.slots.count[part], [[7, 8]])


def test_cells_left_out_are_outside_for_the_others() -> None:
    """Their rows go, with sums, marginals and bursts sent; arrivals in them are added to those outside."""
    before, counts = collected()
    before = replace(before, sent=np.arange(9) * 10)
    drop = np.isin(np.arange(9), [0, 4, 8])
    keep = np.flatnonzero(~drop)
    kept = without(before, drop)
    left = counts[keep]
    expected = np.concatenate([left[:, keep], left[:, [0, 4, 8, 9]].sum(axis=1, keepdims=True), left[:, 10:]], axis=1)
    np.testing.assert_array_equal(dense_of(kept.tally), expected)
    np.testing.assert_array_equal(kept.sent, keep * 10)
    np.testing.assert_array_equal(kept.sums, before.sums[keep])
    for k, i in enumerate(keep):
        mine = slice(kept.slots.pointer[k], kept.slots.pointer[k + 1])
        was = slice(before.slots.pointer[i], before.slots.pointer[i + 1])
        np.testing.assert_array_equal(kept.slots.column[mine], before.slots.column[was])
        np.testing.assert_array_equal(kept.slots.count[mine], before.slots.count[was])
    assert left[:, [0, 4, 8]].any()


def test_rows_notice_another_order() -> None:
    """Negative control of the comparison of orders."""
    blocks, order = Blocks(12, 12), np.random.default_rng(2).permutation(12)
    found = blocks.store([4]).finish(order, PLAN, 4, 12)
    assert not np.array_equal(dense_of(found.tally), blocks.counts)
