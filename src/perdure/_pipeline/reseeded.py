"""Sweeps of reseeded bursts: how many, which are dropped, what became of them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from perdure._partition import Cover, tightened
from perdure._pipeline.prepare import Prepared
from perdure._pipeline.sampled import Sampled, cover_limit, sampler_of
from perdure._pipeline.watch import Progress
from perdure._records import Floats, Integers
from perdure._sampling import Ensemble, Starts
from perdure._spectrum import Classes, ClassSolver, lasting
from perdure._statistics import allocation
from perdure._streams import seed_words
from perdure._transitions import Pool, PooledRows, TransitionMatrix, combined, positions

__all__ = ["Drift", "Reseeded", "Sweeps", "replicate_size"]

# Independent ensembles: the degrees of freedom of the error bar are one less.
N_REPLICATE = 8
# Sweeps at least, and bounds on the states of a replicate.
FEWEST_SWEEPS, FEWEST_STATES, MOST_STATES = 24, 512, 2**18
# Sweeps of the first block; each later one is as long as all before it.
FIRST_BLOCK = 8
# Part of the sweeps that is dropped in any case, and least part that is kept.
DROPPED, KEPT_LEAST = 1 / 3, 0.3
# A drift of so many of its standard errors drops another block; 8 replicates give chance one of 6.3 in 2000 numbers.
DRIFT = 6.3
# Sweeps flown for the states from which bursts are repeated at half the time step.
MOST_SNAPSHOTS = 32
# Changes between blocks of so many standard errors, twice in a row and of one sign, are a memory that lingers; with 8
# replicates chance gives that to one of 40,000 numbers.
LINGERING = 3.5
# Sweeps go on, while there is drift, up to so many times the bursts of the plan.
PATIENCE = 3.0


def replicate_size(ready: Prepared, n_cell: int, n_burst: float) -> int:
    """States of a replicate: [bursts] per_cell times the cells, else for about `n_burst` bursts in all."""
    # where the case wants plain bursts, the number it gives is theirs
    per_cell = ready.case.bursts.per_cell if ready.case.bursts.reseed is not False else None
    wanted = n_burst / ready.plan.pilot["sweeps"] if per_cell is None else per_cell * n_cell
    return int(np.clip(wanted / N_REPLICATE, 2 if per_cell else FEWEST_STATES, MOST_STATES))


@dataclass(frozen=True)
class Drift:
    """What the averages still do from block to block of the sweeps, each as long as all before it.

    Attributes
    ----------
    before : PooledRows or None
        The last block dropped.
    first, whole : PooledRows
        The first block kept, and all of them.
    share : float
        Part of the sweeps kept that is in the first block.
    """

    before: PooledRows | None
    first: PooledRows
    whole: PooledRows
    share: float

    def change(self, cells: Integers) -> Floats:
        """Change of the averages from the first block to the others, shape (n_replicate, n_sum); sums as the kernel
        makes them, over a burst, on the cells of these keys."""
        early, late = (block_sums(rows, cells) for rows in (self.first, self.whole))
        rest = late[0] - early[0], late[1] - early[1]
        with np.errstate(divide="ignore", invalid="ignore"):
            moved = rest[0] / rest[1][:, None] - early[0] / early[1][:, None]
        return np.where(np.isfinite(moved), moved, 0.0)

    def earlier(self, cells: Integers) -> Floats:
        """Change from the last block dropped to the first one kept, as `change`; zero where there is none."""
        if self.before is None:
            return np.zeros(self.first.sums.shape[1:])
        late, early = (block_sums(rows, cells) for rows in (self.first, self.before))
        with np.errstate(divide="ignore", invalid="ignore"):
            moved = late[0] / late[1][:, None] - early[0] / early[1][:, None]
        return np.where(np.isfinite(moved), moved, 0.0)


@dataclass(frozen=True)
class Reseeded:
    """Rows of reseeded bursts that plain ones are compared with."""

    rows: PooledRows

    def averages(self, cells: Integers) -> Floats:
        """Averages over a burst on the cells of these keys, shape (n_replicate, n_sum), of the kernel's sums."""
        sums, weight = block_sums(self.rows, cells)
        return sums / np.where(weight > 0.0, weight, 1.0)[:, None]


def block_sums(rows: PooledRows, cells: Integers | None) -> tuple[Floats, Floats]:
    """Weighted sums (n_replicate, n_sum) and weights (n_replicate,) over cells; over all of them if None."""
    mine = slice(None) if cells is None else np.isin(rows.keys, cells)
    return rows.sums[mine].sum(axis=0), rows.weight[mine].sum(axis=0)


