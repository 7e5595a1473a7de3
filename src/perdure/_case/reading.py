"""Case file -> text -> tables. Refuses what is no case file before anything in it is looked at."""

from __future__ import annotations

import os
import re
import stat
import tomllib
from pathlib import Path
from typing import Any

from perdure.errors import CaseError

LARGEST_FILE = 2**20  # bytes

_POSITION = re.compile(r" \(at (line \d+, column \d+|end of document)\)$")


def read_text(path: str | os.PathLike[str]) -> tuple[str, Path]:
    """The text of a case file, verbatim, and its path.

    Raises
    ------
    CaseError
        The file is missing, a folder, unreadable, over 1 MiB, or not UTF-8.
    """
    path = Path(path)
    name = path.name or str(path)
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            raise CaseError(f"{name}: found a folder; allowed: a case file; give the file in it")
        if not stat.S_ISREG(mode):
            raise CaseError(f"{name}: found a pipe or device; allowed: a case file; give a regular file")
        with path.open("rb") as stream:
            data = stream.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        raise CaseError(
            f"{name}: found no such file ({path}); allowed: an existing case file; correct the path"
        ) from None
    except CaseError:
        raise
    except (OSError, ValueError) as error:
        # ValueError: a path with a NUL character.
        reason = getattr(error, "strerror", None) or str(error)
        raise CaseError(
            f"{name[:80]!r}: found a file that cannot be read ({reason}); allowed: a readable file; correct "
            "the path or its permissions"
        ) from None
    if len(data) > LARGEST_FILE:
        raise CaseError(f"{name}: found more than 1 MiB; allowed: case files up to 1 MiB; is this a case file?")
    try:
        return data.decode("utf-8"), path
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        raise CaseError(
            f"{name}, line {line}: found the byte 0x{data[error.start]:02x}, which is not UTF-8; allowed: "
            "UTF-8 text; save the file as UTF-8"
        ) from None


def parse_tables(text: str, name: str) -> dict[str, Any]:
    """Tables of a TOML text.

    Raises
    ------
    CaseError
        The text is empty, not TOML, or nested too deep.
    """
    try:
        # Some editors put a byte order mark in front.
        tables = tomllib.loads(text.removeprefix("\ufeff"))
    except tomllib.TOMLDecodeError as error:
        message = str(error)
        position = _POSITION.search(message)
        place = f"{name}, {position[1]}" if position else name
        reason = _POSITION.sub("", message)
        raise CaseError(
            f"{place}: found text that is not TOML ({reason}); allowed: [table] headers and key = value "
            "lines, texts in quotes; correct it"
        ) from None
    except RecursionError:
        raise CaseError(f"{name}: found brackets nested too deep; allowed: a few levels; remove the nesting") from None
    except ValueError as error:
        reason = str(error).split(":")[0][:100]
        raise CaseError(
            f"{name}: found a number or date that cannot be read ({reason}); allowed: numbers below 1.8e308; correct it"
        ) from None
    if not tables:
        raise CaseError(
            f"{name}: found an empty file; allowed: a case with the table [system]; write one, or give another file"
        )
    return tables
