"""Equal boxes: keys, seed points, streams, the lattice, tightening and hulls."""

from __future__ import annotations

import numpy as np
import pytest

from perdure._kernels.rows import OUTSIDE
from perdure._partition import Boxes, hull, lattice, tightened
from perdure._partition.boxes import MOST_KEYS
from perdure._records import BoxGrid
from perdure._sampling import sobol_base
from perdure._streams import seed_words

EVERYWHERE = np.array([[-np.inf, np.inf]] * 3)


def grid_of(lower: list[float], width: list[float], counts: list[int], periodic: list[bool] | None = None) -> BoxGrid:
    return BoxGrid(
        np.array(lower),
        np.array(width),
        np.array(counts, dtype=np.int64),
        np.array(periodic or [False] * len(lower)),
    )


def boxes_of(grid: BoxGrid, size: int = 0, seed: int = 1, ends: np.ndarray | None = None) -> Boxes:
    base = sobol_base(seed, grid.n_dim, size) if size else np.zeros((0, grid.n_dim), dtype=np.uint32)
    return Boxes(grid, seed_words(seed, "bursts"), base, EVERYWHERE[: grid.n_dim] if ends is None else ends)


def seeds_of(cells: Boxes, keys: np.ndarray, per_cell: int, n_rep: int = 2, sweep: int = 0) -> np.ndarray:
    """Seed points, shape (n_dim, n_cell, per_cell)."""
    first = np.arange(len(keys) + 1, dtype=np.int64) * per_cell
    state = np.full((cells.n_dim, len(keys) * per_cell), np.nan)
    cells.fill_seeds(keys, first, n_rep, sweep, state)
    return state.reshape(cells.n_dim, len(keys), per_cell)


def streams_of(cells: Boxes, keys: np.ndarray, per_cell: int, sweep: int = 0) -> np.ndarray:
    first = np.arange(len(keys) + 1, dtype=np.int64) * per_cell
    stream = np.zeros(len(keys) * per_cell, dtype=np.uint64)
    cells.fill_streams(keys, first, sweep, stream)
    return stream.reshape(len(keys), per_cell)


GRID = grid_of([-2.0, 5.0, 1e3], [0.3, 2.0, 1e-3], [7, 3, 5])
KEYS = np.array([3, 0, 104, 51, 52], dtype=np.int64)


@pytest.mark.parametrize("size", [0, 16])
def test_seeds_lie_in_their_boxes(size: int) -> None:
    """And on all sides of the centre: the whole box is used."""
    cells = boxes_of(GRID, size)
    points = seeds_of(cells, KEYS, 32)
    key = np.empty(points[0].size, dtype=np.int64)
    cells.locate(np.ascontiguousarray(points.reshape(3, -1)), key)
    np.testing.assert_array_equal(key.reshape(5, 32), np.repeat(KEYS[:, None], 32, axis=1))
    place = (points - GRID.centres(KEYS).T[:, :, None]) / GRID.width[:, None, None]
    assert place.min(axis=2).max() < -0.25
    assert place.max(axis=2).min() > 0.25


def test_seeds_stay_between_the_ends() -> None:
    """In a box that straddles an end; a box that lies beyond altogether is filled as it is."""
    grid = grid_of([0.0], [1.0], [4])
    points = seeds_of(boxes_of(grid, 0, ends=np.array([[0.75, 2.25]])), np.arange(4), 400)[0]
    for row, (low, high) in zip(points, [(0.75, 1.0), (1.0, 2.0), (2.0, 2.25), (3.0, 4.0)], strict=True):
        assert low <= row.min() < low + 0.02 * (high - low)
        assert high - 0.02 * (high - low) < row.max() < high


