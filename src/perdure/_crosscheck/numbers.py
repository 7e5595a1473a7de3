"""Numbers of the trajectories, each with its error from the spread between starts."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from perdure._records import CaseRecord, Floats, Quantity, Regime
from perdure._statistics import interval

__all__ = ["Found", "Named", "numbers_of", "units_of"]


# Spread between starts, over the number, that is rounding of long sums.
ROUNDING = 1e-11


@dataclass(frozen=True)
class Found:
    """A number of the trajectories.

    Attributes
    ----------
    quantity : Quantity
    freedom : float
        Degrees of freedom of its standard error, which is that between starts.
    along : float
        The standard error by batch means along the trajectories.
    ratio, ratio_p : float
        Variance between starts over that along them, and the chance of a larger one if starts are alike.
    trend_p : float
        Chance of a larger difference between the two halves if nothing drifts.
    hits : int
        Batches with any time inside; for observables all of them.
    spread : float or None
        Standard deviation over the long run of what is averaged; None for ratios.
    size : float
        Magnitude that rounding, and what is left of a start, are relative to.
    """

    quantity: Quantity
    freedom: float
    along: float
    ratio: float
    ratio_p: float
    trend_p: float
    hits: int
    spread: float | None
    size: float


@dataclass(frozen=True)
class Named:
    """A number by its name, from both sides."""

    subject: str
    name: str
    number: str
    density: Quantity
    found: Found


def units_of(lanes: NDArray[np.int64], n_start: int) -> list[NDArray[np.int64]]:
    """Trajectories that count as one: those of `lanes` with the same start. The others stand alone."""
    start = lanes % n_start
    return [lanes[start == s] for s in np.unique(start)]


def numbers_of(
    case: CaseRecord,
    regime: Regime,
    batches: Floats,
    units: list[NDArray[np.int64]],
    step: float,
    centres: Floats,
    independent: bool,
) -> Iterator[Named]:
    """Every number of a regime that its density gives.

    Parameters
    ----------
    batches : ndarray, shape (n_batch, n_sum, n)
        Averages per step of all trajectories.
    units : list of arrays
        Trajectories of the regime, those of one start together.
    step : float
        Unit: time.
    centres : ndarray, shape (n_observable,)
        What observables are summed about.
    independent : bool
        Starts are forgotten. Where not, as on a cycle, their phases are no random sample of the long run, and the error
        is the spread between starts itself, not that of their mean.
    """
    if len(units) < 2:
        return
    found = partial(number_found, independent=independent)
    x = np.stack([batches[:, :, unit].mean(axis=2) for unit in units], axis=2)
    mean = x.mean(axis=(0, 2))
    time_unit = case.system.time_unit
    for k, event in enumerate(case.events):
        numbers = regime.events[event.name]
        inside, entries = 2 * k, 2 * k + 1
        share, rate = float(mean[inside]), float(mean[entries]) / step
        hits = int(np.sum(x[:, inside] > 0.0))
        spread = math.sqrt(share * (1.0 - share))
        entered = int(np.sum(x[:, entries] > 0.0))
        rows: list[tuple[str, Quantity, float, dict[int, float], str, str, int, float | None]] = [
            ("share", numbers.share, share, {inside: 1.0}, "share", "1", hits, spread),
            (
                "entry_rate",
                numbers.entry_rate,
                rate,
                {entries: 1 / step},
                "positive",
                numbers.entry_rate.unit,
                entered,
                None,
            ),
        ]
        if rate > 0.0:
            slope = -1.0 / (rate * rate * step)
            rows.append(
                (
                    "return_period",
                    numbers.return_period,
                    1 / rate,
                    {entries: slope},
                    "positive",
                    time_unit,
                    entered,
                    None,
                )
            )
            slopes = {inside: 1.0 / rate, entries: share * slope}
            rows.append(("mean_spell", numbers.mean_spell, share / rate, slopes, "positive", time_unit, entered, None))
        for number, density, value, by, kind, unit, count, spread_or in rows:
            if density.value is None and density.high is None:
                continue
            yield Named("event", event.name, number, density, found(x, mean, value, by, kind, unit, count, spread_or))
    for k, observable in enumerate(case.observables):
        first, second = 2 * len(case.events) + 2 * k, 2 * len(case.events) + 2 * k + 1
        seen = regime.observables[observable.name]
        variance = max(float(mean[second] - mean[first] ** 2), 0.0)
        # sums about a centre are rounded to the digits of what they are sums of
        size = float(mean[second]) + float(centres[k]) ** 2
        if seen.mean.value is not None:
            value, deviation = float(mean[first] + centres[k]), math.sqrt(variance)
            told = found(x, mean, value, {first: 1.0}, "real", seen.mean.unit, x[:, 0].size, deviation, math.sqrt(size))
            yield Named("observable", observable.name, "mean", seen.mean, told)
        if seen.variance.value is not None:
            by = {second: 1.0, first: -2.0 * float(mean[first])}
            told = found(x, mean, variance, by, "positive", seen.variance.unit, x[:, 0].size, None, size)
            yield Named("observable", observable.name, "variance", seen.variance, told)


def number_found(
    x: Floats,
    mean: Floats,
    value: float,
    slopes: dict[int, float],
    kind: str,
    unit: str,
    hits: int,
    spread: float | None,
    size: float = 0.0,
    *,
    independent: bool,
) -> Found:
    """A number with the slopes of it in the averages; x (n_batch, n_sum, n_unit), mean (n_sum,). First order.

    `size` is the magnitude that rounding is relative to, where it is not that of the number.
    """
    from scipy.special import fdtrc, stdtr

    n_batch, _, n_unit = x.shape
    each = sum(slope * (x[:, k] - mean[k]) for k, slope in slopes.items())
    whole = each.mean(axis=0)
    between = float(whole.var(ddof=1)) / n_unit
    along = float(each.var(axis=0, ddof=1).mean()) / (n_batch * n_unit)
    freedom = n_unit - 1
    # trajectories at rest differ by rounding alone
    size = max(size, abs(value), spread or 0.0)
    rounding = (ROUNDING * size) ** 2
    if between * n_unit <= rounding:
        between, along = 0.0, 0.0
    ratio = between / along if along > 0.0 else (1.0 if between == 0.0 else math.inf)
    less = math.sqrt(n_unit) if independent else 1.0
    between *= n_unit / less**2
    half = each[: n_batch // 2].mean(axis=0) - each[n_batch // 2 :].mean(axis=0)
    moved = float(half.std(ddof=1)) / less
    trend = abs(float(half.mean())) / moved if moved > 0.0 and between > 0.0 else 0.0
    return Found(
        quantity=interval(value, math.sqrt(between), freedom, unit, kind),
        freedom=freedom,
        along=math.sqrt(along),
        ratio=ratio,
        ratio_p=float(fdtrc(freedom, n_unit * (n_batch - 1), ratio)) if math.isfinite(ratio) else 0.0,
        trend_p=2.0 * float(stdtr(freedom, -trend)),
        hits=hits,
        spread=spread,
        size=size,
    )
