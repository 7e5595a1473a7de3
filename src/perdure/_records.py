"""Frozen records that the rooms hand each other. Data only: no room's work is done here."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

KINDS = ("map", "noisy-map", "flow", "noisy-flow")


# --------------------------------------------------------------------------------------------- the case


@dataclass(frozen=True)
class Expression:
    """A checked arithmetic expression or condition.

    Attributes
    ----------
    text : str
        As the user wrote it (or as perdure words it, for balls and boxes).
    source : str
        Python source for a kernel: every name carries the prefix ``v_`` (state, parameter, draw),
        every function the prefix ``f_``; floats only; conditions use ``&``, ``|`` and ``f_not``.
    names : frozenset of str
        The names used, without prefix.
    """

    text: str
    source: str
    names: frozenset[str]


@dataclass(frozen=True)
class Parameter:
    """A named number of the system: value, unit ("1" where it has none) and what it means."""

    value: float
    unit: str = "1"
    doc: str = ""


@dataclass(frozen=True)
class System:
    """The dynamics.

    Attributes
    ----------
    kind : str
        One of `KINDS`.
    state : tuple of str
        Names of the state components, in order.
    units : tuple of str
        Unit of each component; "1" where it has none.
    time_unit : str
        Unit of time of a flow; "step" for a map unless given.
    parameters : mapping of str to Parameter
    equations : tuple of Expression
        dx/dt of each component (flows) or its next value (maps). Empty with `function`.
    noise : tuple of tuple of Expression
        Ito coefficients, a row per state component, a column per Wiener process. Empty without noise.
    draws : tuple of (str, str)
        Name and law ("normal" or "uniform") of each standard draw of a noisy map.
    function : callable or None
        Instead of `equations`: ``function(*state, *parameters[, *draws])`` returns a float (one component)
        or a tuple of floats; numba must be able to compile it.
    noise_function : callable or None
        Noisy flows given by a function: same arguments, returns the coefficients of the noise in row order
        (one component: a float; diagonal noise: one value per component).
    """

    kind: str
    state: tuple[str, ...]
    units: tuple[str, ...]
    time_unit: str
    parameters: Mapping[str, Parameter]
    equations: tuple[Expression, ...] = ()
    noise: tuple[tuple[Expression, ...], ...] = ()
    draws: tuple[tuple[str, str], ...] = ()
    function: Callable[..., Any] | None = None
    noise_function: Callable[..., Any] | None = None

    @property
    def is_flow(self) -> bool:
        return self.kind in ("flow", "noisy-flow")

    @property
    def is_noisy(self) -> bool:
        return self.kind in ("noisy-map", "noisy-flow")


@dataclass(frozen=True)
class Event:
    """A named region of state space, as a condition on the state; `until` ends a spell (hysteresis)."""

    name: str
    condition: Expression
    until: Expression | None = None


@dataclass(frozen=True)
class Observable:
    """A named function of the state, averaged over the long run."""

    name: str
    expression: Expression
    unit: str = "1"


@dataclass(frozen=True)
class CellOptions:
    """Table ``[cells]``. None or empty: found by the pilot. Mappings are keyed by state name."""

    lower: Mapping[str, float] = field(default_factory=dict)
    upper: Mapping[str, float] = field(default_factory=dict)
    counts: Mapping[str, int] = field(default_factory=dict)
    count: int | None = None
    periodic: tuple[str, ...] = ()


@dataclass(frozen=True)
class BurstOptions:
    """Table ``[bursts]``. None: found by the pilot. `duration` is for flows, `steps` for maps."""

    duration: float | None = None
    steps: int | None = None
    step: float | None = None
    per_cell: int | None = None
    seeds: str = "sobol"
    scheme: str | None = None
    reseed: bool | None = None
    sweeps: int | None = None


@dataclass(frozen=True)
class OutputOptions:
    """Table ``[output]``: `matrix` keeps the tally in the file; `intervals` is the number per marginal axis."""

    matrix: bool = True
    intervals: int = 50


@dataclass(frozen=True)
class CaseRecord:
    """A whole case, checked.

    Attributes
    ----------
    text : str
        The case file, verbatim (an equivalent TOML text for a case made in Python).
    source_name : str
        File name without folders, or "<python>".
    """

    title: str
    seed: int
    accuracy: float
    caution: str
    system: System
    events: tuple[Event, ...]
    observables: tuple[Observable, ...]
    cells: CellOptions
    bursts: BurstOptions
    output: OutputOptions
    crosscheck: Mapping[str, Any]
    study: Mapping[str, Any]
    text: str
    source_name: str


# ------------------------------------------------------------------------------------------- the engine


@dataclass(frozen=True)
class BoxGrid:
    """Equal boxes on a regular lattice.

    Attributes
    ----------
    lower : ndarray, shape (n_dim,)
        Lower corner of the lattice. Units of the state.
    width : ndarray, shape (n_dim,)
        Edge lengths of a box. Units of the state.
    counts : ndarray of int64, shape (n_dim,)
        Boxes per axis. The key of a box is its row-major index (last component fastest).
    periodic : ndarray of bool, shape (n_dim,)
        Axes that wrap around.
    """

    lower: Floats
    width: Floats
    counts: Integers
    periodic: NDArray[np.bool_]

    @property
    def n_dim(self) -> int:
        return len(self.width)

    @property
    def volume(self) -> float:
        """Volume of a box, product of the state units."""
        return float(np.prod(self.width))

    def indices(self, keys: Integers) -> Integers:
        """Index along each axis, shape (n, n_dim), of box keys, shape (n,)."""
        return np.stack(np.unravel_index(keys, tuple(int(n) for n in self.counts)), axis=1).astype(np.int64)

    def centres(self, keys: Integers) -> Floats:
        """Centres, shape (n, n_dim), of box keys, shape (n,). Units of the state."""
        return self.lower + (self.indices(keys) + 0.5) * self.width


def density_unit(units: tuple[str, ...]) -> str:
    """Unit of a density: 1 over the product of the units of the state components ("1" where none has a unit)."""
    named = [f"({unit})" if set(unit) & set(" */") else unit for unit in units if unit != "1"]
    if not named:
        return "1"
    return f"1/{named[0]}" if len(named) == 1 else f"1/({' * '.join(named)})"


@dataclass(frozen=True)
class Plan:
    """What is to be run: given by the case or found by the pilot (`found` names those, with the reason).

    Attributes
    ----------
    grid : BoxGrid
    bounded : bool
        True if the domain was given: what leaves it is in the outside state. False: the lattice extends as
        far as bursts go.
    seed_keys : ndarray of int64
        Sorted keys of the cells that pilot trajectories visited.
    seed_share : ndarray, shape of `seed_keys`
        Part of the pilot's points in each.
    step : float
        Time step (1 for maps). Unit: time.
    n_step : int
        Steps of a burst.
    per_cell, n_replicate : int
        Bursts of a cell, and the number of independent replicates that they are split into.
    stride : int
        Marginals are tallied every `stride` steps along a burst.
    scheme : str
        "map", "rk4", "euler-maruyama" or "weak2".
    axis_lower, axis_upper : ndarray, shape (n_dim,)
        Range of the marginal histograms. Units of the state.
    """

    grid: BoxGrid
    bounded: bool
    seed_keys: Integers
    seed_share: Floats
    step: float
    n_step: int
    per_cell: int
    n_replicate: int
    stride: int
    scheme: str
    axis_lower: Floats
    axis_upper: Floats
    found: Mapping[str, str]
    pilot: Mapping[str, float]

    @property
    def duration(self) -> float:
        """Length of a burst. Unit: time."""
        return self.step * self.n_step


@dataclass(frozen=True)
class Tally:
    """Counts of bursts from cell to cell, by replicate, as compressed rows.

    Attributes
    ----------
    pointer : ndarray of int64, shape (n_cell + 1,)
    column : ndarray of int32, shape (n_entry,)
        Target cell; `n_cell` is outside, `n_cell + 1` blown up: states without a row. Ascending in a row. Where
        bursts left the domain and came back, the outside state has a row: it is the last cell.
    count : ndarray of unsigned int, shape (n_entry, n_replicate)
    bursts : ndarray of int64, shape (n_cell, n_replicate)
        Bursts sent from each cell: the row sums.
    """

    pointer: Integers
    column: NDArray[np.int32]
    count: NDArray[Any]
    bursts: Integers

    @property
    def n_cell(self) -> int:
        return len(self.pointer) - 1


@dataclass(frozen=True)
class SlotRows:
    """Marginal counts of every cell, as compressed rows.

    Attributes
    ----------
    pointer : ndarray of int64, shape (n_cell + 1,)
    column : ndarray of uint16, shape (n_entry,)
        k * (n_interval + 2) + s for component k; slot 0 is below the axis, the last slot above it.
    count : ndarray of unsigned int, shape (n_entry, n_replicate)
    n_sample : int
        Points tallied along each burst.
    n_interval : int
    """

    pointer: Integers
    column: NDArray[np.uint16]
    count: NDArray[Any]
    n_sample: int
    n_interval: int


@dataclass(frozen=True)
class Exits:
    """Bursts that ended outside the domain.

    Attributes
    ----------
    point : ndarray, shape (n_dim, n_exit)
        Where they stood. Units of the state.
    cell, replicate : ndarray of int, shape (n_exit,)
        Where they came from.
    """

    point: Floats
    cell: NDArray[Any]
    replicate: Integers


class Transition(Protocol):
    """Row-stochastic matrix of a `Tally`; vectors have one entry per cell."""

    tally: Tally

    @property
    def n_cell(self) -> int: ...

    def left(self, mass: Floats) -> Floats:
        """mass @ P, shape (n_cell,) or (n_cell, k)."""
        ...

    def right(self, values: Floats) -> Floats:
        """P @ values, shape (n_cell,) or (n_cell, k)."""
        ...

    def replicate_right(self, values: Floats, begin: int, end: int) -> Floats:
        """Mean of values (n_cell, k) where bursts ended, by cell and replicate: (end - begin, n_replicate, k)."""
        ...

    def scatter(self, weight: Floats, begin: int, out: Floats) -> None:
        """Add count * weight, weight (n, n_replicate, k) from cell `begin` on, to out (n_cell + 2, k)."""
        ...


# ------------------------------------------------------------------------------------------- the results


@dataclass(frozen=True)
class Quantity:
    """A number with its 95 percent interval and the parts of its error.

    Attributes
    ----------
    value, low, high : float or None
        None where there is no number; then `reason` says why. For an event never seen `value` is None,
        `low` 0 and `high` an upper bound.
    parts : mapping of str to float
        Standard errors by part of the error budget ("sampling", ...). Same unit as `value`.
    unit : str
        "1" where it has none.
    reason : str
        Empty for an ordinary number.
    """

    value: float | None
    low: float | None
    high: float | None
    parts: Mapping[str, float] = field(default_factory=dict)
    unit: str = "1"
    reason: str = ""

    @property
    def error(self) -> float | None:
        """Standard error: the parts added in quadrature. None without a value."""
        if self.value is None:
            return None
        return float(np.sqrt(sum(part * part for part in self.parts.values())))


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

    `edges` has shape (n + 1,), unit of the component; `mass` and `error` (standard error) have shape (n,), no
    unit; `below` and `above` are the masses beyond the two ends.
    """

    edges: Floats
    mass: Floats
    error: Floats
    below: float
    above: float
    unit: str = "1"


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
