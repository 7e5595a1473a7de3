"""Does a run reach the accuracy that it is asked for, and at what cost?"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

import perdure
from _verify.comparing import NORMAL, covers
from _verify.longrun import LongRun, fly, spent, steps_for
from perdure import Case, Result
from reference.known import Known, known, quantity

__all__ = ["CASES", "Reached", "accuracy_section", "load", "reached", "uniform_ratio"]

CASES = ("loop", "stock", "lake")
FOLDER = Path(__file__).resolve().parents[2] / "cases"
# Steps of the long run from whose spread the cost of a longer or shorter one follows.
MODERATE = 2e8
# The lake changes its state so rarely that a quarter of the run goes by until the start is forgotten.
BURN = 0.25
LEAST_HELD = 0.85


def load(name: str) -> Case:
    """The case of that name in the folder `cases`."""
    return perdure.load_case(FOLDER / f"{name}.toml")


def wanted_numbers(name: str) -> list[Known]:
    """Shares and return periods with a reference value."""
    return [item for item in known(name) if item.number.startswith(("share", "return period"))]


@dataclass(frozen=True)
class Reached:
    """A number at one accuracy.

    Attributes
    ----------
    wanted, reached : float
        Half-width of the 95 percent interval over the value: asked for, and as reported (nan without). No unit.
    long_steps : float
        Steps of a plain long run for an interval of the same width; nan where that is not known.
    uniform : float
        Bursts that an even spread over the cells would need for the same error, over those sent.
    is_refused : bool
        The engine gives neither value nor bound, and says why.
    """

    case: str
    number: str
    wanted: float
    reached: float
    truth: float
    value: float | None
    held: bool
    long_steps: float
    uniform: float
    reason: str
    is_refused: bool

    @property
    def is_met(self) -> bool:
        return self.reached <= self.wanted


def reached(item: Known, wanted: float, result: Result, run: LongRun) -> Reached:
    """A number of a result beside what was asked for and its reference value."""
    found = quantity(result, item.number)
    size, long_steps = math.nan, math.nan
    if found.value and found.low is not None and found.high is not None:
        half = 0.5 * (found.high - found.low)
        size = half / abs(found.value)
        if item.number in run.numbers and half > 0.0:
            long_steps = steps_for(run, item.number, half / NORMAL)
    truth_error = item.uncertainty if item.source.startswith("computed") else 0.0
    held = covers(item.value, truth_error, found)
    refused = found.low is None and found.high is None and bool(found.reason)
    uniform = uniform_ratio(result, item.number)
    return Reached(
        item.case, item.number, wanted, size, item.value, found.value, held, long_steps, uniform, found.reason, refused
    )


def uniform_ratio(result: Result, number: str) -> float:
    """Bursts that an even spread over the cells would need for the same error, over those sent; nan if not known."""
    kind, name = number.rsplit(" ", 1)
    for target in result.targets:
        if (target.event, target.number) == (name, kind.replace(" ", "_")) and target.uniform is not None:
            return float(target.uniform)
    return math.nan


def accuracy_section(names: Sequence[str], accuracies: Sequence[float], progress: Callable[[str], None]) -> bool:
    """Print what was reached and what it cost; whether every number asked for was reached and the intervals hold."""
    made: list[Reached] = []
    for name in names:
        case = load(name)
        run = fly(case, MODERATE, burn=BURN, progress=progress)
        for wanted in accuracies:
            progress(f"{name}: accuracy {wanted:g}")
            result = perdure.estimate(case, accuracy=wanted)
            found = [reached(item, wanted, result, run) for item in wanted_numbers(name)]
            print_run(name, wanted, found, result)
            made += found
    found_failures = fails(made)
    print(
        "\ncriteria: every number reaches the accuracy asked for (half-width over value); "
        f"at least {LEAST_HELD:.0%} of the intervals hold the truth"
    )
    print("\n".join(f"  FAILED  {text}" for text in found_failures) or "  passed")
    return not found_failures


def fails(made: Sequence[Reached]) -> list[str]:
    """Which criteria do not hold. A number that the engine refuses with a reason is no failure, but it is printed."""
    told = [one for one in made if not one.is_refused]
    found = [f"{one.case}, {one.number}: {one.reached:.3g} of {one.wanted:g}" for one in told if not one.is_met]
    held = sum(one.held for one in told) / len(told) if told else 0.0
    if held < LEAST_HELD:
        found.append(f"only {held:.0%} of the intervals hold the truth")
    return found


def pilot_steps(result: Result) -> int:
    """Steps of the stage "pilot"."""
    return sum(stage.steps for stage in result.effort if stage.name == "pilot")


def print_run(name: str, wanted: float, found: Sequence[Reached], result: Result) -> None:
    """The numbers of one run, and its cost."""
    steps = spent(result)
    print(f"{name}, accuracy {wanted:g}: {steps:.3g} steps, {steps - pilot_steps(result):.3g} of them after the pilot")
    for one in found:
        if one.value is None:
            print(f"  {one.number:<26} no number: {one.reason}")
            continue
        verdict = f"{'reached' if one.is_met else 'NOT REACHED'}, {'inside' if one.held else 'NOT INSIDE'}"
        ratio = "unknown" if math.isnan(one.long_steps) else f"{one.long_steps / steps:.3g}"
        print(
            f"  {one.number:<26} wanted {one.wanted:<6g} reached {one.reached:<9.3g} value {one.value:<10.5g} "
            f"truth {one.truth:<10.5g} {verdict}; for the same error a long run {ratio} times the steps, "
            f"bursts spread evenly {one.uniform:.3g} times the bursts"
        )
