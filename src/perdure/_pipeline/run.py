"""One run: bursts, sweeps and solves, which can be carried on."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from perdure._pipeline.halving import Halved, most_pairs, repeated, uniform_starts
from perdure._pipeline.prepare import Prepared
from perdure._pipeline.regimes import Checks, Judged, Solved, pilot_share, regime_of
from perdure._pipeline.reseeded import FEWEST_SWEEPS, N_REPLICATE, Drift, Reseeded, Sweeps, replicate_size
from perdure._pipeline.sampled import Sampled, sample_all
from perdure._pipeline.watch import Clock, Progress
from perdure._records import Floats, Stage
from perdure._sampling import PLAIN_PART, burst_budget
from perdure._spectrum import ClassSolver, absorption, closed_classes, visits
from perdure._statistics import Findings, outcome_of, regime_weights
from perdure._transitions import TransitionMatrix

__all__ = ["CHECK_PART", "Found", "Run"]


# Bursts of the comparison with reseeded ones, over the usual budget.
CHECK_PART = 0.25


@dataclass(frozen=True)
class Found:
    """What the solves gave, regimes by falling weight; none where the domain leaks.

    Attributes
    ----------
    basins : ndarray, shape (n_cell, n_regime), or None
        Probability of ending in each regime from every box.
    """

    solved: Sequence[Solved]
    judged: Sequence[Judged]
    basins: Floats | None
    outcome: str
    messages: tuple[str, ...]
    passed: bool


class Run:
    """The bursts of a case so far.

    Parameters
    ----------
    ready : Prepared
    clock : Clock
    report : callable
        Progress.
    workers : int or None
        Threads; all processors if None.
    effort : float
        Bursts to spend on sweeps, over those of standard effort.
    earlier : tuple of Stage
        Runs that this one replaces.
    most_steps : float
        Time steps that it may take; the bursts of the cover are sent in any case.
    """

    def __init__(
        self,
        ready: Prepared,
        clock: Clock,
        report: Progress,
        workers: int | None,
        effort: float = 1.0,
        earlier: tuple[Stage, ...] = (),
        *,
        most_steps: float = float("inf"),
    ) -> None:
        self.clock, self.report, self.workers = clock, report, workers or os.cpu_count() or 1
        self.ready, self.plain, self.classes = sample_all(ready, self.workers, report)
        clock.stage("bursts")
        self.done: Sampled = self.plain
        self.drift: Drift | None = None
        self.drifts, self.strayed = False, 0.0
        self.halved: Halved | None = None
        self.halvings, self.repeated, self.last_halving = 0, 0, 0
        self.earlier = earlier
        # if the case wants plain bursts alone, reseeded ones only tell how wrong these are
        self.plainly = self.ready.case.bursts.reseed is False
        self.reseeded: Reseeded | None = None
        part = CHECK_PART if self.plainly else 1.0 - PLAIN_PART
        usual = effort * part * burst_budget(self.ready.plan.n_step)
        self.most_bursts = max(most_steps - self.plain.counts["steps"], 0.0) / (1.25 * self.ready.plan.n_step)
        self.budget = min(usual, self.most_bursts)
        self.sweeps = self._sweeps()

    def _sweeps(self) -> Sweeps | None:
        """Reseeded bursts on the regimes, where there are any."""
        inside = [cells for cells in self.classes.members if cells[0] < len(self.plain.keys)]
        if not inside or not self.plain.settled:
            return None
        size = replicate_size(self.ready, sum(len(cells) for cells in inside), self.budget)
        fewest = self.most_bursts / (FEWEST_SWEEPS * N_REPLICATE)
        size = max(2, int(min(size, fewest)))
        return Sweeps(self.ready, self.plain, self.classes, size, self.most_bursts, self.workers)

    @property
    def n_step(self) -> int:
        """Time steps so far, those of the pilot included."""
        return sum(stage.steps for stage in self.stages)

    @property
    def nbytes(self) -> float:
        """Memory that the rows take, about: the pools, and their copies while they are added up."""
        return 3.0 * self.sweeps.nbytes if self.sweeps is not None else 0.0

    @property
    def stages(self) -> tuple[Stage, ...]:
        """Where the bursts went."""
        plan, counts, seconds = self.ready.plan, self.plain.counts, self.clock.seconds
        stages = [
            *self.earlier,
            Stage("pilot", 0, 0, int(plan.pilot["steps"]), seconds.get("pilot", 0.0)),
            Stage("cover", counts["waves"], counts["bursts"], counts["steps"], seconds.get("bursts", 0.0)),
        ]
        if self.sweeps is not None:
            for name, n_sweep, bursts in self.sweeps.spent():
                part = bursts / max(self.sweeps.bursts, 1) * seconds.get("sweeps", 0.0)
                stages.append(Stage(name, n_sweep, bursts, bursts * plan.n_step, part))
        if self.halved is not None:
            n = self.repeated
            stages.append(Stage("half step", self.halvings, n, 3 * n * plan.n_step, seconds.get("half step", 0.0)))
        return tuple(stages)

    def reseed(self, n_burst: float | None = None) -> None:
        """Fly sweeps: those of the plan, or about `n_burst` more bursts.

        Their rows become those of the run, unless the case wants plain bursts: then they are kept for comparison.
        """
        if self.sweeps is None:
            return
        if n_burst is None:
            self.sweeps.settle(self.budget, self.report)
        else:
            self.sweeps.fly(n_burst, None, self.report)
        self.clock.stage("sweeps")
        if self.plainly:
            self.reseeded = Reseeded(self.sweeps.pooled())
            return
        self.done, self.drift, self.strayed = self.sweeps.result()
        self.drifts = self.sweeps.kept()[1] or self.sweeps.lingers
        self.classes = closed_classes(self.done.all.tally)

    def halve(self, times: float = 1.0) -> None:
        """Repeat some bursts at half the time step; `times` the usual number."""
        n = len(self.done.keys)
        members = [cells for cells in self.classes.members if cells[0] < n]
        if not self.ready.case.system.is_flow or not members:
            return
        most = most_pairs(self.ready, self.n_step, times)
        if self.sweeps is not None and not self.plainly:
            starts = self.sweeps.snapshots(most)
        else:
            transition = TransitionMatrix(self.done.all.tally)
            mass = np.sum([ClassSolver(transition, cells).mass for cells in members], axis=0)
            starts = uniform_starts(self.ready, self.done, mass, most)
        self.report("half step", 0, 1)
        self.halved = repeated(self.ready, starts, self.workers)
        self.halvings, self.repeated = self.halvings + 1, self.repeated + len(starts.weight)
        self.last_halving = 3 * len(starts.weight) * self.ready.plan.n_step
        self.clock.stage("half step")

    def solve(self) -> Found:
        """Regimes, their numbers and the outcome."""
        done, n, made = self.done, len(self.done.keys), self.ready.plan
        transition = TransitionMatrix(done.all.tally)
        inside = [cells for cells in self.classes.members if cells[0] < n]
        # what never comes back from outside ends there: a closed class, but no regime
        ends = (*inside, *(cells for cells in self.classes.members if cells[0] >= n))
        shared = len(ends) > 1 or self.classes.leaks.any()
        basins = absorption(transition, ends)[:, : len(inside)] if shared else None
        weights = regime_weights(transition, ends, basins, visits, n)
        solved, judged = [], []
        for k, cells in enumerate(inside):
            self.report("regime", k, len(inside))
            solved.append(Solved(done, transition, ClassSolver(transition, cells)))
            judged.append(
                regime_of(self.ready, solved[k], weights[k], Checks(self.drift, self.reseeded, self.halved), self.clock)
            )
        order = sorted(range(len(judged)), key=lambda k: -(weights[k].value or 0.0))
        state = Findings(
            made,
            done.counts,
            [judged[k].regime for k in order],
            self.classes.leaks,
            any(item.rough for item in judged),
            max((item.apart for item in judged), default=0.0),
            done.settled,
            pilot_share(made, done, inside),
            self.drifts,
            self.strayed,
        )
        outcome, messages, passed = outcome_of(self.ready.case, state)
        if outcome == "leaking":
            order = []
        return Found(
            [solved[k] for k in order],
            [judged[k] for k in order],
            None if basins is None else basins[:n, order],
            outcome,
            messages,
            passed,
        )
