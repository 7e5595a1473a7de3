"""The order of the steps, nothing else."""

from __future__ import annotations

import os
import platform
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from importlib.metadata import version

import numpy as np

import perdure
from perdure._kernels.rows import BLOWN, OUTSIDE
from perdure._partition import Boxes, Cover, hull, lattice, tightened
from perdure._records import BoxGrid, CaseRecord, Estimate, Exits, Floats, Integers, Plan, Quantity, Regime
from perdure._result import Result
from perdure._sampling import (
    BurstSampler,
    Domain,
    Flight,
    boxes_per_axis,
    bursts_per_cell,
    domain,
    kernel_for,
    make_plan,
    outside_row,
    parameter_values,
    scheme_of,
    sobol_base,
    survey,
)
from perdure._spectrum import Classes, ClassSolver, absorption, closed_classes, period_of, visits
from perdure._statistics import (
    Findings,
    marginal_numbers,
    no_share,
    outcome_of,
    outside_quantity,
    regime_numbers,
    regime_weights,
)
from perdure._streams import generator, seed_words
from perdure._transitions import Collected, RowStore, TransitionMatrix, scattered_slots, with_outside
from perdure.errors import CaseError

__all__ = ["estimate", "forecast_cost", "plan"]

Progress = Callable[[str, int, int], None]
# The cover grows to so many times the cells of the pilot; what goes further is the outside state. It stops too
# beyond so many steps, and the boxes between regimes are filled in up to so many.
GROWTH, MOST_STEPS, MOST_HULL = 2, 2e10, 2**17


def silent(stage: str, done: int, total: int) -> None:
    """Progress that nobody watches."""


@dataclass
class Clock:
    """Seconds per stage."""

    seconds: dict[str, float] = field(default_factory=dict)
    last: float = field(default_factory=time.perf_counter)

    def stage(self, name: str) -> None:
        now = time.perf_counter()
        self.seconds[name] = self.seconds.get(name, 0.0) + now - self.last
        self.last = now


@dataclass(frozen=True)
class Prepared:
    """A case with its compiled kernel and its plan."""

    case: CaseRecord
    advance: Callable[..., int]
    n_sum: int
    plan: Plan

    @property
    def flight(self) -> Flight:
        return Flight(self.advance, parameter_values(self.case), self.n_sum, generator(self.case.seed, "pilot"))

    @property
    def cells(self) -> Boxes:
        made = self.plan
        size = made.per_cell // made.n_replicate if self.case.bursts.seeds == "sobol" else 0
        return boxes(self.case, made.grid, (made.axis_lower, made.axis_upper), size)


def boxes(case: CaseRecord, grid: BoxGrid, ends: tuple[Floats, Floats], size: int) -> Boxes:
    """Discretiser of a case, with a Sobol set of `size` points (none for 0)."""
    base = sobol_base(case.seed, grid.n_dim, size) if size else np.zeros((0, grid.n_dim), dtype=np.uint32)
    return Boxes(grid, seed_words(case.seed, "bursts"), base, np.stack(ends, axis=1))


def prepare(case: CaseRecord, progress: Progress, clock: Clock) -> Prepared:
    """Compile, fly the pilot, plan."""
    progress("compile", 0, 1)
    advance, n_sum = kernel_for(case)
    clock.stage("compile")
    progress("pilot", 0, 1)
    flight = Flight(advance, parameter_values(case), n_sum, generator(case.seed, "pilot"))
    pilot = survey(flight, case.system, case.cells, case.bursts)
    ends = domain(case.system, case.cells, pilot)
    if not np.all(ends.lower < ends.upper):
        worst = case.system.state[int(np.argmin(ends.upper - ends.lower))]
        raise CaseError(
            f"{case.source_name}, [cells] component {worst!r}: the end that was given lies beyond the states of the "
            "pilot run; give both lower and upper, or neither"
        )
    counts, why = boxes_per_axis(case.system, case.cells, pilot)
    grid = make_grid(case, ends, counts)
    found = {} if ends.given.all() else {"domain": "range of the pilot run; the cover grows by arrivals"}
    if (ends.closed & ~ends.given).any():
        found["domain"] = "twice the middle 99 percent of the pilot run (heavy tails); beyond is the outside state"
    if not case.cells.counts:
        found["cells"] = why
    keys = np.empty(pilot.points.shape[1], dtype=np.int64)
    boxes(case, grid, (ends.lower, ends.upper), 0).locate(np.ascontiguousarray(pilot.points), keys)
    visited = np.unique(keys[keys < OUTSIDE], return_counts=True)
    if not len(visited[0]):
        raise CaseError(
            f"{case.source_name}, [cells] lower, upper: no state of the pilot run lies inside; the long run covers "
            f"{span(case, pilot.points)}; widen the domain or leave it out"
        )
    made = make_plan(case, pilot, flight, scheme_of(case), grid, ends, visited, found)
    clock.stage("pilot")
    return Prepared(case, advance, n_sum, made)


