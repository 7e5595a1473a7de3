"""Closed classes and periods of chains made by hand."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import pairwise

import numpy as np
import pytest

from perdure._records import Tally
from perdure._spectrum import closed_classes, parts_without, period_of
from unit.transitions.support import tally_of

OUT, BLOWN = -2, -1


def chain(n: int, edges: Iterable[tuple[int, int]]) -> Tally:
    """Tally with one burst per edge and replicate; OUT and BLOWN stand for the two last columns."""
    counts = np.zeros((n, n + 2, 2), dtype=int)
    for i, j in edges:
        counts[i, j] = 1
    return tally_of(counts)


def path(*stops: int) -> list[tuple[int, int]]:
    """Edges: path(6) leads from 0 through 5, path(6, 13) from 0 to 6 and on through 13."""
    cells = list(range(stops[0])) if len(stops) == 1 else [0, *range(stops[0], stops[1] + 1)]
    return list(pairwise(cells))


def members(tally: Tally) -> list[list[int]]:
    return [list(map(int, cells)) for cells in closed_classes(tally).members]


TWO = [(0, 1), (1, 0), (2, 3), (3, 4), (4, 2), (4, 4)]


def test_two_classes() -> None:
    """The one with more cells first."""
    assert members(chain(5, TWO)) == [[2, 3, 4], [0, 1]]
    assert not closed_classes(chain(5, TWO)).leaks.any()


def test_equal_classes_come_by_their_first_cell() -> None:
    assert members(chain(4, [(0, 3), (3, 0), (1, 2), (2, 1)])) == [[0, 3], [1, 2]]


def test_transient_cells_belong_to_no_class() -> None:
    """Cells that lead on: a loop with a way out, and a cell that nothing enters."""
    assert members(chain(7, [*TWO, (5, 6), (6, 5), (6, 0), (5, 2)])) == [[2, 3, 4], [0, 1]]
    assert members(chain(3, [(0, 1), (1, 2), (2, 2)])) == [[2]]


@pytest.mark.parametrize("way", [OUT, BLOWN])
def test_leaking_classes_are_not_closed(way: int) -> None:
    tally = chain(5, [*TWO, (3, way)])
    assert members(tally) == [[0, 1]]
    np.testing.assert_array_equal(closed_classes(tally).leaks, [False, False, False, True, False])
    assert members(chain(2, [(0, 1), (1, 0), (1, way)])) == []


def test_leaks_of_first_and_last_cells() -> None:
    tally = chain(4, [(0, OUT), (0, BLOWN), (1, 1), (2, 1), (3, BLOWN)])
    np.testing.assert_array_equal(closed_classes(tally).leaks, [True, False, False, True])
    assert members(tally) == [[1]]


def test_single_cells() -> None:
    assert members(chain(3, [(0, 0), (1, 1), (2, 0), (2, 1)])) == [[0], [1]]


@pytest.mark.parametrize(
    ("edges", "period"),
    [
        ([(0, 1), (1, 0)], 2),
        ([(0, 1), (1, 2), (2, 0)], 3),
        ([(0, 1), (1, 2), (2, 3), (3, 0)], 4),
        ([(0, 1), (1, 2), (2, 3), (3, 0), (1, 0)], 2),
        ([(0, 1), (1, 2), (2, 0), (1, 0)], 1),
        ([(0, 1), (1, 0), (1, 1)], 1),
        ([(0, 0)], 1),
        # bipartite with many ways
        ([(i, 4 + j) for i in range(4) for j in range(4)] + [(4 + j, i) for i in range(4) for j in range(4)], 2),
        # cycles of 6 and 9 through cell 0
        (
            [*path(6), (5, 0), *path(6, 13), (13, 0)],
            3,
        ),
        # cycles of 6 and 10
        (
            [*path(6), (5, 0), *path(6, 14), (14, 0)],
            2,
        ),
    ],
)
def test_period(edges: list[tuple[int, int]], period: int) -> None:
    n = 1 + max(max(edge) for edge in edges)
    tally = chain(n, edges)
    (cells,) = closed_classes(tally).members
    assert period_of(tally, cells) == period


def test_period_of_one_class_among_others() -> None:
    """Cells that lead into a class, and the other class, do not count."""
    tally = chain(7, [*TWO, (5, 6), (6, 5), (6, 0), (5, 2)])
    three, two = closed_classes(tally).members
    assert period_of(tally, two) == 2
    assert period_of(tally, three) == 1


def test_groups_linked_through_one_cell() -> None:
    """Two cycles joined at cell 2 fall apart without it, one of a cycle does into single cells; another link joins."""
    bridge = [(0, 1), (1, 0), (1, 2), (2, 1), (2, 3), (3, 2), (3, 4), (4, 5), (5, 3)]
    mass = np.array([0.1, 0.1, 0.05, 0.2, 0.2, 0.35])
    tally = chain(6, bridge)
    (cells,) = closed_classes(tally).members
    np.testing.assert_allclose(parts_without(tally, cells, mass, 2), [0.75, 0.2])
    np.testing.assert_allclose(parts_without(tally, cells, mass, 0), [0.9])
    np.testing.assert_allclose(parts_without(tally, cells, mass, 5), [0.45, 0.2])
    one_way = chain(6, [*bridge, (0, 5)])
    np.testing.assert_allclose(parts_without(one_way, cells, mass, 2), [0.75, 0.2])
    both_ways = chain(6, [*bridge, (0, 5), (4, 1)])
    np.testing.assert_allclose(parts_without(both_ways, cells, mass, 2), [0.95])


@pytest.mark.parametrize("seed", range(5))
def test_random_graphs_against_reachability(seed: int) -> None:
    """Closed: what each cell reaches is the class itself; by powers of the dense pattern."""
    rng = np.random.default_rng(seed)
    counts = (rng.random((30, 32, 1)) < 0.045) * np.ones(2, dtype=int)
    counts[np.arange(30), rng.integers(0, 30, 30)] = 1
    counts[:, 30:] *= rng.random((30, 2, 1)) < 0.2
    reach = np.eye(32, dtype=bool)
    reach[:30] |= counts.any(axis=2)
    for _ in range(6):
        reach = reach @ reach
    expected = set()
    for i in range(30):
        ahead = np.flatnonzero(reach[i])
        if ahead.max() < 30 and all(reach[j, i] for j in ahead):
            expected.add(tuple(ahead.tolist()))
    assert {tuple(cells) for cells in members(tally_of(counts))} == expected
    assert expected or seed > 0
