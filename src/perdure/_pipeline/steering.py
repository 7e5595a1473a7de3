"""Accuracy on request: more bursts, where they count, until every interval is narrow enough or the budget is spent."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

import numpy as np

from perdure._pipeline.prepare import Prepared
from perdure._pipeline.reseeded import Sweeps
from perdure._pipeline.run import Found, Run
from perdure._pipeline.watch import Clock, Progress
from perdure._records import Budget, CaseRecord, EventResult, Quantity, Regime, Stage, Target
from perdure._spectrum import ClassSolver
from perdure._statistics import evenness, parts_needed, quantile
from perdure.errors import CaseError

__all__ = ["FIRST", "checked_request", "steered"]

# Limits where none is given: steps, minutes, bytes.
USUAL = Budget(2e10, 60.0, 8e9)
# Bursts of the first round over those of standard effort, and bounds on the growth from round to round.
FIRST, LEAST_GROWTH, MOST_GROWTH = 0.1, 1.3, 4.0
# An event that was not seen in so many rounds is given up.
UNSEEN_ROUNDS = 4
# Bursts repeated at half the step, over the usual number, before the step is halved for good.
MORE_PAIRS = 8.0
# From this part of the goal on that is done.
STEP_DOUBT = 0.4
# Time steps are halved at most so often.
MOST_HALVINGS = 6


def checked_request(case: CaseRecord, accuracy: float | None, budget: Budget | None) -> float | None:
    """Accuracy of a run, from the caller or the case; None for standard effort.

    Raises
    ------
    CaseError
        Values out of range, a budget without an accuracy, no events, or reseeding refused; all mistakes at once.
    """
    asked = case.accuracy if accuracy is None else accuracy
    wrong = []
    for name, example in (("steps", "2e10"), ("minutes", "30"), ("memory", "8e9")):
        value = getattr(budget, name) if budget is not None else None
        if value is not None and not (isinstance(value, int | float) and value > 0.0):
            wrong.append(f"budget {name}: found {value!r}; allowed: a number above 0; give for example {example}")
    if asked is None:
        if budget is not None:
            wrong.append(
                "found a budget without an accuracy; a budget limits a run that is steered by its accuracy; give "
                "accuracy too, for example 0.02"
            )
    elif not (isinstance(asked, int | float) and 0.0 < asked < 1.0):
        wrong.append(f"accuracy: found {asked!r}; allowed: a number between 0 and 1; give for example 0.05")
    else:
        if case.bursts.reseed is False:
            wrong.append(
                f"[bursts] reseed: found false beside accuracy {asked:g}; allowed: true, since plain bursts keep an "
                "error from the cells that no number of bursts removes; leave reseed or accuracy out"
            )
        if not case.events:
            wrong.append(
                f"found accuracy {asked:g} without events; it is the accuracy of event shares and return periods; "
                "give [events], or leave accuracy out"
            )
    if wrong:
        raise CaseError("\n".join(f"{case.source_name}, {text}" for text in wrong))
    return asked


@dataclass
class Limits:
    """What a steered run may spend."""

    accuracy: float
    budget: Budget
    begun: float

    def used(self, run: Run) -> dict[str, float]:
        """Part used up of every limit, by its name in words."""
        steps, minutes, memory = (
            getattr(self.budget, name) or getattr(USUAL, name) for name in ("steps", "minutes", "memory")
        )
        return {
            f"{steps:g} steps": run.n_step / steps,
            f"{minutes:g} minutes": (time.perf_counter() - self.begun) / 60.0 / minutes,
            f"{memory:g} bytes": run.nbytes / memory,
        }

    @property
    def steps(self) -> float:
        """Time steps that the run may take, those of the pilot included."""
        return float(self.budget.steps or USUAL.steps or 0.0)

    def left(self, run: Run) -> float:
        """Time steps left."""
        return self.steps - run.n_step


def steered(
    ready: Prepared,
    accuracy: float,
    budget: Budget | None,
    clock: Clock,
    report: Progress,
    workers: int | None,
) -> tuple[Run, Found, tuple[Target, ...]]:
    """A run that is carried on until its targets are met or its budget is spent."""
    limits = Limits(accuracy, budget or USUAL, time.perf_counter())
    most = limits.steps - ready.plan.pilot["steps"]
    run, rounds, halvings = Run(ready, clock, report, workers, FIRST, most_steps=most), 0, 0
    run.reseed()
    while True:
        found, wishes = assessed(run, limits)
        rounds += 1
        open_ones = [w for w in wishes if not w.met and not (w.unseen and rounds >= UNSEEN_ROUNDS)]
        growth = [w.growth for w in open_ones if np.isfinite(w.growth)]
        may_halve = run.ready.case.bursts.step is None and halvings < MOST_HALVINGS and limits.left(run) > run.n_step
        if len(growth) < len(open_ones) and may_halve:
            # the step, not the bursts, keeps a number from its goal: all bursts are sent anew
            halvings += 1
            spent = (*run.earlier, given_up(run))
            run = Run(half_step(run.ready), clock, report, workers, FIRST, spent, most_steps=limits.left(run))
            run.reseed()
            continue
        used = limits.used(run)
        if not growth or run.sweeps is None or max(used.values()) >= 0.98:
            return run, found, targets_of(run, found, wishes, max(used, key=lambda name: used[name]))
        allot(run, run.sweeps, found, wishes)
        room = limits.left(run) / (1.25 * run.ready.plan.n_step)
        extra = (np.clip(max(growth), LEAST_GROWTH, MOST_GROWTH) - 1.0) * run.sweeps.bursts
        run.reseed(float(min(extra, max(room, 1.0))))


def assessed(run: Run, limits: Limits) -> tuple[Found, list[Wish]]:
    """Solve, and see which numbers have reached their goal.

    Where the time step seems to keep one from it, more bursts are repeated at half of it: with few that may be chance.
    """
    run.halve()
    found = run.solve()
    wishes = wishes_of(found, limits.accuracy)
    limited = any(not w.met and w.step_share > STEP_DOUBT for w in wishes)
    if limited and limits.left(run) > MORE_PAIRS * run.last_halving:
        run.halve(MORE_PAIRS)
        found = run.solve()
        wishes = wishes_of(found, limits.accuracy)
    return found, wishes


def half_step(ready: Prepared) -> Prepared:
    """The same plan with half the time step."""
    made = ready.plan
    found = dict(made.found) | {"time step": "halved until its error allows the accuracy asked for"}
    halved = replace(made, step=0.5 * made.step, n_step=2 * made.n_step, stride=2 * made.stride, found=found)
    return replace(ready, plan=halved)


def given_up(run: Run) -> Stage:
    """All bursts of a run, in one stage; those of the pilot are counted by the run that follows."""
    mine = [stage for stage in run.stages[len(run.earlier) :] if stage.name != "pilot"]
    sums = (sum(getattr(stage, name) for stage in mine) for name in ("sweeps", "bursts", "steps", "seconds"))
    return Stage("longer time step", *sums)


@dataclass(frozen=True)
class Wish:
    """A number that is to reach the accuracy.

    Attributes
    ----------
    regime, event, k, number
        Number of the regime, name and number of the event, "share" or "return_period".
    unseen : bool
        It has no value yet.
    growth : float
        Sweeps that it seems to need, over those so far; infinite where the time step alone keeps it from the goal.
    """

    regime: int
    event: str
    k: int
    number: str
    wanted: float
    quantity: Quantity
    unseen: bool
    growth: float

    @property
    def reached(self) -> float | None:
        q = self.quantity
        if q.value is None or q.low is None or q.high is None or q.value == 0.0:
            return None
        return (q.high - q.low) / (2.0 * abs(q.value))

    @property
    def step_share(self) -> float:
        """Part of the time step in what the goal allows, as half-widths."""
        return quantile(1e9) * self.quantity.parts.get("step", 0.0) / (self.wanted * abs(self.quantity.value or 1.0))

    @property
    def met(self) -> bool:
        return self.reached is not None and self.reached <= self.wanted

    @property
    def name(self) -> tuple[str, int]:
        """What `_statistics` calls it."""
        return ("share" if self.number == "share" else "period", self.k)


def wishes_of(found: Found, accuracy: float) -> list[Wish]:
    """Every event share and return period of every regime, but those that do not exist."""
    wishes = []
    regimes = [judged.regime for judged in found.judged]
    met = {name for regime in regimes for name, event in regime.events.items() if event.share.value is not None}
    for number, regime in enumerate(regimes):
        for k, (name, event) in enumerate(regime.events.items()):
            for which in ("share", "return_period"):
                quantity = getattr(event, which)
                if quantity.value is None and not may_exist(event, which, name in met):
                    continue
                unseen = quantity.value is None
                growth = MOST_GROWTH if unseen else parts_needed(quantity, accuracy)
                wishes.append(Wish(number, name, k, which, accuracy, quantity, unseen, growth))
    return wishes


def may_exist(event: EventResult, which: str, met: bool) -> bool:
    """Whether more bursts may give a number that has no value; `met`: some regime meets the event.

    There is none where perdure says so, in a regime that another one has the event to itself, and no return period of
    what always holds.
    """
    if getattr(event, which).low is None or (event.share.value is None and met):
        return False
    return which == "share" or event.share.value != 1.0


def allot(run: Run, sweeps: Sweeps, found: Found, wishes: list[Wish]) -> None:
    """Share the states out anew, by what the numbers that are furthest from their goal need most."""
    share = np.zeros(len(run.done.keys))
    for number, solved in enumerate(found.solved):
        weights = {w.name: (w.reached / w.wanted) ** 2 for w in wishes if w.regime == number and w.reached is not None}
        share += sweeps.worth(solved.done, solved.solver, weights or None)[: len(share)]
    sweeps.ensemble.allot(run.done.lattice_keys, share / share.sum())


def targets_of(run: Run, found: Found, wishes: list[Wish], limit: str) -> tuple[Target, ...]:
    """What was reached; `limit` names the limit of the budget that came nearest."""
    even = [evenness_of(run, solved.solver) for solved in found.solved]
    return tuple(
        Target(
            label(found.judged[w.regime].regime, w, len(found.judged)),
            w.number,
            w.wanted,
            w.reached,
            w.met,
            "" if w.met else why(run, w, limit),
            even[w.regime].get(w.name),
        )
        for w in wishes
    )


def evenness_of(run: Run, solver: ClassSolver) -> dict[tuple[str, int], float]:
    """Bursts that an even spread over the cells would need for the same error, over those sent, by number."""
    ready = run.ready
    return evenness(ready.case, ready.plan, solver.transition, solver.mass, run.done.all, solver.adjoint)


def label(regime: Regime, wish: Wish, n_regime: int) -> str:
    return wish.event if n_regime == 1 else f"{wish.event} (regime {wish.regime + 1})"


def why(run: Run, wish: Wish, limit: str) -> str:
    """What keeps a number from its goal."""
    if wish.unseen:
        return f"never seen in {run.sweeps.bursts if run.sweeps else 0} bursts"
    if run.sweeps is None:
        return "there is no long run that bursts could be reseeded on"
    part = max(wish.quantity.parts, key=lambda name: wish.quantity.parts[name])
    if not np.isfinite(wish.growth):
        return f"the error of the time step {run.ready.plan.step:g} is too large; give a smaller [bursts] step"
    return f"the budget of {limit} is spent; its largest part of the error is {part}"
