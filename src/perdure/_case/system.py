"""Table ``[system]`` and the tables in it -> `System`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from perdure._case import grammar
from perdure._case.checking import by_component, check_table, sub_table
from perdure._case.formulas import read_value
from perdure._case.functions import Functions, check_functions
from perdure._case.noise import read_noise
from perdure._case.positions import Path
from perdure._case.problems import Problems, listed, show
from perdure._case.tables import ParameterTable, SystemTable
from perdure._records import KINDS, Expression, Parameter, System

LAWS = ("normal", "uniform")
PATH: Path = ("system",)
MOST_COMPONENTS = 1000


@dataclass(frozen=True)
class Declared:
    """What later tables may refer to, as far as it could be read.

    Attributes
    ----------
    kind : str or None
        None if it was missing or wrong; so for `state`.
    state : tuple of str or None
    parameters : dict of str to Parameter
    draws : dict of str to str
        Name and law.
    """

    kind: str | None
    state: tuple[str, ...] | None
    parameters: Mapping[str, Parameter]
    draws: Mapping[str, str]

    @property
    def names(self) -> tuple[str, ...]:
        """Names that conditions and observables may use."""
        return (*(self.state or ()), *self.parameters)


def read_system(problems: Problems, tables: Mapping[str, Any], functions: Functions) -> tuple[Declared, System | None]:
    """The declared names, and the system if nothing in its table was wrong."""
    found_before = len(problems)
    raw = sub_table(problems, tables, "system")
    if raw is None:
        if tables.get("system") is None:
            problems.add(
                (),
                "found no table [system]; allowed: exactly one; write [system] with kind, state and equations",
            )
        return Declared(None, None, {}, {}), None
    raw = dict(raw)
    if raw.pop("forcing", None) is not None:
        problems.add(
            (*PATH, "forcing"),
            "found the table [system.forcing]; periodic forcing is not computed by this version; allowed: "
            "equations without time; remove it, or make the phase a state component",
        )
    state = _state(problems, raw.get("state"))
    raw["units"] = by_component(problems, raw.get("units"), state, (*PATH, "units")) or {}
    table = check_table(problems, SystemTable, raw, PATH)
    parameters = _parameters(problems, table.parameters or {})
    kind = _kind(problems, table.kind)
    draws = _draws(problems, table.draws, kind)
    declared = Declared(kind, state, parameters, draws)
    _no_clash(problems, declared)
    equations = _equations(problems, table.equations, functions, declared) if state else ()
    if kind is None or state is None:
        return declared, None
    names = (*declared.names, *draws)
    given_by_function = None if functions.function is None else functions.noise_function is not None
    noise = read_noise(problems, table.noise, kind, state, names, given_by_function)
    if len(problems) > found_before:
        return declared, None
    units = tuple(table.units.get(name, "1") for name in state)
    time_unit = table.time_unit or ("1" if kind.endswith("flow") else "step")
    return declared, System(
        kind=kind,
        state=state,
        units=units,
        time_unit=time_unit,
        parameters=parameters,
        equations=equations,
        noise=noise,
        draws=tuple(draws.items()),
        function=functions.function,
        noise_function=functions.noise_function,
    )


def _kind(problems: Problems, kind: str | None) -> str | None:
    if kind is None or kind in KINDS:
        return kind
    if kind == "record":
        problems.add(
            (*PATH, "kind"),
            f'found "record"; recorded data are not supported by this version yet; allowed: {listed(KINDS)}; '
            "give the system as equations",
        )
        return None
    close = grammar.nearest(kind, KINDS)
    remedy = f"did you mean {close!r}?" if close else "choose one of these"
    problems.add((*PATH, "kind"), f"found {show(kind)}; allowed: {listed(KINDS)}; {remedy}")
    return None


def _state(problems: Problems, given: Any) -> tuple[str, ...] | None:
    # Anything but a list of texts is reported by the strict model.
    if not isinstance(given, list) or not given or not all(isinstance(name, str) for name in given):
        return None
    if len(given) > MOST_COMPONENTS:
        problems.add(
            (*PATH, "state"),
            f"found {len(given)} components; allowed: at most {MOST_COMPONENTS}; reduce the system",
        )
        return None
    for index, name in enumerate(given):
        finding = grammar.name_finding(name)
        if finding:
            problems.add((*PATH, "state", index), finding)
        elif name in given[:index]:
            problems.add(
                (*PATH, "state", index),
                f"found the name {name!r} a second time; allowed: each name once; rename one of them",
            )
    return tuple(given)


def _parameters(problems: Problems, given: Mapping[str, Any]) -> dict[str, Parameter]:
    parameters = {}
    for name, entry in given.items():
        path = (*PATH, "parameters", name)
        finding = grammar.name_finding(name)
        if finding:
            problems.add(path, finding)
        if not isinstance(entry, dict):
            found_before = len(problems)
            table = check_table(_Shortened(problems, path), ParameterTable, {"value": entry}, path)
            if len(problems) > found_before:
                table = ParameterTable(value=0.0)
        else:
            table = check_table(problems, ParameterTable, entry, path)
        parameters[name] = Parameter(float(table.value or 0.0), table.unit or "1", table.doc or "")
    return parameters


class _Shortened(Problems):
    """Adds to other problems without the last key: ``rho = "28"`` has no key `value` to point at."""

    def __init__(self, problems: Problems, path: Path) -> None:
        super().__init__(problems.source_name)
        self._target, self._path = problems, path

    def add(self, path: Path, finding: str) -> None:
        self._target.add(self._path, finding.replace("value = ", f"{self._path[-1]} = "))


def _draws(problems: Problems, given: Mapping[str, Any] | None, kind: str | None) -> dict[str, str]:
    path = (*PATH, "draws")
    if given is None:
        if kind == "noisy-map":
            problems.add(
                path,
                "found no draws; a noisy map without draws is a map; allowed: at least one; write for "
                "example "
                '[system.draws] with e = "normal", or kind = "map"',
            )
        return {}
    if kind is not None and kind != "noisy-map":
        remedy = "use [system.noise]" if kind == "noisy-flow" else 'remove the table or write kind = "noisy-map"'
        problems.add(path, f"found draws in a {kind}; allowed: only in a noisy-map; {remedy}")
    elif not given:
        problems.add(
            path,
            "found an empty table; a noisy map without draws is a map; allowed: at least one draw; write for "
            'example e = "normal"',
        )
    for name, law in given.items():
        finding = grammar.name_finding(name)
        if finding:
            problems.add((*path, name), finding)
        if law not in LAWS:
            problems.add(
                (*path, name),
                f'found {show(law)}; allowed: {listed(LAWS)}; write for example {name} = "normal"',
            )
    return {name: law if law in LAWS else LAWS[0] for name, law in given.items()}


def _no_clash(problems: Problems, declared: Declared) -> None:
    roles: dict[str, str] = dict.fromkeys(declared.state or (), "state component")
    for role, names in (("parameter", declared.parameters), ("draw", declared.draws)):
        for name in names:
            if name in roles:
                problems.add(
                    (*PATH, f"{role}s", name),
                    f"found the {role} {name!r}, also the name of a {roles[name]}; allowed: each name once; "
                    "rename one of them",
                )
            roles.setdefault(name, role)


def _equations(
    problems: Problems, given: Mapping[str, Any] | None, functions: Functions, declared: Declared
) -> tuple[Expression, ...]:
    path, state = (*PATH, "equations"), declared.state or ()
    names = (*declared.names, *declared.draws)
    order = (*state, *declared.parameters, *declared.draws)
    check_functions(problems, functions, order, declared.kind, given is not None)
    if functions.function is not None:
        return ()
    if given is None:
        problems.add(
            path,
            f"found no equations; allowed: exactly one per state component ({', '.join(state)}); write them",
        )
        return ()
    found: list[Expression] = []
    for name, text in given.items():
        if name not in state:
            problems.add_unknown((*path, name), state, "state name")
        else:
            equation = read_value(problems, text, names, (*path, name))
            if equation is not None:
                found.append(equation)
    missing = [name for name in state if name not in given]
    if missing:
        problems.add(
            path,
            f"found no equation for {listed(missing)}; allowed: exactly one per state component; "
            f'write for example {missing[0]} = "..."',
        )
    _all_drawn(problems, declared, found)
    rank = {name: k for k, name in enumerate(state)}
    kept = [name for name in given if name in rank]
    if len(found) < len(kept):
        return ()
    return tuple(equation for _, equation in sorted(zip(kept, found, strict=True), key=lambda e: rank[e[0]]))


def _all_drawn(problems: Problems, declared: Declared, equations: list[Expression]) -> None:
    used = frozenset[str]().union(*(equation.names for equation in equations))
    if len(equations) < len(declared.state or ()) or declared.kind not in (None, "noisy-map"):
        return
    for name in declared.draws:
        if name not in used:
            problems.add(
                (*PATH, "draws", name),
                f"found the draw {name!r}, which no equation uses; allowed: draws that are used; use or remove it",
            )
