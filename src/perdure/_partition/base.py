"""What a discretiser owes the burst sampler."""

from __future__ import annotations

from typing import Any, Protocol

from numpy.typing import NDArray

from perdure._records import Floats, Integers

__all__ = ["Discretiser"]


class Discretiser(Protocol):
    """Cuts state space into cells that are named by an int64 key.

    An implementer owes: (1) keys from 0 to 2**56 - 1 that sort in a fixed order; (2) `locate`, which gives every
    point one key, OUTSIDE or BLOWN of the kernels; (3) `fill_seeds`, which starts bursts inside a cell so that a
    burst's seed depends on (seed, sweep, key, burst) alone.
    """

    n_dim: int

    def locate(self, state: Floats, key: Integers) -> None:
        """Fill key (n,) for points (n_dim, n)."""
        ...

    def centres(self, keys: Integers) -> Floats:
        """A point inside each cell, shape (n_dim, n). Units of the state."""
        ...

    def fill_seeds(self, keys: Integers, first: Integers, n_replicate: int, sweep: int, state: Floats) -> None:
        """Fill state (n_dim, n_burst) with seed points; cell i owns bursts first[i] to first[i + 1]."""
        ...

    def fill_streams(self, keys: Integers, first: Integers, sweep: int, stream: NDArray[Any]) -> None:
        """Fill stream (n_burst,) uint64 with the word that starts each burst's random stream."""
        ...
