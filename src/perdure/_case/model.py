"""Tables of a case -> checked `CaseRecord`. Here stands the order of the checks; each table has its own "
"file."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from perdure._case.checking import check_table, sub_table
from perdure._case.events import read_events
from perdure._case.functions import Functions
from perdure._case.observables import default_observables, read_observables
from perdure._case.options import read_bursts, read_cells, read_crosscheck, read_output, read_study
from perdure._case.probing import probe
from perdure._case.problems import Problems
from perdure._case.system import read_system
from perdure._case.tables import CaseTable
from perdure._records import CaseRecord

TABLES = ("case", "system", "cells", "bursts", "events", "observables", "crosscheck", "study", "output")
NOT_YET = {
    "record": "recorded data are not supported by this version yet",
    "exit": "open systems are not computed by this version",
}


def build_case(
    tables: Mapping[str, Any],
    problems: Problems,
    *,
    text: str,
    source_name: str,
    title: str,
    seed: int | None = None,
    functions: Functions | None = None,
) -> CaseRecord:
    """Check all tables and join them.

    Parameters
    ----------
    tables : mapping
        As read from TOML.
    problems : Problems
        Receives the mistakes; may hold some already.
    text : str
        Kept in the record.
    source_name : str
        Kept in the record.
    title : str
        Used if the table ``[case]`` has none.
    seed : int or None
        Used instead of the seed of ``[case]`` unless None.
    functions : Functions or None
        Python functions given instead of equations.

    Returns
    -------
    CaseRecord

    Raises
    ------
    CaseError
        All mistakes that could be found in one pass.
    """
    _check_names_of_tables(problems, tables)
    head = check_table(problems, CaseTable, sub_table(problems, tables, "case") or {}, ("case",))
    declared, system = read_system(problems, tables, functions or Functions())
    cells = read_cells(problems, tables, declared)
    bursts = read_bursts(problems, tables, declared)
    events = read_events(problems, tables, declared, cells)
    observables = read_observables(problems, tables, declared)
    crosscheck = read_crosscheck(problems, tables)
    study = read_study(problems, tables)
    output = read_output(problems, tables)
    if system is not None:
        if observables is None:
            observables = default_observables(system)
        probe(problems, system, events, observables, cells)
    problems.raise_if_any()
    assert system is not None, "a system that could not be read left no problem behind"
    return CaseRecord(
        title=title if head.title is None else head.title,
        seed=head.seed if seed is None else seed,
        accuracy=None if head.accuracy is None else float(head.accuracy),
        caution=head.caution,
        system=system,
        events=events,
        observables=observables or (),
        cells=cells,
        bursts=bursts,
        output=output,
        crosscheck=crosscheck,
        study=study,
        text=text,
        source_name=source_name,
    )


def _check_names_of_tables(problems: Problems, tables: Mapping[str, Any]) -> None:
    for name in tables:
        if name in NOT_YET:
            problems.add((name,), f"found the table [{name}]; {NOT_YET[name]}; allowed: {', '.join(TABLES)}; remove it")
        elif name not in TABLES:
            problems.add_unknown((name,), TABLES, "table")
