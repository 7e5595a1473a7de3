"""Who may import whom: every file of the package is read, imports inside functions too."""

from __future__ import annotations

import ast
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parents[2] / "src" / "perdure"

ENGINE = {
    "_streams", "_kernels", "systems", "_partition", "_sampling", "_transitions", "_spectrum", "_statistics",
    "_density", "_crosscheck",
}  # fmt: skip

# Room -> what it may import from perdure beside itself. "perdure" is the root, which has the version.
ROOMS: dict[str, set[str]] = {
    "errors": set(),
    "_records": {"errors"},
    "_streams": {"errors"},
    "_kernels": set(),
    "systems": {"_records"},
    "_partition": {"errors", "_records", "_kernels"},
    "_sampling": {"errors", "_records", "_streams", "_kernels"},
    "_transitions": {"errors", "_records", "_kernels"},
    "_spectrum": {"errors", "_records"},
    "_statistics": {"errors", "_records"},
    "_crosscheck": {"errors", "_records", "_streams", "_kernels", "_statistics"},
    "_density": {"errors", "_records"},
    "_case": {"errors", "_records", "systems"},
    "_store": {"errors", "_records"},
    "_plain": {"errors", "_records"},
    "_result": {"errors", "_records", "_store", "_density", "_plain"},
    "_pipeline": {"errors", "_records", "_case", "_store", "_result", "perdure", *ENGINE},
    "_cli": {"errors", "_case", "_store", "_pipeline", "_result", "perdure"},
    "__main__": {"_cli"},
    "perdure": {"errors", "systems", "_records", "_case", "_density", "_pipeline", "_result"},
}

# Allowed under `if TYPE_CHECKING:` only.
TYPES_ONLY: dict[str, set[str]] = {"_cli": {"_records"}}

# Library or part of one -> the only place that may import it: a room, or a file of it.
HOMES = {
    "click": "_cli",
    "h5py": "_store",
    "llvmlite": "_kernels",
    "matplotlib": "_report",
    "numba": "_kernels",
    "pydantic": "_case",
    "scipy.sparse.csgraph": "_spectrum",
    "scipy.sparse.linalg": "_spectrum",
    "sklearn": "_partition/kmeans.py",
    "sparse": "_density",
    "sympy": "_case",
    "tomllib": "_case",
}

# Files that import by a name in a string: lazy public names, and the modules generated for cases.
DYNAMIC = {"__init__.py", "_store/__init__.py", "_kernels/cache.py"}


@dataclass(frozen=True)
class Import:
    """One imported name, in full, with its line; `types_only` under ``if TYPE_CHECKING:``."""

    name: str
    line: int
    types_only: bool


def imports_of(source: str, package: str) -> Iterator[Import]:
    """Every import in the text of a module that stands in `package` (dotted)."""
    yield from _walk(ast.parse(source), package, types_only=False)
    if "import_module" in source or "__import__" in source:
        for node in ast.walk(ast.parse(source)):
            if isinstance(node, ast.Constant) and isinstance(node.value, str):
                if re.fullmatch(r"\w+(\.\w+)+", node.value):
                    yield Import(node.value, node.lineno, False)
                if node.value == "perdure":
                    yield Import("perdure", node.lineno, False)


def _walk(node: ast.AST, package: str, types_only: bool) -> Iterator[Import]:
    if isinstance(node, ast.Import):
        yield from (Import(alias.name, node.lineno, types_only) for alias in node.names)
    elif isinstance(node, ast.ImportFrom):
        base = node.module or ""
        if node.level:
            parts = package.split(".")
            base = ".".join([*parts[: len(parts) - node.level + 1], *filter(None, [base])])
        yield from (Import(f"{base}.{alias.name}", node.lineno, types_only) for alias in node.names)
    elif isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test):
        for child in node.body:
            yield from _walk(child, package, types_only=True)
        for child in node.orelse:
            yield from _walk(child, package, types_only)
    else:
        for child in ast.iter_child_nodes(node):
            yield from _walk(child, package, types_only)


