"""Cases made in Python: the same shapes as in a file, and a text that gives the same case back."""

from __future__ import annotations

import copy
import dataclasses
import datetime
import hashlib
import inspect
import math
import pickle
import tomllib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from perdure._case import Case, load_case
from perdure._case.writing import write_tables
from perdure._records import CaseRecord
from perdure.errors import CaseError

FLOW: dict[str, Any] = {
    "kind": "flow",
    "state": ["x", "y"],
    "parameters": {"sigma": 10.0, "rho": {"value": 28, "unit": "1/s", "doc": "heating"}},
    "equations": {"x": "sigma*(y - x)", "y": "rho*x - y"},
}
TABLES: dict[str, Any] = {
    "system": {**FLOW, "units": {"x": "m"}, "time_unit": "s"},
    "events": {
        "storm": {"when": "x > 40", "until": "x < 35"},
        "coût élevé": {"ball": {"centre": (1, 2), "radius": np.float64(0.5), "scale": np.array([1.0, 2.0])}},
        "box": {"box": {"x": [-math.inf, 3], "y": (0, 1)}},
    },
    # The plain one stands between tables: the order must be kept.
    "observables": {"a": {"expression": "x**2", "unit": "m2"}, "b": "y", "c": {"expression": "x*y"}},
    "cells": {"lower": [-1, -2], "upper": {"x": 1, "y": 2}, "counts": np.array([4, 5]), "periodic": ["x"]},
    "bursts": {"duration": 0.5, "per_cell": np.int64(16), "reseed": False},
    "output": {"matrix": False, "intervals": 10},
    "crosscheck": {"starts": 8},
    "study": {"design": "sobol", "rho": {"low": 24.0, "high": 30.0, "since": datetime.date(2020, 1, 2)}},
    "title": 'ρ "quoted" \\ \t and\x7f so on'.replace("\t", "").replace("\x7f", ""),
    "seed": 2**100,
    "accuracy": 0.01,
    "caution": "two\nlines\tand a tab",
}


def fields(case: CaseRecord) -> dict[str, Any]:
    """Everything but where the case came from."""
    kept = {field.name: getattr(case, field.name) for field in dataclasses.fields(CaseRecord)}
    del kept["text"], kept["source_name"]
    return kept


def reload(case: Case, folder: Path) -> Case:
    path = folder / "again.toml"
    path.write_text(case.text, encoding="utf-8", newline="")
    return load_case(path)


def test_text_of_a_python_case_gives_the_same_case(tmp_path: Path) -> None:
    case = Case(**TABLES)
    again = reload(case, tmp_path)
    assert fields(again) == fields(case)
    assert (case.source_name, again.source_name) == ("<python>", "again.toml")
    assert list(again.system.parameters) == ["sigma", "rho"]
    assert [o.name for o in again.observables] == ["a", "b", "c"]
    assert [e.name for e in again.events] == ["storm", "coût élevé", "box"]


@pytest.mark.parametrize(
    "system",
    [
        {"kind": "map", "state": ("x",), "equations": {"x": 0.5}},
        {
            "kind": "noisy-map", "state": ["x"], "equations": {"x": "0.5*x + e"}, "draws": {"e": "normal"},
        },
        {
            "kind": "noisy-flow", "state": ["x", "y"], "equations": {"x": "y", "y": "-x - y"},
            "noise": {"matrix": [["0.1", 0], [0.25, "x"]]},
        },
        {
            "kind": "noisy-flow", "state": ["x", "y"], "units": ["m", "m/s"],
            "equations": {"y": "-x - y", "x": "y"}, "noise": {"y": 1e-300},
        },
    ],
)  # fmt: skip
def test_every_kind_gives_the_same_case_back(tmp_path: Path, system: dict[str, Any]) -> None:
    case = Case(system=system)
    assert fields(reload(case, tmp_path)) == fields(case)


def test_defaults_are_those_of_a_file(tmp_path: Path) -> None:
    path = tmp_path / "untitled.toml"
    path.write_text(
        '[system]\nkind = "map"\nstate = ["x"]\n[system.equations]\nx = "0.5*x"\n',
    )
    case = Case(system={"kind": "map", "state": ["x"], "equations": {"x": "0.5*x"}})
    assert fields(case) == fields(load_case(path))


def test_no_accuracy_is_written_where_none_is_asked_for() -> None:
    assert "accuracy" not in Case(system=FLOW).text
    assert Case(system=FLOW, accuracy=0.5).text.count("accuracy = 0.5") == 1
    assert Case(system=FLOW, accuracy=None).accuracy is None


