"""What the entry point must know about the command that ran."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, TypeVar

import click

__all__ = ["Invocation", "verbose_option"]

F = TypeVar("F", bound=Callable[..., Any])


@dataclass
class Invocation:
    """State of one call of the program; `verbose` decides whether a fault shows its traceback."""

    verbose: bool = False


def _remember(context: click.Context, parameter: click.Parameter, value: bool) -> bool:
    invocation = context.find_object(Invocation)
    if invocation is not None:
        invocation.verbose = value
    return value


def verbose_option(command: F) -> F:
    """Option ``-v`` of a command."""
    option = click.option(
        "-v", "--verbose", is_flag=True, callback=_remember, help="More detail; traceback of a fault."
    )
    return option(command)
