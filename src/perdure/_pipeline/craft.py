"""What a crosscheck flies: kernels, streams, time step, and what is written down on the way."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from functools import cached_property

import numpy as np

from perdure._case import Case
from perdure._case.dynamics import right_hand_side
from perdure._crosscheck.arbiter import arbitrated
from perdure._crosscheck.flight import MOST_PER_CALL, N_SLICE, Setting, Stir
from perdure._crosscheck.tangents import Bare
from perdure._kernels.generate import LANES
from perdure._pipeline.watch import Progress
from perdure._records import Arbiter, Estimate, Floats
from perdure._sampling import Flight as BurstFlight
from perdure._sampling import kernel_for, parameter_values, trajectories_for
from perdure._spectrum import ClassSolver
from perdure._streams import generator
from perdure._transitions import TransitionMatrix

__all__ = ["Craft", "spread_of"]

# Steps between points of histograms, and the fewest between points of cells.
STRIDE, EVERY = 64, 256
# Low bits drawn anew, at every step, of a map that loses them: as many as it loses, up to a factor of 256, and as many
# more as a state near 0 has zeros ahead.
# Every step of a map begins a random part of at most `MOVED` nearer the middle, unless states are attracted.
MOVED = 2.0**-49
LOSING, STILL = Stir(24, MOVED), Stir(0, 0.0)
# States, and steps in which a map that loses bits brings them together.
N_TRIED, FORGETS_IN = 256, 512
# Steps after which a point or a cycle that attracts has pulled neighbours nearer.
HELD_FOR = 8
# Pieces that are given to the arbiter, and their length in times in which neighbours part by e.
N_PIECE, PIECE = 16, 5.0


class Craft:
    """Kernels, streams and settings of one crosscheck.

    Attributes
    ----------
    rng, draws, tangents : numpy.random.Generator
        For starts, for points in cells and expected distances, and for exponents.
    blocks : list of numpy.random.Generator
        One for each block of trajectories.
    step : float
        Unit: time.
    burst : int
        Steps in the length of a burst of the density.
    """

    def __init__(self, held: Estimate, case: Case, n_start: int, workers: int, report: Progress) -> None:
        self.held, self.case, self.n_start, self.workers, self.report = held, case, n_start, workers, report
        report("compile", 0, 1)
        self.full, self.plain = trajectories_for(case), trajectories_for(case, bare=True)
        n_block = -(-2 * n_start // LANES)
        self.rng, self.draws, self.tangents, *self.blocks = generator(case.seed, "crosscheck").spawn(3 + n_block)
        plan, system = held.plan, case.system
        self.step = plan.step
        if system.kind == "noisy-flow":
            # of the schemes with noise there is one of each order: a shorter step stands in for another one
            self.step = 0.5 * plan.step
        self.lower, self.upper = plan.axis_lower, plan.axis_upper
        self.period = np.where(held.grid.periodic, held.grid.counts * held.grid.width, 0.0)
        burst = max(1, round(plan.duration / self.step))
        self.burst = burst
        # states of a map forget each other in a few steps, those of a flow in a good part of a burst
        self.stride = max(STRIDE if system.is_flow else 1, self.full.together)
        self.every = self.stride * max(1, min(max(EVERY, burst), MOST_PER_CALL) // self.stride)
        self.centres = self.means()
        self.stir = STILL
        self.solvers: dict[int, ClassSolver] = {}
        self.bare = self.bare_setting(0.5 * (self.upper - self.lower))

    @cached_property
    def transition(self) -> TransitionMatrix:
        """Matrix of the density; only where its tally was kept."""
        assert self.held.tally is not None, "only asked for with a tally"
        return TransitionMatrix(self.held.tally)

    def solver(self, regime: int) -> ClassSolver:
        """Solver of the class of a regime, made once."""
        if regime not in self.solvers:
            members = self.held.regimes[regime].cell
            if self.transition.n_cell > len(self.held.keys) and self.held.regimes[regime].mass.sum() < 1.0 - 1e-12:
                # the outside state belongs to the class
                members = np.append(members, len(self.held.keys))
            self.solvers[regime] = ClassSolver(self.transition, members)
        return self.solvers[regime]

    # ----------------------------------------------------------------------------------- settings

    def means(self) -> Floats:
        """Means of the observables in the first regime, which sums are taken about; 0 where there is none."""
        numbers = self.held.regimes[0].observables.values()
        return np.array([o.mean.value or 0.0 for o in numbers])

    def cut(self, duration: float) -> int:
        """Steps of a whole record of this length, rounded up; points are taken oftener where it is short."""
        together = self.full.together
        length = together * max(1, math.ceil(duration / self.step / N_SLICE / together - 1e-9))
        self.every = min(self.every, length)
        self.stride = min(self.stride, length)
        return length * N_SLICE

    def bare_setting(self, scale: Floats) -> Bare:
        middle = np.maximum(np.abs(self.lower), np.abs(self.upper))
        return Bare(
            follow=self.plain.follow,
            parameters=parameter_values(self.case),
            step=self.step,
            together=self.plain.together,
            scale=scale,
            middle=0.5 * (self.lower + self.upper),
            period=self.period,
            magnitude=float(np.max(middle / scale)),
            stirred=self.stir.bits == LOSING.bits,
            moved=self.stir.moved,
        )

    def setting(self) -> Setting:
        held = self.held
        return Setting(
            follow=self.full.follow,
            parameters=parameter_values(self.case, self.centres),
            n_sum=self.full.n_sum,
            step=self.step,
            stride=self.stride,
            every=self.every,
            axis_lower=self.lower,
            axis_upper=self.upper,
            n_interval=self.case.output.intervals,
            grid=held.grid,
            keys=held.keys,
            stir=self.stir,
        )

    def fly(self, state: Floats, step: float, n_step: int) -> Floats:
        """States after so many steps of this length; the first that is enough for the kernel."""
        n_step = -(-n_step // self.plain.together) * self.plain.together
        joint = np.ascontiguousarray(state[:, None, :]).copy()
        for at in range(0, n_step, MOST_PER_CALL):
            part = min(MOST_PER_CALL, n_step - at)
            replace(self.bare, step=step).fly(joint, part, self.rng, self.bare.no_counts(state.shape[1]))
        return joint[:, 0]

    def settled(self, state: Floats, n_step: int) -> Floats:
        """States after so many steps of the kernel of the trajectories."""
        setting, state = self.setting(), np.ascontiguousarray(state)
        n_step = -(-n_step // self.full.together) * self.full.together
        for at in range(0, n_step, MOST_PER_CALL):
            counts = setting.no_counts(state.shape[1])
            setting.called(state, min(MOST_PER_CALL, n_step - at), self.rng, counts, 0)
        return state

    @property
    def burst_kernel(self) -> tuple[Callable[..., int], Floats, int]:
        """What a flight of bursts is made of: kernel, parameters, number of sums."""
        advance, n_sum = kernel_for(self.case)
        return advance, parameter_values(self.case, self.centres), n_sum

    def stirring(self) -> Stir:
        """Whether low bits are drawn anew: of a map that brings many states together and yet parts neighbours."""
        if self.case.system.kind != "map":
            return STILL
        begin = self.rng.uniform(self.lower[:, None], self.upper[:, None], (len(self.lower), N_TRIED))
        # by the kernel of the bursts, which does nothing against it
        flight = BurstFlight(*self.burst_kernel, self.rng)
        end = flight.fly(begin, 1.0, FORGETS_IN)
        end = end[:, np.isfinite(end).all(axis=0)]
        if end.shape[1] == 0 or np.unique(end, axis=1).shape[1] >= 0.5 * end.shape[1]:
            return Stir(0, MOVED)
        # a point or a cycle that attracts brings states together as well, and holds those that are a little off
        off = 1e-6 * (self.upper - self.lower)[:, None] * self.rng.choice([-1.0, 1.0], end.shape)
        after = np.abs(flight.fly(end + off, 1.0, HELD_FOR) - flight.fly(end, 1.0, HELD_FOR))
        grown = np.median(np.nanmax(after / (self.upper - self.lower)[:, None], axis=0))
        return LOSING if grown > 1e-6 else STILL

    def arbitrate(self, state: Floats) -> Arbiter | None:
        """Judge the time step of a flow without noise, and shorten it where the arbiter asks for that."""
        if self.case.system.kind != "flow":
            return None
        self.report("arbiter", 0, 1)
        pieces = state[:, :N_PIECE]
        duration = min(self.held.plan.duration, PIECE / max(self.held.plan.pilot.get("rate", 1.0), 1e-300))
        rates, lower = right_hand_side(self.case.system), self.held.grid.lower
        wraps = self.period > 0.0

        def wrapped(state: Floats) -> Floats:
            """The right-hand side, periodic components taken back into their period."""
            state = state.copy()
            state[wraps] = lower[wraps, None] + np.mod(state[wraps] - lower[wraps, None], self.period[wraps, None])
            return rates(state)

        found, step = arbitrated(
            wrapped,
            self.fly,
            pieces,
            self.bare.scale,
            self.period,
            duration,
            self.step,
        )
        if step < 0.75 * self.step:
            self.step = step
            self.bare = replace(self.bare, step=step)
        return found


def spread_of(state: Floats, width: Floats) -> Floats:
    """Standard deviation of each component over states (n_dim, n); a part of the magnitude where they stand still."""
    spread, least = state.std(axis=1), 1e-6 * width
    return np.asarray(np.where(spread > least, spread, np.maximum(least, 1e-3 * np.abs(state).mean(axis=1))))
