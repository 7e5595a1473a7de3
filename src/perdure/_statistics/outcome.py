"""What the run amounts to: regimes and their weights, leaks, periods; in plain sentences."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure._records import CaseRecord, Floats, Integers, Plan, Quantity, Regime, Transition
from perdure._statistics.intervals import interval, upper_bound
from perdure._statistics.numbers import errors_of

__all__ = ["Findings", "no_share", "outcome_of", "outside_quantity", "regime_weights"]

# Least part of the pilot's points that the regimes must hold.
PILOT_LEAST = 0.9
# Most mass that may be linked with the rest of a regime through the outside state alone.
APART_MOST = 0.01
# Most weight of reseeded bursts that may be set aside.
STRAYED_MOST = 0.001

Visits = Callable[[Transition, tuple[Integers, ...], Floats], Floats]


def regime_weights(
    transition: Transition, members: tuple[Integers, ...], basins: Floats | None, visits: Visits, n_cell: int
) -> list[Quantity]:
    """Probability of ending in each regime from a start uniform over the first `n_cell` cells (all but outside).

    With v the mean visits to transient cells, the first-order error is sum_i v_i dP_i b, as in `numbers`.
    """
    if basins is None:
        return [Quantity(1.0, 1.0, 1.0, {"sampling": 0.0}) for _ in members]
    n = transition.n_cell
    start = np.where(np.arange(n) < n_cell, 1.0 / n_cell, 0.0)
    v = visits(transition, members, start)
    n_rep = transition.tally.bursts.shape[1]
    error, freedom = errors_of(transition, v, basins, np.zeros((n, n_rep, basins.shape[1])), np.eye(basins.shape[1]))
    value = start @ basins
    return [interval(float(w), float(e), float(f), "1", "share") for w, e, f in zip(value, error, freedom, strict=True)]


def no_share() -> Quantity:
    """Share of time outside where there is no long run inside."""
    return Quantity(None, None, None, {}, "1", "no class of cells is closed: a share of time outside cannot be given")


def outside_quantity(
    plan: Plan,
    transition: Transition,
    mass: Floats,
    sent: Integers,
    has_outside: bool,
    adjoint: Callable[[Floats], Floats],
) -> Quantity:
    """Share of time outside the domain in a regime; an upper bound, by the bursts sent (n_cell,), where none left."""
    bursts = transition.tally.bursts
    if has_outside and mass[-1] > 1e-12:
        is_outside = np.zeros((len(mass), 1))
        is_outside[-1] = 1.0
        still = np.zeros((*bursts.shape, 1))
        error, freedom = errors_of(transition, mass, adjoint(is_outside), still, np.ones((1, 1)))
        return interval(float(mass[-1]), float(error[0]), float(freedom[0]), "1", "share")
    if not plan.bounded:
        return Quantity(0.0, 0.0, 0.0, {"sampling": 0.0}, "1")
    effective = 1.0 / float(np.sum(mass**2 / sent))
    return Quantity(0.0, 0.0, upper_bound(effective), {"sampling": 0.0}, "1")


@dataclass(frozen=True)
class Findings:
    """What the outcome is judged from.

    Attributes
    ----------
    leaks : ndarray of bool, shape (n,)
        Cells from which bursts never came back.
    rough : bool
        Solves for error bars stopped far above their tolerance.
    apart : float
        Mass of a part of a regime that only the outside state links with the rest.
    settled : bool
        Stays outside the cover stopped lengthening.
    pilot_share : float
        Part of the pilot's points in the cells of the regimes.
    drifts : bool
        Averages over reseeded bursts still changed from sweep to sweep at the end.
    strayed : float
        Part of their weight that ended in cells which it did not leave again, and was set aside.
    """

    plan: Plan
    counts: Mapping[str, int]
    regimes: Sequence[Regime]
    leaks: NDArray[np.bool_]
    rough: bool
    apart: float
    settled: bool
    pilot_share: float
    drifts: bool = False
    strayed: float = 0.0


def outcome_of(case: CaseRecord, found: Findings) -> tuple[str, tuple[str, ...], bool]:
    """Name of the outcome, its explanation, and whether every stated check passed."""
    counts, regimes = found.counts, found.regimes
    messages: list[str] = []
    if counts["blown_up"]:
        messages.append(
            f"{counts['blown_up']} of {counts['bursts']} bursts became non-finite or left all bounds and ended in the "
            "outside state; if the system should stay bounded, shorten [bursts] step or narrow [cells] lower, upper"
        )
    if found.rough:
        messages.append(
            "solves behind the error bars stopped at a residual above one percent: the numbers stand, their errors are "
            "rough; use longer bursts or fewer cells"
        )
    if found.apart > APART_MOST:
        messages.append(
            f"cells that hold {found.apart:.2g} of the mass are linked with the rest through the outside state alone, "
            "which does not remember where a burst left: these may be separate regimes; widen [cells] lower, upper"
        )
    if not found.settled:
        messages.append(
            "stays outside the domain still lengthened from sweep to sweep, so that shares have not settled; widen "
            "[cells] lower, upper; if that does not help, the system may have no long-run density at all"
        )
    if found.drifts:
        messages.append(
            "averages over the reseeded bursts still drifted beyond chance when their budget was spent: the start is "
            "forgotten slowly, perhaps like a power of time, and errors are too small; give more [bursts] sweeps or "
            "longer bursts, and see whether the numbers move"
        )
    if found.strayed > STRAYED_MOST:
        messages.append(
            f"{found.strayed:.2g} of the weight of the reseeded bursts ended in cells that it did not leave again, and "
            "was set aside; it may be a regime of its own: give more [bursts] sweeps"
        )
    held = sum(regime.weight.value or 0.0 for regime in regimes)
    if not regimes or held < 0.5:
        messages.append(
            f"leaking: {int(found.leaks.sum())} of {counts['cells']} cells sent bursts away for good, and no class of "
            f"cells holds its mass (a start uniform over the cells stays with probability {held:.3g}): no long-run "
            "density exists on this domain; widen [cells] lower, upper, or leave them out"
        )
        return "leaking", tuple(messages), False
    if found.leaks.any():
        messages.append(
            f"{int(found.leaks.sum())} cells outside the long run sent bursts away for good: a start uniform over the "
            f"cells is lost with probability {max(0.0, 1.0 - held):.3g}"
        )
    for k, regime in enumerate(regimes):
        messages += regime_messages(case, found.plan, regime, k + 1)
    if found.pilot_share < PILOT_LEAST:
        messages.append(
            f"only {found.pilot_share:.2g} of the pilot's points lie in the cells of the regimes: bursts are too short "
            "or too few to leave slow cells, and the numbers describe those cells alone; give longer [bursts] duration "
            "or steps, or more per_cell"
        )
    passed = (
        found.settled
        and not found.drifts
        and found.strayed <= STRAYED_MOST
        and not found.rough
        and found.apart <= APART_MOST
        and found.pilot_share >= PILOT_LEAST
        and all(abs(r.eigenvalue - 1.0) <= 1e-9 for r in regimes)
    )
    if len(regimes) > 1:
        bursts = ", ".join(str(len(r.cell) * found.plan.per_cell) for r in regimes)
        messages.append(
            f"{len(regimes)} regimes: starts end in one of {len(regimes)} separate long runs, each with its own "
            f"density below; of the {bursts} bursts sent from them none left its regime. Weights are for a start "
            "uniform over the cells in use; another law of starts gives others"
        )
        if not case.system.is_flow and found.plan.n_step > 1:
            messages.append(
                f"bursts of {found.plan.n_step} steps cannot tell a regime from a phase of a cycle whose length has a "
                "factor in common with that number; leave [bursts] steps out, or give 1"
            )
        return "several-regimes", tuple(messages), passed
    return ("periodic" if regimes[0].period > 1 else "one-regime"), tuple(messages), passed


def regime_messages(case: CaseRecord, plan: Plan, regime: Regime, number: int) -> list[str]:
    """What is special about a regime."""
    lines = []
    if abs(regime.eigenvalue - 1.0) > 1e-9:
        lines.append(f"regime {number}: its eigenvalue {regime.eigenvalue!r} is not 1 to 1e-9; please report this")
    if regime.period > 1:
        lines.append(
            f"regime {number} is periodic: its cells fall into {regime.period} groups visited in turn every "
            f"{plan.duration:g} {case.system.time_unit}; the shares are averages over the cycle"
        )
    if len(regime.cell) == 1:
        lines.append(
            f"regime {number} is a single cell: a fixed point, or a motion smaller than a cell; its density is as "
            "coarse as the cell; without reseeding its numbers are those of bursts that settle into it"
        )
    return lines
