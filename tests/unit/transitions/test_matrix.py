"""The transition matrix against its dense form."""

from __future__ import annotations

import numpy as np
import pytest

from perdure._records import SlotRows, Tally
from perdure._transitions import TransitionMatrix, scattered_slots
from unit.transitions.support import dense_counts, tally_of

N, N_REP = 17, 4


@pytest.fixture(scope="module")
def counts() -> np.ndarray:
    return dense_counts(N, N_REP, 60, np.random.default_rng(1))


@pytest.fixture(scope="module")
def matrix(counts: np.ndarray) -> TransitionMatrix:
    return TransitionMatrix(tally_of(counts))


@pytest.fixture(scope="module")
def dense(counts: np.ndarray) -> np.ndarray:
    total = counts.sum(axis=2)
    return np.asarray(total[:, :N] / total.sum(axis=1, keepdims=True))


def test_products_are_those_of_the_dense_matrix(matrix: TransitionMatrix, dense: np.ndarray) -> None:
    """For one vector and for several; the shape comes back."""
    rng = np.random.default_rng(2)
    for shape in ((N,), (N, 1), (N, 3)):
        x = rng.standard_normal(shape)
        np.testing.assert_allclose(matrix.right(x), dense @ x, rtol=1e-13, atol=1e-14)
        np.testing.assert_allclose(matrix.left(x), dense.T @ x, rtol=1e-13, atol=1e-14)
        assert matrix.right(x).shape == matrix.left(x).shape == shape


def test_rows_sum_to_one_less_the_leak(matrix: TransitionMatrix, counts: np.ndarray) -> None:
    lost = counts[:, N:].sum(axis=(1, 2)) / counts.sum(axis=(1, 2))
    assert lost.max() > 0.0
    np.testing.assert_allclose(matrix.leak(), lost, atol=1e-15)


def test_replicates(matrix: TransitionMatrix, counts: np.ndarray, dense: np.ndarray) -> None:
    """Sums over the bursts of each replicate; all together, over the bursts of the cell, are the row of the matrix."""
    x = np.random.default_rng(3).standard_normal((N, 2))
    found = matrix.replicate_sums(x, 4, 11)
    expected = np.einsum("ijr,jk->irk", counts[4:11, :N], x)
    np.testing.assert_allclose(found, expected, rtol=1e-13, atol=1e-12)
    whole = counts[4:11].sum(axis=(1, 2))[:, None]
    np.testing.assert_allclose(found.sum(axis=1) / whole, (dense @ x)[4:11], rtol=1e-13, atol=1e-14)
    # negative control: they are not means
    means = expected / counts[4:11].sum(axis=1)[:, :, None]
    assert np.abs(found - means).max() > 1.0


def test_weights_in_place_of_counts(counts: np.ndarray) -> None:
    """Single precision, replicates of uneven weight: what stays and what leaks sum to one in double precision."""
    rng = np.random.default_rng(5)
    weight = (counts * rng.exponential(size=(N, 1, N_REP)) * 10.0 ** rng.integers(-9, 3, (N, 1, 1))).astype(np.float32)
    plain = tally_of(counts)
    row = np.repeat(np.arange(N), np.diff(plain.pointer))
    bursts = weight.sum(axis=1, dtype=float)
    tally = Tally(plain.pointer, plain.column, weight[row, plain.column], bursts, together=True)
    matrix, x = TransitionMatrix(tally), rng.standard_normal((N, 2))
    whole = weight.sum(axis=2, dtype=float) / bursts.sum(axis=1)[:, None]
    np.testing.assert_allclose(matrix.right(x), whole[:, :N] @ x, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(matrix.left(x), whole[:, :N].T @ x, rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(matrix.leak(), whole[:, N:].sum(axis=1), rtol=1e-11, atol=1e-13)
    found = matrix.replicate_sums(x, 0, N)
    np.testing.assert_allclose(found, np.einsum("ijr,jk->irk", weight[:, :N].astype(float), x), rtol=1e-12, atol=1e-12)
    # negative control: uneven replicates, so that the row is not the mean of their rows
    means = np.einsum("ijr,jk->irk", weight[:, :N] / bursts[:, None, :], x).mean(axis=1)
    assert np.abs(means - matrix.right(x)).max() > 1e-2


def test_scatter(matrix: TransitionMatrix, counts: np.ndarray) -> None:
    weight = np.random.default_rng(4).standard_normal((5, N_REP, 2))
    out = np.zeros((N + 2, 2))
    matrix.scatter(weight, 9, out)
    np.testing.assert_allclose(out, np.einsum("ijr,irk->jk", counts[9:14], weight), rtol=1e-13, atol=1e-12)


def test_scattered_slots() -> None:
    pointer, column = np.array([0, 2, 3]), np.array([1, 4, 1], dtype=np.uint16)
    count = np.array([[1, 2], [3, 0], [5, 6]], dtype=np.uint8)
    out = np.ones((5, 1))
    scattered_slots(SlotRows(pointer, column, count, 1, 3), np.array([[[10.0], [1.0]]]), 1, out)
    np.testing.assert_array_equal(out[:, 0], [1.0, 57.0, 1.0, 1.0, 1.0])


def test_counts_beyond_a_byte() -> None:
    """Sums over replicates may need a wider type than the counts of one."""
    counts = np.zeros((2, 4, 4), dtype=int)
    counts[0, 0], counts[0, 1], counts[1, 1] = 200, 55, 255
    matrix = TransitionMatrix(tally_of(counts))
    np.testing.assert_allclose(matrix.right(np.array([1.0, 0.0])), [800 / 1020, 0.0])
