"""Tangent vectors along trajectories: growth rates, volumes, and the parting of almost identical pairs.

Tangent vectors are copies of a trajectory a ten-millionth of its spread away, on the same noise, put back after every
few steps (G. Benettin, L. Galgani, A. Giorgilli, J.-M. Strelcyn, Meccanica 15 (1980) 9-30, with differences in place of
the linearised equations). So no derivatives are needed, and a system given by a Python function is like any other.
Where a copy ends far away, a jump of the equations may have fallen between the two: it is then tried on the other side.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from perdure._crosscheck.flight import N_SLICE
from perdure._kernels.tangent import orthonormalise
from perdure._records import Floats, Integers

__all__ = ["APART", "Bare", "Parting", "Stretching", "parting", "stretching", "volume_rates"]

APART = 1e-7
# Distance of a copy, over the spread of the long run, that is far: stretched ten thousandfold.
FAR = 1e4 * APART
# Rounding of a difference of two states, over their distance.
LOST = 2e-9
# Largest part of a state that is drawn anew.
STIR = 2.0**-36
# Steps of all copies in one go of a worker: long against the time a call takes to start.
ROUND = 64
# Distances of a pair, over that of unrelated states, between which its growth is timed.
BEGIN, END = 1e-8, 0.1


@dataclass(frozen=True)
class Bare:
    """The trajectory kernel without events and observables.

    Attributes
    ----------
    follow : callable
    parameters : ndarray
    step : float
        Unit: time.
    together : int
        Steps of a call are a multiple of this.
    scale, middle : ndarray, shape (n_dim,)
        Spread of the long run, and the middle of its domain. Units of the state.
    period : ndarray, shape (n_dim,)
        0 for components that do not wrap.
    magnitude : float
        Largest magnitude over spread of a component: differences lose so much to rounding.
    stirred : bool
        A map that loses bits: low ones are drawn anew between steps.
    moved : float
        Part of the way to the middle that a step of a map begins nearer.
    """

    follow: Callable[..., int]
    parameters: Floats
    step: float
    together: int
    scale: Floats
    middle: Floats
    period: Floats
    magnitude: float
    stirred: bool
    moved: float

    @property
    def low(self) -> float:
        return LOST * max(self.magnitude, 1.0)

    def floor(self, n_step: int) -> float:
        """What differences leave open in a rate over so many steps: their size, and their rounding; 1 / time."""
        return max(APART, self.low) / (n_step * self.step)

    def joint(self, state: Floats, k: int, apart: float) -> Floats:
        """Trajectories (n_dim, n) and k copies of each, along the axes in turn; shape (n_dim, 1 + k, n)."""
        made = np.repeat(state[:, None, :], 1 + k, axis=1)
        for j in range(k):
            made[j % len(state), j + 1] += apart * self.scale[j % len(state)]
        return np.ascontiguousarray(made)

    def fly(self, joint: Floats, n_step: int, rng: np.random.Generator, counts: Integers) -> None:
        """Fly trajectories and their copies, on the same noise."""
        self.flown(joint, n_step, drawn_words(rng, joint.shape[2]), counts)

    def fly_tangents(self, joint: Floats, n_step: int, rng: np.random.Generator, counts: Integers) -> None:
        """As `fly`; copies that end far away are flown once more on the other side, and stay where they are nearer."""
        before, words = joint.copy(), drawn_words(rng, joint.shape[2])
        self.flown(joint, n_step, words, counts)
        reach = self.reach(joint)
        far = np.flatnonzero(reach > FAR)
        if len(far):
            other = np.ascontiguousarray(before[:, :, far])
            other[:, 1:] = 2.0 * other[:, :1] - other[:, 1:]
            self.flown(other, n_step, words[far], self.no_counts(other.shape[1] * len(far)))
            nearer = self.reach(other) < reach[far]
            joint[:, :, far[nearer]] = other[:, :, nearer]

    def reach(self, joint: Floats) -> Floats:
        """Largest distance of a copy from its trajectory along a component, over the spread; shape (n,)."""
        gap = joint[:, 1:] - joint[:, :1]
        wraps = self.period > 0.0
        period = self.period[wraps, None, None]
        gap[wraps] -= period * np.floor(gap[wraps] / period + 0.5)
        return np.asarray(np.abs(gap / self.scale[:, None, None]).max(axis=(0, 1)))

    def flown(self, joint: Floats, n_step: int, words: NDArray[np.uint64], counts: Integers) -> None:
        n_dim, copies, n = joint.shape
        words = np.tile(words, copies)
        flat = joint.reshape(n_dim, copies * n)
        never = n_step + 1
        self.follow(
            flat, np.zeros((0, copies * n)), counts, np.empty((0, n_dim, copies * n)), words, self.parameters,
            self.step, n_step, never, never, self.middle - 0.5, np.ones(n_dim), np.uint64(0), self.moved,
        )  # fmt: skip

    def no_counts(self, n: int) -> Integers:
        return np.zeros((n, len(self.scale), 3), dtype=np.int64)


def drawn_words(rng: np.random.Generator, n: int) -> NDArray[np.uint64]:
    """Words, shape (n,), that begin the random streams of n trajectories."""
    return np.asarray(rng.integers(0, 2**64, n, dtype=np.uint64))


@dataclass(frozen=True)
class Stretching:
    """Growth rates of the tangent vectors.

    Attributes
    ----------
    rate : ndarray, shape (k, n)
        Mean rate along each trajectory, 1 / time, after a quarter was dropped; nan where a trajectory was lost.
    lost : ndarray, shape (k,)
        Part of the QR steps at which a vector was lost in rounding.
    steps : int
        Steps of all trajectories and copies.
    """

    rate: Floats
    lost: Floats
    steps: int


def stretching(
    bare: Bare,
    state: Floats,
    k: int,
    n_step: int,
    rngs: list[np.random.Generator],
    workers: int,
    enough: Callable[[Floats], bool],
    limit: float,
    progress: Callable[[int, int], None],
) -> Stretching:
    """Growth rates of k tangent vectors along trajectories from states (n_dim, n) of the long run.

    Parameters
    ----------
    n_step : int
        Steps between two QR steps.
    rngs : list
        One for each part that the trajectories are cut into.
    enough : callable
        Told the rates so far; True ends the flight.
    limit : float
        Most steps of all trajectories and copies.
    """
    parts = [part for part in np.array_split(np.arange(state.shape[1]), len(rngs)) if len(part)]
    joints = [bare.joint(state[:, part], k, APART) for part in parts]
    tallies = [bare.no_counts(joint.shape[1] * joint.shape[2]) for joint in joints]
    total, per_round = 0, n_step * (k + 1) * state.shape[1]
    slices: list[Floats] = []
    lost, n_qr, length = np.zeros(k, dtype=np.int64), 0, max(1, int(limit / 64 / per_round / N_SLICE))

    def slice_of(at: int) -> tuple[Floats, Integers]:
        growth, gone = np.zeros((k, joints[at].shape[2])), np.zeros(k, dtype=np.int64)
        for _ in range(length):
            bare.fly_tangents(joints[at], n_step, rngs[at], tallies[at])
            orthonormalise(joints[at], bare.scale, bare.period, APART, bare.low, growth, gone)
            if bare.stirred:
                stir(joints[at], rngs[at])
        return growth, gone

    with ThreadPoolExecutor(workers) as pool:
        while True:
            if slices:
                slices = [a + z for a, z in zip(slices[::2], slices[1::2], strict=True)]
                length *= 2
            while len(slices) < N_SLICE:
                done = list(pool.map(slice_of, range(len(parts))))
                slices.append(np.concatenate([growth for growth, _ in done], axis=1))
                lost += np.sum([gone for _, gone in done], axis=0)
                n_qr += length * state.shape[1]
                total += length * per_round
                progress(min(int(total), int(limit)), int(limit))
            time = length * n_step * bare.step
            rate = np.mean(slices[N_SLICE // 4 :], axis=0) / time
            if enough(rate) or 2 * total > limit:
                end = np.concatenate([joint[:, 0] for joint in joints], axis=1)
                rate[:, ~np.isfinite(end).all(axis=0)] = np.nan
                return Stretching(rate, lost / max(n_qr, 1), total)


def stir(joint: Floats, rng: np.random.Generator) -> None:
    """Draw the low bits of trajectories anew, and take their copies along (n_dim, copies, n).

    Towards 0, as the kernel of the trajectories does.
    """
    joint -= joint[:, :1] * (STIR * rng.random(joint.shape[2]))


def volume_rates(bare: Bare, state: Floats, n_step: int, rng: np.random.Generator) -> Floats:
    """Rate at which volumes change from each of the states (n_dim, n): ln |det| of a few steps over their length.

    Unit: 1 / time. nan where the steps leave all bounds.
    """
    n_dim, n = state.shape
    out = np.empty(n)
    for at in range(0, n, 4096):
        part = np.ascontiguousarray(state[:, at : at + 4096])
        joint = bare.joint(part, n_dim, APART)
        bare.fly_tangents(joint, n_step, rng, bare.no_counts(joint.shape[1] * joint.shape[2]))
        growth, gone = np.zeros((n_dim, part.shape[1])), np.zeros(n_dim, dtype=np.int64)
        finite = np.isfinite(joint).all(axis=(0, 1))
        orthonormalise(joint, bare.scale, bare.period, APART, bare.low, growth, gone)
        out[at : at + 4096] = np.where(finite, growth.sum(axis=0), np.nan)
    return out / (n_step * bare.step)


@dataclass(frozen=True)
class Parting:
    """Times, shape (n,), at which pairs had parted from `BEGIN` to `END`; inf where they did not. Unit: time."""

    time: Floats


def parting(bare: Bare, state: Floats, n_step: int, longest: float, rng: np.random.Generator) -> Parting:
    """Let almost identical pairs part, from states (n_dim, n), on the same noise; for at most the time `longest`."""
    n_dim, n = state.shape
    direction = rng.standard_normal((n_dim, n))
    # between unrelated states the mean square distance of a component is twice its variance
    direction *= BEGIN * np.sqrt(2.0 * n_dim) / np.linalg.norm(direction, axis=0)
    joint = np.ascontiguousarray(np.stack([state, state + direction * bare.scale[:, None]], axis=1))
    counts = bare.no_counts(2 * n)
    time, before = np.full(n, np.inf), np.full(n, BEGIN)
    dt = n_step * bare.step
    for k in range(max(1, int(np.ceil(longest / dt)))):
        bare.fly(joint, n_step, rng, counts)
        if bare.stirred:
            stir(joint, rng)
        distance = relative_distance(bare, joint[:, 1] - joint[:, 0])
        here = np.isinf(time) & (distance >= END)
        part = np.log(END / before[here]) / np.maximum(np.log(distance[here] / before[here]), 1e-12)
        time[here] = (k + np.clip(part, 0.0, 1.0)) * dt
        before = np.maximum(distance, 1e-300)
        if np.isfinite(time).mean() > 0.98:
            break
    return Parting(time)


def relative_distance(bare: Bare, gap: Floats) -> NDArray[np.float64]:
    """Distances of pairs from their gaps (n_dim, n), over that of unrelated states."""
    period = bare.period[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        gap = np.where(period > 0.0, gap - period * np.floor(gap / period + 0.5), gap)
    return np.asarray(np.sqrt(np.mean((gap / bare.scale[:, None]) ** 2, axis=0) / 2.0))
