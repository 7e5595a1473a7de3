"""What the rooms of the engine hand each other: plan, tally, matrix."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class BoxGrid:
    """Equal boxes on a regular lattice.

    Attributes
    ----------
    lower : ndarray, shape (n_dim,)
        Lower corner of the lattice. Units of the state.
    width : ndarray, shape (n_dim,)
        Edge lengths of a box. Units of the state.
    counts : ndarray of int64, shape (n_dim,)
        Boxes per axis. The key of a box is its row-major index (last component fastest).
    periodic : ndarray of bool, shape (n_dim,)
        Axes that wrap around.
    """

    lower: Floats
    width: Floats
    counts: Integers
    periodic: NDArray[np.bool_]

    @property
    def n_dim(self) -> int:
        return len(self.width)

    @property
    def volume(self) -> float:
        """Volume of a box, product of the state units."""
        return float(np.prod(self.width))

    def indices(self, keys: Integers) -> Integers:
        """Index along each axis, shape (n, n_dim), of box keys, shape (n,)."""
        return np.stack(np.unravel_index(keys, tuple(int(n) for n in self.counts)), axis=1).astype(np.int64)

    def centres(self, keys: Integers) -> Floats:
        """Centres, shape (n, n_dim), of box keys, shape (n,). Units of the state."""
        return self.lower + (self.indices(keys) + 0.5) * self.width


def density_unit(units: tuple[str, ...]) -> str:
    """Unit of a density: 1 over the product of the units of the state components ("1" where none has a unit)."""
    named = [f"({unit})" if set(unit) & set(" */") else unit for unit in units if unit != "1"]
    if not named:
        return "1"
    return f"1/{named[0]}" if len(named) == 1 else f"1/({' * '.join(named)})"


@dataclass(frozen=True)
class Plan:
    """What is to be run: given by the case or found by the pilot (`found` names those, with the reason).

    Attributes
    ----------
    grid : BoxGrid
    bounded : bool
        True if the domain was given: what leaves it is in the outside state. False: the lattice extends as
        far as bursts go.
    seed_keys : ndarray of int64
        Sorted keys of the cells that pilot trajectories visited.
    seed_share : ndarray, shape of `seed_keys`
        Part of the pilot's points inside the domain in each.
    step : float
        Time step (1 for maps). Unit: time.
    n_step : int
        Steps of a burst.
    per_cell, n_replicate : int
        Bursts of a cell, and the number of independent replicates that they are split into.
    stride : int
        Marginals are tallied every `stride` steps along a burst.
    scheme : str
        "map", "rk4", "euler-maruyama" or "weak2".
    axis_lower, axis_upper : ndarray, shape (n_dim,)
        Range of the marginal histograms. Units of the state.
    """

    grid: BoxGrid
    bounded: bool
    seed_keys: Integers
    seed_share: Floats
    step: float
    n_step: int
    per_cell: int
    n_replicate: int
    stride: int
    scheme: str
    axis_lower: Floats
    axis_upper: Floats
    found: Mapping[str, str]
    pilot: Mapping[str, float]

    @property
    def duration(self) -> float:
        """Length of a burst. Unit: time."""
        return self.step * self.n_step


@dataclass(frozen=True)
class Tally:
    """Counts of bursts from cell to cell, by replicate, as compressed rows.

    Attributes
    ----------
    pointer : ndarray of int64, shape (n_cell + 1,)
    column : ndarray of int32, shape (n_entry,)
        Target cell; `n_cell` is outside, `n_cell + 1` blown up: states without a row. Ascending in a row. Where
        bursts left the domain and came back, the outside state has a row: it is the last cell.
    count : ndarray of unsigned int or float32, shape (n_entry, n_replicate)
        Under reseeding, weights in units of bursts: float32.
    bursts : ndarray of int64 or float64, shape (n_cell, n_replicate)
        Bursts sent from each cell: the row sums. Under reseeding, their weight in units of bursts: float64.
    together : bool
        False: rows are independent of each other, and the replicates of a row too. True, for reseeded bursts: a
        replicate is a whole ensemble, independent of the other replicates only.
    """

    pointer: Integers
    column: NDArray[np.int32]
    count: NDArray[Any]
    bursts: NDArray[Any]
    together: bool = False

    @property
    def n_cell(self) -> int:
        return len(self.pointer) - 1


@dataclass(frozen=True)
class SlotRows:
    """Marginal counts of every cell, as compressed rows.

    Attributes
    ----------
    pointer : ndarray of int64, shape (n_cell + 1,)
    column : ndarray of uint16, shape (n_entry,)
        k * (n_interval + 2) + s for component k; slot 0 is below the axis, the last slot above it.
    count : ndarray of unsigned int, shape (n_entry, n_replicate)
    n_sample : int
        Points tallied along each burst.
    n_interval : int
    """

    pointer: Integers
    column: NDArray[np.uint16]
    count: NDArray[Any]
    n_sample: int
    n_interval: int


@dataclass(frozen=True)
class Exits:
    """Bursts that ended outside the domain.

    Attributes
    ----------
    point : ndarray, shape (n_dim, n_exit)
        Where they stood. Units of the state.
    cell, replicate : ndarray of int, shape (n_exit,)
        Where they came from.
    """

    point: Floats
    cell: NDArray[Any]
    replicate: Integers


class Transition(Protocol):
    """Row-stochastic matrix of a `Tally`; vectors have one entry per cell."""

    tally: Tally

    @property
    def n_cell(self) -> int: ...

    def left(self, mass: Floats) -> Floats:
        """mass @ P, shape (n_cell,) or (n_cell, k)."""
        ...

    def right(self, values: Floats) -> Floats:
        """P @ values, shape (n_cell,) or (n_cell, k)."""
        ...

    def replicate_sums(self, values: Floats, begin: int, end: int) -> Floats:
        """Sum of values (n_cell, k) where bursts ended, by cell and replicate: (end - begin, n_replicate, k)."""
        ...

    def scatter(self, weight: Floats, begin: int, out: Floats) -> None:
        """Add count * weight, weight (n, n_replicate, k) from cell `begin` on, to out (n_cell + 2, k)."""
        ...
