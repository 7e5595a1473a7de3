"""Products straight from the counts, against scipy's sparse and numpy's dense ones."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy.sparse import csr_array

from perdure._kernels.products import (
    left_product,
    replicate_product,
    right_product,
    scatter_product,
    total_counts,
)

N, N_REP, K = 23, 4, 3


class Chain:
    """Random counts with an empty row, rows that end outside, and their dense form."""

    def __init__(self) -> None:
        rng = np.random.default_rng(1)
        self.dense = rng.integers(0, 40, (N, N + 2, N_REP)) * (rng.random((N, N + 2, 1)) < 0.3)
        self.dense[7] = 0
        rows, column = np.nonzero(self.dense.any(axis=2))
        self.column = column.astype(np.int32)
        self.count = self.dense[rows, column].astype(np.uint8)
        self.pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=N))]).astype(np.int64)
        self.total = self.count.sum(axis=1).astype(np.uint16)
        self.inverse = 1.0 / np.maximum(self.dense.sum(axis=(1, 2)), 1)
        self.matrix = csr_array((self.total * self.inverse[rows], (rows, column)), shape=(N, N + 2))
        self.x = rng.standard_normal((N + 2, K))


@pytest.fixture(scope="module")
def chain() -> Chain:
    return Chain()


@pytest.fixture(params=["compiled", "python"])
def plainly(request: pytest.FixtureRequest) -> Callable[[Any], Any]:
    return lambda kernel: kernel if request.param == "compiled" else kernel.py_func


def test_total_counts(chain: Chain, plainly: Callable[[Any], Any]) -> None:
    out = np.zeros_like(chain.total)
    plainly(total_counts)(chain.count, out)
    np.testing.assert_array_equal(out, chain.total)


def test_right_product(chain: Chain, plainly: Callable[[Any], Any]) -> None:
    """Only the rows asked for are written."""
    y = np.full((N, K), 9.0)
    plainly(right_product)(chain.pointer, chain.column, chain.total, chain.inverse, chain.x, 5, 20, y)
    np.testing.assert_allclose(y[5:20], (chain.matrix @ chain.x)[5:20], rtol=1e-13, atol=1e-14)
    assert (y[:5] == 9.0).all()
    assert (y[20:] == 9.0).all()
    assert (y[7] == 0.0).all(), "an empty row gives zero"


def test_left_product(chain: Chain, plainly: Callable[[Any], Any]) -> None:
    """Rows of zeros are passed over; a not-a-number is not."""
    x = chain.x[:N].copy()
    x[3] = 0.0
    y = np.full((N + 2, K), 9.0)
    plainly(left_product)(chain.pointer, chain.column, chain.total, chain.inverse, x, y)
    np.testing.assert_allclose(y, chain.matrix.T @ x, rtol=1e-13, atol=1e-14)
    x[4, 0] = np.nan
    plainly(left_product)(chain.pointer, chain.column, chain.total, chain.inverse, x, y)
    reached = np.isnan(y[:, 0])
    np.testing.assert_array_equal(np.flatnonzero(reached), chain.column[chain.pointer[4] : chain.pointer[5]])


def test_replicate_product(chain: Chain, plainly: Callable[[Any], Any]) -> None:
    y = np.full((9, N_REP, K), 9.0)
    plainly(replicate_product)(chain.pointer, chain.column, chain.count, chain.x, 4, 13, y)
    np.testing.assert_allclose(y, np.einsum("ijr,jk->irk", chain.dense[4:13], chain.x), rtol=1e-13, atol=1e-11)


def test_scatter_product_adds(chain: Chain, plainly: Callable[[Any], Any]) -> None:
    weight = np.random.default_rng(2).standard_normal((9, N_REP, K))
    y = np.ones((N + 2, K))
    plainly(scatter_product)(chain.pointer, chain.column, chain.count, weight, 4, 13, y)
    expected = 1.0 + np.einsum("ijr,irk->jk", chain.dense[4:13], weight)
    np.testing.assert_allclose(y, expected, rtol=1e-13, atol=1e-11)


def test_products_notice_a_transposed_matrix(chain: Chain) -> None:
    """Negative control."""
    y = np.empty((N, K))
    right_product(chain.pointer, chain.column, chain.total, chain.inverse, chain.x, 0, N, y)
    assert np.abs(y - chain.matrix[:, :N].T @ chain.x[:N]).max() > 0.1
