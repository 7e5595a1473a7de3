"""Flights: their record, its halving, cells and histograms, and independence from the number of workers."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from kernels.support import SPECS
from perdure._crosscheck import flight as flight_module
from perdure._crosscheck.flight import N_GROUP, N_PART, N_SLICE, Flight, Setting, Stir, cell_of, count_cells
from perdure._kernels.cache import trajectory_kernel
from perdure._records import BoxGrid

TURN = 2.0 * np.pi
# a hand that goes round at unit speed; noise that pulls back
KERNELS = {
    "clock": replace(SPECS["clock"], scheme="three-eighths", events=("v_a < 1.0",), observables=("v_a",)),
    "ornstein": replace(SPECS["ornstein"], events=("v_x > 0.3",), observables=("v_x",)),
}
STEP, CENTRE = 0.05, 3.0


def grid_of(lower: float, upper: float, n: int, periodic: bool = False) -> BoxGrid:
    return BoxGrid(np.array([lower]), np.array([(upper - lower) / n]), np.array([n]), np.array([periodic]))


def setting_of(name: str, **changes: Any) -> Setting:
    made = Setting(
        follow=trajectory_kernel(KERNELS[name]),
        parameters=np.array([CENTRE] if name == "clock" else [0.8, 0.5, 0.0]),
        n_sum=4,
        step=STEP,
        stride=8,
        every=16,
        axis_lower=np.array([1.0 if name == "clock" else -0.5]),
        axis_upper=np.array([5.0 if name == "clock" else 0.6]),
        n_interval=10,
        grid=grid_of(0.0, TURN, 8, True) if name == "clock" else grid_of(-0.6, 0.6, 12),
        keys=np.array([0, 2, 3, 5, 7]),
        stir=Stir(0, 0.0),
    )
    return replace(made, **changes)


def flight_of(name: str, n: int, *, workers: int = 2, seed: int = 1, **changes: Any) -> Flight:
    rng = np.random.default_rng(seed)
    state = rng.uniform(0.0, 1.0, (1, n))
    return Flight(setting_of(name, **changes), state, rng.spawn(-(-n // 64)), workers)


def flown(flight: Flight, *lengths: int) -> Flight:
    for length in lengths:
        flight.extend(length, lambda done: None)
    return flight


def assert_same(one: Flight, two: Flight) -> None:
    np.testing.assert_array_equal(one.state, two.state)
    np.testing.assert_array_equal(one.sums, two.sums)
    np.testing.assert_array_equal(one.counts, two.counts)
    np.testing.assert_array_equal(one.visits, two.visits)
    np.testing.assert_array_equal(one.stands, two.stands)


def clock_path(state: np.ndarray, n_step: int) -> np.ndarray:
    """Angles (n_step, n) after each step."""
    return np.asarray((state + STEP * np.arange(1, n_step + 1)[:, None]) % TURN)


@pytest.fixture(scope="module")
def clock() -> Flight:
    return flown(flight_of("clock", 70), 32)


def test_sums_of_the_slices_agree_with_the_plain_version(clock: Flight) -> None:
    start = np.random.default_rng(1).uniform(0.0, 1.0, (1, 70))[0]
    path = clock_path(start, 32 * N_SLICE).reshape(N_SLICE, 32, 70)
    assert np.abs(path[..., None] - np.array([0.0, 1.0, TURN])).min() > 1e-9, "no state in doubt"
    inside = path < 1.0
    before = np.concatenate([[start < 1.0], inside.reshape(-1, 70)[:-1]]).reshape(inside.shape)
    expected = [
        inside.sum(axis=1),
        (inside & ~before).sum(axis=1),
        (path - CENTRE).sum(axis=1),
        ((path - CENTRE) ** 2).sum(axis=1),
    ]
    np.testing.assert_allclose(np.array(clock.sums), np.stack(expected, axis=1), rtol=0.0, atol=1e-9)
    assert (clock.length, clock.steps) == (32, 32 * N_SLICE)
    np.testing.assert_allclose(clock.state[0], path[-1, -1], atol=1e-11)


def test_kept_averages_leave_out_the_first_quarter(clock: Flight) -> None:
    sums = np.array(clock.sums)
    for n_batch in (1, 4, 8, 24):
        kept = clock.kept(n_batch)
        assert kept.shape == (n_batch, 4, 70)
        np.testing.assert_allclose(kept.mean(axis=0), sums[8:].mean(axis=0) / 32, rtol=1e-12)
    np.testing.assert_allclose(clock.kept(24), sums[8:] / 32)
    assert np.abs(clock.kept(1)[0] - sums.mean(axis=0) / 32).max() > 1e-3, "the control must differ"


def test_histograms_and_cells_agree_with_the_plain_version(clock: Flight) -> None:
    start = np.random.default_rng(1).uniform(0.0, 1.0, (1, 70))[0]
    path = clock_path(start, 32 * N_SLICE).reshape(N_PART, -1, 32, 70)
    edges = np.concatenate([[-np.inf], np.linspace(1.0, 5.0, 11), [np.inf]])
    # of the eight steps before a point one counts: from the second on, in turn
    points = path[:, :, [1, 10, 19, 28]].reshape(N_PART, -1, 70)
    expected = [[np.histogram(points[part, :, i], edges)[0] for i in range(70)] for part in range(N_PART)]
    np.testing.assert_array_equal(clock.counts[:, :, 0], expected)
    np.testing.assert_array_equal(clock.kept_counts()[:, 0], np.sum(expected[1:], axis=0))
    # cells of an eighth of a turn, of which five are those of the density
    place = np.searchsorted([0, 2, 3, 5, 7], np.arange(8))
    of_cell = np.where(np.isin(np.arange(8), [0, 2, 3, 5, 7]), place, 5)
    cell = of_cell[np.floor(path[:, :, [8, 25]] / (TURN / 8)).astype(int)].reshape(N_PART, -1, 70)
    group = (np.arange(70) % 35) * N_GROUP // 35
    visits = np.zeros((N_PART, N_GROUP, 6), dtype=int)
    for part in range(N_PART):
        np.add.at(visits[part], (np.broadcast_to(group, cell[part].shape), cell[part]), 1)
    np.testing.assert_array_equal(clock.visits, visits)
    np.testing.assert_array_equal(clock.kept_visits(), visits[1:].sum(axis=0))
    assert visits[:, :, -1].sum() > 0, "some are elsewhere"


def test_twins_belong_to_the_group_of_their_start(clock: Flight) -> None:
    np.testing.assert_array_equal(clock.group[:35], clock.group[35:])
    assert set(clock.group) == set(range(N_GROUP))
    assert np.ptp(np.bincount(clock.group)) <= 2


def test_stands_are_those_at_the_end_of_each_part(clock: Flight) -> None:
    start = np.random.default_rng(1).uniform(0.0, 1.0, (1, 70))[0]
    path = clock_path(start, 32 * N_SLICE)
    assert len(clock.stands) == N_PART
    np.testing.assert_allclose(np.array(clock.stands)[:, 0], path[8 * 32 - 1 :: 8 * 32], atol=1e-11)


@pytest.mark.parametrize("times", [1, 3])
def test_a_record_that_is_halved_keeps_all(times: int) -> None:
    """Flown on, the record is what a flight with longer slices from the beginning leaves.

    In 128 steps the turn of the points comes round.
    """
    steps = flown(flight_of("clock", 70), *[128] * (times + 1))
    whole = flown(flight_of("clock", 70), 128 * 2**times)
    assert steps.length == whole.length == 128 * 2**times
    assert len(steps.sums) == len(whole.sums) == N_SLICE
    np.testing.assert_array_equal(steps.state, whole.state)
    np.testing.assert_array_equal(steps.counts, whole.counts)
    np.testing.assert_array_equal(steps.visits, whole.visits)
    np.testing.assert_array_equal(steps.stands, whole.stands)
    np.testing.assert_array_equal(np.array(steps.sums)[:, :2], np.array(whole.sums)[:, :2])
    np.testing.assert_allclose(steps.sums, whole.sums, rtol=0.0, atol=1e-8)
    # negative control: the record before was another one
    assert np.any(flown(flight_of("clock", 70), *[128] * times).counts != whole.counts)


def test_halving_keeps_the_totals_with_noise() -> None:
    """Nothing counted is lost: the sums over the whole record, and those of what is new."""
    flight = flown(flight_of("ornstein", 20), 32)
    sums, counts, visits = np.sum(flight.sums, axis=0), flight.counts.sum(axis=0), flight.visits.sum(axis=0)
    flown(flight, 1000)
    assert flight.length == 64
    np.testing.assert_allclose(np.sum(flight.sums[:16], axis=0), sums, rtol=0.0, atol=1e-9)
    np.testing.assert_array_equal(flight.counts[:2].sum(axis=0), counts)
    np.testing.assert_array_equal(flight.visits[:2].sum(axis=0), visits)
    assert flight.counts.sum() == 20 * 64 * N_SLICE // 8
    assert flight.visits.sum() == 20 * 64 * N_SLICE // 16


def test_progress_counts_the_slices() -> None:
    told: list[int] = []
    flight = flight_of("clock", 4)
    flight.extend(16, told.append)
    assert told == list(range(1, N_SLICE + 1))
    told.clear()
    flight.extend(16, told.append)
    assert told == list(range(N_SLICE // 2 + 1, N_SLICE + 1))


@pytest.mark.parametrize("workers", [1, 5])
def test_workers_do_not_matter(workers: int) -> None:
    """Three blocks, the last of them not full; with another seed the numbers are others (control)."""
    one = flown(flight_of("ornstein", 150, workers=2), 32, 32)
    two = flown(flight_of("ornstein", 150, workers=workers), 32, 32)
    assert_same(one, two)
    other = flown(flight_of("ornstein", 150, workers=workers, seed=2), 32, 32)
    assert np.any(np.array(other.sums) != np.array(one.sums))


def test_what_a_block_does_does_not_depend_on_the_others() -> None:
    whole = flown(flight_of("ornstein", 150), 32)
    rng = np.random.default_rng(1)
    state = rng.uniform(0.0, 1.0, (1, 150))
    alone = flown(Flight(setting_of("ornstein"), state[:, 64:128], rng.spawn(3)[1:2], 1), 32)
    np.testing.assert_array_equal(alone.state, whole.state[:, 64:128])
    np.testing.assert_array_equal(alone.sums, np.array(whole.sums)[:, :, 64:128])


def test_long_slices_take_several_calls(monkeypatch: pytest.MonkeyPatch) -> None:
    whole = flown(flight_of("clock", 70), 384)
    monkeypatch.setattr(flight_module, "MOST_PER_CALL", 140)
    calls = flown(flight_of("clock", 70), 384)
    np.testing.assert_array_equal(calls.counts, whole.counts)
    np.testing.assert_array_equal(calls.visits, whole.visits)
    np.testing.assert_array_equal(calls.state, whole.state)
    np.testing.assert_allclose(calls.sums, whole.sums, rtol=0.0, atol=1e-9)


def test_points_may_be_further_apart_than_a_call_is_long(monkeypatch: pytest.MonkeyPatch) -> None:
    """A burst of many short steps is the distance between the points at which cells are counted."""
    monkeypatch.setattr(flight_module, "MOST_PER_CALL", 40)
    flight = flown(flight_of("clock", 4, every=96), 192)
    assert flight.visits.sum() == 4 * N_SLICE * 2
    assert flight.counts.sum() == 4 * N_SLICE * 192 // 8
    np.testing.assert_allclose(flight.state, flown(flight_of("clock", 4), 192).state, atol=1e-11)


def test_lost_trajectories_are_elsewhere() -> None:
    flight = flight_of("clock", 4)
    flight.blocks[0][0, 1] = np.nan
    flown(flight, 16)
    np.testing.assert_array_equal(np.isfinite(flight.state[0]), [True, False, True, True])
    # of two starts and their twins, the second start is lost: half of its group
    assert flight.visits[:, 4, -1].sum() >= N_SLICE
    assert flight.counts[:, 1, 0, 0].sum() == 2 * N_SLICE, "no number is below the axis"


# ------------------------------------------------------------------------------------------ cells


def test_cells_of_points() -> None:
    """Two components, one of which wraps; cells that the density has not, and places beyond the lattice."""
    grid = BoxGrid(np.array([-1.0, 0.0]), np.array([0.5, 0.25]), np.array([4, 4]), np.array([False, True]))
    keys = np.array([1, 4, 6, 15])
    point = np.array(
        [
            [-0.9, -0.4, -0.4, 0.9, 0.9, -0.9, -0.9, 1.1, np.nan, 0.2],
            [0.3, 0.1, 0.6, 0.8, -0.1, 1.3, 0.6, 0.8, 0.3, np.inf],
        ]
    )
    np.testing.assert_array_equal(cell_of(grid, keys, point), [0, 1, 2, 3, 3, 0, 4, 4, 4, 4])


def test_cells_of_many_points_agree_with_a_plain_search() -> None:
    rng = np.random.default_rng(3)
    grid = BoxGrid(np.array([-1.0, 0.0]), np.array([0.1, 0.2]), np.array([20, 10]), np.array([False, True]))
    keys = np.sort(rng.choice(200, 90, replace=False))
    point = rng.uniform([[-1.2], [-3.0]], [[1.2], [5.0]], (2, 5000))
    index = np.floor((point - grid.lower[:, None]) / grid.width[:, None]).astype(int)
    index[1] %= 10
    key = np.where((index[0] >= 0) & (index[0] < 20), index[0] * 10 + index[1], -1)
    where = {int(k): at for at, k in enumerate(keys)}
    expected = np.array([where.get(int(k), 90) for k in key])
    np.testing.assert_array_equal(cell_of(grid, keys, point), expected)
    assert 0 < (expected == 90).sum() < 5000


def test_counts_of_cells_are_added_to() -> None:
    setting = setting_of("clock", keys=np.arange(8))
    samples = np.array([[[0.1, 1.0, 6.0]], [[0.1, 6.0, 3.2]]])
    visits = np.full((N_GROUP, 9), 10, dtype=np.int32)
    count_cells(setting, samples, np.array([0, 3, 3]), visits)
    expected = np.full((N_GROUP, 9), 10)
    expected[0, 0] += 2
    expected[3, 1] += 1
    expected[3, 7] += 2
    expected[3, 4] += 1
    np.testing.assert_array_equal(visits, expected)
    count_cells(setting, samples[:0], np.array([0, 3, 3]), visits)
    np.testing.assert_array_equal(visits, expected)
