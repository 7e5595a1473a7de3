"""Marginal histograms with sampling errors.

An adjoint solve per interval would be dear. Instead the first-order error is drawn: with balanced random signs
over the replicates of every cell, the signed row differences push the stationary mass by a vector whose response
y = push (I - P)^-1 gives the error of every interval at once; the mean square over the draws is an unbiased
estimate of the variance of method and formula of `numbers` (Rademacher weights as in C. F. J. Wu, Ann. Statist.
14 (1986) 1261-1295, cited from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from perdure._records import Floats, Marginal, Plan, SlotRows, System, Transition

__all__ = ["balanced_signs", "marginal_numbers"]

CHUNK = 65536
Scatter = Callable[[SlotRows, Floats, int, Floats], None]


def balanced_signs(n_cell: int, n_replicate: int, n_draw: int, rng: np.random.Generator) -> Floats:
    """Signs, shape (n_cell, n_replicate, n_draw), that sum to zero over the replicates (an even number)."""
    half = np.ones(n_replicate, dtype=np.int8)
    half[n_replicate // 2 :] = -1
    if n_replicate == 2:
        one = (2 * rng.integers(0, 2, (n_cell, 1, n_draw), dtype=np.int8) - 1).astype(np.int8)
        return np.concatenate([one, -one], axis=1)
    order = np.argsort(rng.random((n_cell, n_replicate, n_draw), dtype=np.float32), axis=1)
    return np.asarray(half[order])


def marginal_numbers(
    system: System,
    plan: Plan,
    transition: Transition,
    slots: SlotRows,
    mass: Floats,
    response: Callable[[Floats], Floats],
    scatter: Scatter,
    rng: np.random.Generator,
) -> Mapping[str, Marginal]:
    """Marginal of every state component in one regime; mass (n_cell,) is zero off the regime."""
    n_cell, n_rep = transition.tally.bursts.shape
    n_draw = 32 if n_cell < 200_000 else 16
    signs = balanced_signs(n_cell, n_rep, n_draw, rng)
    each = mass / (n_rep * transition.tally.bursts[:, 0])
    push = np.zeros((n_cell + 2, n_draw))
    for begin in range(0, n_cell, CHUNK):
        part = slice(begin, begin + CHUNK)
        transition.scatter(signs[part] * each[part, None, None], begin, push)
    y = response(push[:n_cell])
    n_slot = slots.n_interval + 2
    total = np.zeros((len(system.state) * n_slot, n_draw + 1))
    for begin in range(0, n_cell, CHUNK):
        part = slice(begin, begin + CHUNK)
        bursts = transition.tally.bursts[part]
        pooled = 1.0 / bursts.sum(axis=1)[:, None, None]
        weight = np.empty((len(bursts), n_rep, n_draw + 1))
        weight[:, :, :n_draw] = y[part, None, :] * pooled + signs[part] * each[part, None, None]
        weight[:, :, n_draw] = mass[part, None] * pooled[:, :, 0]
        scatter(slots, weight / slots.n_sample, begin, total)
    result = {}
    for k, name in enumerate(system.state):
        rows = total[k * n_slot : (k + 1) * n_slot]
        error = np.sqrt(np.mean(rows[:, :n_draw] ** 2, axis=1))
        edges = np.linspace(plan.axis_lower[k], plan.axis_upper[k], slots.n_interval + 1)
        value = rows[:, n_draw]
        result[name] = Marginal(edges, value[1:-1], error[1:-1], float(value[0]), float(value[-1]), system.units[k])
    return result
