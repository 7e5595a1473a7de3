"""The row-stochastic matrix of a tally, never stored as floats."""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.products import (
    left_product,
    replicate_product,
    right_product,
    scatter_product,
    total_counts,
)
from perdure._records import Floats, SlotRows, Tally

__all__ = ["TransitionMatrix", "scattered_slots"]


class TransitionMatrix:
    """Ulam's matrix: tally divided by its row sums. P[i, j] goes from cell i to cell j.

    The outside and blown-up states are not among its cells: rows of cells that leak sum to less than one.
    Work: one product costs the number of entries.
    """

    def __init__(self, tally: Tally) -> None:
        self.tally = tally
        self.total = totals(tally)
        self.inverse = 1.0 / tally.bursts.sum(axis=1)

    @property
    def n_cell(self) -> int:
        return self.tally.n_cell

    def left(self, mass: Floats) -> Floats:
        """mass @ P, shape (n_cell,) or (n_cell, k)."""

        def product(x: Floats) -> Floats:
            y = np.empty((self.n_cell + 2, x.shape[1]))
            left_product(self.tally.pointer, self.tally.column, self.total, self.inverse, x, y)
            return y[: self.n_cell]

        return in_columns(product, mass)

    def right(self, values: Floats) -> Floats:
        """P @ values, shape (n_cell,) or (n_cell, k)."""

        def product(x: Floats) -> Floats:
            padded = np.concatenate([x, np.zeros((2, x.shape[1]))])
            y = np.empty((self.n_cell, x.shape[1]))
            tally = self.tally
            right_product(tally.pointer, tally.column, self.total, self.inverse, padded, 0, self.n_cell, y)
            return y

        return in_columns(product, values)

    def leak(self) -> Floats:
        """Probability, shape (n_cell,), of ending outside or blown up."""
        return 1.0 - self.right(np.ones(self.n_cell))

    def replicate_sums(self, values: Floats, begin: int, end: int) -> Floats:
        """Sum of values (n_cell, k) where the bursts of each cell and replicate ended.

        Rows `begin` to `end` only; shape (end - begin, n_replicate, k). Outside counts as zero.
        """
        tally = self.tally
        x = np.zeros((self.n_cell + 2, values.shape[1]))
        x[: self.n_cell] = values
        y = np.empty((end - begin, tally.count.shape[1], values.shape[1]))
        replicate_product(tally.pointer, tally.column, tally.count, x, begin, end, y)
        return y

    def scatter(self, weight: Floats, begin: int, out: Floats) -> None:
        """Add count * weight of each cell and replicate, weight (n, n_replicate, k), to the cells where bursts ended.

        `begin` is the first cell; out (n_cell + 2, k).
        """
        tally = self.tally
        scatter_product(tally.pointer, tally.column, tally.count, weight, begin, begin + len(weight), out)


def totals(tally: Tally) -> NDArray[Any]:
    """Counts summed over replicates, shape (n_entry,), in the shortest type that holds them."""
    if np.issubdtype(tally.count.dtype, np.floating):
        # rows must sum to their bursts to the last digits, and single precision would not
        return np.asarray(tally.count.sum(axis=1, dtype=np.float64))
    total = np.empty(len(tally.column), dtype=np.min_scalar_type(int(tally.bursts.sum(axis=1).max(initial=0))))
    total_counts(tally.count, total)
    return total


def in_columns(product: Callable[[Floats], Floats], values: Floats) -> Floats:
    """Product with a vector, or with the columns of a matrix shared out among threads. Same bits either way."""
    columns = np.ascontiguousarray(values.reshape(len(values), -1), dtype=float)
    k, n_thread = columns.shape[1], os.cpu_count() or 1
    if k < 2 * n_thread or n_thread == 1 or columns.size < 100_000:
        return product(columns).reshape(values.shape)
    cuts = np.array_split(np.arange(k), n_thread)
    with ThreadPoolExecutor(n_thread) as pool:
        parts = pool.map(lambda cut: product(np.ascontiguousarray(columns[:, cut])), cuts)
        return np.concatenate(list(parts), axis=1)


def scattered_slots(slots: SlotRows, weight: Floats, begin: int, out: Floats) -> None:
    """Add count * weight, as `TransitionMatrix.scatter`, to the marginal intervals; out (n_slot, k)."""
    scatter_product(slots.pointer, slots.column, slots.count, weight, begin, begin + len(weight), out)
