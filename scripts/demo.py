"""Sets perdure up in this checkout and runs a first case: python3 scripts/demo.py"""

# No `from __future__ import annotations`, for the reason given in _environment.py.
import sys

from _environment import ROOT, prepare, run

CASE = "cases/loop.toml"
RESULT = "loop.h5"


def main() -> int:
    """Exit status of the first command that did not end with 0, else 0."""
    prepare()
    for arguments in (("run", CASE, "-o", RESULT), ("show", RESULT)):
        print(f"\n$ perdure {' '.join(arguments)}")
        status = run("perdure", *arguments)
        if status != 0:
            return status
    print(f"\nThe result is in {ROOT / RESULT}. To use the command: . .venv/bin/activate")
    return 0


if __name__ == "__main__":
    sys.exit(main())
