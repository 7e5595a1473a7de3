"""What trajectories and densities say of the same numbers, weighed but not yet judged; flown until it is sharp."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import numpy as np

from perdure._crosscheck.flight import N_PART, N_SLICE, Flight
from perdure._crosscheck.marginals import FINE as MARGINAL_FINE
from perdure._crosscheck.marginals import MarginalFound, marginal_found
from perdure._crosscheck.numbers import Named, numbers_of, units_of
from perdure._crosscheck.starts import ended, twins_apart
from perdure._crosscheck.verdicts import uneven, weighed
from perdure._records import CaseRecord, Floats, Quantity, Regime

__all__ = ["N_BATCH", "Evidence", "Matrix", "Request", "flown"]

N_BATCH = 8
# The flight goes on until its errors are this part of those that are sharp enough.
SHARPER = 0.5

# The first flight, as a part of the longest: each is as long as all before it together.
FIRST = 64

Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class Request:
    """How far to go.

    Attributes
    ----------
    duration : float or None
        Length of each trajectory, the dropped part included; None: until they are sharp enough. Unit: time.
    limit : float
        Most steps of all trajectories.
    seconds : float
        Most time on the clock for trajectories, and once more for exponents.
    level : float
        Chance of any "disagrees" where both sides are right.
    """

    duration: float | None
    limit: float
    seconds: float
    level: float


@dataclass(frozen=True)
class Matrix:
    """What the transition matrix says of long trajectories.

    Attributes
    ----------
    memory : Quantity
        Time in which the slowest mode fades by e.
    variance : mapping
        By regime, subject and name: variance of the mean along a trajectory times its length. Unit: that of the
        number squared, times time.
    """

    memory: Quantity
    variance: Mapping[tuple[int, str, str], float] = field(default_factory=dict)


class Evidence:
    """The numbers of a flight beside those of the regimes, weighed but not yet judged."""

    def __init__(self, case: CaseRecord, regimes: tuple[Regime, ...], flight: Flight, centres: Floats) -> None:
        setting = flight.setting
        self.case, self.regimes, self.flight = case, regimes, flight
        self.batches = flight.kept(N_BATCH)
        alive = np.isfinite(flight.state).all(axis=0)
        self.n_gone = int((~alive).sum())
        last, self.moved = ended(setting.grid, setting.keys, [r.cell for r in regimes], flight.stands[1:])
        self.last = np.where(alive, last, -1)
        if len(regimes) == 1:
            self.last = np.where(alive, 0, -1)
        self.lanes = tuple(np.flatnonzero(self.last == r) for r in range(len(regimes)))
        self.units = [units_of(lanes, flight.n // 2) for lanes in self.lanes]
        self.apart = twins_apart(flight.state, setting.axis_upper - setting.axis_lower)
        # with noise the twins of a pair have noise of their own
        self.independent = case.system.is_noisy or self.apart > 0.5
        self.named: list[tuple[int, Named]] = []
        for r, regime in enumerate(regimes):
            numbers = numbers_of(case, regime, self.batches, self.units[r], setting.step, centres, self.independent)
            self.named += [(r, named) for named in numbers]
        kept = flight.steps * (1.0 - 1.0 / N_PART) * setting.step
        self.weighed = [weighed(named, self.visits(r, named, kept)) for r, named in self.named]

    def visits(self, regime: int, named: Named, kept: float) -> float:
        """Visits to an event that its density lets expect in the trajectories; without an entry rate a guess."""
        if named.subject != "event":
            return math.inf
        event, total = self.regimes[regime].events[named.name], kept * len(self.lanes[regime])
        if event.entry_rate.value is not None:
            return event.entry_rate.value * total
        return (event.share.value or 0.0) * total / (16.0 * self.flight.setting.step * self.flight.setting.stride)

    @property
    def sharp(self) -> bool:
        """Whether every number of the trajectories is as sharp as that of the density, and no start differs."""
        chance = 0.05 / max(len(self.named), 1)
        fine = all(w.p_value is None or w.own <= SHARPER * w.wanted for w in self.weighed)
        if not fine or any(uneven(named.found, chance) for _, named in self.named):
            return False
        return all(m.own <= max(m.other, MARGINAL_FINE) for _, m in self.marginals(np.random.default_rng(0)))

    def marginals(self, rng: np.random.Generator) -> list[tuple[int, MarginalFound]]:
        """Marginals of every regime that two starts or more ended in."""
        counts = self.flight.kept_counts()
        return [
            (r, marginal_found(name, regime.marginals[name], counts[:, k], self.units[r], self.independent, rng))
            for r, regime in enumerate(self.regimes)
            if len(self.units[r]) >= 2
            for k, name in enumerate(self.case.system.state)
            if name in regime.marginals
        ]


def flown(
    case: CaseRecord,
    regimes: tuple[Regime, ...],
    flight: Flight,
    centres: Floats,
    request: Request,
    steps: int | None,
    progress: Progress,
) -> Evidence:
    """Fly `steps` steps; if None, until the numbers are sharp enough, or as far as the request allows."""
    every, n = flight.setting.every, flight.n
    begun = time.monotonic()
    if steps is not None:
        length, most = steps // N_SLICE, steps
    else:
        most = max(int(request.limit / n), N_SLICE * every)
        length = max(most // FIRST // N_SLICE // every, 1) * every
    total = max(1, int(most * n / 1e6))
    while True:
        flight.extend(length, lambda k: progress(min(int(flight.length * k * n / 1e6), total), total))
        evidence = Evidence(case, regimes, flight, centres)
        if steps is not None or evidence.sharp or 2 * flight.steps > most:
            return evidence
        # the next flight takes as many steps as all before
        if 2.0 * (time.monotonic() - begun) > request.seconds:
            return evidence
