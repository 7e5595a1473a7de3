"""Pools of weighted rows against adding up everything at once."""

from __future__ import annotations

from itertools import pairwise
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from perdure._transitions import Pool, PooledRows, row_sums

N_REP, N_SUM, N_SLOT, N_KEY = 3, 2, 9, 60
PARTS = ("total", "slots", "sums", "weight", "bursts")


class Dense:
    """Rows of weights as dense arrays over all keys; whole numbers, so that sums are exact in single precision."""

    def __init__(self, n_row: int, seed: int) -> None:
        rng = np.random.default_rng(seed)
        self.keys = np.sort(rng.choice(N_KEY, n_row, replace=False))
        shapes = {
            "total": (N_KEY, N_KEY, N_REP),
            "slots": (N_KEY, N_SLOT, N_REP),
            "sums": (N_KEY, N_REP, N_SUM),
            "weight": (N_KEY, N_REP),
            "bursts": (N_KEY,),
        }
        for name, shape in shapes.items():
            part = rng.integers(1, 50, shape) * (rng.random(shape) < 0.3)
            part[~np.isin(np.arange(N_KEY), self.keys)] = 0
            setattr(self, name, part)

    def rows(self) -> Any:
        """What a sweep would give."""
        pointer, column, total = compressed(self.total[self.keys])
        slot_pointer, slot, slot_total = compressed(self.slots[self.keys])
        return SimpleNamespace(
            keys=self.keys,
            pointer=pointer,
            column=column.astype(np.int64),
            total=total,
            sums=self.sums[self.keys].astype(float),
            weight=self.weight[self.keys].astype(float),
            slot_pointer=slot_pointer,
            slot=slot.astype(np.uint16),
            slot_total=slot_total,
            bursts=self.bursts[self.keys],
        )


def compressed(dense: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rows, column = np.nonzero(dense.any(axis=2))
    pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=len(dense)))]).astype(np.int64)
    return pointer, column, dense[rows, column].astype(np.float32)


def dense_of(rows: PooledRows) -> dict[str, np.ndarray]:
    """Everything spread over all keys; fails if a row names a column twice or out of order."""
    out = {"total": np.zeros((N_KEY, N_KEY, N_REP)), "slots": np.zeros((N_KEY, N_SLOT, N_REP))}
    for k, key in enumerate(rows.keys):
        for name, pointer, column, total in (
            ("total", rows.pointer, rows.column, rows.total),
            ("slots", rows.slot_pointer, rows.slot, rows.slot_total),
        ):
            part = slice(pointer[k], pointer[k + 1])
            assert (np.diff(column[part].astype(int)) > 0).all()
            out[name][key, column[part]] = total[part]
    for name in ("sums", "weight", "bursts"):
        value = getattr(rows, name)
        out[name] = np.zeros((N_KEY, *value.shape[1:]))
        out[name][rows.keys] = value
    return out


def pooled(parts: list[Dense]) -> Pool:
    pool = Pool()
    for part in parts:
        pool.add(part.rows())
    return pool


SIZES = [30, 1, 1, 0, 7, 2, 55, 12, 1, 20, 3, 3]


@pytest.mark.parametrize(
    "sizes", [SIZES, SIZES[::-1], sorted(SIZES), sorted(SIZES, reverse=True), [5], [0, 4], [4, 0], [60] * 6]
)
def test_a_pool_is_the_sum_of_its_rows(sizes: list[int]) -> None:
    """Whatever the order of the sizes; keys ascend, each standing once."""
    parts = [Dense(n, seed) for seed, n in enumerate(sizes)]
    pool = pooled(parts)
    whole = pool.whole()
    found = dense_of(whole)
    for name in PARTS:
        np.testing.assert_array_equal(found[name], sum(getattr(part, name) for part in parts), err_msg=name)
    np.testing.assert_array_equal(whole.keys, np.unique(np.concatenate([part.keys for part in parts])))
    assert pool.n_sweep == len(sizes)
    assert whole.total.dtype == np.float32
    assert whole.slot.dtype == np.uint16


def test_a_sum_notices_what_is_missing() -> None:
    """Negative control: one sweep of many left out."""
    parts = [Dense(n, seed) for seed, n in enumerate(SIZES)]
    found = dense_of(pooled(parts[1:]).whole())
    for name in PARTS:
        assert not np.array_equal(found[name], sum(getattr(part, name) for part in parts)), name


def test_a_pool_goes_on_after_it_was_read() -> None:
    """And the rows that were given stay as they are."""
    parts = [Dense(n, seed) for seed, n in enumerate(SIZES)]
    pool, first = pooled(parts[:5]), parts[0].rows()
    early = dense_of(pool.whole())
    pool.add(first, 4)
    given = dense_of(first)
    for part in parts[5:]:
        pool.add(part.rows())
    found = dense_of(pool.whole())
    for name in PARTS:
        np.testing.assert_array_equal(early[name], sum(getattr(part, name) for part in parts[:5]))
        np.testing.assert_array_equal(found[name], sum(getattr(part, name) for part in [*parts, parts[0]]))
        np.testing.assert_array_equal(dense_of(first)[name], given[name])
    assert pool.n_sweep == len(parts) + 4


@pytest.mark.parametrize("sizes", [[6] * 200, SIZES * 15, [1] * 300])
def test_the_stack_of_waiting_rows_is_bounded(sizes: list[int]) -> None:
    """Each more than twice as long as the next: memory within twice that of the first, height within a logarithm."""
    pool, most = Pool(), 0
    for seed, n in enumerate(sizes):
        pool.add(Dense(n, seed).rows())
        lengths = [len(rows.column) for rows in pool._stack]
        assert all(a > 2 * b for a, b in pairwise(lengths))
        assert sum(lengths) <= 2 * lengths[0]
        entries = sum(rows.total.nbytes + rows.column.nbytes + rows.slot_total.nbytes for rows in pool._stack)
        whole = sum(part.nbytes for rows in pool._stack for part in vars(rows).values() if isinstance(part, np.ndarray))
        assert entries < pool.nbytes <= whole
        most = max(most, len(lengths))
    assert 1 < most <= 1 + np.log2(N_KEY * N_KEY), "rows must wait for the bound to mean something"


def test_row_sums_are_in_double_precision() -> None:
    """Many small weights beside a large one; single precision would lose them (negative control)."""
    total = np.full((100_001, 1), 1e-4, dtype=np.float32)
    total[0] = 1e4
    pointer = np.array([0, 0, 100_001, 100_001])
    exact = 1e4 + 100_000 * float(np.float32(1e-4))
    np.testing.assert_allclose(row_sums(pointer, total)[:, 0], [0.0, exact, 0.0], rtol=1e-12)
    assert abs(float(np.cumsum(total)[-1]) - exact) > 1.0
