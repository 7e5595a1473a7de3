"""Files that appear whole or not at all: written under a temporary name beside the target, then renamed.

The final name is never opened for writing: HDF5 empties an existing file before it notices that another
process holds it. The temporary file is `.NAME.<hex>.part`; its writer holds a lock on it, so that leftovers
of killed runs can be told from files being written.
"""

from __future__ import annotations

import contextlib
import errno
import fcntl
import os
import re
import secrets
import stat
import time
from collections.abc import Iterator

from perdure.errors import OutputError

__all__ = ["check_target", "publishing", "refusal", "room_left"]

# Where a file system knows no locks, a temporary file untouched for this many seconds counts as left over.
LEFT_OVER_AFTER = 3600.0

Path = str | os.PathLike[str]


def check_target(path: Path, *, estimate: object | None = None) -> None:
    """Make sure, before long work, that a file can be written at `path`; remove what killed runs left there.

    Parameters
    ----------
    path : path-like
        Where the density file shall be. An existing ordinary file is fine: it is replaced on success only.
    estimate : object or None
        Work already done, which the error then carries.

    Raises
    ------
    OutputError
        The folder is missing, is no folder or cannot be written to; the target is a folder, a device or
        write-protected.
    """
    with problems_named(path, estimate):
        target = os.path.realpath(path)
        folder, name = os.path.split(target)
        check_existing(path, target, estimate)
        if not os.path.isdir(folder):
            what = "is not a folder" if os.path.lexists(folder) else "does not exist"
            raise refusal(path, f"the folder {parent_of(path)!r} {what}", "make it, or give another path", estimate)
        sweep(folder, name)
        descriptor, part = create_part(folder, name)
        os.close(descriptor)
        os.unlink(part)


@contextlib.contextmanager
def publishing(path: Path, *, estimate: object | None = None) -> Iterator[tuple[int, str]]:
    """Write a new file that takes the place of `path` when the block ends without an error.

    Yields
    ------
    descriptor : int
        Of the empty temporary file, open for writing.
    part : str
        Its path, for a library that wants to open it itself.

    Raises
    ------
    OutputError
        Any failure of the file system, inside the block or at its end. The old file is then untouched and the
        temporary file gone.
    """
    with problems_named(path, estimate):
        target = os.path.realpath(path)
        folder, name = os.path.split(target)
        descriptor, part = create_part(folder, name)
        try:
            try:
                yield descriptor, part
                os.fsync(descriptor)
            finally:
                os.close(descriptor)
            os.replace(part, target)
        except BaseException:
            with contextlib.suppress(OSError):
                os.unlink(part)
            raise
        # The file is in place; not every file system can promise that the rename outlives a power cut.
        with contextlib.suppress(OSError):
            sync_folder(folder)


def refusal(path: Path, cause: str, remedy: str, estimate: object | None) -> OutputError:
    """The error that says why nothing can be written at `path`."""
    kept = "" if estimate is None else "; nothing computed is lost: `.estimate` of this error holds the result"
    return OutputError(f"{os.fspath(path)}: the density file cannot be written: {cause}; {remedy}{kept}", estimate)


def room_left(path: Path) -> int:
    """Bytes that may still be written to the file system of `path`."""
    state = os.statvfs(os.path.dirname(os.path.realpath(path)))
    return state.f_bavail * state.f_frsize


def check_existing(path: Path, target: str, estimate: object | None) -> None:
    """Refuse a target that exists and must not be replaced."""
    try:
        mode = os.stat(target).st_mode
    except (FileNotFoundError, NotADirectoryError):
        return
    if stat.S_ISDIR(mode):
        raise refusal(path, "it is a folder", "add a file name, for example out.h5", estimate)
    if not stat.S_ISREG(mode):
        raise refusal(path, "it is a device or a pipe, not an ordinary file", "give a file name", estimate)
    if not os.access(target, os.W_OK, effective_ids=os.access in os.supports_effective_ids):
        raise refusal(path, "the file exists and is write-protected", "give another name, or permit writing", estimate)


def create_part(folder: str, name: str) -> tuple[int, str]:
    """New, empty, locked temporary file beside the target: descriptor and path. The umask sets its mode."""
    while True:
        part = os.path.join(folder, f".{name}.{secrets.token_hex(8)}.part")
        descriptor = os.open(part, os.O_RDWR | os.O_CREAT | os.O_EXCL, 0o666)
        # A sweep of another run may have met the file in the instant before it was locked.
        if lock(descriptor) is not False and os.fstat(descriptor).st_nlink:
            return descriptor, part
        os.close(descriptor)
        with contextlib.suppress(FileNotFoundError):
            os.unlink(part)


def sweep(folder: str, name: str) -> None:
    """Remove the temporary files of the same target that no living run is writing."""
    pattern = re.compile(re.escape(f".{name}.") + r"[0-9A-Za-z_]+\.part")
    with os.scandir(folder) as entries:
        found = [e.path for e in entries if pattern.fullmatch(e.name) and e.is_file(follow_symlinks=False)]
    for part in found:
        with contextlib.suppress(OSError):
            descriptor = os.open(part, os.O_RDONLY)
            try:
                free = lock(descriptor)
                if free is None:
                    free = time.time() - os.fstat(descriptor).st_mtime > LEFT_OVER_AFTER
                if free:
                    os.unlink(part)
            finally:
                os.close(descriptor)


def lock(descriptor: int) -> bool | None:
    """Lock an open file without waiting: True if got, False if another has it, None if there are no locks."""
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:
        return None
    return True


def sync_folder(folder: str) -> None:
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def parent_of(path: Path) -> str:
    """Folder of a path as the user wrote it."""
    return os.path.dirname(os.fspath(path)) or os.curdir


REMEDIES = {
    errno.ENOSPC: ("the disk is full", "free some space or give a path on another disk"),
    errno.EDQUOT: ("the disk quota is used up", "free some space or give a path on another disk"),
    errno.EFBIG: ("the file would exceed the size allowed", "raise the limit or leave the matrix out"),
    errno.EACCES: ("no permission to write in its folder", "permit writing there or give another path"),
    errno.EPERM: ("no permission to write in its folder", "permit writing there or give another path"),
    errno.EROFS: ("the file system is read-only", "give a path elsewhere"),
    errno.ENAMETOOLONG: ("the file name is too long", "give one at least 30 bytes shorter"),
    errno.ENOENT: ("its folder does not exist", "make it, or give another path"),
    errno.ENOTDIR: ("its folder is not a folder", "give another path"),
    errno.EISDIR: ("it is a folder", "add a file name, for example out.h5"),
    errno.ELOOP: ("it is a link that leads to itself", "remove the link or give another path"),
}


@contextlib.contextmanager
def problems_named(path: Path, estimate: object | None) -> Iterator[None]:
    """Turn whatever the file system reports into an OutputError with cause and remedy."""
    try:
        yield
    except OutputError:
        raise
    except OSError as error:
        other = (error.strerror or str(error), "give another path")
        raise refusal(path, *REMEDIES.get(error.errno or 0, other), estimate) from error
    except ValueError as error:
        raise refusal(path, f"the path is not one ({error})", "give another path", estimate) from error
