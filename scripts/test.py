"""Sets perdure up in this checkout and runs all checks: python3 scripts/test.py [arguments of pytest]

With arguments of pytest, the short calibration table (scripts/verify.py) is left out.
"""

# No `from __future__ import annotations`, for the reason given in _environment.py.
import sys

from _environment import prepare, run

# pytest last: its summary closes the output.
CHECKS = (("ruff", "check", "."), ("ruff", "format", "--check", "."), ("mypy",))
SECTIONS = ("--coverage", "--control", "--convection", "--accuracy", "--crosscheck")
CALIBRATION = ("python", "scripts/verify.py", "--short", *SECTIONS)


def main(arguments: "list[str]") -> int:
    """0 if every check passed, else 1. A failed check does not keep the next ones from running."""
    prepare(extra="test")
    verdicts = []
    for name, *rest in CHECKS if arguments else (*CHECKS, CALIBRATION):
        title = " ".join([name, *rest])
        print(f"\n== {title}", flush=True)
        verdicts.append((title, run(name, *rest)))
    for title, status in verdicts:
        print(f"== {title}: {'passed' if status == 0 else f'FAILED (exit status {status})'}")
    print("\n== pytest", flush=True)
    verdicts.append(("pytest", run("pytest", *arguments)))
    return int(any(status != 0 for _, status in verdicts))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
