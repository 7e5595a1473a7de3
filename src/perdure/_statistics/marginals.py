"""Marginal histograms with sampling errors.

An adjoint solve per interval would be dear. Instead the first-order error is drawn: with balanced random signs
over the replicates of every cell, the signed row differences push the stationary mass by a vector whose response
y = push (I - P)^-1 gives the error of every interval at once; the mean square over the draws is an unbiased
estimate of the variance of method and formula of `numbers` (Rademacher weights as in C. F. J. Wu, Ann. Statist.
14 (1986) 1261-1295, cited from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from perdure._records import Floats, Integers, Marginal, Plan, SlotRows, System, Transition
from perdure._statistics.intervals import Shift, cells_part, ends, quantile, upper_bound

__all__ = ["HalfStep", "balanced_signs", "marginal_numbers"]

CHUNK = 65536
Scatter = Callable[[SlotRows, Floats, int, Floats], None]


@dataclass(frozen=True)
class HalfStep:
    """What half the time step changes in a regime, found by each replicate.

    Attributes
    ----------
    mass : ndarray, shape (n_cell, n_replicate)
        Change of the stationary mass, to first order.
    sums : ndarray, shape (n_replicate, n_sum)
        Change along the bursts of the sums of a burst, as the kernel makes them.
    slots : ndarray, shape (n_replicate, n_slot)
        The same of the points tallied in each interval.
    factor : float
        Error of the step over the change when it is halved.
    """

    mass: Floats
    sums: Floats
    slots: Floats
    factor: float


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
    lifted: Floats,
    halved: HalfStep | None,
    sent: Integers,
) -> Mapping[str, Marginal]:
    """Marginal of every state component in one regime; mass (n_cell,) is zero off the regime.

    `lifted` as in `regime_numbers`; sent (n_cell,) the bursts; `halved` is what half the time step changes, None where
    there is no step.
    """
    tally = transition.tally
    n_cell, n_rep = tally.bursts.shape
    signs = error_signs(tally.together, n_cell, n_rep, rng)
    n_draw = signs.shape[2]
    each = mass / tally.bursts.sum(axis=1)
    push = np.zeros((n_cell + 2, n_draw))
    for begin in range(0, n_cell, CHUNK):
        part = slice(begin, begin + CHUNK)
        transition.scatter(centred(signs, tally.bursts, part) * each[part, None, None], begin, push)
    moved = 0 if halved is None else halved.mass.shape[1]
    columns = [response(push[:n_cell]), mass[:, None], lifted.T] + ([] if halved is None else [halved.mass])
    shared = np.concatenate(columns, axis=1)
    n_slot = slots.n_interval + 2
    total = np.zeros((len(system.state) * n_slot, shared.shape[1]))
    for begin in range(0, n_cell, CHUNK):
        part = slice(begin, begin + CHUNK)
        pooled = 1.0 / tally.bursts[part].sum(axis=1)[:, None]
        weight = np.repeat((shared[part] * pooled)[:, None, :], n_rep, axis=1)
        weight[:, :, :n_draw] += centred(signs, tally.bursts, part) * each[part, None, None]
        scatter(slots, weight / slots.n_sample, begin, total)
    value, ladder = total[:, n_draw], total[:, n_draw + 1 : total.shape[1] - moved]
    # signs are drawn, replicates counted one by one
    over = np.sum if tally.together else np.mean
    parts = {"sampling": np.sqrt(over(total[:, :n_draw] ** 2, axis=1))}
    if ladder.shape[1]:
        parts["cells"] = np.array([cells_part((v, *two)) for v, two in zip(value, ladder, strict=True)])
    if halved is not None:
        change = total[:, -moved:] + halved.slots.T / slots.n_sample
        parts["step"] = Shift(change.T, halved.factor).part(np.eye(len(total)))
    freedom = n_rep - 1 if tally.together else 1e9
    bound = upper_bound(1.0 / float(np.sum(mass**2 / sent)))
    return {
        name: marginal_of(plan, k, slots.n_interval, value, parts, freedom, bound, system.units[k])
        for k, name in enumerate(system.state)
    }


def error_signs(together: bool, n_cell: int, n_rep: int, rng: np.random.Generator) -> Floats:
    """Signs, shape (n_cell or 1, n_replicate, n_draw), with which the errors of replicates are added up.

    Random where rows are independent. Of whole replicates each is taken by itself, with the factor that makes the sum
    of squares the variance of their mean.
    """
    if together:
        return np.asarray(np.eye(n_rep)[None] * np.sqrt(n_rep / (n_rep - 1)))
    return balanced_signs(n_cell, n_rep, 32 if n_cell < 200_000 else 16, rng)


def centred(signs: Floats, bursts: Floats, part: slice) -> Floats:
    """Signs of a range of cells less their mean over the bursts of the row, shape (n, n_replicate, n_draw)."""
    held = signs if len(signs) == 1 else signs[part]
    share = bursts[part] / bursts[part].sum(axis=1, keepdims=True)
    return np.asarray(
        held - np.einsum("ird,ir->id", np.broadcast_to(held, (len(share), *held.shape[1:])), share)[:, None]
    )


def marginal_of(
    plan: Plan,
    k: int,
    n_interval: int,
    value: Floats,
    parts: Mapping[str, Floats],
    freedom: float,
    bound: float,
    unit: str,
) -> Marginal:
    """Marginal of component `k` from the values of all slots and the parts of their errors.

    `bound` is the upper end for an interval that was never met.
    """
    first = k * (n_interval + 2)
    rows = slice(first + 1, first + n_interval + 1)
    mine = {name: part[rows] for name, part in parts.items()}
    half = np.hypot.reduce([quantile(freedom if name == "sampling" else 1e9) * part for name, part in mine.items()])
    both = [ends(float(v), float(h), "share") for v, h in zip(value[rows], half, strict=True)]
    edges = np.linspace(plan.axis_lower[k], plan.axis_upper[k], n_interval + 1)
    return Marginal(
        edges,
        value[rows],
        np.hypot.reduce(list(mine.values())),
        float(value[first]),
        float(value[first + n_interval + 1]),
        unit,
        parts=mine,
        low=np.maximum([low for low, _ in both], 0.0),
        high=np.where(value[rows] > 0.0, [high for _, high in both], bound),
    )
