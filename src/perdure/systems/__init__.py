"""Named systems and what is known of them.

Examples
--------
>>> import perdure
>>> logistic = perdure.systems.get("logistic")
>>> case = perdure.Case(**logistic.tables)
>>> logistic.fact("mean x").value
0.5
"""

from __future__ import annotations

from difflib import get_close_matches

from perdure.systems.base import Fact, NamedSystem
from perdure.systems.convection import CONVECTION
from perdure.systems.double_well import DOUBLE_WELL
from perdure.systems.henon import HENON
from perdure.systems.logistic import LOGISTIC
from perdure.systems.ornstein_uhlenbeck import ORNSTEIN_UHLENBECK
from perdure.systems.ricker import RICKER

__all__ = ["Fact", "NamedSystem", "get", "names"]

_SYSTEMS = {system.name: system for system in (CONVECTION, DOUBLE_WELL, HENON, LOGISTIC, ORNSTEIN_UHLENBECK, RICKER)}


def names() -> tuple[str, ...]:
    """Names of all systems, in alphabetical order."""
    return tuple(sorted(_SYSTEMS))


def get(name: str) -> NamedSystem:
    """The system of that name.

    Raises
    ------
    KeyError
        There is none; the message gives the nearest name.
    """
    if name in _SYSTEMS:
        return _SYSTEMS[name]
    near = get_close_matches(str(name).lower().replace("-", "_").replace(" ", "_"), _SYSTEMS, n=1, cutoff=0.4)
    remedy = f"did you mean {near[0]!r}?" if near else "take one of these"
    raise KeyError(f"perdure.systems.get, name: found {name!r}; allowed: {', '.join(names())}; {remedy}")
