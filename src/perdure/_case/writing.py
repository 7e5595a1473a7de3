"""Writes tables as TOML text; reading the text back gives the same tables."""

from __future__ import annotations

import datetime
import json
import re
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

LONGEST_INTEGER = 10_000  # bits; Python refuses to print many more

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


def plain(value: Any) -> Any:
    """Python values as TOML would give them: tuples and arrays as lists, numpy numbers as Python's.

    Entries that are None are left out of tables. Anything TOML cannot hold is returned as it is.
    """
    if isinstance(value, np.generic | np.ndarray):
        return value.tolist()
    if isinstance(value, Mapping):
        return {key: plain(entry) for key, entry in value.items() if entry is not None}
    if isinstance(value, Sequence) and not isinstance(value, str | bytes):
        return [plain(entry) for entry in value]
    # Subclasses of float and int (numpy.float64 is one) print differently.
    if isinstance(value, float):
        return float(value)
    return value


def inline(value: Any) -> str:
    """A value as TOML text on one line.

    Raises
    ------
    TypeError
        TOML has no such value; the message names its type.
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        if value.bit_length() > LONGEST_INTEGER:
            raise TypeError(f"a whole number of {value.bit_length()} bits")
        return str(value)
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, str):
        return _quoted(value)
    if isinstance(value, datetime.datetime | datetime.date | datetime.time):
        return value.isoformat()
    if isinstance(value, Mapping):
        return "{" + ", ".join(f"{_key(key)} = {inline(entry)}" for key, entry in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(inline(entry) for entry in value) + "]"
    raise TypeError(f"a value of type {type(value).__name__}")


def write_tables(tables: Mapping[str, Mapping[str, Any]]) -> str:
    """TOML text of a case: tables and their tables under headers of their own, deeper ones inline.

    Raises
    ------
    TypeError
        A value that TOML cannot hold.
    """
    blocks: list[str] = []
    for name, table in tables.items():
        # The order of observables counts, and headers must come last: mixed tables are written inline.
        headed = name == "system" or all(isinstance(value, Mapping) for value in table.values())
        inner = {key: value for key, value in table.items() if headed and isinstance(value, Mapping)}
        keys = [f"{_key(key)} = {inline(value)}" for key, value in table.items() if key not in inner]
        if keys or not inner:
            blocks.append("\n".join([f"[{_key(name)}]", *keys]))
        for key, value in inner.items():
            lines = [f"{_key(entry)} = {inline(part)}" for entry, part in value.items()]
            blocks.append("\n".join([f"[{_key(name)}.{_key(key)}]", *lines]))
    return "\n\n".join(blocks) + "\n"


def _key(key: str) -> str:
    if not isinstance(key, str):
        raise TypeError(f"a key of type {type(key).__name__}")
    return key if _BARE_KEY.fullmatch(key) else _quoted(key)


def _quoted(text: str) -> str:
    try:
        text.encode()
    except UnicodeEncodeError:
        raise TypeError("a text with half a surrogate pair") from None
    # JSON leaves DEL as it is; TOML wants it escaped.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
