"""Blocks of cells are sent their bursts and come back as finished rows."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import BLOWN, count_rows, count_slots, sum_rows
from perdure._records import Floats, Integers, Plan
from perdure._streams import generator

__all__ = ["BlockRows", "BurstSampler", "sobol_base"]

# Bursts flown by one call of the kernel: small enough to stay in the second-level cache and to answer ctrl-C.
LANES_PER_BLOCK = 16384
STEPS_PER_BLOCK = 1e8


class Starts(Protocol):
    """The part of a discretiser that the sampler needs."""

    n_dim: int

    def locate(self, state: Floats, key: Integers) -> None: ...
    def centres(self, keys: Integers) -> Floats: ...
    def fill_seeds(self, keys: Integers, first: Integers, n_replicate: int, sweep: int, state: Floats) -> None: ...
    def fill_streams(self, keys: Integers, first: Integers, sweep: int, stream: NDArray[Any]) -> None: ...


@dataclass(frozen=True)
class BlockRows:
    """Rows of a block of cells.

    Attributes
    ----------
    keys : shape (n_box,)
    pointer, target, count
        Compressed rows: `target` holds keys (OUTSIDE, BLOWN last), `count` has shape (n_entry, n_replicate).
    sums : ndarray, shape (n_box, n_replicate, n_sum)
        Sums over steps and bursts: per event time inside and entries, per observable values and squares.
    slot_pointer, slot, slot_count
        Compressed rows of the marginal counts.
    n_blown : int
        Bursts that blew up.
    """

    keys: Integers
    pointer: Integers
    target: Integers
    count: NDArray[Any]
    sums: Floats
    slot_pointer: Integers
    slot: NDArray[Any]
    slot_count: NDArray[Any]
    n_blown: int


def sobol_base(seed: int, n_dim: int, size: int) -> NDArray[np.uint32]:
    """Scrambled Sobol set, shape (size, n_dim), as the leading 32 bits of each coordinate."""
    from scipy.stats import qmc

    n_bits = max(1, int(size - 1).bit_length())
    points = qmc.Sobol(n_dim, scramble=True, bits=32, rng=generator(seed, "sobol")).random_base2(n_bits)[:size]
    return np.asarray(np.minimum(points * 2.0**32, 2.0**32 - 1).astype(np.uint32))


class BurstSampler:
    """Sends bursts from cells.

    Parameters
    ----------
    advance : callable
        Burst kernel of the case.
    cells : Starts
        Discretiser.
    plan : Plan
    parameters : ndarray
        Values in the order of the kernel.
    n_sum : int
        Rows of the kernel's sums.
    n_interval : int
        Intervals per marginal axis.
    """

    def __init__(
        self,
        advance: Callable[..., int],
        cells: Starts,
        plan: Plan,
        parameters: Floats,
        n_sum: int,
        n_interval: int,
    ) -> None:
        self.advance = advance
        self.cells = cells
        self.plan = plan
        self.parameters = parameters
        self.n_sum = n_sum
        self.n_interval = n_interval
        self.axis_scale = n_interval / (plan.axis_upper - plan.axis_lower)

    @property
    def boxes_per_block(self) -> int:
        per_cell = self.plan.per_cell
        lanes = min(LANES_PER_BLOCK, STEPS_PER_BLOCK / self.plan.n_step)
        return max(1, int(lanes // per_cell))

    def run(self, keys: Integers, *, sweep: int = 0, workers: int = 1) -> Iterator[BlockRows]:
        """Rows of all cells, block by block, in the order of `keys` whatever the number of workers."""
        size = self.boxes_per_block
        blocks = [keys[at : at + size] for at in range(0, len(keys), size)]
        if workers == 1 or len(blocks) < 2:
            for block in blocks:
                yield self.block(block, sweep)
            return
        with ThreadPoolExecutor(workers) as pool:
            waiting: list[Future[BlockRows]] = []
            ahead = iter(blocks)
            try:
                for block in ahead:
                    waiting.append(pool.submit(self.block, block, sweep))
                    if len(waiting) >= 3 * workers:
                        yield waiting.pop(0).result()
                while waiting:
                    yield waiting.pop(0).result()
            finally:
                for future in waiting:
                    future.cancel()

    def block(self, keys: Integers, sweep: int) -> BlockRows:
        """Rows of one block, from seeds of the discretiser."""
        first = np.arange(len(keys) + 1, dtype=np.int64) * self.plan.per_cell
        state = np.empty((self.cells.n_dim, int(first[-1])))
        self.cells.fill_seeds(keys, first, self.plan.n_replicate, sweep, state)
        return self.fly(keys, first, state, sweep)

    def fly(self, keys: Integers, first: Integers, state: Floats, sweep: int) -> BlockRows:
        """Rows of cells whose bursts start at the points of state (n_dim, n_burst), which is overwritten."""
        n_box, n_rep = len(keys), self.plan.n_replicate
        n_burst = int(first[-1])
        sums, slots, n_blown = self.flown(keys, first, state, sweep)
        key, code = np.empty(n_burst, dtype=np.int64), np.empty(n_burst, dtype=np.int64)
        self.cells.locate(state, key)
        pointer = np.empty(n_box + 1, dtype=np.int64)
        column, count = np.empty(n_burst, dtype=np.int64), np.empty((n_burst, n_rep), dtype=np.uint32)
        n_entry = count_rows(key, first, n_rep, code, pointer, column, count)
        totals = np.empty((n_box, n_rep, self.n_sum))
        sum_rows(sums, first, n_rep, totals)
        return BlockRows(
            keys,
            pointer,
            column[:n_entry].copy(),
            shortest(count[:n_entry]),
            totals,
            *self.slot_rows(slots, first),
            n_blown,
        )

    def flown(
        self, keys: Integers, first: Integers, state: Floats, sweep: int
    ) -> tuple[Floats, NDArray[np.uint16], int]:
        """Fly bursts from the points of state (n_dim, n_burst), which are overwritten by their ends.

        Cell i, of key keys[i], owns bursts first[i] to first[i + 1]. Returns sums (n_sum, n_burst), slots
        (n_sample, n_dim, n_burst) and how many blew up.
        """
        plan, n_burst = self.plan, int(first[-1])
        stream = np.empty(n_burst, dtype=np.uint64)
        self.cells.fill_streams(keys, first, sweep, stream)
        sums = np.empty((self.n_sum, n_burst))
        slots = np.zeros((plan.n_step // plan.stride, self.cells.n_dim, n_burst), dtype=np.uint16)
        n_blown = self.advance(
            state,
            sums,
            slots,
            stream,
            self.parameters,
            plan.step,
            plan.n_step,
            plan.stride,
            plan.axis_lower,
            self.axis_scale,
            float(self.n_interval + 2),
        )
        return sums, slots, int(n_blown)

    def exits(self, keys: Integers, known: Integers, *, sweep: int = 0) -> tuple[Floats, Integers, Integers]:
        """Where bursts of the cells `keys` ended that did not end in a cell of `known` (ascending) or blew up.

        Flies the bursts of `block` again: the same streams give the same bursts. Returns points (n_dim, n_exit), the
        place of their cell in `keys`, and their replicate.
        """
        points, cells, replicates = [], [], []
        size = self.boxes_per_block
        for begin in range(0, len(keys), size):
            part = keys[begin : begin + size]
            first = np.arange(len(part) + 1, dtype=np.int64) * self.plan.per_cell
            state = np.empty((self.cells.n_dim, int(first[-1])))
            self.cells.fill_seeds(part, first, self.plan.n_replicate, sweep, state)
            self.fly(part, first, state, sweep)
            burst, point = self.strays(state, known)
            points.append(point)
            cells.append(begin + burst // self.plan.per_cell)
            replicates.append(burst % self.plan.per_cell // (self.plan.per_cell // self.plan.n_replicate))
        return np.concatenate(points, axis=1), np.concatenate(cells), np.concatenate(replicates)

    def strays(self, state: Floats, known: Integers) -> tuple[Integers, Floats]:
        """Which of the points state (n_dim, n) are finite but in no known cell: their numbers, and they."""
        key = np.empty(state.shape[1], dtype=np.int64)
        self.cells.locate(state, key)
        at = np.minimum(np.searchsorted(known, key), len(known) - 1)
        stray = np.flatnonzero((known[at] != key) & (key != BLOWN))
        return stray, state[:, stray]

    def slot_rows(self, slots: NDArray[np.uint16], first: Integers) -> tuple[Integers, NDArray[Any], NDArray[Any]]:
        n_sample, n_dim, _ = slots.shape
        n_box, n_rep, n_slot = len(first) - 1, self.plan.n_replicate, self.n_interval + 2
        most = n_box * min(n_dim * n_slot, n_sample * n_dim * int(np.max(np.diff(first))))
        board = np.zeros((n_dim * n_slot, n_rep), dtype=np.int64)
        pointer = np.empty(n_box + 1, dtype=np.int64)
        column = np.empty(most, dtype=np.min_scalar_type(max(n_dim * n_slot, 256)))
        count = np.empty((most, n_rep), dtype=np.uint32)
        n_entry = count_slots(slots, first, n_rep, n_slot, board, pointer, column, count)
        return pointer, column[:n_entry].copy(), shortest(count[:n_entry])


def shortest(count: NDArray[Any]) -> NDArray[Any]:
    """Copy in the smallest unsigned type that holds the counts."""
    peak = int(count.max(initial=0))
    return count.astype(np.min_scalar_type(peak))
