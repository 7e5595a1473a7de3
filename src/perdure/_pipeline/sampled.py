"""All bursts of a run: the cover, the outside state, the boxes between regimes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import BLOWN
from perdure._partition import Cover, hull, tightened
from perdure._pipeline.prepare import Prepared
from perdure._pipeline.watch import Progress
from perdure._records import BoxGrid, Exits, Integers, Plan
from perdure._sampling import BurstSampler, bursts_per_cell, outside_row
from perdure._spectrum import Classes, ClassSolver, closed_classes
from perdure._streams import generator
from perdure._transitions import Collected, RowStore, TransitionMatrix, with_outside, without

__all__ = ["Sampled", "cover_limit", "sample", "sample_all", "sampler_of"]

# The cover grows to so many times the cells of the pilot; what goes further is the outside state. It stops too
# beyond so many steps, and the boxes between regimes are filled in up to so many.
GROWTH, MOST_STEPS, MOST_HULL = 2, 2e10, 2**17
# Rounds of weights for the particles outside: until the part of the weight that moves in a round is below this.
# Two rounds put 7 percent too much mass beyond the rarer of two edges where bursts are short.
MOST_ROUNDS, WEIGHT_MOVED = 10, 0.003


@dataclass(frozen=True)
class Sampled:
    """The finished bursts; `all` has the cells in the order of their keys, then the outside state if it has a row."""

    grid: BoxGrid
    keys: Integers
    lattice_keys: Integers
    all: Collected
    counts: Mapping[str, int]
    settled: bool = True

    @property
    def has_outside(self) -> bool:
        return self.all.tally.n_cell > len(self.keys)


def sampler_of(ready: Prepared) -> BurstSampler:
    n_interval = ready.case.output.intervals
    return BurstSampler(ready.advance, ready.cells, ready.plan, ready.parameters, ready.n_sum, n_interval)


def cover_limit(made: Plan) -> int:
    """Most cells that the cover grows to."""
    return int(min(GROWTH * int(made.pilot["cells_expected"]) + 4096, float(np.prod(made.grid.counts.astype(float)))))


def sample(ready: Prepared, workers: int, progress: Progress) -> Sampled:
    """Send bursts from the cover, add the cells they reach, until it is closed."""
    made, sampler = ready.plan, sampler_of(ready)
    cover = Cover(cover_limit(made))
    store = RowStore(made.n_replicate)
    frontier, waves, used = cover.add(made.seed_keys), 0, 0
    while len(frontier) and (waves == 0 or (used + len(frontier)) * made.per_cell * made.n_step < MOST_STEPS):
        found, done = [], 0
        for block in sampler.run(frontier, workers=workers):
            found.append(cover.add(block.target))
            ids = cover.ids(block.target, -2)
            ids[block.target == BLOWN] = -1
            store.add(block, ids)
            done += len(block.keys)
            progress("bursts", done, len(frontier))
        used, waves, frontier = used + len(frontier), waves + 1, np.concatenate(found)
    keys = cover.keys[:used]
    order = np.argsort(keys, kind="stable")
    collected = store.finish(order, made, ready.case.output.intervals, cover.count)
    keys = keys[order]
    drop = doomed(TransitionMatrix(collected.tally), ~np.isin(keys, made.seed_keys))
    if drop.any():
        collected, keys, used = without(collected, drop), keys[~drop], int(np.sum(~drop))
    grid, tight = tightened(made.grid, keys)
    column, count = collected.tally.column, collected.tally.count
    counts = {
        "cells": used, "bursts": used * made.per_cell, "steps": used * made.per_cell * made.n_step,
        "entries": len(column), "outside": int(count[column == used].sum()),
        "blown_up": int(count[column == used + 1].sum()), "waves": waves,
    }  # fmt: skip
    return Sampled(grid, tight, keys, collected, counts)


def doomed(transition: TransitionMatrix, grown: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Cells, among those that growth added, that send 5 percent of their bursts to blow up or to such cells.

    Seeds laid uniformly in a cell that straddles the edge of the long run start beyond it, and their ruin is not the
    system's. What arrives in such a cell is left to the outside state, which follows arrivals themselves.
    """
    tally = transition.tally
    lost = tally.column == tally.n_cell + 1
    row = np.searchsorted(tally.pointer, np.flatnonzero(lost), side="right") - 1
    ruin = np.zeros(tally.n_cell)
    np.add.at(ruin, row, tally.count[lost].sum(axis=1))
    ruin *= transition.inverse
    drop = np.zeros(tally.n_cell, dtype=bool)
    while True:
        more = grown & (ruin + transition.right(drop.astype(float)) >= 0.05)
        if np.array_equal(more, drop):
            return drop
        drop = more


