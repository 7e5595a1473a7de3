"""What a run found."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from perdure._records.case import CaseRecord
from perdure._records.crosscheck import Crosscheck
from perdure._records.engine import BoxGrid, Floats, Integers, Plan, Tally
from perdure._records.quantity import Quantity


@dataclass(frozen=True)
class EventResult:
    """Long-run numbers of one event. Return period and mean spell are in the time unit of the system."""

    share: Quantity
    entry_rate: Quantity
    return_period: Quantity
    mean_spell: Quantity

    @property
    def probability(self) -> Quantity:
        """The share of time spent in the event."""
        return self.share


@dataclass(frozen=True)
class ObservableResult:
    """Long-run mean and variance of an observable."""

    mean: Quantity
    variance: Quantity


@dataclass(frozen=True)
class Marginal:
    """Histogram of one state component along the bursts.

    `edges` has shape (n + 1,), unit of the component; `mass` and `error` (total standard error) have shape (n,), no
    unit; `below` and `above` are the masses beyond the two ends. `parts` holds the standard error of every interval by
    part of the error budget ("sampling", "cells", "step"), `low` and `high` the 95 percent interval of every mass:
    each of shape (n,), no unit; None where it was not worked out.
    """

    edges: Floats
    mass: Floats
    error: Floats
    below: float
    above: float
    unit: str = "1"
    parts: Mapping[str, Floats] = field(default_factory=dict)
    low: Floats | None = None
    high: Floats | None = None


@dataclass(frozen=True)
class Regime:
    """One closed class of cells and its long-run numbers.

    Attributes
    ----------
    weight : Quantity
        Probability of ending in this regime from a start uniform over the cells of the cover.
    cell : ndarray of int64, shape (n,)
        Indices (into `Estimate.keys`) of the cells of the class, ascending.
    mass : ndarray, shape (n,)
        Stationary mass of those cells; sums to one less the share of time outside the domain.
    period : int
        Greatest common divisor of the lengths of its cycles; 1 for an aperiodic chain.
    residual : float
        1-norm of mass @ P - mass.
    eigenvalue : float
        Rayleigh quotient sum(mass @ P) / sum(mass): 1 up to rounding in a closed class.
    """

    weight: Quantity
    cell: Integers
    mass: Floats
    period: int
    residual: float
    eigenvalue: float
    events: Mapping[str, EventResult]
    observables: Mapping[str, ObservableResult]
    marginals: Mapping[str, Marginal]


@dataclass(frozen=True)
class Stage:
    """Where bursts went: one stage of the run.

    Attributes
    ----------
    name : str
        "pilot", "cover", "burn-in", "reseeded", "half step", ...
    sweeps, bursts, steps : int
        Passes over the cells, bursts sent and time steps taken in them.
    seconds : float
        Time on the clock.
    """

    name: str
    sweeps: int
    bursts: int
    steps: int
    seconds: float


@dataclass(frozen=True)
class Target:
    """An accuracy that was asked for, and what was reached.

    Attributes
    ----------
    event : str
    number : str
        "share" or "return_period".
    wanted : float
        Largest half-width of the 95 percent interval over the value. No unit, as `reached`.
    reached : float or None
        None where there is no value.
    met : bool
    reason : str
        What limits it; empty if met.
    uniform : float or None
        Bursts that an even spread over the cells would need for the same sampling error, over those sent.
    """

    event: str
    number: str
    wanted: float
    reached: float | None
    met: bool
    reason: str = ""
    uniform: float | None = None


@dataclass(frozen=True)
class Estimate:
    """Everything a run found; what the density file holds.

    Attributes
    ----------
    outcome : str
        "one-regime", "several-regimes", "periodic" or "leaking".
    messages : tuple of str
        Plain sentences that explain the outcome and every stated check that failed.
    checks_passed : bool
        False sets exit status 1.
    grid : BoxGrid
        Tight around the cells used.
    keys : ndarray of int64, shape (n_cell,)
        Row-major keys in `grid`, ascending: the fixed order of the cells.
    regimes : tuple of Regime
        Largest weight first; empty when the domain leaks without a closed class.
    basins : ndarray of float32, shape (n_cell, n_regime), or None
        Probability of ending in each regime from each cell; None with a single regime and no leak.
    outside_share : Quantity
        Share of time outside the domain in the first regime.
    tally : Tally or None
    timings : mapping of str to float
        Seconds per stage.
    packages : mapping of str to str
        Versions.
    counts : mapping of str to int
        bursts, steps, entries, blown_up, outside, waves.
    effort : tuple of Stage
        Where the bursts went, in the order of the run.
    targets : tuple of Target
        One for each number that `accuracy` asks for; empty where nothing was steered.
    cell_bursts : ndarray of int64, shape (n_cell,), or None
        Bursts sent from each cell of `keys`.
    crosscheck : Crosscheck or None
        What long trajectories say; None where none were flown.
    """

    case: CaseRecord
    plan: Plan
    outcome: str
    messages: tuple[str, ...]
    checks_passed: bool
    grid: BoxGrid
    keys: Integers
    regimes: tuple[Regime, ...]
    basins: NDArray[np.float32] | None
    outside_share: Quantity
    tally: Tally | None
    timings: Mapping[str, float]
    packages: Mapping[str, str]
    counts: Mapping[str, int]
    command: str = ""
    created: str = ""
    effort: tuple[Stage, ...] = ()
    targets: tuple[Target, ...] = ()
    cell_bursts: Integers | None = None
    crosscheck: Crosscheck | None = None
