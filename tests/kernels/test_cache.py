"""Compiled kernels on disk, seen from separate processes: reused, raced for, damaged, impossible to write."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from kernels.support import SPECS, fly, kernel
from perdure._kernels.generate import module_source

# A small kernel and one static kernel: what they give, and how often each was compiled rather than loaded.
PROGRAM = """
import json, sys
import numpy as np
from perdure._kernels.cache import burst_kernel, compilations
from perdure._kernels.folders import cache_folder
from perdure._kernels.generate import KernelSpec
from perdure._kernels.products import total_counts

advance = burst_kernel(KernelSpec("map", ("x",), ("c",), ("v_c * v_x + 1.0",), lanes=8))
state = np.array([[0.0, 2.0, 4.0]])
advance(state, np.zeros((0, 3)), np.zeros((0, 1, 3), dtype=np.uint16), np.zeros(3, dtype=np.uint64),
        np.array([0.5]), 1.0, 2, 2, np.zeros(1), np.ones(1), 3.0)
out = np.zeros(2, dtype=np.uint16)
total_counts(np.array([[1, 2], [3, 4]], dtype=np.uint8), out)
print(json.dumps({
    "state": state[0].tolist(), "total": out.tolist(), "burst": compilations["count"],
    "signatures": len(advance.signatures), "static": sum(total_counts.stats.cache_misses.values()),
    "folder": str(cache_folder()),
}))
"""
RIGHT = {"state": [1.5, 2.0, 2.5], "total": [3, 7], "signatures": 1}


def start(folder: Path, **environment: str) -> subprocess.Popen[str]:
    """A process with its kernels in `folder`."""
    variables = os.environ | {"PERDURE_CACHE_DIR": str(folder)} | environment
    variables.pop("XDG_CACHE_HOME", None)
    command = [sys.executable, "-W", "error", "-c", PROGRAM]
    return subprocess.Popen(command, env=variables, text=True, stdout=subprocess.PIPE, stderr=subprocess.PIPE)


def ended(process: subprocess.Popen[str]) -> dict[str, Any]:
    """What a process printed; it must have come to the right numbers without a word of warning."""
    output, errors = process.communicate(timeout=120)
    assert process.returncode == 0, errors
    assert errors == ""
    found: dict[str, Any] = json.loads(output)
    assert {key: found[key] for key in RIGHT} == RIGHT
    return found


@pytest.fixture(scope="module")
def filled(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A cache that two processes filled at the same time, beginning with nothing."""
    folder = tmp_path_factory.mktemp("kernels") / "made" / "on the way"
    racing = [ended(process) for process in (start(folder), start(folder))]
    assert max(found["burst"] for found in racing) == 1
    assert max(found["static"] for found in racing) == 1
    return folder


def test_a_later_process_does_not_compile(filled: Path) -> None:
    """Those that found nothing did (see `filled`): the control."""
    # a loser of the race may have replaced the winner's file: then the entry is made anew once, and no more
    ended(start(filled))
    found = ended(start(filled))
    assert (found["burst"], found["static"], found["folder"]) == (0, 0, str(filled))


@pytest.mark.parametrize(("suffix", "kept"), [(".nbi", 0), (".nbc", 40)])
def test_damaged_entries_are_made_anew(filled: Path, suffix: str, kept: int) -> None:
    """Files cut to nothing or to their first bytes, as by a full disk: compiled again, and whole afterwards."""
    damaged = list(filled.rglob(f"*{suffix}"))
    assert {path.relative_to(filled).parts[0].split("_")[0] for path in damaged} == {"burst", "static"}
    for path in damaged:
        path.write_bytes(path.read_bytes()[:kept])
    found = ended(start(filled))
    assert (found["burst"], found["static"]) == (1, 1)
    found = ended(start(filled))
    assert (found["burst"], found["static"]) == (0, 0)


def test_an_edited_module_is_written_anew(filled: Path) -> None:
    """Text under a content name that is not that content is replaced before it runs."""
    (path,) = filled.glob("burst_*/burst_*.py")
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("v_c * v_x", "v_c - v_x"), encoding="utf-8")
    ended(start(filled))
    assert path.read_text(encoding="utf-8") == text


def test_folder_that_cannot_be_written(tmp_path: Path) -> None:
    """Below a regular file, where not even root can make a folder: the home is used, then memory alone."""
    block, home = tmp_path / "file", tmp_path / "home"
    block.write_text("in the way", encoding="utf-8")
    home.mkdir()
    at_home, nowhere = (
        start(block / "cache", HOME=str(home)),
        start(block / "cache", HOME=str(block / "home")),
    )
    found = ended(at_home)
    assert (found["burst"], found["folder"]) == (1, str(home / ".cache" / "perdure"))
    found = ended(nowhere)
    assert (found["burst"], found["folder"]) == (1, "None")
    assert {path.name for path in tmp_path.iterdir()} == {"file", "home"}


def test_one_signature_serves_all_callers() -> None:
    """A kernel is compiled once, when it is made: the arguments of a flight have the types it was warmed with."""
    fly("logistic", [0.1, 0.2], axis=([0.0], [1.0], 10), n_step=3)
    assert len(kernel("logistic").signatures) == 1  # type: ignore[attr-defined]


def test_same_spec_same_text_and_other_spec_other_text() -> None:
    texts = [module_source(spec) for spec in SPECS.values()]
    assert texts == [module_source(spec) for spec in SPECS.values()]
    assert len(set(texts)) == len(texts)


def test_functions_of_python_are_compiled_in_memory() -> None:
    """A function in place of equations gives the same states as the equations; one numba cannot take is refused."""
    from perdure._kernels.cache import burst_kernel
    from perdure._kernels.generate import KernelSpec

    def decay(x: float, c: float) -> float:
        return c * x + 1.0

    def closed(x: float, c: float) -> float:
        return x.nothing  # type: ignore[attr-defined, no-any-return]

    advance = burst_kernel(KernelSpec("map", ("x",), ("c",), function=decay, lanes=8))
    state = np.array([[0.0, 2.0, 4.0]])
    advance(
        state, np.zeros((0, 3)), np.zeros((0, 1, 3), dtype=np.uint16), np.zeros(3, dtype=np.uint64),
        np.array([0.5]), 1.0, 2, 2, np.zeros(1), np.ones(1), 3.0,
    )  # fmt: skip
    assert state[0].tolist() == RIGHT["state"]
    with pytest.raises(TypeError, match="nothing"):
        burst_kernel(KernelSpec("map", ("x",), ("c",), function=closed, lanes=8))
