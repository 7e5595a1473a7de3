"""A density beside long trajectories: what ``perdure crosscheck`` computes."""

from __future__ import annotations

import math
import os
import time
from dataclasses import replace
from datetime import UTC, datetime

import numpy as np

from perdure._case import Case
from perdure._crosscheck.arbiter import TOLERATED
from perdure._crosscheck.check import checked
from perdure._crosscheck.evidence import Request, flown
from perdure._crosscheck.flight import Flight
from perdure._crosscheck.starts import dispersed, twins
from perdure._pipeline.chain import matrix_view
from perdure._pipeline.craft import Craft, spread_of
from perdure._pipeline.exponents import predictability, spectrum, volume_gap, volumes
from perdure._pipeline.watch import Progress, silent
from perdure._records import Arbiter, Crosscheck, Estimate
from perdure._result import Result
from perdure.errors import EstimateError, UsageError

__all__ = ["crosscheck"]

# Dispersed starts, each with a twin, and the chance of a false alarm.
N_START, LEVEL = 64, 0.05
# Steps of all trajectories, over those of the density's bursts, that are flown at most when nothing is given; not fewer
# than the second.
TIMES, FEWEST_STEPS = 4.0, 4e8
# First flight of the starts, in bursts.
SETTLE = 64


def crosscheck(
    result: Result,
    *,
    case: Case | None = None,
    starts: int | None = None,
    duration: float | None = None,
    steps: float | None = None,
    minutes: float | None = None,
    level: float = LEVEL,
    workers: int | None = None,
    progress: Progress | None = None,
    command: str = "",
) -> Result:
    """Check a density against long trajectories, and compute Lyapunov exponents along them.

    Parameters
    ----------
    result : Result
        From `estimate`, or a density file from `open`.
    case : Case or None
        Needed where the system is a Python function and the result comes from a file.
    starts : int or None
        Dispersed starts, at least 4; each has a twin that is almost the same. From [crosscheck] starts of the case if
        None, else 64.
    duration : float or None
        Length of each trajectory, of which the first quarter is dropped. Unit: time (steps of a map). From
        [crosscheck] duration of the case if None; without either, until every number is as sharp as that of the
        density or `steps` or `minutes` are spent.
    steps : float or None
        Most time steps of all trajectories; if None, four times those of the density, at least 4e8.
    minutes : float or None
        Most minutes for the trajectories.
    level : float
        Chance, between 0 and 1, that anything is said to disagree where both sides are right.
    workers : int or None
        Threads; all processors if None. The numbers do not depend on it.
    progress : callable or None
        Called as progress(stage, done, total).
    command : str
        Kept in the result, for the record.

    Returns
    -------
    Result
        All of `result`, with `crosscheck`. Nothing else in it is changed: a verdict never edits a number.

    Raises
    ------
    UsageError
        An argument is out of range, or the case is needed.
    EstimateError
        There is no density to check.
    NoAttractorError
        Fewer than two starts stay bounded.
    """
    begun, report = time.monotonic(), progress or silent
    held = result.estimate
    ready = runnable(held, case)
    if not held.regimes:
        raise EstimateError(
            f"{held.case.title}: there is no long-run density to check (outcome {held.outcome!r}); allowed: a result "
            "with at least one regime; widen the domain and run again"
        )
    wanted = starts if starts is not None else int(ready.crosscheck.get("starts", N_START))
    length = duration if duration is not None else ready.crosscheck.get("duration")
    require(wanted, length, steps, minutes, level)
    craft = Craft(held, ready, max(wanted, 4), workers or os.cpu_count() or 1, report)
    request = Request(
        duration=length,
        limit=steps or max(TIMES * sum(stage.steps for stage in held.effort), FEWEST_STEPS),
        seconds=math.inf if minutes is None else 60.0 * minutes,
        level=level,
    )
    found = compared(craft, request)
    report("done", 1, 1)
    made = replace(
        found,
        seconds=time.monotonic() - begun,
        command=command,
        created=datetime.now(UTC).isoformat(timespec="seconds"),
    )
    return Result(replace(held, crosscheck=made))


