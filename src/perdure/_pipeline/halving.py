"""The error of the time step: bursts repeated at half of it."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from perdure._kernels.rows import OUTSIDE
from perdure._pipeline.prepare import Prepared
from perdure._pipeline.reseeded import N_REPLICATE
from perdure._pipeline.sampled import Sampled, sampler_of
from perdure._records import Floats, Integers, System
from perdure._sampling import FIRST_SWEEP, Pairs, Starts, kernel_for, pairs, seeds_in
from perdure._spectrum import ClassSolver
from perdure._statistics import HalfStep

__all__ = ["Halved", "most_pairs", "repeated", "uniform_starts"]

# Bursts that are repeated: at most so many, so many time steps, and this part of the steps of the run.
MOST_PAIRS, MOST_STEPS, PART = 2**17, 2e8, 0.1
# Weak order of a scheme, and with it the error of a step over the change when it is halved: 1 / (1 - 2^-order).
ORDER = {"rk4": 4, "euler-maruyama": 1, "weak2": 2}
# What takes a scheme down to order one.
KINKS = re.compile(r"\b(if|floor|abs|sign|min|max)\b|%|<|>")


@dataclass(frozen=True)
class Halved:
    """Repeated bursts: their starts, where both members of a pair ended (keys), and what both found."""

    starts: Starts
    end: Integers
    end_halved: Integers
    found: Pairs
    factor: float
    n_slot: int

    def change(self, done: Sampled, solver: ClassSolver) -> HalfStep:
        """What half the step changes in the regime of a solver, to first order."""
        n, n_cell = len(done.keys), done.all.tally.n_cell
        inside = np.zeros(n_cell, dtype=bool)
        inside[solver.members] = True
        start, whole, half = (places(done.lattice_keys, key, n, n_cell) for key in self.keys)
        used = (start < n_cell) & (whole < n_cell) & (half < n_cell)
        used[used] = inside[start[used]] & inside[whole[used]] & inside[half[used]]
        owner, at = self.starts.owner[used], np.flatnonzero(used)
        total = np.bincount(owner, weights=self.starts.weight[used], minlength=N_REPLICATE)
        weight = self.starts.weight[used] / np.where(total > 0.0, total, 1.0)[owner]
        push = np.zeros((n_cell, N_REPLICATE))
        np.add.at(push, (half[used], owner), weight)
        np.add.at(push, (whole[used], owner), -weight)
        sums = np.zeros((N_REPLICATE, len(self.found.sums)))
        np.add.at(sums, owner, ((self.found.sums_halved - self.found.sums)[:, at] * weight).T)
        return HalfStep(solver.response(push), sums, self.slots(at, owner, weight), self.factor)

    @property
    def keys(self) -> tuple[Integers, Integers, Integers]:
        return self.starts.key, self.end, self.end_halved

    def slots(self, at: Integers, owner: Integers, weight: Floats) -> Floats:
        """Change of the weights tallied in every interval, shape (n_replicate, n_dim * n_slot), by the pairs `at`."""
        n_sample, n_dim, _ = self.found.slots.shape
        total = np.zeros(N_REPLICATE * n_dim * self.n_slot)
        for slots, sign in ((self.found.slots_halved, 1.0), (self.found.slots, -1.0)):
            for sample in range(n_sample):
                for k in range(n_dim):
                    place = (owner * n_dim + k) * self.n_slot + slots[sample, k, at]
                    total += np.bincount(place, weights=sign * weight, minlength=len(total))
        return total.reshape(N_REPLICATE, -1)


def places(keys: Integers, key: Integers, n: int, n_cell: int) -> Integers:
    """Positions in a tally of n boxes with these keys, of which there are n_cell with the outside state.

    n_cell stands for what has no row.
    """
    at = np.minimum(np.searchsorted(keys, key), n - 1)
    return np.where(keys[at] == key, at, np.where(key == OUTSIDE, n, n_cell))


def repeated(ready: Prepared, starts: Starts, workers: int) -> Halved:
    """Fly bursts from the starts with whole and with half steps."""
    made, sampler = ready.plan, sampler_of(ready)
    halved, _ = kernel_for(ready.case, halved=True)
    n = len(starts.weight)
    stream = np.empty(n, dtype=np.uint64)
    sampler.cells.fill_streams(np.zeros(1, dtype=np.int64), np.array([0, n]), FIRST_SWEEP - 1, stream)
    found = pairs(
        ready.advance,
        halved,
        made,
        ready.parameters,
        ready.n_sum,
        sampler.n_interval,
        starts.state,
        stream,
        workers=workers,
    )
    end, end_halved = np.empty(n, dtype=np.int64), np.empty(n, dtype=np.int64)
    sampler.cells.locate(found.end, end)
    sampler.cells.locate(found.end_halved, end_halved)
    order = ORDER[made.scheme] if is_smooth(ready.case.system) else 1
    return Halved(starts, end, end_halved, found, 1.0 / (1.0 - 0.5**order), sampler.n_interval + 2)


def is_smooth(system: System) -> bool:
    """Whether the equations have no jump or kink that shows in their text; those of Python functions are not known."""
    texts = [e.text for row in (system.equations, *system.noise) for e in row]
    return system.function is None and not any(KINKS.search(text) for text in texts)


def most_pairs(ready: Prepared, n_step: float, times: float = 1.0) -> int:
    """Bursts to repeat after a run of `n_step` steps; `times` so many."""
    whole = min(MOST_STEPS, PART * n_step) / (3.0 * ready.plan.n_step)
    return int(times * min(MOST_PAIRS, max(whole, 64 * N_REPLICATE)))


def uniform_starts(ready: Prepared, done: Sampled, mass: Floats, n_most: int) -> Starts:
    """Seeds uniform in cells, about `n_most`; mass (n_cell,) weighs the cells."""
    held = np.flatnonzero(mass[: len(done.keys)] > 0.0)
    per_replicate = n_most // N_REPLICATE
    # if there are more cells than bursts, those that count most
    held = np.sort(held[np.argsort(-mass[held], kind="stable")[:per_replicate]])
    number = np.full(len(held), per_replicate // len(held))
    keys, sampler = done.lattice_keys[held], sampler_of(ready)
    state, cell, owner = seeds_in(sampler, keys, number, N_REPLICATE, FIRST_SWEEP)
    return Starts(state, (mass[held] / number)[cell], keys[cell], owner)
