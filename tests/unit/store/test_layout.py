"""What netCDF readers cannot take is refused before it is written."""

from __future__ import annotations

from collections.abc import Iterator

import h5py
import numpy as np
import pytest

from perdure._store.layout import CHECKSUM_FROM, OPTIONS, attrs, bare_dim, free_names, group, put, put_text


@pytest.fixture
def made() -> Iterator[h5py.Group]:
    with h5py.File("layout", "w", driver="core", backing_store=False, **OPTIONS) as file:
        group_made = group(file, "g")
        put(group_made, "x", np.arange(3.0), ("x",), units="1")
        yield group_made


@pytest.mark.parametrize("dtype", ["c16", "f2", "longdouble", "U4", "S4", "M8[s]", "O"])
def test_foreign_types(made: h5py.Group, dtype: str) -> None:
    with pytest.raises(TypeError, match="is not a netCDF type"):
        put(made, "y", np.zeros(3, dtype=dtype), ("x",))
    assert "y" not in made


@pytest.mark.parametrize("dtype", ["f4", "f8", "i1", "i2", "i4", "i8", "u1", "u2", "u4", "u8"])
def test_plain_types(made: h5py.Group, dtype: str) -> None:
    put(made, "y", np.ones(3, dtype=dtype), ("x",))
    assert made["y"].dtype == np.dtype(dtype)
    assert made["y"].dims[0][0] == made["x"]


def test_bool_becomes_flags(made: h5py.Group) -> None:
    put(made, "y", [True, False, True], ("x",))
    assert made["y"].dtype == np.int8
    assert made["y"].attrs["flag_meanings"] == "false true"
    np.testing.assert_array_equal(made["y"].attrs["flag_values"], [0, 1])


@pytest.mark.parametrize("dims", [("x", "x"), ("x",), ()])
def test_axes_must_be_named_once_each(made: h5py.Group, dims: tuple[str, ...]) -> None:
    with pytest.raises(ValueError, match="each needs a name of its own"):
        put(made, "y", np.zeros((3, 3)), dims)
    assert "y" not in made


@pytest.mark.parametrize("value", [np.zeros((2, 2)), None, 1j, np.array([True]), [b"text"]])
def test_foreign_attributes(made: h5py.Group, value: object) -> None:
    with pytest.raises(TypeError, match="attribute bad"):
        attrs(made, bad=value)


def test_plain_attributes(made: h5py.Group) -> None:
    attrs(made, text="ρ", empty="", yes=True, number=2.5, count=np.int32(1), line=np.arange(4))
    assert made.attrs["text"] == "ρ"
    assert made.attrs["empty"] == ""
    assert made.attrs["yes"].dtype == np.int8
    assert made.attrs["count"].dtype == np.int32
    assert list(made.attrs["line"]) == [0, 1, 2, 3]


def test_text(made: h5py.Group) -> None:
    put_text(made, "y", ["a", "ρ", ""], ("x",))
    put_text(made, "one", "終わり", ())
    assert made["y"].asstr()[()].tolist() == ["a", "ρ", ""]
    assert made["one"].asstr()[()] == "終わり"
    assert h5py.check_string_dtype(made["y"].dtype).length is None


def test_checksum_from_4_kilobytes(made: h5py.Group) -> None:
    n = CHECKSUM_FROM // 8
    for size, expected in ((n, True), (n - 1, False)):
        bare_dim(made, f"d{size}", size)
        put(made, f"v{size}", np.zeros(size), (f"d{size}",))
        assert made[f"v{size}"].fletcher32 is expected
        assert (made[f"v{size}"].compression == "gzip") is expected


def test_chunks_are_long(made: h5py.Group) -> None:
    bare_dim(made, "d", 200_000)
    bare_dim(made, "e", 2)
    put(made, "v", np.zeros((200_000, 2), np.int8), ("d", "e"))
    assert made["v"].chunks == (65536, 2)


def test_free_names() -> None:
    assert free_names(["x", "y"], ["mass"]) == ("x", "y")
    assert free_names(["mass", "mass_"], ["mass"]) == ("mass_", "mass__")
    assert free_names(["x", "x_bnds"], [], ("", "_bnds")) == ("x", "x_bnds_")
    assert free_names(["a b", "a b"], []) == ("a b", "a b_")
