"""Dispersed starts, their twins, where they ended, and the order in which twins met events."""

from __future__ import annotations

import math

import numpy as np
import pytest

from perdure._crosscheck.starts import (
    APART,
    TRIED,
    TWIN,
    Dispersed,
    dispersed,
    ended,
    orders_differ,
    twins,
    twins_apart,
)
from perdure._records import BoxGrid
from perdure.errors import NoAttractorError

LOWER, UPPER = np.array([0.0, -10.0]), np.array([1.0, 30.0])
OPEN = np.zeros((2, 2), dtype=bool)


class Recorded:
    """A first flight that stays where it is, and remembers the starts."""

    def __init__(self, lost: np.ndarray | None = None, value: float = np.nan) -> None:
        self.lost, self.value = lost, value
        self.state = np.empty((2, 0))

    def __call__(self, state: np.ndarray) -> np.ndarray:
        self.state = state.copy()
        out = state.copy()
        if self.lost is not None:
            out[0, self.lost] = self.value
        return out


def made(given: np.ndarray = OPEN, n_start: int = 500, **options: np.ndarray) -> tuple[Dispersed, np.ndarray]:
    """What comes out, and the starts that were tried."""
    fly = Recorded(**options)
    found = dispersed(LOWER, UPPER, given, n_start, fly, np.random.default_rng(1))
    return found, fly.state


def test_starts_fill_the_domain_and_one_twice_as_wide() -> None:
    found, tried = made()
    assert tried.shape == (2, 500 * TRIED)
    assert (found.n_tried, found.n_lost) == (500 * TRIED, 0)
    np.testing.assert_array_equal(found.state, tried[:, :500])
    assert found.state.flags["C_CONTIGUOUS"]
    place = (tried - LOWER[:, None]) / (UPPER - LOWER)[:, None]
    inside = ((place >= 0.0) & (place <= 1.0)).all(axis=0)
    assert inside[::2].all()
    # a quarter of the area of the wide domain lies in the domain
    error = math.sqrt(0.25 * 0.75 / 1000)
    assert abs(inside[1::2].mean() - 0.25) < 5.0 * error
    assert abs(inside[::2].mean() - 0.25) > 5.0 * error, "the control must fail"
    for k in range(2):
        assert -0.5 <= place[k].min() < -0.49
        assert 1.49 < place[k].max() <= 1.5


def test_ends_that_the_case_gives_are_kept() -> None:
    given = np.array([[True, False], [False, True]])
    _, tried = made(given)
    place = (tried - LOWER[:, None]) / (UPPER - LOWER)[:, None]
    assert place[0].min() >= 0.0
    assert place[0].max() > 1.49
    assert place[1].min() < -0.49
    assert place[1].max() <= 1.0


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 1.1e6, -1e12])
def test_lost_starts_are_counted_and_left_out(value: float) -> None:
    """Those that are no numbers, and those a million widths away."""
    lost = np.arange(40) % 4 == 1
    found, tried = made(n_start=10, lost=lost, value=value)
    assert (found.n_tried, found.n_lost) == (40, 10)
    np.testing.assert_array_equal(found.state, tried[:, ~lost][:, :10])


def test_states_within_a_million_widths_are_kept() -> None:
    found, _ = made(n_start=10, lost=np.arange(40) == 0, value=0.9e6)
    assert found.n_lost == 0


def test_fewer_starts_than_asked_for() -> None:
    found, tried = made(n_start=10, lost=np.arange(40) >= 2)
    np.testing.assert_array_equal(found.state, tried[:, :2])
    assert found.n_lost == 38


def test_fewer_than_two_starts_are_refused() -> None:
    with pytest.raises(NoAttractorError, match=r"39 of 40 trajectories .* left all bounds.*\[cells\] lower and upper"):
        made(n_start=10, lost=np.arange(40) >= 1)


def test_twins_stand_a_billionth_of_the_domain_away() -> None:
    state = np.random.default_rng(2).uniform(LOWER[:, None], UPPER[:, None], (2, 300))
    both = twins(state, UPPER - LOWER, np.random.default_rng(3))
    assert both.shape == (2, 600)
    np.testing.assert_array_equal(both[:, :300], state)
    gap = (both[:, 300:] - state) / (UPPER - LOWER)[:, None]
    np.testing.assert_allclose(np.abs(gap), TWIN, rtol=1e-5)
    signs = np.sign(gap).astype(int)
    assert {tuple(pair) for pair in signs.T} == {(1, 1), (1, -1), (-1, 1), (-1, -1)}


