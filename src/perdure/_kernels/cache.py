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
from dataclasses import dataclass
from pathlib import Path
from types import ModuleType
from typing import Any

import numba
import numpy as np

from perdure._kernels.folders import cache_folder, numba_cache
from perdure._kernels.generate import KernelSpec, module_source
from perdure._kernels.trajectory import TOGETHER, trajectory_source

__all__ = ["burst_kernel", "compilations", "trajectory_kernel"]

# How often this process compiled a generated kernel (rather than loading it); read by tests.
compilations = {"count": 0}
LOADED: dict[str, Callable[..., int]] = {}

Kernel = Callable[..., int]


@dataclass(frozen=True)
class Template:
    """A kind of generated module.

    Attributes
    ----------
    name : str
        Begins the names of its files.
    entry : str
        The function to call in it.
    source : callable
        From a spec to the text.
    warm : callable
        Calls the function once, on a single lane, with arrays of the types in use.
    """

    name: str
    entry: str
    source: Callable[[KernelSpec], str]
    warm: Callable[[Kernel, KernelSpec], None]


def burst_kernel(spec: KernelSpec) -> Kernel:
    """Compiled `advance` of a spec, from memory, from disk, or compiled now.

    Raises
    ------
    TypeError
        A Python function in the spec that numba cannot compile; the message holds numba's.
    """
    return compiled(spec, BURST)


def trajectory_kernel(spec: KernelSpec) -> Kernel:
    """Compiled `follow` of a spec; as `burst_kernel`."""
    return compiled(spec, TRAJECTORY)


def compiled(spec: KernelSpec, template: Template) -> Kernel:
    source = template.source(spec)
    if spec.function is not None:
        return from_function(source, spec, template)
    key = hashlib.sha256(f"{numba.__version__}\n{source}".encode()).hexdigest()[:24]
    if key not in LOADED:
        LOADED[key] = from_disk(source, key, spec, template) or from_memory(source, key, spec, template)
    return LOADED[key]


def from_function(source: str, spec: KernelSpec, template: Template) -> Kernel:
    names: dict[str, Any] = {"CACHED": False}
    for name, function in (("user_function", spec.function), ("user_noise", spec.noise_function)):
        if function is not None:
            names[name] = function if hasattr(function, "py_func") else numba.njit(error_model="numpy")(function)
    exec(compile(source, f"<{template.name} kernel>", "exec"), names)
    kernel: Kernel = names[template.entry]
    try:
        template.warm(kernel, spec)
    except numba.core.errors.NumbaError as error:
        raise TypeError(str(error)) from error
    compilations["count"] += 1
    return kernel


def from_memory(source: str, key: str, spec: KernelSpec, template: Template) -> Kernel:
    names: dict[str, Any] = {"CACHED": False, "__name__": module_name(template, key)}
    exec(compile(source, f"<{template.name} kernel {key}>", "exec"), names)
    kernel: Kernel = names[template.entry]
    template.warm(kernel, spec)
    compilations["count"] += 1
    return kernel


def module_name(template: Template, key: str) -> str:
    return f"perdure_{template.name}_{key}"


def from_disk(source: str, key: str, spec: KernelSpec, template: Template) -> Kernel | None:
    """Kernel through the disk cache; None if the folder cannot be used."""
    root = cache_folder()
    if root is None:
        return None
    folder, name = root / f"{template.name}_{key}", module_name(template, key)
    for attempt in range(2):
        try:
            module = imported(publish(folder, source), name)
            kernel = getattr(module, template.entry)
            template.warm(kernel, spec)
        except OSError:
            return None
        except Exception:
            # a damaged cache entry raises many kinds (EOFError, UnpicklingError, ...): remake it once
            if attempt:
                raise
            shutil.rmtree(folder, ignore_errors=True)
            sys.modules.pop(name, None)
            continue
        compilations["count"] += sum(kernel.stats.cache_misses.values())
        return kernel  # type: ignore[no-any-return]
    return None


def publish(folder: Path, source: str) -> Path:
    """Write the module under its content name, that of its folder, whole or not at all."""
    target = folder / f"{folder.name}.py"
    folder.mkdir(parents=True, exist_ok=True)
    if not target.exists() or target.read_text(encoding="utf-8") != "CACHED = True\n" + source:
        handle, part = tempfile.mkstemp(prefix=".module.", dir=folder)
        with os.fdopen(handle, "w", encoding="utf-8") as file:
            file.write("CACHED = True\n" + source)
        os.replace(part, target)
    return target


def imported(path: Path, name: str) -> ModuleType:
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    with numba_cache(path.parent):
        spec.loader.exec_module(module)
    return module


def warm_burst(advance: Kernel, spec: KernelSpec) -> None:
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


def warm_trajectory(follow: Kernel, spec: KernelSpec) -> None:
    d = len(spec.state)
    follow(
        np.full((d, 1), 0.5),
        np.zeros((spec.n_sum, 1)),
        np.zeros((1, d, 3), dtype=np.int64),
        np.zeros((1, d, 1)),
        np.zeros(1, dtype=np.uint64),
        np.ones(max(len(spec.parameters) + len(spec.observables), 1)),
        1e-3,
        TOGETHER,
        TOGETHER,
        TOGETHER,
        np.zeros(d),
        np.ones(d),
        np.uint64(0),
        0.0,
    )


BURST = Template("burst", "advance", module_source, warm_burst)
TRAJECTORY = Template("trajectory", "follow", trajectory_source, warm_trajectory)
