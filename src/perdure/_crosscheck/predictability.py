"""Lyapunov exponents, and what follows from them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from perdure._crosscheck.tangents import BEGIN, END, Parting
from perdure._records import Floats, Growth, Quantity
from perdure._statistics import interval

__all__ = ["SURE", "Spectrum", "dimension_of", "entropy_of", "growth_of", "hypotheses", "spectrum_of", "withdrawn"]

# Standard errors beyond which an exponent, or a sum of them, counts as different from zero.
SURE = 3.0
# Part of the QR steps that may lose a vector to rounding.
MOST_LOST = 1e-3


@dataclass(frozen=True)
class Spectrum:
    """Exponents of one regime.

    Attributes
    ----------
    exponents : tuple of Quantity
        Largest first; 1 / time. The last ones may have no value.
    total : Quantity
    each : ndarray, shape (k, n)
        Rates of each start, in the order of `exponents`.
    floor : float
        What differences of states leave open in any exponent; 1 / time.
    independent : bool
        Starts are forgotten; where not, the spread between them is the error.
    """

    exponents: tuple[Quantity, ...]
    total: Quantity
    each: Floats
    floor: float
    independent: bool

    def error(self, values: Floats, count: int = 1) -> float:
        """Standard error of the mean of values, one per start, that are made of so many exponents."""
        return math.hypot(spread_error(values, self.independent), count * self.floor)

    def mean(self, values: Floats, count: int, unit: str) -> Quantity:
        """The mean with its interval."""
        sampling, others = spread_error(values, self.independent), {"differences": count * self.floor}
        return interval(float(values.mean()), sampling, len(values) - 1, unit, "real", others)


def spectrum_of(rate: Floats, lost: Floats, unit: str, floor: float, independent: bool = True) -> Spectrum:
    """Exponents with errors from the spread between starts, rate (k, n), and from the differences."""
    order = np.argsort(-rate.mean(axis=1), kind="stable")
    rate, bad = rate[order], lost[order] > MOST_LOST
    reason = "contracts by more than a factor of 10^8 between two steps: lost in rounding"
    none = Quantity(None, None, None, {}, unit, reason)
    made = Spectrum((), none, rate, floor, independent)
    exponents = tuple(none if gone else made.mean(row, 1, unit) for row, gone in zip(rate, bad, strict=True))
    total = none if bad.any() else made.mean(rate.sum(axis=0), len(rate), unit)
    return replace(made, exponents=exponents, total=total)


def spread_error(values: Floats, independent: bool) -> float:
    """Standard error of the mean of values, one per start."""
    return float(values.std(ddof=1)) / (math.sqrt(len(values)) if independent else 1.0)


def withdrawn(spectrum: Spectrum, reason: str) -> Spectrum:
    """The same without its numbers, for this reason."""
    exponents = tuple(replace(e, value=None, low=None, high=None, parts={}, reason=reason) for e in spectrum.exponents)
    return replace(spectrum, exponents=exponents, total=replace(exponents[0]))


def entropy_of(spectrum: Spectrum, unit: str) -> Quantity:
    """Sum of the positive exponents: the entropy of an SRB measure.

    Ya. B. Pesin, Russ. Math. Surveys 32 (1977) 55-114.
    """
    if spectrum.total.value is None:
        return Quantity(None, None, None, {}, unit, spectrum.total.reason)
    positive = [row for row in spectrum.each if row.mean() > SURE * spectrum.error(row)]
    if not positive:
        return Quantity(0.0, 0.0, 0.0, {"sampling": 0.0}, unit, "no exponent is positive")
    return spectrum.mean(np.sum(positive, axis=0), len(positive), unit)


def dimension_of(spectrum: Spectrum, noisy: bool) -> Quantity:
    """Kaplan-Yorke dimension (J. L. Kaplan and J. A. Yorke, Lecture Notes in Math. 730 (Springer 1979) 204-227).

    The error is to first order in those of the exponents.
    """
    if noisy:
        return Quantity(
            None,
            None,
            None,
            {},
            "1",
            "with noise the long-run law is spread out; the formula is for systems without noise",
        )
    if spectrum.total.value is None:
        return Quantity(None, None, None, {}, "1", spectrum.total.reason)
    each = spectrum.each
    partial = np.cumsum(each, axis=0)
    held = [j for j, row in enumerate(partial) if row.mean() >= -SURE * spectrum.error(row, j + 1)]
    n_dim = len(each)
    if not held:
        return Quantity(
            0.0, 0.0, 0.0, {"sampling": 0.0}, "1", "all exponents are negative: a fixed point or a cycle of one"
        )
    j = held[-1] + 1
    if j == n_dim:
        return Quantity(float(n_dim), float(n_dim), float(n_dim), {"sampling": 0.0}, "1", "volumes do not shrink")
    ahead, behind = max(float(partial[j - 1].mean()), 0.0), float(each[j].mean())
    by_sum = (partial[j - 1] - partial[j - 1].mean()) / -behind
    linear = by_sum + ahead * (each[j] - behind) / behind**2
    error = spread_error(linear, spectrum.independent)
    return interval(
        j + ahead / -behind, error, each.shape[1] - 1, "1", "real", {"differences": (j + 1) * spectrum.floor / -behind}
    )


def hypotheses(noisy: bool, is_flow: bool) -> tuple[str, ...]:
    """What has to hold for entropy and dimension, in plain sentences."""
    if noisy:
        return (
            "with noise the exponents are those of two trajectories on the same noise; the entropy is that beyond what "
            "the noise itself brings, if the sample measures are smooth along unstable directions",
        )
    told = [
        "the entropy is the sum of the positive exponents if the long-run law is smooth along unstable directions (an "
        "SRB measure), and less than that otherwise",
        "the Kaplan-Yorke dimension is conjectured to be the information dimension of typical systems; it is proved in "
        "two dimensions and an upper bound in general",
    ]
    if is_flow:
        told.append("a flow that does not end in a fixed point has one exponent that is zero")
    return tuple(told)


def growth_of(parted: Parting | None, unit: str, reason: str) -> Growth:
    """Median time and spread from the times of the pairs; without any, the reason."""
    if parted is None:
        return Growth(BEGIN, END, Quantity(None, None, None, {}, unit, reason), None, None, 0, 0)
    time = np.sort(parted.time)
    n, n_parted = len(time), int(np.isfinite(time).sum())
    if n_parted < 0.5 * n + math.sqrt(n):
        why = f"{n_parted} of {n} pairs parted in the time that was given them"
        return Growth(BEGIN, END, Quantity(None, None, None, {}, unit, why), None, None, n, n_parted)
    # ranks of the ends of a 95 percent interval of the median: binomial law, normal approximation
    reach = 0.98 * math.sqrt(n)
    low, high = (float(time[int(np.clip(0.5 * n + side * reach, 0, n_parted - 1))]) for side in (-1, 1))
    median = Quantity(float(time[n // 2]), low, high, {"sampling": (high - low) / 3.92}, unit)
    return Growth(BEGIN, END, median, at_rank(time, 0.05), at_rank(time, 0.95), n, n_parted)


def at_rank(time: Sequence[float] | Floats, part: float) -> float | None:
    """Time by which this part of the pairs had parted; None if too few had."""
    value = float(time[min(int(part * len(time)), len(time) - 1)])
    return value if math.isfinite(value) else None