def test_a_case_is_a_frozen_record_that_can_be_copied_and_sent() -> None:
    case = Case(**TABLES)
    assert isinstance(case, CaseRecord)
    with pytest.raises(dataclasses.FrozenInstanceError):
        case.title = "other"  # type: ignore[misc]
    assert pickle.loads(pickle.dumps(case)) == case
    assert copy.deepcopy(case) == case
    assert repr(Case(system=FLOW)) == "Case('untitled', flow of x, y, from <python>)"


def test_arguments_are_keywords_only() -> None:
    with pytest.raises(TypeError, match="positional"):
        Case(FLOW)  # type: ignore[call-arg]


# -------------------------------------------------------------------------------------- parameters


def test_with_parameters_changes_these_and_nothing_else(tmp_path: Path) -> None:
    case = Case(**TABLES)
    other = case.with_parameters(sigma=11, rho=np.float64(27.5))
    assert {name: p.value for name, p in other.system.parameters.items()} == {"sigma": 11.0, "rho": 27.5}
    assert other.system.parameters["rho"].unit == "1/s"
    assert case.system.parameters["sigma"].value == 10.0
    back = other.with_parameters(sigma=10.0, rho=28)
    assert fields(back) == fields(case)
    assert fields(reload(other, tmp_path)) == fields(other)


def test_with_parameters_keeps_file_name_title_and_seed_of_a_file_case(tmp_path: Path) -> None:
    path = tmp_path / "loop.toml"
    path.write_text("\ufeff# note\n" + Case(system=FLOW).text.replace('title = "untitled"\n', ""), encoding="utf-8")
    other = load_case(path, seed=9).with_parameters(rho=20)
    assert (other.title, other.seed, other.source_name) == ("loop", 9, "loop.toml")
    assert tomllib.loads(other.text)["system"]["parameters"]["rho"]["value"] == 20


def test_with_parameters_names_the_nearest() -> None:
    with pytest.raises(CaseError) as caught:
        Case(system=FLOW).with_parameters(sgma=11.0, qq=3)
    assert caught.value.problems == (
        "<python>, with_parameters: found the unknown parameter 'sgma'; allowed: sigma, rho; did you mean 'sigma'?",
        "<python>, with_parameters: found the unknown parameter 'qq'; allowed: sigma, rho; correct the name",
    )


@pytest.mark.parametrize("value", [True, "11", math.nan, math.inf, None, [1.0]])
def test_with_parameters_checks_the_value(value: Any) -> None:
    with pytest.raises(CaseError, match=r"\[system.parameters\] (sigma|rho)"):
        Case(system=FLOW).with_parameters(sigma=value, rho=value)


def test_a_parameter_that_makes_everything_infinite_is_refused_also_later() -> None:
    case = Case(system={**FLOW, "equations": {"x": "y/sigma", "y": "-x"}})
    with pytest.raises(CaseError, match="division by zero: parameter sigma is 0"):
        case.with_parameters(sigma=0)


# ---------------------------------------------------------------------------------------- functions


def pendulum(x: float, y: float, k: float) -> tuple[float, float]:
    return y, -k * math.sin(x)


def pendulum_noise(x: float, y: float, k: float) -> tuple[float, float]:
    return 0.0, 0.1 * k


FUNCTION = {"kind": "flow", "state": ["x", "y"], "parameters": {"k": 2.0}, "function": pendulum}


def test_a_function_stands_for_the_equations() -> None:
    case = Case(system=FUNCTION, events={"up": {"when": "x > k"}})
    assert (case.system.function, case.system.equations) == (pendulum, ())
    digest = hashlib.sha256(inspect.getsource(pendulum).encode()).hexdigest()
    first = case.text.splitlines()[0]
    assert first == f"# equations: Python function {__name__}.pendulum (SHA-256 of its source: {digest})"
    assert "equations" not in tomllib.loads(case.text)["system"]


def test_with_parameters_keeps_the_functions() -> None:
    system = {**FUNCTION, "kind": "noisy-flow", "noise_function": pendulum_noise}
    other = Case(system=system).with_parameters(k=3)
    assert (other.system.function, other.system.noise_function) == (pendulum, pendulum_noise)
    assert other.system.parameters["k"].value == 3.0
    assert other.text.splitlines()[1].startswith(f"# noise: Python function {__name__}.pendulum_noise (SHA-256")


def test_a_function_without_source_is_named() -> None:
    offered: dict[str, Any] = {}
    exec("def made(x, y, k): return y, -x", offered)
    text = Case(system={**FUNCTION, "function": offered["made"]}).text
    assert text.splitlines()[0].endswith(".made (its source is not available)")