def runnable(held: Estimate, case: Case | None) -> Case:
    """The case with its equations: as given, as in the result, or read from the text that a file keeps."""
    if case is not None:
        return case
    if held.case.system.function is not None or any(e.source for e in held.case.system.equations):
        return held.case if isinstance(held.case, Case) else Case.from_record(held.case)
    if not held.case.system.equations:
        raise UsageError(
            f"crosscheck of {held.case.title!r}: found a system given by a Python function, which no file keeps; "
            "allowed: the same case beside the result; give case="
        )
    return Case.from_text(held.case.text, name=held.case.source_name, title=held.case.title, seed=held.case.seed)


def require(starts: int, duration: float | None, steps: float | None, minutes: float | None, level: float) -> None:
    """Refuse arguments that are out of range."""
    if not 2 <= starts <= 10**6:
        raise UsageError(
            f"crosscheck, starts: found {starts}; allowed: a whole number from 2 to 10**6; give for example 64"
        )
    if not 0.0 < level < 1.0:
        raise UsageError(f"crosscheck, level: found {level}; allowed: a number between 0 and 1; give for example 0.05")
    for name, value, example in (("duration", duration, 1e4), ("steps", steps, 1e9), ("minutes", minutes, 5)):
        if value is not None and not 0.0 < value < math.inf:
            raise UsageError(
                f"crosscheck, {name}: found {value}; allowed: a number above 0; give for example {example:g}"
            )


def compared(craft: Craft, request: Request) -> Crosscheck:
    """Fly, compare, compute exponents."""
    case, held, report = craft.case, craft.held, craft.report
    given = np.array([[s in case.cells.lower, s in case.cells.upper] for s in case.system.state])
    settle, width = SETTLE * craft.burst, craft.upper - craft.lower
    craft.stir = craft.stirring()
    begun = dispersed(
        craft.lower, craft.upper, given, craft.n_start, lambda state: craft.settled(state, settle), craft.rng
    )
    craft.bare = craft.bare_setting(spread_of(begun.state, width))
    arbiter = craft.arbitrate(begun.state)
    length = None if request.duration is None else craft.cut(request.duration)
    flight = Flight(craft.setting(), twins(begun.state, width, craft.rng), craft.blocks, craft.workers)
    evidence = flown(
        case,
        held.regimes,
        flight,
        craft.centres,
        request,
        length,
        lambda done, of: report("trajectories", done, of),
    )
    matrix = matrix_view(craft)
    spectra = [spectrum(craft, evidence, r) for r in range(len(held.regimes))]
    rates = [volumes(craft, r) for r in range(len(held.regimes))]
    gaps = [volume_gap(found, rate) for found, rate in zip(spectra, rates, strict=True)]
    made, refused = checked(evidence, request, matrix, begun, [gap[1] for gap in gaps], craft.draws)
    told = [
        predictability(craft, evidence, r, found, rate, gap[0], is_refused)
        for r, (found, rate, gap, is_refused) in enumerate(zip(spectra, rates, gaps, refused, strict=True))
        if found is not None
    ]
    whole = flight.steps * craft.step
    return Crosscheck(
        verdict=made.verdict,
        level=request.level,
        messages=made.messages + arbiter_messages(arbiter),
        scheme=craft.full.scheme,
        step=craft.step,
        duration=whole,
        dropped=0.25 * whole,
        steps=flight.steps * flight.n,
        memory=matrix.memory,
        comparisons=made.comparisons,
        marginals=made.marginals,
        cells=made.cells,
        starts=made.starts,
        predictability=tuple(told),
        arbiter=arbiter,
    )


def arbiter_messages(found: Arbiter | None) -> tuple[str, ...]:
    """What is said where even a short step does not follow the arbiter."""
    if found is None or found.deviation <= TOLERATED:
        return ()
    return (
        f"an integrator of order 8 ends {found.deviation:.2g} standard deviations from the trajectories after "
        f"{found.duration:.3g}: the time step is too long, or the equations jump; give [bursts] step",
    )
