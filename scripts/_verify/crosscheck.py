"""The crosscheck's verdicts: false alarms, a wrong density, published exponents, two regimes, too short a run."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np

import perdure
from helpers.wells import SLOW_WELL, TWO_WAYS, moved
from perdure import Case, Quantity, Result
from perdure._records import Estimate
from reference.cases import TABLES

__all__ = ["SHORT", "SYSTEMS", "crosscheck_section"]

SYSTEMS = (
    "P01-logistic",
    "P02-skew-tent",
    "P05-chebyshev3",
    "P11-noisy-ricker",
    "P13-henon",
    "P16-ou",
    "P18-double-well",
    "P21-cir",
    "P22-lorenz63",
    "P32-tilted-response",
)
SHORT = ("P01-logistic", "P11-noisy-ricker")
LEVEL = 0.05
# The wrong density: one number is off by so many half-widths of its interval; part of the runs that must find it.
OFF, CAUGHT = 3.0, 0.95

# Largest to smallest exponent, and where they come from.
EXPONENTS: dict[str, tuple[float, ...]] = {
    # J. C. Sprott, Chaos and Time-Series Analysis, Oxford University Press 2003
    "P22-lorenz63": (0.9056, 0.0, -14.572),
    # the first as there; the sum of the two is ln 0.3, since the determinant is -0.3 everywhere
    "P13-henon": (0.41922, math.log(0.3) - 0.41922),
    # closed form: conjugate to the tent map of slope 2
    "P01-logistic": (math.log(2.0),),
    # logarithms of the eigenvalues of ((2, 1), (1, 1))
    "P12-cat": (math.log((3.0 + 5.0**0.5) / 2.0), -math.log((3.0 + 5.0**0.5) / 2.0)),
}


def crosscheck_section(names: list[str], seeds: int, short: bool, progress: Callable[[str], None]) -> bool:
    """True if false alarms, catches, exponents and outcomes are as stated."""
    passed = [false_alarms(names, seeds, progress)]
    passed.append(exponents(("P01-logistic", "P12-cat") if short else tuple(EXPONENTS), progress))
    passed.append(outcomes())
    return all(passed)


def false_alarms(names: list[str], seeds: int, progress: Callable[[str], None]) -> bool:
    """Verdicts on right and on wrong densities."""
    verdicts: dict[str, list[str]] = {}
    caught: dict[str, list[bool]] = {}
    for name in names:
        for seed in range(1, seeds + 1):
            result = perdure.estimate(Case(title=name, seed=seed, **TABLES[name]))
            right = verdict_of(result)
            wrong = verdict_of(Result(off(result.estimate, np.random.default_rng(seed))))
            verdicts.setdefault(name, []).append(right)
            caught.setdefault(name, []).append(wrong == "disagrees")
            progress(f"{name}, seed {seed}: {right}; with a number {OFF:g} half-widths off: {wrong}")
    print(f"{'system':<22}agrees  disagrees  too short  wrong density found")
    for name, found in verdicts.items():
        counts = [found.count(v) for v in ("agrees", "disagrees", "too short to tell")]
        print(
            f"{name:<22}{counts[0]:>6}  {counts[1]:>9}  {counts[2]:>9}  {sum(caught[name]):>7} of {len(caught[name])}"
        )
    n = sum(len(found) for found in verdicts.values())
    alarms = sum(found.count("disagrees") for found in verdicts.values())
    finds = sum(sum(found) for found in caught.values())
    print(f"\nfalse alarms: {alarms} of {n} (allowed: {LEVEL:.0%}); wrong densities found: {finds} of {n}")
    # few runs cannot tell 5 percent from 10: what is beyond chance fails
    return chance_of_more(alarms, n, LEVEL) > 0.01 and chance_of_more(n - finds, n, 1.0 - CAUGHT) > 0.01


def chance_of_more(k: int, n: int, p: float) -> float:
    """Chance of k or more of n, each with chance p."""
    return sum(math.comb(n, i) * p**i * (1.0 - p) ** (n - i) for i in range(k, n + 1))


def verdict_of(result: Result) -> str:
    found = perdure.crosscheck(result, level=LEVEL).crosscheck
    assert found is not None
    return found.verdict


def off(estimate: Estimate, rng: np.random.Generator) -> Estimate:
    """The same with one number of the first regime moved by `OFF` half-widths of its interval, either way."""
    regime = estimate.regimes[0]
    places = [
        (table, name, number)
        for table, numbers in (("events", ("share", "entry_rate", "mean_spell")), ("observables", ("mean", "variance")))
        for name, row in getattr(regime, table).items()
        for number in numbers
        if movable(getattr(row, number))
    ]
    table, name, number = places[int(rng.integers(len(places)))]
    rows = dict(getattr(regime, table))
    rows[name] = replace(
        rows[name], **{number: moved(getattr(rows[name], number), OFF * float(rng.choice([-1.0, 1.0])))}
    )
    return replace(estimate, regimes=(replace(regime, **{table: rows}), *estimate.regimes[1:]))


def movable(number: Quantity) -> bool:
    """Whether a number has an interval that is wider than what nobody asks to resolve, 0.1 percent."""
    if number.value is None or number.low is None or number.high is None:
        return False
    return number.high - number.low > 2e-3 * abs(number.value)


def exponents(names: tuple[str, ...], progress: Callable[[str], None]) -> bool:
    """Published Lyapunov exponents: within 3 standard errors, which are below half a percent."""
    passed = True
    print("\nsystem                exponent            published   off (errors)")
    for name in names:
        progress(f"{name}: exponents")
        found = perdure.crosscheck(perdure.estimate(Case(title=name, seed=1, **TABLES[name]))).crosscheck
        assert found is not None
        largest = max(abs(value) for value in EXPONENTS[name])
        for exponent, published in zip(found.predictability[0].exponents, EXPONENTS[name], strict=True):
            value, error = exponent.value or 0.0, exponent.error or 0.0
            # published to four digits: half of the last counts beside the error
            digits = 0.5e-4 if name == "P22-lorenz63" else 0.5e-5
            distance = abs(value - published) / math.hypot(error, digits)
            fine = distance <= 3.0 and error <= 0.005 * (abs(published) or largest)
            passed &= fine
            mark = "" if fine else "  FAILED"
            print(f"{name:<22}{value:>9.5f} ± {error:<8.2g}{published:>10.5f}   {distance:.1f}{mark}")
    return passed


def outcomes() -> bool:
    """Two regimes are named; a bistable run that is too short is told so, with the length that would do."""
    pair = Case(title="two ways to settle", **TWO_WAYS)
    two = perdure.crosscheck(perdure.estimate(pair)).crosscheck
    slow = Case(title="slow double well", seed=3, **SLOW_WELL)
    short = perdure.crosscheck(perdure.estimate(slow), duration=200.0).crosscheck
    assert two is not None
    assert short is not None
    print(f"\ntwo regimes: {two.verdict}; {two.starts.message}")
    print(f"too short: {short.verdict}; {short.starts.message}")
    named = len(two.predictability) == 2 and "several regimes" in two.starts.message and two.verdict != "disagrees"
    lengths = [row.length for row in short.comparisons if row.length is not None]
    return named and short.verdict == "too short to tell" and bool(lengths)
