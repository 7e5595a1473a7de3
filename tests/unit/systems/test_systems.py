"""Named systems: each is a case, and its facts are those of the reference table."""

from __future__ import annotations

import dataclasses
import math
import subprocess
import sys

import pytest

import perdure
from perdure import Case, systems
from reference.known import known

NAMES = ("convection", "double_well", "henon", "logistic", "ornstein_uhlenbeck", "ricker")

# System -> reference case, and event or observable -> its name there.
SAME = {
    "convection": ("P22-lorenz63", {"right": "A", "left": "B", "top": "E"}),
    "double_well": ("P18-double-well", {"right": "A", "barrier": "B"}),
    "henon": ("P13-henon", {"right": "A"}),
    "logistic": ("P01-logistic", {"low": "A", "middle": "B", "high": "C"}),
    "ornstein_uhlenbeck": ("P16-ou", {"high": "A", "middle": "B"}),
    "ricker": ("P11-noisy-ricker", {"poor": "A", "rich": "C", "stock": "x", "y": "lnx"}),
}
KINDS = ("share", "entry rate", "mean", "variance")


def test_names_are_sorted_and_complete() -> None:
    assert systems.names() == NAMES
    assert set(SAME) == set(NAMES)


@pytest.mark.parametrize("name", NAMES)
def test_each_builds_a_case(name: str) -> None:
    system = systems.get(name)
    case = Case(**system.tables)
    assert system.name == name
    assert case.title == system.tables["title"]
    assert len(case.events) >= 1


@pytest.mark.parametrize("name", NAMES)
def test_facts_have_sources_and_name_what_the_case_has(name: str) -> None:
    system = systems.get(name)
    case = Case(**system.tables)
    events = {event.name for event in case.events}
    observables = {observable.name for observable in case.observables}
    assert len({fact.name for fact in system.facts}) == len(system.facts) > 3
    for fact in system.facts:
        assert len(fact.source) > 7
        assert math.isfinite(fact.value)
        assert fact.uncertainty >= 0.0
        kind, _, target = fact.name.rpartition(" ")
        if kind in ("share", "entry rate"):
            assert target in events
        if kind in ("mean", "variance"):
            assert target in observables
    # every event has at least its share among the facts
    assert {f"share {event}" for event in events} <= {fact.name for fact in system.facts}


@pytest.mark.parametrize("name", NAMES)
def test_facts_agree_with_the_reference_table(name: str) -> None:
    reference, renamed = SAME[name]
    table = {item.number: item for item in known(reference)}
    compared = 0
    for fact in systems.get(name).facts:
        kind, _, target = fact.name.rpartition(" ")
        item = table.get(f"{kind} {renamed.get(target, target)}")
        if kind in KINDS and item is not None:
            compared += 1
            assert fact.value == pytest.approx(item.value, rel=1e-14, abs=1e-15), fact
            assert fact.uncertainty == pytest.approx(item.uncertainty, abs=2e-15)
    assert compared >= 3


def test_a_fact_is_found_by_its_name() -> None:
    system = systems.get("logistic")
    assert system.fact("mean x").value == 0.5
    with pytest.raises(KeyError, match=r"logistic has no fact 'mean z'; it has: share low, "):
        system.fact("mean z")


@pytest.mark.parametrize(
    ("wrong", "near"),
    [("logistics", "logistic"), ("Henon", "henon"), ("double well", "double_well"), ("rick", "ricker")],
)
def test_an_unknown_name_gives_the_nearest(wrong: str, near: str) -> None:
    with pytest.raises(KeyError, match=f"found '{wrong}'; allowed: convection, .*; did you mean '{near}'") as caught:
        systems.get(wrong)
    assert isinstance(caught.value, KeyError)


def test_a_name_like_none_lists_them_all() -> None:
    with pytest.raises(KeyError, match=r"allowed: convection, double_well, .*take one of these"):
        systems.get("qqq")


def test_systems_are_frozen() -> None:
    with pytest.raises(dataclasses.FrozenInstanceError):
        systems.get("henon").name = "other"  # type: ignore[misc]


def test_systems_load_no_numpy() -> None:
    code = "import perdure, sys; perdure.systems.names(); sys.exit('numpy' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_the_room_is_public() -> None:
    assert perdure.systems is systems
    assert systems.__all__ == sorted(systems.__all__)
