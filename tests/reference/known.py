"""Reference values beside the numbers that perdure gives for them."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np

from perdure import Quantity, Result

__all__ = ["Known", "known", "quantity", "sampling", "scale"]


@dataclass(frozen=True)
class Known:
    """A reference value; `number` is what perdure calls it, `regime` is empty where there is one."""

    case: str
    number: str
    regime: str
    value: Any
    uncertainty: float
    source: str

    def __str__(self) -> str:
        return f"{self.case}, {self.number} {self.regime}".rstrip()


@cache
def known(case: str) -> tuple[Known, ...]:
    """Reference values of a case, at least one."""
    tables = tomllib.loads(Path(__file__).with_name("values.toml").read_text(encoding="utf-8"))
    (found,) = [table for table in tables["case"] if table["id"] == case]
    return tuple(
        Known(case, q["number"], q.get("regime", ""), q["value"], q["uncertainty"], q["source"])
        for q in found["quantity"]
    )


def regime_number(result: Result, regime: str) -> int:
    """Index of the regime on the left or on the right of x = 1/2; 0 where the case has one."""
    if not regime:
        return 0
    side = [r.observables["x"].mean.value > 0.5 for r in result.regimes]
    assert sorted(side) == [False, True]
    return side.index(regime == "right")


def quantity(result: Result, number: str, regime: str = "") -> Quantity:
    """The number of a result that goes by the name `number`; "weight" is that of the regime."""
    one = result.regimes[regime_number(result, regime)]
    if number == "weight":
        return one.weight
    kind, name = number.rsplit(" ", 1)
    if kind in ("mean", "variance"):
        return getattr(one.observables[name], kind)
    return getattr(one.events[name], kind.replace(" ", "_"))


def scale(result: Result, number: str, regime: str = "") -> float:
    """Size against which an error of the number counts: itself; the root mean square for a mean."""
    value = quantity(result, number, regime).value
    assert value is not None, number
    kind, name = number.rsplit(" ", 1)
    if kind != "mean":
        return abs(value)
    return float(np.hypot(value, np.sqrt(quantity(result, f"variance {name}", regime).value)))


def sampling(number: Quantity) -> float:
    """Standard error from the finite number of bursts alone: what the cells and the step add is allowed for apart."""
    return float(number.parts["sampling"])
