"""Kernels of reseeded bursts: each against plain numpy or scipy, compiled and as the Python text it is made from."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy.sparse import csr_array
from scipy.stats import chi2

from helpers.statistics import assert_agrees
from perdure._kernels.ensemble import grouped, merge_rows, resample, weigh_rows, weigh_slots, weigh_sums
from perdure._kernels.rows import BLOWN, OUTSIDE

Kernel = Callable[..., Any]
N_REP = 3
# Part of the way to a neighbour that a state may move: as the sampler has it.
BLUR = 2.0**-20


@pytest.fixture(params=["compiled", "python"])
def plainly(request: pytest.FixtureRequest) -> Callable[[Kernel], Kernel]:
    """A kernel as compiled, or the Python function that it was made from."""

    def chosen(kernel: Any) -> Kernel:
        if request.param == "compiled":
            return kernel  # type: ignore[no-any-return]

        def interpreted(*arguments: Any) -> Any:
            # the interpreter warns where the compiled code wraps around (hashes)
            with np.errstate(over="ignore"):
                return getattr(kernel, "py_func", kernel)(*arguments)

        return interpreted

    return chosen


def block(sizes: list[int], seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Offsets of cells of these sizes, and of each burst a weight in quarters (sums are exact) and an owner."""
    rng, first = np.random.default_rng(seed), np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
    return first, rng.integers(1, 9, first[-1]) / 4.0, rng.integers(0, N_REP, first[-1])


def test_rows_of_weights(plainly: Callable[[Kernel], Kernel]) -> None:
    """Columns ascend, each named once; weights are added by owner; a cell without bursts has an empty row."""
    first, weight, owner = block([60, 0, 1, 7, 200], 1)
    key = np.random.default_rng(2).choice(np.array([3, 4, 9, 2**40, OUTSIDE, BLOWN]), first[-1])
    pointer, column, total = np.full(6, -9), np.full(len(key), -9), np.full((len(key), N_REP), -9.0)
    n = plainly(weigh_rows)(key, weight, owner, first, pointer, column, total)
    assert n == pointer[-1]
    for i in range(5):
        mine, row = slice(first[i], first[i + 1]), slice(pointer[i], pointer[i + 1])
        names, at = np.unique(key[mine], return_inverse=True)
        expected = np.zeros((len(names), N_REP))
        np.add.at(expected, (at, owner[mine]), weight[mine])
        np.testing.assert_array_equal(column[row], names)
        np.testing.assert_array_equal(total[row], expected)
    np.testing.assert_array_equal(total[:n].sum(axis=0), np.bincount(owner, weights=weight))


def test_rows_of_marginal_weights(plainly: Callable[[Kernel], Kernel]) -> None:
    """Against a dense count; the board is left at zero; slots of no weight make no entry."""
    first, weight, owner = block([12, 0, 5, 30], 3)
    weight[first[2] : first[3]] = 0.0
    n_sample, n_dim, n_slot = 4, 2, 7
    slots = np.random.default_rng(4).integers(0, n_slot, (n_sample, n_dim, first[-1])).astype(np.uint16)
    expected = np.zeros((4, n_dim * n_slot, N_REP))
    cell = np.repeat(np.arange(4), np.diff(first))
    for k in range(n_dim):
        for s in range(n_sample):
            np.add.at(expected, (cell, k * n_slot + slots[s, k], owner), weight)
    board = np.zeros((n_dim * n_slot, N_REP))
    pointer, column = np.full(5, -9), np.zeros(4 * n_dim * n_slot, dtype=np.uint16)
    total = np.full((len(column), N_REP), -9.0)
    n = plainly(weigh_slots)(slots, weight, owner, first, n_slot, board, pointer, column, total)
    found = np.zeros_like(expected)
    for i in range(4):
        row = slice(pointer[i], pointer[i + 1])
        assert (np.diff(column[row].astype(int)) > 0).all()
        found[i, column[row]] = total[row]
    np.testing.assert_array_equal(found, expected)
    assert n == pointer[-1] == expected.any(axis=2).sum()
    assert not board.any()
    assert pointer[2] == pointer[3]


def test_weighted_sums_are_added(plainly: Callable[[Kernel], Kernel]) -> None:
    """To what stands in the arrays before."""
    first, weight, owner = block([9, 0, 4], 5)
    sums = np.random.default_rng(6).integers(-8, 9, (2, first[-1])).astype(float)
    out, whole = np.full((3, N_REP, 2), 100.0), np.full((3, N_REP), 10.0)
    plainly(weigh_sums)(sums, weight, owner, first, out, whole)
    cell = np.repeat(np.arange(3), np.diff(first))
    expected, expected_whole = np.full((3, N_REP, 2), 100.0), np.full((3, N_REP), 10.0)
    np.add.at(expected, (cell, owner), (weight * sums).T)
    np.add.at(expected_whole, (cell, owner), weight)
    np.testing.assert_array_equal(out, expected)
    np.testing.assert_array_equal(whole, expected_whole)
    assert np.abs(expected - 100.0).max() > 1.0


