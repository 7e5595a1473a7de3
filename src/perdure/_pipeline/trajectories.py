"""A density beside long trajectories: what ``perdure crosscheck`` computes."""

from __future__ import annotations

import math
import os
import time
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

import numpy as np

from perdure._case import Case
from perdure._crosscheck.arbiter import TOLERATED
from perdure._crosscheck.check import checked
from perdure._crosscheck.evidence import Request, flown
from perdure._crosscheck.flight import Flight
from perdure._crosscheck.predictability import withdrawn
from perdure._crosscheck.starts import dispersed, twins
from perdure._pipeline.chain import matrix_view
from perdure._pipeline.craft import Craft, spread_of
from perdure._pipeline.exponents import (
    TANGENT_STEPS,
    contradicted,
    growth,
    predictability,
    spectrum,
    sum_verdict,
    volume_gap,
    volumes,
)
from perdure._pipeline.watch import Progress, silent
from perdure._records import DISAGREES, NONE, TOO_SHORT, Arbiter, CaseRecord, Crosscheck, Estimate
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
# Most starts: histograms and sums are kept for each.
MOST_STARTS = 16_384
EXAMPLES = {"duration": 1e4, "steps": 1e9, "minutes": 5.0}
JUMPS = (
    "pairs do not part as the exponent says, or the step is too long: where equations jump, tangent vectors do not tell"
)


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
        Dispersed starts, 4 to 16384; each has a twin that is almost the same. From [crosscheck] starts of the case if
        None, else 64.
    duration : float or None
        Length of each trajectory, of which the first quarter is dropped; at least 256 steps. Unit: time (steps of a
        map). From [crosscheck] duration of the case if None; without either, until every number is as sharp as that of
        the density or `steps` or `minutes` are spent.
    steps : float or None
        Most time steps of all trajectories; if None, four times those of the density, at least 4e8.
    minutes : float or None
        Most minutes for the trajectories, if no duration is given, and as many for the exponents.
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
    if not held.regimes:
        raise EstimateError(
            f"{held.case.title}: there is no long-run density to check (outcome {held.outcome!r}); allowed: a result "
            "with at least one regime; widen the domain and run again"
        )
    ready = runnable(held, case)
    wanted = ready.crosscheck.get("starts", N_START) if starts is None else starts
    length = ready.crosscheck.get("duration") if duration is None else duration
    require(wanted, workers, duration=length, steps=steps, minutes=minutes, level=level)
    craft = Craft(held, ready, wanted, workers or os.cpu_count() or 1, report)
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
        require_same(held.case, case)
        return case
    if held.case.system.function is not None or any(e.source for e in held.case.system.equations):
        return held.case if isinstance(held.case, Case) else Case.from_record(held.case)
    if not held.case.system.equations:
        raise UsageError(
            f"crosscheck of {held.case.title!r}: found a system given by a Python function, which no file keeps; "
            "allowed: the same case beside the result; give case="
        )
    return Case.from_text(held.case.text, name=held.case.source_name, title=held.case.title, seed=held.case.seed)


def require_same(held: CaseRecord, case: CaseRecord) -> None:
    """Refuse a case that is not that of the result."""
    for (name, one), (_, other) in zip(parts_of(held), parts_of(case), strict=True):
        if one != other:
            raise UsageError(
                f"crosscheck, case: found other {name} than in the result; allowed: the case that the result is of; "
                "give that"
            )


def parts_of(case: CaseRecord) -> list[tuple[str, Any]]:
    """What trajectories depend on, in types that can be compared; not the text of a Python function."""
    system = case.system
    return [
        ("kind", system.kind),
        ("state", system.state),
        ("parameters", {name: parameter.value for name, parameter in system.parameters.items()}),
        ("equations", [e.text for e in system.equations]),
        ("noise", [[e.text for e in row] for row in system.noise]),
        ("draws", list(system.draws)),
        ("events", [(e.name, e.condition.text) for e in case.events]),
        ("observables", [(o.name, o.expression.text) for o in case.observables]),
    ]


def require(starts: Any, workers: Any, **amounts: Any) -> None:
    """Refuse arguments that are out of range."""
    for name, number, least, most, give in (("starts", starts, 4, MOST_STARTS, 64), ("workers", workers, 1, 1024, 2)):
        whole = isinstance(number, int) and not isinstance(number, bool)
        if number is not None and not (whole and least <= number <= most):
            raise UsageError(
                f"crosscheck, {name}: found {number!r}; allowed: a whole number from {least} to {most}; give {give}"
            )
    for name, amount in amounts.items():
        below, example = (1.0, 0.05) if name == "level" else (math.inf, EXAMPLES[name])
        real = isinstance(amount, int | float) and not isinstance(amount, bool)
        if amount is not None and not (real and 0.0 < amount < below):
            allowed = "between 0 and 1" if name == "level" else "above 0"
            raise UsageError(f"crosscheck, {name}: found {amount!r}; allowed: a number {allowed}; give {example:g}")


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
    regimes = range(len(held.regimes))
    limit, ends = min(TANGENT_STEPS, request.limit) / len(regimes), time.monotonic() + request.seconds
    spectra = [spectrum(craft, evidence, r, limit, ends) for r in regimes]
    parted = [None if found is None else growth(craft, evidence, r, found) for r, found in enumerate(spectra)]
    jumps = arbiter is not None and arbiter.deviation > TOLERATED
    spectra = [
        withdrawn(found, JUMPS) if found and pairs and (jumps or contradicted(found, pairs)) else found
        for found, pairs in zip(spectra, parted, strict=True)
    ]
    rates = [volumes(craft, r) for r in regimes]
    gaps = [volume_gap(found, rate) for found, rate in zip(spectra, rates, strict=True)]
    made, refused = checked(evidence, request, matrix, begun, [gap[1] for gap in gaps], craft.draws)
    sums = [
        NONE
        if gap is None
        else DISAGREES
        if is_refused
        else sum_verdict(found, rate)
        if made.starts.equal
        else TOO_SHORT
        for (gap, _), is_refused, found, rate in zip(gaps, refused, spectra, rates, strict=True)
    ]
    told = [
        predictability(craft, r, found, pairs, rates[r], gaps[r][0], sums[r])
        for r, (found, pairs) in enumerate(zip(spectra, parted, strict=True))
        if found is not None and pairs is not None
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
