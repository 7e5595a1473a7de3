"""What long trajectories say of a density."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from perdure._records.engine import Floats
from perdure._records.quantity import Quantity

AGREES, DISAGREES, TOO_SHORT, NONE = "agrees", "disagrees", "too short to tell", "not compared"


@dataclass(frozen=True)
class Comparison:
    """One number of the density beside that of the trajectories.

    Attributes
    ----------
    regime : int
        Index of the regime.
    subject, name, number : str
        "event" or "observable", its name, and which of its numbers ("share", "mean", ...).
    density, trajectories : Quantity
        In the same unit.
    distance : float or None
        Difference over its standard error, trajectories less density. No unit.
    p_value : float or None
        Two-sided, of this number alone.
    verdict : str
        "agrees", "disagrees", "too short to tell" or "not compared".
    reason : str
    effective : mapping of str to float
        Effective sample size of the trajectories: how many independent states give the same error; by "batch means"
        and by the "matrix".
    length : float or None
        Length of each trajectory, the dropped part included, that would do. Unit: time.
    """

    regime: int
    subject: str
    name: str
    number: str
    density: Quantity
    trajectories: Quantity
    distance: float | None
    p_value: float | None
    verdict: str
    reason: str = ""
    effective: Mapping[str, float] = field(default_factory=dict)
    length: float | None = None


@dataclass(frozen=True)
class Distance:
    """A distance between two marginals, and what sampling alone would give on average. The same unit."""

    value: float
    expected: float


@dataclass(frozen=True)
class MarginalComparison:
    """The marginal of one component, from the trajectories and against the density.

    Attributes
    ----------
    edges : ndarray, shape (n + 1,)
        Unit of the component.
    mass, error : ndarray, shape (n,)
        Share of time of the trajectories in each interval and its standard error.
    total_variation, kolmogorov_smirnov : Distance
        No unit.
    wasserstein : Distance
        First Wasserstein distance. Unit of the component.
    p_value : float or None
        Of the interval that is furthest off, allowing for the number of intervals.
    """

    regime: int
    component: str
    edges: Floats
    mass: Floats
    error: Floats
    total_variation: Distance
    kolmogorov_smirnov: Distance
    wasserstein: Distance
    p_value: float | None
    verdict: str
    reason: str = ""
    unit: str = "1"


@dataclass(frozen=True)
class Starts:
    """Are the starts alike?

    Attributes
    ----------
    n_tried, n_lost : int
        Dispersed starts, and those that left all bounds.
    n_trajectory : int
        Trajectories kept: every start has a twin.
    twins_apart : float
        Part of the twins that ended as far from each other as unrelated states are.
    orders_differ : float
        Part of the twins that entered the events in different numbers from batch to batch; 0 without events.
    equal : bool
        No number differs between the starts by more than it does along each of them.
    worst : str
        The number that differs most.
    ratio : float
        Its variance between starts over that from batch to batch along them; near 1 where starts are alike.
    p_value : float
    in_regime : tuple of int
        Trajectories that ended in each regime of the density; the last entry counts those in none.
    moved : int
        Trajectories that went from one regime to another.
    elsewhere : float
        Share of time in cells that the density has not.
    message : str
        What the starts say, in a sentence.
    """

    n_tried: int
    n_lost: int
    n_trajectory: int
    twins_apart: float
    orders_differ: float
    equal: bool
    worst: str
    ratio: float
    p_value: float
    in_regime: tuple[int, ...]
    moved: int
    elsewhere: float
    message: str


@dataclass(frozen=True)
class Growth:
    """How the distance of almost identical pairs grows.

    Attributes
    ----------
    begin, end : float
        Distances, in units of the distance between unrelated states.
    time : Quantity
        Median time from `begin` to `end`.
    early, late : float or None
        Times within which 5 and 95 percent of the pairs got there. Unit: time.
    n_pair, n_parted : int
        Pairs, and those that got there.
    """

    begin: float
    end: float
    time: Quantity
    early: float | None
    late: float | None
    n_pair: int
    n_parted: int


@dataclass(frozen=True)
class Predictability:
    """Lyapunov exponents and what follows from them, of one regime.

    Attributes
    ----------
    exponents : tuple of Quantity
        Largest first; 1 / time.
    total : Quantity
        Their sum along the trajectories: the mean rate of change of volumes.
    total_density : Quantity
        The same from the density.
    distance : float or None
        Difference of the two over its standard error.
    verdict : str
    entropy, dimension : Quantity
    growth : Growth
    hypotheses : tuple of str
        What has to hold for entropy and dimension.
    """

    regime: int
    exponents: tuple[Quantity, ...]
    total: Quantity
    total_density: Quantity
    distance: float | None
    verdict: str
    entropy: Quantity
    dimension: Quantity
    growth: Growth
    hypotheses: tuple[str, ...] = ()


@dataclass(frozen=True)
class Arbiter:
    """A short piece of some trajectories, integrated by another method at a tolerance of 1e-11.

    Attributes
    ----------
    duration : float
        Unit: time.
    n_piece : int
    deviation : float
        Largest distance at the end of a piece between the two methods, in standard deviations of the component.
    """

    duration: float
    n_piece: int
    deviation: float


@dataclass(frozen=True)
class Crosscheck:
    """Long trajectories beside a density.

    Attributes
    ----------
    verdict : str
        Of all numbers together: "agrees", "disagrees" or "too short to tell".
    level : float
        Chance of a "disagrees" in any place where both sides are right.
    messages : tuple of str
    scheme : str
    step : float
        Unit: time.
    duration, dropped : float
        Length of each trajectory, and the part at its beginning that is not used. Unit: time.
    steps : int
        Time steps of all trajectories.
    memory : Quantity
        Time in which the slowest mode of the matrix fades by e.
    cells : Distance
        Total variation between the masses of the cells and the occupation by the trajectories; the expected value is
        that of the trajectories' sampling alone.
    seconds : float
    command, created : str
    """

    verdict: str
    level: float
    messages: tuple[str, ...]
    scheme: str
    step: float
    duration: float
    dropped: float
    steps: int
    memory: Quantity
    comparisons: tuple[Comparison, ...]
    marginals: tuple[MarginalComparison, ...]
    cells: Distance
    starts: Starts
    predictability: tuple[Predictability, ...]
    arbiter: Arbiter | None
    seconds: float = 0.0
    command: str = ""
    created: str = ""