def test_twins_that_have_parted() -> None:
    """A thousandth of the distance of unrelated states, in the component in which they are furthest apart."""
    # four starts, each as far from the next as the domain is wide; of their twins one is beyond the thousandth
    state = np.array([[0.0, 1.0, 0.0, 1.0], [0.0, 0.0, 0.0, 0.0]])
    other = state + np.array([[0.0, 0.0, 0.9 * APART, 0.0], [0.0, 1.1 * APART * 40.0, 0.0, 0.9 * APART * 40.0]])
    assert twins_apart(np.concatenate([state, other], axis=1), UPPER - LOWER) == 0.25
    rng = np.random.default_rng(6)
    both = rng.uniform(LOWER[:, None], UPPER[:, None], (2, 400))
    assert twins_apart(both, UPPER - LOWER) == pytest.approx(1.0, abs=0.01), "unrelated states"
    assert twins_apart(twins(both, UPPER - LOWER, rng), UPPER - LOWER) == 0.0


def test_twins_that_were_lost_do_not_count() -> None:
    state = np.array([[0.0, 1.0, 0.0, 1.0], [0.0, 0.0, 0.0, 0.0]])
    other = state + np.array([[0.5], [0.0]])
    other[0, 1] = np.nan
    other[:, 2] = state[:, 2]
    assert twins_apart(np.concatenate([state, other], axis=1), UPPER - LOWER) == pytest.approx(2.0 / 3.0)
    assert twins_apart(np.full((2, 8), np.nan), UPPER - LOWER) == 0.0


# ----------------------------------------------------------------------------------------- endings

GRID = BoxGrid(np.array([0.0]), np.array([1.0]), np.array([10]), np.array([False]))
KEYS = np.array([1, 2, 5, 6, 8])
# the first regime has the cells 1 and 2, the second 6; 5 and 8 belong to none
CELLS = (np.array([0, 1]), np.array([3]))


def stand(*places: float) -> np.ndarray:
    return np.array([places])


def test_where_trajectories_ended() -> None:
    """Always in one; last in one, then in no cell of a regime; never; lost; from one to the other and back."""
    stands = [
        stand(1.5, 2.5, 5.5, np.nan, 1.5, 6.5, 0.5),
        stand(2.5, 5.5, 8.5, np.nan, 6.5, 6.5, 6.5),
        stand(1.2, 20.0, 3.5, np.nan, 1.1, np.nan, 5.5),
    ]
    last, moved = ended(GRID, KEYS, CELLS, stands)
    np.testing.assert_array_equal(last, [0, 0, -1, -1, 0, 1, 1])
    np.testing.assert_array_equal(moved, [False, False, False, False, True, False, False])


def test_a_move_by_way_of_no_regime_counts() -> None:
    last, moved = ended(GRID, KEYS, CELLS, [stand(1.5, 6.5), stand(5.5, 5.5), stand(6.5, 6.5)])
    np.testing.assert_array_equal(last, [1, 1])
    np.testing.assert_array_equal(moved, [True, False])


def test_one_look_moves_nothing() -> None:
    last, moved = ended(GRID, KEYS, CELLS, [stand(1.5, 6.5, 9.5)])
    np.testing.assert_array_equal(last, [0, 1, -1])
    assert not moved.any()


# ------------------------------------------------------------------------------------------ orders


def batches_of(entries: np.ndarray) -> np.ndarray:
    """Averages (n_batch, n_sum, n) with these entries (n_batch, n_event, n); the other sums differ everywhere."""
    n_batch, n_event, n = entries.shape
    out = np.random.default_rng(4).uniform(size=(n_batch, 2 * n_event + 2, n))
    out[:, 1 : 2 * n_event : 2] = entries
    return out


def test_orders_of_twins() -> None:
    """Four starts: alike; one batch of one event differs; another event and batch; both, in number only."""
    entries = np.tile(np.array([0.1, 0.2, 0.3, 0.4]), (3, 2, 2))
    assert orders_differ(batches_of(entries), 2, 4) == 0.0
    entries[0, 0, 5] += 0.01
    assert orders_differ(batches_of(entries), 2, 4) == 0.25
    entries[2, 1, 2] -= 0.01
    assert orders_differ(batches_of(entries), 2, 4) == 0.5
    entries[1, 1, 5] += 0.01
    assert orders_differ(batches_of(entries), 2, 4) == 0.5
    assert orders_differ(batches_of(entries), 1, 4) == 0.25, "the first event alone"


def test_orders_without_events_or_twins() -> None:
    entries = np.random.default_rng(5).uniform(size=(3, 1, 8))
    assert orders_differ(batches_of(entries), 0, 4) == 0.0
    assert orders_differ(batches_of(entries), 1, 4) == 1.0
    # twins of five of six starts
    assert math.isnan(orders_differ(batches_of(entries), 1, 8))
