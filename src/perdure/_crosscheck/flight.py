"""Long trajectories, flown in slices of equal length by all workers.

The record of a flight is as long however long it is: it has 16 to 32 slices, and when it would get more, slices are
joined two by two. Its first quarter is dropped. What a trajectory does depends on the seed and its place alone, never
on the number of workers.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np

from perdure._kernels.generate import LANES
from perdure._kernels.rows import locate
from perdure._kernels.trajectory import MOST_STEPS
from perdure._records import BoxGrid, Floats, Integers

__all__ = ["MOST_PER_CALL", "N_GROUP", "N_PART", "N_SLICE", "Flight", "Setting", "Stir", "cell_of"]

# Slices of a full record, and the parts of it that histograms are kept for: the first of four is dropped.
N_SLICE, N_PART = 32, 4
# Groups of starts that cells are counted for.
N_GROUP = 8
# Steps of 64 lanes in a call of the kernel: below a second even with noise, and below what its counters hold.
MOST_PER_CALL = min(65536, MOST_STEPS)


@dataclass(frozen=True)
class Stir:
    """What is done against rounding, for maps.

    Attributes
    ----------
    bits : int
        Low bits of the states that are drawn anew at every step.
    moved : float
        Largest part of the way to the middle that a step begins nearer.
    """

    bits: int
    moved: float


@dataclass(frozen=True)
class Setting:
    """What is flown, and what is written down.

    Attributes
    ----------
    follow : callable
        Trajectory kernel of the case.
    parameters : ndarray
        With the centres of the observables after them.
    n_sum : int
    step : float
        Unit: time.
    stride, every : int
        Steps between points of the histograms, and between points of the cells. Multiples of what the kernel tests
        together.
    axis_lower, axis_upper : ndarray, shape (n_dim,)
        Range of the histograms. Units of the state.
    n_interval : int
    grid : BoxGrid
    keys : ndarray of int64, shape (n_cell,)
        Cells of the density, ascending.
    stir : Stir
    """

    follow: Callable[..., int]
    parameters: Floats
    n_sum: int
    step: float
    stride: int
    every: int
    axis_lower: Floats
    axis_upper: Floats
    n_interval: int
    grid: BoxGrid
    keys: Integers
    stir: Stir

    def called(
        self, state: Floats, n_step: int, rng: np.random.Generator, counts: Integers, n_sample: int
    ) -> tuple[Floats, Floats]:
        """Sums (n_sum, n) and samples (n_sample, n_dim, n) of a call; state and counts are changed in place."""
        n_dim, n = state.shape
        sums, samples = np.zeros((self.n_sum, n)), np.empty((n_sample, n_dim, n))
        words = rng.integers(0, 2**64, n, dtype=np.uint64)
        scale = self.n_interval / (self.axis_upper - self.axis_lower)
        self.follow(
            state, sums, counts, samples, words, self.parameters, self.step, n_step, self.stride, self.every,
            self.axis_lower, scale, np.uint64(2**self.stir.bits - 1), self.stir.moved,
        )  # fmt: skip
        return sums, samples

    def no_counts(self, n: int) -> Integers:
        return np.zeros((n, len(self.axis_lower), self.n_interval + 2), dtype=np.int64)


class Flight:
    """Trajectories in flight, and their record.

    Parameters
    ----------
    setting : Setting
    state : ndarray, shape (n_dim, n)
        Where they stand. The second half are the twins of the first.
    rngs : list of numpy.random.Generator
        One for each block of 64 trajectories.
    workers : int

    Attributes
    ----------
    sums : list of ndarray, shape (n_sum, n)
        Sums of each slice.
    length : int
        Steps of a slice.
    """

    def __init__(self, setting: Setting, state: Floats, rngs: list[np.random.Generator], workers: int) -> None:
        self.setting = setting
        n = state.shape[1]
        self.n = n
        self.blocks = [np.ascontiguousarray(state[:, a : a + LANES]) for a in range(0, n, LANES)]
        self.rngs = rngs
        self.workers = workers
        n_start = n // 2
        self.group = (np.arange(n) % n_start) * N_GROUP // n_start
        self.length = 0
        self.sums: list[Floats] = []
        self.counts = np.zeros((N_PART, n, len(state), setting.n_interval + 2), dtype=np.int64)
        self.visits = np.zeros((N_PART, N_GROUP, len(setting.keys) + 1), dtype=np.int32)
        self.stands: list[Floats] = []

    @property
    def state(self) -> Floats:
        """Where the trajectories stand, shape (n_dim, n)."""
        return np.concatenate(self.blocks, axis=1)

    @property
    def steps(self) -> int:
        """Steps of each trajectory."""
        return self.length * len(self.sums)

    def extend(self, length: int, progress: Callable[[int], None]) -> None:
        """Fly on until the record is full; of `length` steps a slice if it is empty, else it is halved first."""
        if self.sums:
            self.sums = [a + z for a, z in zip(self.sums[::2], self.sums[1::2], strict=True)]
            self.length *= 2
            for record in (self.counts, self.visits):
                record[0] += record[1]
                record[1] = record[2] + record[3]
                record[2:] = 0
            self.stands = self.stands[1::2]
        else:
            self.length = length
        with ThreadPoolExecutor(self.workers) as pool:
            while len(self.sums) < N_SLICE:
                part = len(self.sums) * N_PART // N_SLICE
                done = list(pool.map(self.fly_block, range(len(self.blocks)), [part] * len(self.blocks)))
                self.sums.append(np.concatenate([sums for sums, _ in done], axis=1))
                for _, visits in done:
                    self.visits[part] += visits
                if len(self.sums) % (N_SLICE // N_PART) == 0:
                    self.stands.append(self.state)
                progress(len(self.sums))

    def fly_block(self, block: int, part: int) -> tuple[Floats, Integers]:
        """Sums of a slice of one block, and its visits to cells."""
        setting, state = self.setting, self.blocks[block]
        lanes = slice(block * LANES, block * LANES + state.shape[1])
        counts = self.counts[part, lanes]
        total = np.zeros((setting.n_sum, state.shape[1]))
        visits = np.zeros_like(self.visits[0])
        # points of cells are not taken further apart than a call is long
        most = max(MOST_PER_CALL // setting.every, 1) * setting.every
        for at in range(0, self.length, most):
            n_step = min(most, self.length - at)
            sums, samples = setting.called(state, n_step, self.rngs[block], counts, n_step // setting.every)
            total += sums
            count_cells(setting, samples, self.group[lanes], visits)
        return total, visits

    # ------------------------------------------------------------------------------ the record

    def kept(self, n_batch: int) -> Floats:
        """Averages per step of each batch after the dropped part, shape (n_batch, n_sum, n)."""
        rest = np.array(self.sums[N_SLICE // N_PART :])
        batches = rest.reshape(n_batch, -1, *rest.shape[1:])
        return np.asarray(batches.mean(axis=1) / self.length)

    def kept_counts(self) -> Integers:
        """Histogram of each trajectory, shape (n, n_dim, n_slot)."""
        return np.asarray(self.counts[1:].sum(axis=0))

    def kept_visits(self) -> Integers:
        """Visits by group of starts and cell, shape (N_GROUP, n_cell + 1); the last counts all other places."""
        return np.asarray(self.visits[1:].sum(axis=0, dtype=np.int64))


def count_cells(setting: Setting, samples: Floats, group: Integers, visits: Integers) -> None:
    """Add the cells of samples (n_sample, n_dim, n) to visits (N_GROUP, n_cell + 1)."""
    n_sample, n_dim, _ = samples.shape
    if not n_sample:
        return
    point = np.ascontiguousarray(np.moveaxis(samples, 1, 0).reshape(n_dim, -1))
    place = cell_of(setting.grid, setting.keys, point)
    n_cell = len(setting.keys)
    code = np.tile(group, n_sample) * (n_cell + 1) + place
    visits += np.bincount(code, minlength=visits.size).reshape(visits.shape).astype(np.int32)


def cell_of(grid: BoxGrid, keys: Integers, point: Floats) -> Integers:
    """Index in keys (n_cell,) of the cell of each point (n_dim, n); n_cell where it is in none."""
    key = np.empty(point.shape[1], dtype=np.int64)
    locate(np.ascontiguousarray(point), grid.lower, grid.width, grid.counts, grid.periodic, key)
    at = np.searchsorted(keys, key)
    found = keys[np.minimum(at, len(keys) - 1)] == key
    return np.where(found, at, len(keys))
