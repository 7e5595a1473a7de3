"""The outside state: bursts that left the domain are followed until they come back.

The outside cannot be seeded uniformly. A fixed number of particles is kept there instead: each sweep flies all of
them for one burst; those that come back are replaced by fresh exits, drawn from the bursts that left the domain with
the stationary mass of their cells as weight. In the long run the particles have the law of the invariant measure
outside, and their rows, pooled over the later sweeps, are the row of the outside state.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import OUTSIDE
from perdure._records import Exits, Floats, Integers
from perdure._sampling.bursts import BlockRows, BurstSampler

__all__ = ["OutsideRow", "outside_row"]

PARTICLES = 8192
# Sweeps dropped at first and kept; they start again until the particles have settled, or up to so many sweeps or steps.
DROPPED, KEPT, MOST_SWEEPS, MOST_STEPS = 8, 16, 2000, 2e9
# Sweeps before the kept ones, in units of the mean stay outside.
STAYS = 10.0


@dataclass(frozen=True)
class OutsideRow:
    """Row of the outside state.

    Attributes
    ----------
    row : BlockRows
        One row, pooled over the sweeps kept.
    n_burst : int
        Bursts pooled.
    settled : bool
        False if excursions still lengthened after all sweeps: the part of particles that stay outside differed between
        the two halves of the kept ones by more than five standard errors and one percent of those that come back.
    """

    row: BlockRows
    n_burst: int
    settled: bool


def outside_row(
    sampler: BurstSampler,
    exits: Exits,
    known: Integers,
    weight: Floats,
    rng: np.random.Generator,
    *,
    brief: bool = False,
) -> OutsideRow:
    """Fly the particles; weight (n_exit,) is the mass that each exit stands for, `known` the keys of the cover.

    If `brief`, the fewest sweeps do, settled or not.
    """
    n_rep = sampler.plan.n_replicate
    size = PARTICLES // n_rep
    key, first = np.array([OUTSIDE]), np.array([0, size * n_rep], dtype=np.int64)
    weight = weight if weight.sum() > 0.0 else np.ones_like(weight)
    pools = [drawn(np.flatnonzero(exits.replicate == r), weight, rng) for r in range(n_rep)]
    staying: list[Floats] = [np.zeros((len(exits.point), 0)) for _ in range(n_rep)]
    rows, stay = [], []
    most = int(np.clip(MOST_STEPS / (PARTICLES * sampler.plan.n_step), KEPT + DROPPED, MOST_SWEEPS))
    for sweep in range(most):
        state = np.empty((len(exits.point), size * n_rep))
        for r in range(n_rep):
            fresh = rng.choice(pools[r], size - staying[r].shape[1])
            state[:, r * size : (r + 1) * size] = np.concatenate([staying[r], exits.point[:, fresh]], axis=1)
        block = sampler.fly(key, first, state, sweep + 1)
        burst, point = sampler.strays(state, known)
        staying = [point[:, burst // size == r] for r in range(n_rep)]
        stay.append(len(burst) / (size * n_rep))
        rows.append(block)
        if len(rows) == KEPT + DROPPED and brief:
            break
        if len(rows) == KEPT + DROPPED:
            rows, stay = rows[DROPPED:], stay[DROPPED:]
            long_enough = (sweep + 1) * (1.0 - float(np.mean(stay))) >= STAYS
            if long_enough and has_settled(stay, size * n_rep):
                return OutsideRow(pooled(rows), len(rows) * size * n_rep, True)
            # excursions last longer than the sweeps so far: these are dropped too
            rows, stay = rows[KEPT - DROPPED :], stay[KEPT - DROPPED :]
    return OutsideRow(pooled(rows), len(rows) * size * n_rep, False)


def has_settled(stay: list[float], n_particle: int) -> bool:
    """Whether the part of particles that stay outside is the same in both halves of the sweeps."""
    half = len(stay) // 2
    early, late = float(np.mean(stay[:half])), float(np.mean(stay[half:]))
    error = np.sqrt(late * (1.0 - late) * 2.0 / (half * n_particle))
    return bool(abs(late - early) <= 5.0 * error + 0.01 * (1.0 - late))


def drawn(pool: Integers, weight: Floats, rng: np.random.Generator) -> Integers:
    """A sample of exits in proportion to their weights; of all exits if the replicate has none of its own."""
    pool = pool if len(pool) and weight[pool].sum() > 0.0 else np.arange(len(weight))
    return np.asarray(rng.choice(pool, 2**15, p=weight[pool] / weight[pool].sum()))


def pooled(rows: list[BlockRows]) -> BlockRows:
    """One-cell rows added up."""
    target, count = added([(row.target, row.count) for row in rows])
    slot, slot_count = added([(row.slot, row.slot_count) for row in rows])
    return replace(
        rows[-1],
        pointer=np.array([0, len(target)]),
        target=target,
        count=count,
        sums=np.sum([row.sums for row in rows], axis=0),
        slot_pointer=np.array([0, len(slot)]),
        slot=slot,
        slot_count=slot_count,
        n_blown=sum(row.n_blown for row in rows),
    )


def added(
    parts: list[tuple[NDArray[np.generic], NDArray[np.generic]]],
) -> tuple[Integers, NDArray[np.uint32]]:
    """Counts summed by name, names ascending."""
    names = np.concatenate([name for name, _ in parts])
    unique, at = np.unique(names, return_inverse=True)
    total = np.zeros((len(unique), parts[0][1].shape[1]), dtype=np.uint32)
    np.add.at(total, at, np.concatenate([count for _, count in parts]).astype(np.uint32))
    return unique, total
