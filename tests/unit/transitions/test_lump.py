"""Coarser cells from the same bursts."""

from __future__ import annotations

import numpy as np
import pytest

from perdure._records import BoxGrid, Tally
from perdure._spectrum import ClassSolver
from perdure._transitions import TransitionMatrix, lumped
from unit.transitions.support import tally_of

GRID = BoxGrid(np.array([0.0]), np.array([0.25]), np.array([8]), np.array([False]))
KEYS = np.arange(8)


def counts_of(n: int, seed: int) -> np.ndarray:
    """Counts (n, n + 2, 2) of a chain on n cells with 12 bursts a cell; columns: cells, outside, blown up."""
    rng = np.random.default_rng(seed)
    counts = np.zeros((n, n + 2, 2), dtype=int)
    for i in range(n):
        for r in range(2):
            counts[i, :n, r] = rng.multinomial(6, rng.dirichlet(np.ones(n)))
    return counts


def test_rows_are_averaged_and_columns_summed() -> None:
    counts = counts_of(8, 1)
    coarse = lumped(tally_of(counts), KEYS, GRID, KEYS, 2)
    fine = counts.sum(axis=2)[:, :8]
    expected = fine.reshape(4, 2, 4, 2).sum(axis=(1, 3)) / 24.0
    np.testing.assert_allclose(TransitionMatrix(coarse.tally).right(np.eye(4)), expected, rtol=1e-14)
    np.testing.assert_array_equal(coarse.block, [0, 0, 1, 1, 2, 2, 3, 3])
    with pytest.raises(AssertionError):
        np.testing.assert_allclose(TransitionMatrix(coarse.tally).right(np.eye(4)), expected.T, rtol=1e-14)


def test_lifted_mass_is_shared_out_evenly() -> None:
    coarse = lumped(tally_of(counts_of(8, 2)), KEYS, GRID, KEYS, 4)
    np.testing.assert_allclose(coarse.lifted(np.array([0.6, 0.4])), [0.15] * 4 + [0.1] * 4)


def test_blocks_may_hold_fewer_cells() -> None:
    """Occupied cells only: members 0, 1 and 4 of eight boxes give two blocks; their chain stays closed."""
    counts = np.zeros((8, 10, 2), dtype=int)
    for i, j in ((0, 1), (1, 4), (4, 0), (2, 2), (3, 3), (5, 5), (6, 6), (7, 7)):
        counts[i, j] = 3
    members = np.array([0, 1, 4])
    coarse = lumped(tally_of(counts), members, GRID, KEYS, 2)
    np.testing.assert_array_equal(coarse.block, [0, 0, 1])
    mass = ClassSolver(TransitionMatrix(coarse.tally), np.arange(2)).mass
    np.testing.assert_allclose(mass, [2 / 3, 1 / 3], rtol=1e-12)
    np.testing.assert_allclose(coarse.lifted(mass), [1 / 3] * 3, rtol=1e-12)


def test_the_outside_state_is_a_block_of_its_own() -> None:
    counts = np.zeros((9, 11, 2), dtype=int)
    for i in range(9):
        counts[i, (i + 1) % 9] = 2
    coarse = lumped(tally_of(counts), np.arange(9), GRID, KEYS, 2)
    np.testing.assert_array_equal(coarse.block, [0, 0, 1, 1, 2, 2, 3, 3, 4])


def weighted(weight: np.ndarray) -> Tally:
    """Tally of weights (n, n + 2, n_replicate), as reseeded bursts leave it."""
    rows, column = np.nonzero(weight.any(axis=2))
    pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=len(weight)))])
    count = weight[rows, column].astype(np.float32)
    bursts = np.stack([np.bincount(rows, weights=part, minlength=len(weight)) for part in count.T], axis=1)
    return Tally(pointer, column.astype(np.int32), count, bursts, together=True)


@pytest.mark.parametrize("members", [KEYS, np.array([0, 1, 4, 6, 7])])
def test_members_share_by_the_weight_that_they_sent(members: np.ndarray) -> None:
    """Not evenly (negative control); the shares of a block sum to one."""
    rng = np.random.default_rng(3)
    weight = np.zeros((8, 10, 3))
    weight[:, members] = rng.exponential(size=(8, len(members), 3)) * 10.0 ** rng.integers(-3, 3, (8, 1, 1))
    coarse = lumped(weighted(weight), members, GRID, KEYS, 4)
    sent = weight.sum(axis=(1, 2))[members]
    block = members // 4
    share = sent / np.bincount(block, weights=sent)[block]
    np.testing.assert_array_equal(coarse.block, block)
    np.testing.assert_allclose(coarse.share, share, rtol=1e-6)
    np.testing.assert_allclose(np.bincount(block, weights=coarse.share), [1.0, 1.0], rtol=1e-14)
    np.testing.assert_allclose(coarse.lifted(np.array([0.7, 0.3])), np.array([0.7, 0.3])[block] * share, rtol=1e-6)
    assert np.abs(coarse.share - 1.0 / np.bincount(block)[block]).max() > 0.1


def test_blocks_of_fluxes_have_the_mass_of_their_members() -> None:
    """Rows weighted by the stationary mass: the chain of blocks has the mass of the blocks and gives back that of the
    members, whatever the blocks; with rows of even weight it has not (negative control)."""
    chain = np.random.default_rng(4).dirichlet(np.full(8, 0.4), 8)
    exact = np.linalg.matrix_power(chain, 2000)[0]
    weight = np.zeros((8, 10, 1))
    weight[:, :8, 0] = exact[:, None] * chain

    def lifted(weight: np.ndarray) -> np.ndarray:
        coarse = lumped(weighted(weight), KEYS, GRID, KEYS, 4)
        return coarse.lifted(ClassSolver(TransitionMatrix(coarse.tally), np.arange(2)).mass)

    # rounding to single precision
    np.testing.assert_allclose(lifted(weight), exact, rtol=1e-5)
    with pytest.raises(AssertionError):
        np.testing.assert_allclose(lifted(weight / exact[:, None, None]), exact, rtol=1e-2)
