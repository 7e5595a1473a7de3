"""``perdure show``: the results in a density file."""

from __future__ import annotations

from pathlib import Path

import click

from perdure._cli.budget import budget_text
from perdure._cli.invocation import verbose_option
from perdure._cli.output import json_text, print_text
from perdure._cli.table import results_text
from perdure.errors import UsageError


@click.command(short_help="Print the results in a density file.")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, readable=True, path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the results as one JSON object.")
@click.option("--budget", is_flag=True, help="Print the error budget: every number with its error by part.")
@verbose_option
def show(file: Path, as_json: bool, budget: bool, verbose: bool) -> int:
    """Print the results in FILE, a density file that `perdure run` saved."""
    if as_json and budget:
        raise UsageError(
            "--budget: found beside --json; allowed: one of the two; leave out --budget, the JSON object has every "
            "number with its parts"
        )
    from perdure._result import open_file

    result = open_file(file)
    if as_json:
        print_text(json_text(result.to_dict()))
    else:
        print_text(budget_text(result) if budget else results_text(result, verbose=verbose))
    return 0
