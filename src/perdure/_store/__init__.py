"""The density file: an HDF5 image laid out as netCDF-4, published whole or not at all.

Names are loaded on first use, so that checking a target needs no h5py.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from perdure._store.crosscheck import add_crosscheck
    from perdure._store.publish import check_target
    from perdure._store.read import StoredEstimate, load, open_file
    from perdure._store.write import save

__all__ = ["StoredEstimate", "add_crosscheck", "check_target", "load", "open_file", "save"]

_HOMES = {
    "StoredEstimate": "perdure._store.read",
    "add_crosscheck": "perdure._store.crosscheck",
    "check_target": "perdure._store.publish",
    "load": "perdure._store.read",
    "open_file": "perdure._store.read",
    "save": "perdure._store.write",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'perdure._store' has no attribute {name!r}")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value
