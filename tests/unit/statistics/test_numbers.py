"""Named numbers of a regime, from sums made by hand."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from perdure import Case
from perdure._records import EventResult, ObservableResult
from perdure._spectrum import ClassSolver
from perdure._statistics import regime_numbers
from perdure._transitions import TransitionMatrix
from unit.transitions.support import tally_of

N_STEP, TAU = 10, 2.5

# Masses with coarser cells are not known here.
NO_LADDER = np.zeros((0, 2))


def case_of(kind: str = "flow", **more: Any) -> Case:
    system: dict[str, Any] = {
        "kind": kind,
        "state": ["x", "v"],
        "units": {"x": "m", "v": "m/s"},
        "time_unit": "s",
        "equations": {"x": "v", "v": "-x"},
    }
    if kind == "noisy-flow":
        system["noise"] = {"v": "0.3"}
    events = more.pop("events", {"often": {"when": "x > 1"}, "never": {"when": "x > 9"}})
    return Case(title="invented", system=system, events=events, observables={"x": "x"})


def numbers(case: Case, sums: np.ndarray) -> tuple[dict[str, EventResult], dict[str, ObservableResult]]:
    """Numbers of a chain of two cells with mass 1/3 and 2/3; sums (2, 2, n_sum) over 4 bursts a replicate."""
    counts = np.zeros((2, 4, 2), dtype=int)
    counts[0, 1], counts[1, 0], counts[1, 1] = 4, 2, 2
    transition = TransitionMatrix(tally_of(counts))
    solver = ClassSolver(transition, np.arange(2))
    np.testing.assert_allclose(solver.mass, [1 / 3, 2 / 3])
    plan = SimpleNamespace(n_step=N_STEP, duration=TAU)
    events, observables = regime_numbers(case, plan, transition, solver.mass, sums, solver.adjoint, NO_LADDER, np.zeros(9))  # type: ignore[arg-type]
    return dict(events), dict(observables)


def sums_of(*rows: list[list[float]]) -> np.ndarray:
    return np.array(rows, dtype=float).transpose(1, 2, 0)


# time inside, entries, then the event never seen, then sum and sum of squares of x; [cell][replicate]
SUMS = sums_of(
    [[12, 8], [2, 2]],
    [[4, 4], [1, 3]],
    [[0, 0], [0, 0]],
    [[0, 0], [0, 0]],
    [[40, 80], [20, 20]],
    [[100, 140], [60, 60]],
)


def test_values() -> None:
    """Share 1/3 * 20/80 + 2/3 * 4/80 = 7/60; entries 1/3 * 8/8 + 2/3 * 4/8 = 2/3 a burst of 2.5 s."""
    events, observables = numbers(case_of(), SUMS)
    often = events["often"]
    assert often.share.value == pytest.approx(7 / 60)
    assert often.entry_rate.value == pytest.approx(2 / 3 / TAU)
    assert often.return_period.value == pytest.approx(TAU * 1.5)
    assert often.mean_spell.value == pytest.approx(7 / 60 * TAU * 1.5)
    assert (often.entry_rate.unit, often.return_period.unit, often.mean_spell.unit) == ("1/s", "s", "s")
    mean, square = (120 / 80 + 2 * 40 / 80) / 3, (240 / 80 + 2 * 120 / 80) / 3
    assert observables["x"].mean.value == pytest.approx(mean)
    assert observables["x"].variance.value == pytest.approx(square - mean**2)
    for quantity in (often.share, often.entry_rate, often.return_period, often.mean_spell, observables["x"].mean):
        assert quantity.error is not None
        assert quantity.error > 0.0
        assert quantity.low is not None
        assert quantity.value is not None
        assert quantity.low < quantity.value


def test_errors_of_derived_numbers() -> None:
    """Return period and rate have one relative error; shares and entries that scatter together cancel in the spell."""
    events, _ = numbers(case_of(), SUMS)
    often = events["often"]
    relative = [q.error / q.value for q in (often.entry_rate, often.return_period)]  # type: ignore[operator]
    assert relative[0] == pytest.approx(relative[1])
    together = SUMS.copy()
    together[:, :, 0] = 3.0 * together[:, :, 1]
    spell = numbers(case_of(), together)[0]["often"].mean_spell
    assert spell.value == pytest.approx(3.0 * TAU / N_STEP)
    assert spell.error == pytest.approx(0.0, abs=1e-12)


def test_event_never_seen() -> None:
    """An upper bound from the bursts that count, 1 / (1/9 / 8 + 4/9 / 8) = 14.4."""
    never = numbers(case_of(), SUMS)[0]["never"]
    bound = 1.0 - 0.05 ** (1.0 / 14.4)
    assert (never.share.value, never.share.low) == (None, 0.0)
    assert never.share.high == pytest.approx(bound)
    assert "never seen in 14.4 effective bursts" in never.share.reason
    assert never.entry_rate.high == pytest.approx(bound / TAU)
    assert never.return_period.low == pytest.approx(TAU / bound)
    assert (never.return_period.value, never.return_period.high, never.mean_spell.value) == (None, None, None)


def test_always_inside_without_entry() -> None:
    """A share of 1 has no entry to count."""
    sums = SUMS.copy()
    sums[:, :, 0], sums[:, :, 1] = 40.0, 0.0
    often = numbers(case_of(), sums)[0]["often"]
    assert often.share.value == pytest.approx(1.0)
    assert often.entry_rate.value is None
    assert "no entry seen" in often.mean_spell.reason


def test_noisy_components_have_no_entry_rate() -> None:
    """A plain region of a component that white noise drives; one of a smooth component has a rate."""
    events = {"smooth": {"when": "x > 1"}, "rough": {"when": "v > 1"}}
    found = numbers(case_of("noisy-flow", events=events), SUMS)[0]
    assert found["smooth"].entry_rate.value == pytest.approx(2 / 3 / TAU)
    assert found["rough"].entry_rate.value is None
    assert "infinitely often" in found["rough"].entry_rate.reason
    assert "infinitely often" in found["rough"].mean_spell.reason


def test_observable_that_is_not_finite() -> None:
    """A named reason in place of a number; other numbers stay."""
    sums = SUMS.copy()
    sums[0, 1, 4] = np.inf
    events, observables = numbers(case_of(), sums)
    assert observables["x"].mean.value is None
    assert "not finite" in observables["x"].mean.reason
    assert events["often"].share.value == pytest.approx(7 / 60)
    assert events["often"].share.error == pytest.approx(numbers(case_of(), SUMS)[0]["often"].share.error)
