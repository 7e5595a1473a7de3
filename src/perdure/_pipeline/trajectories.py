"""A density beside long trajectories: what ``perdure crosscheck`` computes."""

from __future__ import annotations

import math
import os
import time
from collections.abc import Callable
from dataclasses import replace
from datetime import UTC, datetime

import numpy as np

from perdure._case import Case
from perdure._case.dynamics import right_hand_side
from perdure._crosscheck.arbiter import TOLERATED, arbitrated
from perdure._crosscheck.check import Checked, Evidence, Matrix, Request, checked, flown
from perdure._crosscheck.flight import N_SLICE, Flight, Setting, Stir, cell_of
from perdure._crosscheck.predictability import (
    SURE,
    Spectrum,
    dimension_of,
    entropy_of,
    growth_of,
    hypotheses,
    spectrum_of,
)
from perdure._crosscheck.starts import dispersed, twins
from perdure._crosscheck.tangents import BEGIN, END, Bare, parting, stretching
from perdure._crosscheck.verdicts import DENSITY_FREEDOM, density_error, two_sided
from perdure._crosscheck.volumes import volume_rate
from perdure._kernels.generate import LANES
from perdure._pipeline.watch import Progress, silent
from perdure._records import (
    AGREES,
    DISAGREES,
    NONE,
    TOO_SHORT,
    Arbiter,
    Crosscheck,
    Estimate,
    Floats,
    Growth,
    Predictability,
    Quantity,
)
from perdure._result import Result
from perdure._sampling import Flight as BurstFlight
from perdure._sampling import kernel_for, parameter_values, trajectories_for
from perdure._spectrum import ClassSolver, slowest
from perdure._statistics import errors_of
from perdure._streams import generator
from perdure._transitions import TransitionMatrix
from perdure.errors import EstimateError, UsageError

__all__ = ["crosscheck"]

# Dispersed starts, each with a twin, and the chance of a false alarm.
N_START, LEVEL = 64, 0.05
# Steps of all trajectories, over those of the density's bursts, that are flown at most when nothing is given; not fewer
# than the second.
TIMES, FEWEST_STEPS = 4.0, 4e8
# First flight of the starts, in bursts; steps between points of histograms and cells.
SETTLE, STRIDE, EVERY = 64, 32, 256
# Steps of all copies for the exponents, and their relative standard error that is enough.
TANGENT_STEPS, SHARP = 6e8, 1e-3
# Most components of a state that exponents are computed for.
MOST_EXPONENTS = 64
# Low bits drawn anew of a map that loses them: 8 in as many steps, and as many more as a state near 0 has zeros ahead.
LOSING = Stir(8, 24)
# States, and steps in which a map that loses bits brings them together.
N_TRIED, FORGETS_IN = 256, 512
# Steps of a burst up to which each is summed by itself.
FEW_STEPS = 32
# Bursts from all cells of a regime for the variance of averages, and the fewest from each.
BURST_POINTS, FEWEST_POINTS = 2**17, 4


