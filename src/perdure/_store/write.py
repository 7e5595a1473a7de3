"""Write an estimate as a density file."""

from __future__ import annotations

import contextlib
import hashlib
import os
import platform
import shlex
from collections.abc import Iterator
from typing import Any

import h5py
import numpy as np

from perdure._records import Estimate
from perdure._store.description import case_to_json, plan_to_json, to_json
from perdure._store.layout import FORMAT, FORMAT_VERSION, OPTIONS, attrs, group, stamp
from perdure._store.publish import Path, check_target, publishing, refusal, room_left
from perdure._store.sections import (
    put_budget,
    put_cells,
    put_density,
    put_effort,
    put_events,
    put_marginals,
    put_matrix,
    put_observables,
    put_provenance,
    put_regimes,
    put_targets,
)
from perdure.errors import OutputError

__all__ = ["save"]

# Bytes of arrays up to which the file is built in memory. Above, HDF5 writes the temporary file itself: it
# handles a full disk badly (the process can crash at exit), so that the room is checked first.
MEMORY_LIMIT = 1_000_000_000


def save(estimate: Estimate, path: Path) -> str:
    """Write everything in `estimate` to the density file `path`, whole or not at all.

    Parameters
    ----------
    estimate : Estimate
    path : path-like
        An existing ordinary file is replaced, but only once the new one is complete. A link is followed.

    Returns
    -------
    str
        SHA-256 of the file, hexadecimal.

    Raises
    ------
    OutputError
        Nothing was written; says why and what to do. `.estimate` is the estimate; an old file is untouched.
    """
    check_target(path, estimate=estimate)
    size = size_of(estimate)
    if size < MEMORY_LIMIT:
        with faults_named(path, estimate):
            image = in_memory(estimate)
        with publishing(path, estimate=estimate) as (descriptor, _):
            write_image(descriptor, image)
        return hashlib.sha256(image).hexdigest()
    left = room_left(path)
    if left < size:
        cause = f"it may need {size / 1e9:.2f} GB, the disk has {left / 1e9:.2f} GB left"
        remedy = "free some space, give a path on another disk, or leave the matrix out"
        raise refusal(path, cause, remedy, estimate)
    with publishing(path, estimate=estimate) as (descriptor, part):
        with faults_named(path, estimate), h5py.File(part, "w", locking=False, **OPTIONS) as file:
            fill(file, estimate)
        return digest(descriptor)


def in_memory(estimate: Estimate) -> bytes:
    """The whole file as bytes."""
    with h5py.File("density", "w", driver="core", backing_store=False, block_size=2**20, **OPTIONS) as file:
        fill(file, estimate)
        file.flush()
        return bytes(file.id.get_file_image())


def write_image(descriptor: int, image: bytes) -> None:
    with os.fdopen(descriptor, "wb", closefd=False) as handle:
        handle.write(image)


def digest(descriptor: int) -> str:
    """SHA-256 of an open file."""
    os.lseek(descriptor, 0, os.SEEK_SET)
    with os.fdopen(descriptor, "rb", closefd=False) as handle:
        return hashlib.file_digest(handle, "sha256").hexdigest()


def fill(file: h5py.File, estimate: Estimate) -> None:
    """Write all groups; the mark `complete` comes last."""
    stamp(file)
    attrs(file, **root_attributes(estimate))
    case, grid, keys, regimes = estimate.case, estimate.grid, estimate.keys, estimate.regimes
    put_cells(file, estimate)
    table = put_regimes(file, estimate)
    mass = np.zeros(len(keys) if regimes else 0)
    if regimes:
        mass[regimes[0].cell] = regimes[0].mass
    put_density(file, grid, keys if regimes else keys[:0], mass, case.system)
    put_marginals(file, regimes[0].marginals if regimes else {})
    put_events(file, regimes[0].events if regimes else {}, case)
    put_observables(file, regimes[0].observables if regimes else {}, case)
    for k, regime in enumerate(regimes[1:], start=1):
        made = group(table, str(k), long_name=f"regime {k}")
        put_density(made, grid, keys[regime.cell], regime.mass, case.system)
        put_marginals(made, regime.marginals)
        put_events(made, regime.events, case)
        put_observables(made, regime.observables, case)
    put_budget(file, estimate)
    if estimate.tally is not None:
        put_matrix(file, estimate.tally, len(keys))
    if estimate.effort:
        put_effort(file, estimate.effort)
    if estimate.targets:
        put_targets(file, estimate.targets)
    put_provenance(file, estimate)
    if estimate.crosscheck is not None:
        from perdure._store.crosscheck import put_crosscheck

        put_crosscheck(file, estimate.crosscheck)
    attrs(file, complete=True)


