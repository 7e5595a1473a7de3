"""Generated modules on disk, by content: compiled once per set of equations, shared by all processes.

Traps (all met): text given to exec cannot be cached by numba; a truncated cache index raises in the
reader; a folder that cannot be written makes `cache=True` raise at import; one name must never have two texts.
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import shutil
import sys
import tempfile
from collections.abc import Callable
from pathlib import Path
from types import ModuleType
from typing import Any

import numba
import numpy as np

from perdure._kernels.folders import cache_folder, numba_cache
from perdure._kernels.generate import KernelSpec, module_source

__all__ = ["burst_kernel", "compilations"]

# How often this process compiled a burst kernel (rather than loading it); read by tests.
compilations = {"count": 0}
LOADED: dict[str, Callable[..., int]] = {}


def burst_kernel(spec: KernelSpec) -> Callable[..., int]:
    """Compiled `advance` of a spec, from memory, from disk, or compiled now.

    Raises
    ------
    TypeError
        A Python function in the spec that numba cannot compile; the message holds numba's.
    """
    source = module_source(spec)
    if spec.function is not None:
        return from_function(source, spec)
    key = hashlib.sha256(f"{numba.__version__}\n{source}".encode()).hexdigest()[:24]
    if key not in LOADED:
        LOADED[key] = from_disk(source, key, spec) or from_memory(source, key, spec)
    return LOADED[key]


def from_function(source: str, spec: KernelSpec) -> Callable[..., int]:
    names: dict[str, Any] = {"CACHED": False}
    for name, function in (("user_function", spec.function), ("user_noise", spec.noise_function)):
        if function is not None:
            names[name] = function if hasattr(function, "py_func") else numba.njit(error_model="numpy")(function)
    exec(compile(source, "<burst kernel>", "exec"), names)
    try:
        warm(names["advance"], spec)
    except numba.core.errors.NumbaError as error:
        raise TypeError(str(error)) from error
    compilations["count"] += 1
    return names["advance"]  # type: ignore[no-any-return]


def from_memory(source: str, key: str, spec: KernelSpec) -> Callable[..., int]:
    names: dict[str, Any] = {"CACHED": False, "__name__": f"perdure_burst_{key}"}
    exec(compile(source, f"<burst kernel {key}>", "exec"), names)
    warm(names["advance"], spec)
    compilations["count"] += 1
    return names["advance"]  # type: ignore[no-any-return]


def from_disk(source: str, key: str, spec: KernelSpec) -> Callable[..., int] | None:
    """Kernel through the disk cache; None if the folder cannot be used."""
    root = cache_folder()
    if root is None:
        return None
    folder = root / f"burst_{key}"
    for attempt in range(2):
        try:
            module = imported(publish(folder, source, key), key)
            warm(module.advance, spec)
        except OSError:
            return None
        except Exception:
            # a damaged cache entry raises many kinds (EOFError, UnpicklingError, ...): remake it once
            if attempt:
                raise
            shutil.rmtree(folder, ignore_errors=True)
            sys.modules.pop(f"perdure_burst_{key}", None)
            continue
        compilations["count"] += sum(module.advance.stats.cache_misses.values())
        return module.advance  # type: ignore[no-any-return]
    return None


def publish(folder: Path, source: str, key: str) -> Path:
    """Write the module under its content name, whole or not at all."""
    target = folder / f"burst_{key}.py"
    folder.mkdir(parents=True, exist_ok=True)
    if not target.exists() or target.read_text(encoding="utf-8") != "CACHED = True\n" + source:
        handle, part = tempfile.mkstemp(prefix=".burst.", dir=folder)
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write("CACHED = True\n" + source)
        os.replace(part, target)
    return target


def imported(path: Path, key: str) -> ModuleType:
    name = f"perdure_burst_{key}"
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    with numba_cache(path.parent):
        spec.loader.exec_module(module)
    return module


def warm(advance: Callable[..., int], spec: KernelSpec) -> None:
    """Compile (or load) for the one signature in use, on a single lane."""
    d = len(spec.state)
    advance(
        np.full((d, 1), 0.5),
        np.zeros((spec.n_sum, 1)),
        np.zeros((1, d, 1), dtype=np.uint16),
        np.zeros(1, dtype=np.uint64),
        np.ones(max(len(spec.parameters) + len(spec.observables), 1)),
        1e-3,
        1,
        1,
        np.zeros(d),
        np.ones(d),
        52.0,
    )
