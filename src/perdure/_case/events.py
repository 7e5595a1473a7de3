"""Tables ``[events.NAME]`` -> `Event`: balls, boxes and conditions, all as conditions on the state."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from perdure._case.checking import check_table, sub_table
from perdure._case.expressions import CONDITION, read_expression
from perdure._case.formulas import read_condition
from perdure._case.positions import Path
from perdure._case.problems import Problems, show
from perdure._case.system import Declared
from perdure._case.tables import BallTable, EventTable
from perdure._records import CellOptions, Event, Expression


@dataclass(frozen=True)
class Space:
    """State names in order, and lower end and period of those that wrap around (units of the state)."""

    state: tuple[str, ...]
    periods: Mapping[str, tuple[float, float]]


def space_of(state: tuple[str, ...], cells: CellOptions) -> Space:
    """The space that balls and boxes are written in."""
    both = [name for name in cells.periodic if name in cells.lower and name in cells.upper]
    return Space(state, {name: (cells.lower[name], cells.upper[name] - cells.lower[name]) for name in both})


def label_finding(name: str) -> str | None:
    """What is wrong with the name of an event or observable; None if nothing is."""
    allowed = "allowed: 1 to 64 printable characters without '/', no space at either end; rename it"
    if not 1 <= len(name) <= 64:
        return f"found a name of {len(name)} characters; {allowed}"
    if not name.isprintable() or "/" in name or name != name.strip():
        return f"found the name {name!r}; {allowed}"
    return None


def read_events(
    problems: Problems, tables: Mapping[str, Any], declared: Declared, cells: CellOptions
) -> tuple[Event, ...]:
    """Every event that could be read."""
    events = []
    for name, given in (sub_table(problems, tables, "events") or {}).items():
        path: Path = ("events", name)
        finding = label_finding(name)
        if finding:
            problems.add(path, finding)
        if not isinstance(given, dict):
            problems.add(path, f"found {show(given)}; allowed: a table with ball, box or when; write [events.NAME]")
            continue
        event = _event(problems, name, check_table(problems, EventTable, given, path), given, declared, cells)
        if event is not None:
            events.append(event)
    return tuple(events)


def _event(
    problems: Problems,
    name: str,
    table: EventTable,
    given: Mapping[str, Any],
    declared: Declared,
    cells: CellOptions,
) -> Event | None:
    path: Path = ("events", name)
    shapes = [key for key in ("ball", "box", "when") if given.get(key) is not None]
    if len(shapes) != 1:
        if not shapes and not set(given) <= set(EventTable.model_fields):
            return None  # an unknown key was reported and may be what was meant
        found = " and ".join(shapes) or "no region"
        problems.add(
            path,
            f'found {found}; allowed: exactly one of ball, box and when; write for example when = "z > 40"',
        )
        return None
    if declared.state is None:
        return None
    space = space_of(declared.state, cells)
    condition: Expression | None = None
    if table.ball is not None:
        condition = _ball(problems, table.ball, space, (*path, "ball"))
    elif table.box is not None:
        condition = _box(problems, table.box, space, (*path, "box"))
    elif table.when is not None:
        condition = read_condition(problems, table.when, declared.names, (*path, "when"))
        _must_depend(problems, condition, declared.state, (*path, "when"))
    until = None
    if table.until is not None:
        until = read_condition(problems, table.until, declared.names, (*path, "until"))
        _must_depend(problems, until, declared.state, (*path, "until"))
    return None if condition is None else Event(name, condition, until)


def _must_depend(problems: Problems, condition: Expression | None, state: tuple[str, ...], path: Path) -> None:
    if condition is not None and condition.names.isdisjoint(state):
        problems.add(
            path,
            f"found {show(condition.text)}, which is the same everywhere; allowed: a condition on "
            f"{', '.join(state)}; use a state component in it",
        )


def _ball(problems: Problems, given: Mapping[str, Any], space: Space, path: Path) -> Expression | None:
    found_before = len(problems)
    table = check_table(problems, BallTable, given, path)
    n_dim = len(space.state)
    for key in ("centre", "scale"):
        value = getattr(table, key)
        if value is not None and len(value) != n_dim:
            problems.add(
                (*path, key),
                f"found {len(value)} numbers, the wrong dimension; allowed: {n_dim}, one per state component "
                f"({', '.join(space.state)}); correct the list",
            )
    if len(problems) > found_before:
        return None
    terms = []
    for k, (name, centre) in enumerate(zip(space.state, table.centre, strict=True)):
        distance = f"({name} - ({float(centre)!r}))"
        if name in space.periods:
            period = float(space.periods[name][1])
            distance = f"({distance} - {period!r}*floor({distance}/{period!r} + 0.5))"
        if table.scale is not None:
            distance = f"({distance}/{float(table.scale[k])!r})"
        terms.append(f"{distance}**2")
    text = f"ball of radius {_short(table.radius)} around {_short_list(table.centre)}"
    if table.scale is not None:
        text += f" with scale {_short_list(table.scale)}"
    return _own(f"{' + '.join(terms)} <= {float(table.radius)!r}**2", space, text)


def _box(problems: Problems, given: Mapping[str, list[float]], space: Space, path: Path) -> Expression | None:
    found_before = len(problems)
    parts, texts = [], []
    for name, (low, high) in given.items():
        if name not in space.state:
            problems.add_unknown((*path, name), space.state, "state name")
        else:
            problems.add_all((*path, name), _interval_findings(name, low, high, space))
    for name in space.state:
        if name in given and not all(math.isinf(end) for end in given[name]):
            low, high = (float(end) for end in given[name])
            parts.append(_interval(name, low, high, space))
            texts.append(_interval_text(name, low, high))
    if len(problems) > found_before:
        return None
    if not parts:
        problems.add(
            path,
            "found a box without a finite end, which is the whole space; allowed: at least one component "
            f"with a finite end; write for example {{{space.state[0]} = [0.0, 1.0]}}",
        )
        return None
    return _own(" and ".join(parts), space, " and ".join(texts))


def _interval_findings(name: str, low: float, high: float, space: Space) -> list[str]:
    if low > high or low == math.inf or high == -math.inf:
        return [
            f"found lower {low!r} above upper {high!r}; allowed: lower at most upper, inf only as an open "
            "end; swap them"
        ]
    period = space.periods[name][1] if name in space.periods else math.inf
    if math.isfinite(high - low) and high - low >= period:
        return [f"found {low!r} to {high!r}, a whole period; allowed: less than {period!r}; leave {name!r} out"]
    return []


def _interval(name: str, low: float, high: float, space: Space) -> str:
    if math.isinf(low):
        return f"{name} <= {high!r}"
    if math.isinf(high):
        return f"{name} >= {low!r}"
    if name in space.periods:
        start, period = space.periods[name]
        if low < start or high > start + period:
            # The interval crosses the seam, where the coordinate jumps by a period.
            return f"({name} - ({low!r})) % {period!r} <= {high - low!r}"
    return f"{low!r} <= {name} <= {high!r}"


def _interval_text(name: str, low: float, high: float) -> str:
    if math.isinf(low):
        return f"{name} <= {_short(high)}"
    if math.isinf(high):
        return f"{name} >= {_short(low)}"
    return f"{_short(low)} <= {name} <= {_short(high)}"


def _own(source_text: str, space: Space, text: str) -> Expression:
    reading = read_expression(source_text, space.state, CONDITION, limited=False)
    if reading.expression is None:
        raise AssertionError(f"perdure wrote a condition it cannot read: {source_text[:200]}")
    return replace(reading.expression, text=text)


def _short(value: float) -> str:
    return repr(float(value)).removesuffix(".0")


def _short_list(values: list[float]) -> str:
    return f"({', '.join(_short(value) for value in values)})"
