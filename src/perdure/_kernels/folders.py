"""Where compiled kernels are kept between runs."""

from __future__ import annotations

import contextlib
import functools
import hashlib
import os
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any, TypeVar

import numba

__all__ = ["cache_folder", "kernel", "numba_cache"]

F = TypeVar("F", bound=Callable[..., Any])


def cache_folder() -> Path | None:
    """Folder for compiled kernels, made if missing; None if none can be written.

    ``PERDURE_CACHE_DIR``, else ``perdure`` in the user's cache folder.
    """
    named = os.environ.get("PERDURE_CACHE_DIR")
    user = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
    for folder in filter(None, (named, os.path.join(user, "perdure"))):
        with contextlib.suppress(OSError):
            Path(folder).mkdir(parents=True, exist_ok=True)
            handle, probe = tempfile.mkstemp(prefix=".probe.", dir=folder)
            os.close(handle)
            os.unlink(probe)
            return Path(folder)
    return None


@contextlib.contextmanager
def numba_cache(folder: Path) -> Iterator[None]:
    """Point numba's cache at a folder while functions are decorated; other users of numba keep theirs."""
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(folder)
    try:
        yield
    finally:
        numba.config.CACHE_DIR = before


@functools.cache
def static_folder() -> Path | None:
    """Cache of the static kernels, named by the text of this room: an edited callee is never missed."""
    root = cache_folder()
    if root is None:
        return None
    digest = hashlib.sha256(numba.__version__.encode())
    for path in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(path.read_bytes())
    return root / f"static_{digest.hexdigest()[:16]}"


def kernel(function: F) -> F:
    """Compile a static kernel on first use, releasing the interpreter lock, cached on disk where possible."""
    options: dict[str, Any] = {"nogil": True, "error_model": "numpy", "fastmath": {"contract"}}
    folder = static_folder()
    if folder is None:
        return numba.njit(**options)(function)  # type: ignore[no-any-return]
    with numba_cache(folder):
        return forgiving(numba.njit(cache=True, **options)(function))  # type: ignore[no-any-return]


def forgiving(dispatcher: Any) -> Any:
    """Dispatcher for which a damaged cache entry is a missing one, and one that cannot be written no error.

    Trap: numba's reader raises EOFError, UnpicklingError and others on a truncated file, in every later process.
    """
    cache = getattr(dispatcher, "_cache", None)
    if cache is None:  # NUMBA_DISABLE_JIT gives the plain function
        return dispatcher
    load, save = cache.load_overload, cache.save_overload

    def load_overload(*arguments: Any) -> Any:
        try:
            return load(*arguments)
        except Exception:
            with contextlib.suppress(OSError):
                cache.flush()
            return None

    def save_overload(*arguments: Any) -> None:
        with contextlib.suppress(OSError):
            save(*arguments)

    cache.load_overload, cache.save_overload = load_overload, save_overload
    return dispatcher
