"""Pairs of bursts, with whole and with halved steps: right, and the same whatever the chunks and the workers."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm

from helpers.statistics import assert_agrees
from kernels.support import SPECS, fly, kernel, parameter_array
from perdure import Case
from perdure._kernels.cache import burst_kernel
from perdure._records import BoxGrid
from perdure._sampling import halving, kernel_for, parameter_values
from perdure._sampling.halving import Pairs, chunk_size, pairs
from unit.sampling.support import plan_of

GRID = BoxGrid(np.array([-1.2, -1.0]), np.array([0.2, 0.25]), np.array([11, 9]), np.array([False, False]))
PLAN = plan_of(GRID, step=0.1)
LINE = BoxGrid(np.array([-1.0]), np.array([0.1]), np.array([20]), np.array([False]))
SPIRAL = [0.3, 2.0, 0.9]
# Ornstein-Uhlenbeck process by the scheme of order 1, whose moments follow by hand
OU = Case(
    system={
        "kind": "noisy-flow",
        "state": ["x"],
        "equations": {"x": "-x"},
        "noise": {"x": "1"},
    },
    events={"up": {"when": "x > 0.5"}},
    observables={"x": "x", "square": "x**2"},
    bursts={"scheme": "euler-maruyama", "step": 0.25},
)


def halved_kernel(name: str) -> Callable[..., int]:
    return burst_kernel(replace(SPECS[name], halved=True))


def spiral_pairs(state: np.ndarray, **more: Any) -> Pairs:
    given = (PLAN, parameter_array("spiral", SPIRAL), SPECS["spiral"].n_sum, 10)
    words = np.arange(state.shape[1], dtype=np.uint64)
    return pairs(kernel("spiral"), halved_kernel("spiral"), *given, state, words, **more)


def starts(n: int) -> np.ndarray:
    return np.random.default_rng(1).uniform(-1.0, 1.0, (2, n))


def words_of(n: int) -> np.ndarray:
    return np.random.default_rng(2).integers(0, 2**63, n).astype(np.uint64)


def test_pairs_are_what_the_kernels_give() -> None:
    """A flow without noise, some of whose bursts blow up: 12 steps of 0.1 and 24 of 0.05."""
    start = starts(300)
    start[:, ::9] = 60.0
    kept = start.copy()
    found = spiral_pairs(start)
    np.testing.assert_array_equal(start, kept)
    axis = (PLAN.axis_lower, PLAN.axis_upper, 10)
    whole = fly("spiral", start, parameters=SPIRAL, step=0.1, n_step=12, axis=axis, stride=4)
    double = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=24, axis=axis, stride=8)
    np.testing.assert_array_equal(found.end, whole.state)
    np.testing.assert_array_equal(found.sums, whole.sums)
    np.testing.assert_array_equal(found.slots, whole.slots)
    np.testing.assert_allclose(found.end_halved, double.state, rtol=0.0, atol=1e-13)
    np.testing.assert_array_equal(found.slots_halved, double.slots)
    lost = np.arange(300) % 9 == 0
    np.testing.assert_array_equal(np.isnan(found.end), [lost, lost])
    np.testing.assert_array_equal(np.isnan(found.end_halved), [lost, lost])
    assert (found.sums_halved[:, lost] == 0.0).all()
    assert (found.sums_halved[:, ~lost] != found.sums[:, ~lost]).any()
    assert (found.slots.dtype, found.slots.shape) == (np.uint16, (3, 2, 300))


@pytest.mark.parametrize("workers", [1, 3])
@pytest.mark.parametrize("lanes", [64, 100, 1000])
def test_pairs_do_not_depend_on_chunks_and_workers(workers: int, lanes: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """To the last bit, noise included; no call of a kernel has more bursts than a chunk. Other words, other bursts."""
    plan, parameters = plan_of(LINE, step=0.1), parameter_array("ornstein", [1.0, 1.0])
    start, words = starts(777)[:1], words_of(777)
    largest = []

    def noted(state: np.ndarray, *others: Any) -> int:
        largest.append(state.shape[1])
        return kernel("ornstein")(state, *others)

    def flown(stream: np.ndarray, **more: Any) -> Pairs:
        return pairs(noted, halved_kernel("ornstein"), plan, parameters, 0, 10, start, stream, **more)

    alone = flown(words)
    assert largest == [777]
    monkeypatch.setattr(halving, "LANES_PER_BLOCK", lanes)
    largest.clear()
    found = flown(words, workers=workers)
    assert sorted(largest, reverse=True) == [min(lanes, 777 - at) for at in range(0, 777, lanes)]
    for part in fields(Pairs):
        np.testing.assert_array_equal(getattr(found, part.name), getattr(alone, part.name), err_msg=part.name)
    other = flown(words[::-1], workers=workers)
    assert (other.end != alone.end).any()
    assert (other.end_halved != alone.end_halved).any()


def test_chunks_are_bounded_in_bursts_and_in_steps() -> None:
    """At most 16384 bursts; at most 1e8 half steps, though never less than the 64 that are flown together."""
    assert [chunk_size(n_step) for n_step in (1, 3000, 50_000, 10**7)] == [16384, 16384, 1000, 64]


def test_a_word_is_needed_for_every_burst() -> None:
    given = (PLAN, parameter_array("spiral", SPIRAL), SPECS["spiral"].n_sum, 10)
    with pytest.raises(ValueError, match=r"stream has shape \(4,\).*\(5,\)"):
        pairs(kernel("spiral"), kernel("spiral"), *given, starts(5), np.zeros(4, dtype=np.uint64))


def test_an_exception_of_a_thread_comes_through(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(halving, "LANES_PER_BLOCK", 64)

    def broken(*given: Any) -> int:
        raise MemoryError("no room")

    with pytest.raises(MemoryError, match="no room"):
        pairs(broken, broken, PLAN, np.zeros(3), 0, 10, starts(200), words_of(200), workers=2)


def expected_sums(step: float, n_step: int, first: int, weight: float) -> np.ndarray:
    """Of x > 1/2, x, x^2, x^2, x^4 from step `first` on, by Euler-Maruyama on dx = -x dt + dW from 1."""
    mean, variance, total = 1.0, 0.0, np.zeros(5)
    for k in range(1, n_step + 1):
        mean, variance = (1.0 - step) * mean, (1.0 - step) ** 2 * variance + step
        square = mean**2 + variance
        if k >= first:
            fourth = mean**4 + 6.0 * mean**2 * variance + 3.0 * variance**2
            total += [norm.sf((0.5 - mean) / np.sqrt(variance)), mean, square, square, fourth]
    return weight * total


def test_sums_of_pairs_differ_as_the_steps_do() -> None:
    """Time inside, x, x^2, and their squares: exact for both kernels, and paired for their difference.

    More entries are seen at half steps.
    """
    n = 200_000
    (advance, n_sum), (halved, n_halved) = kernel_for(OU), kernel_for(OU, halved=True)
    assert n_sum == n_halved == 6
    plan = plan_of(LINE, step=0.25, n_step=8)
    found = pairs(advance, halved, plan, parameter_values(OU), n_sum, 10, np.ones((1, n)), words_of(n), workers=2)
    whole, half = expected_sums(0.25, 8, 2, 1.0), expected_sums(0.125, 16, 3, 0.5)
    row = [0, 2, 3, 4, 5]
    difference = found.sums_halved - found.sums
    error = difference[row].std(axis=1) / np.sqrt(n)
    for sums, exact in ((found.sums, whole), (found.sums_halved, half), (difference, half - whole)):
        assert_agrees(sums[row].mean(axis=1), exact, sums[row].std(axis=1) / np.sqrt(n))
    assert (error < 0.7 * found.sums[row].std(axis=1) / np.sqrt(n)).all(), "pairing must help"
    for wrong in (np.zeros(5), expected_sums(0.125, 16, 2, 0.5) - whole):
        for estimate, value, spread in zip(difference[row].mean(axis=1), wrong, error, strict=True):
            with pytest.raises(AssertionError):
                assert_agrees(estimate, value, spread)
    assert difference[1].mean() > 5.0 * difference[1].std() / np.sqrt(n)


def test_kernel_for_a_map_cannot_be_halved() -> None:
    case = Case(system={"kind": "map", "state": ["x"], "equations": {"x": "0.5*x"}})
    with pytest.raises(ValueError, match="no half step"):
        kernel_for(case, halved=True)
