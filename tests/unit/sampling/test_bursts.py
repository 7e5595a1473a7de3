"""Rows of blocks: right, and the same whatever the number of workers and the size of the blocks."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import norm

from helpers.statistics import assert_agrees
from kernels.support import fly
from perdure._kernels.rows import BLOWN, OUTSIDE
from perdure._records import BoxGrid, Exits
from perdure._sampling import BlockRows, bursts, outside_row
from perdure._sampling.outside import DROPPED, KEPT, added, has_settled, pooled
from perdure._streams import generator
from unit.sampling.support import cells_of, plan_of, sampler_of

GRID = BoxGrid(np.array([-1.2, -1.0]), np.array([0.2, 0.25]), np.array([11, 9]), np.array([False, False]))
PLAN = plan_of(GRID)
SPIRAL = [0.3, 2.0, 0.9]
PARTS = ("target", "count", "sums", "slot", "slot_count")


def joined(blocks: Iterable[BlockRows]) -> dict[str, np.ndarray]:
    """Rows of blocks as one, with the length of every row."""
    found = list(blocks)
    whole = {name: np.concatenate([getattr(block, name) for block in found]) for name in (*PARTS, "keys")}
    whole["lengths"] = np.concatenate([np.diff(block.pointer) for block in found])
    whole["slot_lengths"] = np.concatenate([np.diff(block.slot_pointer) for block in found])
    whole["blown"] = np.array(sum(block.n_blown for block in found))
    return whole


@pytest.fixture(scope="module")
def alone() -> dict[str, np.ndarray]:
    """All cells in one block by one worker."""
    blocks = list(sampler_of("spiral", SPIRAL, PLAN).run(PLAN.seed_keys))
    assert len(blocks) == 1
    return joined(blocks)


@pytest.mark.parametrize("workers", [1, 2, 5])
@pytest.mark.parametrize("lanes", [16, 100, 640])
def test_rows_do_not_depend_on_workers_and_blocks(
    alone: dict[str, np.ndarray], workers: int, lanes: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """To the last bit, in the order of the keys."""
    monkeypatch.setattr(bursts, "LANES_PER_BLOCK", lanes)
    blocks = list(sampler_of("spiral", SPIRAL, PLAN).run(PLAN.seed_keys, workers=workers))
    assert len(blocks) == -(-99 // (lanes // 16))
    found = joined(blocks)
    for name, value in alone.items():
        np.testing.assert_array_equal(found[name], value, err_msg=name)


def test_rows_depend_on_the_sweep(alone: dict[str, np.ndarray]) -> None:
    """Negative control of the comparison: other seeds, other rows."""
    other = joined(sampler_of("spiral", SPIRAL, PLAN).run(PLAN.seed_keys, sweep=1))
    assert not np.array_equal(other["sums"], alone["sums"])


def test_rows_agree_with_bursts_flown_one_cell_at_a_time() -> None:
    """Targets, counts by replicate, sums and marginals of three cells, two of which send bursts out or up."""
    keys = np.array([50, 0, 98], dtype=np.int64)
    block = next(sampler_of("spiral", [0.3, 2.0, 14.0], PLAN).run(keys))
    cells = cells_of(PLAN)
    seen = set()
    for i, key in enumerate(keys):
        one, first = np.array([key]), np.array([0, 16], dtype=np.int64)
        state, words = np.empty((2, 16)), np.empty(16, dtype=np.uint64)
        cells.fill_seeds(one, first, 4, 0, state)
        cells.fill_streams(one, first, 0, words)
        axis = (PLAN.axis_lower, PLAN.axis_upper, 10)
        flown = fly(
            "spiral",
            state,
            parameters=[0.3, 2.0, 14.0],
            step=0.05,
            n_step=12,
            stream=words,
            axis=axis,
            stride=4,
        )
        target = np.empty(16, dtype=np.int64)
        cells.locate(flown.state, target)
        seen |= set(target)
        part = slice(block.pointer[i], block.pointer[i + 1])
        np.testing.assert_array_equal(block.target[part], np.unique(target))
        by_replicate = (target.reshape(4, 4)[None] == block.target[part][:, None, None]).sum(axis=2)
        np.testing.assert_array_equal(block.count[part], by_replicate)
        np.testing.assert_allclose(block.sums[i], flown.sums.reshape(8, 4, 4).sum(axis=2).T, rtol=1e-14, atol=1e-14)
        dense = np.zeros((24, 4), dtype=int)
        mine = slice(block.slot_pointer[i], block.slot_pointer[i + 1])
        dense[block.slot[mine]] = block.slot_count[mine]
        for k in range(2):
            for r in range(4):
                expected = np.bincount(flown.slots[:, k, 4 * r : 4 * r + 4].ravel(), minlength=12)
                np.testing.assert_array_equal(dense[12 * k : 12 * k + 12, r], expected)
    assert {OUTSIDE, BLOWN} <= seen, "the case must have both"
    assert block.n_blown == block.count[block.target == BLOWN].sum()


def test_rows_hold_every_burst(alone: dict[str, np.ndarray]) -> None:
    """Row sums are bursts, slot sums are samples; counts are stored as short as they fit."""
    begin = np.concatenate([[0], np.cumsum(alone["lengths"])[:-1]])
    np.testing.assert_array_equal(np.add.reduceat(alone["count"].astype(int), begin), np.full((99, 4), 4))
    begin = np.concatenate([[0], np.cumsum(alone["slot_lengths"])[:-1]])
    np.testing.assert_array_equal(np.add.reduceat(alone["slot_count"].astype(int), begin), np.full((99, 4), 4 * 3 * 2))
    assert alone["count"].dtype == np.uint8


def test_exits_are_where_the_rows_say_outside() -> None:
    sampler = sampler_of("spiral", SPIRAL, PLAN)
    known = np.arange(20, 80, dtype=np.int64)
    point, cell, replicate = sampler.exits(known[::3], known)
    block = next(sampler.run(known[::3]))
    is_known = np.isin(block.target, known) | (block.target == BLOWN)
    rows = np.repeat(np.arange(20), np.diff(block.pointer))
    expected = np.zeros((20, 4), dtype=int)
    np.add.at(expected, rows[~is_known], block.count[~is_known])
    found = np.zeros((20, 4), dtype=int)
    np.add.at(found, (cell, replicate), 1)
    np.testing.assert_array_equal(found, expected)
    key = np.empty(point.shape[1], dtype=np.int64)
    sampler.cells.locate(np.ascontiguousarray(point), key)
    assert not np.isin(key, known).any()
    assert len(key) > 0


def test_rows_are_added_by_name() -> None:
    names, counts = added(
        [
            (np.array([3, 7]), np.array([[1, 0], [2, 5]], dtype=np.uint8)),
            (np.array([7, 9]), np.array([[1, 1], [4, 4]])),
        ]
    )
    np.testing.assert_array_equal(names, [3, 7, 9])
    np.testing.assert_array_equal(counts, [[1, 0], [3, 6], [4, 4]])
    block = next(sampler_of("spiral", SPIRAL, PLAN).run(PLAN.seed_keys[40:41]))
    twice = pooled([block, block])
    np.testing.assert_array_equal(twice.count, 2 * block.count.astype(int))
    np.testing.assert_array_equal(twice.sums, 2.0 * block.sums)
    np.testing.assert_array_equal(twice.slot_count, 2 * block.slot_count.astype(int))
    np.testing.assert_array_equal(twice.pointer, [0, len(block.target)])


def staying_outside(time: float) -> float:
    """P(|x(t)| > 1 given |x(0)| > 1) for the process dx = -x dt + sqrt(2) dW in its stationary law."""
    rho, root = np.exp(-time), np.sqrt(1.0 - np.exp(-2.0 * time))

    def both(x: float) -> float:
        return float(norm.pdf(x) * (norm.sf((1.0 - rho * x) / root) + norm.cdf((-1.0 - rho * x) / root)))

    return float(quad(both, 1.0, 12.0)[0] / norm.sf(1.0))


def test_particles_outside_take_the_law_of_the_long_run() -> None:
    """How many of them are outside again after a burst of 0.5; not as many as after 0.7 (negative control)."""
    grid = BoxGrid(np.array([-1.0]), np.array([0.02]), np.array([100]), np.array([False]))
    made = plan_of(grid, step=0.05, n_step=10, per_cell=64, n_replicate=8, scheme="weak2")
    sampler = sampler_of("ornstein", [1.0, 2.0**0.5], made)
    exits = Exits(*sampler.exits(made.seed_keys, made.seed_keys))
    edges = grid.lower[0] + 0.02 * np.arange(101)
    weight = np.diff(norm.cdf(edges))[exits.cell]
    found = outside_row(sampler, exits, made.seed_keys, weight, generator(4, "outside"))
    stay = found.row.count[found.row.target == OUTSIDE].sum(axis=0) / (found.n_burst / 8)
    error = stay.std(ddof=1) / np.sqrt(8.0)
    # step 0.05 of order 2 and cells of a fiftieth of the standard deviation
    assert_agrees(stay.mean(), staying_outside(0.5), error, allowance=1e-3)
    with pytest.raises(AssertionError):
        assert_agrees(stay.mean(), staying_outside(0.7), error, allowance=1e-3)
    assert found.settled
    assert found.row.count.sum() == found.n_burst


def stays(early: float, late: float) -> list[float]:
    return [early] * 8 + [late] * 8


def test_settling_is_told_from_the_two_halves() -> None:
    """Five standard errors and one percent of those that come back; an error of 8 sweeps of 1000 is 0.008."""
    error = np.sqrt(0.25 * 2.0 / 8000.0)
    assert has_settled(stays(0.5, 0.5), 1000)
    assert has_settled(stays(0.5 - 4.9 * error, 0.5), 1000)
    assert not has_settled(stays(0.5 - 5.1 * error - 0.005, 0.5), 1000)
    assert not has_settled(stays(0.4, 0.5), 1000)
    assert has_settled(stays(0.4, 0.5), 20), "few particles cannot tell"
    # of rare returns a part counts: 0.004 of 1 would pass beside half of them, not beside 0.001
    assert not has_settled(stays(0.995, 0.999), 10**6)


def test_long_excursions_need_more_sweeps(monkeypatch: pytest.MonkeyPatch) -> None:
    """Slow returns: more sweeps than the first ones are flown; particles that are soon back need no more."""
    grid = BoxGrid(np.array([-1.0]), np.array([0.02]), np.array([100]), np.array([False]))
    made = plan_of(grid, step=0.05, n_step=1, per_cell=64, n_replicate=8, scheme="weak2")

    def sweeps(theta: float, sigma: float) -> tuple[int, bool]:
        """Sweeps flown, and whether the particles settled."""
        sampler = sampler_of("ornstein", [theta, sigma], made)
        exits = Exits(*sampler.exits(made.seed_keys, made.seed_keys))
        flown, fly_once = [], sampler.fly

        def noted(*given: Any) -> BlockRows:
            flown.append(given[-1])
            return fly_once(*given)

        monkeypatch.setattr(sampler, "fly", noted)
        weight = np.full(len(exits.cell), 0.01)
        found = outside_row(sampler, exits, made.seed_keys, weight, generator(4, "outside"))
        assert flown == list(range(1, len(flown) + 1))
        assert found.n_burst == 8192 * min(KEPT, len(flown) - DROPPED) or not found.settled
        return len(flown), found.settled

    assert sweeps(20.0, 9.0) == (DROPPED + KEPT, True)
    slow, settled = sweeps(0.05, 0.3)
    assert slow > 2 * KEPT + DROPPED
    assert settled
