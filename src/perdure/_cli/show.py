"""``perdure show``: the results in a density file."""

from __future__ import annotations

from pathlib import Path

import click

from perdure._cli.budget import budget_text
from perdure._cli.comparison import crosscheck_text
from perdure._cli.invocation import verbose_option
from perdure._cli.output import json_text, print_text
from perdure._cli.table import results_text
from perdure.errors import UsageError


@click.command(short_help="Print the results in a density file.")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, readable=True, path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the results as one JSON object.")
@click.option("--crosscheck", "checked", is_flag=True, help="Print the comparison with long trajectories.")
@click.option("--budget", is_flag=True, help="Print the error budget: every number with its error by part.")
@verbose_option
def show(file: Path, as_json: bool, checked: bool, budget: bool, verbose: bool) -> int:
    """Print the results in FILE, a density file that `perdure run` saved."""
    options = [name for name, given in (("--budget", budget), ("--crosscheck", checked), ("--json", as_json)) if given]
    if len(options) > 1:
        raise UsageError(
            f"{options[0]}: found beside {options[1]}; allowed: one of the two; leave out {options[0]}; the JSON "
            "object has everything"
        )
    from perdure._result import open_file

    result = open_file(file)
    if checked and result.crosscheck is None:
        raise UsageError(
            f"{file}: found no crosscheck in it; allowed: a file that has one; run `perdure crosscheck {file}` first"
        )
    if as_json:
        print_text(json_text(result.to_dict()))
    elif checked:
        print_text(crosscheck_text(result))
    else:
        print_text(budget_text(result) if budget else results_text(result, verbose=verbose))
    return 0
