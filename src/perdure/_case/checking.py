"""Runs the strict models and words what they refuse."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, TypeVar

from pydantic import ValidationError

from perdure._case import grammar
from perdure._case.positions import Path
from perdure._case.problems import Problems, show
from perdure._case.tables import Table
from perdure._case.writing import inline

AnyTable = TypeVar("AnyTable", bound=Table)


def check_table(problems: Problems, model: type[AnyTable], data: Mapping[str, Any], path: Path) -> AnyTable:
    """A table with its types and ranges checked; mistakes go to `problems`.

    Parameters
    ----------
    problems : Problems
    model : type
        A class of `tables`.
    data : mapping
        Keys and values as in the file.
    path : tuple
        Where the table stands.

    Returns
    -------
    model
        Refused keys hold None, so that the rest can still be checked.
    """
    try:
        return model.model_validate(dict(data))
    except ValidationError as error:
        entries = error.errors(include_url=False, include_context=False)
        foreign = [str(entry["loc"][0]) for entry in entries if entry["type"] == "extra_forbidden"]
        meant = {grammar.nearest(key, model.model_fields) for key in foreign}
        refused = set()
        for entry in entries:
            key = str(entry["loc"][0])
            refused.add(key)
            if entry["type"] == "missing" and key in meant:
                continue  # the unknown key that was meant is reported
            if entry["type"] == "extra_forbidden":
                problems.add_unknown((*path, key), model.model_fields)
            else:
                problems.add((*path, *entry["loc"]), _finding(model, key, entry["type"], entry["input"]))
        kept = {key: value for key, value in data.items() if key not in refused}
        blank = dict.fromkeys(refused & set(model.model_fields))
        return model.model_construct(**kept, **blank)


def _finding(model: type[Table], key: str, kind: str, value: Any) -> str:
    field = model.model_fields[key]
    found = "nothing" if kind == "missing" else show(value)
    remedy = "correct it"
    if field.examples:
        remedy = f"write for example {key} = {inline(field.examples[0])}"
    if not field.is_required():
        remedy += ", or leave it out"
    return f"found {found}; allowed: {field.description}; {remedy}"


def sub_table(problems: Problems, tables: Mapping[str, Any], key: str, path: Path = ()) -> dict[str, Any] | None:
    """Table `key`, or None if it is absent or not a table (which is then a mistake)."""
    value = tables.get(key)
    if value is None:
        return None
    if not isinstance(value, dict):
        problems.add((*path, key), f"found {show(value)}; allowed: a table; write it as a table of keys and values")
        return None
    return value


def by_component(problems: Problems, value: Any, state: tuple[str, ...] | None, path: Path) -> Any:
    """A list in state order as a table by state name; a table with unknown names left out; else unchanged."""
    if state is None:
        return value if isinstance(value, dict) else None
    if isinstance(value, list):
        if len(value) != len(state):
            problems.add(
                path,
                f"found {len(value)} entries, the wrong dimension; allowed: {len(state)}, one per state "
                f"component ({', '.join(state)}); correct the list",
            )
            return None
        return dict(zip(state, value, strict=True))
    if isinstance(value, dict):
        for name in value:
            if name not in state:
                problems.add_unknown((*path, name), state, "state name")
        return {name: value[name] for name in state if name in value}
    return value
