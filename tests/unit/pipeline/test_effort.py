"""Where bursts go: sweeps that were asked for, plain and reseeded rows, parts of the error that do not exist."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest

import perdure
from perdure import Case, Result
from perdure._records import Stage
from reference.cases import reference_case

OU: dict[str, Any] = {"cells": {"counts": {"x": 24}}, "output": {"intervals": 16}}


@cache
def ou(**bursts: Any) -> Result:
    given = {"duration": 0.5, "step": 0.05, "per_cell": 64} | bursts
    return perdure.estimate(reference_case("P16-ou", **OU, bursts=given))


def tripling(events: dict[str, Any] | None = None, **bursts: Any) -> Case:
    return Case(
        title="Tripling circle",
        system={"kind": "map", "state": ["x"], "equations": {"x": "3*x % 1"}},
        cells={"lower": {"x": 0.0}, "upper": {"x": 1.0}, "counts": {"x": 27}},
        events=events or {"left": {"when": "x < 0.25"}, "never": {"when": "x > 2"}},
        bursts=bursts,
    )


def stages(result: Result) -> dict[str, Stage]:
    return {stage.name: stage for stage in result.effort}


@pytest.mark.parametrize("sweeps", [8, 40])
def test_the_sweeps_given_are_flown(sweeps: int) -> None:
    """Those of the start, which are dropped, and those kept; each of about as many bursts as there are states."""
    found = stages(ou(sweeps=sweeps))
    assert found["burn-in"].sweeps + found["reseeded"].sweeps == sweeps
    assert found["reseeded"].sweeps > 0
    per_sweep = found["reseeded"].bursts / found["reseeded"].sweeps
    assert found["cover"].bursts * 0.5 < per_sweep < found["cover"].bursts * 2.0


def test_without_sweeps_given_there_are_enough() -> None:
    """At least 24, of which a third is dropped."""
    found = stages(ou())
    assert found["burn-in"].sweeps + found["reseeded"].sweeps >= 24
    assert found["burn-in"].sweeps > 0


@pytest.mark.parametrize("name", ["cover", "burn-in", "reseeded"])
def test_steps_are_those_of_the_bursts(name: str) -> None:
    stage = stages(ou(sweeps=8))[name]
    assert stage.steps == stage.bursts * 10
    assert stage.seconds >= 0.0


def test_steps_of_the_bursts_repeated() -> None:
    """One of whole steps and one of twice as many halves."""
    half = stages(ou(sweeps=8))["half step"]
    assert half.bursts > 0
    assert half.steps == 3 * 10 * half.bursts


def test_reseeded_rows_are_weights_and_belong_together() -> None:
    result = ou(sweeps=8)
    tally = result.matrix()
    assert tally.together
    assert tally.count.dtype == np.float32
    assert tally.bursts.dtype == np.float64
    assert tally.count.shape[1] == 8
    # the bursts sent from the cells are those of the sweeps kept, and of plain rows where none started
    sent = result.estimate.cell_bursts
    assert sent is not None
    assert sent.sum() >= stages(result)["reseeded"].bursts


def test_plain_rows_are_counts_and_independent() -> None:
    """Reseeded bursts are then flown to compare with, but no row is made of them."""
    result = ou(reseed=False)
    tally = result.matrix()
    assert not tally.together
    assert np.issubdtype(tally.count.dtype, np.unsignedinteger)
    assert np.issubdtype(tally.bursts.dtype, np.integer)
    assert np.all(tally.bursts.sum(axis=1) == 64)
    assert stages(result)["reseeded"].bursts > 0
    sent = result.estimate.cell_bursts
    assert sent is not None
    assert np.all(sent == 64)


def test_reseeding_is_the_default_and_can_be_written_out() -> None:
    one, other = ou(sweeps=8), ou(sweeps=8, reseed=True)
    assert one.matrix().count.tobytes() == other.matrix().count.tobytes()
    assert one.matrix().count.dtype != ou(reseed=False).matrix().count.dtype


def test_what_always_holds_has_a_share_of_one() -> None:
    """Weights are rounded, shares are not: of reseeded bursts as of plain ones."""
    events = {"all": {"when": "x > -1"}, "left": {"when": "x < 0.25"}}
    for bursts in ({"steps": 64, "sweeps": 100}, {"steps": 64, "per_cell": 64, "reseed": False}):
        share = perdure.estimate(tripling(events, **bursts)).events["all"].share
        assert share.value == 1.0
        assert "always seen" in share.reason
        assert share.low is not None
        assert 0.99 < share.low < 1.0


def test_a_map_has_no_part_of_the_step() -> None:
    """Nor any burst at half of one; a flow has both (control)."""
    result = perdure.estimate(tripling(steps=2, per_cell=64, sweeps=8))
    assert "half step" not in stages(result)
    for quantity in (result.events["left"].share, result.events["left"].return_period):
        assert set(quantity.parts) == {"sampling", "cells"}
    assert "step" not in result.marginals["x"].parts
    flow = ou(sweeps=8)
    assert "half step" in stages(flow)
    assert set(flow.events["A"].share.parts) == {"sampling", "cells", "step"}
    assert set(flow.marginals["x"].parts) >= {"sampling", "step"}


def test_the_outside_bound_is_that_of_the_bursts_sent() -> None:
    """No burst left the domain: 1 - 0.05^(1/n) with 1/n = sum mass^2 / bursts, whatever the weights of the rows are."""
    result = perdure.estimate(tripling(steps=2, per_cell=64, sweeps=8))
    (regime,), sent = result.regimes, result.estimate.cell_bursts
    assert sent is not None
    effective = 1.0 / float(np.sum(regime.mass**2 / sent[regime.cell]))
    assert effective > 1000.0
    assert result.outside_share.high == pytest.approx(1.0 - 0.05 ** (1.0 / effective), rel=1e-9)
