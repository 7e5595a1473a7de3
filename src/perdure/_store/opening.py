"""Open a density file, or say what is there instead."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import h5py
import numpy as np

from perdure._store.layout import FORMAT, FORMAT_VERSION
from perdure.errors import DensityFileError

__all__ = ["check_root", "opened", "plain_attribute", "reason_of"]


def plain_attribute(value: Any) -> Any:
    """Attribute as Python text or number where it is a scalar."""
    if isinstance(value, bytes):
        return value.decode()
    return value.item() if isinstance(value, np.generic) else value


def opened(path: str, label: str) -> h5py.File:
    """The open HDF5 file, or a DensityFileError that says what is there instead."""
    try:
        with open(path, "rb") as handle:
            empty = not handle.read(1)
    except FileNotFoundError:
        raise DensityFileError(
            f"{label}: there is no such file; check the path, or make it with `perdure run`"
        ) from None
    except IsADirectoryError:
        raise DensityFileError(f"{label}: is a folder; give the path of a density file in it") from None
    except PermissionError:
        raise DensityFileError(f"{label}: no permission to read the file; ask its owner for it") from None
    except (OSError, ValueError) as error:
        raise DensityFileError(f"{label}: cannot be opened ({reason_of(error)}); check the path") from error
    if empty or not h5py.is_hdf5(path):
        what = "is empty" if empty else "is not an HDF5 file"
        raise DensityFileError(f"{label}: {what}; a density file is made by `perdure run` or `Result.save`")
    try:
        # Files are published by renaming: no writer is to be waited for, and some file systems have no locks.
        return h5py.File(path, "r", locking=False)
    except Exception as error:
        why = reason_of(error)
        if "truncated" in why:
            what = "is cut short"
        elif "already open for write" in why:
            what = "was never finished: its writer was stopped"
        else:
            what = "is damaged"
        raise DensityFileError(f"{label}: {what} ({why}); restore it from a copy or run the case again") from error


def check_root(root: Mapping[str, Any], label: str) -> None:
    """Refuse HDF5 files that are not finished density files of a known format."""
    if root.get("format") != FORMAT:
        found = f"its attribute format is {root['format']!r}" if "format" in root else "it has no attribute format"
        raise DensityFileError(
            f"{label}: found an HDF5 file that perdure did not write ({found}); allowed: a file whose attribute "
            f"'format' is {FORMAT!r}; check the path"
        )
    version = root.get("format_version")
    if not isinstance(version, int) or version < 1:
        raise DensityFileError(
            f"{label}: format_version is {version!r} instead of a number from 1; the file is damaged"
        )
    if version > FORMAT_VERSION:
        raise DensityFileError(
            f"{label}: has format {version}, this perdure reads formats up to {FORMAT_VERSION}; update perdure"
        )
    if not root.get("complete"):
        raise DensityFileError(
            f"{label}: was not written to its end (it lacks the mark `complete`); run the case again"
        )


def reason_of(error: Exception) -> str:
    """First line of an error's text, without the quotes that KeyError adds."""
    text = str(error.args[0]) if isinstance(error, KeyError) and error.args else str(error)
    return text.splitlines()[0] if text else type(error).__name__
