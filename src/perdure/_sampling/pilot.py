"""The pilot run: what the case leaves open is found from a few hundred short trajectories.

It finds points of the long run from dispersed starts, the rate of the dynamics, the time step, the burst length,
the extent of the cells, and the numbers of bursts. Every choice is a stated rule, and is written down.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from perdure._records import BurstOptions, CellOptions, Floats, System
from perdure.errors import NoAttractorError

__all__ = ["Flight", "Pilot", "burst_length", "further", "local_rate", "pace", "survey", "time_step"]

Advance = Callable[..., int]

N_START = 8192
N_LANE = 256
# Records per lane kept of the survey: 256 lanes give 2e5 points of the long run.
N_RECORD = 800
# A burst is as long as eight times (with noise, which blurs cells by itself, four times) the time in which states
# move by this part of their standard deviation: long against the numerical mixing of a cell, short against the
# memory of slow modes.
MOVED = 0.35
BURST_FACTOR, NOISY_FACTOR = 8.0, 4.0

# Fewest steps of a flow's burst: events are tested at steps, and short visits must not fall between two.
FEWEST_STEPS = 64
# Stands for infinity where quantiles are taken: between two infinities they are not a number.
VAST = 1e300


@dataclass(frozen=True)
class Pilot:
    """A flown pilot.

    Attributes
    ----------
    points : ndarray, shape (n_dim, n)
        States of the long run. Units of the state.
    last : ndarray, shape (n_dim, n_lane)
        The last state of each trajectory.
    rate : float
        Local rate of change of differences (a Lipschitz estimate). Unit: 1 / time; 1 for maps.
    step : float
        Time step used. Unit: time.
    n_start, n_kept : int
        Starts tried, and trajectories that stayed bounded.
    at_rest : bool
        No trajectory moves by more than a thousandth of the range of all.
    """

    points: Floats
    last: Floats
    rate: float
    step: float
    n_start: int
    n_kept: int
    at_rest: bool


class Flight:
    """Calls the burst kernel on plain trajectories, without tallies; `steps` counts what it took."""

    def __init__(self, advance: Advance, parameters: Floats, n_sum: int, rng: np.random.Generator) -> None:
        self.advance = advance
        self.parameters = parameters
        self.n_sum = n_sum
        self.rng = rng
        self.steps = 0

    def fly(self, state: Floats, step: float, n_step: int, stream: NDArray[np.uint64] | None = None) -> Floats:
        """States after `n_step` steps from state (n_dim, n); nan where a trajectory blew up."""
        return self.flown(state, step, n_step, stream)[0]

    def flown(
        self, state: Floats, step: float, n_step: int, stream: NDArray[np.uint64] | None = None
    ) -> tuple[Floats, Floats]:
        """The states, and the kernel's sums (n_sum, n) on the way."""
        n_dim, n = state.shape
        self.steps += n * n_step
        out, sums = np.ascontiguousarray(state, dtype=float).copy(), np.zeros((self.n_sum, n))
        words = np.asarray(self.rng.integers(0, 2**63, n)).astype(np.uint64) if stream is None else stream
        slots = np.zeros((0, n_dim, n), dtype=np.uint16)
        axis = np.zeros(n_dim), np.ones(n_dim)
        self.advance(out, sums, slots, words, self.parameters, step, n_step, n_step, *axis, 3.0)
        return out, sums


def dispersed_starts(system: System, cells: CellOptions, rng: np.random.Generator) -> Floats:
    """Starts, shape (n_dim, N_START): uniform where the domain is given, else at magnitudes from 0.1 to 30."""
    rows = []
    for name in system.state:
        low, high = cells.lower.get(name), cells.upper.get(name)
        magnitude = 10.0 ** rng.uniform(-1.0, 1.5, N_START)
        if low is not None and high is not None:
            rows.append(rng.uniform(low, high, N_START))
        elif low is not None:
            rows.append(low + magnitude * np.abs(rng.standard_normal(N_START)))
        elif high is not None:
            rows.append(high - magnitude * np.abs(rng.standard_normal(N_START)))
        else:
            rows.append(magnitude * rng.standard_normal(N_START))
    return np.array(rows)


def refilled(state: Floats, rng: np.random.Generator) -> Floats:
    """Low bits set at random. Maps that double a binary fraction lose a bit a step and end at 0 without this."""
    return np.asarray(state * (1.0 + 2.0**-48 * rng.uniform(-1.0, 1.0, state.shape)))


