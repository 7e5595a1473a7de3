"""A checked case."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

KINDS = ("map", "noisy-map", "flow", "noisy-flow")


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
    """Table ``[bursts]``. None: found by the pilot. `duration` is for flows, `steps` for maps.

    `reseed`: true, bursts start again where earlier ones arrived; false, only uniformly in their cell; None, the
    program's choice. `sweeps`: the number of reseeded sweeps, 1 or more.
    """

    duration: float | None = None
    steps: int | None = None
    step: float | None = None
    per_cell: int | None = None
    seeds: str = "sobol"
    scheme: str | None = None
    reseed: bool | None = None
    sweeps: int | None = None


@dataclass(frozen=True)
class Budget:
    """What a run that is steered by its accuracy may spend. None: the program's limit.

    Attributes
    ----------
    steps : float or None
        Time steps (steps of a map) of all bursts together.
    minutes : float or None
        Time on the clock.
    memory : float or None
        Bytes.
    """

    steps: float | None = None
    minutes: float | None = None
    memory: float | None = None


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
    accuracy : float or None
        Between 0 and 1: bursts are sent until the 95 percent interval of every event share and return period has a
        half-width below `accuracy` times its value. None: standard effort, nothing is steered.
    text : str
        The case file, verbatim (an equivalent TOML text for a case made in Python).
    source_name : str
        File name without folders, or "<python>".
    """

    title: str
    seed: int
    accuracy: float | None
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
