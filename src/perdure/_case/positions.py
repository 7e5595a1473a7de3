"""Line numbers of the parts of a TOML text, found with tomllib alone (it keeps no positions itself)."""

from __future__ import annotations

import bisect
import tomllib
from typing import Any

Path = tuple[str | int, ...]

# Characters parsed for all the lines of one report: about two seconds. Beyond it messages go without a line.
PARSE_BUDGET = 2_000_000


class Positions:
    """Finds lines by parsing ever longer beginnings of a valid TOML text."""

    def __init__(self, text: str) -> None:
        self._lines = [line + "\n" for line in text.removeprefix("\ufeff").split("\n")]
        self._parsed: dict[int, dict[str, Any] | None] = {0: {}}
        self._budget = PARSE_BUDGET

    def line(self, path: Path) -> int | None:
        """First line, counted from 1, of the deepest part of `path` that the text has.

        Returns
        -------
        int or None
            None for an empty path, or when the text is too long to be searched.
        """
        try:
            _, whole = self._up_to(len(self._lines))
            while path and not _has(whole, path):
                path = path[:-1]
            if not path:
                return None
            counts = range(1, len(self._lines) + 1)
            last = bisect.bisect_left(counts, True, key=lambda n: _has(self._up_to(n)[1], path)) + 1
            return self._up_to(last - 1)[0] + 1
        except _BudgetError:
            return None

    def _up_to(self, n: int) -> tuple[int, dict[str, Any]]:
        # Longest parsable beginning of at most n lines: a text may be cut inside an array of several lines.
        while True:
            tables = self._parse(n)
            if tables is not None:
                return n, tables
            n -= 1

    def _parse(self, n: int) -> dict[str, Any] | None:
        if n not in self._parsed:
            text = "".join(self._lines[:n])
            self._budget -= len(text)
            if self._budget < 0:
                raise _BudgetError
            try:
                self._parsed[n] = tomllib.loads(text)
            except (ValueError, RecursionError):
                self._parsed[n] = None
        return self._parsed[n]


class _BudgetError(Exception):
    """The text is too long for another search."""


def _has(node: Any, path: Path) -> bool:
    try:
        for key in path:
            node = node[key]
    except (KeyError, IndexError, TypeError):
        return False
    return True