def long_flight(flight: Flight, system: System, state: Floats, step: float, n_step: int) -> Floats:
    """Finite states after `n_step` steps; the low bits of maps without noise are refilled on the way."""
    if system.kind != "map":
        return finite_columns(flight.fly(state, step, n_step))
    # refilling sets about five bits, so four may be lost in between
    for _ in range(-(-n_step // 4)):
        state = finite_columns(flight.fly(refilled(state, flight.rng), step, 4))
    return state


def finite_columns(state: Floats) -> Floats:
    return state[:, np.isfinite(state).all(axis=0)]


def near_columns(state: Floats) -> Floats:
    """Trajectories within a million times the median magnitude: from beyond, none comes back in a pilot's time."""
    if not state.shape[1]:
        return state
    magnitude = np.abs(state)
    return state[:, (magnitude <= 1e6 * (1.0 + np.median(magnitude, axis=1, keepdims=True))).all(axis=0)]


def local_rate(flight: Flight, points: Floats) -> float:
    """Median rate at which small differences change: two lanes with one noise, a short time apart.

    Unit: 1 / time. The short time is adapted until a difference changes by 1e-5 to 5 percent.
    """
    n_dim, n = points.shape
    scale = np.maximum(np.std(points, axis=1, keepdims=True), 1e-9 * (1.0 + np.abs(points).mean(axis=1, keepdims=True)))
    nudge = 1e-5 * scale * flight.rng.standard_normal((n_dim, n))
    words = np.asarray(flight.rng.integers(0, 2**63, n)).astype(np.uint64)
    time, rate = 1e-3, 1.0
    for _ in range(40):
        one = flight.fly(points, time, 1, words)
        two = flight.fly(points + nudge, time, 1, words)
        change = np.linalg.norm((two - one - nudge) / scale, axis=0) / np.linalg.norm(nudge / scale, axis=0)
        change = change[np.isfinite(change)]
        part = float(np.quantile(change, 0.75)) if len(change) else np.inf
        rate = part / time
        if part > 0.05:
            time /= 30.0
        elif part < 1e-5:
            if time > 1e9:
                break
            time *= 30.0
        else:
            break
    return max(rate, 1e-9)


def pace(flight: Flight, system: System, state: Floats, bursts: BurstOptions) -> tuple[float, float]:
    """Rate of the dynamics (1 / time) and a time step for plain trajectories, from states (n_dim, n).

    The step is 0.05 over the local rate, and so short that no component moves by more than a tenth of its spread (half
    of it with noise) in a step: neighbours that move alike have a local rate of 0. Lengths are tried from the shortest
    up, because a periodic component that goes round several times seems to stand still.
    """
    rate = local_rate(flight, state)
    step = min(0.05 / rate, bursts.step or np.inf)
    most = 0.5 if system.is_noisy else 0.1
    # starts from which no step can be made, such as a root of a negative number, say nothing of the pace
    state = state[:, np.isfinite(flight.fly(state, step * 2.0**-70, 1)).all(axis=0)]
    if state.shape[1] == 0:
        return rate, step
    spread = state.std(axis=1)
    spread[spread == 0.0] = np.inf
    for halvings in range(70, -1, -1):
        moved = np.abs(flight.fly(state, step * 2.0**-halvings, 1) - state)
        moved = np.where(np.isfinite(moved), moved, VAST)
        if np.any(np.quantile(moved, 0.75, axis=1) > most * spread):
            step *= 2.0 ** -(halvings + 1)
            return max(rate, 0.05 / step), step
    return rate, step


def survey(flight: Flight, system: System, cells: CellOptions, bursts: BurstOptions) -> Pilot:
    """Points of the long run, from dispersed starts.

    Raises
    ------
    NoAttractorError
        Fewer than two of the starts stay bounded.
    """
    starts = dispersed_starts(system, cells, flight.rng)
    step, rate, state = 1.0, 1.0, starts
    for _ in range(6 if system.is_flow else 1):
        # from the starts, then from where they went, until the rate settles
        if system.is_flow:
            before = rate
            rate, step = pace(flight, system, state, bursts)
            if 0.8 < rate / before < 1.25:
                break
        state = near_columns(long_flight(flight, system, state, step, 400))[:, : 4 * N_LANE]
        if state.shape[1] < 2:
            break
    if state.shape[1] >= 2:
        state = long_flight(flight, system, state, step, 20_000 if system.is_flow else 2000)[:, :N_LANE]
    if system.is_flow and state.shape[1] >= 2:
        rate, step = pace(flight, system, state, bursts)
    require_two(state.shape[1])
    records = recorded(flight, system, state, step)
    for _ in range(6):
        if records.shape[2] < 2 or not shrinking(records):
            break
        state = long_flight(flight, system, records[-1], step, 100_000 if system.is_flow else 10_000)
        records = recorded(flight, system, state, step)
    require_two(records.shape[2])
    settled = ~travelling(records)
    records = records[:, :, settled] if settled.sum() >= 2 else records
    n_kept = records.shape[2]
    points = np.moveaxis(records, 1, 0).reshape(len(starts), -1)
    own = np.ptp(records, axis=0).max(axis=1)
    at_rest = bool(np.all(own <= 1e-3 * np.ptp(points, axis=1)))
    return Pilot(points, records[-1], rate, step, N_START, n_kept, at_rest)


def require_two(n_kept: int) -> None:
    """Refuse to go on with fewer than two trajectories."""
    if n_kept < 2:
        raise NoAttractorError(
            f"[system] equations: {N_START - n_kept} of {N_START} pilot trajectories from dispersed starts left all "
            "bounds or became non-finite (a number too large, 0/0, or log or sqrt of a negative number); allowed: a "
            "system with a bounded long run; check the equations and parameters, or give [cells] lower and upper so "
            "that the starts lie in the basin"
        )


def shrinking(records: Floats) -> bool:
    """Whether the range of all trajectories, records (n_record, n_dim, n_lane), still falls: a slow way in."""
    half = len(records) // 2
    early, late = np.ptp(records[:half], axis=(0, 2)), np.ptp(records[half:], axis=(0, 2))
    return bool(np.any(late < 0.8 * early))


def recorded(flight: Flight, system: System, state: Floats, step: float) -> Floats:
    """States along trajectories from state (n_dim, n), (N_RECORD, n_dim, n kept); those that blow up are left out."""
    stride = 25 if system.is_flow else 1
    records = np.full((N_RECORD, *state.shape), np.nan)
    for record in records:
        if system.kind == "map":
            state = refilled(state, flight.rng)
        state = flight.fly(state, step, stride)
        record[:] = state
    return np.asarray(records[:, :, np.isfinite(records).all(axis=(0, 1))])


def further(flight: Flight, system: System, last: Floats, step: float) -> tuple[Floats, Floats]:
    """More points (n_dim, n) along the trajectories that stand at `last`, and where they stand then."""
    records = recorded(flight, system, last, step)
    return np.moveaxis(records, 1, 0).reshape(len(last), -1), records[-1]


def travelling(records: Floats) -> NDArray[np.bool_]:
    """Which trajectories, records (n_record, n_dim, n_lane), are still on a long way in from a far start.

    Between two pieces of its record such a one moves on by about its whole range, and it is or was far from where
    those are that do not.
    """
    pieces = np.array_split(records, 8)
    moving = np.zeros(records.shape[2], dtype=bool)
    for early, late in pairwise(pieces):
        reach = np.maximum(np.ptp(early, axis=0), np.ptp(late, axis=0))
        moving |= ((np.abs(late.mean(axis=0) - early.mean(axis=0)) > 0.7 * reach) & (reach > 0.0)).any(axis=0)
    if moving.all() or not moving.any():
        return np.zeros(records.shape[2], dtype=bool)
    home = records[:, :, ~moving]
    low, high = home.min(axis=(0, 2)), home.max(axis=(0, 2))
    spare = 0.5 * (high - low)
    away = (records < (low - spare)[:, None]) | (records > (high + spare)[:, None])
    return np.asarray(moving & away.any(axis=(0, 1)))


def burst_length(flight: Flight, pilot: Pilot, noisy: bool) -> tuple[float, str]:
    """Burst length and the reason for it. Unit: time."""
    start = pilot.last
    while start.shape[1] < 2048:
        start = np.concatenate([start, start], axis=1)
    spread = pilot.points.std(axis=1)
    spread[spread == 0.0] = 1.0
    state, done, lag = flight.fly(start, pilot.step, 1), 1, 1
    start, state = start[:, np.isfinite(state).all(axis=0)], finite_columns(state)
    limit = 4000
    while True:
        moved = float(np.mean(np.sqrt(np.mean((state - start) ** 2, axis=1)) / spread))
        if moved >= MOVED or done >= limit:
            break
        lag = max(1, done // 8)
        state = flight.fly(state, pilot.step, lag)
        done += lag
        keep = np.isfinite(state).all(axis=0)
        start, state = start[:, keep], state[:, keep]
    if moved < MOVED:
        return 5.0 / pilot.rate, "five times the local time scale (states hardly move along the long run)"
    factor = NOISY_FACTOR if noisy else BURST_FACTOR
    return factor * done * pilot.step, (
        f"{factor:g} times the time in which states move by {MOVED:g} of their standard deviation"
    )


def time_step(
    flight: Flight, pilot: Pilot, duration: float, width: Floats, noisy: bool, scheme: str
) -> tuple[float, int, str]:
    """Time step, steps per burst, and the reason.

    Without noise the step is halved until burst end points agree: the 99 percent quantile of the change on halving
    is below a hundredth of a cell, from `FEWEST_STEPS` a burst on. With noise the step times the local rate is 0.025
    (weak order 2) or 0.002: 0.02 and 0.1 percent of the variance of an Ornstein-Uhlenbeck process.
    """
    if noisy:
        part = 0.025 if scheme == "weak2" else 0.002
        n_step = max(1, int(np.ceil(duration * pilot.rate / part)))
        return duration / n_step, n_step, f"step times local rate of change {part:g} ({scheme})"
    points = pilot.points[:, :: max(1, pilot.points.shape[1] // 1024)]
    n_step = max(FEWEST_STEPS, int(np.ceil(duration * pilot.rate / 0.4)))
    coarse = flight.fly(points, duration / n_step, n_step)
    change = np.inf
    for _ in range(14):
        fine = flight.fly(points, duration / (2 * n_step), 2 * n_step)
        off = np.max(np.abs(fine - coarse) / width[:, None], axis=0)
        change = float(np.quantile(np.where(np.isfinite(off), off, VAST), 0.99))
        if change < 0.01:
            break
        coarse, n_step = fine, 2 * n_step
    why = f"halving it moves burst end points by {change:.1g} of a cell; at least {FEWEST_STEPS} a burst"
    return duration / n_step, n_step, why