@pytest.mark.parametrize("size", [0, 16])
def test_seeds_and_streams_do_not_depend_on_company(size: int) -> None:
    """Of a box: the same in any block, in any order, with more bursts per replicate for uniform seeds."""
    cells = boxes_of(GRID, size)
    together, streams = seeds_of(cells, KEYS, 32), streams_of(cells, KEYS, 32)
    for k in (4, 1):
        np.testing.assert_array_equal(seeds_of(cells, KEYS[k : k + 1], 32)[:, 0], together[:, k])
        np.testing.assert_array_equal(streams_of(cells, KEYS[k : k + 1], 32)[0], streams[k])
    np.testing.assert_array_equal(seeds_of(cells, KEYS[::-1].copy(), 32)[:, ::-1], together)
    np.testing.assert_array_equal(streams_of(cells, KEYS, 64)[:, :32], streams)


def test_seeds_and_streams_depend_on_seed_sweep_box_and_burst() -> None:
    cells, other = boxes_of(GRID, 16), boxes_of(GRID, 16, seed=2)
    words = np.concatenate(
        [streams_of(c, KEYS, 32, sweep).ravel() for c, sweep in ((cells, 0), (cells, 1), (other, 0))]
    )
    assert len(np.unique(words)) == len(words)
    points = np.concatenate(
        [seeds_of(c, KEYS, 32, 2, sweep)[0].ravel() for c, sweep in ((cells, 0), (cells, 1), (other, 0))]
    )
    assert len(np.unique(points)) == len(points)


def test_replicates_are_not_copies() -> None:
    """Each has its own shift of the same set: their means of the place in the box are not correlated."""
    points = seeds_of(boxes_of(grid_of([0.0], [1.0], [5000]), 8), np.arange(5000), 16)[0] % 1.0
    one, two = points[:, :8].mean(axis=1), points[:, 8:].mean(axis=1)
    assert abs(np.corrcoef(one, two)[0, 1]) * np.sqrt(5000) < 5.0
    assert np.corrcoef(one, one)[0, 1] * np.sqrt(5000) > 5.0


def spread(size: int) -> float:
    """Standard deviation over boxes of the mean of x y over the 64 seeds of a box of the unit square."""
    grid = grid_of([0.0, 0.0], [1.0, 1.0], [40, 40])
    points = seeds_of(boxes_of(grid, size), np.arange(1600), 64, 1) % 1.0
    means = (points[0] * points[1]).mean(axis=1)
    assert abs(means.mean() - 0.25) < 5.0 * means.std() / 40.0
    return float(means.std())


def test_sobol_seeds_are_stratified() -> None:
    """Independent points give sqrt(7/144/64) = 0.0276; 64 stratified ones less than a quarter of that."""
    plain, stratified = spread(0), spread(64)
    assert plain == pytest.approx(np.sqrt(7.0 / 144.0 / 64.0), rel=5.0 / np.sqrt(2.0 * 1600.0))
    assert stratified < plain / 4.0


def test_stratified_seeds_fill_every_interval_once() -> None:
    """A shifted net in base 2: 16 points put one into each sixteenth of a box, along every component."""
    points = seeds_of(boxes_of(GRID, 16), KEYS, 32)
    place = (points - GRID.centres(KEYS).T[:, :, None]) / GRID.width[:, None, None] + 0.5
    sixteenth = np.floor(16.0 * place).astype(int).reshape(3, 5, 2, 16)
    np.testing.assert_array_equal(np.sort(sixteenth, axis=3), np.broadcast_to(np.arange(16), (3, 5, 2, 16)))


def test_uniform_seeds_do_not() -> None:
    """Negative control of the strata."""
    points = seeds_of(boxes_of(GRID), KEYS, 32)
    place = (points - GRID.centres(KEYS).T[:, :, None]) / GRID.width[:, None, None] + 0.5
    sixteenth = np.sort(np.floor(16.0 * place).astype(int).reshape(3, 5, 2, 16), axis=3)
    assert (sixteenth != np.arange(16)).any()


