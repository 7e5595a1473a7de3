"""The one assertion for statistical comparisons."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

__all__ = ["assert_agrees"]

# Two-sided chance that a normal error passes this many standard errors: 5.7e-7, one in 1.7 million.
STANDARD_ERRORS = 5.0


def assert_agrees(
    estimate: ArrayLike, exact: ArrayLike, standard_error: ArrayLike, *, allowance: ArrayLike = 0.0
) -> None:
    """Fail if an estimate is further from the exact value than 5 standard errors and an allowance.

    Parameters
    ----------
    estimate, exact, standard_error : array_like
        Broadcast against each other; a common unit. Standard errors are finite and not negative.
    allowance : array_like
        Bound of a known bias (cell size, next order of a scheme), with its reason at the call. Same unit.

    Raises
    ------
    AssertionError
        An estimate is not finite or too far away; the message shows the worst one.
    """
    parts = np.broadcast_arrays(
        *(np.asarray(part, dtype=float) for part in (estimate, exact, standard_error, allowance))
    )
    value, truth, error, spare = (part.ravel() for part in parts)
    assert value.size > 0, "nothing to compare"
    for name, size in (("standard errors", error), ("allowances", spare)):
        assert np.all((size >= 0.0) & np.isfinite(size)), f"{name} {size} must be finite and not negative"
    excess = np.abs(value - truth) - (STANDARD_ERRORS * error + spare)
    worst = int(np.argmax(np.where(np.isnan(excess), np.inf, excess)))
    v, t, e, s = value[worst], truth[worst], error[worst], spare[worst]
    apart = abs(v - t) / e if e > 0.0 else np.inf
    assert excess[worst] <= 0.0, (
        f"estimate {v!r} and exact value {t!r} (entry {worst} of {value.size}) are {abs(v - t):.3g} apart, "
        f"{apart:.2f} standard errors of {e:.3g}; allowed: {STANDARD_ERRORS:g} standard errors and {s:.3g}"
    )