def test_no_case_file_can_name_a_function(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    for key in ("function", "noise_function"):
        path.write_text(f'[system]\nkind = "map"\nstate = ["x"]\n{key} = "os.getpid"\n[system.equations]\nx = "x"\n')
        with pytest.raises(CaseError, match=f"line 4, \\[system\\] {key}: found the unknown key"):
            load_case(path)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"function": 3}, "[system] function: found 3; allowed: a Python function"),
        ({"function": lambda x: x}, "cannot be called with 3 arguments; allowed: state, parameters and "
         "draws in order (x, y, k)"),
        ({"equations": {"x": "y", "y": "-x"}}, "[system] equations: found equations beside a function"),
        ({"noise_function": pendulum_noise}, "found a noise function; allowed: only in a noisy-flow"),
        ({"kind": "noisy-flow"}, "[system] noise_function: found none"),
        ({"kind": "noisy-flow", "noise_function": pendulum_noise, "noise": {"x": 1}},
         "coefficients beside a function"),
        ({"function": None, "equations": {"x": "y", "y": "-x"}, "kind": "noisy-flow", "noise": {"x": 1},
          "noise_function": pendulum_noise}, "found a noise function"),
    ],
)  # fmt: skip
def test_functions_are_checked(change: dict[str, Any], message: str) -> None:
    with pytest.raises(CaseError) as caught:
        Case(system={**FUNCTION, **change})
    assert message in str(caught.value)


# ----------------------------------------------------------------------------------- wrong arguments


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"system": "flow"}, '[system]: found "flow"; allowed: a dict'),
        ({"system": None}, "found no table [system]"),
        ({"events": [1]}, "[events]: found [1]; allowed: a dict"),
        ({"events": {3: {"when": "x > 1"}}}, "[events]: found a key of type int"),
        ({"study": {"a": object()}}, "[study]: found a value of type object"),
        ({"study": {"a": b"x"}}, "[study]: found a value of type bytes"),
        ({"title": "\ud800"}, "[case]: found a text with half a surrogate pair"),
        ({"title": 3}, "[case] title: found 3"),
        ({"seed": 10**5000}, "[case]: found a whole number of 16610 bits"),
        ({"seed": -1}, "[case] seed: found -1"),
        ({"accuracy": 2}, "[case] accuracy: found 2"),
        ({"events": {"e": {"when": "q > 1"}}}, "[events.e] when: found the unknown name 'q'"),
        ({"cells": {"lower": np.zeros(3)}}, "[cells] lower: found 3 entries"),
        ({"output": {"matrix": np.True_}}, ""),
    ],
)
def test_arguments_are_checked(change: dict[str, Any], message: str) -> None:
    arguments: dict[str, Any] = {"system": FLOW, **change}
    if not message:
        assert Case(**arguments).output.matrix is True
        return
    with pytest.raises(CaseError) as caught:
        Case(**arguments)
    assert str(caught.value).startswith("case made in Python")
    assert message in str(caught.value)


# --------------------------------------------------------------------------------------- TOML writer

keys = st.text(st.characters(exclude_categories=["Cs"]), max_size=8)
scalars = (
    st.booleans()
    | st.integers(-(2**200), 2**200)
    | st.floats(allow_nan=False)
    | st.text(st.characters(exclude_categories=["Cs"]), max_size=20)
    | st.dates()
    | st.datetimes(timezones=st.just(datetime.UTC) | st.none())
)
values = st.recursive(
    scalars,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(keys, inner, max_size=4),
    max_leaves=8,
)


def same(a: Any, b: Any) -> bool:
    """Equal in value, type and order of keys."""
    if isinstance(a, dict) and isinstance(b, dict):
        return sorted(a) == sorted(b) and all(same(a[key], b[key]) for key in a)
    if isinstance(a, list) and isinstance(b, list):
        return len(a) == len(b) and all(same(x, y) for x, y in zip(a, b, strict=True))
    return type(a) is type(b) and a == b


@given(st.dictionaries(keys, st.dictionaries(keys, values, max_size=4), max_size=4))
def test_written_tables_read_back_the_same(tables: dict[str, dict[str, Any]]) -> None:
    again = tomllib.loads(write_tables(tables))
    assert same(again, tables)
    for name, table in tables.items():
        if name != "system":
            assert list(again[name]) == list(table)


def test_difference_is_noticed() -> None:
    """Negative control."""
    assert not same({"a": 1}, {"a": 1.0})
    assert not same({"a": [1]}, {"a": [1, 2]})
