"""The three-variable convection flow on 32 x 32 x 32 boxes: plain bursts, reseeded bursts, one long run.

Equations: E. N. Lorenz, J. Atmos. Sci. 20 (1963) 130-141. Plain bursts spread mass over whole boxes, which the
attractor fills with thin sheets only; reseeded ones start where others arrived.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import perdure
from _verify.comparing import NORMAL, OUTPUT, covers
from _verify.longrun import fly, spent
from perdure import Case, Quantity
from perdure.errors import CaseError
from reference.cases import TABLES, ball
from reference.known import known, quantity

__all__ = ["NUMBERS", "Outcome", "case_of", "convection_section", "fails"]

MOST_STEPS = 2e9
# Relative tolerances asked for.
NUMBERS = {"mean z": 3e-4, "share high": 1e-2, "share ball": 3e-2}
CELLS = {
    "lower": {"x": -22.0, "y": -30.0, "z": 0.0},
    "upper": {"x": 22.0, "y": 30.0, "z": 52.0},
    "counts": {"x": 32, "y": 32, "z": 32},
}
# 8192 plain bursts of 100 steps from each of about 1700 boxes make 1.5e9 steps; as many are meant for reseeded ones.
MEANT_STEPS = 1.5e9
PLAIN = {"reseed": False, "per_cell": 8192}
# Without noise, many sweeps of few states serve better than few of many: the start must be forgotten.
RESEEDED = {"reseed": True}
TRIALS = (100, 300)
# Of 15 intervals at 95 percent fewer than 12 hold the truth once in 180 times by chance.
LEAST_HELD = 0.8


def case_of(bursts: dict[str, Any], seed: int) -> Case:
    """The case with bursts of 0.5 time units in steps of 0.005.

    Raises
    ------
    CaseError
        The engine does not take these bursts.
    """
    return Case(
        title="convection",
        system=TABLES["P22-lorenz63"]["system"],
        events={"high": {"when": "z > 40"}, "ball": ball([8, 8, 27], 5)},
        observables={"z": "z"},
        cells=CELLS,
        bursts={"duration": 0.5, "step": 0.005} | bursts,
        output=OUTPUT,
        seed=seed,
    )


@dataclass(frozen=True)
class Outcome:
    """One number of one run by one way, and whether it is near the truth and the interval holds that."""

    way: str
    number: str
    seed: int
    found: Quantity
    n_step: int
    near: bool
    held: bool


def outcomes(way: str, seed: int, found: dict[str, Quantity], n_step: int) -> list[Outcome]:
    """All numbers of a run beside their truths."""
    made = []
    for item in known("convection"):
        one = found[item.number]
        near = one.value is not None and abs(one.value / item.value - 1.0) <= NUMBERS[item.number]
        made.append(Outcome(way, item.number, seed, one, n_step, near, covers(item.value, item.uncertainty, one)))
    return made


def by_bursts(way: str, bursts: dict[str, Any], seed: int) -> list[Outcome]:
    result = perdure.estimate(case_of(bursts, seed))
    found = {name: quantity(result, name) for name in NUMBERS}
    return outcomes(way, seed, found, spent(result))


def sweeps_meant() -> int:
    """Sweeps that make `MEANT_STEPS` with everything else that a run does: along the line through two trials."""
    few, more = (spent(perdure.estimate(case_of(RESEEDED | {"sweeps": n}, 0))) for n in TRIALS)
    return max(TRIALS[0], int(TRIALS[0] + (MEANT_STEPS - few) * (TRIALS[1] - TRIALS[0]) / (more - few)))


def by_long_run(n_step: int, seed: int) -> list[Outcome]:
    """The same numbers from one long run of `n_step` steps in all."""
    run = fly(case_of({}, seed), n_step, step=0.005, seed=seed)
    found = {}
    for name in NUMBERS:
        value, error = run.numbers[name].value, run.numbers[name].error
        found[name] = Quantity(value, value - NORMAL * error, value + NORMAL * error, {"sampling": error})
    return outcomes("long run", seed, found, run.n_step)


def convection_section(n_seed: int, progress: Callable[[str], None]) -> bool:
    """Print the ways side by side; whether reseeded bursts meet the criteria."""
    made: list[Outcome] = []
    progress("convection: how many sweeps")
    try:
        sweeps = sweeps_meant()
    except CaseError as error:
        print(f"the engine does not reseed: {error}\n")
        sweeps = 0
    for seed in range(1, n_seed + 1):
        progress(f"convection, seed {seed}: plain")
        plain = by_bursts("plain", PLAIN, seed)
        reseeded = []
        if sweeps:
            progress(f"convection, seed {seed}: {sweeps} sweeps of reseeded bursts")
            reseeded = by_bursts("reseeded", RESEEDED | {"sweeps": sweeps}, seed)
        n_step = (reseeded or plain)[0].n_step
        progress(f"convection, seed {seed}: long run of {n_step:.3g} steps")
        made += [*plain, *reseeded, *by_long_run(n_step, seed)]
    print_table(made)
    found = fails(made)
    print(
        f"\ncriteria: at most {MOST_STEPS:g} steps a run; every number of every reseeded run near the truth (mean z "
        f"0.03, share high 1, share ball 3 percent), and at least {LEAST_HELD:.0%} of its intervals hold the truth"
    )
    print("\n".join(f"  FAILED  {text}" for text in found) or "  passed")
    return not found


def fails(made: list[Outcome]) -> list[str]:
    """Which criteria do not hold."""
    found = [f"{one.way}, seed {one.seed}: {one.n_step:.3g} steps" for one in made if one.n_step > MOST_STEPS]
    reseeded = [one for one in made if one.way == "reseeded"]
    if not reseeded:
        return [*found, "no reseeded run"]
    far = [one for one in reseeded if not one.near]
    found += [f"{one.number}, seed {one.seed}: {one.found.value} is not near the truth" for one in far]
    held = sum(one.held for one in reseeded) / len(reseeded)
    if held < LEAST_HELD:
        found.append(f"only {held:.0%} of the intervals hold the truth")
    return found


def print_table(made: list[Outcome]) -> None:
    """Every number, seed by seed, the ways side by side."""
    ways = list(dict.fromkeys(one.way for one in made))
    truth = {item.number: item.value for item in known("convection")}
    for number in NUMBERS:
        print(f"{number}: truth {truth[number]:.8g}, near within {NUMBERS[number]:.2%}")
        for way in ways:
            for one in (one for one in made if one.way == way and one.number == number):
                words = ("near" if one.near else "FAR", "held" if one.held else "NOT HELD")
                ends = " .. ".join("none" if end is None else f"{end:.6g}" for end in (one.found.low, one.found.high))
                value = "none" if one.found.value is None else f"{one.found.value:.6g}"
                print(f"  {way:<9} seed {one.seed}  {one.n_step:.3g} steps  {value:<10} {ends:<24} {', '.join(words)}")
