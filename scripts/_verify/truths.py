"""Reference values of the cases in `cases/` and of a ball in the convection flow, computed without bursts or cells.

Prints them in the form of tests/reference/values.toml and compares them with what stands there.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.integrate import cumulative_simpson
from scipy.special import ndtr

from _verify.accuracy import load
from _verify.convection import case_of
from _verify.longrun import Value, fly
from perdure import Case
from reference.known import known

__all__ = ["Law", "boltzmann", "lake", "noisy_ricker", "stock", "truths_section"]

Floats = NDArray[np.float64]
Progress = Callable[[str], None]

LONG = "computed for this table: long trajectories, "
# A stored value and one computed again differ by more than so many combined standard errors once in 16000 times.
APART = 4.0
# Quadrature comes out the same to rounding; the reference values are written with 13 digits and more.
RELATIVE = 1e-9


# ---------------------------------------------------------------------------------------- quadrature


@dataclass(frozen=True)
class Law:
    """Stationary law of dx = drift dt + sigma dW on a fine grid, and what follows from it by quadrature.

    Attributes
    ----------
    place, mass : ndarray, shape (n,)
        Grid, and the stationary probability below each place.
    exponent : ndarray, shape (n,)
        2 V/sigma^2 at each place; 0 at its least.
    norm : float
        Integral of exp(-exponent). Unit of the place.
    sigma : float
    """

    place: Floats
    mass: Floats
    exponent: Floats
    norm: float
    sigma: float

    def below(self, place: float) -> float:
        """Share of time below a place of the grid."""
        return float(self.mass[self._at(place)])

    def commute(self, low: float, high: float) -> float:
        """Mean time from low to high and back: (2/sigma^2) norm times the integral of exp(exponent) between them.

        C. W. Gardiner, Stochastic Methods, 4th edition (2009), section 5.5 (cited from memory).
        """
        return self._passage(low, high, np.ones_like(self.mass))

    def up(self, low: float, high: float) -> float:
        """Mean time from low until high is first reached: the same with the probability below in the integral."""
        return self._passage(low, high, self.mass)

    def _passage(self, low: float, high: float, weight: Floats) -> float:
        part = slice(self._at(low), self._at(high) + 1)
        inner = cumulative_simpson(np.exp(self.exponent[part]) * weight[part], x=self.place[part])
        return float(2.0 / self.sigma**2 * self.norm * inner[-1])

    def _at(self, place: float) -> int:
        at = int(np.argmin(np.abs(self.place - place)))
        if not math.isclose(self.place[at], place, rel_tol=1e-9, abs_tol=1e-9):
            raise ValueError(f"{place} is no place of the grid")
        return at


def boltzmann(drift: Callable[[Floats], Floats], sigma: float, low: float, high: float, step: float) -> Law:
    """Law of dx = drift dt + sigma dW, proportional to exp(-2 V/sigma^2), V' = -drift, on a grid from low to high.

    Beyond the ends there must be no mass to speak of.
    """
    place = np.linspace(low, high, round((high - low) / step) + 1)
    exponent = 2.0 / sigma**2 * cumulative_simpson(-drift(place), x=place, initial=0.0)
    exponent -= exponent.min()
    mass = cumulative_simpson(np.exp(-exponent), x=place, initial=0.0)
    return Law(place, mass / mass[-1], exponent, float(mass[-1]), sigma)


def noisy_ricker(
    shift: float, crowding: float, spread: float, edges: Mapping[str, tuple[float, float]]
) -> dict[str, Value]:
    """Numbers of intervals of y under y' = shift + y - crowding exp(y) + spread w, w standard normal.

    The smooth one-step kernel is solved on Gauss-Legendre panels (E. J. Nystrom, Acta Math. 54 (1930) 185-204) whose
    ends lie at the edges of the intervals; between 7 standard deviations of the noise beyond the highest image and the
    image of that.
    """

    def image(y: Floats | float) -> Floats:
        return np.asarray(shift + y - crowding * np.exp(y))

    high = float(image(-math.log(crowding))) + 7.0 * spread
    low = float(image(high)) - 7.0 * spread
    cuts = [cut for pair in edges.values() for cut in pair if low < cut < high]
    y, weight = panels(sorted({low, high, *cuts}), spread)
    z = (y[:, None] - image(y)[None, :]) / spread
    kernel = np.exp(-0.5 * z**2) / (spread * math.sqrt(2.0 * math.pi))
    system = kernel * weight[None, :] - np.eye(len(y))
    # the equations are dependent: one gives way to the norm
    system[-1] = weight
    law = weight * np.linalg.solve(system, np.eye(len(y))[-1])
    found = {}
    for name, (left, right) in edges.items():
        into = ndtr((right - image(y)) / spread) - ndtr((left - image(y)) / spread)
        share = float(law @ into)
        rate = share - float((law * into)[(y > left) & (y < right)].sum())
        found |= {f"share {name}": Value(share, 0.0), f"entry rate {name}": Value(rate, 0.0)}
        found |= {f"return period {name}": Value(1.0 / rate, 0.0), f"mean spell {name}": Value(share / rate, 0.0)}
    return found


def panels(ends: list[float], width: float) -> tuple[Floats, Floats]:
    """Gauss-Legendre nodes and weights, 16 on each panel of at most `width` between successive ends."""
    node, part = np.polynomial.legendre.leggauss(16)
    bounds = [np.linspace(left, right, math.ceil((right - left) / width) + 1) for left, right in pairwise(ends)]
    half = np.concatenate([0.5 * np.diff(b) for b in bounds])
    middle = np.concatenate([0.5 * (b[1:] + b[:-1]) for b in bounds])
    return (middle[:, None] + half[:, None] * node).ravel(), (half[:, None] * part).ravel()


def parameters(case: Case) -> dict[str, float]:
    return {name: p.value for name, p in case.system.parameters.items()}


def stock() -> dict[str, Value]:
    """The fish stock of cases/stock.toml, in the logarithm of the biomass."""
    p = parameters(load("stock"))
    kept = 1.0 - p["harvest"]
    shift = math.log(kept) + p["growth"] - 0.5 * p["spread"] ** 2
    edges = {"below_limit": (-math.inf, math.log(30.0)), "above_target": (math.log(120.0), math.inf)}
    return noisy_ricker(shift, p["growth"] * kept / p["capacity"], p["spread"], edges)


def lake() -> dict[str, Value]:
    """The lake of cases/lake.toml: shares of `when`; spells from one edge until the other is reached."""
    p = parameters(load("lake"))

    def drift(x: Floats) -> Floats:
        return np.asarray(p["load"] - p["loss"] * x + p["recycling"] * x**8 / (p["half"] ** 8 + x**8))

    law = boltzmann(drift, p["weather"], -1.0, 3.0, 1e-5)
    period, clear = law.commute(0.8, 1.3), law.up(0.8, 1.3)
    found = {
        "share turbid": 1.0 - law.below(1.3),
        "return period turbid": period,
        "mean spell turbid": period - clear,
        "share clear": law.below(0.8),
        "return period clear": period,
        "mean spell clear": clear,
    }
    return {name: Value(value, 0.0) for name, value in found.items()}


# ---------------------------------------------------------------------------------------- long runs


def loop(n_step: float, progress: Progress) -> tuple[dict[str, Value], str]:
    """The loop of cases/loop.toml at two time steps; the difference of the two counts as an error of the finer."""
    case, steps = load("loop"), (0.002, 0.001)
    coarse, fine = (fly(case, n_step, step=h, seed=k, progress=progress) for k, h in enumerate(steps, start=1))
    found = {
        name: Value(one.value, math.hypot(one.error, coarse.numbers[name].value - one.value))
        for name, one in fine.numbers.items()
        if name.startswith(("share", "entry rate", "return period", "mean spell"))
    }
    return found, (
        f"{LONG}512 starts, weak order 2 with steps {steps[1]:g} and {steps[0]:g}, {n_step:.1g} steps each, the finer "
        "one; standard error from the spread between the starts and, in quadrature, the difference of the two"
    )


def convection(n_step: float, progress: Progress) -> tuple[dict[str, Value], str]:
    """The convection flow with the events of the section convection."""
    run = fly(case_of({}, 1), n_step, step=0.005, progress=progress)
    found = {name: run.numbers[name] for name in ("mean z", "share high", "share ball")}
    return found, f"{LONG}512 starts, RK4 step 0.005, {n_step:.1g} steps, standard error from the spread between them"


# ---------------------------------------------------------------------------------------- the section


def truths_section(short: bool, progress: Progress) -> bool:
    """Print the values; whether those that stand in the table agree with them."""
    part = 0.02 if short else 1.0
    quadrature = "quadrature of the stationary density exp(-2 V/sigma^2), grid of 1e-5"
    kernel = "quadrature: Nystrom solve of the smooth one-step kernel in the logarithm of the biomass"
    computed = {
        "stock": (stock(), kernel),
        "lake": (lake(), quadrature),
        "loop": loop(2e10 * part, progress),
        "convection": convection(2e10 * part, progress),
    }
    fails = []
    for case, (found, source) in computed.items():
        print(f'# id = "{case}"\n')
        for name, value in found.items():
            print(block(name, value, source))
        fails += disagreements(case, found)
    print("\n".join(f"  FAILED  {text}" for text in fails) or "  the table agrees")
    return not fails


def block(name: str, value: Value, source: str) -> str:
    """A value as it is written in values.toml. Quadrature is stated to a relative 1e-10."""
    bound = value.error or float(f"{1e-10 * abs(value.value):.1g}")
    lines = [f'number = "{name}"', f"value = {value.value!r}", f"uncertainty = {bound!r}", f'source = "{source}"']
    return "\n".join(["  [[case.quantity]]", f'  name = "{name}"', *(f"  {line}" for line in lines), ""])


def disagreements(case: str, found: Mapping[str, Value]) -> list[str]:
    """What stands in the table and is further off than chance or rounding allows, or was not computed."""
    fails = []
    for item in known(case):
        if item.number not in found:
            fails.append(f"{case}, {item.number}: not computed here")
            continue
        value = found[item.number]
        allowed = APART * math.hypot(value.error, item.uncertainty) if value.error else RELATIVE * abs(item.value)
        if not abs(value.value - item.value) <= allowed:
            fails.append(f"{case}, {item.number}: {value.value!r} here, {item.value!r} in the table")
    return fails
