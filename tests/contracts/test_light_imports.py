"""`import perdure` and `perdure --help` load no heavy library."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

HEAVY = {
    "h5py", "llvmlite", "matplotlib", "numba", "numpy", "pandas", "pydantic", "scipy", "sklearn", "sparse",
    "sympy", "xarray",
}  # fmt: skip


def loaded_by(statement: str) -> set[str]:
    """Top-level modules that a fresh interpreter holds after a statement."""
    code = (
        "import json, os, sys\n"
        "out = os.dup(1); os.dup2(2, 1)\n"
        f"{statement}\n"
        "os.write(out, json.dumps(sorted({name.split('.')[0] for name in sys.modules})).encode())\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return set(json.loads(done.stdout))


@pytest.mark.parametrize(
    "statement",
    [
        "import perdure",
        "import perdure; dir(perdure); perdure.errors.PerdureError; perdure.__version__",
        "from perdure._cli.main import main; assert main(['--help']) == 0",
        "from perdure._cli.main import main; assert main(['run', '--help']) == 0",
        "from perdure._cli.main import main; assert main(['--version']) == 0",
        "from perdure._cli.main import main; assert main(['run', 'no-such-case.toml']) == 2",
    ],
)
def test_no_heavy_library(statement: str) -> None:
    loaded = loaded_by(statement)
    assert "perdure" in loaded
    assert loaded & HEAVY == set()


def test_a_heavy_library_is_noticed() -> None:
    """Negative control: records need numpy."""
    assert "numpy" in loaded_by("import perdure; perdure.Quantity") & HEAVY
