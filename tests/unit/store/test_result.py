"""A result in memory and one read from a file answer alike."""

from __future__ import annotations

import json
import pickle
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from helpers.synthetic_estimate import EVENTS, assert_same, make_estimate, make_steered
from perdure._records import Estimate
from perdure._result import DensityFile, Result, open_file
from perdure.errors import EstimateError, OutputError, UsageError


@pytest.fixture(params=[0, 1, 2], ids=["leaking", "one", "two"])
def estimate(request: pytest.FixtureRequest) -> Estimate:
    return make_estimate(n_regime=request.param, side=8)


@pytest.fixture(params=["memory", "file"])
def result(request: pytest.FixtureRequest, estimate: Estimate, tmp_path: Path) -> Result:
    made = Result(estimate)
    if request.param == "memory":
        return made
    made.save(tmp_path / "out.h5")
    return open_file(tmp_path / "out.h5")


def test_properties(result: Result, estimate: Estimate) -> None:
    system = estimate.case.system
    assert result.title == "Pegel ρ"
    assert result.case_text == estimate.case.text
    assert len(result.case_sha256) == 64
    assert result.seed == estimate.case.seed
    assert result.caution == estimate.case.caution
    assert (result.kind, result.state, result.units, result.time_unit) == (
        system.kind,
        system.state,
        system.units,
        system.time_unit,
    )
    assert (result.outcome, result.messages) == (estimate.outcome, estimate.messages)
    assert result.checks_passed is estimate.checks_passed
    assert (result.command, result.created) == (estimate.command, estimate.created)
    assert result.timings == estimate.timings
    assert result.packages == estimate.packages
    assert result.counts == estimate.counts
    assert result.n_cell == len(estimate.keys)
    assert result.outside_share == estimate.outside_share
    for name in ("case", "plan", "grid", "keys", "regimes", "basins", "tally", "effort", "targets", "estimate"):
        expected = estimate if name == "estimate" else getattr(estimate, name)
        assert_same(getattr(result, name), expected, name)
    assert repr(result) == f"{type(result).__name__}('Pegel ρ': {estimate.outcome}, {result.n_cell} cells)"


def test_numbers_are_those_of_the_first_regime(result: Result, estimate: Estimate) -> None:
    expected = estimate.regimes[0] if estimate.regimes else None
    assert_same(dict(result.events), dict(expected.events) if expected else {})
    assert_same(dict(result.observables), dict(expected.observables) if expected else {})
    assert_same(dict(result.marginals), dict(expected.marginals) if expected else {})
    with pytest.raises(TypeError, match="item assignment"):
        result.events["new"] = None  # type: ignore[index]
    if expected:
        assert result.events[EVENTS[0]].probability.value == expected.events[EVENTS[0]].share.value


def test_density(result: Result, estimate: Estimate) -> None:
    if not estimate.regimes:
        with pytest.raises(EstimateError, match=r"no long-run density exists.*'leaking'.*invented numbers"):
            _ = result.density
        return
    assert result.density is result.density
    for k, regime in enumerate(estimate.regimes):
        density = result.density_of(k)
        np.testing.assert_array_equal(density.keys, estimate.keys[regime.cell])
        np.testing.assert_array_equal(density.mass, regime.mass)
        assert (density.state, density.units, density.unit) == (("level", "phase"), ("m", "1"), "1/m")
        assert_same(dict(density.marginals), dict(regime.marginals))
    for wrong in (-1, len(estimate.regimes)):
        with pytest.raises(UsageError, match=f"regime is {wrong}; it must be from 0 to"):
            result.density_of(wrong)


def test_matrix(result: Result, estimate: Estimate) -> None:
    assert_same(result.matrix(), estimate.tally)


def test_matrix_that_was_not_kept(tmp_path: Path) -> None:
    result = Result(make_estimate(side=4, matrix=False))
    result.save(tmp_path / "out.h5")
    with open_file(tmp_path / "out.h5") as opened:
        for each in (result, opened):
            assert each.tally is None
            with pytest.raises(UsageError, match="set \\[output\\] matrix = true"):
                each.matrix()


def every_number(value: Any) -> list[float]:
    if isinstance(value, dict):
        return [n for item in value.values() for n in every_number(item)]
    if isinstance(value, list):
        return [n for item in value for n in every_number(item)]
    return [value] if isinstance(value, float) else []


def test_to_dict_is_strict_json(result: Result, estimate: Estimate) -> None:
    found = result.to_dict()
    text = json.dumps(found, allow_nan=False)

    def refuse(constant: str) -> None:
        raise AssertionError(constant)

    assert json.loads(text, parse_constant=refuse) == found
    assert np.isfinite(every_number(found)).all()
    assert list(found) == [
        "case", "regimes", "cells", "outside_share", "effort", "half_of_bursts", "targets", "crosscheck",
    ]  # fmt: skip
    assert (found["effort"], found["half_of_bursts"], found["targets"]) == ([], None, [])
    assert found["case"]["accuracy"] == 0.05
    assert found["crosscheck"] is None
    assert found["cells"] == len(estimate.keys)
    assert found["case"]["seed"] == estimate.case.seed
    assert found["case"]["sha256"] == result.case_sha256
    assert found["case"]["messages"] == list(estimate.messages)
    assert len(found["regimes"]) == len(estimate.regimes)
    assert found == Result(estimate).to_dict()


