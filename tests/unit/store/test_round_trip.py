"""What is written comes back, to the last bit."""

from __future__ import annotations

import hashlib
import json
import pickle
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from helpers.synthetic_estimate import EVENTS, assert_same, make_estimate, make_steered
from perdure._records import Quantity
from perdure._store import load, open_file, save, write
from perdure._store.layout import OPTIONS, group, put_text
from perdure._store.tables import put_quantities, read_quantities


@pytest.mark.parametrize("n_regime", [0, 1, 2])
@pytest.mark.parametrize("side", [4, 32])
def test_everything_comes_back(tmp_path: Path, n_regime: int, side: int) -> None:
    estimate = make_estimate(n_regime=n_regime, side=side)
    save(estimate, tmp_path / "out.h5")
    assert_same(load(tmp_path / "out.h5"), estimate)


@pytest.mark.parametrize("n_regime", [0, 1, 2])
@pytest.mark.parametrize("side", [4, 32])
def test_a_steered_run_comes_back(tmp_path: Path, n_regime: int, side: int) -> None:
    """Parts of the marginals, weights of reseeded bursts, effort, targets, bursts by cell."""
    estimate = make_steered(make_estimate(n_regime=n_regime, side=side))
    digest = save(estimate, tmp_path / "out.h5")
    again = load(tmp_path / "out.h5")
    assert_same(again, estimate)
    assert again.tally is not None
    assert (again.tally.count.dtype, again.tally.bursts.dtype) == (np.float32, np.float64)
    assert save(again, tmp_path / "again.h5") == digest
    assert (tmp_path / "out.h5").stat().st_size < write.size_of(estimate)


def test_what_a_plain_run_has_not_is_not_in_its_file(tmp_path: Path) -> None:
    save(make_estimate(), tmp_path / "out.h5")
    with h5py.File(tmp_path / "out.h5") as file:
        assert not {"effort", "targets"} & set(file)
        assert "bursts" not in file["cells"]
        assert "together" not in file["matrix"].attrs
        assert set(file["marginals/level"]) == {"level", "level_bnds", "bnds", "mass", "mass_se"}
        assert file["matrix/bursts"].dtype == np.int64
        assert file["matrix/count"].dtype == np.uint16


def test_no_accuracy_is_left_out(tmp_path: Path) -> None:
    estimate = make_estimate(side=4)
    for accuracy in (None, 0.02):
        changed = replace(estimate, case=replace(estimate.case, accuracy=accuracy))
        save(changed, tmp_path / "out.h5")
        assert load(tmp_path / "out.h5").case.accuracy == accuracy
        with h5py.File(tmp_path / "out.h5") as file:
            assert ("accuracy" in json.loads(file.attrs["case"])) is (accuracy is not None)


def test_parts_of_a_marginal_stand_beside_its_masses(tmp_path: Path) -> None:
    estimate = make_steered(make_estimate())
    save(estimate, tmp_path / "out.h5")
    marginal = estimate.regimes[0].marginals["level"]
    with h5py.File(tmp_path / "out.h5") as file:
        group = file["marginals/level"]
        names = ["mass_low", "mass_high", "mass_se", "mass_se_sampling", "mass_se_cells", "mass_se_step"]
        assert group["mass"].attrs["ancillary_variables"].split() == names
        np.testing.assert_array_equal(group["mass_se_cells"][()], marginal.parts["cells"])
        np.testing.assert_array_equal(group["mass_low"][()], marginal.low)
        together = np.sqrt(sum(group[f"mass_se_{part}"][()] ** 2 for part in ("sampling", "cells", "step")))
        np.testing.assert_allclose(group["mass_se"][()], together, rtol=1e-14)


@pytest.mark.parametrize("state", [("mass_low", "mass_se_cells"), ("mass_high", "mass_se")])
def test_components_named_like_what_stands_beside_the_masses(tmp_path: Path, state: tuple[str, str]) -> None:
    estimate = make_steered(make_estimate(side=4, state=state))
    save(estimate, tmp_path / "out.h5")
    assert_same(load(tmp_path / "out.h5"), estimate)


