"""Text to standard output and error, on whatever terminal, file or pipe they are."""

from __future__ import annotations

import errno
import json
import os
import sys
from collections.abc import Mapping
from typing import Any, TextIO

from perdure.errors import ResourceError

__all__ = ["encodable", "is_shortage", "json_text", "print_problems", "print_text"]


def json_text(content: Mapping[str, Any]) -> str:
    """One JSON object on one line. NaN and infinities are refused: JSON has none (ValueError)."""
    return json.dumps(content, allow_nan=False)


def print_text(text: str) -> None:
    """Print to standard output. A reader that went away (`perdure show loop.h5 | head -1`) is not an error.

    Raises
    ------
    ResourceError
        Standard output cannot take the text (a full disk).
    """
    if sys.stdout is None:  # started with standard output closed
        return
    try:
        sys.stdout.write(encodable(text, sys.stdout) + "\n")
        sys.stdout.flush()
    except BrokenPipeError:
        _silence(sys.stdout)
    except OSError as error:
        # The rest of the buffer would fail once more at exit, with a status of Python's own.
        _silence(sys.stdout)
        raise ResourceError(
            f"standard output: the results could not be written ({error.strerror}). Redirect them to a place with room"
        ) from error


def print_problems(message: str) -> None:
    """Print to standard error, each line after ``perdure: ``."""
    if sys.stderr is None:
        return
    lines = [f"perdure: {line.strip()}" for line in message.splitlines() if line.strip()]
    try:
        sys.stderr.write(encodable("\n".join(lines), sys.stderr) + "\n")
        sys.stderr.flush()
    except OSError:
        # Nobody can be told; the exit status still says it.
        _silence(sys.stderr)


def encodable(text: str, stream: TextIO) -> str:
    """`text` with the characters that the encoding of `stream` lacks replaced by ASCII."""
    encoding = getattr(stream, "encoding", None) or "utf-8"
    try:
        text.encode(encoding)
    except UnicodeEncodeError:
        text = text.replace("±", "+/-").encode(encoding, "backslashreplace").decode(encoding)
    return text


def is_shortage(error: OSError) -> bool:
    """True for an operating-system error that means a lack of disk, memory or open files."""
    return error.errno in (errno.ENOSPC, errno.EDQUOT, errno.ENOMEM, errno.EMFILE, errno.ENFILE)


def _silence(stream: TextIO) -> None:
    """Send what is left in the buffer of `stream`, and all that follows, to nowhere."""
    try:
        descriptor = stream.fileno()
    except (OSError, ValueError):
        return
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, descriptor)
    os.close(nowhere)
