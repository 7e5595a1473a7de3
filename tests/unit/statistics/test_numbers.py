"""Named numbers of a regime, from sums made by hand."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure import Case
from perdure._records import EventResult, ObservableResult
from perdure._spectrum import ClassSolver
from perdure._statistics import Shift, allocation, evenness, regime_numbers, scaled
from perdure._statistics.numbers import counted
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


def numbers(
    case: Case,
    sums: np.ndarray,
    *,
    times: int = 1,
    n_step: int = N_STEP,
    centre: float = 0.0,
    alone: bool = False,
    ladder: np.ndarray = NO_LADDER,
    shifts: dict[str, Shift] | None = None,
) -> tuple[dict[str, EventResult], dict[str, ObservableResult]]:
    """Numbers of a chain of two cells with mass 1/3 and 2/3; sums (2, 2, n_sum) over 4 bursts a replicate.

    `times` repeats every burst; `n_step` and `centre` are those of the plan and of the observable. With `alone` the
    regime is the first cell only: all bursts end there. `ladder` are masses with coarser cells (2, 2), `shifts` changes
    of the averages by part of the budget.
    """
    counts = np.zeros((2, 4, 2), dtype=int)
    if alone:
        counts[:, 0] = 4
    else:
        counts[0, 1], counts[1, 0], counts[1, 1] = 4, 2, 2
    transition = TransitionMatrix(tally_of(times * counts))
    solver = ClassSolver(transition, np.arange(1 if alone else 2))
    np.testing.assert_allclose(solver.mass, [1, 0] if alone else [1 / 3, 2 / 3])
    plan: Any = SimpleNamespace(n_step=n_step, duration=TAU)
    found: Any = SimpleNamespace(sums=times * sums, sent=transition.tally.bursts.sum(axis=1))
    events, observables = regime_numbers(
        case, plan, transition, solver.mass, found, solver.adjoint, ladder, np.array([centre]), shifts or {}
    )
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
    """Of 8 bursts a cell nine steps each are summed, and the ways between ten are a burst of 2.5 s.

    Share 1/3 * 20/72 + 2/3 * 4/72 = 7/54; entries 10/9 * (1/3 * 8/8 + 2/3 * 4/8) = 20/27 a burst.
    """
    events, observables = numbers(case_of(), SUMS)
    often = events["often"]
    assert often.share.value == pytest.approx(7 / 54)
    assert often.entry_rate.value == pytest.approx(20 / 27 / TAU)
    assert often.return_period.value == pytest.approx(TAU * 27 / 20)
    assert often.mean_spell.value == pytest.approx(7 / 54 * TAU * 27 / 20)
    assert (often.entry_rate.unit, often.return_period.unit, often.mean_spell.unit) == ("1/s", "s", "s")
    mean, square = (120 / 72 + 2 * 40 / 72) / 3, (240 / 72 + 2 * 120 / 72) / 3
    assert observables["x"].mean.value == pytest.approx(mean)
    assert observables["x"].variance.value == pytest.approx(square - mean**2)
    for quantity in (often.share, often.entry_rate, often.return_period, often.mean_spell, observables["x"].mean):
        assert quantity.error is not None
        assert quantity.error > 0.0
        assert quantity.low is not None
        assert quantity.value is not None
        assert quantity.low < quantity.value


def test_bursts_of_one_step_are_summed_whole() -> None:
    """Share 7/6 of the sums above would be no share, so they are a tenth: 1/3 * 2/8 + 2/3 * 0.4/8 = 7/60."""
    events, _ = numbers(case_of(), 0.1 * SUMS, n_step=1)
    assert events["often"].share.value == pytest.approx(7 / 60)
    assert events["often"].entry_rate.value == pytest.approx(2 / 30 / TAU)


def test_centres_move_the_mean_alone() -> None:
    """What was taken off an observable is added to its mean; variance and errors are those about the centre."""
    plain, moved = (numbers(case_of(), SUMS, centre=c)[1]["x"] for c in (0.0, 1e3))
    assert moved.mean.value == pytest.approx(1e3 + plain.mean.value, rel=1e-14)  # type: ignore[operator]
    assert moved.mean.error == pytest.approx(plain.mean.error)
    assert moved.variance == plain.variance


def test_errors_of_derived_numbers() -> None:
    """Return period and rate have one relative error; shares and entries that scatter together cancel in the spell."""
    events, _ = numbers(case_of(), SUMS)
    often = events["often"]
    relative = [q.error / q.value for q in (often.entry_rate, often.return_period)]  # type: ignore[operator]
    assert relative[0] == pytest.approx(relative[1])
    together = SUMS.copy()
    together[:, :, 0] = 3.0 * together[:, :, 1]
    spell = numbers(case_of(), together, times=25)[0]["often"].mean_spell
    assert spell.value == pytest.approx(3.0 * TAU / N_STEP)
    assert spell.error == pytest.approx(0.0, abs=1e-12)


def test_few_entries_bound_the_error_from_below() -> None:
    """Of 8 entries none is sure to better than 1/sqrt(8), were replicates alike; of 104, replicates alone decide."""
    alike = SUMS.copy()
    alike[:, :, :2] = alike[:, :, :2].mean(axis=1, keepdims=True)
    alike[:, :, 0] = 3.0 * alike[:, :, 1]
    for times, relative in ((1, 12**-0.5), (8, 96**-0.5), (9, 0.0)):
        often = numbers(case_of(), alike, times=times)[0]["often"]
        assert often.mean_spell.error == pytest.approx(relative * often.mean_spell.value, abs=1e-12)  # type: ignore[operator]
    scattered = numbers(case_of(), SUMS)[0]["often"].entry_rate
    assert scattered.error >= 12**-0.5 * scattered.value  # type: ignore[operator]


@pytest.mark.parametrize(
    ("error", "hits", "expected"),
    [(0.1, 4.0, 1.0), (1.5, 4.0, 1.5), (0.1, 99.0, 2.0 / 99.0**0.5), (0.1, 100.0, 0.1), (0.1, 0.0, 0.1)],
)
def test_counted(error: float, hits: float, expected: float) -> None:
    """A value of 2: half of it is the error of four entries."""
    assert counted(error, 2.0, hits) == pytest.approx(expected)


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
    """A share of 1, all nine steps of 4 bursts, has no entry to count, and a lower bound from the bursts that count."""
    sums = SUMS.copy()
    sums[:, :, 0], sums[:, :, 1] = 36.0, 0.0
    often = numbers(case_of(), sums)[0]["often"]
    assert often.share.value == pytest.approx(1.0)
    assert often.share.low == pytest.approx(0.05 ** (1.0 / 14.4))
    assert often.share.high == 1.0
    assert "always seen in 14.4 effective bursts" in often.share.reason
    assert often.entry_rate.value is None
    assert "no entry seen" in often.mean_spell.reason
    sums[0, 0, 0] = 35.0
    missed = numbers(case_of(), sums)[0]["often"].share
    assert missed.value == pytest.approx(1.0 - 1 / 3 / 72)
    assert not missed.reason
    assert missed.high is not None
    assert 1.0 - 1 / 3 / 72 < missed.high < 1.0


def test_a_single_cell_at_rest_has_no_entry_rate() -> None:
    """Entries there are seeds that settle; noise makes true ones, and two cells may be a cycle."""
    lone = numbers(case_of(), SUMS, alone=True)[0]["often"]
    assert lone.share.value == pytest.approx(20 / 72)
    for quantity in (lone.entry_rate, lone.return_period, lone.mean_spell):
        assert (quantity.value, quantity.low, quantity.high) == (None, None, None)
        assert "single cell" in quantity.reason
    noisy = numbers(case_of("noisy-flow"), SUMS, alone=True)[0]["often"]
    assert noisy.entry_rate.value == pytest.approx(10 / 9 / TAU)
    assert numbers(case_of(), SUMS)[0]["often"].entry_rate.value is not None


def test_noisy_components_have_no_entry_rate() -> None:
    """A plain region of a component that white noise drives; one of a smooth component has a rate."""
    events = {"smooth": {"when": "x > 1"}, "rough": {"when": "v > 1"}}
    found = numbers(case_of("noisy-flow", events=events), SUMS)[0]
    assert found["smooth"].entry_rate.value == pytest.approx(20 / 27 / TAU)
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
    assert events["often"].share.value == pytest.approx(7 / 54)
    assert events["often"].share.error == pytest.approx(numbers(case_of(), SUMS)[0]["often"].share.error)


def shift_of(*change: list[float], factor: float = 1.0) -> Shift:
    """The same change of the averages, on the scale of one burst, in each of four replicates; one list per sum."""
    return Shift(np.tile(np.concatenate(change), (4, 1)), factor)


def test_a_step_part_is_the_change_of_every_number() -> None:
    """Share 7/54 moved by 0.01, entries 20/27 by 0.05, the mean by 0.2: each number moves by its derivative."""
    moved = shift_of([0.01, 0.05], [0.0, 0.0], [0.2, 0.9])
    events, observables = numbers(case_of(), SUMS, shifts={"step": moved})
    often, entries = events["often"], 20 / 27
    assert often.share.parts["step"] == pytest.approx(0.01)
    assert often.entry_rate.parts["step"] == pytest.approx(0.05 / TAU)
    assert often.return_period.parts["step"] == pytest.approx(TAU * 0.05 / entries**2)
    assert often.mean_spell.parts["step"] == pytest.approx(abs(0.01 * TAU / entries - 7 / 54 * TAU * 0.05 / entries**2))
    mean = observables["x"].mean
    assert mean.parts["step"] == pytest.approx(0.2)
    assert observables["x"].variance.parts["step"] == pytest.approx(abs(0.9 - 2.0 * mean.value * 0.2))  # type: ignore[operator]
    without = numbers(case_of(), SUMS)[0]["often"].share
    assert set(without.parts) == {"sampling"}
    assert without.parts["sampling"] == often.share.parts["sampling"]
    assert without.value == often.share.value
    assert often.share.low < without.low  # type: ignore[operator]


def test_the_part_of_the_cells_joins_ladder_and_change() -> None:
    """Masses 1/3, 1/3 - 0.04 and 1/3 - 0.12 of the first cell; shares of the cells differ by 20/72 - 4/72 = 2/9."""
    ladder = np.array([[1 / 3 - 0.04, 2 / 3 + 0.04], [1 / 3 - 0.12, 2 / 3 + 0.12]])
    moved = shift_of([0.01, 0.0], [0.0, 0.0], [0.0, 0.0])

    def part(**more: Any) -> float:
        return numbers(case_of(), SUMS, **more)[0]["often"].share.parts["cells"]

    # the ratio 1/2 of the two differences leaves as much as the first, of which half counts
    rest = 0.5 * 0.04 * 2 / 9
    assert part(ladder=ladder) == pytest.approx(rest)
    assert part(shifts={"cells": moved}) == pytest.approx(0.01)
    assert part(ladder=ladder, shifts={"cells": moved}) == pytest.approx(np.hypot(rest, 0.01))


@pytest.mark.parametrize(("n_step", "share", "entries"), [(10, 1 / 9, 10 / 9), (2, 1.0, 2.0), (1, 1.0, 1.0)])
def test_scale_of_sums(n_step: int, share: float, entries: float) -> None:
    """Sums begin with the second step: n - 1 of n; entries are carried to all n."""
    plan: Any = SimpleNamespace(n_step=n_step)
    found = scaled(np.ones((3, 2, 6)), plan, 2)
    np.testing.assert_allclose(found, np.broadcast_to([share, entries, share, entries, share, share], (3, 2, 6)))


# ------------------------------------------------------------------------- where bursts are worth most

# Per step a burst from cell 0 is inside with chance 0.5, of cell 1 with 0.02; both end in either cell evenly, so that
# the adjoint solution is flat and the error of the share is the scatter of the sums alone.
CHANCES, N_REPLICATE = np.array([0.5, 0.02]), 400
# Part of the bursts that goes by mass, which is even here.
BY_MASS = 0.5


def two_cells(sent: tuple[int, int], events: dict[str, Any] | None = None) -> tuple[Any, ...]:
    """Arguments of `allocation` and `evenness`: bursts of one step, half of which go to either cell."""
    case = Case(
        title="invented",
        system={"kind": "noisy-map", "state": ["x"], "equations": {"x": "w"}, "draws": {"w": "uniform"}},
        events=events or {"in": {"when": "x > 0.5"}},
    )
    n_event = len(case.events)
    counts = np.zeros((2, 4, N_REPLICATE), dtype=int)
    for i in range(2):
        counts[i, :2] = sent[i] // 2
    rng, sums = np.random.default_rng(11), np.zeros((2, N_REPLICATE, 2 * n_event + 2))
    for i in range(2):
        sums[i, :, 0] = rng.binomial(sent[i], CHANCES[i], N_REPLICATE)
        for k in range(1, n_event):
            sums[i, :, 2 * k] = rng.binomial(sent[i], CHANCES[1 - i], N_REPLICATE)
    transition = TransitionMatrix(tally_of(counts))
    solver = ClassSolver(transition, np.arange(2))
    plan: Any = SimpleNamespace(n_step=1, duration=1.0)
    found: Any = SimpleNamespace(sums=sums, sent=transition.tally.bursts.sum(axis=1))
    return case, plan, transition, solver.mass, found, solver.adjoint


def deviations() -> np.ndarray:
    """Standard deviation of what a burst of each cell finds."""
    return np.asarray(np.sqrt(CHANCES * (1.0 - CHANCES)))


def mixed_with_mass(share: np.ndarray) -> np.ndarray:
    return np.asarray((1.0 - BY_MASS) * share + BY_MASS * 0.5)


@pytest.mark.parametrize("sent", [(20, 20), (40, 10)])
def test_allocation_is_that_of_neyman(sent: tuple[int, int]) -> None:
    """In proportion to mass times standard deviation, and half by mass; whatever was sent before.

    A variance from 399 degrees of freedom is known to 7 percent, a deviation to 3.5, and the share to less than 1.
    """
    share = allocation(*two_cells(sent))
    assert share.sum() == pytest.approx(1.0, abs=1e-12)
    neyman = deviations() / deviations().sum()
    assert_agrees(share, mixed_with_mass(neyman), 0.005)
    # negative control: an even split, and one in proportion to the variances
    for wrong in (np.array([0.5, 0.5]), deviations() ** 2 / (deviations() ** 2).sum()):
        with pytest.raises(AssertionError):
            assert_agrees(share, mixed_with_mass(wrong), 0.005)


def test_allocation_follows_the_numbers_wanted() -> None:
    """Two events whose deviations are exchanged between the cells: together even, each alone at its own cell."""
    arguments = two_cells((20, 20), {"in": {"when": "x > 0.5"}, "out": {"when": "x < 0.5"}})
    neyman = mixed_with_mass(deviations() / deviations().sum())
    assert_agrees(allocation(*arguments), 0.5, 0.005)
    assert_agrees(allocation(*arguments, {("share", 0): 1.0}), neyman, 0.005)
    assert_agrees(allocation(*arguments, {("share", 1): 1.0}), neyman[::-1], 0.005)
    assert allocation(*arguments, {("share", 0): 9.0, ("share", 1): 1.0})[0] > 0.55


def test_allocation_without_any_error_goes_by_mass() -> None:
    case, plan, transition, mass, found, adjoint = two_cells((20, 20))
    found.sums = np.ones_like(found.sums) * 10.0
    np.testing.assert_allclose(allocation(case, plan, transition, mass, found, adjoint), mass)


def test_evenness_is_the_gain_over_an_even_spread() -> None:
    """J. Neyman (1934): with bursts in proportion to the deviations s the variance is (sum m s)^2 / n, evenly spread
    sum m^2 s^2 / (n/2); 40 and 12 bursts are that proportion, to rounding.
    """
    s = deviations()
    sent = (40, 12)
    gain = evenness(*two_cells(sent))[("share", 0)]
    variances = (s**2).sum() / np.mean(sent), (s**2 / sent).sum()
    assert_agrees(gain, variances[0] / variances[1], 0.01)
    assert gain > 1.2
    assert gain == pytest.approx(2.0 * (s**2).sum() / s.sum() ** 2, rel=0.05)
    # exactly one where they are spread evenly; below one where they go to the wrong cell (control)
    assert evenness(*two_cells((20, 20)))[("share", 0)] == pytest.approx(1.0, rel=1e-12)
    assert evenness(*two_cells((12, 40)))[("share", 0)] < 0.7
