"""Collects the mistakes of a case, so that one message names them all, each with its place."""

from __future__ import annotations

import json
import re
from collections.abc import Iterable
from typing import Any

from perdure._case.grammar import nearest
from perdure._case.positions import Path, Positions
from perdure.errors import CaseError

MOST_SHOWN = 50
# A file this wrong is given up, so that hostile ones cannot keep the checks busy.
MOST_FOUND = 200
_TABLES_OF_SYSTEM = {"draws", "equations", "noise", "parameters"}
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


class Problems:
    """The mistakes found so far.

    Parameters
    ----------
    source_name : str
        File name without folders, or what stands for it in messages.
    text : str or None
        The TOML text, for line numbers; None for a case without one.
    """

    def __init__(self, source_name: str, text: str | None = None) -> None:
        self.source_name = source_name
        self._positions = Positions(text) if text is not None else None
        self._found: dict[tuple[Path, str], None] = {}

    def __len__(self) -> int:
        return len(self._found)

    def add(self, path: Path, finding: str) -> None:
        """Add "found ...; allowed: ...; what to do", met at `path` (keys from the top of the case).

        Raises
        ------
        CaseError
            This is the 200th mistake.
        """
        self._found[path, finding] = None
        if len(self._found) >= MOST_FOUND:
            self.raise_if_any()

    def add_all(self, path: Path, findings: Iterable[str]) -> None:
        for finding in findings:
            self.add(path, finding)

    def add_unknown(self, path: Path, choices: Iterable[str], what: str = "key") -> None:
        """Add that the last key of `path` is none of `choices`."""
        allowed = list(choices)
        word = str(path[-1])
        close = nearest(word, allowed)
        remedy = f"did you mean {close!r}?" if close else "remove or correct it"
        self.add(path, f"found the unknown {what} {word[:80]!r}; allowed: {listed(allowed)}; {remedy}")

    def raise_if_any(self) -> None:
        """Raise what was found, in the order of the file.

        Raises
        ------
        CaseError
            At least one mistake was found.
        """
        if not self._found:
            return
        shown = [(self._line(path), path, finding) for path, finding in list(self._found)[:MOST_SHOWN]]
        shown.sort(key=lambda entry: entry[0] or 0)
        lines = [f"{self._place(line, path)}: {finding}" for line, path, finding in shown]
        if len(self._found) > MOST_SHOWN:
            more = "150 or" if len(self._found) >= MOST_FOUND else str(len(self._found) - MOST_SHOWN)
            lines.append(f"{self.source_name}: {more} more mistakes are not shown")
        raise CaseError(lines)

    def _line(self, path: Path) -> int | None:
        return self._positions.line(path) if self._positions else None

    def _place(self, line: int | None, path: Path) -> str:
        place = self.source_name if line is None else f"{self.source_name}, line {line}"
        return f"{place}, {key_text(path)}" if path else place


def key_text(path: Path) -> str:
    """``("events", "storm", "ball", "radius")`` as ``[events.storm] ball.radius``."""
    # Tables in these tables have a header of their own.
    inner = path[0] == "events" or (path[0] == "system" and len(path) > 2 and path[1] in _TABLES_OF_SYSTEM)
    n_table = 2 if inner else 1
    table, key = _dotted(path[:n_table]), _dotted(path[n_table:])
    return f"[{table}] {key}" if key else f"[{table}]"


def _dotted(path: Path) -> str:
    text = ""
    for key in path:
        if isinstance(key, int):
            text += f"[{key}]"
        else:
            shown = key if _BARE_KEY.fullmatch(key) else json.dumps(key[:80], ensure_ascii=False)
            text += f".{shown}" if text else shown
    return text


def listed(names: Iterable[str]) -> str:
    """Names, separated by commas; long lists are cut."""
    every = list(names)
    if not every:
        return "none"
    return ", ".join(every[:24]) + (f" and {len(every) - 24} more" if len(every) > 24 else "")


def show(value: Any) -> str:
    """A value as it would stand in a case file, shortened, for "found ..."."""
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        text = json.dumps(value[:80], ensure_ascii=False)
        return text if len(value) <= 80 else text[:-1] + '..."'
    if isinstance(value, int):
        # Python refuses to print whole numbers of more than 4300 digits.
        return str(value) if value.bit_length() < 200 else f"a whole number of {value.bit_length()} bits"
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, dict):
        return f"a table with {listed(list(value)[:6])}" if value else "an empty table"
    if isinstance(value, list):
        inside = ", ".join(show(entry) for entry in value[:6])
        return f"[{inside}{', ...' if len(value) > 6 else ''}]"
    return f"{value} ({type(value).__name__})"[:80]
