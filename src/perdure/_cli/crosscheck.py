"""``perdure crosscheck``: check a density file against long trajectories."""

from __future__ import annotations

import contextlib
import shlex
from pathlib import Path
from typing import TYPE_CHECKING

import click

from perdure._cli.comparison import crosscheck_text, verdict_line
from perdure._cli.invocation import verbose_option
from perdure._cli.output import json_text, print_problems, print_text
from perdure._cli.progress import reporter_for
from perdure._cli.steering import amount

if TYPE_CHECKING:
    from perdure._records import Crosscheck

SCHEMA = 1
MOST_WORKERS = 1024
LEVEL = 0.05
ABOVE_ZERO = amount("a number above 0", "1e5")


@click.command(short_help="Check a density file against long trajectories.")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, readable=True, path_type=Path))
@click.option("--starts", type=click.IntRange(4, 16_384), help="Dispersed starts, each with a twin; by default 64.")
@click.option(
    "--duration",
    type=ABOVE_ZERO,
    metavar="TIME",
    help="Length of each trajectory (steps of a map); by default until every number is as sharp as in FILE.",
)
@click.option("--budget-steps", type=ABOVE_ZERO, metavar="NUMBER", help="Most time steps of all trajectories.")
@click.option("--budget-minutes", type=ABOVE_ZERO, metavar="NUMBER", help="Most minutes for the trajectories.")
@click.option(
    "--level",
    type=amount("a number between 0 and 1", "0.05", 1.0),
    default=str(LEVEL),
    show_default=True,
    metavar="NUMBER",
    help="Chance that anything is said to disagree where both sides are right.",
)
@click.option("--workers", type=click.IntRange(1, MOST_WORKERS), help="Threads; by default all processors.")
@click.option("--json", "as_json", is_flag=True, help="Print the results as one JSON object.")
@click.option("--quiet", is_flag=True, help="Print errors only (and the JSON object, if asked for).")
@verbose_option
def crosscheck(
    file: Path,
    starts: int | None,
    duration: float | None,
    budget_steps: float | None,
    budget_minutes: float | None,
    level: float,
    workers: int | None,
    as_json: bool,
    quiet: bool,
    verbose: bool,
) -> int:
    """Fly long trajectories of the case in FILE from dispersed starts, compare their numbers with those in FILE, and
    add the verdict and the Lyapunov exponents to FILE. No number in it is changed.

    Exit status: 0 agrees; 1 added, but disagrees or too short to tell; 2 wrong arguments; 3 interrupted or out of
    resources, FILE is as it was; 70 a fault of perdure.
    """
    from perdure._result import open_file
    from perdure._store import add_crosscheck, check_target

    check_target(file)
    with open_file(file) as opened:
        from perdure._pipeline import crosscheck as checked

        given: dict[str, float | None] = {
            "--starts": starts,
            "--duration": duration,
            "--budget-steps": budget_steps,
            "--budget-minutes": budget_minutes,
        }
        given |= {"--level": level} if level != LEVEL else {}
        told = [word for name, value in given.items() if value is not None for word in (name, f"{value:.15g}")]
        command = shlex.join(["perdure", "crosscheck", file.name, *told])
        with contextlib.closing(reporter_for(quiet=quiet)) as progress:
            result = checked(
                opened,
                starts=starts,
                duration=duration,
                steps=budget_steps,
                minutes=budget_minutes,
                level=level,
                workers=workers,
                progress=progress,
                command=command,
            )
    found = result.crosscheck
    assert found is not None, "a crosscheck that ended left a record"
    sha256: str | None = None
    try:
        sha256 = add_crosscheck(file, found)
    finally:
        # also when the file could not be written: the numbers took long to get
        if as_json:
            print_text(json_text({**result.to_dict(), "file": str(file), "file_sha256": sha256, "schema": SCHEMA}))
        elif not quiet:
            saved = "" if sha256 is None else f"\n\nadded to {file} (SHA-256 {sha256})"
            print_text(crosscheck_text(result) + saved)
    return verdict_status(found, quiet)


def verdict_status(found: Crosscheck, quiet: bool) -> int:
    """Exit status 0 or 1; anything but "agrees" is told on standard error."""
    if found.verdict == "agrees":
        return 0
    print_problems("\n".join([verdict_line(found), *(found.messages if quiet else ())]))
    return 1
