"""Lyapunov exponents of each regime, their sum by the density, and what follows from them."""

from __future__ import annotations

import math

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
from perdure._pipeline.chain import solver_of
from perdure._pipeline.craft import Craft
from perdure._records import AGREES, DISAGREES, NONE, TOO_SHORT, Floats, Growth, Predictability, Quantity
from perdure._statistics import errors_of
from perdure._transitions import TransitionMatrix

__all__ = ["predictability", "spectrum", "volume_gap", "volumes"]

# Steps of all copies for the exponents, and their relative standard error that is enough.
TANGENT_STEPS, SHARP = 6e8, 1e-3
# Most components of a state that exponents are computed for.
MOST_EXPONENTS = 64


def spectrum(craft: Craft, evidence: Evidence, regime: int) -> Spectrum | None:
    """Lyapunov exponents of a regime; None where too few trajectories ended in it."""
    lanes, n_dim = evidence.lanes[regime], len(craft.case.system.state)
    if len(lanes) < 4 or n_dim > MOST_EXPONENTS:
        return None
    state = np.concatenate([stand[:, lanes] for stand in evidence.flight.stands[1:]], axis=1)
    state = np.ascontiguousarray(state[:, np.isfinite(state).all(axis=0)])
    if state.shape[1] < 8:
        return None

    def enough(rate: Floats) -> bool:
        mean, error = rate.mean(axis=1), rate.std(axis=1, ddof=1) / math.sqrt(rate.shape[1])
        largest = np.abs(mean).max()
        return bool(np.all(error <= SHARP * np.maximum(np.abs(mean), 0.1 * largest)))

    found = stretching(
        craft.bare,
        state,
        n_dim,
        between(craft),
        craft.tangents.spawn(max(1, state.shape[1] // 256)),
        craft.workers,
        enough,
        TANGENT_STEPS / len(craft.held.regimes),
        lambda done, total: craft.report("exponents", int(done / 1e6), int(total / 1e6)),
    )
    return spectrum_of(found.rate, found.lost, f"1/{craft.case.system.time_unit}")


def between(craft: Craft) -> int:
    """Steps between two QR steps: half of the time in which differences change by e."""
    if not craft.case.system.is_flow:
        return craft.plain.together
    n = int(0.5 / (max(craft.held.plan.pilot.get("rate", 1.0), 1e-300) * craft.step))
    return max(1, min(n, 1000) // craft.plain.together) * craft.plain.together


def volumes(craft: Craft, regime: int) -> Quantity:
    """Mean rate of change of volumes, from the density."""
    held, unit = craft.held, f"1/{craft.case.system.time_unit}"
    found = held.regimes[regime]
    craft.report("volumes", 0, 1)

    def sampling(mean: Floats) -> float:
        if held.tally is None:
            return 0.0
        transition = TransitionMatrix(held.tally)
        solver = solver_of(craft, transition, regime)
        values = np.zeros((transition.n_cell, 1))
        values[found.cell, 0] = mean
        nothing = np.zeros((transition.n_cell, held.tally.bursts.shape[1], 1))
        error, _ = errors_of(transition, solver.mass, solver.adjoint(values), nothing, np.ones((1, 1)))
        return float(error[0])

    keys = held.keys[found.cell]
    return volume_rate(craft.bare, held.grid, keys, found.mass, unit, sampling, craft.draws)


def predictability(
    craft: Craft,
    evidence: Evidence,
    regime: int,
    spectrum: Spectrum,
    volume: Quantity,
    distance: float | None,
    refused: bool,
) -> Predictability:
    system = craft.case.system
    unit = f"1/{system.time_unit}"
    return Predictability(
        regime=regime,
        exponents=spectrum.exponents,
        total=spectrum.total,
        total_density=volume,
        distance=distance,
        verdict=NONE if distance is None else DISAGREES if refused else sum_verdict(spectrum, volume),
        entropy=entropy_of(spectrum, unit),
        dimension=dimension_of(spectrum, system.is_noisy),
        growth=growth(craft, evidence, regime, spectrum),
        hypotheses=hypotheses(system.is_noisy, system.is_flow),
    )


def growth(craft: Craft, evidence: Evidence, regime: int, spectrum: Spectrum) -> Growth:
    largest, time_unit = spectrum.exponents[0], craft.case.system.time_unit
    if largest.value is None or largest.value <= SURE * (largest.error or 0.0):
        return growth_of(None, time_unit, "the largest exponent is not positive: almost identical pairs stay together")
    craft.report("pairs", 0, 1)
    state = evidence.flight.state[:, evidence.lanes[regime]]
    longest = 6.0 * math.log(END / BEGIN) / largest.value
    found = parting(craft.bare, np.ascontiguousarray(state), between(craft), longest, craft.tangents)
    return growth_of(found, time_unit, "")


def volume_gap(spectrum: Spectrum | None, volume: Quantity) -> tuple[float | None, float | None]:
    """Sum of the exponents less the rate by the density, over its standard error, and the chance of it."""
    if spectrum is None or spectrum.total.value is None or volume.value is None:
        return None, None
    total, value = spectrum.total, spectrum.total.value
    error = math.hypot(total.error or 0.0, density_error(volume, value), rounding_of(spectrum))
    distance = (value - volume.value) / error
    return distance, two_sided(distance, DENSITY_FREEDOM)


def sum_verdict(spectrum: Spectrum, volume: Quantity) -> str:
    """What is said where the two do not disagree: the trajectories must be as sharp as the density."""
    wanted = max(2.0 * (volume.error or 0.0), SHARP * abs(volume.value or 0.0), rounding_of(spectrum))
    return AGREES if (spectrum.total.error or 0.0) <= wanted else TOO_SHORT


def rounding_of(spectrum: Spectrum) -> float:
    """Differences of states a ten-millionth apart give no exponent more exactly than this; 1 / time."""
    return 1e-6 * float(np.abs(spectrum.each.mean(axis=1)).max())
