"""What a named system is."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

__all__ = ["Fact", "NamedSystem"]


@dataclass(frozen=True)
class Fact:
    """A number that is known of a system.

    Attributes
    ----------
    name : str
        What it is: "share NAME" or "entry rate NAME" of an event of the system, "mean NAME" or "variance NAME" of an
        observable, or words.
    value : float
    uncertainty : float
        0: exact to double rounding. Otherwise a standard error. Same unit as `value`.
    source : str
        A derivation or a publication.
    """

    name: str
    value: float
    uncertainty: float
    source: str


@dataclass(frozen=True)
class NamedSystem:
    """A well-known system.

    Attributes
    ----------
    name : str
    tables : mapping
        What ``perdure.Case(**tables)`` takes: title, system, events, observables.
    facts : tuple of Fact
        At the parameters in `tables`.
    """

    name: str
    tables: Mapping[str, Any]
    facts: tuple[Fact, ...]

    def fact(self, name: str) -> Fact:
        """The fact of that name.

        Raises
        ------
        KeyError
            There is none; the message lists those there are.
        """
        for fact in self.facts:
            if fact.name == name:
                return fact
        raise KeyError(f"{self.name} has no fact {name!r}; it has: {', '.join(fact.name for fact in self.facts)}")
