"""A histogram of one state component as a law."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from perdure._records import Floats
from perdure.errors import UsageError

__all__ = ["Histogram"]


@dataclass(frozen=True)
class Histogram:
    """Masses of intervals, uniform inside each, and the masses `below` and `above` all of them.

    Parameters
    ----------
    edges : ndarray, shape (n + 1,)
        Unit of the component.
    mass : ndarray, shape (n,)
        No unit.
    """

    name: str
    edges: Floats
    mass: Floats
    below: float
    above: float

    def distribution(self) -> Any:
        """Law within the range of the histogram, a `scipy.stats.rv_histogram`."""
        from scipy.stats import rv_histogram

        if not self.mass.sum() > 0.0:
            raise UsageError(
                f"Density.marginal({self.name!r}): no mass lies within the histogram, "
                f"from {self.edges[0]:.6g} to {self.edges[-1]:.6g}; use `cell_marginal`"
            )
        return rv_histogram((self.mass, self.edges), density=False)

    def quantile(self, q: ArrayLike) -> Floats | float:
        """Smallest value with at least the share `q` at or below it; -inf or inf beyond the range."""
        share = np.asarray(q, dtype=np.float64)
        if not np.all((share >= 0.0) & (share <= 1.0)):
            raise UsageError(f"Density.quantile({self.name!r}): q is {q!r}; it must lie between 0 and 1")
        heap = self.below + np.concatenate([[0.0], np.cumsum(self.mass)])
        heap /= heap[-1] + self.above
        if self.above == 0.0:
            heap[-1] = 1.0
        # Interval k, with heap[k] < share <= heap[k + 1]; share 0 belongs to the first one that holds mass.
        last = len(self.mass) - 1
        first = min(int(np.searchsorted(heap, 0.0, side="right")) - 1, last)
        k = np.clip(np.searchsorted(heap, share, side="left") - 1, max(first, 0), last)
        held = heap[k + 1] - heap[k]
        part = np.divide(share - heap[k], held, out=np.zeros_like(share), where=held > 0.0)
        value = self.edges[k] + np.clip(part, 0.0, 1.0) * (self.edges[k + 1] - self.edges[k])
        value = np.where(share < heap[0], -np.inf, np.where(share > heap[-1], np.inf, value))
        return value if value.ndim else float(value)
