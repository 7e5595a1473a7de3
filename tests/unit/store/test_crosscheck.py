"""The crosscheck in a density file: it comes back, and adding it is all or nothing."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest

import perdure
from helpers.synthetic_crosscheck import make_crosscheck
from helpers.synthetic_estimate import assert_same, make_estimate, make_steered
from perdure._records import Crosscheck
from perdure._store import add_crosscheck, crosscheck, load, save
from perdure.errors import DensityFileError, OutputError


@pytest.mark.parametrize("n_regime", [1, 2])
@pytest.mark.parametrize("verdict", ["agrees", "disagrees", "too short to tell"])
def test_everything_comes_back(tmp_path: Path, n_regime: int, verdict: str) -> None:
    estimate = replace(make_estimate(n_regime=n_regime), crosscheck=make_crosscheck(verdict, n_regime=n_regime))
    save(estimate, tmp_path / "out.h5")
    assert_same(load(tmp_path / "out.h5"), estimate)


def test_a_file_without_one_says_so(tmp_path: Path) -> None:
    save(make_estimate(), tmp_path / "out.h5")
    assert load(tmp_path / "out.h5").crosscheck is None
    with perdure.open(tmp_path / "out.h5") as opened:
        assert opened.crosscheck is None
        assert opened.to_dict()["crosscheck"] is None


def test_adding_changes_nothing_else(tmp_path: Path) -> None:
    path, estimate, found = tmp_path / "out.h5", make_steered(make_estimate(n_regime=2)), make_crosscheck(n_regime=2)
    save(estimate, path)
    digest = add_crosscheck(path, found)
    assert digest == hashlib.sha256(path.read_bytes()).hexdigest()
    assert_same(load(path), replace(estimate, crosscheck=found))
    with h5py.File(path) as file:
        assert bool(file.attrs["complete"])


def test_a_second_one_takes_the_place_of_the_first(tmp_path: Path) -> None:
    path = tmp_path / "out.h5"
    save(make_estimate(), path)
    add_crosscheck(path, make_crosscheck("disagrees"))
    other = make_crosscheck("agrees", seed=12)
    add_crosscheck(path, other)
    assert_same(load(path).crosscheck, other)


def test_large_files_are_changed_beside_the_old_one(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path, found = tmp_path / "out.h5", make_crosscheck()
    save(make_estimate(), path)
    monkeypatch.setattr(crosscheck, "MEMORY_LIMIT", 1)
    digest = add_crosscheck(path, found)
    assert digest == hashlib.sha256(path.read_bytes()).hexdigest()
    assert_same(load(path).crosscheck, found)


@pytest.mark.parametrize("limit", [10**9, 1])
def test_a_fault_on_the_way_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, limit: int) -> None:
    path, found = tmp_path / "out.h5", make_crosscheck()
    save(make_estimate(), path)
    before = path.read_bytes()
    monkeypatch.setattr(crosscheck, "MEMORY_LIMIT", limit)

    def broken(*_: object) -> None:
        raise ValueError("no more")

    monkeypatch.setattr(crosscheck, "put_predictability", broken)
    with pytest.raises(OutputError, match="no more") as caught:
        add_crosscheck(path, found)
    assert caught.value.estimate is found
    assert path.read_bytes() == before
    assert [item.name for item in tmp_path.iterdir()] == ["out.h5"]


def test_an_interrupt_on_the_way_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "out.h5"
    save(make_estimate(), path)
    before = path.read_bytes()

    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(crosscheck, "put_comparisons", interrupted)
    with pytest.raises(KeyboardInterrupt):
        add_crosscheck(path, make_crosscheck())
    assert path.read_bytes() == before
    assert [item.name for item in tmp_path.iterdir()] == ["out.h5"]


def test_damage_names_the_group(tmp_path: Path) -> None:
    path = tmp_path / "out.h5"
    save(replace(make_estimate(), crosscheck=make_crosscheck()), path)
    with h5py.File(path, "r+") as file:
        del file["crosscheck/verdict"]
    with perdure.open(path) as opened, pytest.raises(DensityFileError, match="/crosscheck"):
        opened.crosscheck  # noqa: B018


def test_plain_data_are_those_of_the_record(tmp_path: Path) -> None:
    found: Crosscheck = make_crosscheck("too short to tell", n_regime=2)
    save(replace(make_estimate(n_regime=2), crosscheck=found), tmp_path / "out.h5")
    with perdure.open(tmp_path / "out.h5") as opened:
        plain = opened.to_dict()["crosscheck"]
    assert plain["verdict"] == "too short to tell"
    assert set(plain) >= {"events", "observables", "marginals", "starts", "lyapunov", "sum_check", "dimension"}
    assert plain["events"]["coût élevé"]["share"]["trajectories"]["value"] == 0.255
    assert plain["observables"]["mean level"]["mean"]["length"] == 102_400.0
    assert [exponent["value"] for exponent in plain["lyapunov"]] == [0.5, 0.0, None]
    assert plain["sum_check"]["density"]["value"] == -3.0
    assert plain["starts"]["in_regime"] == [100, 100, 28]
    np.testing.assert_array_equal(plain["marginals"]["mass"]["mass"], found.marginals[1].mass)
    assert [part["lyapunov"][0]["value"] for part in plain["regimes"]] == [0.5, 0.5]
