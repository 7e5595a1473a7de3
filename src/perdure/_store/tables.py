"""Columns of numbers with interval and error budget: how they are written and read.

A column NAME of `Quantity` becomes the variables NAME, NAME_low, NAME_high (95 percent interval), NAME_se
(total standard error), NAME_se_PART for every part of the error budget, and NAME_reason. Those beside NAME
are listed in its attribute `ancillary_variables`. What a quantity has not (None) is nan.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import Any

import h5py
import numpy as np

from perdure._records import Floats, Quantity
from perdure._store.layout import attrs, free_names, put, put_text

__all__ = [
    "floats",
    "optional",
    "part_columns",
    "part_names",
    "part_variables",
    "put_quantities",
    "read_quantities",
    "texts",
]


def part_names(quantities: Sequence[Quantity]) -> tuple[str, ...]:
    """Parts of the error budget met in any of the quantities, in order of first appearance."""
    return tuple(dict.fromkeys(part for q in quantities for part in q.parts))


def put_quantities(
    group: h5py.Group,
    name: str,
    quantities: Sequence[Quantity],
    dims: Sequence[str],
    *,
    long_name: str,
    with_text: bool = True,
) -> None:
    """Write a column of quantities, or a single one (`dims` empty).

    Parameters
    ----------
    with_text : bool
        False in groups that should stay free of text: the reasons are then left out unless there are any.
    """
    units = {q.unit for q in quantities}
    unit = {"units": units.pop()} if len(units) == 1 else {} if units else {"units": "1"}
    main = column(group, name, [q.value for q in quantities], dims, long_name=long_name, **unit)
    beside = [f"{name}_low", f"{name}_high", f"{name}_se"]
    column(
        group,
        beside[0],
        [q.low for q in quantities],
        dims,
        long_name=f"{long_name}: lower end of 95 %",
        **unit,
    )
    column(
        group,
        beside[1],
        [q.high for q in quantities],
        dims,
        long_name=f"{long_name}: upper end of 95 %",
        **unit,
    )
    column(
        group,
        beside[2],
        [q.error for q in quantities],
        dims,
        long_name=f"{long_name}: standard error",
        **unit,
    )
    parts = part_names(quantities)
    for part, variable in zip(parts, part_variables(name, parts), strict=True):
        label = f"{long_name}: standard error, part {part}"
        column(group, variable, [q.parts.get(part) for q in quantities], dims, long_name=label, part=part, **unit)
        beside.append(variable)
    if not unit:
        put_text(
            group,
            f"{name}_unit",
            spread([q.unit for q in quantities], dims),
            dims,
            long_name=f"unit of {name}",
        )
        beside.append(f"{name}_unit")
    if with_text or any(q.reason for q in quantities):
        label = f"why {name} is missing or only a bound; empty otherwise"
        put_text(group, f"{name}_reason", spread([q.reason for q in quantities], dims), dims, long_name=label)
        beside.append(f"{name}_reason")
    attrs(main, ancillary_variables=" ".join(beside))


def part_variables(name: str, parts: Sequence[str]) -> tuple[str, ...]:
    """NAME_se_PART, with what is no letter, digit or underscore replaced."""
    return free_names([f"{name}_se_" + re.sub(r"\W", "_", part, flags=re.ASCII) for part in parts], ())


def spread(values: list[str], dims: Sequence[str]) -> str | list[str]:
    """The list itself, or its only entry where there is no axis."""
    return values if dims else values[0]


def column(
    group: h5py.Group, name: str, values: Sequence[float | None], dims: Sequence[str], **attributes: Any
) -> h5py.Dataset:
    numbers = np.array([np.nan if v is None else v for v in values], dtype=np.float64)
    return put(group, name, numbers if dims else numbers[0], dims, **attributes)


def read_quantities(group: h5py.Group, name: str) -> list[Quantity]:
    """The column that `put_quantities` wrote; a single quantity comes as a list of one."""
    value, low, high = (floats(group, name + suffix) for suffix in ("", "_low", "_high"))
    beside = str(group[name].attrs["ancillary_variables"]).split(" ")
    parts = part_columns(group, beside)
    n = len(value)
    units = texts(group, f"{name}_unit") if f"{name}_unit" in beside else [str(group[name].attrs["units"])] * n
    reasons = texts(group, f"{name}_reason") if f"{name}_reason" in beside else [""] * n
    return [
        Quantity(
            value=optional(value[i]),
            low=optional(low[i]),
            high=optional(high[i]),
            parts={part: float(error[i]) for part, error in parts.items() if not np.isnan(error[i])},
            unit=units[i],
            reason=reasons[i],
        )
        for i in range(n)
    ]


def part_columns(group: h5py.Group, beside: Sequence[str]) -> dict[str, Floats]:
    """Standard errors by part of the error budget, from the variables listed beside a number."""
    return {str(group[v].attrs["part"]): floats(group, v) for v in beside if "part" in group[v].attrs}


def floats(group: h5py.Group, name: str) -> Floats:
    return np.atleast_1d(np.asarray(group[name][()], dtype=np.float64))


def texts(group: h5py.Group, name: str) -> list[str]:
    """Entries of a text variable."""
    return [str(line) for line in np.atleast_1d(group[name].asstr()[()])]


def optional(value: float) -> float | None:
    return None if np.isnan(value) else float(value)
