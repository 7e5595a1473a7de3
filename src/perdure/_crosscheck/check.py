"""The verdicts of a crosscheck, number by number and overall."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from perdure._crosscheck.alike import FORGETS, starts_of
from perdure._crosscheck.evidence import Evidence, Matrix, Request
from perdure._crosscheck.flight import N_PART
from perdure._crosscheck.marginals import FINE as MARGINAL_FINE
from perdure._crosscheck.marginals import cell_distance, marginal_judged
from perdure._crosscheck.starts import Dispersed
from perdure._crosscheck.verdicts import Judged, holm, judged, uneven
from perdure._records import (
    AGREES,
    DISAGREES,
    TOO_SHORT,
    Comparison,
    Distance,
    Integers,
    MarginalComparison,
    Starts,
)

__all__ = ["Checked", "checked"]

# Two effective sample sizes disagree beyond this factor.
FACTOR = 4.0


@dataclass(frozen=True)
class Checked:
    """Verdicts of a flight."""

    verdict: str
    messages: tuple[str, ...]
    comparisons: tuple[Comparison, ...]
    marginals: tuple[MarginalComparison, ...]
    cells: Distance
    starts: Starts


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
        Chances of the sums of the exponents, by regime, that belong to the same family.

    Returns
    -------
    Checked
    list of bool
        Which of the sums are rejected.
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
    volume_p = [None if r in unlike else p for r, p in enumerate(volume_p)]
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
    whole = flight.steps * flight.setting.step
    lengths = [c.length for c in comparisons if c.length is not None]
    lengths += [
        whole * max((found.own / max(found.other, MARGINAL_FINE)) ** 2, 1.0)
        for (_, found), told in zip(marginals, judged_marginals, strict=True)
        if told.verdict == TOO_SHORT
    ]
    starts = starts_of(evidence, chance, matrix, begun)
    refused_volumes = rejected[len(tested) + len(marginals) :]
    verdict, messages = overall(evidence, comparisons, judged_marginals, starts, lengths, any(refused_volumes))
    mass = np.zeros(len(flight.setting.keys))
    visits = flight.kept_visits()
    if len(evidence.regimes) == 1:
        mass[evidence.regimes[0].cell] = evidence.regimes[0].mass
        cells = cell_distance(visits, mass)
    else:
        cells = regime_cells(evidence, visits)
    made = Checked(verdict, messages, tuple(comparisons), tuple(judged_marginals), cells, starts)
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


def overall(
    evidence: Evidence,
    comparisons: list[Comparison],
    marginals: list[MarginalComparison],
    starts: Starts,
    lengths: list[float],
    volumes_differ: bool,
) -> tuple[str, tuple[str, ...]]:
    """Verdict of all numbers together, and sentences for it; `lengths` are those that would do."""
    messages = []
    verdicts = [c.verdict for c in comparisons] + [m.verdict for m in marginals]
    n_differ, n_short = verdicts.count(DISAGREES), verdicts.count(TOO_SHORT)
    second = "second regime" in starts.message
    unmet = any(len(units) < 2 for units in evidence.units)
    if n_differ:
        messages.append(f"{n_differ} of {len(verdicts)} comparisons disagree: do not rely on these numbers")
    if volumes_differ:
        messages.append("the sum of the Lyapunov exponents disagrees with the change of volumes by the density")
    if n_differ or volumes_differ or evidence.moved.any() or second:
        verdict = DISAGREES
    elif n_short or not starts.equal or evidence.n_gone or unmet or AGREES not in verdicts:
        verdict = TOO_SHORT
        if lengths:
            unit = evidence.case.system.time_unit
            whole = evidence.flight.steps * evidence.flight.setting.step
            messages.append(
                f"{n_short} of {len(verdicts)} comparisons are too short to tell: trajectories of {max(lengths):.3g}"
                f"{'' if unit == '1' else f' {unit}'} would do (these: {whole:.3g})"
            )
    else:
        verdict = AGREES
    if evidence.n_gone:
        messages.append(
            f"{evidence.n_gone} of {evidence.flight.n} trajectories left all bounds in flight and are not counted: "
            "the long run may not last"
        )
    if unmet:
        messages.append("fewer than two starts ended in a regime: its numbers are not compared")
    if starts.in_regime[-1] > evidence.n_gone and len(starts.in_regime) > 2:
        messages.append(f"{starts.in_regime[-1] - evidence.n_gone} trajectories ended in no regime of the density")
    if len(starts.in_regime) > 2 or not starts.equal:
        messages.append(starts.message)
    return verdict, tuple(messages)
