"""Where bursts are worth most, and what an even spread of them would have cost."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from perdure._records import CaseRecord, Floats, Plan, Transition
from perdure._statistics.numbers import Found, averaged, mixes, row_errors

__all__ = ["allocation", "evenness"]


def allocation(
    case: CaseRecord,
    plan: Plan,
    transition: Transition,
    mass: Floats,
    found: Found,
    adjoint: Callable[[Floats], Floats],
    wanted: Mapping[tuple[str, int], float] | None = None,
) -> Floats:
    """Where bursts are worth most: share of the bursts for every cell, shape (n_cell,), sum one.

    J. Neyman's allocation (J. Roy. Statist. Soc. 97 (1934) 558-625): in proportion to the standard deviation of what
    one burst of the cell adds to the error, here of several numbers together, each relative to its variance, times
    its weight in `wanted` (all alike without it). Half goes by mass: against chance in the deviations, and since cells
    know the adjoint solution on their average only.
    """
    sums, averages, h = averaged(case, plan, transition, mass, found, adjoint, np.zeros((0, len(mass))))
    mix, names = mixes(case, plan, averages)
    per_burst = np.zeros((len(mass), mix.shape[1]))
    with np.errstate(over="ignore", invalid="ignore"):
        for begin, row in row_errors(transition, mass, h, sums, mix):
            per_burst[begin : begin + len(row)] = (row**2).sum(axis=1)
    per_burst *= found.sent[:, None]
    total = per_burst.sum(axis=0)
    weight = np.array([1.0 if wanted is None else wanted.get(name, 0.0) for name in names])
    fine = np.isfinite(total) & (total > 0.0) & (weight > 0.0)
    score = np.sqrt(per_burst[:, fine] @ (weight[fine] / total[fine]))
    by_mass = mass / mass.sum()
    return np.asarray(0.5 * score / score.sum() + 0.5 * by_mass if score.any() else by_mass)


def evenness(
    case: CaseRecord,
    plan: Plan,
    transition: Transition,
    mass: Floats,
    found: Found,
    adjoint: Callable[[Floats], Floats],
) -> dict[tuple[str, int], float]:
    """Variance of every number if the same bursts were spread evenly over the cells, over that with the bursts sent."""
    sums, averages, h = averaged(case, plan, transition, mass, found, adjoint, np.zeros((0, len(mass))))
    mix, names = mixes(case, plan, averages)
    sent, even = np.zeros(mix.shape[1]), np.zeros(mix.shape[1])
    mean = found.sent[mass > 0.0].mean()
    with np.errstate(over="ignore", invalid="ignore"):
        for begin, row in row_errors(transition, mass, h, sums, mix):
            part = (row**2).sum(axis=1)
            sent += part.sum(axis=0)
            even += (part * found.sent[begin : begin + len(row), None]).sum(axis=0) / mean
    return {name: float(even[k] / sent[k]) for k, name in enumerate(names) if sent[k] > 0.0}
