"""Whatever stands at the path, the user gets one DensityFileError that says what it is."""

from __future__ import annotations

import gzip
import os
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

import h5py
import numpy as np
import pytest

from helpers.synthetic_estimate import assert_same, make_estimate, make_steered
from perdure._result import DensityFile, open_file
from perdure._store import load, save
from perdure.errors import DensityFileError

DATA = Path(__file__).parent / "data"


@pytest.fixture(scope="module")
def pristine(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A file large enough for its masses to carry a checksum."""
    path = tmp_path_factory.mktemp("damage") / "pristine.h5"
    save(make_estimate(side=48), path)
    return path


@pytest.fixture
def path(pristine: Path, tmp_path: Path) -> Path:
    return Path(shutil.copy(pristine, tmp_path / "out.h5"))


def said(path: str | Path) -> str:
    with pytest.raises(DensityFileError) as caught:
        open_file(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ")
    assert "\n" not in text
    return text


def test_missing(tmp_path: Path) -> None:
    assert "there is no such file" in said(tmp_path / "none.h5")


def test_folder(tmp_path: Path) -> None:
    assert "is a folder" in said(tmp_path)


def test_empty(tmp_path: Path) -> None:
    (tmp_path / "out.h5").touch()
    assert "is empty" in said(tmp_path / "out.h5")


def test_not_hdf5(tmp_path: Path) -> None:
    (tmp_path / "out.h5").write_text("[case]\n")
    assert "is not an HDF5 file" in said(tmp_path / "out.h5")


def test_path_with_nul() -> None:
    with pytest.raises(DensityFileError, match="cannot be opened"):
        open_file("a\0b")


def test_no_permission() -> None:
    folder = Path(tempfile.mkdtemp())
    try:
        folder.chmod(0o755)
        (folder / "out.h5").write_bytes(b"x")
        (folder / "out.h5").chmod(0)
        root = os.geteuid() == 0
        if root:
            os.seteuid(65534)
        try:
            assert "no permission to read" in said(folder / "out.h5")
        finally:
            if root:
                os.seteuid(0)
    finally:
        shutil.rmtree(folder)


@pytest.mark.parametrize("part", [0.3, 0.9, 0.9999])
def test_cut_short(path: Path, part: float) -> None:
    content = path.read_bytes()
    path.write_bytes(content[: int(part * len(content))])
    assert "is cut short" in said(path)


def test_foreign_hdf5(tmp_path: Path) -> None:
    with h5py.File(tmp_path / "out.h5", "w") as file:
        file["x"] = 1.0
    assert "it has no attribute format" in said(tmp_path / "out.h5")


def set_attribute(path: Path, name: str, value: object) -> None:
    with h5py.File(path, "a") as file:
        file.attrs[name] = value


def test_other_format(path: Path) -> None:
    set_attribute(path, "format", "another")
    text = said(path)
    assert "its attribute format is 'another'" in text
    assert "allowed: a file whose attribute 'format' is 'perdure-density'" in text


def test_newer_format(path: Path) -> None:
    set_attribute(path, "format_version", np.int32(2))
    assert "has format 2, this perdure reads formats up to 1; update perdure" in said(path)


@pytest.mark.parametrize("value", ["new", 0])
def test_senseless_format_version(path: Path, value: object) -> None:
    set_attribute(path, "format_version", value)
    assert f"format_version is {value!r}" in said(path)


def test_unfinished(path: Path) -> None:
    with h5py.File(path, "a") as file:
        del file.attrs["complete"]
    assert "was not written to its end" in said(path)


def test_writer_was_killed(tmp_path: Path) -> None:
    """The flag that HDF5 leaves in a file whose writer never closed it."""
    with h5py.File(tmp_path / "out.h5", "w", libver=("v110", "v110")) as file:
        file["x"] = 1.0
        file.flush()
        content = (tmp_path / "out.h5").read_bytes()
    (tmp_path / "out.h5").write_bytes(content)
    assert "was never finished: its writer was stopped" in said(tmp_path / "out.h5")


def flip(path: Path, offset: int) -> None:
    content = bytearray(path.read_bytes())
    content[offset] ^= 0x10
    path.write_bytes(content)


def middle_of(path: Path, name: str) -> int:
    """Offset of a byte in the middle of the first chunk of a variable."""
    with h5py.File(path) as file:
        chunk = file[name].id.get_chunk_info(0)
        return int(chunk.byte_offset + chunk.size // 2)


def test_flipped_bit_in_the_masses(path: Path) -> None:
    flip(path, middle_of(path, "density/mass"))
    with open_file(path) as opened:
        assert set(opened.events) == set(make_estimate(side=48).regimes[0].events)
        for _ in range(2):
            with pytest.raises(DensityFileError, match=r"out\.h5, /density/mass: cannot be read .*damaged"):
                _ = opened.density
        with pytest.raises(DensityFileError, match="/density/mass"):
            opened.save(path.parent / "copy.h5")
    with pytest.raises(DensityFileError, match="/density/mass"):
        load(path)


def test_flipped_bit_elsewhere_does_not_matter(path: Path) -> None:
    """Negative control: the same damage in a variable that is not asked for."""
    flip(path, middle_of(path, "matrix/count"))
    with open_file(path) as opened:
        assert opened.density.inside == pytest.approx(1.0)
        with pytest.raises(DensityFileError, match="/matrix/count"):
            opened.matrix()


@pytest.mark.parametrize(
    ("name", "ask"),
    [
        ("density", "density"),
        ("events/share_low", "events"),
        ("events/event", "events"),
        ("observables/mean_unit", "observables"),
        ("marginals/level/mass", "marginals"),
        ("regimes/weight", "density"),
        ("regimes/period", "regimes"),
        ("regimes/outside_share", "outside_share"),
        ("cells/width", "grid"),
        ("cells/cell", "keys"),
        ("cells/cell", "n_cell"),
        ("cells", "basins"),
        ("matrix/bursts", "tally"),
        ("provenance/seed_key", "plan"),
    ],
)
def test_missing_parts(path: Path, name: str, ask: str) -> None:
    with h5py.File(path, "a") as file:
        del file[name]
    with open_file(path) as opened, pytest.raises(DensityFileError, match=r"out\.h5, /.*cannot be read"):
        getattr(opened, ask)


@pytest.mark.parametrize(
    ("name", "ask"),
    [
        ("effort/steps", "effort"),
        ("targets/reached", "targets"),
        ("targets/reason", "targets"),
        ("marginals/level/mass_low", "marginals"),
        ("marginals/level/mass_se_cells", "marginals"),
    ],
)
def test_missing_parts_of_a_steered_run(tmp_path: Path, name: str, ask: str) -> None:
    path = tmp_path / "out.h5"
    save(make_steered(make_estimate()), path)
    with open_file(path) as opened:
        assert getattr(opened, ask), "nothing is missing yet"
    with h5py.File(path, "a") as file:
        del file[name]
    with open_file(path) as opened, pytest.raises(DensityFileError, match=r"out\.h5, /.*cannot be read"):
        getattr(opened, ask)


@pytest.mark.parametrize("name", ["case", "plan", "messages", "counts", "timings", "packages"])
@pytest.mark.parametrize("value", ["{", "1", None])
def test_broken_attributes(path: Path, name: str, value: str | None) -> None:
    with h5py.File(path, "a") as file:
        del file.attrs[name]
        if value is not None:
            file.attrs[name] = value
    broken = pytest.raises(DensityFileError, match=f"attribute {name}: cannot be read")
    with open_file(path) as opened, broken:
        getattr(opened, name)


@pytest.mark.parametrize("name", ["outcome", "checks_passed", "command", "created", "cpu"])
def test_missing_attributes(path: Path, name: str) -> None:
    with h5py.File(path, "a") as file:
        del file.attrs[name]
    with open_file(path) as opened, pytest.raises(DensityFileError, match=f"attribute {name}"):
        getattr(opened, name)


def test_masses_that_do_not_fit_the_cells(path: Path) -> None:
    with h5py.File(path, "a") as file:
        del file["density/mass"]
        file["density/mass"] = np.ones(3)
    with open_file(path) as opened, pytest.raises(DensityFileError, match="3 masses for"):
        _ = opened.density


@pytest.mark.parametrize("value", [np.nan, -1.0, 2.0])
def test_masses_that_are_none(path: Path, value: float) -> None:
    """Damage that no checksum has noticed."""
    with h5py.File(path, "a") as file:
        file["density/mass"][5] = value
    with open_file(path) as opened, pytest.raises(DensityFileError, match="the masses sum to"):
        _ = opened.density


def test_damaged_metadata_is_an_error_of_ours(path: Path) -> None:
    """Every byte of the superblock, which carries a checksum, and those that begin the root group."""
    content = path.read_bytes()
    for offset in range(8, 56):
        damaged = bytearray(content)
        damaged[offset] ^= 0xFF
        path.write_bytes(damaged)
        with pytest.raises(DensityFileError, match=r"damaged|is cut short|is not an HDF5 file"):
            open_file(path)


# --------------------------------------------------------------------------------- life of a file


def test_closed(path: Path) -> None:
    opened = open_file(path)
    events = opened.events
    opened.close()
    opened.close()
    assert opened.events is events
    assert opened.outcome == "one-regime"
    with pytest.raises(DensityFileError, match="was closed; open it again"):
        _ = opened.density


def test_vanished_or_replaced_while_open(path: Path) -> None:
    """An open file keeps what it had; opened again it is gone."""
    with open_file(path) as opened:
        save(make_estimate(side=48, seed=9), path)
        assert_same(opened.estimate, make_estimate(side=48))
        path.unlink()
        assert opened.tally is not None
    assert "there is no such file" in said(path)


@pytest.fixture
def oldest(tmp_path: Path) -> Iterator[DensityFile]:
    """A small file as the first release wrote it."""
    path = tmp_path / "format1.h5"
    path.write_bytes(gzip.decompress((DATA / "format1.h5.gz").read_bytes()))
    with open_file(path) as opened:
        yield opened


def test_format_1_still_opens(oldest: DensityFile) -> None:
    assert_same(oldest.estimate, make_estimate(n_regime=2, side=4, seed=1))
    assert oldest.density.inside == pytest.approx(1.0)
    assert (oldest.effort, oldest.targets, oldest.cell_bursts) == ((), (), None)
    assert (DATA / "format1.h5.gz").stat().st_size < 60_000