def crosscheck(
    result: Result,
    *,
    case: Case | None = None,
    starts: int | None = None,
    duration: float | None = None,
    steps: float | None = None,
    minutes: float | None = None,
    level: float = LEVEL,
    workers: int | None = None,
    progress: Progress | None = None,
    command: str = "",
) -> Result:
    """Check a density against long trajectories, and compute Lyapunov exponents along them.

    Parameters
    ----------
    result : Result
        From `estimate`, or a density file from `open`.
    case : Case or None
        Needed where the system is a Python function and the result comes from a file.
    starts : int or None
        Dispersed starts, at least 4; each has a twin that is almost the same. From [crosscheck] starts of the case if
        None, else 64.
    duration : float or None
        Length of each trajectory, of which the first quarter is dropped. Unit: time (steps of a map). From
        [crosscheck] duration of the case if None; without either, until every number is as sharp as that of the
        density or `steps` or `minutes` are spent.
    steps : float or None
        Most time steps of all trajectories; if None, four times those of the density, at least 4e8.
    minutes : float or None
        Most minutes for the trajectories.
    level : float
        Chance, between 0 and 1, that anything is said to disagree where both sides are right.
    workers : int or None
        Threads; all processors if None. The numbers do not depend on it.
    progress : callable or None
        Called as progress(stage, done, total).
    command : str
        Kept in the result, for the record.

    Returns
    -------
    Result
        All of `result`, with `crosscheck`. Nothing else in it is changed: a verdict never edits a number.

    Raises
    ------
    UsageError
        An argument is out of range, or the case is needed.
    EstimateError
        There is no density to check.
    NoAttractorError
        Fewer than two starts stay bounded.
    """
    begun, report = time.monotonic(), progress or silent
    held = result.estimate
    ready = runnable(held, case)
    if not held.regimes:
        raise EstimateError(
            f"{held.case.title}: there is no long-run density to check (outcome {held.outcome!r}); allowed: a result "
            "with at least one regime; widen the domain and run again"
        )
    wanted = starts if starts is not None else int(ready.crosscheck.get("starts", N_START))
    length = duration if duration is not None else ready.crosscheck.get("duration")
    require(wanted, length, steps, minutes, level)
    work = Work(held, ready, max(wanted, 4), workers or os.cpu_count() or 1, report)
    request = Request(
        length=None if length is None else work.cut(length),
        limit=steps or max(TIMES * sum(stage.steps for stage in held.effort), FEWEST_STEPS),
        seconds=math.inf if minutes is None else 60.0 * minutes,
        level=level,
    )
    found = work.checked(request)
    report("done", 1, 1)
    made = replace(
        found,
        seconds=time.monotonic() - begun,
        command=command,
        created=datetime.now(UTC).isoformat(timespec="seconds"),
    )
    return Result(replace(held, crosscheck=made))


def runnable(held: Estimate, case: Case | None) -> Case:
    """The case with its equations: as given, as in the result, or read from the text that a file keeps."""
    if case is not None:
        return case
    if held.case.system.function is not None or any(e.source for e in held.case.system.equations):
        return held.case if isinstance(held.case, Case) else Case.from_record(held.case)
    if not held.case.system.equations:
        raise UsageError(
            f"crosscheck of {held.case.title!r}: found a system given by a Python function, which no file keeps; "
            "allowed: the same case beside the result; give case="
        )
    return Case.from_text(held.case.text, name=held.case.source_name, title=held.case.title, seed=held.case.seed)


def require(starts: int, duration: float | None, steps: float | None, minutes: float | None, level: float) -> None:
    """Refuse arguments that are out of range."""
    if not 2 <= starts <= 10**6:
        raise UsageError(
            f"crosscheck, starts: found {starts}; allowed: a whole number from 2 to 10**6; give for example 64"
        )
    if not 0.0 < level < 1.0:
        raise UsageError(f"crosscheck, level: found {level}; allowed: a number between 0 and 1; give for example 0.05")
    for name, value, example in (("duration", duration, 1e4), ("steps", steps, 1e9), ("minutes", minutes, 5)):
        if value is not None and not 0.0 < value < math.inf:
            raise UsageError(
                f"crosscheck, {name}: found {value}; allowed: a number above 0; give for example {example:g}"
            )