def test_effort_and_targets_are_tables(tmp_path: Path) -> None:
    estimate = make_steered(make_estimate())
    save(estimate, tmp_path / "out.h5")
    with h5py.File(tmp_path / "out.h5") as file:
        effort, targets = file["effort"], file["targets"]
        assert effort["stage"].asstr()[()].tolist() == ["pilot", "cover", "reseeded", "half step"]
        assert effort["steps"][3] == 3 * 10**12
        assert targets["target"].asstr()[1] == f"events/{EVENTS[0]}/return_period"
        assert targets["met"][()].tolist() == [1, 0, 0]
        assert np.isnan(targets["reached"][2])
        np.testing.assert_array_equal(file["cells/bursts"][()], estimate.cell_bursts)
        assert file["matrix"].attrs["together"] == 1


def test_comparison_notices_a_changed_bit() -> None:
    """Negative control of `assert_same`."""
    estimate = make_estimate()
    mass = estimate.regimes[0].mass.copy()
    mass[3] = np.nextafter(mass[3], 1.0)
    changed = replace(estimate, regimes=(replace(estimate.regimes[0], mass=mass),))
    with pytest.raises(AssertionError, match="mass"):
        assert_same(changed, estimate)
    with pytest.raises(AssertionError, match="keys"):
        assert_same(replace(estimate, keys=estimate.keys.astype(np.int32)), estimate)


def test_without_matrix(tmp_path: Path) -> None:
    save(make_estimate(matrix=False), tmp_path / "out.h5")
    with h5py.File(tmp_path / "out.h5") as file:
        assert "matrix" not in file
    assert load(tmp_path / "out.h5").tally is None


def test_components_named_like_variables_of_the_file(tmp_path: Path) -> None:
    """A state component may be called as the file calls its own variables."""
    for state in (("cell", "mass"), ("density", "bnds"), ("x", "x_bnds")):
        estimate = make_estimate(side=4, state=state)
        save(estimate, tmp_path / "out.h5")
        assert_same(load(tmp_path / "out.h5"), estimate)


def test_outside_state_with_a_row(tmp_path: Path) -> None:
    """The tally may have one row more than there are cells, and the masses then sum to less than one."""
    estimate, larger = make_estimate(side=4), make_estimate(side=6)
    regime = replace(estimate.regimes[0], mass=0.75 * estimate.regimes[0].mass)
    estimate = replace(estimate, regimes=(regime,), tally=larger.tally)
    save(estimate, tmp_path / "out.h5")
    assert_same(load(tmp_path / "out.h5"), estimate)
    with h5py.File(tmp_path / "out.h5") as file:
        assert file["matrix"].attrs["outside_column"] == len(estimate.keys)
        assert file["matrix/pointer"].shape == (len(larger.keys) + 1,)


def test_hash_is_that_of_the_file_and_saving_again_gives_the_same_bytes(tmp_path: Path) -> None:
    first, second = tmp_path / "first.h5", tmp_path / "second.h5"
    digest = save(make_estimate(n_regime=2, side=8), first)
    assert digest == hashlib.sha256(first.read_bytes()).hexdigest()
    assert save(load(first), second) == digest
    assert save(make_estimate(n_regime=2, side=8, seed=4), second) != digest


