"""Lyapunov exponents of each regime, their sum by the density, and what follows from them."""

from __future__ import annotations

import math
import time

import numpy as np

from perdure._crosscheck.evidence import Evidence
from perdure._crosscheck.predictability import (
    SURE,
    Spectrum,
    dimension_of,
    entropy_of,
    growth_of,
    hypotheses,
    spectrum_of,
)
from perdure._crosscheck.tangents import BEGIN, END, parting, stretching
from perdure._crosscheck.verdicts import DENSITY_FREEDOM, density_error, two_sided
from perdure._crosscheck.volumes import volume_rate
from perdure._pipeline.craft import Craft
from perdure._records import AGREES, NONE, TOO_SHORT, Floats, Growth, Predictability, Quantity
from perdure._statistics import errors_of

__all__ = [
    "TANGENT_STEPS",
    "contradicted",
    "growth",
    "predictability",
    "spectrum",
    "sum_verdict",
    "volume_gap",
    "volumes",
]

# Steps of all copies for the exponents, and their relative standard error that is enough.
TANGENT_STEPS, SHARP = 6e8, 1e-3
# Starts that a regime needs for exponents.
FEWEST_STARTS = 4
# Share of time outside the domain from which the cells say too little of volumes.
OUTSIDE = 1e-3
# Most times that pairs are looked at.
MOST_GOES = 20_000
# Most components of a state that exponents are computed for.
MOST_EXPONENTS = 64