def test_to_dict_of_numbers(tmp_path: Path) -> None:
    estimate = make_estimate()
    (regime,) = Result(estimate).to_dict()["regimes"]
    assert list(regime) == ["weight", "events", "observables", "marginals", "modes"]
    assert regime["modes"] == []
    ordinary, never = regime["events"][EVENTS[0]], regime["events"][EVENTS[1]]
    assert list(ordinary) == ["share", "entry_rate", "return_period", "mean_spell"]
    share = estimate.regimes[0].events[EVENTS[0]].share
    assert ordinary["share"] == {
        "value": share.value,
        "low": share.low,
        "high": share.high,
        "parts": {"sampling": 1e-3, "cell size": 2e-3},
        "unit": "1",
    }
    assert never["share"]["value"] is None
    assert never["share"]["reason"].startswith("never seen")
    assert never["return_period"]["high"] is None, "an infinite end is null"
    assert regime["observables"]["mean level"]["variance"]["unit"] == "(m)^2"
    marginal = regime["marginals"]["level"]
    assert len(marginal["edges"]) == len(marginal["mass"]) + 1 == len(marginal["error"]) + 1
    assert sum(marginal["mass"]) + marginal["below"] + marginal["above"] == pytest.approx(1.0, abs=1e-12)
    assert marginal["unit"] == "m"
    assert (marginal["low"], marginal["high"], marginal["parts"]) == (None, None, {})


def test_to_dict_of_a_steered_run(tmp_path: Path) -> None:
    estimate = make_steered(make_estimate())
    found = Result(estimate).to_dict()
    Result(estimate).save(tmp_path / "out.h5")
    with open_file(tmp_path / "out.h5") as opened:
        assert opened.to_dict() == found
    assert found["effort"][2] == {
        "stage": "reseeded", "sweeps": 24, "bursts": 10_000, "steps": 2_000_000, "seconds": 9.75,
    }  # fmt: skip
    assert found["targets"][1] == {
        "event": EVENTS[0], "number": "return_period", "wanted": 0.02, "reached": 0.25, "met": False,
        "reason": "the time step « half »",
    }  # fmt: skip
    assert found["targets"][2]["reached"] is None
    marginal, held = found["regimes"][0]["marginals"]["level"], estimate.regimes[0].marginals["level"]
    assert marginal["parts"] == {part: error.tolist() for part, error in held.parts.items()}
    assert held.low is not None
    assert marginal["low"] == held.low.tolist()


def test_focus_is_the_least_part_of_the_cells_that_got_half_of_the_bursts() -> None:
    estimate = make_estimate(side=8)
    n_cell = len(estimate.keys)
    assert n_cell == 21
    bursts = np.full(n_cell, 10)
    bursts[[3, 7]] = 95
    mass = np.arange(1.0, n_cell + 1.0) / np.arange(1.0, n_cell + 1.0).sum()
    regime = replace(estimate.regimes[0], cell=np.arange(n_cell), mass=mass)
    result = Result(replace(estimate, regimes=(regime,), cell_bursts=bursts))
    # 380 bursts, of which 190 from two cells: exactly half
    assert result.focus == (2 / n_cell, (pytest.approx(mass[3] + mass[7]),))
    bursts = bursts.copy()
    bursts[0] += 1
    result = Result(replace(estimate, regimes=(regime,), cell_bursts=bursts))
    assert result.focus == (3 / n_cell, (pytest.approx(mass[3] + mass[7] + mass[0]),))
    assert Result(estimate).focus is None
    assert Result(replace(estimate, cell_bursts=np.zeros(n_cell, dtype=np.int64))).focus is None


def test_results_are_pickled(tmp_path: Path) -> None:
    result = Result(make_estimate(side=8))
    result.save(tmp_path / "out.h5")
    _ = (result.events, result.density)
    again = pickle.loads(pickle.dumps(result))
    assert again.to_dict() == result.to_dict()
    with open_file(tmp_path / "out.h5") as opened:
        _ = (opened.events, opened.density)
        packed = pickle.dumps(opened)
    assert len(packed) < 500
    with pickle.loads(packed) as again:
        assert isinstance(again, DensityFile)
        assert again.path == str(tmp_path / "out.h5")
        assert again.to_dict() == result.to_dict()


def test_saving_what_was_read(tmp_path: Path) -> None:
    digest = Result(make_estimate(side=8)).save(tmp_path / "a.h5")
    with open_file(tmp_path / "a.h5") as opened:
        assert opened.save(tmp_path / "a.h5") == digest
        assert opened.cpu != "" or sys.platform != "linux"


def test_save_reports_with_the_estimate(tmp_path: Path) -> None:
    result = Result(make_estimate(side=4))
    with pytest.raises(OutputError) as caught:
        result.save(tmp_path / "no" / "out.h5")
    assert caught.value.estimate is result.estimate


def test_density_of_a_domain_that_is_left_at_times(tmp_path: Path) -> None:
    estimate = make_estimate(side=8)
    regime = replace(estimate.regimes[0], mass=0.75 * estimate.regimes[0].mass)
    result = Result(replace(estimate, regimes=(regime,)))
    assert result.density.inside == pytest.approx(0.75, rel=1e-12)


def test_results_need_no_heavy_library() -> None:
    code = (
        "import sys, perdure._result, perdure._store, perdure._density\n"
        "from perdure._store import check_target\n"
        "check_target('out.h5')\n"
        "print(sorted({'h5py', 'sparse', 'numba', 'xarray', 'scipy.stats', 'scipy'} & set(sys.modules)))\n"
        "perdure._store.load\n"
        "assert 'h5py' in sys.modules, 'negative control'"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
