"""The order of the steps, nothing else."""

from __future__ import annotations

import os
import platform
import time
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version

import numpy as np

import perdure
from perdure._pipeline.prepare import Prepared, prepare
from perdure._pipeline.sampled import Sampled, sample_all
from perdure._pipeline.watch import Clock, Progress, silent
from perdure._records import CaseRecord, Estimate, Floats, Integers, Plan, Quantity, Regime
from perdure._result import Result
from perdure._sampling import kernel_for
from perdure._spectrum import ClassSolver, absorption, parts_without, period_of, visits
from perdure._statistics import (
    Findings,
    marginal_numbers,
    no_share,
    outcome_of,
    outside_quantity,
    regime_numbers,
    regime_weights,
)
from perdure._streams import generator
from perdure._transitions import TransitionMatrix, lumped, scattered_slots

__all__ = ["estimate", "forecast_cost", "plan"]


def plan(case: CaseRecord) -> Plan:
    """What `estimate` would run, from the case and a pilot run; nothing is estimated."""
    return prepare(case, silent, Clock()).plan


def forecast_cost(case: CaseRecord, made: Plan) -> dict[str, float]:
    """Expected cells, bursts, steps, peak memory (bytes) and time (seconds on this machine) of a run."""
    ready = Prepared(case, *kernel_for(case), made, np.zeros(len(case.observables)))
    flight, n_sum = ready.flight, ready.n_sum
    # with noise the cover grows into the tails
    cells = int((2.0 if case.system.is_noisy else 1.2) * made.pilot["cells_expected"])
    bursts = cells * made.per_cell
    centres = np.ascontiguousarray(made.grid.centres(made.seed_keys[:4096]).T)
    state = np.repeat(centres, max(1, 4096 // centres.shape[1]), axis=1)
    begun = time.perf_counter()
    flight.fly(state, made.step, made.n_step)
    rate = state.shape[1] * made.n_step / (time.perf_counter() - begun)
    steps = bursts * made.n_step
    entries = min(bursts, cells * 64)
    memory = 2.5e8 + entries * (8 + 2 * made.n_replicate) + cells * (made.n_replicate * n_sum * 24 + 800)
    solves = entries * (n_sum + 32) * 40 * 1e-9
    seconds = 3.0 + 1.8 * steps / rate / max(os.cpu_count() or 1, 1) + entries * 1e-6 + solves
    return {"cells": cells, "bursts": bursts, "steps": steps, "memory_bytes": memory, "seconds": seconds}


def estimate(
    case: CaseRecord, *, workers: int | None = None, progress: Progress | None = None, command: str = ""
) -> Result:
    """Long-run statistics of a case: what ``perdure run`` computes.

    Parameters
    ----------
    case : Case
    workers : int or None
        Threads; all processors if None. The numbers do not depend on it, to the last bit.
    progress : callable or None
        Called as progress(stage, done, total).
    command : str
        Kept in the result, for the record.

    Returns
    -------
    Result
        Wraps an `Estimate`; several regimes or a leaking domain are outcomes in it, not errors.

    Raises
    ------
    CaseError
        The case cannot be run as written.
    NoAttractorError
        Every pilot trajectory left all bounds.
    NotConvergedError
        A solve stopped above its tolerance.
    """
    report, clock = progress or silent, Clock()
    ready, done, classes = sample_all(prepare(case, report, clock), workers or os.cpu_count() or 1, report)
    clock.stage("bursts")
    transition = TransitionMatrix(done.all.tally)
    n = len(done.keys)
    members = [cells for cells in classes.members if cells[0] < n]
    # what never comes back from outside ends there: a closed class, but no regime
    ends = (*members, *(cells for cells in classes.members if cells[0] >= n))
    basins = absorption(transition, ends)[:, : len(members)] if len(ends) > 1 or classes.leaks.any() else None
    weights = regime_weights(transition, ends, basins, visits, n)
    judged = []
    for k, cells in enumerate(members):
        report("regime", k, len(members))
        judged.append(regime_of(ready, done, transition, cells, weights[k], clock))
    order = sorted(range(len(judged)), key=lambda k: -(weights[k].value or 0.0))
    state = Findings(
        ready.plan,
        done.counts,
        [judged[k].regime for k in order],
        classes.leaks,
        any(item.rough for item in judged),
        max((item.apart for item in judged), default=0.0),
        done.settled,
        pilot_share(ready.plan, done, members),
    )
    outcome, messages, passed = outcome_of(case, state)
    if outcome == "leaking":
        order = []
    report("done", 1, 1)
    return Result(
        Estimate(
            case=case,
            plan=ready.plan,
            outcome=outcome,
            messages=messages,
            checks_passed=passed,
            grid=done.grid,
            keys=done.keys,
            regimes=tuple(judged[k].regime for k in order),
            basins=None if basins is None else basins[:n, order].astype(np.float32),
            outside_share=judged[order[0]].outside if order else no_share(),
            tally=done.all.tally if case.output.matrix else None,
            timings=clock.seconds,
            packages=versions(),
            counts=done.counts,
            command=command,
            created=datetime.now(UTC).isoformat(timespec="seconds"),
        )
    )


def pilot_share(made: Plan, done: Sampled, members: list[Integers]) -> float:
    """Part of the pilot's points that lie in the cells of the regimes."""
    held = (
        done.lattice_keys[np.concatenate([cells[cells < len(done.keys)] for cells in members])]
        if members
        else made.seed_keys[:0]
    )
    return float(made.seed_share[np.isin(made.seed_keys, held)].sum())


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


def regime_of(
    ready: Prepared,
    done: Sampled,
    transition: TransitionMatrix,
    members: Integers,
    weight: Quantity,
    clock: Clock,
) -> Judged:
    """Long-run numbers of one closed class."""
    case, found = ready.case, done.all
    solver = ClassSolver(transition, members)
    clock.stage("stationary mass")
    events, observables = regime_numbers(
        case,
        ready.plan,
        transition,
        solver.mass,
        found.sums,
        solver.adjoint,
        coarser_masses(done, members),
        ready.centres,
    )
    share = outside_quantity(ready.plan, transition, solver.mass, done.has_outside, solver.adjoint)
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
    )
    clock.stage("marginals")
    inside = members[members < len(done.keys)]
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


def versions() -> dict[str, str]:
    """Versions of what the numbers rest on."""
    own = {"perdure": perdure.__version__, "Python": platform.python_version()}
    return own | {name: version(name) for name in ("numpy", "scipy", "numba", "h5py")}