def spectrum(craft: Craft, evidence: Evidence, regime: int, limit: float, ends: float) -> Spectrum | None:
    """Lyapunov exponents of a regime; None where too few starts ended in it.

    Parameters
    ----------
    limit : float
        Most steps of all copies.
    ends : float
        When to stop, on the monotonic clock.
    """
    lanes, n_dim = evidence.lanes[regime], len(craft.case.system.state)
    if n_dim > MOST_EXPONENTS:
        return None
    stands = evidence.flight.stands[1:]
    state = np.concatenate([stand[:, lanes] for stand in stands], axis=1)
    start = np.tile(lanes % (evidence.flight.n // 2), len(stands))
    fine = np.isfinite(state).all(axis=0)
    state, start = np.ascontiguousarray(state[:, fine]), start[fine]
    if len(np.unique(start)) < FEWEST_STARTS:
        return None

    def by_start(rate: Floats) -> Floats:
        """Means over what began at one start, which is not independent; shape (k, n_start)."""
        rows = [rate[:, start == s] for s in np.unique(start)]
        return np.array([row.mean(axis=1) for row in rows if np.isfinite(row).all()]).T

    def enough(rate: Floats) -> bool:
        each = by_start(rate)
        if time.monotonic() > ends or each.size == 0 or each.shape[1] < FEWEST_STARTS:
            return True
        mean, error = each.mean(axis=1), each.std(axis=1, ddof=1) / math.sqrt(each.shape[1])
        return bool(np.all(error <= SHARP * np.maximum(np.abs(mean), 0.1 * np.abs(mean).max())))

    steps = between(craft)
    found = stretching(
        craft.bare,
        state,
        n_dim,
        steps,
        craft.tangents.spawn(max(1, state.shape[1] // 256)),
        craft.workers,
        enough,
        limit,
        lambda done, total: craft.report("exponents", int(done / 1e6), int(total / 1e6)),
    )
    each = by_start(found.rate)
    if each.size == 0 or each.shape[1] < FEWEST_STARTS:
        return None
    return spectrum_of(
        each, found.lost, f"1/{craft.case.system.time_unit}", craft.bare.floor(steps), evidence.independent
    )


def between(craft: Craft) -> int:
    """Steps between two QR steps: half of the time in which differences change by e."""
    if not craft.case.system.is_flow:
        return craft.plain.together
    n = int(0.5 / (max(craft.held.plan.pilot.get("rate", 1.0), 1e-300) * craft.step))
    return max(1, min(n, 1000) // craft.plain.together) * craft.plain.together


def volumes(craft: Craft, regime: int) -> Quantity:
    """Mean rate of change of volumes, from the density; without a value where its error would not be known."""
    held, unit = craft.held, f"1/{craft.case.system.time_unit}"
    found, tally = held.regimes[regime], held.tally
    if tally is None:
        return Quantity(None, None, None, {}, unit, "the matrix was not kept: its sampling error is not known")
    if found.mass.sum() < 1.0 - OUTSIDE:
        reason = f"{100.0 * (1.0 - found.mass.sum()):.2g} percent of the time is outside the domain"
        return Quantity(None, None, None, {}, unit, reason)
    craft.report("volumes", 0, 1)

    def sampling(mean: Floats) -> float:
        transition, solver = craft.transition, craft.solver(regime)
        values = np.zeros((transition.n_cell, 1))
        values[found.cell, 0] = mean
        nothing = np.zeros((transition.n_cell, tally.bursts.shape[1], 1))
        error, _ = errors_of(transition, solver.mass, solver.adjoint(values), nothing, np.ones((1, 1)))
        return float(error[0])

    keys = held.keys[found.cell]
    return volume_rate(craft.bare, held.grid, keys, found.mass, unit, sampling, between(craft), craft.draws)


def predictability(
    craft: Craft,
    regime: int,
    spectrum: Spectrum,
    parted: Growth,
    volume: Quantity,
    distance: float | None,
    verdict: str,
) -> Predictability:
    """The record of a regime."""
    system = craft.case.system
    return Predictability(
        regime=regime,
        exponents=spectrum.exponents,
        total=spectrum.total,
        total_density=volume,
        distance=distance,
        verdict=verdict,
        entropy=entropy_of(spectrum, f"1/{system.time_unit}"),
        dimension=dimension_of(spectrum, system.is_noisy),
        growth=parted,
        hypotheses=hypotheses(system.is_noisy, system.is_flow),
    )


def growth(craft: Craft, evidence: Evidence, regime: int, spectrum: Spectrum) -> Growth:
    """Time in which almost identical pairs part."""
    largest, time_unit = spectrum.exponents[0], craft.case.system.time_unit
    if largest.value is None or largest.value <= SURE * (largest.error or 0.0):
        return growth_of(None, time_unit, "the largest exponent is not positive: almost identical pairs stay together")
    craft.report("pairs", 0, 1)
    state, steps = evidence.flight.state[:, evidence.lanes[regime]], between(craft)
    longest = min(6.0 * math.log(END / BEGIN) / largest.value, MOST_GOES * steps * craft.step)
    found = parting(craft.bare, np.ascontiguousarray(state), steps, longest, craft.tangents)
    return growth_of(found, time_unit, "")


def contradicted(spectrum: Spectrum, growth: Growth) -> bool:
    """Whether pairs stay together for long enough to have parted six times over."""
    largest = spectrum.exponents[0].value
    return bool(largest and growth.n_pair and growth.time.value is None and growth.n_parted < 0.5 * growth.n_pair)


def volume_gap(spectrum: Spectrum | None, volume: Quantity) -> tuple[float | None, float | None]:
    """Sum of the exponents less the rate by the density, over its standard error, and the chance of it."""
    if spectrum is None or spectrum.total.value is None or volume.value is None:
        return None, None
    total, value = spectrum.total, spectrum.total.value
    error = math.hypot(total.error or 0.0, density_error(volume, value))
    distance = (value - volume.value) / error
    return distance, two_sided(distance, DENSITY_FREEDOM)


def sum_verdict(spectrum: Spectrum | None, volume: Quantity) -> str:
    """What is said where the two do not disagree: the trajectories must be as sharp as the density."""
    if spectrum is None:
        return NONE
    wanted = max(
        2.0 * (volume.error or 0.0), SHARP * abs(volume.value or 0.0), 2.0 * len(spectrum.each) * spectrum.floor
    )
    return AGREES if (spectrum.total.error or 0.0) <= wanted else TOO_SHORT
