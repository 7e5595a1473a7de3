"""The environment that the other scripts run in: a folder `.venv` in the checkout. Standard library only."""

# No `from __future__ import annotations` here: Python 3.6 would stop at it before it can print what is wrong.
import sys

if sys.version_info < (3, 11):  # noqa: UP036 - these scripts may be started with any python3
    sys.exit(
        f"perdure: Python 3.11 or newer is needed, this is {sys.version.split()[0]} ({sys.executable}). "
        f"Start the script with a newer one, for example: python3.12 {sys.argv[0]}"
    )

import hashlib
import importlib.util
import json
import os
import shutil
import subprocess
from collections.abc import Sequence
from pathlib import Path
from typing import Any, NoReturn

ROOT = Path(__file__).resolve().parent.parent
ENVIRONMENT = ROOT / ".venv"
CONSTRAINTS = ROOT / "scripts" / "constraints.txt"
# Written before anything else is: it marks a folder that this script made and may empty again.
STAMP = ENVIRONMENT / "perdure-environment.json"
_BIN = ENVIRONMENT / ("Scripts" if os.name == "nt" else "bin")


def prepare(extra: str = "") -> None:
    """Make `.venv` ready, or reuse it if it fits.

    Parameters
    ----------
    extra : str
        Extra of pyproject.toml that is needed too ("test"); empty for none.

    Raises
    ------
    SystemExit
        With a message, where the environment cannot be made.
    """
    wanted = {"python": sys.version, "inputs": _inputs(), "extras": [extra] if extra else []}
    found = _read_stamp()
    if found is None and ENVIRONMENT.exists() and any(ENVIRONMENT.iterdir()):
        _stop(
            "the folder .venv of this checkout was not made by this script, which would have to empty it. "
            "Move it away, then start the script again."
        )
    fits = found is not None and all(found.get(key) == wanted[key] for key in ("python", "inputs"))
    ready = found["extras"] if found and fits and program("python").exists() else None
    if ready is not None and set(wanted["extras"]) <= set(ready):
        return
    if ready is None:
        _create(wanted)
    else:
        wanted["extras"] = sorted({*ready, extra})
    _install(wanted["extras"])
    STAMP.write_text(json.dumps(wanted, indent=1) + "\n", encoding="utf-8")


def program(name: str) -> Path:
    """Path of a program of the environment."""
    return _BIN / (name + (".exe" if os.name == "nt" else ""))


def run(name: str, *arguments: str) -> int:
    """Run a program of the environment in the checkout; its exit status.

    Standard output of this process is flushed first, so that the lines of both keep their order.
    """
    sys.stdout.flush()
    try:
        return subprocess.run([str(program(name)), *arguments], cwd=ROOT, env=_variables()).returncode
    except KeyboardInterrupt:
        _stop("interrupted.", status=3)


def _inputs() -> str:
    """Hash of what decides the packages installed."""
    texts = [path.read_bytes() for path in (ROOT / "pyproject.toml", CONSTRAINTS)]
    return hashlib.sha256(b"\0".join(texts)).hexdigest()


def _read_stamp() -> dict[str, Any] | None:
    """The stamp; an empty one if it is damaged, None if there is none."""
    try:
        stamp = json.loads(STAMP.read_text(encoding="utf-8"))
    except FileNotFoundError:
        return None
    except ValueError:
        return {}
    return stamp if isinstance(stamp, dict) else {}


def _create(wanted: dict[str, Any]) -> None:
    """Empty the folder, keeping a stamp that fits nothing, and make the environment in it."""
    uv = shutil.which("uv")
    needed = ["venv"] if uv else ["venv", "ensurepip"]
    missing = [name for name in needed if importlib.util.find_spec(name) is None]
    if missing:
        _stop(
            f"the Python at {sys.executable} comes without {' and '.join(missing)}. Install the package of "
            "your system that holds it (Debian and Ubuntu: apt install python3-venv), or install uv, or "
            "start the script with another Python; 3.11 or newer is needed."
        )
    print(f"perdure: making the environment .venv (Python {wanted['python'].split()[0]})", flush=True)
    ENVIRONMENT.mkdir(exist_ok=True)
    STAMP.write_text("{}\n", encoding="utf-8")
    for entry in ENVIRONMENT.iterdir():
        if entry == STAMP:
            continue
        if entry.is_dir() and not entry.is_symlink():
            shutil.rmtree(entry)
        else:
            entry.unlink()
    # The interpreter behind a virtual environment: this script may have been started from .venv itself.
    base = getattr(sys, "_base_executable", None) or sys.executable
    command = [base, "-m", "venv", *(["--without-pip"] if uv else []), str(ENVIRONMENT)]
    if _call(command) != 0:
        _stop("the environment could not be made; the lines above say why.")


def _install(extras: Sequence[str]) -> None:
    """Install perdure, editable, with the versions of constraints.txt."""
    target = f"{ROOT}[{','.join(extras)}]" if extras else str(ROOT)
    what = ["--constraint", str(CONSTRAINTS), "--editable", target]
    python = str(program("python"))
    print("perdure: installing packages; this takes a minute or two the first time", flush=True)
    uv = shutil.which("uv")
    if uv:
        if _call([uv, "pip", "install", "--quiet", "--python", python, *what]) == 0:
            return
        # uv does not read pip's settings: on a machine with an index of its own only pip may get through.
        print("perdure: uv could not install the packages; trying pip", flush=True)
    pip = [python, "-m", "pip", "--disable-pip-version-check"]
    if _call([*pip, "--version"], hide=True) != 0 and _call([python, "-m", "ensurepip"]) != 0:
        _stop("pip could not be put into .venv; the lines above say why.")
    # Without --quiet, which hides the lines that tell what pip tried; they are shown if it fails.
    if _call([*pip, "install", *what], show_failure=True) != 0:
        _stop("the packages could not be installed; the lines above say why. Then start the script again.")


def _call(command: Sequence[str], *, hide: bool = False, show_failure: bool = False) -> int:
    """Run a command in the checkout; its exit status. Interruption ends this process with status 3.

    `hide` drops what it prints, `show_failure` shows that only where the status is not 0.
    """
    capture = hide or show_failure
    try:
        done = subprocess.run(
            command,
            cwd=ROOT,
            env=_variables(),
            stdout=subprocess.PIPE if capture else None,
            stderr=subprocess.STDOUT if capture else None,
        )
    except KeyboardInterrupt:
        _stop("interrupted; start the script again to go on.", status=3)
    if show_failure and done.returncode != 0:
        sys.stderr.write(done.stdout.decode(errors="replace"))
    return done.returncode


def _variables() -> dict[str, str]:
    """Environment variables of a child: without those that would let it import packages from elsewhere."""
    return {key: value for key, value in os.environ.items() if key not in ("PYTHONHOME", "PYTHONPATH")}


def _stop(message: str, *, status: int = 1) -> NoReturn:
    print(f"perdure: {message}", file=sys.stderr)
    sys.exit(status)