def test_periodic_axis_wraps() -> None:
    cells = boxes_of(grid_of([-1.0, 0.0], [0.5, 1.0], [4, 2], [True, False]))
    key = np.empty(4, dtype=np.int64)
    cells.locate(np.array([[-1.25, 1.25, 0.75, 0.0], [0.5, 0.5, 1.5, 2.5]]), key)
    np.testing.assert_array_equal(key, [6, 0, 7, OUTSIDE])


def test_lattice_with_given_ends_is_that_range() -> None:
    fixed, periodic = np.ones((2, 2), dtype=bool), np.array([False, True])
    grid = lattice(np.array([-1.0, 2.0]), np.array([1.0, 5.0]), np.array([4, 6]), fixed, periodic)
    np.testing.assert_array_equal(grid.counts, [4, 6])
    np.testing.assert_allclose(grid.lower, [-1.0, 2.0])
    np.testing.assert_allclose(grid.width, [0.5, 0.5])
    np.testing.assert_array_equal(grid.periodic, periodic)


def test_open_ends_reach_beyond() -> None:
    """Only at the open ends, by whole boxes, so that the old edges stay edges."""
    fixed = np.array([[True, False], [False, False]])
    grid = lattice(np.array([0.0, 0.0]), np.array([1.0, 3.0]), np.array([10, 6]), fixed, np.zeros(2, dtype=bool))
    upper = grid.lower + grid.counts * grid.width
    np.testing.assert_allclose(grid.width, [0.1, 0.5])
    assert grid.lower[0] == 0.0
    assert upper[0] > 1e3
    assert grid.lower[1] < -1e3
    assert upper[1] > 1e3
    assert (-grid.lower[1] / 0.5) % 1.0 == 0.0
    np.testing.assert_array_equal(grid.indices(np.array([0]))[0], [0, 0])


@pytest.mark.parametrize("n_dim", range(1, 9))
@pytest.mark.parametrize("per_axis", [1, 10, 72, 100])
def test_lattice_keeps_below_the_largest_key(n_dim: int, per_axis: int) -> None:
    """Whatever is open; in many dimensions nothing is left to reach beyond."""
    if per_axis**n_dim > MOST_KEYS:
        per_axis = 8
    counts = np.full(n_dim, per_axis, dtype=np.int64)
    for n_fixed in range(2 * n_dim + 1):
        fixed = np.arange(2 * n_dim).reshape(n_dim, 2) < n_fixed
        grid = lattice(np.zeros(n_dim), np.ones(n_dim), counts, fixed, np.zeros(n_dim, dtype=bool))
        assert np.prod(grid.counts.astype(object)) <= MOST_KEYS
        assert (grid.counts >= per_axis).all()


def test_tightened_keeps_places_and_order() -> None:
    grid = grid_of([0.0, 0.0, 0.0], [0.5, 1.0, 2.0], [100, 90, 80], [False, True, False])
    index = np.array([[40, 3, 7], [41, 0, 9], [41, 89, 7], [43, 3, 8]])
    keys = np.ravel_multi_index(index.T, (100, 90, 80)).astype(np.int64)
    tight, new = tightened(grid, keys)
    np.testing.assert_array_equal(tight.counts, [4, 90, 3])
    np.testing.assert_allclose(tight.lower, [20.0, 0.0, 14.0])
    np.testing.assert_allclose(tight.centres(new), grid.centres(keys))
    assert (np.diff(new) > 0).all()
    np.testing.assert_array_equal(tight.periodic, grid.periodic)


def test_hull_holds_all_boxes_between_the_extremes() -> None:
    grid = grid_of([0.0, 0.0], [1.0, 1.0], [9, 7])
    keys = np.ravel_multi_index(([2, 4, 3], [5, 1, 1]), (9, 7)).astype(np.int64)
    found = hull(grid, keys, 15)
    expected = [i * 7 + j for i in range(2, 5) for j in range(1, 6)]
    assert found is not None
    np.testing.assert_array_equal(found, expected)
    assert hull(grid, keys, 14) is None
