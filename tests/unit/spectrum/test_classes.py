"""Closed classes and periods of chains made by hand."""

from __future__ import annotations

from collections.abc import Iterable
from itertools import pairwise

import numpy as np
import pytest

from perdure._records import Tally
from perdure._spectrum import closed_classes, lasting, parts_without, period_of
from perdure._spectrum.classes import STRAY
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


def kept(n: int, flows: dict[tuple[int, int], float]) -> list[int]:
    """Rows that `lasting` keeps of n rows with these weights; -1 leads to no row."""
    edges = sorted(flows)
    pointer = np.concatenate([[0], np.cumsum(np.bincount([i for i, _ in edges], minlength=n))]).astype(np.int64)
    found = lasting(pointer, np.array([j for _, j in edges], dtype=np.int64), np.array([flows[e] for e in edges]))
    assert found.shape == (n,)
    return [int(k) for k in np.flatnonzero(found)]


# a regime of three cells that hold 100 in all
REGIME = {(0, 1): 40.0, (1, 2): 40.0, (2, 0): 10.0, (2, 2): 10.0}


def test_all_of_one_regime_lasts() -> None:
    assert kept(3, REGIME) == [0, 1, 2]


@pytest.mark.parametrize(("weight", "lasts"), [(1e-9, False), (0.9, False), (1.1, True), (30.0, True)])
def test_cells_without_a_way_back_need_weight(weight: float, lasts: bool) -> None:
    """A cell that leads to itself alone: dropped below a hundredth of all weight, a regime above it."""
    assert STRAY == 0.01
    assert kept(4, REGIME | {(2, 3): 1e-3, (3, 3): weight}) == ([0, 1, 2, 3] if lasts else [0, 1, 2])


def test_cells_that_have_a_way_back_need_none() -> None:
    """Negative control: however light, a cell of the regime itself stays."""
    assert kept(4, REGIME | {(2, 3): 1e-9, (3, 0): 1e-9}) == [0, 1, 2, 3]


def test_dead_ends_fall_back_along_their_chain() -> None:
    """0 to 2 and back, and 2 -> 3 -> 4 -> 5 -> 6, which leads to no row or sent nothing, or only to what has no weight;
    also where the chain holds most of the weight."""
    chain = {(2, 3): 1.0, (3, 4): 1.0, (4, 5): 1.0, (5, 6): 1.0}
    assert kept(7, REGIME | chain) == [0, 1, 2]
    assert kept(7, REGIME | chain | {(6, -1): 1.0}) == [0, 1, 2]
    assert kept(7, REGIME | chain | {(6, 0): 0.0}) == [0, 1, 2]
    assert kept(7, REGIME | dict.fromkeys(chain, 1e4) | {(6, -1): 1e4}) == [0, 1, 2]
    # negative control: with a way back all of it stays
    assert kept(7, REGIME | chain | {(6, 0): 1e-6}) == list(range(7))


def test_strays_behind_strays() -> None:
    """A light pair without a way back, then the light cell that only led there, then what had led to that."""
    flows = REGIME | {(2, 3): 1e-2, (3, 4): 1e-2, (4, 5): 1e-2, (5, 6): 1e-2, (6, 5): 1e-2, (4, 4): 1e-2}
    assert kept(7, flows) == [0, 1, 2]


def test_two_regimes_both_last() -> None:
    """One of 2 percent beside one of 98, with cells that lead into both; 0.5 percent are not enough."""
    two = {(3, 4): 1.0, (4, 3): 1.0, (5, 0): 0.1, (5, 3): 0.1, (1, 5): 1e-3}
    assert kept(6, REGIME | two) == list(range(6))
    light = two | {(3, 4): 0.25, (4, 3): 0.25}
    assert kept(6, REGIME | light) == [0, 1, 2, 5]


def test_nothing_but_light_sets_is_left_as_it_is() -> None:
    """300 cells that each lead to themselves: none is a regime more than another, and something must be left."""
    assert kept(300, {(i, i): 1.0 for i in range(300)}) == list(range(300))


def test_of_rows_that_only_lead_on_none_lasts() -> None:
    """Nor does a dead end stay because all else is light."""
    assert kept(3, {(0, 1): 1.0, (1, 2): 1.0, (2, -1): 1.0}) == []
    assert kept(2, {(0, -1): 1000.0, (1, 1): 1.0}) == [1]


@pytest.mark.parametrize("part", [0.0, 0.004, 0.01, 0.03, 0.2])
def test_random_rows_come_to_an_end(part: float) -> None:
    """Whatever the graph: what lasts leads on to what lasts; its closed sets have weight, or all of it is light."""
    some = False
    for seed in range(40):
        rng = np.random.default_rng(seed)
        n = int(rng.integers(1, 60))
        used = np.argwhere(rng.random((n, n)) < part)
        flows = {(int(i), int(j)): float(w) for (i, j), w in zip(used, rng.pareto(0.3, len(used)), strict=True)}
        flows |= {(i, -1): 1.0 for i in range(n) if rng.random() < 0.2}
        lasts = kept(n, flows)
        inner = {(i, j) for i, j in flows if i in lasts and j in lasts}
        assert {i for i, _ in inner} == set(lasts)
        closed = [cells for cells in members(chain(n, inner)) if cells[0] in lasts]
        held = [sum(w for (i, _), w in flows.items() if i in cells) for cells in closed]
        heavy = [h >= STRAY * sum(flows.values()) for h in held]
        assert all(heavy) or (not any(heavy) and sum(map(len, closed)) == len(lasts))
        some |= len(lasts) > 0
    assert some == (part > 0.0)