def room_of(place: str) -> str:
    """Room of a file, given by its path in the package."""
    first = place.split("/")[0].removesuffix(".py")
    return "perdure" if first == "__init__" else first


def target_room(name: str) -> str | None:
    """Room of an imported name; None if it is not of perdure."""
    parts = name.split(".")
    if parts[0] != "perdure":
        return None
    return parts[1] if len(parts) > 1 and parts[1] in ROOMS else "perdure"


def violations(source: str, place: str) -> list[str]:
    """What the text of the file at `place` imports against the rules."""
    room = room_of(place)
    package = ".".join(["perdure", *place.split("/")[:-1]])
    found = []
    if place not in DYNAMIC and re.search(r"\bimport_module\b|\b__import__\b|\bspec_from_file_location\b", source):
        found.append(f"{place}: imports by a name in a string")
    for item in imports_of(source, package):
        target = target_room(item.name)
        allowed = ROOMS[room] | {room} | (TYPES_ONLY.get(room, set()) if item.types_only else set())
        if target is not None and target not in allowed:
            found.append(f"{place}:{item.line}: {room} imports {item.name}")
        for library, home in HOMES.items():
            inside = f"{item.name}.".startswith(f"{library}.")
            if inside and place != home and room != home:
                found.append(f"{place}:{item.line}: {library} belongs in {home}")
    return found


def test_every_file_keeps_the_rules() -> None:
    files = sorted(PACKAGE.rglob("*.py"))
    assert len(files) > 20
    found = []
    for path in files:
        place = path.relative_to(PACKAGE).as_posix()
        assert room_of(place) in ROOMS, f"{place}: a new room needs a line in ROOMS and in DEVELOPERS.md"
        found += violations(path.read_text(encoding="utf-8"), place)
    assert found == []


def test_table_has_no_room_that_is_gone() -> None:
    there = {room_of(path.relative_to(PACKAGE).as_posix()) for path in PACKAGE.rglob("*.py")}
    assert set(ROOMS) - there == set()


@pytest.mark.parametrize(
    ("place", "source"),
    [
        ("_spectrum/a.py", "from perdure._statistics import mean"),
        ("_spectrum/a.py", "def f():\n    import perdure._statistics.numbers as n"),
        ("_spectrum/a.py", "def f():\n    from .._statistics import numbers"),
        ("_spectrum/a.py", "from perdure import _case"),
        ("_kernels/a.py", "import perdure"),
        ("_kernels/a.py", "from perdure import __version__"),
        (
            "_store/a.py",
            "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from perdure._case import Case",
        ),
        ("_cli/a.py", "from perdure._records import Plan"),
        ("_sampling/a.py", "import numba"),
        ("_sampling/a.py", "from numba import njit"),
        ("_transitions/a.py", "from scipy.sparse import csgraph"),
        ("_transitions/a.py", "import scipy.sparse.linalg as linalg"),
        ("_partition/boxes.py", "from sklearn.cluster import KMeans"),
        ("_pipeline.py", "class A:\n    def f(self):\n        import h5py"),
        ("_statistics/a.py", "from importlib import import_module"),
        ("_store/__init__.py", "from importlib import import_module\nHOMES = {'x': 'perdure._case.tables'}"),
    ],
)
def test_violations_are_reported(place: str, source: str) -> None:
    """Negative control of the reader."""
    assert len(violations(source, place)) == 1


@pytest.mark.parametrize(
    ("place", "source"),
    [
        ("_spectrum/a.py", "from scipy.sparse.linalg import eigs\nfrom perdure.errors import PerdureError"),
        ("_spectrum/a.py", "from . import classes\nfrom ..errors import PerdureError"),
        ("_transitions/a.py", "from scipy.sparse import csr_array\nimport scipy.special"),
        ("_partition/kmeans.py", "def f():\n    from sklearn.cluster import KMeans"),
        (
            "_cli/a.py",
            "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    from perdure._records import Plan",
        ),
        ("_pipeline.py", "import perdure\nfrom perdure._kernels.rows import BLOWN"),
    ],
)
def test_what_is_allowed_is_not_reported(place: str, source: str) -> None:
    assert violations(source, place) == []