def test_large_file_is_the_same(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Above the memory limit HDF5 writes the temporary file itself."""
    estimate = make_estimate(n_regime=2)
    monkeypatch.setattr(write, "MEMORY_LIMIT", 0)
    monkeypatch.setattr(write, "in_memory", None)
    digest = save(estimate, tmp_path / "out.h5")
    assert digest == hashlib.sha256((tmp_path / "out.h5").read_bytes()).hexdigest()
    assert_same(load(tmp_path / "out.h5"), estimate)
    assert [p.name for p in tmp_path.iterdir()] == ["out.h5"]


def test_size_is_an_upper_bound(tmp_path: Path) -> None:
    """The room asked for is enough, and not many times what the arrays need."""
    for side in (32, 100):
        estimate = make_estimate(n_regime=2, side=side)
        save(estimate, tmp_path / "out.h5")
        assert (tmp_path / "out.h5").stat().st_size < write.size_of(estimate)
    assert write.size_of(estimate) < 3e6


def test_stored_parts_by_themselves(tmp_path: Path) -> None:
    estimate = make_estimate(n_regime=2)
    save(estimate, tmp_path / "out.h5")
    with open_file(tmp_path / "out.h5") as stored:
        assert stored.n_cell == len(estimate.keys)
        assert stored.n_regime == 2
        assert stored.weights == tuple(r.weight for r in estimate.regimes)
        assert stored.cpu == write.cpu_name()
        for k, regime in enumerate(estimate.regimes):
            assert_same(stored.mass_of(k), regime.mass)
            assert_same(stored.cells_of(k), regime.cell)
        assert not stored.keys.flags.writeable


def test_stored_estimate_is_pickled_by_path(tmp_path: Path) -> None:
    save(make_estimate(), tmp_path / "out.h5")
    with open_file(tmp_path / "out.h5") as stored:
        packed = pickle.dumps(stored)
    assert len(packed) < 500
    with pickle.loads(packed) as again:
        assert_same(again.estimate(), make_estimate())


def test_case_and_seed_are_kept_verbatim(tmp_path: Path) -> None:
    estimate = make_estimate()
    save(estimate, tmp_path / "out.h5")
    with h5py.File(tmp_path / "out.h5") as file:
        assert file.attrs["case_text"] == estimate.case.text
        assert file.attrs["case_sha256"] == hashlib.sha256(estimate.case.text.encode()).hexdigest()
        assert file.attrs["seed"] == str(estimate.case.seed)
        assert list(file["events/event"].asstr()[()]) == list(EVENTS)
        assert list(file.attrs)[-1] == "complete"


def test_long_case_text(tmp_path: Path) -> None:
    """Text above the 64 kB that an attribute holds in old HDF5 layouts."""
    estimate = make_estimate(side=4)
    estimate = replace(estimate, case=replace(estimate.case, text="# ρ\n" * 60_000))
    save(estimate, tmp_path / "out.h5")
    assert_same(load(tmp_path / "out.h5"), estimate)


def test_missing_numbers_are_nan_in_the_file(tmp_path: Path) -> None:
    save(make_estimate(), tmp_path / "out.h5")
    with h5py.File(tmp_path / "out.h5") as file:
        events = file["events"]
        assert np.isnan(events["share"][1])
        assert events["share_high"][1] == 1e-5
        assert np.isnan(events["mean_spell_low"]).all()
        assert events["return_period_high"][1] == np.inf
        assert np.isnan(events["share_se_cell_size"][2])
        assert events["share_se"][0] == pytest.approx(np.hypot(1e-3, 2e-3), rel=1e-15)
        assert events["share_reason"].asstr()[1].startswith("never seen")


def test_budget_lists_every_number(tmp_path: Path) -> None:
    estimate = make_estimate(n_regime=2)
    save(estimate, tmp_path / "out.h5")
    with h5py.File(tmp_path / "out.h5") as file:
        budget = file["budget"]
        names = list(budget["number"].asstr()[()])
        assert len(names) == len(set(names)) == 2 * (1 + 3 * 4 + 2 * 2) + 1
        at = names.index(f"events/{EVENTS[0]}/share")
        assert budget["cell_size"][at] == 2e-3
        assert budget["sampling"][at] == 1e-3
        at = names.index("regimes/1/observables/swing/mean")
        assert budget["value"][at] == estimate.regimes[1].observables["swing"].mean.value
        at = names.index(f"events/{EVENTS[1]}/share")
        assert np.isnan(budget["value"][at])
        assert (budget["low"][at], budget["high"][at]) == (0.0, 1e-5)
        assert np.isnan(budget["total"][names.index("regimes/1/observables/swing/variance")])


NUMBERS = st.none() | st.floats(allow_nan=False)
WORDS = st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=20)
PARTS = st.dictionaries(WORDS, st.floats(min_value=0.0, max_value=1e9), max_size=3)
QUANTITIES = st.builds(Quantity, NUMBERS, NUMBERS, NUMBERS, PARTS, WORDS, WORDS)


@settings(max_examples=15)
@given(st.lists(QUANTITIES, min_size=1, max_size=4), st.booleans())
def test_any_column_of_quantities_comes_back(column: list[Quantity], with_text: bool) -> None:
    with h5py.File("q", "w", driver="core", backing_store=False, **OPTIONS) as file:
        made = group(file, "g")
        put_text(made, "row", [str(k) for k in range(len(column))], ("row",))
        put_quantities(made, "number", column, ("row",), long_name="any", with_text=with_text)
        put_quantities(made, "single", column[:1], (), long_name="any", with_text=with_text)
        assert read_quantities(made, "number") == column
        assert read_quantities(made, "single") == column[:1]
