"""Event shares, rates and spells, means and variances, with sampling errors by one adjoint solve per number.

With h solving (I - P) h = g - mu(g), the first-order error of mu(g) is sum_i pi_i (dP_i h + dg_i)
(P. J. Schweitzer, J. Appl. Prob. 5 (1968) 401-413). Rows of different cells are independent, so its variance is
the sum over cells of pi_i^2 times the variance of a row mean, which the replicates of the row give.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from perdure._records import CaseRecord, EventResult, Floats, ObservableResult, Plan, Quantity, Transition
from perdure._statistics.intervals import cells_part, interval, upper_bound

__all__ = ["Averages", "regime_numbers"]

CHUNK = 65536


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
        The sums over all bursts: for entries, how many were seen.
    at_rest : bool
        A single cell of a system without noise: what enters an event there is seeds that settle.
    """

    value: Floats
    coarser: Floats
    effective: float
    hits: Floats
    at_rest: bool

    def cells(self, number: Callable[[Floats], float]) -> float | None:
        """Part of the error of a number from cell size; `number` makes it from the averages."""
        if not len(self.coarser):
            return None
        with np.errstate(divide="ignore", invalid="ignore"):
            return cells_part((number(self.value), number(self.coarser[0]), number(self.coarser[1])))


def per_burst(sums: Floats, transition: Transition, plan: Plan, n_event: int) -> Floats:
    """Mean along the bursts, shape (n_cell, n_replicate, n_sum): shares and means per step, entries per burst.

    The kernel sums from the second step on, unless a burst has but one.
    """
    n_summed = max(plan.n_step - 1, 1)
    scale = np.full(sums.shape[2], 1.0 / n_summed)
    scale[1 : 2 * n_event : 2] = plan.n_step / n_summed
    return np.asarray(sums * scale / transition.tally.bursts[:, :, None])


def errors_of(transition: Transition, mass: Floats, h: Floats, means: Floats, mix: Floats) -> tuple[Floats, Floats]:
    """Standard error and degrees of freedom, shape (n_number,), of linear mixes of the averages.

    h (n_cell, n_sum) solves the adjoint equation; means (n_cell, n_replicate, n_sum); mix (n_sum, n_number).
    Degrees of freedom by F. E. Satterthwaite, Biometrics Bull. 2 (1946) 110-114.
    """
    variance, square = np.zeros(mix.shape[1]), np.zeros(mix.shape[1])
    n_rep = means.shape[1]
    mixed = h @ mix
    for begin in range(0, len(mass), CHUNK):
        end = min(begin + CHUNK, len(mass))
        if not mass[begin:end].any():
            continue
        row = transition.replicate_right(mixed, begin, end) + means[begin:end] @ mix
        row = row - row.mean(axis=1, keepdims=True)
        part = mass[begin:end, None] ** 2 * (row**2).sum(axis=1) / (n_rep * (n_rep - 1))
        variance += part.sum(axis=0)
        square += (part**2).sum(axis=0) / (n_rep - 1)
    freedom = np.where(square > 0.0, variance**2 / np.where(square > 0.0, square, 1.0), np.inf)
    return np.sqrt(variance), np.minimum(freedom, 1e9)


def regime_numbers(
    case: CaseRecord,
    plan: Plan,
    transition: Transition,
    mass: Floats,
    sums: Floats,
    adjoint: Callable[[Floats], Floats],
    lifted: Floats,
    centres: Floats,
) -> tuple[Mapping[str, EventResult], Mapping[str, ObservableResult]]:
    """All named numbers of one regime.

    Parameters
    ----------
    mass : ndarray, shape (n_cell,)
        Stationary mass, zero off the regime.
    sums : ndarray, shape (n_cell, n_replicate, n_sum)
        Sums along the bursts, as the kernel made them.
    adjoint : callable
        Solves (I - P) h = g - mu(g) for columns g.
    lifted : ndarray, shape (2, n_cell)
        Stationary mass with cells of twice and four times the width; shape (0, n_cell) where that is not known.
    centres : ndarray, shape (n_observable,)
        What the kernel took off each observable before summing.
    """
    n_event = len(case.events)
    means = per_burst(sums, transition, plan, n_event)
    weight = transition.tally.bursts / transition.tally.bursts.sum(axis=1, keepdims=True)
    pooled = np.einsum("irg,ir->ig", means, weight)
    held = np.where(mass[:, None] > 0.0, pooled, 0.0)
    value = mass @ held
    averages = Averages(
        value,
        lifted @ held,
        1.0 / float(np.sum(mass**2 / transition.tally.bursts.sum(axis=1))),
        sums[mass > 0.0].sum(axis=(0, 1)),
        int(np.sum(mass > 0.0)) == 1 and not case.system.is_noisy,
    )
    fine = np.isfinite(value)
    h = np.zeros_like(pooled)
    if fine.any():
        h[:, fine] = adjoint(np.where(np.isfinite(pooled[:, fine]), pooled[:, fine], 0.0))
    mix, names = mixes(case, plan, averages)
    safe = np.where(np.isfinite(means), means, 0.0)
    with np.errstate(over="ignore", invalid="ignore"):
        error, freedom = errors_of(transition, mass, h, safe, mix)
    at = {name: (float(error[k]), float(freedom[k])) for k, name in enumerate(names)}
    events = {e.name: event_result(case, plan, averages, k, at) for k, e in enumerate(case.events)}
    observables = {
        o.name: observable_result(case, averages, k, at, float(centres[k])) for k, o in enumerate(case.observables)
    }
    return events, observables


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
    at: Mapping[tuple[str, int], tuple[float, float]],
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
        quantity = interval(share, *at["share", k], "1", "share", averages.cells(lambda v: v[2 * k]))
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
        error, freedom = at[name, k]
        return interval(value, counted(error, value, hits), freedom, unit, "positive", averages.cells(of))

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
    case: CaseRecord, averages: Averages, k: int, at: Mapping[tuple[str, int], tuple[float, float]], centre: float
) -> ObservableResult:
    """Mean and variance of observable `k`, whose sums were taken about `centre`."""
    first = 2 * len(case.events) + 2 * k
    mean, square = float(averages.value[first]), float(averages.value[first + 1])
    unit = case.observables[k].unit
    square_unit = unit if unit == "1" else f"({unit})^2"
    spread = max(square - mean * mean, 0.0)
    return ObservableResult(
        interval(centre + mean, *at["mean", k], unit, "real", averages.cells(lambda v: v[first])),
        interval(
            spread if np.isfinite(square) else np.nan,
            *at["variance", k],
            square_unit,
            "positive",
            averages.cells(lambda v: v[first + 1] - v[first] ** 2),
        ),
    )
