"""An invented result, and a stand-in for the engine, so that the commands are tested by themselves."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

from perdure._records import (
    BoxGrid,
    Crosscheck,
    EventResult,
    ObservableResult,
    Plan,
    Quantity,
    Regime,
    Stage,
    System,
    Target,
)

SHA256 = "0f" * 32


def quantity(value: float, error: float, unit: str = "1") -> Quantity:
    return Quantity(value, value - 2 * error, value + 2 * error, {"sampling": error}, unit)


SEEN = EventResult(
    share=quantity(0.021653, 0.00043),
    entry_rate=quantity(0.081, 0.001, "1/s"),
    return_period=quantity(12.3456, 0.21, "s"),
    mean_spell=quantity(0.2671, 0.011, "s"),
)
NEVER = EventResult(
    share=Quantity(None, 0.0, 0.000291, {}, "1", "never seen in 1e+04 effective bursts: upper bound"),
    entry_rate=Quantity(None, 0.0, 0.0012, {}, "1/s", "no entry seen: upper bound"),
    return_period=Quantity(None, 3391.0, None, {}, "s", "no entry seen: lower bound"),
    mean_spell=Quantity(None, None, None, {}, "s", "no entry seen"),
)


def regime(weight: Quantity, **changes: Any) -> Regime:
    content: dict[str, Any] = {
        "weight": weight,
        "cell": np.arange(3),
        "mass": np.array([0.2, 0.3, 0.5]),
        "period": 1,
        "residual": 1e-16,
        "eigenvalue": 1.0,
        "events": {"reversal": SEEN, "flood": NEVER},
        "observables": {"height": ObservableResult(quantity(23.5507, 0.02, "m"), quantity(74.3, 0.5, "(m)^2"))},
        "marginals": {},
    }
    return Regime(**(content | changes))


ONLY = regime(Quantity(1.0, 1.0, 1.0, {"sampling": 0.0}))
OUTSIDE = Quantity(0.0, 0.0, 0.00012, {"sampling": 0.0})


@dataclass
class FakeResult:
    """The attributes that the commands read of a result."""

    title: str = "Convection loop"
    outcome: str = "one-regime"
    kind: str = "flow"
    messages: tuple[str, ...] = ()
    checks_passed: bool = True
    caution: str = ""
    regimes: tuple[Regime, ...] = (ONLY,)
    outside_share: Quantity = OUTSIDE
    counts: Mapping[str, int] = field(default_factory=lambda: {"bursts": 192, "steps": 9600, "blown_up": 0})
    timings: Mapping[str, float] = field(default_factory=lambda: {"pilot": 0.4, "bursts": 60.2})
    n_cell: int = 3
    effort: tuple[Stage, ...] = ()
    focus: tuple[float, tuple[float, ...]] | None = None
    targets: tuple[Target, ...] = ()
    crosscheck: Crosscheck | None = None
    time_unit: str = "s"
    fault: Exception | None = None
    saved: list[Path] = field(default_factory=list)

    def to_dict(self) -> dict[str, Any]:
        return {"title": self.title, "outcome": self.outcome}

    def save(self, path: Path) -> str:
        if self.fault is not None:
            raise self.fault
        self.saved.append(path)
        return SHA256


@dataclass(frozen=True)
class FakeCase:
    """The attributes that the commands read of a case."""

    title: str
    seed: int
    system: System
    accuracy: float | None = None


LOOP = FakeCase("Convection loop", 7, System("flow", ("x", "z"), ("m", "1"), "s", {}))
MAP = FakeCase("A map", 7, System("map", ("x",), ("1",), "step", {}))

PLAN = Plan(
    grid=BoxGrid(np.array([-2.0, 0.0]), np.array([0.5, 0.25]), np.array([8, 4]), np.array([False, True])),
    bounded=False,
    seed_keys=np.arange(20),
    seed_share=np.full(20, 0.05),
    step=0.005,
    n_step=100,
    per_cell=64,
    n_replicate=8,
    stride=12,
    scheme="rk4",
    axis_lower=np.array([-2.0, 0.0]),
    axis_upper=np.array([2.0, 1.0]),
    found={"time step": "errors of the pilot below 1e-6", "domain": "range of the pilot run"},
    pilot={},
)
COST = {"cells": 24, "bursts": 1536, "steps": 153600, "memory_bytes": 2.5e8, "seconds": 12.4}


class Engine:
    """Stands in for `_case`, `_pipeline` and `_result`.

    `log` lists the calls in their order, `steered` what `estimate` was given to steer the run, `asked`
    what `crosscheck` was given; `found` is what that finds.
    """

    def __init__(self) -> None:
        self.case: Any = LOOP
        self.result: Any = FakeResult()
        self.work: Callable[[], None] = lambda: None
        self.log: list[tuple[str, Any]] = []
        self.steered: dict[str, Any] = {}
        self.asked: dict[str, Any] = {}
        self.found: Crosscheck | None = None

    def load_case(self, path: Path, *, seed: int | None = None) -> Any:
        self.log.append(("load_case", path))
        if isinstance(self.case, Exception):
            raise self.case
        return self.case if seed is None else replace(self.case, seed=seed)

    def estimate(
        self, case: Any, *, workers: int | None = None, progress: Any = None, command: str = "", **steered: Any
    ) -> Any:
        self.log.append(("estimate", (case.seed, workers, command)))
        self.steered = steered
        progress("pilot", 0, 1)
        progress("bursts", 3, 400)
        self.work()
        return self.result

    def crosscheck(
        self, result: Any, *, workers: int | None = None, progress: Any = None, command: str = "", **asked: Any
    ) -> Any:
        self.log.append(("crosscheck", (workers, command)))
        self.asked = asked
        progress("trajectories", 0, 400)
        self.work()
        return replace(self.result, crosscheck=self.found)

    def plan(self, case: Any) -> Plan:
        return PLAN

    def forecast_cost(self, case: Any, plan: Plan) -> dict[str, float]:
        assert plan is PLAN
        return COST

    def open_file(self, path: Path) -> Any:
        self.log.append(("open_file", path))
        return self.result
