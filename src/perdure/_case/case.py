"""`Case`: a checked case from a file or from Python, the only thing that other rooms get from here."""

from __future__ import annotations

import dataclasses
import os
import tomllib
from collections.abc import Mapping
from typing import Any

from perdure._case import grammar
from perdure._case.functions import Functions, function_comments
from perdure._case.model import build_case
from perdure._case.problems import Problems, listed, show
from perdure._case.reading import parse_tables, read_text
from perdure._case.tables import LARGEST_SEED
from perdure._case.writing import plain, write_tables
from perdure._records import CaseRecord
from perdure.errors import UsageError

__all__ = ["Case", "load_case"]

PYTHON = "<python>"

Table = Mapping[str, Any]


class Case(CaseRecord):
    """A system with its events, observables and options, checked and ready to run.

    Parameters
    ----------
    system : mapping
        ``kind``, ``state``, ``equations``, ``parameters``, ... as in a case file. Instead of ``equations`` it
        may hold ``function``, a Python function of state, parameters and draws in order that numba can
        compile and that returns a float or a tuple of floats; a noisy flow then also needs
        ``noise_function``.
    events, observables, cells, bursts, output, crosscheck, study : mapping or None
        The tables of these names, as in a case file.
    title : str
    seed : int
        From 0 to 2**128.
    accuracy : float or None
        Between 0 and 1: bursts are sent until the 95 percent interval of every event share and return period has a
        half-width below `accuracy` times its value. No unit. None: standard effort, nothing is steered.
    caution : str
        Shown with the results.

    Raises
    ------
    CaseError
        All mistakes that could be found in one pass.

    Examples
    --------
    >>> case = Case(
    ...     system={
    ...         "kind": "map",
    ...         "state": ["x"],
    ...         "parameters": {"r": 4.0},
    ...         "equations": {"x": "r*x*(1 - x)"},
    ...     },
    ...     events={"edge": {"when": "x > 0.9"}},
    ... )
    >>> case.with_parameters(r=3.9).system.parameters["r"].value
    3.9
    """

    def __init__(
        self,
        *,
        system: Table,
        events: Table | None = None,
        observables: Table | None = None,
        cells: Table | None = None,
        bursts: Table | None = None,
        output: Table | None = None,
        crosscheck: Table | None = None,
        study: Table | None = None,
        title: str = "untitled",
        seed: int = 0,
        accuracy: float | None = None,
        caution: str = "",
    ) -> None:
        given = {
            "case": {"title": title, "seed": seed, "accuracy": accuracy, "caution": caution},
            "system": system,
            "cells": cells,
            "bursts": bursts,
            "events": events,
            "observables": observables,
            "crosscheck": crosscheck,
            "study": study,
            "output": output,
        }
        functions = Functions()
        if isinstance(system, Mapping):
            functions = Functions(system.get("function"), system.get("noise_function"))
            given["system"] = {key: system[key] for key in system if key not in ("function", "noise_function")}
        _fill(self, _build_from_python(given, functions, PYTHON))

    @classmethod
    def from_record(cls, record: CaseRecord) -> Case:
        """A case with the fields of a record that was checked before."""
        case = object.__new__(cls)
        _fill(case, record)
        return case

    @classmethod
    def from_text(cls, text: str, *, name: str, title: str, seed: int) -> Case:
        """A case from the text of a case file, with this seed.

        Raises
        ------
        CaseError
            All mistakes that could be found in one pass.
        """
        tables = parse_tables(text, name)
        return cls.from_record(
            build_case(tables, Problems(name, text), text=text, source_name=name, title=title, seed=seed)
        )

    def with_parameters(self, /, **values: float) -> Case:
        """The same case with other values of some parameters; everything else, the seed too, is kept.

        Raises
        ------
        CaseError
            A name is not a parameter of the system, or a value is not allowed.
        """
        problems = Problems(f"{self.source_name}, with_parameters")
        known = self.system.parameters
        for name in values:
            if name not in known:
                close = grammar.nearest(name, known)
                remedy = f"did you mean {close!r}?" if close else "correct the name"
                problems.add((), f"found the unknown parameter {name!r}; allowed: {listed(known)}; {remedy}")
        problems.raise_if_any()
        tables = tomllib.loads(self.text.removeprefix("\ufeff"))
        tables["case"] = {**tables.get("case", {}), "title": self.title, "seed": self.seed}
        parameters = tables["system"].get("parameters", {})
        for name, value in values.items():
            entry = parameters[name]
            parameters[name] = {**entry, "value": value} if isinstance(entry, dict) else value
        functions = Functions(self.system.function, self.system.noise_function)
        return Case.from_record(_build_from_python(tables, functions, self.source_name))

    def __repr__(self) -> str:
        system = self.system
        return f"Case({self.title!r}, {system.kind} of {', '.join(system.state)}, from {self.source_name})"


def load_case(path: str | os.PathLike[str], *, seed: int | None = None) -> Case:
    """Read and check a case file.

    Parameters
    ----------
    path : path-like
    seed : int or None
        Used instead of the seed in the file; from 0 to 2**128.

    Raises
    ------
    CaseError
        The file cannot be read, or the case in it is not allowed: all mistakes found in one pass.
    UsageError
        `seed` is not allowed.
    """
    if seed is not None and (isinstance(seed, bool) or not isinstance(seed, int) or not 0 <= seed <= LARGEST_SEED):
        raise UsageError(f"load_case, seed: found {show(seed)}; allowed: a whole number from 0 to 2**128; give one")
    text, found = read_text(path)
    # File names may hold what texts in a density file may not.
    name, stem = (_printable(part) for part in (found.name, found.stem))
    tables = parse_tables(text, name)
    record = build_case(tables, Problems(name, text), text=text, source_name=name, title=stem, seed=seed)
    return Case.from_record(record)


def _printable(text: str) -> str:
    return "".join(character if character.isprintable() else "?" for character in text)


def _fill(case: Case, record: CaseRecord) -> None:
    for field in dataclasses.fields(CaseRecord):
        object.__setattr__(case, field.name, getattr(record, field.name))


def _build_from_python(given: Mapping[str, Any], functions: Functions, source_name: str) -> CaseRecord:
    problems = Problems("case made in Python" if source_name == PYTHON else f"{source_name}, with_parameters")
    tables = {name: plain(table) for name, table in given.items() if table is not None}
    for name, table in tables.items():
        if not isinstance(table, dict):
            problems.add((name,), f"found {show(table)}; allowed: a dict; give the table as a dict")
            continue
        try:
            write_tables({name: table})
        except TypeError as error:
            problems.add(
                (name,),
                f"found {error}; allowed: texts, numbers, booleans, dates, lists and dicts with text keys; replace it",
            )
    # What no case file can hold would trip the checks of single tables.
    problems.raise_if_any()
    text = function_comments(functions) + write_tables(tables)
    return build_case(tables, problems, text=text, source_name=source_name, title="untitled", functions=functions)
