"""Which sections run, with how many seeds."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

__all__ = ["progress", "run_sections"]


def progress(text: str) -> None:
    """One line to standard error."""
    print(text, file=sys.stderr, flush=True)


def run_sections(names: list[str], options: argparse.Namespace) -> int:
    """0 if the criteria of all sections hold, else 1. Sections are imported one by one: none needs another."""
    passed = []
    for name in names:
        print(f"== {name}\n", flush=True)
        passed.append(SECTIONS[name](options))
        print(f"\n== {name}: {'passed' if passed[-1] else 'FAILED'}\n", flush=True)
    return int(not all(passed))


def coverage(options: argparse.Namespace) -> bool:
    from _verify.coverage import SHORT, coverage_section

    seeds = options.seeds or (4 if options.short else 20)
    target = Path(options.json) if options.json else None
    return coverage_section(chosen(options, SHORT if options.short else None), seeds, target, progress)


def control(options: argparse.Namespace) -> bool:
    from _verify.control import CHAOTIC, SHORT, control_section

    seeds = options.seeds or (3 if options.short else 20)
    return control_section(chosen(options, SHORT if options.short else CHAOTIC), seeds, progress)


def convection(options: argparse.Namespace) -> bool:
    from _verify.convection import convection_section

    return convection_section(options.seeds or (1 if options.short else 5), progress)


def accuracy(options: argparse.Namespace) -> bool:
    from _verify.accuracy import CASES, accuracy_section

    return accuracy_section(chosen(options, CASES), (0.05,) if options.short else (0.05, 0.02, 0.01), progress)


def crosscheck(options: argparse.Namespace) -> bool:
    from _verify.crosscheck import SHORT, SYSTEMS, crosscheck_section

    seeds = options.seeds or (2 if options.short else 20)
    return crosscheck_section(chosen(options, SHORT if options.short else SYSTEMS), seeds, options.short, progress)


def truths(options: argparse.Namespace) -> bool:
    from _verify.truths import truths_section

    return truths_section(options.short, progress)


def chosen(options: argparse.Namespace, names: tuple[str, ...] | None) -> list[str]:
    """Names of cases, from `names` (all reference cases if None), that start as `--cases` says.

    Raises
    ------
    SystemExit
        No name does.
    """
    if names is None:
        from _verify.comparing import case_names

        names = case_names()
    starts = tuple(part.strip() for part in options.cases.split(",") if part.strip())
    found = [name for name in names if not starts or name.startswith(starts)]
    if not found:
        sys.exit(f"verify: --cases {options.cases}: no case starts so; allowed: {', '.join(names)}")
    return found


SECTIONS = {
    "coverage": coverage,
    "control": control,
    "convection": convection,
    "accuracy": accuracy,
    "crosscheck": crosscheck,
    "truths": truths,
}
