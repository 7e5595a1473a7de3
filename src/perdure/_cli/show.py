"""``perdure show``: the results in a density file."""

from __future__ import annotations

from pathlib import Path

import click

from perdure._cli.invocation import verbose_option
from perdure._cli.output import json_text, print_text
from perdure._cli.table import results_text


@click.command(short_help="Print the results in a density file.")
@click.argument("file", type=click.Path(exists=True, dir_okay=False, readable=True, path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the results as one JSON object.")
@verbose_option
def show(file: Path, as_json: bool, verbose: bool) -> int:
    """Print the results in FILE, a density file that `perdure run` saved."""
    from perdure._result import open_file

    result = open_file(file)
    print_text(json_text(result.to_dict()) if as_json else results_text(result, verbose=verbose))
    return 0
