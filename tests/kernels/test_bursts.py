"""Generated kernels against plain Python: steps, events, sums, blow-up, lanes, marginals."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from scipy.linalg import expm

from helpers.statistics import assert_agrees
from kernels.plain import runge_kutta
from kernels.support import fly

SPIRAL = (0.3, 2.0, 0.5)


def spiral(x: np.ndarray) -> np.ndarray:
    a, w, q = SPIRAL
    return np.array([-a * x[0] + w * x[1] + q * x[0] ** 2, -w * x[0] - a * x[1]])


def spiral_starts(n: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).uniform(-1.0, 1.0, (2, n))


def spiral_path(start: np.ndarray, step: float, n_step: int) -> np.ndarray:
    """Recorded states, shape (n_step + 1, 2, n)."""
    path = [start]
    for _ in range(n_step):
        path.append(runge_kutta(spiral, path[-1], step))
    return np.array(path)


def event_sums(inside: np.ndarray) -> np.ndarray:
    """Steps inside and entries, shape (2, n), from recorded membership (n_step + 1, n) that begins at the start.

    From the second step on: neither the first step nor an entry at it counts.
    """
    return np.array([inside[2:].sum(axis=0), (inside[2:] & ~inside[1:-1]).sum(axis=0)], dtype=float)


@pytest.mark.parametrize("n", [1, 5, 63, 64, 65, 200])
def test_runge_kutta_agrees_with_plain_version(n: int) -> None:
    """Any number of lanes, also one that is not a multiple of the 64 flown together."""
    start = spiral_starts(n)
    flown = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=20)
    np.testing.assert_allclose(flown.state, spiral_path(start, 0.05, 20)[-1], rtol=0.0, atol=1e-14)
    assert flown.blown == 0


def test_map_agrees_with_plain_version() -> None:
    """Few steps, since the logistic map doubles a rounding error at every one."""
    x = np.random.default_rng(2).uniform(0.0, 1.0, 1001)
    found = fly("logistic", x, parameters=[3.9], n_step=8).state[0]
    for _ in range(8):
        x = 3.9 * x * (1.0 - x)
    np.testing.assert_allclose(found, x, rtol=0.0, atol=3.9**8 * 4e-16)


def test_sums_of_a_flow_agree_with_recorded_paths() -> None:
    """Time inside and entries of each event; sums and sums of squares of each observable."""
    n = 333
    start = spiral_starts(n)
    flown = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=100)
    path = spiral_path(start, 0.05, 100)
    x, y = path[:, 0], path[:, 1]
    np.testing.assert_array_equal(flown.sums[0:2], event_sums(x > 0.2))
    np.testing.assert_array_equal(flown.sums[2:4], event_sums(x**2 + y**2 < 0.3))
    assert flown.sums[1].max() >= 2.0, "starts must give several entries"
    expected = [x[2:].sum(0), (x[2:] ** 2).sum(0), (x * y)[2:].sum(0), ((x * y)[2:] ** 2).sum(0)]
    np.testing.assert_allclose(flown.sums[4:], expected, rtol=0.0, atol=1e-12)


def test_an_entry_needs_a_start_outside() -> None:
    """A burst begun inside an event has not entered it; membership of the start itself is not counted as time."""
    flown = fly("logistic", [0.95, 0.05, 0.4], parameters=[1.0], n_step=1)
    # 0.95 leaves to 0.0475; 0.05 stays out; 0.4 moves to 0.24 within the second event
    np.testing.assert_array_equal(flown.sums[:4], [[0, 0, 0], [0, 0, 0], [0, 0, 1], [0, 0, 0]])


def test_an_entry_from_the_start_counts_in_bursts_of_one_step_only() -> None:
    """Second event, 0.2 < x < 0.5, of x -> 3.9 x (1 - x), and the first, x > 0.9.

    0.1 goes to 0.351 (an entry) and 0.888; 0.351 to 0.888 and 0.387 (an entry); 0.888 to 0.388 (an entry) and 0.926.
    """
    start = [0.1, 0.351, 0.888]
    one = fly("logistic", start, parameters=[3.9], n_step=1)
    np.testing.assert_array_equal(one.sums[:4], [[0, 0, 0], [0, 0, 0], [1, 0, 1], [1, 0, 1]])
    two = fly("logistic", start, parameters=[3.9], n_step=2)
    np.testing.assert_array_equal(two.sums[:4], [[0, 0, 1], [0, 0, 1], [0, 1, 0], [0, 1, 0]])
    np.testing.assert_array_equal(one.sums[4], one.state[0])
    np.testing.assert_array_equal(two.sums[4], two.state[0])


def test_centres_keep_the_digits_of_a_variance() -> None:
    """Observables x and x y of states at rest near (1e9, 1), a centre each; without centres no digit is left."""
    x = 1e9 + np.random.default_rng(5).standard_normal(4096)
    state = np.array([x, np.full_like(x, 2.0)])
    rest: dict[str, Any] = {"parameters": [0.0, 0.0, 0.0], "n_step": 5}
    sums = fly("spiral", state, centres=[1e9, -7.0], **rest).sums[4:]
    expected = [x - 1e9, (x - 1e9) ** 2, 2.0 * x + 7.0, (2.0 * x + 7.0) ** 2]
    np.testing.assert_allclose(sums, 4.0 * np.array(expected), rtol=1e-14)

    def variance(found: np.ndarray) -> float:
        mean, square = found.mean(axis=1) / 4.0
        return float(square - mean**2)

    assert variance(sums[:2]) == pytest.approx(np.var(x), rel=1e-10)
    assert abs(variance(fly("spiral", state, **rest).sums[4:6]) - np.var(x)) > 0.1


def test_sums_of_a_map_agree_with_recorded_paths() -> None:
    x = np.random.default_rng(3).uniform(0.0, 1.0, 130)
    flown = fly("logistic", x, parameters=[3.9], n_step=10)
    path = [x]
    for _ in range(10):
        path.append(3.9 * path[-1] * (1.0 - path[-1]))
    p = np.array(path)
    np.testing.assert_array_equal(flown.sums[0:2], event_sums(p > 0.9))
    np.testing.assert_array_equal(flown.sums[2:4], event_sums((p > 0.2) & (p < 0.5)))
    np.testing.assert_allclose(flown.sums[4], p[2:].sum(axis=0), atol=1e-8)
    np.testing.assert_allclose(flown.sums[6], np.log(p[2:]).sum(axis=0), atol=1e-6)


def test_blow_up_marks_nan_and_leaves_no_sums() -> None:
    """Only the lanes that blew up; their neighbours are not touched."""
    start = spiral_starts(130)
    start[:, 3::7] = 50.0
    lost = np.zeros(130, dtype=bool)
    lost[3::7] = True
    flown = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=40)
    assert flown.blown == lost.sum()
    assert np.isnan(flown.state[:, lost]).all()
    assert (flown.sums[:, lost] == 0.0).all()
    kept = fly("spiral", start[:, ~lost], parameters=SPIRAL, step=0.05, n_step=40)
    np.testing.assert_array_equal(flown.state[:, ~lost], kept.state)
    np.testing.assert_array_equal(flown.sums[:, ~lost], kept.sums)


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 1e101])
def test_a_start_that_is_not_a_state_is_blown_up(bad: float) -> None:
    flown = fly("functions", [[0.1, bad, 0.3], [1.0, 1.0, 1.0], [0.0, 0.0, 0.0]])
    assert flown.blown == 1
    np.testing.assert_array_equal(np.isnan(flown.state).all(axis=0), [False, True, False])
    np.testing.assert_array_equal((flown.sums == 0.0).all(axis=0), [False, True, False])


def test_lanes_do_not_depend_on_their_neighbours() -> None:
    """With draws too: a burst alone is the burst in company, to the last bit."""
    words = np.random.default_rng(4).integers(0, 2**63, 100).astype(np.uint64)
    start = np.linspace(-1.0, 1.0, 100)
    options: dict[str, Any] = {"parameters": [0.1, -0.5, 0.3, 0.2], "step": 0.1, "n_step": 7}
    whole = fly("weak2", start, stream=words, **options).state[0]
    part = fly("weak2", start[61:72], stream=words[61:72], **options).state[0]
    np.testing.assert_array_equal(whole[61:72], part)


@pytest.mark.parametrize("stride", [1, 3, 4])
def test_marginal_slots_agree_with_histogram(stride: int) -> None:
    """Slot 0 lies below the axis, the last above it."""
    start = spiral_starts(200)
    lower, upper, n_interval = np.array([-0.5, -0.3]), np.array([0.4, 0.6]), 9
    axis = (lower, upper, n_interval)
    flown = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=12, axis=axis, stride=stride)
    path = spiral_path(start, 0.05, 12)[stride::stride]
    assert flown.slots.shape == (12 // stride, 2, 200)
    for k in range(2):
        edges = np.concatenate([[-np.inf], np.linspace(lower[k], upper[k], n_interval + 1), [np.inf]])
        for sample, points in zip(flown.slots[:, k], path[:, k], strict=True):
            np.testing.assert_array_equal(np.bincount(sample, minlength=n_interval + 2), np.histogram(points, edges)[0])
        assert np.bincount(flown.slots[:, k].ravel())[[0, -1]].min() > 0, "both ends must be passed"


def test_slots_at_edges_and_beyond_all_bounds() -> None:
    """Intervals hold their lower edge; huge values are beyond the ends, nan is in slot 0 of a lane that is lost."""
    values = np.array([-0.25, 0.0, 0.249, 0.25, 0.999, 1.0, 1e99, -1e99, np.inf, -np.inf, np.nan])
    state = np.array([values, np.ones_like(values), np.zeros_like(values)])
    flown = fly("functions", state, axis=(np.zeros(3), np.ones(3), 4))
    np.testing.assert_array_equal(flown.slots[0, 0], [0, 1, 1, 2, 4, 5, 5, 0, 5, 0, 0])
    assert flown.blown == 3


def test_runge_kutta_has_order_four() -> None:
    """On a linear system, against the matrix exponential: 16 times less at half the step."""
    matrix = np.array([[-0.3, 2.0], [-2.0, -0.3]])
    start = np.array([[0.7], [-0.4]])
    exact = expm(2.0 * matrix) @ start
    errors = [
        np.linalg.norm(fly("spiral", start, parameters=[0.3, 2.0, 0.0], step=2.0 / n, n_step=n).state - exact)
        for n in (20, 40, 80)
    ]
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    # the next term of the error is a step's part of the first, here up to 2 percent: 0.03 in the order
    assert_agrees(orders, 4.0, 0.0, allowance=0.05)
    with pytest.raises(AssertionError):
        assert_agrees(orders, 3.0, 0.0, allowance=0.05)


def test_sums_notice_a_shift_by_one_step() -> None:
    """Negative control of the brute force: the first step instead of the last, or as well, gives other sums."""
    start = spiral_starts(333)
    flown = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=100)
    path = spiral_path(start, 0.05, 100)
    for counted in (path[1:-1], path[1:]):
        assert np.any(flown.sums[0] != (counted[:, 0] > 0.2).sum(axis=0))