class Sweeps:
    """Reseeded bursts on the regimes that plain bursts found; can be carried on, up to `most` bursts.

    Attributes
    ----------
    bursts, n_sweep : int
        All so far.
    n_blown : int
        Bursts of the sweeps kept that blew up.
    """

    def __init__(
        self, ready: Prepared, plain: Sampled, classes: Classes, n_state: int, most: float, workers: int
    ) -> None:
        self.ready, self.plain, self.most, self.workers = ready, plain, most, workers
        self.bursts, self.n_sweep, self.n_blown = 0, 0, 0
        self.blocks: list[Pool] = [Pool()]
        n = len(plain.keys)
        self.cover = Cover(cover_limit(ready.plan))
        self.cover.add(plain.lattice_keys)
        self.ensemble = Ensemble(
            sampler_of(ready),
            self.cover,
            N_REPLICATE,
            n_state,
            copies=ready.case.system.is_noisy,
            salt=seed_words(ready.case.seed, "reseed")[0],
        )
        transition = TransitionMatrix(plain.all.tally)
        mass, share = np.zeros(n), np.zeros(n)
        for cells in classes.members:
            if cells[0] < n:
                solver = ClassSolver(transition, cells)
                mass += solver.mass[:n] / solver.mass[:n].sum()
                share += self.worth(plain, solver)[:n]
        held = np.flatnonzero(mass > 0.0)
        self.ensemble.start(plain.lattice_keys[held], mass[held], share[held] / share[held].sum())

    def worth(
        self, done: Sampled, solver: ClassSolver, wanted: Mapping[tuple[str, int], float] | None = None
    ) -> Floats:
        """Share of the bursts of a regime that each cell (n_cell,) should get."""
        ready = self.ready
        return allocation(ready.case, ready.plan, solver.transition, solver.mass, done.all, solver.adjoint, wanted)

    @property
    def nbytes(self) -> int:
        """Memory of the pools."""
        return sum(block.nbytes for block in self.blocks)

    def fly(self, n_burst: float, n_sweep: int | None, progress: Progress) -> None:
        """Sweep until `n_burst` more bursts are sent, or exactly `n_sweep` sweeps if given."""
        goal, begun, sweeps = self.bursts + n_burst, self.bursts, 0
        while (self.bursts < goal or self.n_sweep < FEWEST_SWEEPS) if n_sweep is None else sweeps < n_sweep:
            if self.n_sweep and self.bursts >= self.most:
                break
            done = sweeps / n_sweep if n_sweep else (self.bursts - begun) / max(n_burst, 1.0)
            progress("sweeps", int(100 * min(done, 1.0)), 100)
            if self.blocks[-1].n_sweep >= max(FIRST_BLOCK, self.n_sweep - self.blocks[-1].n_sweep):
                self.blocks.append(Pool())
            rows = self.ensemble.sweep(self.workers)
            self.blocks[-1].add(rows)
            self.n_blown += rows.n_blown
            self.bursts += int(rows.bursts.sum())
            self.n_sweep, sweeps = self.n_sweep + 1, sweeps + 1

    def settle(self, n_burst: float, progress: Progress) -> None:
        """`fly`, and go on while the averages drift through all that would be kept."""
        self.fly(n_burst, self.ready.case.bursts.sweeps, progress)
        most = min(PATIENCE * n_burst, self.most)
        while self.ready.case.bursts.sweeps is None and self.bursts < most and self.kept()[1]:
            self.fly(0.5 * n_burst, None, progress)

    def kept(self) -> tuple[list[Pool], bool]:
        """Blocks to keep, and whether the averages drift in them still."""
        blocks, dropped = list(self.blocks), 0
        if not blocks[-1].n_sweep:
            blocks.pop()
        while len(blocks) > 1 and dropped + blocks[0].n_sweep <= DROPPED * self.n_sweep:
            dropped += blocks.pop(0).n_sweep
        while len(blocks) > 1 and drifts(blocks):
            if self.n_sweep - dropped - blocks[0].n_sweep < KEPT_LEAST * self.n_sweep:
                return blocks, True
            dropped += blocks.pop(0).n_sweep
        return blocks, False

    @property
    def lingers(self) -> bool:
        """Whether the start is forgotten too slowly for what is left of it to be told."""
        return lingers([block for block in self.blocks if block.n_sweep >= FIRST_BLOCK])

    def spent(self) -> list[tuple[str, int, int]]:
        """Sweeps and bursts of the blocks dropped and kept: (name, sweeps, bursts)."""
        kept = self.kept()[0]
        n_sweep, bursts = sum(b.n_sweep for b in kept), sum(int(b.whole().bursts.sum()) for b in kept)
        return [("burn-in", self.n_sweep - n_sweep, self.bursts - bursts), ("reseeded", n_sweep, bursts)]

    def snapshots(self, n_most: int) -> Starts:
        """About `n_most` states, from several sweeps where one has not so many."""
        parts = [self.ensemble.thinned(n_most)]
        for _ in range(min(n_most // len(parts[0].weight), MOST_SNAPSHOTS) - 1):
            self.ensemble.sweep(self.workers)
            parts.append(self.ensemble.thinned(n_most))
        return Starts(
            np.concatenate([part.state for part in parts], axis=1),
            *(np.concatenate([getattr(part, name) for part in parts]) for name in ("weight", "key", "owner")),
        )

    def pooled(self) -> PooledRows:
        """Rows of the sweeps kept, added up; those of the blocks stay as they are."""
        pool = Pool()
        for block in self.kept()[0]:
            pool.add(block.whole(), block.n_sweep)
        return pool.whole()

    def result(self) -> tuple[Sampled, Drift | None, float]:
        """Bursts of the sweeps kept as one tally, the drift that is left, and the part of the weight set aside."""
        blocks, whole = self.kept()[0], self.pooled()
        n_kept, drift = sum(block.n_sweep for block in blocks), None
        if len(blocks) > 1:
            at = len(self.blocks) - len(blocks) - (not self.blocks[-1].n_sweep)
            before = self.blocks[at - 1].whole() if at > 0 else None
            drift = Drift(before, blocks[0].whole(), whole, blocks[0].n_sweep / n_kept)
        keep = lasting(whole.pointer, positions(whole), whole.total.sum(axis=1, dtype=float))
        found = combined(self.plain.all, self.plain.lattice_keys, whole, keep)
        grid, tight = tightened(self.ready.plan.grid, found.keys)
        n, column, counts = len(found.keys), found.all.tally.column, dict(self.plain.counts)
        counts |= {"cells": n, "entries": len(column), "sweeps": self.n_sweep, "dropped": self.n_sweep - n_kept}
        counts["bursts"] += self.bursts
        counts["steps"] += self.bursts * self.ready.plan.n_step
        counts["blown_up"] = self.n_blown
        done = replace(self.plain, grid=grid, keys=tight, lattice_keys=found.keys, all=found.all, counts=counts)
        return done, drift, found.strayed


def lingers(blocks: list[Pool]) -> bool:
    """Whether the last two changes from block to block, each as long as all before, are real and of one kind.

    A start that is forgotten exponentially leaves at most one; two that shrink by less than a factor of three are the
    mark of a memory that fades like a power of time, or of one longer than the sweeps.
    """
    if len(blocks) < 3:
        return False
    means = [sums / weight[:, None] for sums, weight in (block_sums(block.whole(), None) for block in blocks[-3:])]
    changes = [means[1] - means[0], means[2] - means[1]]
    mean = [change.mean(axis=0) for change in changes]
    error = [change.std(axis=0, ddof=1) / np.sqrt(len(change)) for change in changes]
    size = 1e-12 * np.abs(means[2]).max(axis=0)
    real = [np.abs(m) > LINGERING * np.maximum(e, size) for m, e in zip(mean, error, strict=True)]
    return bool(np.any(real[0] & real[1] & (mean[0] * mean[1] > 0.0) & (np.abs(mean[1]) > np.abs(mean[0]) / 3.0)))


def drifts(blocks: list[Pool]) -> bool:
    """Whether the averages of the first block differ from those of the others beyond chance, for any sum."""
    parts = [block_sums(block.whole(), None) for block in blocks]
    early = parts[0][0] / parts[0][1][:, None]
    late = np.sum([part[0] for part in parts[1:]], axis=0) / np.sum([part[1] for part in parts[1:]], axis=0)[:, None]
    change = late - early
    scatter = change.std(axis=0, ddof=1) / np.sqrt(len(change))
    # sums that have no scatter between replicates do not drift: they are rounding
    real = scatter > 1e-12 * np.abs(late).max(axis=0)
    return bool(np.any(np.abs(change.mean(axis=0))[real] > DRIFT * scatter[real]))
