"""What makes arrays a density."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from perdure._records import BoxGrid, Floats, Integers
from perdure.errors import UsageError

__all__ = ["check", "frozen"]


def frozen(array: ArrayLike, dtype: type[Any]) -> NDArray[Any]:
    """Copy that cannot be written to."""
    copy = np.array(array, dtype=dtype)
    copy.flags.writeable = False
    return copy


def check(lattice: BoxGrid, keys: Integers, mass: Floats, state: tuple[str, ...], units: tuple[str, ...]) -> None:
    """Refuse arrays that do not make a density."""
    if not len(state) == len(units) == lattice.n_dim:
        raise UsageError(
            f"Density: {len(state)} state names and {len(units)} units for a lattice of {lattice.n_dim} "
            "axes; give one of each per axis"
        )
    if keys.ndim != 1 or keys.shape != mass.shape or not len(keys):
        raise UsageError(f"Density: keys has shape {keys.shape}, mass {mass.shape}; both must be (n_cell,), not empty")
    size = float(np.prod(lattice.counts.astype(float)))
    if np.any(np.diff(keys) <= 0) or keys[0] < 0 or keys[-1] >= size:
        raise UsageError(
            f"Density: keys must ascend without repeats from 0 to below {size:.0f}, the cells of the lattice"
        )
    total = float(mass.sum())
    if not np.all(mass >= 0.0) or not 0.0 < total < 1.0 + 1e-6:
        raise UsageError(
            f"Density: mass sums to {total!r}, its least entry is {mass.min()!r}; "
            "it must be non-negative and sum to one (less what is outside the domain)"
        )
