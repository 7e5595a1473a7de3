"""Ways to solve linear systems with I - P on a closed class, one contract.

Each gives `stationary`, `right(rhs)`: (I - P) h = rhs, and `left(rhs)`: y (I - P) = rhs, for rhs (n, k) over the
cells of the class, up to the constant or the multiple of the stationary mass that such systems leave free.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Protocol

import numpy as np
from scipy.sparse import csc_array, csr_array, eye_array
from scipy.sparse.linalg import LinearOperator, gmres, splu

from perdure._records import Floats

__all__ = ["Dense", "Krylov", "LinearSolver", "SparseFactors"]

Product = Callable[[Floats], Floats]
# Relative residual of solves that only feed an error bar, and the Krylov dimension and restarts they may take.
FOR_ERRORS = 1e-4
BLOCK_DIM, BLOCK_CYCLES = 16, 40
# Bytes that the Krylov vectors of a block may take.
BLOCK_BYTES = 6e8
# Residual (1-norm) that the stationary mass is aimed at.
AIM = 1e-13


class LinearSolver(Protocol):
    worst: float

    def stationary(self) -> Floats: ...
    def right(self, rhs: Floats) -> Floats: ...
    def left(self, rhs: Floats) -> Floats: ...


class Dense:
    """LAPACK on P (n, n), with the cell of number `pivot` as the one whose unknown is fixed."""

    def __init__(self, matrix: Floats) -> None:
        self.matrix = matrix
        self.worst = 0.0
        n = len(matrix)
        # I - P + (1/n) ones is regular and commutes with the free constant: its solutions solve both systems
        self.shifted = np.eye(n) - matrix + 1.0 / n
        self.mass = np.linalg.solve(self.shifted.T, np.full(n, 1.0 / n))
        self.mass = refined(self.mass, lambda x: x @ matrix)

    def stationary(self) -> Floats:
        return self.mass

    def right(self, rhs: Floats) -> Floats:
        return np.asarray(np.linalg.solve(self.shifted, rhs))

    def left(self, rhs: Floats) -> Floats:
        return np.asarray(np.linalg.solve(self.shifted.T, rhs))


class SparseFactors:
    """Sparse factors of I - P without the row and column of one cell (the heaviest), whose unknown is zero."""

    def __init__(self, matrix: csr_array, pivot: int) -> None:
        n = matrix.shape[0]
        self.n = n
        self.worst = 0.0
        self.keep = np.delete(np.arange(n), pivot)
        self.factors: Any = splu(csc_array((eye_array(n, format="csr") - matrix)[self.keep][:, self.keep]))
        mass = np.ones(n)
        mass[self.keep] = self.factors.solve(matrix[[pivot]].toarray()[0, self.keep], trans="T")
        transposed = csr_array(matrix.T)
        self.mass = refined(mass, lambda x: transposed @ x)

    def stationary(self) -> Floats:
        return self.mass

    def right(self, rhs: Floats) -> Floats:
        out = np.zeros_like(rhs)
        out[self.keep] = self.factors.solve(np.ascontiguousarray(rhs[self.keep]))
        return out

    def left(self, rhs: Floats) -> Floats:
        out = np.zeros_like(rhs)
        out[self.keep] = self.factors.solve(np.ascontiguousarray(rhs[self.keep]), trans="T")
        return out


class Krylov:
    """GMRES, which minimises the residual over the Krylov space of a positive start vector.

    Trap: an eigen-solver may return another dominant pair in silence; this cannot, since the eigenvalue is fixed
    at 1.

    Attributes
    ----------
    products : int
        Products that the stationary mass took.
    worst : float
        Largest relative residual that a solve for an error bar was left with; `FOR_ERRORS` is aimed at.
    """

    def __init__(self, push: Product, pull: Product, n: int) -> None:
        self.n = n
        self.products = 0
        self.worst = 0.0
        self.push, self.pull = push, pull
        self.mass = self._stationary()

    def stationary(self) -> Floats:
        return self.mass

    def right(self, rhs: Floats) -> Floats:
        return self._block(lambda x: x - self.pull(x), rhs)

    def left(self, rhs: Floats) -> Floats:
        return self._block(lambda x: x - self.push(x), rhs)

    def _block(self, operator: Product, rhs: Floats) -> Floats:
        width = max(1, int(BLOCK_BYTES / (8 * self.n * (BLOCK_DIM + 2))))
        parts = [lockstep_gmres(operator, rhs[:, at : at + width]) for at in range(0, rhs.shape[1], width)]
        x = np.concatenate(parts, axis=1)
        size = np.linalg.norm(rhs, axis=0)
        left = np.linalg.norm(rhs - operator(x), axis=0) / np.where(size > 0.0, size, 1.0)
        for k in np.flatnonzero(left > 10.0 * FOR_ERRORS):
            # the short restarts stalled: once more with long ones
            better = self._solve(operator, rhs[:, k], FOR_ERRORS)
            rest = float(np.linalg.norm(rhs[:, k] - operator(better)) / size[k])
            if rest < left[k]:
                x[:, k], left[k] = better, rest
        self.worst = max(self.worst, float(left.max(initial=0.0)))
        return x

    def _stationary(self) -> Floats:
        mass = np.full(self.n, 1.0 / self.n)
        for _ in range(12):
            mass = self.push(mass)
        for _ in range(6):
            gap = self.push(mass) - mass
            size = float(np.abs(gap).sum())
            if size < AIM:
                break
            mass = self.push(mass + self._solve(lambda x: x - self.push(x), gap, AIM / size))
            mass /= mass.sum()
        return mass

    def _solve(self, operator: Product, rhs: Floats, rtol: float) -> Floats:
        if not np.abs(rhs).max(initial=0.0) > 0.0:
            return np.zeros(self.n)

        def counted(x: Floats) -> Floats:
            self.products += 1
            return operator(x)

        restart = int(np.clip(6e8 / (8 * self.n), 15, 60))
        matrix = LinearOperator((self.n, self.n), matvec=counted, dtype=float)
        x, _ = gmres(matrix, np.ascontiguousarray(rhs), rtol=max(rtol, 1e-13), atol=0.0, restart=restart, maxiter=20)
        return np.asarray(x)


def lockstep_gmres(operator: Product, rhs: Floats) -> Floats:
    """Restarted GMRES on every column of rhs (n, k) at once: one pass over the matrix serves all columns.

    Stops when every column's residual is below `FOR_ERRORS` of its right-hand side, or after `BLOCK_CYCLES` cycles.
    Y. Saad and M. H. Schultz, SIAM J. Sci. Stat. Comput. 7 (1986) 856-869; orthogonalised twice by classical
    Gram-Schmidt.
    """
    n, k = rhs.shape
    x = np.zeros((k, n))
    goal = FOR_ERRORS * np.linalg.norm(rhs, axis=0)
    residual = np.ascontiguousarray(rhs.T)
    basis = np.empty((k, BLOCK_DIM + 1, n))
    for _ in range(BLOCK_CYCLES):
        size = np.linalg.norm(residual, axis=1)
        if np.all(size <= goal):
            break
        basis[:, 0] = residual / np.where(size > 0.0, size, 1.0)[:, None]
        small = np.zeros((k, BLOCK_DIM + 1, BLOCK_DIM))
        for j in range(BLOCK_DIM):
            w = operator(np.ascontiguousarray(basis[:, j].T)).T.copy()
            for _ in range(2):
                part = np.matmul(basis[:, : j + 1], w[:, :, None])
                w -= np.matmul(part.transpose(0, 2, 1), basis[:, : j + 1])[:, 0]
                small[:, : j + 1, j] += part[:, :, 0]
            norm = np.linalg.norm(w, axis=1)
            small[:, j + 1, j] = norm
            basis[:, j + 1] = w / np.where(norm > 0.0, norm, 1.0)[:, None]
        for c in range(k):
            target = np.zeros(BLOCK_DIM + 1)
            target[0] = size[c]
            x[c] += np.linalg.lstsq(small[c], target, rcond=None)[0] @ basis[c, :BLOCK_DIM]
        residual = (rhs - operator(np.ascontiguousarray(x.T))).T.copy()
    return np.asarray(x.T)


def refined(mass: Floats, push: Product) -> Floats:
    """Two products and a normalisation take a direct solution to rounding."""
    for _ in range(2):
        mass = push(mass / mass.sum())
    return np.asarray(mass / mass.sum())
