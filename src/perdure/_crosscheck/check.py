"""The crosscheck as a whole: trajectories until they are sharp enough, verdicts, and what the starts say."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from perdure._crosscheck.flight import N_PART, N_SLICE, Flight
from perdure._crosscheck.marginals import FINE as MARGINAL_FINE
from perdure._crosscheck.marginals import MarginalFound, cell_distance, marginal_found, marginal_judged
from perdure._crosscheck.numbers import Named, numbers_of, units_of
from perdure._crosscheck.starts import Dispersed, ended, orders_differ
from perdure._crosscheck.verdicts import Judged, holm, judged, uneven, weighed
from perdure._records import (
    AGREES,
    DISAGREES,
    TOO_SHORT,
    CaseRecord,
    Comparison,
    Distance,
    Floats,
    Integers,
    MarginalComparison,
    Quantity,
    Regime,
    Starts,
)

__all__ = ["Checked", "Matrix", "Request", "checked", "flown"]

N_BATCH = 8
# Memory times that a trajectory must be long for its starts to be forgotten, and beyond which starts that still
# differ are no longer a matter of length.
FORGETS, LONG = 16.0, 30.0
# Variance between starts over that along them, per batch, from which starts stay where they are.
APART = 4.0
# The flight goes on until its errors are this part of those that are sharp enough.
SHARPER = 0.5
# Two effective sample sizes disagree beyond this factor.
FACTOR = 4.0

Progress = Callable[[int, int], None]


@dataclass(frozen=True)
class Request:
    """How far to go.

    Attributes
    ----------
    length : int or None
        Steps of each trajectory, the dropped part included; None: until they are sharp enough.
    limit : float
        Most steps of all trajectories.
    seconds : float
        Most time on the clock.
    level : float
        Chance of any "disagrees" where both sides are right.
    """

    length: int | None
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


@dataclass(frozen=True)
class Checked:
    """Verdicts of a flight."""

    verdict: str
    messages: tuple[str, ...]
    comparisons: tuple[Comparison, ...]
    marginals: tuple[MarginalComparison, ...]
    cells: Distance
    starts: Starts
    lanes: tuple[Integers, ...]


class Evidence:
    """The numbers of a flight beside those of the regimes, weighed but not yet judged."""

    def __init__(self, case: CaseRecord, regimes: tuple[Regime, ...], flight: Flight, centres: Floats) -> None:
        setting = flight.setting
        self.case, self.regimes, self.flight = case, regimes, flight
        self.batches = flight.kept(N_BATCH)
        alive = np.isfinite(flight.state).all(axis=0)
        last, self.moved = ended(setting.grid, setting.keys, [r.cell for r in regimes], flight.stands[1:])
        self.last = np.where(alive, last, -1)
        if len(regimes) == 1:
            self.last = np.where(alive, 0, -1)
        self.lanes = tuple(np.flatnonzero(self.last == r) for r in range(len(regimes)))
        self.units = [units_of(lanes, flight.n // 2) for lanes in self.lanes]
        self.named: list[tuple[int, Named]] = []
        for r, regime in enumerate(regimes):
            numbers = numbers_of(case, regime, self.batches, self.units[r], setting.step, centres)
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
            (r, marginal_found(name, regime.marginals[name], counts[:, k], self.units[r], rng))
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
    progress: Progress,
) -> Evidence:
    """Fly until the numbers are sharp enough, or as far as the request allows."""
    every, n = flight.setting.every, flight.n
    begun = time.monotonic()
    if request.length is not None:
        length, most = request.length // N_SLICE, request.length
    else:
        most = max(int(request.limit / n), N_SLICE * every)
        length = max(most // 16 // N_SLICE // every, 1) * every
    total = max(1, int(most * n / 1e6))
    while True:
        before = flight.steps
        flight.extend(length, lambda k: progress(min(int(flight.length * k * n / 1e6), total), total))
        evidence = Evidence(case, regimes, flight, centres)
        if request.length is not None or evidence.sharp or 2 * flight.steps > most:
            return evidence
        spent = time.monotonic() - begun
        # the next flight takes as many steps as all before
        if spent * (1.0 + flight.steps / max(flight.steps - before / 2, 1)) > request.seconds:
            return evidence


def checked(
    evidence: Evidence,
    request: Request,
    matrix: Matrix,
    begun: Dispersed,
    volume_p: list[float | None],
    rng: np.random.Generator,
) -> tuple[Checked, list[bool]]:
    """Verdicts, at a level that holds for all comparisons together.

    Parameters
    ----------
    volume_p : list of float or None
        Chances of further comparisons that belong to the same family.

    Returns
    -------
    Checked
    list of bool
        Which of the further comparisons are rejected.
    """
    flight = evidence.flight
    marginals = evidence.marginals(rng)
    n_test = len(evidence.named) + len(marginals) + len(volume_p)
    chance = request.level / max(n_test, 1)
    is_uneven = [uneven(named.found, chance) for _, named in evidence.named]
    unlike = {r for (r, _), differs in zip(evidence.named, is_uneven, strict=True) if differs}
    # a return period is its entry rate once more, and starts that differ cannot tell
    tested = [
        None if differs or named.number == "return_period" else w.p_value
        for (_, named), w, differs in zip(evidence.named, evidence.weighed, is_uneven, strict=True)
    ]
    family = tested + [None if r in unlike else m.p_value for r, m in marginals] + volume_p
    rejected = holm(family, request.level)
    results = [
        judged(named, w, refused, differs)
        for (_, named), w, refused, differs in zip(
            evidence.named, evidence.weighed, rejected[: len(tested)], is_uneven, strict=True
        )
    ]
    comparisons = [
        comparison(r, result, evidence, matrix) for (r, _), result in zip(evidence.named, results, strict=True)
    ]
    comparisons = with_periods(comparisons)
    judged_marginals = [
        marginal_judged(r, m, refused, r in unlike)
        for (r, m), refused in zip(marginals, rejected[len(tested) : len(tested) + len(marginals)], strict=True)
    ]
    starts = starts_of(evidence, chance, matrix, begun)
    refused_volumes = rejected[len(tested) + len(marginals) :]
    verdict, messages = overall(evidence, comparisons, judged_marginals, starts, matrix, any(refused_volumes))
    mass = np.zeros(len(flight.setting.keys))
    visits = flight.kept_visits()
    if len(evidence.regimes) == 1:
        mass[evidence.regimes[0].cell] = evidence.regimes[0].mass
        cells = cell_distance(visits, mass)
    else:
        cells = regime_cells(evidence, visits)
    made = Checked(verdict, messages, tuple(comparisons), tuple(judged_marginals), cells, starts, evidence.lanes)
    return made, refused_volumes


def regime_cells(evidence: Evidence, visits: Integers) -> Distance:
    """As `cell_distance`, with the regimes in the proportion in which trajectories ended in them."""
    count = np.array([len(lanes) for lanes in evidence.lanes], dtype=float)
    mass = np.zeros(visits.shape[1] - 1)
    for regime, part in zip(evidence.regimes, count / max(count.sum(), 1.0), strict=True):
        mass[regime.cell] += part * regime.mass
    found = cell_distance(visits.sum(axis=0, keepdims=True).repeat(2, axis=0), mass)
    return Distance(found.value, cell_distance(visits, mass).expected)


def comparison(regime: int, result: Judged, evidence: Evidence, matrix: Matrix) -> Comparison:
    """The record of a number, with effective sample sizes and the length that would do."""
    named, setting = result.named, evidence.flight.setting
    whole = evidence.flight.steps * setting.step
    total = whole * (1.0 - 1.0 / N_PART) * len(evidence.lanes[regime])
    effective: dict[str, float] = {}
    length = None if result.longer is None else whole * result.longer
    spread, reason = named.found.spread, result.reason
    if spread is not None and named.found.along > 0.0:
        effective["batch means"] = (spread / named.found.along) ** 2
        variance = matrix.variance.get((regime, named.subject, named.name), 0.0)
        if variance > 0.0 and spread > 0.0:
            effective["matrix"] = spread**2 * total / variance
            ratio = effective["batch means"] / effective["matrix"]
            if not 1.0 / FACTOR < ratio < FACTOR:
                told = f"effective sample sizes disagree: {effective['batch means']:.2g} by batch means, "
                reason = "; ".join(filter(None, (reason, f"{told}{effective['matrix']:.2g} by the matrix")))
            if length is not None and result.weighed.wanted > 0.0:
                by_matrix = variance / (result.weighed.wanted**2 * len(evidence.lanes[regime]) * (1.0 - 1.0 / N_PART))
                length = max(length, by_matrix)
    if length is not None and matrix.memory.value is not None and result.verdict == TOO_SHORT:
        length = max(length, FORGETS * matrix.memory.value / (1.0 - 1.0 / N_PART))
    return Comparison(
        regime=regime,
        subject=named.subject,
        name=named.name,
        number=named.number,
        density=named.density,
        trajectories=named.found.quantity,
        distance=result.weighed.distance,
        p_value=result.weighed.p_value,
        verdict=result.verdict,
        reason=reason,
        effective=effective,
        length=length if result.verdict == TOO_SHORT else None,
    )


def with_periods(comparisons: list[Comparison]) -> list[Comparison]:
    """Return periods with the verdict of their entry rates."""
    rates = {(c.regime, c.name): c for c in comparisons if c.number == "entry_rate"}
    made = []
    for item in comparisons:
        rate = rates.get((item.regime, item.name))
        if item.number == "return_period" and rate is not None:
            item = replace(item, verdict=rate.verdict, reason=rate.reason, length=rate.length)
        made.append(item)
    return made


def label(regime: int, n_regime: int, named: Named) -> str:
    place = f"regime {regime + 1}, " if n_regime > 1 else ""
    return f"{place}{named.name}, {named.number.replace('_', ' ')}"


def starts_of(evidence: Evidence, chance: float, matrix: Matrix, begun: Dispersed) -> Starts:
    """What the starts say: alike, several regimes, or too short a run."""
    flight, n_regime = evidence.flight, len(evidence.regimes)
    found = [(named.found.ratio, named.found.ratio_p, r, named) for r, named in evidence.named]
    ratio, p_value, regime, worst = max(found, key=lambda item: item[0]) if found else (1.0, 1.0, 0, None)
    unlike = [named for _, named in evidence.named if uneven(named.found, chance)]
    visits = flight.kept_visits()
    state, n_start = flight.state, flight.n // 2
    width = flight.setting.axis_upper - flight.setting.axis_lower
    gap = np.abs(state[:, :n_start] - state[:, n_start:]) / width[:, None]
    # unrelated states: each with the next start
    typical = np.abs(state[:, :n_start] - np.roll(state[:, :n_start], 1, axis=1)) / width[:, None]
    alive = np.isfinite(gap).all(axis=0)
    typical = typical[:, np.isfinite(typical).all(axis=0)].max(axis=0)
    far = 1e-3 * float(np.median(typical)) if len(typical) else 0.0
    counts = [len(lanes) for lanes in evidence.lanes]
    return Starts(
        n_tried=begun.n_tried,
        n_lost=begun.n_lost + int((~np.isfinite(state).all(axis=0)).sum()),
        n_trajectory=flight.n,
        twins_apart=float(np.mean(gap[:, alive].max(axis=0) > far)) if alive.any() else 0.0,
        orders_differ=orders_differ(evidence.batches, len(evidence.case.events), n_start),
        equal=not unlike,
        worst="" if worst is None else label(regime, n_regime, worst),
        ratio=float(ratio),
        p_value=float(p_value),
        in_regime=(*counts, flight.n - sum(counts)),
        moved=int(evidence.moved.sum()),
        elsewhere=float(visits[:, -1].sum() / max(visits.sum(), 1)),
        message=starts_message(evidence, unlike, matrix, counts),
    )


def stays_apart(named: Named) -> bool:
    """Whether a number differs between starts so much that no start has been where another is."""
    return named.found.ratio > APART * N_BATCH


def starts_message(evidence: Evidence, unlike: list[Named], matrix: Matrix, counts: list[int]) -> str:
    """A sentence on the starts: what they show, which cause is likelier, what to do."""
    flight = evidence.flight
    kept = flight.steps * (1.0 - 1.0 / N_PART) * flight.setting.step
    told = []
    if len(counts) > 1:
        ends = ", ".join(f"{n} in regime {k}" for k, n in enumerate(counts, 1))
        told.append(f"several regimes, as the density says: of {flight.n} trajectories {ends}")
        if evidence.moved.any():
            told.append(
                f"{int(evidence.moved.sum())} passed from one regime to another, which closed regimes do not allow: "
                "they are one slow regime; run again with longer bursts or smaller cells"
            )
    if not unlike:
        told.append("starts are alike" + (" within each regime" if len(counts) > 1 else ""))
        return "; ".join(told)
    memory, name = matrix.memory.value, unlike[0].name
    apart = any(stays_apart(named) for named in unlike)
    if apart and memory is not None and kept > LONG * memory:
        told.append(
            f"starts differ ({name}) and stay apart for {kept / memory:.2g} memory times of the matrix: likelier a "
            "second regime that the density has not; look at where the starts end, and give [cells] lower and upper so "
            "that the pilot starts in both"
        )
    elif memory is None:
        told.append(
            f"starts differ ({name}): the run is too short, or there is more than one regime; fly longer to tell"
        )
    else:
        need = FORGETS * memory / (1.0 - 1.0 / N_PART)
        told.append(
            f"starts differ ({name}), and each trajectory is {kept / memory:.2g} memory times of the matrix long: "
            f"likelier too short a run than several regimes; trajectories of {max(need, 2 * kept):.3g} would tell"
        )
    return "; ".join(told)


def overall(
    evidence: Evidence,
    comparisons: list[Comparison],
    marginals: list[MarginalComparison],
    starts: Starts,
    matrix: Matrix,
    volumes_differ: bool,
) -> tuple[str, tuple[str, ...]]:
    """Verdict of all numbers together, and sentences for it."""
    messages = []
    verdicts = [c.verdict for c in comparisons] + [m.verdict for m in marginals]
    kept = evidence.flight.steps * (1.0 - 1.0 / N_PART) * evidence.flight.setting.step
    second = "second regime" in starts.message
    if any(len(units) < 2 for units in evidence.units):
        messages.append("fewer than two starts ended in a regime: its numbers are not compared")
    if starts.in_regime[-1] and len(starts.in_regime) > 2:
        messages.append(f"{starts.in_regime[-1]} trajectories ended in no regime of the density")
    if DISAGREES in verdicts or volumes_differ or evidence.moved.any() or second:
        n = verdicts.count(DISAGREES)
        if n:
            messages.insert(0, f"{n} of {len(verdicts)} comparisons disagree: do not rely on these numbers")
        if volumes_differ:
            messages.append(
                "the sum of the Lyapunov exponents disagrees with the rate of change of volumes by the density"
            )
        verdict = DISAGREES
    elif TOO_SHORT in verdicts or not starts.equal or not any(v == AGREES for v in verdicts):
        verdict = TOO_SHORT
        lengths = [c.length for c in comparisons if c.length is not None]
        n = verdicts.count(TOO_SHORT)
        if lengths:
            messages.insert(
                0,
                f"{n} of {len(verdicts)} comparisons are too short to tell: trajectories of {max(lengths):.3g} "
                f"{evidence.case.system.time_unit} would do (these: {kept / (1.0 - 1.0 / N_PART):.3g})",
            )
    else:
        verdict = AGREES
    if len(starts.in_regime) > 2 or not starts.equal:
        messages.append(starts.message)
    return verdict, tuple(messages)
