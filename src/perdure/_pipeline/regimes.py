"""From finished bursts to regimes with their numbers."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from perdure._pipeline.halving import Halved
from perdure._pipeline.prepare import Prepared
from perdure._pipeline.reseeded import Drift, Reseeded
from perdure._pipeline.sampled import Sampled
from perdure._pipeline.watch import Clock
from perdure._records import Floats, Integers, Plan, Quantity, Regime
from perdure._spectrum import ClassSolver, parts_without, period_of
from perdure._statistics import HalfStep, Shift, marginal_numbers, outside_quantity, regime_numbers, scaled
from perdure._streams import generator
from perdure._transitions import TransitionMatrix, lumped, scattered_slots

__all__ = ["Checks", "Judged", "Solved", "pilot_share", "regime_of"]


def pilot_share(made: Plan, done: Sampled, members: list[Integers]) -> float:
    """Part of the pilot's points that lie in the cells of the regimes."""
    held = (
        done.lattice_keys[np.concatenate([cells[cells < len(done.keys)] for cells in members])]
        if members
        else made.seed_keys[:0]
    )
    return float(made.seed_share[np.isin(made.seed_keys, held)].sum())


# Stays inside an event that are shorter than a step are seen by chance, in proportion to their length: what a half step
# adds to the entries, another half adds again half of that, and so on.
MISSED = 2.0


@dataclass(frozen=True)
class Judged:
    """A regime, its share of time outside, and what speaks against it.

    Attributes
    ----------
    rough : bool
        Solves behind the error bars stopped above their tolerance.
    apart : float
        Mass of the second largest part of its cells that only the outside state links with the largest.
    """

    regime: Regime
    outside: Quantity
    rough: bool
    apart: float


@dataclass(frozen=True)
class Checks:
    """What the error budget is told beside the bursts themselves; None: not known.

    Attributes
    ----------
    drift : Drift or None
        Change of the averages from sweep to sweep.
    reseeded : Reseeded or None
        Reseeded bursts, to compare plain ones with.
    halved : Halved or None
        Bursts repeated at half the time step.
    """

    drift: Drift | None = None
    reseeded: Reseeded | None = None
    halved: Halved | None = None


@dataclass(frozen=True)
class Solved:
    """A closed class, solved: numbers follow from it, and where more bursts would help."""

    done: Sampled
    transition: TransitionMatrix
    solver: ClassSolver

    @property
    def inside(self) -> Integers:
        """Members that are boxes, not the outside state."""
        return self.solver.members[self.solver.members < len(self.done.keys)]


def regime_of(ready: Prepared, solved: Solved, weight: Quantity, checks: Checks, clock: Clock) -> Judged:
    """Long-run numbers of one closed class."""
    case, done, solver, transition = ready.case, solved.done, solved.solver, solved.transition
    found, members, inside = done.all, solver.members, solved.inside
    lifted = coarser_masses(done, members)
    halved = None if checks.halved is None else checks.halved.change(done, solver)
    shifts = shifts_of(ready, solved, checks, halved)
    clock.stage("stationary mass")
    events, observables = regime_numbers(
        case, ready.plan, transition, solver.mass, found, solver.adjoint, lifted, ready.centres, shifts
    )
    share = outside_quantity(ready.plan, transition, solver.mass, found.sent, done.has_outside, solver.adjoint)
    clock.stage("numbers")
    marginals = marginal_numbers(
        case.system,
        ready.plan,
        transition,
        found.slots,
        solver.mass,
        solver.response,
        scattered_slots,
        generator(case.seed, "signs"),
        lifted,
        halved,
        found.sent,
    )
    clock.stage("marginals")
    regime = Regime(
        weight=weight,
        cell=inside,
        mass=solver.mass[inside],
        period=period_of(found.tally, members),
        residual=solver.residual,
        eigenvalue=solver.eigenvalue,
        events=events,
        observables=observables,
        marginals=marginals,
    )
    apart = 0.0
    if len(inside) < len(members):
        parts = parts_without(found.tally, members, solver.mass, len(done.keys))
        apart = float(parts[1]) if len(parts) > 1 else 0.0
    return Judged(regime, share, solver.rough, apart)


def shifts_of(ready: Prepared, solved: Solved, checks: Checks, halved: HalfStep | None) -> dict[str, Shift]:
    """Changes of the averages, by the part of the budget that they belong to."""
    shifts, n_event, tally = {}, len(ready.case.events), solved.transition.tally
    keys = solved.done.lattice_keys[solved.inside]
    pooled = solved.done.all.sums.sum(axis=1) / tally.bursts.sum(axis=1)[:, None]
    pooled = np.where(np.isfinite(pooled), pooled, 0.0)
    if checks.drift is not None:
        change, earlier = (
            scaled(v, ready.plan, n_event) for v in (checks.drift.change(keys), checks.drift.earlier(keys))
        )
        shifts["cells"] = Shift(change, checks.drift.share, earlier)
    if checks.reseeded is not None:
        change = checks.reseeded.averages(keys) - solved.solver.mass @ pooled
        shifts["cells"] = Shift(scaled(change, ready.plan, n_event), 1.0)
    if halved is not None:
        change = halved.mass.T @ pooled + halved.sums
        factor = np.full(change.shape[1], halved.factor)
        factor[1 : 2 * n_event : 2] = max(MISSED, halved.factor)
        shifts["step"] = Shift(scaled(change, ready.plan, n_event) * factor, 1.0)
    return shifts


def coarser_masses(done: Sampled, members: Integers) -> Floats:
    """Stationary mass of a class, (2, n_cell), with cells of twice and four times the width, from the same bursts.

    Shape (0, n_cell) for a class of fewer than 8 cells: there is nothing to lump.
    """
    n = done.all.tally.n_cell
    if len(members) < 8:
        return np.zeros((0, n))
    lifted = np.zeros((2, n))
    for level, factor in enumerate((2, 4)):
        coarse = lumped(done.all.tally, members, done.grid, done.keys, factor)
        solver = ClassSolver(TransitionMatrix(coarse.tally), np.arange(coarse.tally.n_cell))
        lifted[level, members] = coarse.lifted(solver.mass)
    return lifted
