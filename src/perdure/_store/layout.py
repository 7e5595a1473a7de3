"""How anything is put into a density file, so that every netCDF-4 reader understands it.

HDF5 alone allows much that netCDF readers refuse or lose in silence: bool, complex, enum, compound and
fixed-length text, half floats, empty and two-dimensional attributes, filters other than gzip, shuffle and
fletcher32, axes without a scale. The functions here write none of these.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import h5py
import numpy as np
from numpy.typing import ArrayLike

__all__ = [
    "CHECKSUM_FROM",
    "FORMAT",
    "FORMAT_VERSION",
    "OPTIONS",
    "TEXT",
    "attrs",
    "bare_dim",
    "free_names",
    "group",
    "put",
    "put_text",
    "stamp",
]

FORMAT = "perdure-density"
FORMAT_VERSION = 1
TEXT = h5py.string_dtype("utf-8")

# HDF5 1.8 to 1.10 structures: read by tools of 2018 and later, and their metadata carry checksums.
OPTIONS: dict[str, Any] = {"track_order": True, "libver": ("v108", "v110")}

# Bytes from which data are chunked, compressed and carry a checksum; smaller data lie contiguous.
CHECKSUM_FROM = 4096
LONGEST_CHUNK = 65536
PLAIN = {"f4", "f8", "i1", "i2", "i4", "i8", "u1", "u2", "u4", "u8"}


def attrs(target: h5py.HLObject, **values: Any) -> None:
    """Attach attributes: text, numbers, truth values (as int8) or one-dimensional numbers."""
    for key, value in values.items():
        if isinstance(value, str):
            target.attrs.create(key, value, dtype=TEXT)
            continue
        data = np.int8(value) if isinstance(value, bool | np.bool_) else np.asarray(value)
        if data.ndim > 1 or data.dtype.str[1:] not in PLAIN:
            raise TypeError(f"attribute {key}: {data.ndim}-dimensional {data.dtype} is not a netCDF attribute")
        target.attrs.create(key, data)


def group(parent: h5py.Group, name: str, **values: Any) -> h5py.Group:
    """Make a group that keeps the order of its members, with attributes."""
    made = parent.create_group(name, track_order=True)
    attrs(made, **values)
    return made


def put(parent: h5py.Group, name: str, data: ArrayLike, dims: Sequence[str], **values: Any) -> h5py.Dataset:
    """Write numbers or truth values as a variable.

    Parameters
    ----------
    data : array_like
        4- or 8-byte floats, integers of 1 to 8 bytes, or bool (stored as int8 with `flag_meanings`).
    dims : sequence of str
        Name of each axis: variables or `bare_dim` of the same group, all different. A variable whose only
        axis is itself becomes the coordinate of that axis.
    values
        Attributes; every number should have `units` and `long_name`.

    Raises
    ------
    TypeError
        A type that netCDF readers do not share.
    ValueError
        An axis named twice, or as many names as there are not axes.
    """
    array = np.asarray(data)
    if array.dtype.kind == "b":
        array = array.astype(np.int8)
        values = values | {"flag_values": np.array([0, 1], np.int8), "flag_meanings": "false true"}
    if array.dtype.str[1:] not in PLAIN:
        raise TypeError(f"{name}: {array.dtype} is not a netCDF type")
    options: dict[str, Any] = {}
    if array.nbytes >= CHECKSUM_FROM:
        options = {
            "chunks": (min(len(array), LONGEST_CHUNK), *array.shape[1:]),
            "compression": "gzip",
            "compression_opts": 4,
            "shuffle": True,
            "fletcher32": True,
        }
    return variable(parent, name, array, dims, options, values)


def put_text(
    parent: h5py.Group, name: str, lines: str | Iterable[str], dims: Sequence[str], **values: Any
) -> h5py.Dataset:
    """Write UTF-8 text, one string per entry or a single one without `dims`; else like `put`."""
    array = np.array(lines if isinstance(lines, str) else list(lines), dtype=object)
    return variable(parent, name, array, dims, {"dtype": TEXT}, values)


def variable(
    parent: h5py.Group,
    name: str,
    array: Any,
    dims: Sequence[str],
    options: dict[str, Any],
    values: dict[str, Any],
) -> h5py.Dataset:
    """Create the dataset and join its axes to their scales."""
    if len(dims) != array.ndim or len(set(dims)) < len(dims):
        raise ValueError(f"{name}: axes {tuple(dims)} for {array.ndim} dimensions; each needs a name of its own")
    made = parent.create_dataset(name, data=array, track_order=True, **options)
    if tuple(dims) == (name,):
        made.make_scale(name)
    else:
        for axis, scale in enumerate(dims):
            made.dims[axis].attach_scale(parent[scale])
    attrs(made, **values)
    return made


def bare_dim(parent: h5py.Group, name: str, size: int) -> None:
    """An axis that has no variable of its own."""
    scale = parent.create_dataset(name, shape=(size,), dtype=">f4", track_order=True)
    # The text by which the netCDF library knows such an axis, with its size in ten columns.
    scale.make_scale(f"This is a netCDF dimension but not a netCDF variable.{size:10d}")


def stamp(file: h5py.File) -> None:
    """The mark of a netCDF-4 file; fixed bytes, since a variable-length text here is taken for empty."""
    versions = f"version=2,h5py={h5py.__version__},hdf5={h5py.version.hdf5_version}"
    file.attrs["_NCProperties"] = np.bytes_(versions.encode())


def free_names(wanted: Sequence[str], taken: Iterable[str], suffixes: Sequence[str] = ("",)) -> tuple[str, ...]:
    """Variable names for `wanted` that clash neither with `taken` nor with each other.

    A state component may be called "mass" or "cell", which the group already holds: underscores are
    added then. Each name is also kept free together with every one of `suffixes`.
    """
    used = set(taken)
    names = []
    for name in wanted:
        free = name
        while any(free + suffix in used for suffix in suffixes):
            free += "_"
        used.update(free + suffix for suffix in suffixes)
        names.append(free)
    return tuple(names)
