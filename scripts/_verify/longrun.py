"""One long run with perdure's own kernel: many trajectories side by side, averages from the spread between them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure import Result
from perdure._records import CaseRecord
from perdure._sampling import Flight, kernel_for, parameter_values, survey
from perdure.errors import EstimateError

__all__ = ["LongRun", "Value", "averages", "fly", "spent", "steps_for"]

Floats = NDArray[np.float64]
N_LANE = 512
# Steps of all trajectories in one call of the kernel: well below a second.
STEPS_PER_CALL = 2e7


@dataclass(frozen=True)
class Value:
    """A number and its standard error, in the same unit."""

    value: float
    error: float


@dataclass(frozen=True)
class LongRun:
    """A flown long run.

    Attributes
    ----------
    numbers : dict of str to Value
        By perdure's names: "share A", "entry rate A", "return period A", "mean spell A", "mean x". Errors by the
        spread between trajectories.
    n_step : int
        Steps of all trajectories, the dropped ones included.
    """

    numbers: dict[str, Value]
    n_step: int


def fly(
    case: CaseRecord,
    n_step: float,
    *,
    step: float | None = None,
    burn: float = 0.05,
    seed: int = 1,
    progress: Callable[[str], None] = lambda text: None,
) -> LongRun:
    """Fly `N_LANE` trajectories from points of a pilot run, and drop the first part `burn` of the steps.

    Parameters
    ----------
    n_step : float
        Steps of all trajectories, the dropped ones included.
    step : float or None
        Time step; that of the pilot if None. Unit: time.

    Raises
    ------
    EstimateError
        A trajectory left all bounds.
    """
    advance, n_sum = kernel_for(case)
    rng = np.random.default_rng(seed)
    flight = Flight(advance, parameter_values(case), n_sum, rng)
    pilot = survey(flight, case.system, case.cells, case.bursts)
    step = (step or pilot.step) if case.system.is_flow else 1.0
    state = pilot.points[:, rng.integers(0, pilot.points.shape[1], N_LANE)]
    per_lane = int(n_step / N_LANE)
    chunk = max(2, min(int(STEPS_PER_CALL / N_LANE), int(per_lane * (1.0 - burn))))
    dropped = int(burn * per_lane)
    for at in range(0, dropped, chunk):
        state = flight.fly(state, step, min(chunk, dropped - at))
    sums, n_chunk = np.zeros((n_sum, N_LANE)), max(1, (per_lane - dropped) // chunk)
    for k in range(n_chunk):
        state, more = flight.flown(state, step, chunk)
        sums += more
        if k % 50 == 0:
            progress(f"{case.title}: long run, {k} of {n_chunk} calls")
    if not np.isfinite(state).all():
        raise EstimateError(f"{case.title}: a trajectory of the long run left all bounds")
    # the kernel leaves the first step of a call out of its sums
    point = sums / (n_chunk * (chunk - 1))
    return LongRun(averages(case, point, step), (dropped + n_chunk * chunk) * N_LANE)


def averages(case: CaseRecord, point: Floats, step: float) -> dict[str, Value]:
    """Numbers from averages per point and trajectory, shape (n_sum, n_lane), in the order of the kernel's sums.

    A ratio gets its error by the first-order formula, from the same spread.
    """
    found: dict[str, Value] = {}
    mean = point.mean(axis=1)

    def value(number: float, slopes: dict[int, float]) -> Value:
        each = sum(slope * (point[k] - mean[k]) for k, slope in slopes.items())
        return Value(number, float(np.std(each, ddof=1)) / math.sqrt(point.shape[1]))

    for k, event in enumerate(case.events):
        share, entries = float(mean[2 * k]), float(mean[2 * k + 1])
        found[f"share {event.name}"] = value(share, {2 * k: 1.0})
        if entries > 0.0 and event.until is None:
            found[f"entry rate {event.name}"] = value(entries / step, {2 * k + 1: 1.0 / step})
            found[f"return period {event.name}"] = value(step / entries, {2 * k + 1: -step / entries**2})
            slopes = {2 * k: step / entries, 2 * k + 1: -share * step / entries**2}
            found[f"mean spell {event.name}"] = value(share * step / entries, slopes)
    first = 2 * len(case.events)
    for k, observable in enumerate(case.observables):
        found[f"mean {observable.name}"] = value(float(mean[first + 2 * k]), {first + 2 * k: 1.0})
    return found


def steps_for(run: LongRun, number: str, error: float) -> float:
    """Steps that a long run needs for a standard error of the number: the square of the error falls as 1/steps."""
    return run.n_step * (run.numbers[number].error / error) ** 2


def spent(result: Result) -> int:
    """Time steps of a whole run: of all its stages, pilot included, where the engine lists them."""
    stages = getattr(result.estimate, "effort", ())
    return sum(stage.steps for stage in stages) if stages else int(result.counts["steps"])
