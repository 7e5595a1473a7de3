"""The order of the steps, nothing else."""

from __future__ import annotations

import os
import platform
import time
from datetime import UTC, datetime
from importlib.metadata import version

import numpy as np

import perdure
from perdure._pipeline.prepare import Prepared, prepare
from perdure._pipeline.run import CHECK_PART, Found, Run
from perdure._pipeline.steering import FIRST, checked_request, steered
from perdure._pipeline.trajectories import crosscheck
from perdure._pipeline.watch import Clock, Progress, silent
from perdure._records import Budget, CaseRecord, Estimate, Plan, Target
from perdure._result import Result
from perdure._sampling import PLAIN_PART, burst_budget, kernel_for
from perdure._statistics import no_share

__all__ = ["crosscheck", "estimate", "forecast_cost", "plan"]


def plan(case: CaseRecord) -> Plan:
    """What `estimate` would run, from the case and a pilot run; nothing is estimated."""
    return prepare(case, silent, Clock()).plan


def forecast_cost(case: CaseRecord, made: Plan) -> dict[str, float]:
    """Expected cells, bursts, steps, peak memory (bytes) and time (seconds on this machine) of a run.

    Of standard effort: what an accuracy takes is not known beforehand.
    """
    ready = Prepared(case, *kernel_for(case), made, np.zeros(len(case.observables)))
    flight, n_sum = ready.flight, ready.n_sum
    # with noise the cover grows into the tails
    cells = int((2.0 if case.system.is_noisy else 1.2) * made.pilot["cells_expected"])
    bursts = cells * made.per_cell + burst_budget(made.n_step) * (
        CHECK_PART if case.bursts.reseed is False else 1.0 - PLAIN_PART
    )
    centres = np.ascontiguousarray(made.grid.centres(made.seed_keys[:4096]).T)
    state = np.repeat(centres, max(1, 4096 // centres.shape[1]), axis=1)
    begun = time.perf_counter()
    flight.fly(state, made.step, made.n_step)
    rate = state.shape[1] * made.n_step / (time.perf_counter() - begun)
    steps = bursts * made.n_step
    entries = min(bursts, cells * 64)
    memory = 2.5e8 + entries * (12 + 12 * made.n_replicate) + cells * (made.n_replicate * n_sum * 24 + 800)
    solves = entries * (n_sum + 32) * 40 * 1e-9
    seconds = 3.0 + 1.8 * steps / rate / max(os.cpu_count() or 1, 1) + entries * 1e-6 + solves
    return {"cells": cells, "bursts": int(bursts), "steps": int(steps), "memory_bytes": memory, "seconds": seconds}


def estimate(
    case: CaseRecord,
    *,
    workers: int | None = None,
    progress: Progress | None = None,
    command: str = "",
    accuracy: float | None = None,
    budget: Budget | None = None,
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
    accuracy : float or None
        In place of that of the case. Bursts are sent until the 95 percent interval of every event share and return
        period has a half-width of at most `accuracy` times its value, or the budget is spent.
    budget : Budget or None
        What a run steered by its accuracy may spend.

    Returns
    -------
    Result
        Wraps an `Estimate`; several regimes or a leaking domain are outcomes in it, not errors.

    Raises
    ------
    CaseError
        The case cannot be run as written; accuracy or budget are out of range.
    NoAttractorError
        Every pilot trajectory left all bounds.
    NotConvergedError
        A solve stopped above its tolerance.
    """
    report, clock = progress or silent, Clock()
    asked = checked_request(case, accuracy, budget)
    ready = prepare(case, report, clock, 1.0 if asked is None else FIRST)
    targets: tuple[Target, ...] = ()
    if asked is not None:
        run, found, targets = steered(ready, asked, budget, clock, report, workers)
    else:
        run = Run(ready, clock, report, workers)
        run.reseed()
        run.halve()
        found = run.solve()
    report("done", 1, 1)
    return Result(estimate_of(run, found, command, targets))


def estimate_of(run: Run, found: Found, command: str, targets: tuple[Target, ...]) -> Estimate:
    """The record of a run."""
    done, case = run.done, run.ready.case
    return Estimate(
        case=case,
        plan=run.ready.plan,
        outcome=found.outcome,
        messages=found.messages,
        checks_passed=found.passed,
        grid=done.grid,
        keys=done.keys,
        regimes=tuple(item.regime for item in found.judged),
        basins=None if found.basins is None else found.basins.astype(np.float32),
        outside_share=found.judged[0].outside if found.judged else no_share(),
        tally=done.all.tally if case.output.matrix else None,
        timings=run.clock.seconds,
        packages=versions(),
        counts=done.counts,
        command=command,
        created=datetime.now(UTC).isoformat(timespec="seconds"),
        effort=run.stages,
        targets=targets,
        cell_bursts=done.all.sent[: len(done.keys)],
    )


def versions() -> dict[str, str]:
    """Versions of what the numbers rest on."""
    own = {"perdure": perdure.__version__, "Python": platform.python_version()}
    return own | {name: version(name) for name in ("numpy", "scipy", "numba", "h5py")}
