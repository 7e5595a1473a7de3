"""Bursts flown twice, with whole and with halved time steps on the same noise: their difference is the step's error."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.generate import LANES
from perdure._records import Floats, Plan
from perdure._sampling.bursts import LANES_PER_BLOCK, STEPS_PER_BLOCK

__all__ = ["Pairs", "pairs"]


@dataclass(frozen=True)
class Pairs:
    """What bursts gave with whole steps and, from the same points on the same noise, with halved ones.

    Attributes
    ----------
    end, end_halved : ndarray, shape (n_dim, n_burst)
        Where they ended; nan where they blew up. Units of the state.
    sums, sums_halved : ndarray, shape (n_sum, n_burst)
        Per event time inside (in whole steps) and entries, per observable values and squares, the latter two per whole
        step and about the centres in the parameters. 0 where they blew up.
    slots, slots_halved : ndarray of uint16, shape (n_sample, n_dim, n_burst)
        Slots of the marginals, at the same whole steps for both.
    """

    end: Floats
    end_halved: Floats
    sums: Floats
    sums_halved: Floats
    slots: NDArray[np.uint16]
    slots_halved: NDArray[np.uint16]


def pairs(
    advance: Callable[..., int],
    halved: Callable[..., int],
    plan: Plan,
    parameters: Floats,
    n_sum: int,
    n_interval: int,
    state: Floats,
    stream: NDArray[np.uint64],
    *,
    workers: int = 1,
) -> Pairs:
    """Fly bursts once by each of two kernels; the same numbers whatever the number of workers.

    Parameters
    ----------
    advance, halved : callable
        Burst kernel of the case, and the one that halves its steps.
    plan : Plan
        Its step, burst length, stride and marginal axes are used.
    parameters : ndarray
        Values in the order of the kernels.
    n_sum : int
        Rows of the kernels' sums.
    n_interval : int
        Intervals per marginal axis.
    state : ndarray, shape (n_dim, n_burst)
        Where bursts start; not overwritten. Units of the state.
    stream : ndarray of uint64, shape (n_burst,)
        Stream words.
    workers : int
        Threads, each of which flies a chunk of bursts at a time.

    Raises
    ------
    ValueError
        There is not one stream word per burst.
    """
    n_dim, n_burst = state.shape
    if stream.shape != (n_burst,):
        raise ValueError(f"stream has shape {stream.shape}; allowed: a word per burst of state, ({n_burst},)")
    n_sample, n_slot = plan.n_step // plan.stride, float(n_interval + 2)
    axis_scale = n_interval / (plan.axis_upper - plan.axis_lower)
    size = chunk_size(plan.n_step)
    whole, half = (rooms(n_dim, n_sum, n_sample, n_burst) for _ in range(2))

    def fly(begin: int) -> None:
        """Bursts from `begin` on, on arrays of their own: a part of an array is not contiguous, as the kernels want."""
        part = slice(begin, begin + size)
        words = np.ascontiguousarray(stream[part])
        for kernel, (ends, sums, slots) in ((advance, whole), (halved, half)):
            at, totals, tally = rooms(n_dim, n_sum, n_sample, len(words))
            at[:] = state[:, part]
            kernel(
                at,
                totals,
                tally,
                words,
                parameters,
                plan.step,
                plan.n_step,
                plan.stride,
                plan.axis_lower,
                axis_scale,
                n_slot,
            )
            ends[:, part], sums[:, part], slots[:, :, part] = at, totals, tally

    begins = range(0, n_burst, size)
    if workers == 1 or len(begins) < 2:
        for begin in begins:
            fly(begin)
    else:
        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(fly, begins))
    (end, sums, slots), (end_halved, sums_halved, slots_halved) = whole, half
    return Pairs(end, end_halved, sums, sums_halved, slots, slots_halved)


def chunk_size(n_step: int) -> int:
    """Bursts flown by one call of a kernel; as in blocks of cells, but the halved kernel makes twice the steps."""
    return max(LANES, int(min(LANES_PER_BLOCK, STEPS_PER_BLOCK / (2 * n_step))))


def rooms(n_dim: int, n_sum: int, n_sample: int, n_burst: int) -> tuple[Floats, Floats, NDArray[np.uint16]]:
    """Arrays that a kernel fills: states, sums, slots."""
    slots = np.zeros((n_sample, n_dim, n_burst), dtype=np.uint16)
    return np.empty((n_dim, n_burst)), np.empty((n_sum, n_burst)), slots
