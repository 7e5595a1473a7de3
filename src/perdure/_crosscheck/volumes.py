"""Mean rate of change of volumes under a density: the sum of the Lyapunov exponents, from the cells alone."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from perdure._crosscheck.tangents import Bare, volume_rates
from perdure._records import BoxGrid, Floats, Integers, Quantity
from perdure._statistics import interval

__all__ = ["volume_rate"]

# Points in all cells together, and the fewest and most in one.
N_POINT, FEWEST, MOST = 2**19, 8, 4096


def volume_rate(
    bare: Bare,
    grid: BoxGrid,
    keys: Integers,
    mass: Floats,
    unit: str,
    sampling: Callable[[Floats], float],
    n_step: int,
    rng: np.random.Generator,
) -> Quantity:
    """Mean of div f (flows) or ln |det Df| (maps) over a density that is even within each cell.

    Parameters
    ----------
    keys, mass : ndarray, shape (n,)
        Cells of the regime and their masses.
    sampling : callable
        Standard error of the mean of a function that has these values (n,) on the cells, from the bursts.

    n_step : int
        Steps over which the rate is taken.

    Returns
    -------
    Quantity
        Parts of its error: "sampling" of the bursts and of the points in the cells, and "cells", the change when
        cells of twice the width are taken; where
        a cell has no neighbours, the spread within it; "differences", what
        copies that are a little apart leave open.
    """
    from scipy.stats import qmc

    n = len(keys)
    n_point = 2 ** int(np.clip(math.floor(math.log2(max(N_POINT / n, 1))), math.log2(FEWEST), math.log2(MOST)))
    base = qmc.Sobol(grid.n_dim, scramble=True, rng=rng).random(n_point).T
    mean, scatter, counted = np.empty(n), np.empty(n), np.empty(n, dtype=bool)
    corner = grid.lower + grid.indices(keys) * grid.width
    some = max(1, 2**16 // n_point)
    for at in range(0, n, some):
        corners = corner[at : at + some]
        # the same points in all cells, shifted by an offset of each cell's own
        place = (base[:, None, :] + rng.random((grid.n_dim, len(corners), 1))) % 1.0
        point = corners.T[:, :, None] + place * grid.width[:, None, None]
        rate = volume_rates(bare, np.ascontiguousarray(point.reshape(grid.n_dim, -1)), n_step, rng).reshape(
            len(corners), -1
        )
        fine = np.isfinite(rate)
        count = np.maximum(fine.sum(axis=1), 1)
        mean[at : at + some] = np.where(fine, rate, 0.0).sum(axis=1) / count
        gap = np.where(fine, rate - mean[at : at + some, None], 0.0)
        counted[at : at + some] = fine.any(axis=1)
        scatter[at : at + some] = (gap**2).sum(axis=1) / count**2
    # cells whose points all lead away say nothing
    part = np.where(counted, mass, 0.0)
    part /= part.sum()
    value = float(part @ mean)
    index = grid.indices(keys) // 2
    _, block = np.unique(index, axis=0, return_inverse=True)
    block = block.reshape(-1)
    alone = np.bincount(block)[block] == 1
    coarse = (np.bincount(block, mean) / np.bincount(block))[block]
    # a cell without neighbours has nothing to compare with but itself, and the law in it may be a point
    inside = float(part[alone] @ np.sqrt(scatter * n_point)[alone])
    points = math.sqrt(float(part**2 @ scatter))
    others = {"cells": abs(float(part @ coarse) - value) + inside, "differences": grid.n_dim * bare.floor(n_step)}
    return interval(value, math.hypot(sampling(mean), points), 7, unit, "real", others)
