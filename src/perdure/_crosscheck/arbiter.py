"""A short piece of some trajectories by a method of high order, to judge the time step of the others."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from perdure._records import Arbiter, Floats

__all__ = ["TOLERATED", "arbitrated"]

# Tolerance of the arbiter, relative to the spread of a component; and the deviation that asks for a shorter step.
TOLERANCE, TOLERATED = 1e-11, 1e-4
# Most halvings, and what each must take off the deviation: a scheme of order 4 takes 16, equations that jump do not.
HALVINGS, GAINED = 6, 3.0


def arbitrated(
    rates: Callable[[Floats], Floats],
    fly: Callable[[Floats, float, int], Floats],
    state: Floats,
    scale: Floats,
    period: Floats,
    duration: float,
    step: float,
) -> tuple[Arbiter | None, float]:
    """What the arbiter found, and the time step that satisfies it; the given one where a shorter one does not help.

    Dormand and Prince's method of order 8 in scipy (E. Hairer, S. P. Norsett, G. Wanner, Solving Ordinary Differential
    Equations I, Springer 1993), with the equations in numpy.

    Parameters
    ----------
    rates : callable
        dx/dt at states (n_dim, n).
    fly : callable
        States after so many steps of this length from given ones.
    state : ndarray, shape (n_dim, n)
        Where the pieces begin.
    scale : ndarray, shape (n_dim,)
        Spread of each component; period: 0 for components that do not wrap.
    duration, step : float
        Unit: time.
    """
    from scipy.integrate import solve_ivp

    n_dim, n = state.shape

    def flat(_: float, x: Floats) -> Floats:
        return rates(x.reshape(n_dim, n)).ravel()

    tolerance = np.repeat(TOLERANCE * scale, n)
    with np.errstate(all="ignore"):
        try:
            solved = solve_ivp(flat, (0.0, duration), state.ravel(), method="DOP853", rtol=1e-10, atol=tolerance)
        except ValueError:
            # an equation that is not finite on the way
            return None, step
    if not solved.success:
        return None, step
    truth = solved.y[:, -1].reshape(n_dim, n)
    first = before = math.inf
    for halving in range(HALVINGS + 1):
        n_step = max(1, round(duration / step)) * 2**halving
        gap = fly(state, duration / n_step, n_step) - truth
        wraps = period > 0.0
        gap[wraps] -= period[wraps, None] * np.round(gap[wraps] / period[wraps, None])
        off = np.abs(gap / scale[:, None]).max(axis=0)
        deviation = float(np.quantile(np.where(np.isfinite(off), off, 1e300), 0.9))
        first = deviation if halving == 0 else first
        if deviation <= TOLERATED:
            return Arbiter(duration, n, deviation), duration / n_step
        if deviation > before / GAINED and before < 1.0:
            break
        before = deviation
    return Arbiter(duration, n, first), step
