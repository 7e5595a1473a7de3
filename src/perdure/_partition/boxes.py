"""Equal boxes on a lattice."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import locate
from perdure._kernels.seeds import box_seeds, burst_streams
from perdure._records import BoxGrid, Floats, Integers

__all__ = ["MOST_KEYS", "Boxes", "hull", "lattice", "tightened"]

# Most boxes on a lattice: keys times replicates must fit in 64 bits.
MOST_KEYS = 2**56


class Boxes:
    """Discretiser into the boxes of a `BoxGrid`.

    Parameters
    ----------
    grid : BoxGrid
    words : tuple of two uint64
        The 128 bits that key every seed point and stream.
    base : ndarray of uint32, shape (m, n_dim)
        Sobol set shared by all boxes, m at least the bursts of a replicate; m = 0 for independent uniform seeds.
    ends : ndarray, shape (n_dim, 2)
        Seeds stay between these ends in the boxes that straddle one: beyond the edge of the long run states may
        lead away for ever. Units of the state.
    """

    def __init__(
        self, grid: BoxGrid, words: tuple[np.uint64, np.uint64], base: NDArray[np.uint32], ends: Floats
    ) -> None:
        self.ends = ends
        self.grid = grid
        self.words = words
        self.base = base
        self.n_dim = grid.n_dim

    def locate(self, state: Floats, key: Integers) -> None:
        grid = self.grid
        locate(state, grid.lower, grid.width, grid.counts, grid.periodic, key)

    def centres(self, keys: Integers) -> Floats:
        return np.ascontiguousarray(self.grid.centres(keys).T)

    def fill_seeds(self, keys: Integers, first: Integers, n_replicate: int, sweep: int, state: Floats) -> None:
        grid = self.grid
        index = grid.indices(keys)
        word = np.uint64(sweep)
        box_seeds(
            *self.words,
            word,
            keys,
            index,
            first,
            n_replicate,
            self.base,
            grid.lower,
            grid.width,
            self.ends,
            state,
        )

    def fill_streams(self, keys: Integers, first: Integers, sweep: int, stream: NDArray[Any]) -> None:
        burst_streams(*self.words, np.uint64(sweep), keys, first, stream)


def lattice(
    lower: Floats, upper: Floats, counts: Integers, fixed: NDArray[np.bool_], periodic: NDArray[np.bool_]
) -> BoxGrid:
    """Lattice with `counts` boxes between lower and upper, carried on beyond the ends that are not fixed.

    Parameters
    ----------
    lower, upper : ndarray, shape (n_dim,)
        Ends of the domain. Units of the state.
    counts : ndarray of int64, shape (n_dim,)
        Boxes between the ends.
    fixed : ndarray of bool, shape (n_dim, 2)
        True where the lower, the upper end was given: what passes it is outside. Open ends reach as far as the
        keys allow, at most 2**19 boxes.
    periodic : ndarray of bool, shape (n_dim,)
    """
    width = (upper - lower) / counts
    n_open = int(np.sum(~fixed))
    room = MOST_KEYS / float(np.prod(counts.astype(float)))
    beyond = int(2.0 ** min(19.0, np.floor(np.log2(room) / n_open) - 1.0)) * np.maximum(counts, 1) if n_open else counts
    beyond = np.minimum(beyond, 2**19)
    below, above = np.where(fixed[:, 0], 0, beyond), np.where(fixed[:, 1], 0, beyond)
    return BoxGrid(lower - below * width, width, (counts + below + above).astype(np.int64), periodic)


def hull(grid: BoxGrid, keys: Integers, most: int) -> Integers | None:
    """Keys of all boxes between the extremes of `keys` on every axis, ascending; None if more than `most`."""
    index = grid.indices(keys)
    low, high = index.min(axis=0), index.max(axis=0)
    if float(np.prod((high - low + 1).astype(float))) > most:
        return None
    axes = np.meshgrid(*(np.arange(a, z + 1) for a, z in zip(low, high, strict=True)), indexing="ij")
    return np.ravel_multi_index([a.ravel() for a in axes], tuple(int(n) for n in grid.counts)).astype(np.int64)


def tightened(grid: BoxGrid, keys: Integers) -> tuple[BoxGrid, Integers]:
    """Smallest grid around the boxes in use, and their keys in it; the order of the keys is kept."""
    index = grid.indices(keys)
    low, high = index.min(axis=0), index.max(axis=0)
    low, high = np.where(grid.periodic, 0, low), np.where(grid.periodic, grid.counts - 1, high)
    counts = high - low + 1
    tight = BoxGrid(grid.lower + low * grid.width, grid.width, counts, grid.periodic)
    return tight, np.asarray(np.ravel_multi_index((index - low).T, tuple(int(n) for n in counts))).astype(np.int64)