class Work:
    """One crosscheck: kernels, streams, step, trajectories, exponents."""

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
        self.every = self.stride * max(1, max(EVERY, burst) // self.stride)
        self.centres = self.means()
        self.stir = Stir(self.every, 0)
        self.bare = self.bare_setting(0.5 * (self.upper - self.lower))

    # ----------------------------------------------------------------------------------- settings

    def means(self) -> Floats:
        """Means of the observables in the first regime, which sums are taken about; 0 where there is none."""
        numbers = self.held.regimes[0].observables.values()
        return np.array([o.mean.value or 0.0 for o in numbers])

    def cut(self, duration: float) -> int:
        """Steps of a whole record of this length; histograms are made finer where it is short."""
        slices = max(1, round(duration / self.step / N_SLICE / self.full.together))
        length = slices * self.full.together
        if length < self.every:
            self.every = length
            self.stride = math.gcd(self.stride, length)
        return length // self.every * self.every * N_SLICE

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
        for at in range(0, n_step, 65536):
            part = min(65536, n_step - at)
            replace(self.bare, step=step).fly(joint, part, self.rng, self.bare.no_counts(state.shape[1]))
        return joint[:, 0]

    def settled(self, state: Floats, n_step: int) -> Floats:
        """States after so many steps of the kernel of the trajectories."""
        setting, state = self.setting(), np.ascontiguousarray(state)
        n_step = -(-n_step // self.full.together) * self.full.together
        for at in range(0, n_step, 65536):
            counts = setting.no_counts(state.shape[1])
            setting.called(state, min(65536, n_step - at), self.rng, counts, 0)
        return state

    @property
    def burst_kernel(self) -> tuple[Callable[..., int], Floats, int]:
        """What a flight of bursts is made of: kernel, parameters, number of sums."""
        advance, n_sum = kernel_for(self.case)
        return advance, parameter_values(self.case, self.centres), n_sum

    def stirring(self) -> Stir:
        """Whether low bits are drawn anew: of a map that brings most of many states together in a few hundred steps."""
        if self.case.system.kind != "map":
            return Stir(self.every, 0)
        begin = self.rng.uniform(self.lower[:, None], self.upper[:, None], (len(self.lower), N_TRIED))
        # by the kernel of the bursts, which does nothing against it
        end = BurstFlight(*self.burst_kernel, self.rng).fly(begin, 1.0, FORGETS_IN)
        end = end[:, np.isfinite(end).all(axis=0)]
        loses = np.unique(end, axis=1).shape[1] < 0.5 * end.shape[1]
        return LOSING if loses else Stir(LOSING.every, 0)

    # -------------------------------------------------------------------------------------- work

    def checked(self, request: Request) -> Crosscheck:
        case, held = self.case, self.held
        given = np.array([[s in case.cells.lower, s in case.cells.upper] for s in case.system.state])
        settle = SETTLE * self.burst
        self.stir = self.stirring()
        begun = dispersed(
            self.lower, self.upper, given, self.n_start, lambda state: self.settled(state, settle), self.rng
        )
        self.bare = self.bare_setting(spread_of(begun.state, self.upper - self.lower))
        arbiter = self.arbitrate(begun.state)
        state = twins(begun.state, self.upper - self.lower, self.rng)
        flight = Flight(self.setting(), state, self.blocks, self.workers)
        evidence = flown(
            case, held.regimes, flight, self.centres, request, lambda a, z: self.report("trajectories", a, z)
        )
        matrix = self.matrix_view()
        self.stand = flight.state
        spectra = [self.spectrum(evidence, r) for r in range(len(held.regimes))]
        volumes = [self.volumes(r) for r in range(len(held.regimes))]
        gaps = [volume_gap(spectrum, volume) for spectrum, volume in zip(spectra, volumes, strict=True)]
        made, refused = checked(evidence, request, matrix, begun, [gap[1] for gap in gaps], self.draws)
        told = [
            self.predictability(r, made, spectrum, volume, gap[0], is_refused)
            for r, (spectrum, volume, gap, is_refused) in enumerate(zip(spectra, volumes, gaps, refused, strict=True))
            if spectrum is not None
        ]
        messages = made.messages + arbiter_messages(arbiter)
        whole = flight.steps * self.step
        return Crosscheck(
            verdict=made.verdict,
            level=request.level,
            messages=messages,
            scheme=self.full.scheme,
            step=self.step,
            duration=whole,
            dropped=0.25 * whole,
            steps=flight.steps * flight.n,
            memory=matrix.memory,
            comparisons=made.comparisons,
            marginals=made.marginals,
            cells=made.cells,
            starts=made.starts,
            predictability=tuple(told),
            arbiter=arbiter,
        )

    def arbitrate(self, state: Floats) -> Arbiter | None:
        """Judge the time step of a flow without noise, and shorten it where the arbiter asks for that."""
        if self.case.system.kind != "flow":
            return None
        self.report("arbiter", 0, 1)
        pieces = state[:, :16]
        duration = min(self.held.plan.duration, 5.0 / max(self.held.plan.pilot.get("rate", 1.0), 1e-300))
        found, step = arbitrated(
            right_hand_side(self.case.system),
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

    def matrix_view(self) -> Matrix:
        """Memory time, and the variance of averages along a trajectory, by the matrix."""
        held, time_unit = self.held, self.case.system.time_unit
        nothing = Quantity(None, None, None, {}, time_unit, "the matrix was not kept: [output] matrix = false")
        if held.tally is None:
            return Matrix(nothing)
        self.report("matrix", 0, 1)
        transition, tau = TransitionMatrix(held.tally), held.plan.duration
        variance: dict[tuple[int, str, str], float] = {}
        times = []
        for r in range(len(held.regimes)):
            solver = self.solver(transition, r)
            slow = slowest(solver)
            if slow is not None:
                times.append(-tau / math.log(abs(slow)) if abs(slow) > 0.0 else 0.0)
            names = [("event", e.name) for e in self.case.events]
            names += [("observable", o.name) for o in self.case.observables]
            found = self.burst_variance(solver, r) * tau
            variance |= {(r, *name): float(v) for name, v in zip(names, found, strict=True)}
        if not times:
            return Matrix(replace(nothing, reason="the iteration for the slowest mode did not converge"), variance)
        return Matrix(Quantity(max(times), None, None, {}, time_unit), variance)

    def burst_variance(self, solver: ClassSolver, regime: int) -> Floats:
        """Variance of averages over n bursts that follow each other, times n, shape (n_event + n_observable,).

        With h from the matrix, (I - P) h = g - mu(g), the sum over bursts is one of uncorrelated increments G - mu(g)
        + h(end) - h(begin) (M. I. Gordin, Soviet Math. Dokl. 10 (1969) 1174-1176). Their variance is taken over bursts
        from the cells, each weighted with its mass.
        """
        held, plan = self.held, self.held.plan
        grid, cell, mass = held.grid, held.regimes[regime].cell, held.regimes[regime].mass
        n_point = int(np.clip(BURST_POINTS // len(cell), FEWEST_POINTS, BURST_POINTS))
        corner = grid.lower + grid.indices(held.keys[cell]) * grid.width
        place = self.draws.random((grid.n_dim, len(cell), n_point))
        begin = (corner.T[:, :, None] + place * grid.width[:, None, None]).reshape(grid.n_dim, -1)
        flight = BurstFlight(*self.burst_kernel, self.draws)
        rows = [2 * k for k in range(len(self.case.events) + len(self.case.observables))]
        if plan.n_step > FEW_STEPS:
            # the kernel leaves the first step of a burst out of its sums
            end, sums = flight.flown(begin, plan.step, plan.n_step)
            mean = sums[rows] / (plan.n_step - 1)
        else:
            end, mean = begin, np.zeros((len(rows), begin.shape[1]))
            for _ in range(plan.n_step):
                end, sums = flight.flown(end, plan.step, 1)
                mean += sums[rows] / plan.n_step
        at = cell_of(grid, held.keys, np.where(np.isfinite(end), end, np.inf))
        # seeds off the long run may lead away
        fine = (at < len(held.keys)).reshape(len(cell), n_point)
        count = np.maximum(fine.sum(axis=1), 1)
        mean = np.where(fine, mean.reshape(len(rows), len(cell), n_point), 0.0)
        values = np.zeros((solver.n, len(rows)))
        values[cell] = (mean.sum(axis=2) / count).T
        h = np.concatenate([solver.adjoint(values), np.zeros((1, len(rows)))])
        h_end = h[np.where(at < len(held.keys), at, -1)].T.reshape(mean.shape)
        step = np.where(fine, mean - (mass @ values[cell])[:, None, None] + h_end - h[cell].T[:, :, None], 0.0)
        return np.asarray(((step**2).sum(axis=2) / count) @ (mass / mass.sum()))

    def solver(self, transition: TransitionMatrix, regime: int) -> ClassSolver:
        held = self.held
        members = held.regimes[regime].cell
        if transition.n_cell > len(held.keys) and held.regimes[regime].mass.sum() < 1.0 - 1e-12:
            # the outside state belongs to the class
            members = np.append(members, len(held.keys))
        return ClassSolver(transition, members)

    def spectrum(self, evidence: Evidence, regime: int) -> Spectrum | None:
        """Lyapunov exponents of a regime; None where too few trajectories ended in it."""
        lanes, n_dim = evidence.lanes[regime], len(self.case.system.state)
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
            self.bare,
            state,
            n_dim,
            self.between(),
            self.tangents.spawn(max(1, state.shape[1] // 256)),
            self.workers,
            enough,
            TANGENT_STEPS / len(self.held.regimes),
            lambda done, total: self.report("exponents", int(done / 1e6), int(total / 1e6)),
        )
        return spectrum_of(found.rate, found.lost, f"1/{self.case.system.time_unit}")

    def between(self) -> int:
        """Steps between two QR steps: half of the time in which differences change by e."""
        if not self.case.system.is_flow:
            return self.plain.together
        n = int(0.5 / (max(self.held.plan.pilot.get("rate", 1.0), 1e-300) * self.step))
        return max(1, min(n, 1000) // self.plain.together) * self.plain.together

    def volumes(self, regime: int) -> Quantity:
        """Mean rate of change of volumes, from the density."""
        held, unit = self.held, f"1/{self.case.system.time_unit}"
        found = held.regimes[regime]
        self.report("volumes", 0, 1)

        def sampling(mean: Floats) -> float:
            if held.tally is None:
                return 0.0
            transition = TransitionMatrix(held.tally)
            solver = self.solver(transition, regime)
            values = np.zeros((transition.n_cell, 1))
            values[found.cell, 0] = mean
            nothing = np.zeros((transition.n_cell, held.tally.bursts.shape[1], 1))
            error, _ = errors_of(transition, solver.mass, solver.adjoint(values), nothing, np.ones((1, 1)))
            return float(error[0])

        keys = held.keys[found.cell]
        return volume_rate(self.bare, held.grid, keys, found.mass, unit, sampling, self.draws)

    def predictability(
        self, regime: int, made: Checked, spectrum: Spectrum, volume: Quantity, distance: float | None, refused: bool
    ) -> Predictability:
        system = self.case.system
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
            growth=self.growth(regime, made, spectrum),
            hypotheses=hypotheses(system.is_noisy, system.is_flow),
        )

    def growth(self, regime: int, made: Checked, spectrum: Spectrum) -> Growth:
        largest, time_unit = spectrum.exponents[0], self.case.system.time_unit
        if largest.value is None or largest.value <= SURE * (largest.error or 0.0):
            return growth_of(
                None, time_unit, "the largest exponent is not positive: almost identical pairs stay together"
            )
        self.report("pairs", 0, 1)
        state = self.stand[:, made.lanes[regime]]
        longest = 6.0 * math.log(END / BEGIN) / largest.value
        found = parting(self.bare, np.ascontiguousarray(state), self.between(), longest, self.tangents)
        return growth_of(found, time_unit, "")


def spread_of(state: Floats, width: Floats) -> Floats:
    """Standard deviation of each component over states (n_dim, n); a part of the magnitude where they stand still."""
    least = np.maximum(1e-6 * width, 1e-3 * np.abs(state).mean(axis=1))
    spread = state.std(axis=1)
    return np.asarray(np.where(spread > 1e-3 * least, spread, least))


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


def arbiter_messages(found: Arbiter | None) -> tuple[str, ...]:
    """What is said where even a short step does not follow the arbiter."""
    if found is None or found.deviation <= TOLERATED:
        return ()
    return (
        f"an integrator of order 8 ends {found.deviation:.2g} standard deviations from the trajectories after "
        f"{found.duration:.3g}: the time step is too long, or the equations jump; give [bursts] step",
    )
