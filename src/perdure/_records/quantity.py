"""A number with its error."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np


@dataclass(frozen=True)
class Quantity:
    """A number with its 95 percent interval and the parts of its error.

    Attributes
    ----------
    value, low, high : float or None
        None where there is no number; then `reason` says why. For an event never seen `value` is None,
        `low` 0 and `high` an upper bound.
    parts : mapping of str to float
        Standard errors by part of the error budget ("sampling", ...). Same unit as `value`.
    unit : str
        "1" where it has none.
    reason : str
        Empty for an ordinary number.
    """

    value: float | None
    low: float | None
    high: float | None
    parts: Mapping[str, float] = field(default_factory=dict)
    unit: str = "1"
    reason: str = ""

    @property
    def error(self) -> float | None:
        """Standard error: the parts added in quadrature. None without a value."""
        if self.value is None:
            return None
        return float(np.sqrt(sum(part * part for part in self.parts.values())))
