"""What the entry point must know about the command that ran."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, TypeVar

import click

__all__ = ["Session", "verbose_option"]

F = TypeVar("F", bound=Callable[..., Any])


@dataclass
class Session:
    """State of one call of the program; `verbose` decides whether a fault shows its traceback."""

    verbose: bool = False


def _remember(context: click.Context, parameter: click.Parameter, value: bool) -> bool:
    session = context.find_object(Session)
    if session is not None:
        session.verbose = value
    return value


def verbose_option(command: F) -> F:
    """Option ``-v`` of a command."""
    option = click.option(
        "-v", "--verbose", is_flag=True, callback=_remember, help="More detail; traceback of a fault."
    )
    return option(command)
