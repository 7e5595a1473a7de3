"""From the options of a case and the findings of the pilot to the plan of a run."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import OUTSIDE
from perdure._records import BoxGrid, BurstOptions, CaseRecord, CellOptions, Floats, Integers, Plan, System
from perdure._sampling.pilot import Flight, Pilot, burst_length, time_step

__all__ = [
    "PLAIN_PART",
    "Domain",
    "Visited",
    "boxes_per_axis",
    "burst_budget",
    "bursts_per_cell",
    "domain",
    "make_plan",
]

# Boxes along an axis, by dimension, when nothing is given. Reseeded bursts need no small cells.
AXIS_BOXES = {1: 1024, 2: 192, 3: 72, 4: 28, 5: 16, 6: 11}
RESEEDED_BOXES = {1: 512, 2: 96, 3: 40, 4: 20, 5: 12, 6: 9}
# Steps and bursts that a run may spend when nothing is given, and bounds on the plain bursts of a cell: fewest by
# themselves and before reseeding, most.
STEP_BUDGET, BURST_BUDGET = 1.2e9, 4e6
FEWEST, FEWEST_BEFORE, MOST = 32, 16, 4096
# Steps of a reseeded burst with noise, at most: each reseeding sends states on where they count. On a lake that flips
# once in 1600 years, bursts of 64 steps needed 5 times fewer steps than bursts of 1600 for the same error. In one
# dimension alone, where cells are fine: elsewhere sweeps must last long enough for the law inside cells to settle.
SHORT = 64
# Binary digits that a state may lose in a reseeded burst of a map: reseeding gives back about 24 of the 53.
MOST_BITS = 12
# Sweeps that reseeded bursts are reckoned for: with noise, more if the bursts were made short, up to as many as without
# noise, where only merging thins the states and the start takes long to be forgotten.
NOISY_SWEEPS, QUIET_SWEEPS = 48, 400
# Part of them for the plain bursts that reseeded ones follow.
PLAIN_PART = 0.25
# A range this many times that of the middle 99 percent of the states is one of heavy tails.
HEAVY = 4.0
# From this many cells on, their number gives the error bar its degrees of freedom, and four replicates a cell do; with
# fewer the bar would be useless where a single cell dominates.
MANY_CELLS = 4096


@dataclass(frozen=True)
class Domain:
    """Where boxes are laid.

    Attributes
    ----------
    lower, upper : ndarray, shape (n_dim,)
        Ends of the domain. Units of the state.
    given : ndarray of bool, shape (n_dim, 2)
        Ends that the case gives.
    closed : ndarray of bool, shape (n_dim, 2)
        Ends beyond which states are outside: those given, and those of components with heavy tails.
    """

    lower: Floats
    upper: Floats
    given: NDArray[np.bool_]
    closed: NDArray[np.bool_]


@dataclass(frozen=True)
class Visited:
    """Cells that the pilot's points lie in.

    Attributes
    ----------
    keys, n_hit : ndarray of int64, shape (n,)
        Keys, ascending, and the points in each.
    n_point : int
        All points, those outside included.
    """

    keys: Integers
    n_hit: Integers
    n_point: int

    @classmethod
    def none(cls) -> Visited:
        return cls(np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64), 0)

    def joined(self, key: Integers) -> Visited:
        """With more points, whose keys are key (n,)."""
        more, n_more = np.unique(key[key < OUTSIDE], return_counts=True)
        keys, at = np.unique(np.concatenate([self.keys, more]), return_inverse=True)
        n_hit = np.zeros(len(keys), dtype=np.int64)
        np.add.at(n_hit, at, np.concatenate([self.n_hit, n_more]))
        return Visited(keys, n_hit, self.n_point + len(key))

    @property
    def seldom(self) -> int:
        """Cells met once."""
        return int(np.sum(self.n_hit == 1))

    @property
    def expected(self) -> int:
        """Cells that there seem to be, unseen ones included (A. Chao, Scand. J. Statist. 11 (1984) 265-270)."""
        twice = int(np.sum(self.n_hit == 2))
        return len(self.keys) + self.seldom * max(self.seldom - 1, 0) // (2 * (twice + 1))


def domain(system: System, cells: CellOptions, pilot: Pilot) -> Domain:
    """Ends from the case, else from the pilot.

    Nothing is added to the range of the pilot: of many maps the long run ends sharply, and what lies beyond leads
    away. Of a component with heavy tails only the middle 99 percent and half of its range on either side is cut
    into boxes; the rest is the outside state.
    """
    low, high = pilot.points.min(axis=1), pilot.points.max(axis=1)
    bulk_low, bulk_high = np.quantile(pilot.points, [0.005, 0.995], axis=1)
    heavy = high - low > HEAVY * (bulk_high - bulk_low)
    heavy &= bulk_high > bulk_low
    spare = 0.5 * (bulk_high - bulk_low)
    low, high = np.where(heavy, bulk_low - spare, low), np.where(heavy, bulk_high + spare, high)
    still = high - low <= 1e-9 * np.maximum(np.abs(low), np.abs(high))
    half = np.where(still, 5e-3 * np.maximum(1.0, np.abs(high)), 0.0)
    lower = np.array([cells.lower.get(s, v) for s, v in zip(system.state, low - half, strict=True)])
    upper = np.array([cells.upper.get(s, v) for s, v in zip(system.state, high + half, strict=True)])
    given = np.array([[s in cells.lower, s in cells.upper] for s in system.state])
    return Domain(lower, upper, given, given | heavy[:, None])


def boxes_per_axis(
    system: System, cells: CellOptions, pilot: Pilot, *, reseeded: bool, coarse: bool
) -> tuple[Integers, str]:
    """Boxes between lower and upper on each axis, shape (n_dim,), and the reason; half of the usual if `coarse`."""
    n_dim = len(system.state)
    usual = (RESEEDED_BOXES if reseeded else AXIS_BOXES).get(n_dim, 8) // (2 if coarse else 1)
    if pilot.at_rest:
        # a fixed point in the middle of a symmetric range must not lie on an edge between two boxes
        usual -= 1
    reason = f"{usual} per axis in {n_dim} dimension{'s' if n_dim > 1 else ''}"
    if cells.count is not None:
        usual = max(1, round(cells.count ** (1.0 / n_dim)))
        reason = "from [cells] count"
    return np.array([cells.counts.get(s, usual) for s in system.state], dtype=np.int64), reason


def burst_budget(n_step: int) -> float:
    """Bursts that a run may spend when nothing is given."""
    return min(STEP_BUDGET / n_step, BURST_BUDGET)


def bursts_per_cell(bursts: BurstOptions, n_cell: int, n_step: int, effort: float = 1.0) -> tuple[int, int, str]:
    """Plain bursts per cell, replicates, and the reason; `effort` is the part of the usual budget to spend."""
    n_replicate = 4 if n_cell >= MANY_CELLS else 8
    if bursts.per_cell is not None:
        per_cell = bursts.per_cell
        while per_cell % n_replicate or per_cell // n_replicate < 2:
            n_replicate //= 2
            if n_replicate < 2:
                # an odd number of bursts: one more makes two equal replicates
                per_cell, n_replicate = per_cell + per_cell % 2, 2
                break
        return per_cell, n_replicate, ""
    plain = bursts.reseed is False
    share = effort * burst_budget(n_step) * (1.0 if plain else PLAIN_PART) / n_cell
    per_cell = int(2 ** np.floor(np.log2(np.clip(share, FEWEST if plain else FEWEST_BEFORE, MOST))))
    which = "" if plain else ", a quarter of them before reseeding"
    return (
        per_cell,
        n_replicate,
        f"about {effort * STEP_BUDGET:g} steps or {effort * BURST_BUDGET:g} bursts from the pilot's cells{which}, "
        f"{FEWEST if plain else FEWEST_BEFORE} to {MOST} per cell",
    )


def bits_per_step(flight: Flight, pilot: Pilot) -> float:
    """Mean binary logarithm of the factor by which a map parts neighbours in a step; 0 where it does not."""
    points = pilot.points[:, :: max(1, pilot.points.shape[1] // 4096)]
    scale = points.std(axis=1, keepdims=True) + 1e-300
    apart = 1e-8 * scale
    moved = np.abs(flight.fly(points + apart, 1.0, 1) - flight.fly(points, 1.0, 1)) / apart
    # neighbours on either side of a jump say nothing
    growth = moved.max(axis=0)
    growth = growth[np.isfinite(growth) & (growth > 0.0) & (growth < 1e5)]
    return float(max(np.mean(np.log2(growth)), 0.0)) if len(growth) else 0.0


def burst_and_step(
    case: CaseRecord, pilot: Pilot, flight: Flight, width: Floats, scheme: str
) -> tuple[float, int, int, dict[str, str]]:
    """Time step, steps per burst, what these would be but for reseeding, and the reasons of what was found."""
    system, options, found = case.system, case.bursts, dict[str, str]()
    if not system.is_flow:
        if options.steps is not None:
            return 1.0, options.steps, options.steps, found
        length, why = burst_length(flight, pilot, system.is_noisy)
        n_step = max(1, round(length))
        found["burst length"] = why
        most = MOST_BITS / max(bits_per_step(flight, pilot), 1e-9)
        if not system.is_noisy and options.reseed is not False and n_step > most:
            n_step = max(1, int(most))
            found["burst length"] = f"{MOST_BITS} bits: a map that expands loses digits of the state at every step"
        return 1.0, n_step, n_step, found
    duration = options.duration
    if duration is None:
        duration, found["burst length"] = burst_length(flight, pilot, system.is_noisy)
        if options.step is not None:
            duration = max(duration, options.step)
    if options.step is not None:
        n_step = max(1, round(duration / options.step))
        return duration / n_step, n_step, n_step, found
    step, n_step, found["time step"] = time_step(flight, pilot, duration, width, system.is_noisy, scheme)
    natural, one = n_step, len(system.state) == 1
    if options.duration is None and options.reseed is not False and system.is_noisy and one and n_step > SHORT:
        n_step, found["burst length"] = SHORT, f"{SHORT} steps: in one dimension reseeded bursts part best when short"
    return step, n_step, natural, found


def sweeps_of(case: CaseRecord, n_step: int, natural: int) -> int:
    """Sweeps of reseeded bursts of `n_step` steps, to last as long as those of `natural` steps would."""
    if not case.system.is_noisy:
        return QUIET_SWEEPS
    return int(np.clip(NOISY_SWEEPS * natural / n_step, NOISY_SWEEPS, QUIET_SWEEPS))


def make_plan(
    case: CaseRecord,
    pilot: Pilot,
    flight: Flight,
    scheme: str,
    grid: BoxGrid,
    ends: Domain,
    visited: Visited,
    found: Mapping[str, str],
    effort: float = 1.0,
) -> Plan:
    """Plan of the run; `found` are the reasons so far."""
    seed_keys = visited.keys
    step, n_step, natural, more = burst_and_step(case, pilot, flight, grid.width, scheme)
    reasons = dict(found) | more
    per_cell, n_replicate, why = bursts_per_cell(case.bursts, visited.expected, n_step, effort)
    if why:
        reasons["bursts per cell"] = why
    return Plan(
        grid=grid,
        bounded=bool(ends.closed.any()),
        seed_keys=seed_keys,
        seed_share=visited.n_hit / visited.n_hit.sum(),
        step=step,
        n_step=n_step,
        per_cell=per_cell,
        n_replicate=n_replicate,
        stride=max(1, n_step // 8),
        scheme=scheme,
        axis_lower=ends.lower,
        axis_upper=ends.upper,
        found=reasons,
        pilot={
            "starts": pilot.n_start,
            "kept": pilot.n_kept,
            "points": visited.n_point,
            "steps": flight.steps,
            "sweeps": sweeps_of(case, n_step, natural),
            "rate": pilot.rate,
            "cells": len(seed_keys),
            "cells_expected": visited.expected,
        },
    )