def random_rows(
    n: int, n_column: int, part: float, rng: np.random.Generator, dtype: Any
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Rows in which a part of the columns stand, as pointer, column and total, and dense (n, n_column, N_REP)."""
    used = rng.random((n, n_column)) < part * rng.integers(0, 2, (n, 1))
    dense = used[:, :, None] * rng.integers(0, 100, (n, n_column, N_REP))
    row, column = np.nonzero(used)
    pointer = np.concatenate([[0], np.cumsum(np.bincount(row, minlength=n))]).astype(np.int64)
    return pointer, column.astype(dtype), dense[row, column].astype(np.float32), dense


@pytest.mark.parametrize("dtype", [np.int64, np.uint16])
@pytest.mark.parametrize("parts", [(0.5, 0.5), (0.1, 0.9), (0.0, 0.4), (0.4, 0.0), (0.0, 0.0), (1.0, 1.0)])
def test_merged_rows_are_sums_of_sparse_matrices(
    plainly: Callable[[Kernel], Kernel], parts: tuple[float, float], dtype: Any
) -> None:
    """Random patterns, with about half of all rows empty; a part of 0 empties one side."""
    n, n_column, rng = 23, 11, np.random.default_rng(7)
    *one, _ = random_rows(n, n_column, parts[0], rng, dtype)
    *two, _ = random_rows(n, n_column, parts[1], rng, dtype)
    size = len(one[1]) + len(two[1])
    pointer, column, total = np.full(n + 1, -9), np.zeros(size, dtype=dtype), np.zeros((size, N_REP), dtype=np.float32)
    found = plainly(merge_rows)(*one, *two, pointer, column, total)
    assert found == pointer[-1]
    for i in range(n):
        assert (np.diff(column[pointer[i] : pointer[i + 1]].astype(int)) > 0).all()
    for r in range(N_REP):
        parts_of = [csr_array((t[:, r], c.astype(int), p), shape=(n, n_column)) for p, c, t in (one, two)]
        whole = csr_array((total[:found, r], column[:found].astype(int), pointer), shape=(n, n_column))
        np.testing.assert_array_equal(whole.toarray(), (parts_of[0] + parts_of[1]).toarray())
    # what both name stands once
    pattern = sum(csr_array((np.ones(len(c)), c.astype(int), p), shape=(n, n_column)) for p, c, _ in (one, two))
    assert found == pattern.nnz
    assert found < size or min(parts) == 0.0


@pytest.mark.parametrize(("n", "n_group"), [(0, 3), (1, 1), (200, 7), (50, 400)])
def test_grouping_is_a_stable_sort(plainly: Callable[[Kernel], Kernel], n: int, n_group: int) -> None:
    group = np.random.default_rng(8).integers(0, n_group, n)
    first, order = np.full(n_group + 1, -9), np.full(n, -9)
    plainly(grouped)(group, first, order)
    np.testing.assert_array_equal(order, np.argsort(group, kind="stable"))
    np.testing.assert_array_equal(np.diff(first), np.bincount(group, minlength=n_group))
    assert first[0] == 0


class Groups:
    """States, weights and order of groups of these sizes, which are resampled to `number` states each."""

    def __init__(self, sizes: list[int], number: list[int], seed: int, n_dim: int = 2) -> None:
        rng = np.random.default_rng(seed)
        self.first = np.concatenate([[0], np.cumsum(sizes)]).astype(np.int64)
        self.out_first = np.concatenate([[0], np.cumsum(number)]).astype(np.int64)
        n = int(self.first[-1])
        self.order = rng.permutation(n).astype(np.int64)
        self.state, self.weight = rng.uniform(0.5, 2.0, (n_dim, n)), rng.exponential(size=n) + 0.01
        self.word = rng.integers(0, 2**64, len(sizes), dtype=np.uint64)
        self.centre = np.nan

    def resampled(self, kernel: Kernel = resample, blur: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
        """States and weights that come out."""
        n = int(self.out_first[-1])
        state, weight = np.full((len(self.state), n), np.nan), np.full(n, np.nan)
        source = np.full(n, -1)
        centre = np.full((len(self.state), len(self.first) - 1), self.centre)
        arguments = self.word, blur, 1, centre, self.out_first
        kernel(self.state, self.weight, self.order, self.first, *arguments, state, weight, source)
        assert np.abs(state - self.state[:, source]).max(initial=0.0) <= 10.0 * blur
        return state, weight

    def before(self, g: int) -> np.ndarray:
        """Numbers of the states of a group."""
        return self.order[self.first[g] : self.first[g + 1]]

    def after(self, g: int) -> slice:
        return slice(self.out_first[g], self.out_first[g + 1])


SIZES, NUMBER = [5, 40, 0, 1, 1, 12, 3], [9, 11, 0, 1, 6, 12, 1]


@pytest.mark.parametrize("blur", [0.0, BLUR, 0.3])
def test_groups_keep_their_weight(plainly: Callable[[Kernel], Kernel], blur: float) -> None:
    """As many states as asked for; a group of as many as before keeps the weight of each."""
    groups = Groups(SIZES, NUMBER, 9)
    state, weight = groups.resampled(plainly(resample), blur)
    assert np.isfinite(state).all()
    for g, n in enumerate(NUMBER):
        mine = weight[groups.after(g)]
        assert len(mine) == n
        np.testing.assert_allclose(mine.sum(), groups.weight[groups.before(g)].sum(), rtol=1e-14)
        if n == SIZES[g]:
            np.testing.assert_array_equal(mine, groups.weight[groups.before(g)])
        else:
            np.testing.assert_array_equal(mine, np.full(n, mine[0] if n else 0.0))


def test_states_are_copies_from_their_own_group(plainly: Callable[[Kernel], Kernel]) -> None:
    """In the order of the group, each as often as its part of the weight, rounded down or up."""
    groups = Groups(SIZES, NUMBER, 10)
    state, _ = groups.resampled(plainly(resample))
    for g, n in enumerate(NUMBER):
        own, mine = groups.state[:, groups.before(g)], state[:, groups.after(g)]
        source = [int(np.flatnonzero((own == point[:, None]).all(axis=0))[0]) for point in mine.T]
        assert source == sorted(source)
        if n == SIZES[g]:
            assert source == list(range(n))
        part = groups.weight[groups.before(g)]
        copies = np.bincount(source, minlength=len(part)) if n != SIZES[g] else n * part / part.sum()
        assert (np.abs(copies - n * part / max(part.sum(), 1e-300)) < 1.0).all()


def test_words_choose_the_states() -> None:
    """Same words, same states; other words, others."""
    groups = Groups(SIZES, NUMBER, 11)
    state, _ = groups.resampled()
    np.testing.assert_array_equal(groups.resampled()[0], state)
    groups.word = groups.word ^ np.uint64(1)
    assert not np.array_equal(groups.resampled()[0], state)


@pytest.mark.parametrize("number", [1, 3, 6, 8, 20])
@pytest.mark.parametrize("blur", [0.0, BLUR])
def test_resampling_is_unbiased(number: int, blur: float) -> None:
    """The weighted sum of a function, over 20 000 words; not without the weights (negative control)."""
    n_word, n = 20_000, 7
    groups = Groups([n] * n_word, [number] * n_word, 12, n_dim=1)
    value, part = np.array([0.3, 1.0, 1.2, 1.9, 0.7, 1.5, 0.1]), np.array([0.1, 3.0, 0.5, 0.02, 2.0, 0.7, 1.3])
    groups.order = np.arange(n * n_word)
    groups.state, groups.weight = np.tile(value, n_word)[None], np.tile(part, n_word)

    def estimate() -> tuple[float, float]:
        """Mean and its standard error over the words."""
        state, weight = groups.resampled(resample, blur)
        sums = (weight * state[0] ** 2).reshape(n_word, number).sum(axis=1)
        return float(sums.mean()), float(sums.std(ddof=1) / np.sqrt(n_word))

    exact = float(part @ value**2)
    # a blur moves a state by a millionth at most
    spare = 4.0 * part.sum() * blur
    assert_agrees(*estimate()[:1], exact, estimate()[1], allowance=spare)
    groups.weight = np.full(n * n_word, part.sum() / n)
    with pytest.raises(AssertionError):
        assert_agrees(*estimate()[:1], exact, estimate()[1], allowance=spare)


def test_blur_stays_between_the_states_of_a_group(plainly: Callable[[Kernel], Kernel]) -> None:
    """Every state moves, towards another of its own group, by up to the blur's part of the way."""
    blur = 0.3
    groups = Groups([6, 25, 9], [6, 10, 40], 13)
    state, _ = groups.resampled(plainly(resample), blur)
    plain, _ = groups.resampled(plainly(resample), 0.0)
    moved = state - plain
    assert (moved != 0.0).all()
    for g in range(3):
        own, mine = groups.state[:, groups.before(g)], groups.after(g)
        assert (state[:, mine] >= own.min(axis=1)[:, None]).all()
        assert (state[:, mine] <= own.max(axis=1)[:, None]).all()
        # the way to some other state, component by component: a part in [0, blur) of each
        way = own[:, None, :] - plain[:, mine][:, :, None]
        with np.errstate(divide="ignore", invalid="ignore"):
            part = moved[:, mine][:, :, None] / way
        towards = ((part >= 0.0) & (part < blur * (1.0 + 1e-12))).all(axis=0)
        assert towards.any(axis=1).all()
        # negative control: states of another group are no such neighbours
        other = groups.state[:, groups.before((g + 1) % 3)] + 5.0
        assert (other.min(axis=1) > own.max(axis=1)).all()


def test_a_state_alone_moves_towards_the_centre(plainly: Callable[[Kernel], Kernel]) -> None:
    """By an even part of the blur; where there is no centre it stays."""
    groups = Groups([1] * 300, [1] * 300, 14)
    before = groups.state[:, groups.order]
    np.testing.assert_array_equal(groups.resampled(plainly(resample), BLUR)[0], before)
    groups.centre = 7.0
    state, weight = groups.resampled(plainly(resample), BLUR)
    np.testing.assert_array_equal(weight, groups.weight[groups.order])
    part = ((state - before) / (BLUR * (7.0 - before))).ravel()
    spare = 1e-8  # rounding of the state
    assert part.min() >= -spare
    assert part.max() <= 1.0 + spare
    assert_agrees(part.mean(), 0.5, np.sqrt(1 / 12 / len(part)), allowance=spare)
    assert_agrees(part.std(), np.sqrt(1 / 12), np.sqrt(1 / 60 / len(part)), allowance=spare)
    with pytest.raises(AssertionError):
        assert_agrees((part / 2.0).mean(), 0.5, np.sqrt(1 / 12 / len(part)), allowance=spare)


def test_neighbours_are_those_of_all_groups_of_the_cell() -> None:
    """Two groups of one state each make a cell of span 2: each moves towards the other, not to the centre."""
    state, weight, source = np.empty((1, 2)), np.empty(2), np.empty(2, dtype=np.int64)
    first, order, centre = np.array([0, 1, 2]), np.array([0, 1]), np.array([[100.0]])
    word = np.array([3, 4], dtype=np.uint64)
    resample(np.array([[1.0, 2.0]]), np.ones(2), order, first, word, 0.5, 2, centre, first, state, weight, source)
    assert 1.0 < state[0, 0] < 1.5
    assert 1.5 < state[0, 1] < 2.0
    assert source.tolist() == [0, 1]


def doubled(x: np.ndarray) -> np.ndarray:
    """Eight steps of the doubling map."""
    for _ in range(8):
        x = np.mod(2.0 * x, 1.0)
    return x


def chance_of(states: list[np.ndarray]) -> float:
    """Chance of a chi-squared as large if the states are uniform in (0, 1), by 32 intervals.

    Sweeps count as independent: correlations fall by 2**-8 from one to the next.
    """
    count = np.bincount((32 * np.concatenate(states)).astype(int), minlength=32)
    even = count.sum() / 32
    return float(chi2.sf(((count - even) ** 2 / even).sum(), 31))


def sweeps_of_doubling(n_cell: int, blur: float) -> list[np.ndarray]:
    """600 states after each of 100 sweeps; cells of equal width, each a group of as many states as arrived."""
    rng, states = np.random.default_rng(15), []
    x = rng.random(600)
    for _ in range(100):
        x = doubled(x)
        first, order = np.empty(n_cell + 1, dtype=np.int64), np.empty(len(x), dtype=np.int64)
        grouped((n_cell * x).astype(np.int64), first, order)
        out, weight = np.empty((1, len(x))), np.empty(len(x))
        word = rng.integers(0, 2**64, n_cell, dtype=np.uint64)
        centre, source = (np.arange(n_cell)[None] + 0.5) / n_cell, np.empty(len(x), dtype=np.int64)
        resample(x[None], np.ones(len(x)), order, first, word, blur, 1, centre, first, out, weight, source)
        x = out[0]
        states.append(x)
    return states


@pytest.mark.parametrize("n_cell", [8, 4096])
def test_a_map_that_drops_bits_keeps_its_law(n_cell: int) -> None:
    """In cells of 75 states, and of mostly one: uniform early and late, no two states alike."""
    states = sweeps_of_doubling(n_cell, BLUR)
    assert chance_of(states[:50]) > 1e-6
    assert chance_of(states[50:]) > 1e-6
    assert len(np.unique(states[-1])) == 600


def test_without_blur_a_map_that_drops_bits_ends_at_zero() -> None:
    """Negative control: after 7 sweeps all 53 bits are gone."""
    states = sweeps_of_doubling(8, 0.0)
    assert not np.concatenate(states[7:]).any()
    assert chance_of(states[:6]) > 1e-6
    assert chance_of(states) < 1e-6
