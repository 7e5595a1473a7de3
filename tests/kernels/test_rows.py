"""Static kernels that turn end points into rows, each against a plain version and against its own Python text."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from perdure._kernels.assemble import merge_repeats, place_rows
from perdure._kernels.rows import (
    BLOWN,
    OUTSIDE,
    count_rows,
    count_slots,
    find_ids,
    insert_keys,
    locate,
    sum_rows,
)

Kernel = Callable[..., Any]


@pytest.fixture(params=["compiled", "python"])
def plainly(request: pytest.FixtureRequest) -> Callable[[Kernel], Kernel]:
    """A kernel as compiled, or the Python function that it was made from."""

    def chosen(kernel: Any) -> Kernel:
        if request.param == "compiled":
            return kernel  # type: ignore[no-any-return]

        def interpreted(*arguments: Any) -> Any:
            # the interpreter warns where the compiled code wraps around (hashes) or goes through nan
            with np.errstate(over="ignore", invalid="ignore"):
                return kernel.py_func(*arguments)

        return interpreted

    return chosen


def keys_of(kernel: Kernel, points: Any, lower: Any, width: Any, counts: Any, periodic: Any) -> np.ndarray:
    state = np.array(points, dtype=float, ndmin=2)
    key = np.full(state.shape[1], -9, dtype=np.int64)
    kernel(state, np.array(lower), np.array(width), np.array(counts), np.array(periodic), key)
    return key


@pytest.mark.parametrize(
    ("x", "open_key", "wrapped_key"),
    [
        (0.0, 0, 0), (-0.0, 0, 0), (0.999, 0, 0), (1.0, 1, 1), (3.999, 3, 3), (4.0, OUTSIDE, 0), (4.5, OUTSIDE, 0),
        (-1e-20, OUTSIDE, 3), (-0.5, OUTSIDE, 3), (-4.0, OUTSIDE, 0), (401.5, OUTSIDE, 1),
        (math.inf, OUTSIDE, OUTSIDE), (-math.inf, OUTSIDE, OUTSIDE), (1e300, OUTSIDE, None),
        (math.nan, BLOWN, BLOWN),
    ],
)  # fmt: skip
def test_locate_on_an_axis(
    plainly: Callable[[Kernel], Kernel], x: float, open_key: int, wrapped_key: int | None
) -> None:
    """Boxes hold their lower edge; a periodic axis has no outside, except for points that are not numbers."""
    assert keys_of(plainly(locate), [[x]], [0.0], [1.0], [4], [False])[0] == open_key
    found = keys_of(plainly(locate), [[x]], [0.0], [1.0], [4], [True])[0]
    assert found == wrapped_key if wrapped_key is not None else 0 <= found < 4


def test_locate_agrees_with_plain_arithmetic(plainly: Callable[[Kernel], Kernel]) -> None:
    """Three components, the second periodic; row-major, the last component fastest."""
    rng = np.random.default_rng(1)
    points = rng.uniform(-3.0, 3.0, (3, 2000))
    lower, width, counts = np.array([-2.0, -1.0, 0.5]), np.array([0.3, 0.25, 0.4]), np.array([11, 8, 5])
    index = np.floor((points - lower[:, None]) / width[:, None]).astype(int)
    index[1] %= 8
    outside = ((index < 0) | (index >= counts[:, None])).any(axis=0)
    expected = np.where(outside, OUTSIDE, (index[0] * 8 + index[1]) * 5 + index[2])
    found = keys_of(plainly(locate), points, lower, width, counts, [False, True, False])
    np.testing.assert_array_equal(found, expected)
    assert 0 < outside.sum() < 2000


def test_nan_in_any_component_is_blown(plainly: Callable[[Kernel], Kernel]) -> None:
    points = [[math.nan, 0.5, 9.0, 0.5], [0.5, math.nan, math.nan, 9.0]]
    found = keys_of(plainly(locate), points, [0.0, 0.0], [1.0, 1.0], [2, 2], [False, False])
    np.testing.assert_array_equal(found, [BLOWN, BLOWN, BLOWN, OUTSIDE])


def test_keys_reach_the_largest_lattice() -> None:
    """The last box of a lattice of 2**56."""
    found = keys_of(locate, [[255.5], [2.0**48 - 0.5]], [0.0, 0.0], [1.0, 1.0], [2**8, 2**48], [False, False])
    assert found[0] == 2**56 - 1


def rows_of(kernel: Kernel, key: np.ndarray, first: np.ndarray, n_rep: int) -> tuple[np.ndarray, ...]:
    pointer = np.empty(len(first), dtype=np.int64)
    column = np.empty(len(key), dtype=np.int64)
    count = np.full((len(key), n_rep), 99, dtype=np.uint32)
    n = kernel(key, first, n_rep, np.empty(len(key), dtype=np.int64), pointer, column, count)
    return pointer, column[:n], count[:n]


@pytest.mark.parametrize(("size", "n_rep"), [(2, 2), (44, 2), (48, 4), (48, 8), (50, 2), (52, 4), (512, 8), (6, 1)])
def test_count_rows_agrees_with_unique(plainly: Callable[[Kernel], Kernel], size: int, n_rep: int) -> None:
    """Sizes on both sides of 48, where another way of sorting takes over."""
    rng = np.random.default_rng(size)
    first = np.arange(5, dtype=np.int64) * size
    key = rng.integers(0, 12, 4 * size) * 2**40
    key[rng.random(4 * size) < 0.1] = OUTSIDE
    key[rng.random(4 * size) < 0.1] = BLOWN
    pointer, column, count = rows_of(plainly(count_rows), key, first, n_rep)
    assert pointer[-1] == len(column)
    for i in range(4):
        mine = key[i * size : (i + 1) * size].reshape(n_rep, -1)
        part = slice(pointer[i], pointer[i + 1])
        np.testing.assert_array_equal(column[part], np.unique(mine))
        expected = (mine[None] == column[part][:, None, None]).sum(axis=2)
        np.testing.assert_array_equal(count[part], expected)


def test_count_rows_of_boxes_of_different_size() -> None:
    """An empty box has an empty row."""
    key = np.array([3, 3, 1, 1, 1, 2], dtype=np.int64)
    pointer, column, count = rows_of(count_rows, key, np.array([0, 4, 4, 6]), 2)
    np.testing.assert_array_equal(pointer, [0, 2, 2, 4])
    np.testing.assert_array_equal(column, [1, 3, 1, 2])
    np.testing.assert_array_equal(count, [[0, 2], [2, 0], [1, 0], [0, 1]])


def slot_rows(kernel: Kernel, slots: np.ndarray, first: np.ndarray, n_rep: int, n_slot: int, room: int) -> Any:
    n_dim = slots.shape[1]
    board = np.zeros((n_dim * n_slot, n_rep), dtype=np.int64)
    pointer = np.empty(len(first), dtype=np.int64)
    column, count = np.empty(room, dtype=np.uint16), np.full((room, n_rep), 9, dtype=np.uint32)
    n = kernel(slots, first, n_rep, n_slot, board, pointer, column, count)
    return n, pointer, column, count, board


def test_count_slots_agrees_with_bincount(plainly: Callable[[Kernel], Kernel]) -> None:
    rng = np.random.default_rng(2)
    n_rep, n_slot, size, n_box, n_dim = 4, 7, 12, 3, 2
    slots = rng.integers(0, n_slot, (5, n_dim, n_box * size)).astype(np.uint16)
    slots[:, 1] = np.minimum(slots[:, 1], 2)
    first = np.arange(n_box + 1, dtype=np.int64) * size
    n, pointer, column, count, board = slot_rows(plainly(count_slots), slots, first, n_rep, n_slot, 60)
    dense = np.zeros((n_box, n_dim * n_slot, n_rep), dtype=int)
    for i in range(n_box):
        dense[i, column[pointer[i] : pointer[i + 1]]] = count[pointer[i] : pointer[i + 1]]
        assert (np.diff(column[pointer[i] : pointer[i + 1]].astype(int)) > 0).all()
    for i in range(n_box):
        for k in range(n_dim):
            for r in range(n_rep):
                begin = i * size + r * size // n_rep
                mine = slots[:, k, begin : begin + size // n_rep]
                expected = np.bincount(mine.ravel(), minlength=n_slot)
                np.testing.assert_array_equal(dense[i, k * n_slot : (k + 1) * n_slot, r], expected)
    assert n == pointer[-1] == np.count_nonzero(dense.sum(axis=2))
    assert (count[:n].sum(axis=1) > 0).all()
    assert not board.any()


def test_count_slots_says_when_there_is_no_room() -> None:
    slots = np.array([[[0, 1, 2, 3]]], dtype=np.uint16)
    first = np.array([0, 4], dtype=np.int64)
    assert slot_rows(count_slots, slots, first, 2, 5, 4)[0] == 4
    assert slot_rows(count_slots, slots, first, 2, 5, 3)[0] == -1


def test_sum_rows_agrees_with_numpy(plainly: Callable[[Kernel], Kernel]) -> None:
    sums = np.random.default_rng(3).standard_normal((3, 40))
    out = np.full((5, 2, 3), 9.0)
    plainly(sum_rows)(sums, np.arange(6, dtype=np.int64) * 8, 2, out)
    np.testing.assert_allclose(out, sums.reshape(3, 5, 2, 4).sum(axis=3).transpose(1, 2, 0), rtol=1e-14, atol=1e-14)


def test_table_of_keys_agrees_with_a_dictionary(plainly: Callable[[Kernel], Kernel]) -> None:
    """A table as full as it is ever allowed to be, in two goes; keys that are alike in their low or high bits."""
    rng = np.random.default_rng(4)
    drawn = np.concatenate([np.arange(300), rng.integers(0, 2**56, 300), np.arange(300) * 2**44, [2**56 - 1]])
    keys = rng.permutation(np.unique(drawn)).astype(np.int64)
    table_key, table_id = np.full(2048, -1, dtype=np.int64), np.zeros(2048, dtype=np.int32)
    plainly(insert_keys)(table_key, table_id, keys[:400], 0)
    plainly(insert_keys)(table_key, table_id, keys[400:], 400)
    known = {int(key): k for k, key in enumerate(keys)}
    asked = rng.permutation(np.concatenate([keys, rng.integers(0, 2**56, 500), [OUTSIDE, BLOWN, 301, 302]]))
    out = np.empty(len(asked), dtype=np.int32)
    plainly(find_ids)(table_key, table_id, asked, -5, out)
    np.testing.assert_array_equal(out, [known.get(int(key), -5) for key in asked])


@pytest.mark.parametrize("ascending", [True, False])
@pytest.mark.parametrize("renamed", [True, False])
def test_place_rows_agrees_with_plain_version(
    plainly: Callable[[Kernel], Kernel], ascending: bool, renamed: bool
) -> None:
    rng = np.random.default_rng(5)
    lengths = np.array([3, 0, 5, 1])
    place = np.array([2, 0, 3, 1], dtype=np.int32)
    block_pointer = np.concatenate([[0], np.cumsum(lengths)])
    block_column = np.concatenate([np.sort(rng.choice(9, n, replace=False)) for n in lengths]).astype(np.int32)
    block_count = rng.integers(0, 250, (9, 2)).astype(np.uint8)
    rename = rng.permutation(9).astype(np.int32) if renamed else np.zeros(0, dtype=np.int32)
    pointer = np.concatenate([[0], np.cumsum(lengths[np.argsort(place)])])
    column, count = np.full(9, -1, dtype=np.int32), np.zeros((9, 2), dtype=np.uint16)
    plainly(place_rows)(block_pointer, block_column, block_count, place, pointer, rename, ascending, column, count)
    for i in range(4):
        mine = slice(block_pointer[i], block_pointer[i + 1])
        names = rename[block_column[mine]] if renamed else block_column[mine]
        order = np.argsort(names) if ascending else np.arange(len(names))
        there = slice(pointer[place[i]], pointer[place[i] + 1])
        np.testing.assert_array_equal(column[there], names[order])
        np.testing.assert_array_equal(count[there], block_count[mine][order])


def test_merge_repeats_adds_up_neighbours_of_one_row(plainly: Callable[[Kernel], Kernel]) -> None:
    """Not across the border of two rows, and an empty row stays empty."""
    pointer = np.array([0, 4, 4, 6, 9], dtype=np.int64)
    column = np.array([1, 1, 1, 5, 5, 7, 2, 3, 3], dtype=np.int32)
    count = np.arange(18, dtype=np.uint16).reshape(9, 2)
    n = plainly(merge_repeats)(pointer, column, count)
    assert n == 6
    np.testing.assert_array_equal(pointer, [0, 2, 2, 4, 6])
    np.testing.assert_array_equal(column[:n], [1, 5, 5, 7, 2, 3])
    np.testing.assert_array_equal(count[:n], [[6, 9], [6, 7], [8, 9], [10, 11], [12, 13], [30, 32]])