def follow_outside(ready: Prepared, done: Sampled, progress: Progress) -> Sampled:
    """Give the outside state a row, if bursts left the cover: its particles weighted by the solves before.

    Where outside is only what the cover has no room for, and reseeded bursts will follow states there as anywhere
    else, a rough row does for their start.
    """
    brief = ready.case.bursts.reseed is not False and not ready.plan.bounded
    tally, n = done.all.tally, len(done.keys)
    leaving = np.unique(np.searchsorted(tally.pointer, np.flatnonzero(tally.column == n), side="right") - 1)
    if not len(leaving):
        return done
    sampler, rng = sampler_of(ready), generator(ready.case.seed, "outside")
    point, origin, replicate = sampler.exits(done.lattice_keys[leaving], done.lattice_keys)
    exits = Exits(point, leaving[origin], replicate)
    weight, grown, settled = np.ones(len(origin)), done.all, True
    n_round = 1 if brief else MOST_ROUNDS
    for round_number in range(n_round):
        progress("outside", round_number, n_round)
        found = outside_row(sampler, exits, done.lattice_keys, weight, rng, brief=brief)
        at = np.minimum(np.searchsorted(done.lattice_keys, found.row.target), n - 1)
        known = done.lattice_keys[at] == found.row.target
        column = np.where(known, at, np.where(found.row.target == BLOWN, n + 1, n))
        grown, settled = (
            with_outside(done.all, found.row, column.astype(np.int32), found.n_burst),
            found.settled or brief,
        )
        classes = closed_classes(grown.tally)
        if not classes.members or (round_number and not settled):
            break
        mass = ClassSolver(TransitionMatrix(grown.tally), classes.members[0]).mass
        before, weight = weight / max(weight.sum(), 1e-300), mass[exits.cell] / tally.bursts.sum(axis=1)[exits.cell]
        if 0.5 * float(np.abs(weight / max(weight.sum(), 1e-300) - before).sum()) < WEIGHT_MOVED:
            break
    return replace(done, all=grown, settled=settled)


def one_step(ready: Prepared) -> Prepared:
    """Bursts of one step: under k steps at once the phases of a cycle whose length divides k look like regimes."""
    found = dict(ready.plan.found) | {"burst length": "one step, to tell regimes from the phases of a cycle"}
    return replace(ready, plan=replace(ready.plan, n_step=1, stride=1, found=found))


def sample_all(ready: Prepared, workers: int, progress: Progress) -> tuple[Prepared, Sampled, Classes]:
    """All bursts of a run. With several regimes the boxes between them are sent bursts too, for the basins."""
    done = follow_outside(ready, sample(ready, workers, progress), progress)
    classes = closed_classes(done.all.tally)
    if len(classes.members) > 1 and not ready.case.system.is_flow and ready.case.bursts.steps is None:
        single = one_step(ready)
        check = follow_outside(single, sample(single, workers, progress), progress)
        found = closed_classes(check.all.tally)
        if len(found.members) != len(classes.members):
            ready, done, classes = single, check, found
    if len(classes.members) < 2:
        return ready, done, classes
    whole = float(np.prod(ready.plan.grid.counts.astype(float)))
    if whole <= MOST_HULL:
        # a domain that was given, and is taken whole
        between: Integers | None = np.arange(int(whole), dtype=np.int64)
    else:
        between = hull(ready.plan.grid, done.lattice_keys, MOST_HULL)
    if between is None or len(between) == len(done.keys):
        return ready, done, classes
    per_cell, n_replicate, _ = bursts_per_cell(ready.case.bursts, len(between), ready.plan.n_step)
    share = np.zeros(len(between))
    share[np.searchsorted(between, ready.plan.seed_keys)] = ready.plan.seed_share
    made = replace(ready.plan, seed_keys=between, seed_share=share, per_cell=per_cell, n_replicate=n_replicate)
    ready = replace(ready, plan=made)
    done = follow_outside(ready, sample(ready, workers, progress), progress)
    return ready, done, closed_classes(done.all.tally)
