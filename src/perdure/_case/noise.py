"""Table ``[system.noise]`` -> Ito coefficients, a row per state component, a column per Wiener process."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from perdure._case.formulas import read_value
from perdure._case.positions import Path
from perdure._case.problems import Problems, show
from perdure._records import Expression

PATH: Path = ("system", "noise")
ZERO = Expression(text="0", source="0.0", names=frozenset())

Matrix = tuple[tuple[Expression, ...], ...]


def read_noise(
    problems: Problems,
    given: Mapping[str, Any] | None,
    kind: str,
    state: tuple[str, ...],
    names: tuple[str, ...],
    by_function: bool | None,
) -> Matrix:
    """Coefficients of the noise; empty for kinds without, for noise functions and after a mistake.

    Parameters
    ----------
    given : mapping or None
        The table ``[system.noise]``.
    names : tuple of str
        Names that coefficients may use.
    by_function : bool or None
        Whether there is a noise function; None for a system given by equations.
    """
    if kind != "noisy-flow":
        if given is not None:
            remedy = "use [system.draws]" if kind == "noisy-map" else 'remove it or write kind = "noisy-flow"'
            problems.add(PATH, f"found noise in a {kind}; allowed: only in a noisy-flow; {remedy}")
        return ()
    if by_function is not None:
        if given is not None:
            problems.add(PATH, "found coefficients beside a function; allowed: noise_function; give it instead")
        if not by_function:
            problems.add(
                ("system", "noise_function"),
                "found none; a noisy flow given by a function needs one; allowed: a Python function with the "
                "same arguments that returns the coefficients; give it",
            )
        return ()
    if not given:
        problems.add(
            PATH,
            f"found {'no noise' if given is None else 'an empty table'}; a noisy flow without noise is a "
            "flow; "
            f'allowed: at least one coefficient; write for example [system.noise] with {state[0]} = "0.3", '
            'or kind = "flow"',
        )
        return ()
    # A state component may be called matrix: then a text or number under that key is its coefficient.
    if "matrix" in given and ("matrix" not in state or isinstance(given["matrix"], list)):
        return _matrix(problems, given, state, names)
    return _diagonal(problems, given, state, names)


def _diagonal(problems: Problems, given: Mapping[str, Any], state: tuple[str, ...], names: tuple[str, ...]) -> Matrix:
    for name in given:
        if name not in state:
            problems.add_unknown((*PATH, name), (*state, "matrix"), "state name")
    listed = [name for name in state if name in given]
    found = {name: read_value(problems, given[name], names, (*PATH, name)) for name in listed}
    return tuple(tuple((found[row] or ZERO) if row == column else ZERO for column in listed) for row in state)


def _matrix(problems: Problems, given: Mapping[str, Any], state: tuple[str, ...], names: tuple[str, ...]) -> Matrix:
    path = (*PATH, "matrix")
    for name in given:
        if name != "matrix":
            problems.add(
                (*PATH, name),
                f"found {name!r} beside matrix; allowed: a matrix, or a coefficient per state component; remove one",
            )
    rows = given["matrix"]
    example = "write a row per state component, for example " + "[" + ", ".join(['["0.1"]'] * len(state)) + "]"
    if not isinstance(rows, list) or not all(isinstance(row, list) for row in rows):
        problems.add(path, f"found {show(rows)}; allowed: a list of rows, each a list of expressions; {example}")
        return ()
    if len(rows) != len(state):
        problems.add(
            path,
            f"found {len(rows)} rows, the wrong dimension; allowed: {len(state)}, one per state component; {example}",
        )
        return ()
    if len({len(row) for row in rows}) > 1 or not rows[0]:
        lengths = ", ".join(str(len(row)) for row in rows)
        problems.add(
            path,
            f"found rows of lengths {lengths}; allowed: equal lengths of at least 1, a column per Wiener "
            "process; fill the shorter rows with 0",
        )
        return ()
    read = [
        [read_value(problems, entry, names, (*path, i, j)) or ZERO for j, entry in enumerate(row)]
        for i, row in enumerate(rows)
    ]
    return tuple(tuple(row) for row in read)