def make_grid(case: CaseRecord, ends: Domain, counts: Integers) -> BoxGrid:
    """Lattice of the case: closed at the ends that are so, open elsewhere.

    At an open end the last box reaches a fiftieth of a box further, so that arrivals a hair beyond the pilot's
    extreme do not start a new box, most of which lies beyond the edge of the long run.
    """
    margin = np.where(ends.closed.T, 0.0, 0.02 * (ends.upper - ends.lower) / counts)
    periodic = np.array([s in case.cells.periodic for s in case.system.state])
    return lattice(ends.lower - margin[0], ends.upper + margin[1], counts, ends.closed, periodic)


def span(case: CaseRecord, points: Floats) -> str:
    """Range of each component in words."""
    ends = zip(case.system.state, points.min(axis=1), points.max(axis=1), strict=True)
    return ", ".join(f"{low:.4g} <= {s} <= {high:.4g}" for s, low, high in ends)


def plan(case: CaseRecord) -> Plan:
    """What `estimate` would run, from the case and a pilot run; nothing is estimated."""
    return prepare(case, silent, Clock()).plan


def forecast_cost(case: CaseRecord, made: Plan) -> dict[str, float]:
    """Expected cells, bursts, steps, peak memory (bytes) and time (seconds on this machine) of a run."""
    ready = Prepared(case, *kernel_for(case), made)
    flight, n_sum = ready.flight, ready.n_sum
    cells = int(1.2 * len(made.seed_keys))
    bursts = cells * made.per_cell
    centres = np.ascontiguousarray(made.grid.centres(made.seed_keys[: 4096]).T)
    state = np.repeat(centres, max(1, 4096 // centres.shape[1]), axis=1)
    begun = time.perf_counter()
    flight.fly(state, made.step, made.n_step)
    rate = state.shape[1] * made.n_step / (time.perf_counter() - begun)
    steps = bursts * made.n_step
    entries = min(bursts, cells * 64)
    memory = 2.5e8 + entries * (8 + 2 * made.n_replicate) + cells * (made.n_replicate * n_sum * 24 + 800)
    seconds = 2.0 + 1.8 * steps / rate / max(os.cpu_count() or 1, 1) + entries * 1e-6
    return {"cells": cells, "bursts": bursts, "steps": steps, "memory_bytes": memory, "seconds": seconds}


@dataclass(frozen=True)
class Sampled:
    """The finished bursts; `all` has the cells in the order of their keys, and the outside state last if it has a row."""

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
    values = parameter_values(ready.case)
    return BurstSampler(ready.advance, ready.cells, ready.plan, values, ready.n_sum, ready.case.output.intervals)


def sample(ready: Prepared, workers: int, progress: Progress) -> Sampled:
    """Send bursts from the cover, add the cells they reach, until it is closed."""
    made, sampler = ready.plan, sampler_of(ready)
    cover = Cover(int(min(GROWTH * len(made.seed_keys) + 4096, float(np.prod(made.grid.counts.astype(float))))))
    store = RowStore(made.n_replicate)
    frontier, waves, used, blown = cover.add(made.seed_keys), 0, 0, 0
    while len(frontier) and (waves == 0 or (used + len(frontier)) * made.per_cell * made.n_step < MOST_STEPS):
        found, done = [], 0
        for block in sampler.run(frontier, workers=workers):
            found.append(cover.add(block.target))
            ids = cover.ids(block.target, -2)
            ids[block.target == BLOWN] = -1
            store.add(block, ids)
            blown, done = blown + block.n_blown, done + len(block.keys)
            progress("bursts", done, len(frontier))
        used, waves, frontier = used + len(frontier), waves + 1, np.concatenate(found)
    keys = cover.keys[:used]
    order = np.argsort(keys, kind="stable")
    collected = store.finish(order, made, ready.case.output.intervals, cover.count)
    grid, tight = tightened(made.grid, keys[order])
    counts = {
        "cells": used, "bursts": used * made.per_cell, "steps": used * made.per_cell * made.n_step,
        "entries": len(collected.tally.column), "blown_up": blown, "waves": waves,
        "outside": int(collected.tally.count[collected.tally.column == used].sum()),
    }
    return Sampled(grid, tight, keys[order], collected, counts)


def follow_outside(ready: Prepared, done: Sampled, progress: Progress) -> Sampled:
    """Give the outside state a row, if bursts left the cover: its particles weighted by a first solve."""
    tally, n = done.all.tally, len(done.keys)
    leaving = np.unique(np.searchsorted(tally.pointer, np.flatnonzero(tally.column == n), side="right") - 1)
    if not len(leaving):
        return done
    sampler, rng = sampler_of(ready), generator(ready.case.seed, "outside")
    point, origin, replicate = sampler.exits(done.lattice_keys[leaving], done.lattice_keys)
    exits = Exits(point, leaving[origin], replicate)
    weight, grown, settled = np.ones(len(origin)), done.all, True
    for round_number in range(2):
        progress("outside", round_number, 2)
        found = outside_row(sampler, exits, done.lattice_keys, weight, rng)
        at = np.minimum(np.searchsorted(done.lattice_keys, found.row.target), n - 1)
        known = done.lattice_keys[at] == found.row.target
        column = np.where(known, at, np.where(found.row.target == BLOWN, n + 1, n))
        grown, settled = with_outside(done.all, found.row, column.astype(np.int32), found.n_burst), found.settled
        classes = closed_classes(grown.tally)
        if not classes.members or round_number:
            break
        mass = ClassSolver(TransitionMatrix(grown.tally), classes.members[0]).mass
        weight = mass[exits.cell] / tally.bursts.sum(axis=1)[exits.cell]
    return replace(done, all=grown, settled=settled)


def sample_all(ready: Prepared, workers: int, progress: Progress) -> tuple[Prepared, Sampled, Classes]:
    """All bursts of a run. With several regimes the boxes between them are sent bursts too, for the basins."""
    done = follow_outside(ready, sample(ready, workers, progress), progress)
    classes = closed_classes(done.all.tally)
    if len(classes.members) < 2:
        return ready, done, classes
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


def estimate(case: CaseRecord, *, workers: int | None = None, progress: Progress | None = None) -> Result:
    """Long-run statistics of a case: what ``perdure run`` computes.

    Parameters
    ----------
    case : Case
    workers : int or None
        Threads; all processors if None. The numbers do not depend on it, to the last bit.
    progress : callable or None
        Called as progress(stage, done, total).

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
    basins = absorption(transition, tuple(members)) if len(members) > 1 or classes.leaks.any() else None
    weights = regime_weights(transition, tuple(members), basins, visits, n)
    regimes, outside = [], []
    for k, cells in enumerate(members):
        report("regime", k, len(members))
        regime, share = regime_of(ready, done, transition, cells, weights[k], clock)
        regimes.append(regime)
        outside.append(share)
    order = sorted(range(len(regimes)), key=lambda k: -(regimes[k].weight.value or 0.0))
    state = Findings(ready.plan, done.counts, [regimes[k] for k in order], classes.leaks, done.settled, pilot_share(ready.plan, done, members))
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
            regimes=tuple(regimes[k] for k in order),
            basins=None if basins is None else basins[:n, order].astype(np.float32),
            outside_share=outside[order[0]] if order else no_share(),
            tally=done.all.tally if case.output.matrix else None,
            timings=clock.seconds,
            packages=versions(),
            counts=done.counts,
            created=datetime.now(UTC).isoformat(timespec="seconds"),
        )
    )


def pilot_share(made: Plan, done: Sampled, members: list[Integers]) -> float:
    """Part of the pilot's points that lie in the cells of the regimes."""
    held = done.lattice_keys[np.concatenate([cells[cells < len(done.keys)] for cells in members])] if members else made.seed_keys[:0]
    return float(made.seed_share[np.isin(made.seed_keys, held)].sum())


def regime_of(
    ready: Prepared, done: Sampled, transition: TransitionMatrix, members: Integers, weight: Quantity, clock: Clock
) -> tuple[Regime, Quantity]:
    """Stationary mass and long-run numbers of one closed class, and its share of time outside."""
    case, found = ready.case, done.all
    solver = ClassSolver(transition, members)
    clock.stage("stationary mass")
    events, observables = regime_numbers(case, ready.plan, transition, solver.mass, found.sums, solver.adjoint)
    share = outside_quantity(ready.plan, transition, solver.mass, done.has_outside, solver.adjoint)
    clock.stage("numbers")
    marginals = marginal_numbers(
        case.system, ready.plan, transition, found.slots, solver.mass, solver.response, scattered_slots,
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
    return regime, share


def versions() -> dict[str, str]:
    """Versions of what the numbers rest on."""
    own = {"perdure": perdure.__version__, "Python": platform.python_version()}
    return own | {name: version(name) for name in ("numpy", "scipy", "numba", "h5py")}
