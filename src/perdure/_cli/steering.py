"""Options by which a run is steered: the accuracy asked for, and what may be spent on it."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any, TypeVar

import click

from perdure._cli.numbers import EVENT_NUMBERS
from perdure._cli.rounding import bound
from perdure.errors import UsageError

if TYPE_CHECKING:
    from perdure._records import Target

__all__ = ["reached_text", "steering", "steering_options", "unmet_lines"]

F = TypeVar("F", bound=Callable[..., Any])

NO_UNITS = {"": 1.0}
MEMORY_UNITS = {"": 1.0, "b": 1.0, "kb": 1e3, "mb": 1e6, "gb": 1e9, "tb": 1e12}
_AMOUNT = re.compile(r"\s*((?:\d+\.?\d*|\.\d+)(?:e[+-]?\d+)?)\s*([a-z]*)\s*", re.IGNORECASE)


def amount(
    allowed: str, example: str, limit: float = math.inf, units: Mapping[str, float] = NO_UNITS
) -> Callable[[str], float]:
    """Reader of a finite number above 0 and below `limit`, with a unit after it if there are any.

    Parameters
    ----------
    allowed, example : str
        For the message that refuses a value.
    units : mapping
        Factor of each unit, in lower case; the empty one stands for no unit.

    Returns
    -------
    callable
        From text to the number in the base unit; raises click.BadParameter where it is none, or not allowed.
    """

    def read(text: str) -> float:
        match = _AMOUNT.fullmatch(text)
        factor = units.get(match[2].lower(), math.nan) if match else math.nan
        number = float(match[1]) * factor if match else math.nan
        if not 0.0 < number < limit:
            raise click.BadParameter(f"found {text[:80]!r}; allowed: {allowed}; give for example {example}")
        return number

    return read


def steering_options(command: F) -> F:
    """Options ``--accuracy``, ``--budget-steps``, ``--budget-minutes``, ``--budget-memory`` of a command."""
    options = [
        click.option(
            "--accuracy",
            type=amount("a number between 0 and 1", "0.05", 1.0),
            metavar="NUMBER",
            help="Send bursts until each event share and return period has a half-width of its 95 percent interval "
            "below this part of its value; instead of the accuracy in CASE.",
        ),
        click.option(
            "--budget-steps",
            type=amount("a number above 0", "2e10"),
            metavar="NUMBER",
            help="Most time steps that may be spent on the accuracy.",
        ),
        click.option(
            "--budget-minutes",
            type=amount("a number above 0", "30"),
            metavar="NUMBER",
            help="Most minutes that may be spent on the accuracy.",
        ),
        click.option(
            "--budget-memory",
            type=amount("bytes, or a number of kB, MB, GB or TB, above 0", "8GB", units=MEMORY_UNITS),
            metavar="SIZE",
            help="Most memory that may be used: 8e9, 8GB, 500MB.",
        ),
    ]
    for option in reversed(options):
        command = option(command)
    return command


def steering(
    in_case: float | None, accuracy: float | None, steps: float | None, minutes: float | None, memory: float | None
) -> tuple[dict[str, Any], list[str]]:
    """Arguments of `estimate` for the options given, and their words for the record.

    Parameters
    ----------
    in_case : float or None
        The accuracy that the case asks for.

    Raises
    ------
    UsageError
        A budget, but no accuracy.
    """
    given = {"--budget-steps": steps, "--budget-minutes": minutes, "--budget-memory": memory}
    named = {name: value for name, value in given.items() if value is not None}
    if named and accuracy is None and in_case is None:
        names = ", ".join(named)
        raise UsageError(
            f"{names}: found a budget without an accuracy to spend it on; allowed: a budget beside --accuracy or "
            f"beside accuracy in [case]; add for example --accuracy 0.05, or leave out {names}"
        )
    arguments: dict[str, Any] = {}
    if accuracy is not None:
        arguments["accuracy"] = accuracy
    if named:
        from perdure import Budget

        arguments["budget"] = Budget(steps=steps, minutes=minutes, memory=memory)
    told = named if accuracy is None else {"--accuracy": accuracy, **named}
    return arguments, [word for name, value in told.items() for word in (name, f"{value:.15g}")]


def reached_text(target: Target) -> str:
    """Half-width over value that was reached, rounded up to two digits."""
    return "no value" if target.reached is None else bound(target.reached, upper=True)


def unmet_lines(targets: tuple[Target, ...]) -> list[str]:
    """A sentence for each accuracy that was not reached."""
    return [
        f"event {target.event}: the accuracy of the {EVENT_NUMBERS.get(target.number, target.number)} was not reached: "
        f"wanted {target.wanted:g}, reached {reached_text(target)}: {target.reason or 'no reason is on record'}"
        for target in targets
        if not target.met
    ]