def root_attributes(estimate: Estimate) -> dict[str, Any]:
    case = estimate.case
    return {
        "format": FORMAT,
        "format_version": np.int32(FORMAT_VERSION),
        "Conventions": "CF-1.11",
        "title": case.title,
        "outcome": estimate.outcome,
        "messages": to_json(estimate.messages),
        "checks_passed": bool(estimate.checks_passed),
        "caution": case.caution,
        "seed": str(int(case.seed)),
        "case_text": case.text,
        "case_sha256": hashlib.sha256(case.text.encode()).hexdigest(),
        "case": case_to_json(case),
        "plan": plan_to_json(estimate.plan),
        "counts": to_json(estimate.counts),
        "timings": to_json(estimate.timings),
        "packages": to_json(estimate.packages),
        "command": without_folders(estimate.command),
        "created": estimate.created,
        "cpu": cpu_name(),
    }


def without_folders(command: str) -> str:
    """The command line with absolute paths cut to their last part: no file tells where it was made."""
    try:
        words = shlex.split(command)
    except ValueError:
        words = command.split()
    if not any(os.path.isabs(word.rpartition("=")[2]) or "~" in word for word in words):
        return command
    cut = []
    for word in words:
        option, equals, value = word.rpartition("=")
        if os.path.isabs(value) or value.startswith("~"):
            value = os.path.basename(value.rstrip("/"))
        cut.append(option + equals + value)
    return shlex.join(cut)


def cpu_name() -> str:
    """Model of the processor; empty if the system does not tell."""
    name = platform.processor()
    if name and name != platform.machine():
        return name
    with contextlib.suppress(OSError), open("/proc/cpuinfo", encoding="utf-8", errors="replace") as lines:
        for line in lines:
            if line.startswith("model name"):
                return line.partition(":")[2].strip()
    return name


def size_of(estimate: Estimate) -> int:
    """Bytes that the file cannot exceed by much: its arrays without compression."""
    n_cell, n_axis = len(estimate.keys), int(np.sum(estimate.grid.counts))
    size = 1_000_000 + len(estimate.case.text) + 36 * n_cell + 16 * len(estimate.plan.seed_keys)
    size += (1 + len(estimate.regimes)) * 24 * n_axis
    marginals = [m for r in estimate.regimes for m in r.marginals.values()]
    size += sum(24 * len(r.cell) for r in estimate.regimes)
    size += sum((56 + 8 * len(m.parts)) * len(m.mass) for m in marginals)
    size += 0 if estimate.basins is None else estimate.basins.nbytes
    size += 0 if estimate.cell_bursts is None else 8 * n_cell
    if estimate.tally is not None:
        tally = estimate.tally
        size += 8 * (n_cell + 1) + 4 * len(tally.column) + tally.count.nbytes + 8 * tally.bursts.size
    return size


@contextlib.contextmanager
def faults_named(path: Path, estimate: object) -> Iterator[None]:
    """Nothing computed may be lost: what goes wrong inside becomes an OutputError with the estimate."""
    try:
        yield
    except OutputError:
        raise
    except Exception as error:
        cause = f"laying out the file failed ({type(error).__name__}: {error})"
        remedy = "if the disk is not full, this is a fault of perdure: please report it with the case"
        raise refusal(path, cause, remedy, estimate) from error
