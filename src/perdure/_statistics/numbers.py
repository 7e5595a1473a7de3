"""Event shares, rates and spells, means and variances, with sampling errors by one adjoint solve per number.

With h solving (I - P) h = g - mu(g), the first-order error of mu(g) is sum_i pi_i (dP_i h + dg_i)
(P. J. Schweitzer, J. Appl. Prob. 5 (1968) 401-413). Rows of different cells are independent, so its variance is
the sum over cells of pi_i^2 times the variance of a row mean, which the replicates of the row give.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from perdure._records import CaseRecord, EventResult, Floats, Integers, ObservableResult, Plan, Quantity, Transition
from perdure._statistics.intervals import Shift, cells_part, interval, upper_bound

__all__ = ["Averages", "Found", "averaged", "mixes", "regime_numbers", "row_errors", "scaled"]

CHUNK = 65536


class Found(Protocol):
    """Sums along the bursts, (n_cell, n_replicate, n_sum) as the kernel made them, and the bursts sent, (n_cell,)."""

    @property
    def sums(self) -> Floats: ...
    @property
    def sent(self) -> Integers: ...


@dataclass(frozen=True)
class Spread:
    """Standard error of a number from sampling, its degrees of freedom, and what other parts `Shift`s give."""

    error: float
    freedom: float
    others: Mapping[str, float]


@dataclass(frozen=True)
class Averages:
    """Long-run averages of the basic functions of a regime.

    Attributes
    ----------
    value : ndarray, shape (n_sum,)
        Per event the share and the entries per burst; per observable mean and mean square.
    coarser : ndarray, shape (2, n_sum)
        The same with cells of twice and four times the width; shape (0, n_sum) where that is not known.
    effective : float
        Bursts that count, 1 / sum(mass^2 / bursts) (L. Kish's effective sample size).
    hits : ndarray, shape (n_sum,)
        The sums over all bursts: for entries, about how many were seen.
    at_rest : bool
        A single cell of a system without noise under plain bursts: what enters an event there is seeds that settle.
    """

    value: Floats
    coarser: Floats
    effective: float
    hits: Floats
    at_rest: bool

    def others(self, spread: Spread, number: Callable[[Floats], float]) -> dict[str, float]:
        """Parts of the error of a number beside sampling; `number` makes it from the averages."""
        parts = dict(spread.others)
        if len(self.coarser):
            with np.errstate(divide="ignore", invalid="ignore"):
                ladder = cells_part((number(self.value), number(self.coarser[0]), number(self.coarser[1])))
            parts["cells"] = float(np.hypot(ladder, parts.get("cells", 0.0)))
        return {name: parts[name] for name in ("cells", "step") if name in parts}


def scaled(sums: Floats, plan: Plan, n_event: int) -> Floats:
    """Sums along the bursts, (..., n_sum), on the scale of one burst: shares and means per step, entries per burst.

    The kernel sums from the second step on, unless a burst has but one.
    """
    n_summed = max(plan.n_step - 1, 1)
    scale = np.full(sums.shape[-1], 1.0 / n_summed)
    scale[1 : 2 * n_event : 2] = plan.n_step / n_summed
    return np.asarray(sums * scale)


def errors_of(transition: Transition, mass: Floats, h: Floats, sums: Floats, mix: Floats) -> tuple[Floats, Floats]:
    """Standard error and degrees of freedom, shape (n_number,), of linear mixes of the averages.

    h (n_cell, n_sum) solves the adjoint equation; sums (n_cell, n_replicate, n_sum) along the bursts of each
    replicate; mix (n_sum, n_number). The error of replicate r in row i is what its bursts found beyond the mean of
    the row, sum_j counts_r h_j + sums_r - bursts_r (mean of both), times mass_i over the bursts of the row. Where rows
    are independent the variances add up (degrees of freedom by F. E. Satterthwaite, Biometrics Bull. 2 (1946) 110-114);
    of reseeded bursts only whole replicates are, and their errors are summed over the rows first.
    """
    n_rep, n_number = transition.tally.bursts.shape[1], mix.shape[1]
    variance, square, whole = np.zeros(n_number), np.zeros(n_number), np.zeros((n_rep, n_number))
    for _, row in row_errors(transition, mass, h, sums, mix):
        part = (row**2).sum(axis=1) * (n_rep / (n_rep - 1))
        variance += part.sum(axis=0)
        square += (part**2).sum(axis=0) / (n_rep - 1)
        whole += row.sum(axis=0)
    if transition.tally.together:
        together = (whole**2).sum(axis=0) * (n_rep / (n_rep - 1))
        return np.sqrt(together), np.full(n_number, float(n_rep - 1))
    freedom = np.where(square > 0.0, variance**2 / np.where(square > 0.0, square, 1.0), np.inf)
    return np.sqrt(variance), np.minimum(freedom, 1e9)


def row_errors(
    transition: Transition, mass: Floats, h: Floats, sums: Floats, mix: Floats
) -> Iterator[tuple[int, Floats]]:
    """First row and errors, shape (n, n_replicate, n_number), of one chunk of rows after the other; see `errors_of`."""
    mixed = h @ mix
    for begin in range(0, len(mass), CHUNK):
        end = min(begin + CHUNK, len(mass))
        if not mass[begin:end].any():
            continue
        row = transition.replicate_sums(mixed, begin, end) + sums[begin:end] @ mix
        bursts = transition.tally.bursts[begin:end]
        total = bursts.sum(axis=1)
        row -= row.sum(axis=1, keepdims=True) * (bursts / total[:, None])[:, :, None]
        yield begin, row * (mass[begin:end] / total)[:, None, None]


def regime_numbers(
    case: CaseRecord,
    plan: Plan,
    transition: Transition,
    mass: Floats,
    found: Found,
    adjoint: Callable[[Floats], Floats],
    lifted: Floats,
    centres: Floats,
    shifts: Mapping[str, Shift],
) -> tuple[Mapping[str, EventResult], Mapping[str, ObservableResult]]:
    """All named numbers of one regime.

    Parameters
    ----------
    mass : ndarray, shape (n_cell,)
        Stationary mass, zero off the regime.
    adjoint : callable
        Solves (I - P) h = g - mu(g) for columns g.
    lifted : ndarray, shape (2, n_cell)
        Stationary mass with cells of twice and four times the width; shape (0, n_cell) where that is not known.
    centres : ndarray, shape (n_observable,)
        What the kernel took off each observable before summing.
    shifts : mapping of str to Shift
        By the part of the budget ("cells", "step") that they belong to.
    """
    sums, averages, h = averaged(case, plan, transition, mass, found, adjoint, lifted)
    mix, names = mixes(case, plan, averages)
    with np.errstate(over="ignore", invalid="ignore"):
        error, freedom = errors_of(transition, mass, h, sums, mix)
        others = {part: shift.part(mix) for part, shift in shifts.items()}
    at = {
        name: Spread(float(error[k]), float(freedom[k]), {part: float(v[k]) for part, v in others.items()})
        for k, name in enumerate(names)
    }
    events = {e.name: event_result(case, plan, averages, k, at) for k, e in enumerate(case.events)}
    observables = {
        o.name: observable_result(case, averages, k, at, float(centres[k])) for k, o in enumerate(case.observables)
    }
    return events, observables


def averaged(
    case: CaseRecord,
    plan: Plan,
    transition: Transition,
    mass: Floats,
    found: Found,
    adjoint: Callable[[Floats], Floats],
    lifted: Floats,
) -> tuple[Floats, Averages, Floats]:
    """Sums on the scale of a burst, zero where they are not finite; the averages; their adjoint solutions."""
    sums, whole = scaled(found.sums, plan, len(case.events)), transition.tally.bursts.sum(axis=1)[:, None]
    pooled = sums.sum(axis=1) / whole
    held = np.where(mass[:, None] > 0.0, pooled, 0.0)
    value = mass @ held
    averages = Averages(
        value,
        lifted @ held,
        1.0 / float(np.sum(mass**2 / found.sent)),
        found.sent.astype(float) @ np.where(mass[:, None] > 0.0, found.sums.sum(axis=1) / whole, 0.0),
        int(np.sum(mass > 0.0)) == 1 and not case.system.is_noisy and not transition.tally.together,
    )
    fine = np.isfinite(value)
    h = np.zeros_like(pooled)
    if fine.any():
        h[:, fine] = adjoint(np.where(np.isfinite(pooled[:, fine]), pooled[:, fine], 0.0))
    return np.where(np.isfinite(sums), sums, 0.0), averages, h


def mixes(case: CaseRecord, plan: Plan, averages: Averages) -> tuple[Floats, list[tuple[str, int]]]:
    """Derivatives (n_sum, n_number) of every number with respect to the averages, and the numbers' names."""
    value, tau = averages.value, plan.duration
    columns, names = [], []

    def enter(name: str, k: int, slopes: Mapping[int, float]) -> None:
        column = np.zeros(len(value))
        for at, slope in slopes.items():
            column[at] = slope if np.isfinite(slope) else 0.0
        columns.append(column)
        names.append((name, k))

    for k in range(len(case.events)):
        share, entries = value[2 * k], value[2 * k + 1]
        enter("share", k, {2 * k: 1.0})
        enter("rate", k, {2 * k + 1: 1.0 / tau})
        if entries > 0.0:
            enter("period", k, {2 * k + 1: -tau / entries**2})
            enter("spell", k, {2 * k: tau / entries, 2 * k + 1: -share * tau / entries**2})
    base = 2 * len(case.events)
    for k in range(len(case.observables)):
        enter("mean", k, {base + 2 * k: 1.0})
        enter("variance", k, {base + 2 * k: -2.0 * value[base + 2 * k], base + 2 * k + 1: 1.0})
    return np.array(columns).T.reshape(len(value), -1), names


def event_result(
    case: CaseRecord,
    plan: Plan,
    averages: Averages,
    k: int,
    at: Mapping[tuple[str, int], Spread],
) -> EventResult:
    """Share, entry rate, return period and mean spell of event `k`."""
    share, entries = float(averages.value[2 * k]), float(averages.value[2 * k + 1])
    tau, time = plan.duration, case.system.time_unit
    rate_unit = "1" if time == "1" else f"1/{time}"
    bound = upper_bound(averages.effective)
    seen = f"in {averages.effective:.3g} effective bursts"
    if share == 0.0:
        quantity = Quantity(None, 0.0, bound, {}, "1", f"never seen {seen}: upper bound")
    elif share > 1.0 - 1e-12:
        quantity = Quantity(1.0, 1.0 - bound, 1.0, {"sampling": 0.0}, "1", f"always seen {seen}: lower bound")
    else:
        spread = at["share", k]
        others = averages.others(spread, lambda v: v[2 * k])
        quantity = interval(share, spread.error, spread.freedom, "1", "share", others)
    refusal = why_no_rate(case, k)
    if averages.at_rest and not refusal:
        refusal = "the regime is a single cell: entries would be those of seeds that settle in it"
    if refusal:
        return EventResult(
            quantity,
            Quantity(None, None, None, {}, rate_unit, refusal),
            *(Quantity(None, None, None, {}, time, refusal) for _ in range(2)),
        )
    if entries == 0.0:
        none = Quantity(None, None, None, {}, time, f"no entry seen {seen}")
        rate = Quantity(None, 0.0, bound / tau, {}, rate_unit, f"no entry seen {seen}: upper bound")
        period = Quantity(None, tau / bound, None, {}, time, f"no entry seen {seen}: lower bound")
        return EventResult(quantity, rate, period, none)

    def number(name: str, value: float, unit: str, of: Callable[[Floats], float]) -> Quantity:
        spread = at[name, k]
        error = counted(spread.error, value, hits)
        return interval(value, error, spread.freedom, unit, "positive", averages.others(spread, of))

    hits = float(averages.hits[2 * k + 1])
    return EventResult(
        quantity,
        number("rate", entries / tau, rate_unit, lambda v: v[2 * k + 1] / tau),
        number("period", tau / entries, time, lambda v: tau / v[2 * k + 1]),
        number("spell", share * tau / entries, time, lambda v: v[2 * k] * tau / v[2 * k + 1]),
    )


def counted(error: float, value: float, hits: float) -> float:
    """Standard error, but not below that of a Poisson count while fewer than 100 entries were seen.

    With all of a few entries in one replicate the first-order error of a ratio cancels to nothing.
    """
    return float(max(error, value / np.sqrt(hits))) if 0.0 < hits < 100.0 else error


def why_no_rate(case: CaseRecord, k: int) -> str:
    """Reason why an event has no entry rate; empty if it has one."""
    event, system = case.events[k], case.system
    if event.until is not None:
        return "spells that last until another condition holds are not counted by this version"
    if system.kind != "noisy-flow":
        return ""
    shaken = set(system.state)
    if system.noise:
        shaken = {s for s, row in zip(system.state, system.noise, strict=True) if any(not is_zero(e.text) for e in row)}
    if not event.condition.names & shaken:
        return ""
    return (
        "white noise crosses a plain edge infinitely often, so a rate would depend on the step alone; state the event "
        "with components that carry no noise themselves"
    )


def is_zero(text: str) -> bool:
    try:
        return float(text) == 0.0
    except ValueError:
        return False


def observable_result(
    case: CaseRecord, averages: Averages, k: int, at: Mapping[tuple[str, int], Spread], centre: float
) -> ObservableResult:
    """Mean and variance of observable `k`, whose sums were taken about `centre`."""
    first = 2 * len(case.events) + 2 * k
    mean, square = float(averages.value[first]), float(averages.value[first + 1])
    unit = case.observables[k].unit
    square_unit = unit if unit == "1" else f"({unit})^2"

    def number(name: str, value: float, unit: str, kind: str, of: Callable[[Floats], float]) -> Quantity:
        spread = at[name, k]
        return interval(value, spread.error, spread.freedom, unit, kind, averages.others(spread, of))

    spread = max(square - mean * mean, 0.0) if np.isfinite(square) else np.nan
    return ObservableResult(
        number("mean", centre + mean, unit, "real", lambda v: v[first]),
        number("variance", spread, square_unit, "positive", lambda v: v[first + 1] - v[first] ** 2),
    )
