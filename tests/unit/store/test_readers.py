"""Other readers see the same numbers, axes, units and text."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray

from helpers.synthetic_crosscheck import make_crosscheck
from helpers.synthetic_estimate import EVENTS, make_estimate, make_steered
from perdure._records import Estimate
from perdure._store import save

with warnings.catch_warnings():
    # Built against another numpy: its own check compares sizes that only ever grow.
    warnings.filterwarnings("ignore", message="numpy.ndarray size changed")
    import netCDF4

ENGINES = ["h5netcdf", "netcdf4"]


@pytest.fixture(scope="module", params=[(0, False), (2, False), (2, True)], ids=["leaking", "two", "steered"])
def written(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Estimate]:
    path = tmp_path_factory.mktemp("readers") / "out.h5"
    n_regime, steered = request.param
    estimate = make_estimate(n_regime=n_regime)
    if steered:
        estimate = replace(make_steered(estimate), crosscheck=make_crosscheck(n_regime=n_regime))
    save(estimate, path)
    return path, estimate


def groups_of(path: Path) -> dict[str, dict[str, np.ndarray]]:
    """Variables of every group, read with h5py; bare axes left out."""
    found: dict[str, dict[str, np.ndarray]] = {"/": {}}

    def visit(name: str, item: h5py.HLObject) -> None:
        if isinstance(item, h5py.Group):
            found[f"/{name}"] = {}
        elif not str(item.attrs.get("NAME", "")).startswith(("This is a netCDF", "b'This is a netCDF")):
            group, _, variable = f"/{name}".rpartition("/")
            text = h5py.check_string_dtype(item.dtype) is not None
            found[group or "/"][variable] = np.asarray(item.asstr()[()] if text else item[()])

    with h5py.File(path) as file:
        file.visititems(visit)
    return found


def test_every_group_is_there(written: tuple[Path, Estimate]) -> None:
    path, estimate = written
    expected = {"/", "/cells", "/regimes", "/density", "/marginals", "/events", "/observables", "/budget"}
    expected |= {"/matrix", "/provenance"}
    expected |= {"/effort", "/targets"} if estimate.targets else set()
    if estimate.regimes:
        expected |= {"/marginals/level", "/marginals/phase"}
    if estimate.crosscheck is not None:
        expected |= {"/crosscheck", "/crosscheck/marginals", "/crosscheck/predictability"}
        for k in range(len(estimate.regimes)):
            expected |= {f"/crosscheck/predictability/{k}", f"/crosscheck/marginals/{k}"}
            expected |= {f"/crosscheck/marginals/{k}/{name}" for name in ("level", "mass")}
    for k in range(1, len(estimate.regimes)):
        parts = (
            "",
            "/density",
            "/events",
            "/observables",
            "/marginals",
            "/marginals/level",
            "/marginals/phase",
        )
        expected |= {f"/regimes/{k}{part}" for part in parts}
    assert set(groups_of(path)) == expected


@pytest.mark.parametrize("engine", ENGINES)
def test_xarray_reads_every_group(written: tuple[Path, Estimate], engine: str) -> None:
    path, _ = written
    for group, variables in groups_of(path).items():
        with xarray.open_dataset(path, group=group, engine=engine) as data:
            assert set(data.variables) == set(variables), group
            assert not [dim for dim in data.sizes if str(dim).startswith("phony")], group
            for name, expected in variables.items():
                found = data[name].values
                if expected.dtype.kind == "O":
                    assert np.asarray(found).tolist() == expected.tolist(), f"{group}/{name}"
                else:
                    assert found.dtype == expected.dtype, f"{group}/{name}"
                    np.testing.assert_array_equal(found, expected, err_msg=f"{group}/{name}")


@pytest.mark.parametrize("engine", ENGINES)
def test_xarray_reads_the_tree(written: tuple[Path, Estimate], engine: str) -> None:
    path, estimate = written
    with xarray.open_datatree(path, engine=engine) as tree:
        assert tree.attrs["case_text"] == estimate.case.text
        assert tree.attrs["format_version"] == 1
        assert tree["density"]["mass"].sizes["cell"] == (len(estimate.keys) if estimate.regimes else 0)


@pytest.mark.parametrize("engine", ENGINES)
def test_rows_are_found_by_their_names(written: tuple[Path, Estimate], engine: str) -> None:
    path, estimate = written
    if not estimate.regimes:
        with xarray.open_dataset(path, group="events", engine=engine) as data:
            assert data.sizes["event"] == 0
        return
    regime = estimate.regimes[0]
    with xarray.open_dataset(path, group="events", engine=engine) as data:
        row = data.sel(event=EVENTS[0])
        assert row["share"].item() == regime.events[EVENTS[0]].share.value
        assert row["condition"].item() == "level > 1.5"
        assert row["until"].item() == "level < 1"
        assert data["return_period"].attrs["units"] == "days"
        assert data["return_period"].dtype == np.float64
        assert data["entry_rate"].attrs["units"] == "1/days"
    with xarray.open_dataset(path, group="observables", engine=engine) as data:
        row = data.sel(observable="mean level")
        assert row["variance_unit"].item() == "(m)^2"
        assert row["expression"].item() == "level"
    with xarray.open_dataset(path, group="density", engine=engine) as data:
        assert data["density"].attrs["units"] == "1/m"
        assert data["cell"].attrs["compress"] == "level phase"
        assert data["level"].attrs == {
            "units": "m",
            "long_name": "cell centre in level",
            "bounds": "level_bnds",
            "component": "level",
        }
        np.testing.assert_array_equal(data["cell"], estimate.keys)
        assert float(data["mass"].sum()) == pytest.approx(1.0, abs=1e-12)


def nodes(dataset: netCDF4.Dataset) -> Iterator[netCDF4.Dataset]:
    yield dataset
    for child in dataset.groups.values():
        yield from nodes(child)


def test_netcdf4_reads_everything(written: tuple[Path, Estimate]) -> None:
    path, _ = written
    expected = groups_of(path)
    with netCDF4.Dataset(path) as dataset:
        dataset.set_auto_mask(False)
        seen = 0
        for node in nodes(dataset):
            read = {name: node.getncattr(name) for name in node.ncattrs()}
            assert node.path == "/" or "long_name" in read or "component" in read, node.path
            assert set(node.variables) == set(expected[node.path]), node.path
            for name, variable in node.variables.items():
                where, found, value = f"{node.path}/{name}", variable[()], expected[node.path][name]
                attributes = {key: variable.getncattr(key) for key in variable.ncattrs()}
                assert "long_name" in attributes or name.endswith("_bnds"), where
                if value.dtype.kind == "O":
                    assert np.asarray(found, dtype=object).tolist() == value.tolist(), where
                else:
                    np.testing.assert_array_equal(found, value, err_msg=where)
                seen += 1
    assert seen > 60


def test_numbers_have_units(written: tuple[Path, Estimate]) -> None:
    """Every number has `units`, or says where they are: a table with a unit per row, or flags."""
    path, _ = written
    without = []

    def visit(name: str, item: h5py.HLObject) -> None:
        if isinstance(item, h5py.Dataset) and item.dtype.kind in "iuf" and "units" not in item.attrs:
            without.append(name)

    with h5py.File(path) as file:
        file.visititems(visit)
        rest = [name for name in without if not bare(file[name]) and not unit_beside(file, name)]
    assert rest == []


def bare(item: h5py.Dataset) -> bool:
    return bytes(item.attrs.get("NAME", b"")).startswith(b"This is a netCDF")


def unit_beside(file: h5py.File, name: str) -> bool:
    group, _, variable = name.rpartition("/")
    members = file[group]
    stem = variable.split("_")[0]
    per_row = "unit" in members or f"{stem}_unit" in members
    return per_row or "flag_meanings" in file[name].attrs or "comment" in file[name].attrs


def test_numeric_groups_hold_no_text(written: tuple[Path, Estimate]) -> None:
    """A reader that stops at the first text variable still gets these."""
    path, estimate = written
    clean = ["/cells", "/density", "/matrix", "/marginals/level"]
    if estimate.regimes:
        clean.append("/regimes")
    groups = groups_of(path)
    for group in clean:
        assert all(v.dtype.kind != "O" for v in groups.get(group, {}).values()), group
    assert any(v.dtype.kind == "O" for v in groups["/events"].values())


def test_netcdf4_can_append(tmp_path: Path) -> None:
    save(make_estimate(side=4), tmp_path / "out.h5")
    with netCDF4.Dataset(tmp_path / "out.h5", "a") as dataset:
        dataset.groups["density"].createVariable("twice", "f8", ("cell",))[:] = 2.0
        dataset.note = "added"
    with h5py.File(tmp_path / "out.h5") as file:
        assert (file["density/twice"][()] == 2.0).all()


def test_layout_on_disk(written: tuple[Path, Estimate]) -> None:
    """Large variables are compressed with a checksum in long chunks, small ones contiguous."""
    path, estimate = written
    if not estimate.regimes:
        return
    with h5py.File(path) as file:
        count = file["matrix/count"]
        assert (count.compression, count.shuffle, count.fletcher32) == ("gzip", True, True)
        assert count.dtype == (np.float32 if estimate.targets else np.uint16)
        assert count.chunks == count.shape
        assert file["matrix/column"].dtype == np.int32
        assert file["cells/counts"].chunks is None
        assert file["cells/periodic"].dtype == np.int8
        assert file["events/share"].attrs["ancillary_variables"].split() == [
            "share_low",
            "share_high",
            "share_se",
            "share_se_sampling",
            "share_se_cell_size",
            "share_reason",
        ]
