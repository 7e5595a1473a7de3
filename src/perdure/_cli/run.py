"""``perdure run``: estimate a case and save its density file."""

from __future__ import annotations

import contextlib
import os
import shlex
from pathlib import Path
from typing import TYPE_CHECKING

import click

from perdure._cli.crosscheck import verdict_status
from perdure._cli.invocation import verbose_option
from perdure._cli.output import json_text, print_problems, print_text
from perdure._cli.progress import reporter_for
from perdure._cli.steering import steering, steering_options, unmet_lines
from perdure._cli.table import results_text
from perdure.errors import UsageError

if TYPE_CHECKING:
    from perdure._result import Result

SCHEMA = 1
MOST_WORKERS = 1024


@click.command(short_help="Estimate a case and save its density file.")
@click.argument("case", type=click.Path(exists=True, dir_okay=False, readable=True, path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Density file; by default the name of CASE with .h5, in this folder.",
)
@click.option("--workers", type=click.IntRange(1, MOST_WORKERS), help="Threads; by default all processors.")
@click.option("--seed", type=click.IntRange(min=0), help="Seed instead of the one in CASE.")
@steering_options
@click.option("--crosscheck", "checking", is_flag=True, help="Check the result against long trajectories.")
@click.option("--json", "as_json", is_flag=True, help="Print the results as one JSON object.")
@click.option("--quiet", is_flag=True, help="Print errors only (and the JSON object, if asked for).")
@verbose_option
def run(
    case: Path,
    output: Path | None,
    workers: int | None,
    seed: int | None,
    accuracy: float | None,
    budget_steps: float | None,
    budget_minutes: float | None,
    budget_memory: float | None,
    checking: bool,
    as_json: bool,
    quiet: bool,
    verbose: bool,
) -> int:
    """Estimate the long-run statistics of CASE, a TOML file, and save its density file.

    Progress goes to standard error, results to standard output. Exit status: 0 done; 1 saved, but a stated
    check failed, an accuracy was not reached or the crosscheck does not agree; 2 wrong case or arguments; 3 interrupted
    or out of resources; 70 a fault of perdure.
    """
    target = Path(f"{case.stem}.h5") if output is None else output
    _check_target(target, case)
    from perdure._case import load_case

    checked = load_case(case, seed=seed)
    steered, told = steering(checked.accuracy, accuracy, budget_steps, budget_minutes, budget_memory)
    # Only now: the engine takes a second to load, and the mistakes of a case should not wait for it.
    from perdure._pipeline import estimate

    command = ["perdure", "run", case.name, *([] if seed is None else ["--seed", str(seed)]), *told]
    with contextlib.closing(reporter_for(quiet=quiet)) as progress:
        result = estimate(checked, workers=workers, progress=progress, command=shlex.join(command), **steered)
    sha256: str | None = None
    try:
        sha256 = result.save(target)
        if checking:
            # only now: a crosscheck that is interrupted leaves the file without one
            result, sha256 = _checked(result, target, workers, quiet, shlex.join([*command, "--crosscheck"]))
    finally:
        # Also when the file could not be written: the numbers took long to get.
        if as_json:
            file = None if sha256 is None else str(target)
            print_text(json_text({**result.to_dict(), "file": file, "file_sha256": sha256, "schema": SCHEMA}))
        elif not quiet:
            saved = "" if sha256 is None else f"\n\nsaved in {target} (SHA-256 {sha256})"
            print_text(results_text(result, verbose=verbose) + saved)
    return _status(result, target, quiet)


def _checked(result: Result, target: Path, workers: int | None, quiet: bool, command: str) -> tuple[Result, str]:
    """The result with its crosscheck, added to the file, and the SHA-256 of that."""
    from perdure._pipeline import crosscheck
    from perdure._store import add_crosscheck

    with contextlib.closing(reporter_for(quiet=quiet)) as progress:
        checked = crosscheck(result, workers=workers, progress=progress, command=command)
    assert checked.crosscheck is not None, "a crosscheck that ended left a record"
    return checked, add_crosscheck(target, checked.crosscheck)


def _check_target(target: Path, case: Path) -> None:
    """Refuse, before any work, a place where the file cannot be written.

    Raises
    ------
    UsageError
        The target is the case file itself.
    OutputError
        Its folder is missing or cannot be written to.
    """
    if target.exists() and os.path.samefile(target, case):
        raise UsageError(f"-o {target}: this is the case file, which would be overwritten; give another name")
    from perdure._store import check_target

    check_target(target)


def _status(result: Result, target: Path, quiet: bool) -> int:
    """Exit status 0 or 1; a failed check and an accuracy that was not reached are told on standard error."""
    unmet = unmet_lines(result.targets)
    checked = 0 if result.crosscheck is None else verdict_status(result.crosscheck, quiet)
    if result.checks_passed and not unmet:
        return checked
    messages = [*result.messages] if quiet and not result.checks_passed else []
    what = "an accuracy was not reached" if result.checks_passed else "a stated check failed"
    print_problems("\n".join([*messages, *unmet, f"{target} is saved, but {what} (exit status 1)"]))
    return 1
