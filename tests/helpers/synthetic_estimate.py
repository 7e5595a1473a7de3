"""An invented estimate with everything that a density file can hold, and how to compare two."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, is_dataclass, replace

import numpy as np

from perdure._records import (
    BoxGrid,
    BurstOptions,
    CaseRecord,
    CellOptions,
    Estimate,
    Event,
    EventResult,
    Expression,
    Marginal,
    Observable,
    ObservableResult,
    OutputOptions,
    Parameter,
    Plan,
    Quantity,
    Regime,
    Stage,
    System,
    Tally,
    Target,
)

CASE_TEXT = """[case]
title = "Pegel ρ"
seed = 36893488147419103233

[system]
kind = "noisy-flow"
state = ["level", "phase"]
"""

EVENTS = ("coût élevé", "never", "終わり")


def expression(text: str) -> Expression:
    """An expression as it comes back from a file."""
    return Expression(text, "", frozenset())


def make_case(state: tuple[str, str] = ("level", "phase")) -> CaseRecord:
    """Invented case: a level in metres and a periodic phase; its seed needs more than 64 bits."""
    x, y = state
    return CaseRecord(
        title="Pegel ρ",
        seed=36893488147419103233,
        accuracy=0.05,
        caution="invented: not for design",
        system=System(
            kind="noisy-flow",
            state=state,
            units=("m", "1"),
            time_unit="days",
            parameters={"k": Parameter(0.5, "1/days", "decay"), "b": Parameter(2.0)},
            equations=(expression(f"-k*{x}"), expression("1.0")),
            noise=((expression("b"),), (expression("0.0"),)),
            draws=(("e", "normal"),),
        ),
        events=(
            Event(EVENTS[0], expression(f"{x} > 1.5"), expression(f"{x} < 1")),
            Event(EVENTS[1], expression(f"{x} > 90")),
            Event(EVENTS[2], expression(f"{y} < 0.5")),
        ),
        observables=(
            Observable("mean level", expression(x), "m"),
            Observable("swing", expression(f"cos({y})"), "1"),
        ),
        cells=CellOptions(lower={x: -2.0}, upper={x: 3.0}, count=400, periodic=(y,)),
        bursts=BurstOptions(duration=2.0, per_cell=64),
        output=OutputOptions(matrix=True, intervals=8),
        crosscheck={"starts": 4},
        study={},
        text=CASE_TEXT,
        source_name="pegel.toml",
    )


def make_events(rng: np.random.Generator) -> dict[str, EventResult]:
    """One ordinary event, one never seen, one without an entry rate and with an infinite end."""
    share, error = rng.uniform(0.1, 0.4), 1e-3
    parts = {"sampling": error, "cell size": 2.0 * error}
    ordinary = EventResult(
        Quantity(share, share - 2 * error, share + 2 * error, parts),
        Quantity(0.25, 0.2, 0.3, {"sampling": 0.025}, "1/days"),
        Quantity(4.0, 10.0 / 3.0, 5.0, {"sampling": 0.4}, "days"),
        Quantity(4.0 * share, None, None, {}, "days"),
    )
    nothing = Quantity(None, None, None, {}, "days", "no entry seen")
    never = EventResult(
        Quantity(None, 0.0, 1e-5, {}, "1", "never seen in 3e5 effective bursts: upper bound"),
        Quantity(None, 0.0, 2e-5, {}, "1/days", "no entry seen: upper bound"),
        Quantity(None, 5e4, np.inf, {}, "days", "no entry seen: lower bound"),
        nothing,
    )
    refused = Quantity(None, None, None, {}, "days", "noise: no rate « limit »")
    noisy = EventResult(
        Quantity(0.08, 0.07, 0.09, {"sampling": 5e-3}),
        Quantity(None, None, None, {}, "1/days", refused.reason),
        refused,
        refused,
    )
    return dict(zip(EVENTS, (ordinary, never, noisy), strict=True))


def make_observables(rng: np.random.Generator) -> dict[str, ObservableResult]:
    """Two observables of different units."""
    level = float(rng.normal())
    return {
        "mean level": ObservableResult(
            Quantity(level, level - 0.1, level + 0.1, {"sampling": 0.05}, "m"),
            Quantity(0.7, 0.6, 0.8, {"sampling": 0.05}, "(m)^2"),
        ),
        "swing": ObservableResult(
            Quantity(0.1, 0.0, 0.2, {"sampling": 0.05}, "1"),
            Quantity(None, None, None, {}, "1", "the variance does not converge"),
        ),
    }


def make_marginals(case: CaseRecord, rng: np.random.Generator, n: int = 8) -> dict[str, Marginal]:
    """Histograms with mass beyond their ends."""
    marginals = {}
    for name, unit, lower, upper in zip(case.system.state, case.system.units, (-2.0, 0.0), (3.0, 6.0), strict=True):
        mass = rng.dirichlet(np.ones(n + 2))
        edges = np.linspace(lower, upper, n + 1)
        marginals[name] = Marginal(edges, mass[1:-1], 0.01 * mass[1:-1], float(mass[0]), float(mass[-1]), unit)
    return marginals


def make_tally(n_cell: int, rng: np.random.Generator, n_replicate: int = 4) -> Tally:
    """Two to five entries a row, among them the outside state."""
    sizes = rng.integers(2, 6, n_cell)
    pointer = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
    column = np.concatenate([np.sort(rng.choice(n_cell + 2, n, replace=False)) for n in sizes]).astype(np.int32)
    count = rng.integers(0, 17, (len(column), n_replicate)).astype(np.uint16)
    return Tally(pointer, column, count, np.add.reduceat(count, pointer[:-1], axis=0).astype(np.int64))


def make_estimate(
    *,
    n_regime: int = 1,
    side: int = 32,
    seed: int = 3,
    matrix: bool = True,
    state: tuple[str, str] = ("level", "phase"),
) -> Estimate:
    """An estimate with `side` x `side` // 2 lattice cells, of which about two thirds are in use.

    Parameters
    ----------
    n_regime : int
        0 (leaking), 1 or 2.
    seed : int
        Of the invented numbers.
    """
    rng = np.random.default_rng(seed)
    case = make_case(state)
    counts = np.array([side, side // 2], dtype=np.int64)
    grid = BoxGrid(np.array([-2.0, 0.0]), np.array([5.0, 6.0]) / counts, counts, np.array([False, True]))
    n_all = int(counts.prod())
    keys = np.sort(rng.choice(n_all, 2 * n_all // 3, replace=False)).astype(np.int64)
    label = rng.integers(-1, n_regime, len(keys)) if n_regime else np.full(len(keys), -1)
    regimes = []
    for k in range(n_regime):
        cell = np.flatnonzero(label == k)
        regimes.append(
            Regime(
                weight=Quantity(1.0 / n_regime, 0.9 / n_regime, 1.0 / n_regime, {"sampling": 0.01}),
                cell=cell,
                mass=rng.dirichlet(np.full(len(cell), 2.0)),
                period=1 + k,
                residual=1e-15,
                eigenvalue=1.0 - 1e-16,
                events=make_events(rng),
                observables=make_observables(rng),
                marginals=make_marginals(case, rng),
            )
        )
    basins = None
    if n_regime != 1:
        basins = rng.dirichlet(np.ones(n_regime + 1), len(keys))[:, :n_regime].astype(np.float32)
    return Estimate(
        case=case,
        plan=Plan(
            grid=BoxGrid(np.array([-4.0, 0.0]), grid.width, counts * np.array([2, 1]), grid.periodic),
            bounded=False,
            seed_keys=keys[::3].copy(),
            seed_share=rng.dirichlet(np.ones(len(keys[::3]))),
            step=0.01,
            n_step=200,
            per_cell=64,
            n_replicate=4,
            stride=2,
            scheme="weak2",
            axis_lower=np.array([-2.0, 0.0]),
            axis_upper=np.array([3.0, 6.0]),
            found={"cells": "as many as the accuracy needs", "domain": "range of the pilot run"},
            pilot={"starts": 16.0, "rate": np.nan, "longest": np.inf},
        ),
        outcome=("leaking", "one-regime", "several-regimes")[n_regime],
        messages=("invented numbers", "Übung: ρ > 1"),
        checks_passed=n_regime == 1,
        grid=grid,
        keys=keys,
        regimes=tuple(regimes),
        basins=basins,
        outside_share=Quantity(0.0, 0.0, 1e-6, {"sampling": 0.0})
        if n_regime
        else Quantity(None, None, None, {}, "1", "every class of cells leaks"),
        tally=make_tally(len(keys), rng) if matrix else None,
        timings={"compile": 1.25, "bursts": 30.5},
        packages={"perdure": "0.1.0", "numpy": "2.4.6"},
        counts={"bursts": 64 * len(keys), "steps": 12800 * len(keys), "blown_up": 0},
        command="perdure run cases/pegel.toml -o pegel.h5",
        created="2024-05-06T07:08:09+00:00",
    )


def make_steered(estimate: Estimate, seed: int = 5) -> Estimate:
    """The same estimate as a run that was steered by its accuracy gives it: reseeded bursts, parts, effort, targets."""
    rng = np.random.default_rng(seed)
    regimes = tuple(
        replace(regime, marginals={name: with_parts(m, rng) for name, m in regime.marginals.items()})
        for regime in estimate.regimes
    )
    tally = estimate.tally
    if tally is not None:
        weight = (tally.count * rng.uniform(0.5, 2.0, tally.count.shape)).astype(np.float32)
        bursts = np.add.reduceat(weight.astype(np.float64), tally.pointer[:-1], axis=0)
        tally = Tally(tally.pointer, tally.column, weight, bursts, together=True)
    return replace(
        estimate,
        regimes=regimes,
        tally=tally,
        effort=(
            Stage("pilot", 1, 16, 160_000, 0.25),
            Stage("cover", 3, 2000, 400_000, 1.5),
            Stage("reseeded", 24, 10_000, 2_000_000, 9.75),
            Stage("half step", 6, 3984, 3_000_000_000_000, 11.0),
        ),
        targets=(
            Target(EVENTS[0], "share", 0.02, 0.0195, True),
            Target(EVENTS[0], "return_period", 0.02, 0.25, False, "the time step « half »"),
            Target(EVENTS[1], "share", 0.02, None, False, "never seen"),
        ),
        cell_bursts=rng.integers(0, 5000, len(estimate.keys)),
    )


def with_parts(marginal: Marginal, rng: np.random.Generator) -> Marginal:
    """The same histogram with the parts of its errors and its intervals."""
    parts = {name: rng.uniform(0.0, 1e-3, len(marginal.mass)) for name in ("sampling", "cells", "step")}
    error = np.sqrt(sum(part**2 for part in parts.values()))
    low, high = np.maximum(marginal.mass - 2.0 * error, 0.0), marginal.mass + 2.0 * error
    return replace(marginal, error=error, parts=parts, low=low, high=high)


def assert_same(found: object, expected: object, where: str = "estimate") -> None:
    """Two records hold the same: types and bits of arrays, nan equal to nan, mappings in the same order."""
    if is_dataclass(expected) and not isinstance(expected, type):
        assert type(found) is type(expected), where
        for field in fields(expected):
            assert_same(getattr(found, field.name), getattr(expected, field.name), f"{where}.{field.name}")
    elif isinstance(expected, np.ndarray):
        assert isinstance(found, np.ndarray), where
        assert found.dtype == expected.dtype, where
        np.testing.assert_array_equal(found, expected, err_msg=where)
    elif isinstance(expected, Mapping):
        assert isinstance(found, Mapping), where
        assert list(found) == list(expected), where
        for key, item in expected.items():
            assert_same(found[key], item, f"{where}[{key!r}]")
    elif isinstance(expected, tuple):
        assert isinstance(found, tuple), where
        assert len(found) == len(expected), where
        for k, item in enumerate(expected):
            assert_same(found[k], item, f"{where}[{k}]")
    elif isinstance(expected, float):
        assert isinstance(found, float), where
        assert found == expected or (np.isnan(found) and np.isnan(expected)), where
    else:
        assert type(found) is type(expected), where
        assert found == expected, where
