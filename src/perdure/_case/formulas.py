"""Expressions of a case: text or number -> `Expression`, with mistakes collected."""

from __future__ import annotations

import math
from collections.abc import Collection
from typing import Any

from perdure._case.expressions import CONDITION, NUMBER, read_expression
from perdure._case.positions import Path
from perdure._case.problems import Problems, show
from perdure._records import Expression


def read_value(problems: Problems, given: Any, names: Collection[str], path: Path) -> Expression | None:
    """Arithmetic expression at `path`; a number is allowed in its place. None after a mistake."""
    if isinstance(given, float) and not math.isfinite(given):
        problems.add(path, f"found {given}; allowed: a finite number or an expression; correct it")
        return None
    if isinstance(given, int | float) and not isinstance(given, bool):
        given = _number_text(given)
    if not isinstance(given, str):
        problems.add(
            path,
            f'found {show(given)}; allowed: an expression in quotes or a number; write for example "2*x"',
        )
        return None
    return _read(problems, given, names, NUMBER, path)


def read_condition(problems: Problems, given: str, names: Collection[str], path: Path) -> Expression | None:
    """Condition at `path`. None after a mistake."""
    return _read(problems, given, names, CONDITION, path)


def _read(problems: Problems, text: str, names: Collection[str], kind: str, path: Path) -> Expression | None:
    reading = read_expression(text, names, kind)
    problems.add_all(path, reading.findings)
    return reading.expression


def _number_text(value: float) -> str:
    # Whole numbers beyond 1.8e308 are refused as an expression would be; Python may not print them in full.
    if isinstance(value, int) and value.bit_length() > 1024:
        return "1e999"
    return repr(value)
