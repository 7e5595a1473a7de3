"""Where starts end, and how often they visit on the way: closed forms of the gambler's ruin.

W. Feller, An Introduction to Probability Theory and its Applications I (3rd ed., Wiley 1968), chapter XIV, equations
(2.4), (2.5) for ruin and (3.4), (3.5) for the duration.
"""

from __future__ import annotations

import sys

import numpy as np
import pytest

from perdure._spectrum import absorption, closed_classes, visits
from perdure._transitions import TransitionMatrix
from perdure.errors import NotConvergedError
from unit.transitions.support import tally_of


def ruin(n: int, up: int, down: int, lost: int = 0) -> TransitionMatrix:
    """States 0 to n, the ends absorbing; of up + down + lost bursts so many go up, down and outside."""
    counts = np.zeros((n + 1, n + 3, 2), dtype=int)
    inner = np.arange(1, n)
    counts[inner, inner + 1], counts[inner, inner - 1], counts[inner, n + 1] = up, down, lost
    counts[0, 0] = counts[n, n] = up + down + lost
    return TransitionMatrix(tally_of(counts))


@pytest.mark.parametrize("n", [2, 20, 60])
@pytest.mark.parametrize(("up", "down"), [(1, 1), (11, 9), (3, 7)])
def test_ruin(n: int, up: int, down: int) -> None:
    """Probability of the upper end, for fair and unfair games."""
    chain = ruin(n, up, down)
    classes = closed_classes(chain.tally).members
    assert [list(cells) for cells in classes] == [[0], [n]]
    found = absorption(chain, classes)
    i, ratio = np.arange(n + 1), down / up
    exact = i / n if up == down else (ratio**i - 1.0) / (ratio**n - 1.0)
    np.testing.assert_allclose(found[:, 1], exact, atol=1e-8)
    np.testing.assert_allclose(found.sum(axis=1), 1.0, atol=1e-8)


def test_absorption_with_losses() -> None:
    """With a chance to be lost at every step: against a dense solve; rows sum to the chance to be kept."""
    chain = ruin(12, 4, 5, lost=1)
    found = absorption(chain, closed_classes(chain.tally).members)
    inner = np.arange(1, 12)
    dense = np.zeros((11, 11))
    dense[np.arange(10), np.arange(1, 11)], dense[np.arange(1, 11), np.arange(10)] = 0.4, 0.5
    push = np.zeros((11, 2))
    push[0, 0], push[-1, 1] = 0.5, 0.4
    np.testing.assert_allclose(found[inner], np.linalg.solve(np.eye(11) - dense, push), atol=1e-9)
    assert found[inner].sum(axis=1).max() < 1.0


def test_without_classes_and_without_transient_cells() -> None:
    chain = ruin(3, 1, 1)
    assert absorption(chain, ()).shape == (4, 0)
    all_closed = (np.array([0, 1]), np.array([2, 3]))
    np.testing.assert_array_equal(absorption(chain, all_closed), [[1, 0], [1, 0], [0, 1], [0, 1]])
    assert not visits(chain, all_closed, np.full(4, 0.25)).any()


@pytest.mark.parametrize("n", [5, 40])
def test_visits_of_a_fair_game(n: int) -> None:
    """v_j = 2 min(i, j) (n - max(i, j)) / n from state i; together the duration i (n - i)."""
    chain = ruin(n, 1, 1)
    classes = closed_classes(chain.tally).members
    j = np.arange(n + 1)
    for i in (1, n // 2, n - 1):
        found = visits(chain, classes, np.where(j == i, 1.0, 0.0))
        inside = (j > 0) & (j < n)
        exact = np.where(inside, 2.0 * np.minimum(i, j) * (n - np.maximum(i, j)) / n, 0.0)
        np.testing.assert_allclose(found, exact, atol=1e-5 * exact.max())
        assert found.sum() == pytest.approx(i * (n - i), rel=1e-5)


def test_visits_from_a_law_of_starts() -> None:
    """Starts in a closed class visit no transient cell; the rest add up."""
    chain = ruin(10, 1, 1)
    start = np.full(11, 1.0 / 11.0)
    found = visits(chain, closed_classes(chain.tally).members, start)
    i = np.arange(11)
    assert found.sum() == pytest.approx((i * (10 - i)).sum() / 11.0, rel=1e-6)


def test_slow_game() -> None:
    """A fair game with 1000 states, where the iteration stalls: factors take over; without them it is an error."""
    n = 1000
    chain = ruin(n, 1, 1)
    classes = closed_classes(chain.tally).members
    j = np.arange(n + 1)
    np.testing.assert_allclose(absorption(chain, classes)[:, 1], j / n, atol=1e-9)
    found = visits(chain, classes, np.where(j == 350, 1.0, 0.0))
    exact = 2.0 * np.minimum(350, j) * (n - np.maximum(350, j)) / n
    np.testing.assert_allclose(found, exact, rtol=1e-9, atol=1e-9)


def test_stalled_iteration_is_an_error(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the system is too large to factor: never a wrong number."""
    # the module, whose name in the package is taken by the function
    monkeypatch.setattr(sys.modules["perdure._spectrum.absorption"], "FACTOR_MOST", 100)
    chain = ruin(1000, 1, 1)
    classes = closed_classes(chain.tally).members
    with pytest.raises(NotConvergedError, match=r"999 transient cells .*1998 entries .*allowed 100.*; use fewer"):
        absorption(chain, classes)
