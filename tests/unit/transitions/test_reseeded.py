"""One tally from pooled rows of reseeded bursts and from plain ones."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from perdure._kernels.rows import BLOWN, OUTSIDE
from perdure._records import SlotRows
from perdure._spectrum import ClassSolver, closed_classes
from perdure._transitions import Collected, TransitionMatrix, combined, positions
from unit.transitions.support import dense_counts, tally_of

N_REP, N_SUM, N_SLOT = 4, 2, 5
PLAIN_KEYS = np.array([10, 20, 30, 40])
# names of the columns of a dense row: cells, then outside and blown up
BOXES = np.array([10, 20, 25, 30, 35, 40])


def compressed(dense: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rows, column = np.nonzero(dense.any(axis=2))
    pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=len(dense)))]).astype(np.int64)
    return pointer, column, dense[rows, column]


def plain_rows(*, outside: bool = False, n_rep: int = N_REP, seed: int = 1) -> tuple[Collected, np.ndarray]:
    """Rows of the cells `PLAIN_KEYS`, and of the outside state if wanted; counts (n, n + 2, n_rep)."""
    rng = np.random.default_rng(seed)
    n = len(PLAIN_KEYS) + outside
    counts = dense_counts(n, n_rep, 16, rng)
    counts[:, n:] += 1
    if outside:
        # what leaves again is the outside cell itself
        counts[:, n] = 0
    pointer, slot, slot_count = compressed(rng.integers(0, 3, (n, N_SLOT, n_rep)))
    slots = SlotRows(pointer, slot.astype(np.uint16), slot_count.astype(np.uint8), 3, 3)
    sums = rng.standard_normal((n, n_rep, N_SUM))
    return Collected(tally_of(counts), sums, slots, np.arange(n) + 64), counts


class Pooled:
    """Rows with weights in quarters (exact in single precision) among `targets`; and dense, by these names."""

    def __init__(self, keys: list[int], targets: list[int], seed: int = 2) -> None:
        rng = np.random.default_rng(seed)
        self.keys, self.targets = np.array(keys), np.array(targets)
        n = len(keys)
        self.dense = rng.integers(1, 40, (n, len(targets), N_REP)) * (rng.random((n, len(targets), 1)) < 0.7) / 4.0
        self.dense[:, 0] += 0.25
        self.slots = rng.integers(0, 4, (n, N_SLOT, N_REP)) / 2.0
        self.sums = rng.standard_normal((n, N_REP, N_SUM))

    def rows(self) -> Any:
        pointer, column, total = compressed(self.dense)
        slot_pointer, slot, slot_total = compressed(self.slots)
        return SimpleNamespace(
            keys=self.keys,
            pointer=pointer,
            column=self.targets[column],
            total=total.astype(np.float32),
            sums=self.sums,
            weight=self.dense.sum(axis=1),
            slot_pointer=slot_pointer,
            slot=slot.astype(np.uint16),
            slot_total=slot_total.astype(np.float32),
            bursts=np.arange(len(self.keys)) + 1000,
        )


def dense_of(collected: Collected) -> tuple[np.ndarray, np.ndarray]:
    """Weights (n, n + 2, N_REP) and marginals (n, N_SLOT, N_REP); fails if columns of a row do not ascend."""
    tally, slots = collected.tally, collected.slots
    n = tally.n_cell
    out, marginals = np.zeros((n, n + 2, N_REP)), np.zeros((n, N_SLOT, N_REP))
    for i in range(n):
        row, mine = slice(tally.pointer[i], tally.pointer[i + 1]), slice(slots.pointer[i], slots.pointer[i + 1])
        assert (np.diff(tally.column[row]) > 0).all()
        out[i, tally.column[row]] = tally.count[row]
        marginals[i, slots.column[mine]] = slots.count[mine]
    return out, marginals


def all_kept(pool: Any) -> np.ndarray:
    return np.ones(len(pool.keys), dtype=bool)


def test_places_of_the_cells_that_entries_end_in() -> None:
    """-1 where that cell has no row: also before the first and behind the last."""
    pool: Any = SimpleNamespace(keys=np.array([10, 25, OUTSIDE]), column=np.array([5, 10, 24, 25, OUTSIDE, BLOWN]))
    np.testing.assert_array_equal(positions(pool), [-1, 0, -1, 1, 2, -1])


@pytest.mark.parametrize("outside", [False, True])
def test_rows_of_the_pool_replace_plain_ones(outside: bool) -> None:
    """Cells 20, 25, 35 and 40 by the pool, the others by plain bursts, names in the order of the keys; blown up is
    behind all rows, outside is its own cell if there is one."""
    plain, counts = plain_rows(outside=outside)
    pooled = Pooled([20, 25, 35, 40], [20, 25, 35, 40])
    found = combined(plain, PLAIN_KEYS, pooled.rows(), np.ones(4, dtype=bool))
    n = 6 + outside
    np.testing.assert_array_equal(found.keys, BOXES)
    assert found.all.tally.n_cell == n
    np.testing.assert_array_equal(found.reseeded, [False, True, True, False, True, True] + [False] * outside)
    expected = np.zeros((n, n + 2, N_REP))
    kept_plain, kept_pool = [0, 3, 6][: 2 + outside], [1, 2, 4, 5]
    plain_at = [0, 1, 3, 5, 6, n + 1] if not outside else [0, 1, 3, 5, 6, n, n + 1]
    sources = [0, 2, 4][: 2 + outside]
    for row, source in zip(kept_plain, sources, strict=True):
        expected[row, plain_at] = counts[source]
    for row, source in zip(kept_pool, range(4), strict=True):
        expected[row, kept_pool] = pooled.dense[source]
    weights, marginals = dense_of(found.all)
    np.testing.assert_array_equal(weights, expected)
    assert weights[kept_plain, 6].any()
    assert weights[kept_plain, n + 1].any()
    np.testing.assert_allclose(found.all.tally.bursts, expected.sum(axis=1), rtol=1e-14)
    np.testing.assert_array_equal(found.all.sums[kept_plain], plain.sums[sources])
    np.testing.assert_allclose(found.all.sums[kept_pool], pooled.sums, rtol=1e-14)
    np.testing.assert_array_equal(found.all.sent[kept_plain], np.array(sources) + 64)
    np.testing.assert_array_equal(found.all.sent[kept_pool], np.arange(4) + 1000)
    np.testing.assert_array_equal(marginals[kept_pool], pooled.slots)
    for row, source in zip(kept_plain, sources, strict=True):
        mine = slice(plain.slots.pointer[source], plain.slots.pointer[source + 1])
        np.testing.assert_array_equal(marginals[row, plain.slots.column[mine]], plain.slots.count[mine])
        assert marginals[row].sum() == plain.slots.count[mine].sum()
    assert found.strayed == pytest.approx(0.0, abs=1e-15)
    assert found.all.tally.together
    assert (found.all.slots.n_sample, found.all.slots.n_interval) == (3, 3)


@pytest.mark.parametrize("outside", [False, True])
def test_the_outside_state_may_have_a_row_of_the_pool(outside: bool) -> None:
    """It is the last cell, whether plain bursts gave it a row or not, and plain rows lead to it."""
    plain, counts = plain_rows(outside=outside)
    pooled = Pooled([20, 40, OUTSIDE], [20, 40, OUTSIDE])
    found = combined(plain, PLAIN_KEYS, pooled.rows(), np.ones(3, dtype=bool))
    np.testing.assert_array_equal(found.keys, PLAIN_KEYS)
    np.testing.assert_array_equal(found.reseeded, [False, True, False, True, True])
    weights, _ = dense_of(found.all)
    assert weights.shape[:2] == (5, 7)
    for row, source in ((1, 0), (3, 1), (4, 2)):
        np.testing.assert_array_equal(weights[row][[1, 3, 4]], pooled.dense[source])
        assert weights[row].sum() == pooled.dense[source].sum()
    for row in (0, 2):
        np.testing.assert_array_equal(weights[row, :5], counts[row, :5])
        np.testing.assert_array_equal(weights[row, 6], counts[row, -1])
        assert not weights[row, 5].any()


def test_entries_to_rows_not_kept_are_left_out_in_proportion() -> None:
    """And to cells without a row, outside and blown up too; sums and marginals shrink as the weight of their replicate
    does, and what rows not kept held has strayed."""
    plain, counts = plain_rows()
    pooled = Pooled([20, 25, 40, 50], [20, 25, 33, 40, 50, OUTSIDE, BLOWN])
    keep = np.array([True, True, True, False])
    found = combined(plain, PLAIN_KEYS, pooled.rows(), keep)
    np.testing.assert_array_equal(found.keys, [10, 20, 25, 30, 40])
    weights, marginals = dense_of(found.all)
    ends = [0, 1, 3]
    part = pooled.dense[:3][:, ends].sum(axis=1) / pooled.dense[:3].sum(axis=1)
    assert 0.1 < part.min() < part.max() < 1.0
    for row, source in ((1, 0), (2, 1), (4, 2)):
        np.testing.assert_array_equal(weights[row][[1, 2, 4]], pooled.dense[source, ends])
        assert weights[row].sum() == pooled.dense[source, ends].sum()
        np.testing.assert_allclose(found.all.sums[row], pooled.sums[source] * part[source][:, None], rtol=1e-13)
        np.testing.assert_allclose(marginals[row], pooled.slots[source] * part[source], rtol=1e-6)
        # negative control: not as they were
        assert np.abs(found.all.sums[row] - pooled.sums[source]).max() > 0.1
    np.testing.assert_array_equal(weights[0][[0, 1, 3, 4, 5, 6]], counts[0])
    assert found.strayed == pytest.approx(pooled.dense[3].sum() / pooled.dense.sum())


def test_rows_sum_to_their_bursts() -> None:
    """In single precision weights of all sizes would not to 1e-12, if they were added in it (negative control)."""
    plain, _ = plain_rows()
    keys = list(range(100, 400))
    pooled = Pooled(keys, keys)
    pooled.dense *= (
        np.random.default_rng(3).exponential(size=pooled.dense.shape) * 10.0 ** -(np.arange(300) % 7.0)[:, None]
    )
    tally = combined(plain, PLAIN_KEYS, pooled.rows(), np.ones(300, dtype=bool)).all.tally
    row = np.repeat(np.arange(tally.n_cell), np.diff(tally.pointer))
    exact, short = np.zeros(tally.bursts.shape), np.zeros(tally.bursts.shape, dtype=np.float32)
    np.add.at(exact, row, tally.count.astype(float))
    np.add.at(short, row, tally.count)
    np.testing.assert_allclose(tally.bursts, exact, rtol=1e-12)
    with pytest.raises(AssertionError):
        np.testing.assert_allclose(short, exact, rtol=1e-12)
    assert TransitionMatrix(tally).leak()[4:] == pytest.approx(np.zeros(300), abs=1e-12)


def test_plain_rows_may_have_fewer_replicates() -> None:
    """Those that they have not are empty."""
    plain, counts = plain_rows(n_rep=2)
    found = combined(plain, PLAIN_KEYS, Pooled([20], [20]).rows(), np.ones(1, dtype=bool))
    weights, _ = dense_of(found.all)
    np.testing.assert_array_equal(weights[[0, 2, 3]][:, :, :2], counts[[0, 2, 3]])
    assert not weights[[0, 2, 3]][:, :, 2:].any()
    np.testing.assert_array_equal(found.all.sums[[0, 2, 3]][:, :2], plain.sums[[0, 2, 3]])
    assert not found.all.sums[[0, 2, 3]][:, 2:].any()


def test_a_pool_of_which_nothing_is_kept_leaves_plain_rows() -> None:
    plain, counts = plain_rows()
    found = combined(plain, PLAIN_KEYS, Pooled([20, 25], [20, 25]).rows(), np.zeros(2, dtype=bool))
    np.testing.assert_array_equal(found.keys, PLAIN_KEYS)
    np.testing.assert_array_equal(dense_of(found.all)[0], counts)
    assert not found.reseeded.any()
    assert found.strayed == pytest.approx(1.0)


FINE, COARSE = 60, 5


def fluxes(chain: np.ndarray, mass: np.ndarray) -> Any:
    """Expected weights between COARSE cells of FINE states, when a state holds the mass given."""
    cell = np.arange(FINE) * COARSE // FINE
    flux = np.zeros((COARSE, COARSE))
    np.add.at(flux, (cell[:, None], cell[None]), mass[:, None] * chain)
    pooled = Pooled([int(k) for k in PLAIN_KEYS] + [50], [int(k) for k in PLAIN_KEYS] + [50])
    pooled.dense = np.repeat(flux[:, :, None] / N_REP, N_REP, axis=2)
    return pooled.rows()


def test_expected_fluxes_have_the_exact_mass() -> None:
    """However coarse the cells: a combined tally of the fluxes of the long run has its mass. Fluxes from even
    masses in each cell, as plain bursts have them, do not (negative control)."""
    rng = np.random.default_rng(4)
    chain = rng.dirichlet(np.full(FINE, 0.05), FINE) * 0.98 + 0.02 / FINE
    mass = np.linalg.matrix_power(chain, 4000)[0]
    exact = mass.reshape(COARSE, -1).sum(axis=1)
    plain, _ = plain_rows()

    def found(mass: np.ndarray) -> np.ndarray:
        pool = fluxes(chain, mass)
        tally = combined(plain, PLAIN_KEYS, pool, all_kept(pool)).all.tally
        return ClassSolver(TransitionMatrix(tally), np.arange(COARSE)).mass

    # rounding of the fluxes to single precision
    np.testing.assert_allclose(found(mass), exact, rtol=1e-5)
    even = np.full(FINE, 1.0 / FINE)
    with pytest.raises(AssertionError):
        np.testing.assert_allclose(found(even), exact, rtol=2e-2)


def test_counts_and_weights_meet_in_one_chain() -> None:
    """Rows in counts beside rows in weights of a millionth part: each is divided by its own sum. What led to the cell
    with a plain row is left out, so that it is in no closed class."""
    chain = np.random.default_rng(5).dirichlet(np.ones(4), 4)
    counts = np.zeros((4, 6, N_REP), dtype=int)
    counts[:, :4] = np.round(chain * 10**7)[:, :, None].astype(int)
    plain = replace(plain_rows()[0], tally=tally_of(counts))
    pooled = Pooled([10, 30, 40], [10, 20, 30, 40])
    pooled.dense = np.repeat(10.0 * chain[[0, 2, 3]][:, :, None], N_REP, axis=2)
    rows = pooled.rows()
    tally = combined(plain, PLAIN_KEYS, rows, all_kept(rows)).all.tally
    expected = chain.copy()
    expected[[0, 2, 3], 1] = 0.0
    expected /= expected.sum(axis=1, keepdims=True)
    # rounding to whole counts and to single precision
    np.testing.assert_allclose(TransitionMatrix(tally).right(np.eye(4)), expected, atol=1e-6)
    (cells,) = closed_classes(tally).members
    np.testing.assert_array_equal(cells, [0, 2, 3])
