"""Where starts end: the probability of each closed class from every cell."""

from __future__ import annotations

import numpy as np
from scipy.sparse.linalg import LinearOperator, gmres

from perdure._records import Floats, Integers, Transition

__all__ = ["absorption", "visits"]


def absorption(transition: Transition, members: tuple[Integers, ...]) -> Floats:
    """Probability, shape (n_cell, n_class), of ending in each closed class from each cell.

    Rows sum to one less the probability of ending outside. On the transient cells it solves
    (I - P) b = P 1_class (J. G. Kemeny and J. L. Snell, Finite Markov Chains, 1960, theorem 3.3.7).
    """
    n = transition.n_cell
    if not members:
        return np.zeros((n, 0))
    target = np.zeros((n, len(members)))
    for k, cells in enumerate(members):
        target[cells, k] = 1.0
    transient = 1.0 - target.sum(axis=1)
    if not transient.any():
        return target
    push = transition.right(target) * transient[:, None]

    def operator(x: Floats) -> Floats:
        x = x * transient
        return np.asarray(x - transient * transition.right(x))

    matrix = LinearOperator((n, n), matvec=lambda x: operator(x) + (1.0 - transient) * x, dtype=float)
    columns = [gmres(matrix, column, rtol=1e-10, atol=0.0, restart=50, maxiter=40)[0] for column in push.T]
    return np.asarray(np.clip(np.stack(columns, axis=1) * transient[:, None] + target, 0.0, 1.0))


def visits(transition: Transition, members: tuple[Integers, ...], start: Floats) -> Floats:
    """Mean number of bursts sent from each transient cell before absorption, shape (n_cell,).

    Starts have law `start` (n_cell,), sum one. Solves v (I - P) = start on the transient cells.
    """
    transient = np.ones(transition.n_cell)
    for cells in members:
        transient[cells] = 0.0
    rhs = start * transient
    if not rhs.any():
        return np.zeros_like(rhs)

    def operator(x: Floats) -> Floats:
        return x - transient * transition.left(x * transient)

    n = transition.n_cell
    matrix = LinearOperator((n, n), matvec=operator, dtype=float)
    return np.asarray(gmres(matrix, rhs, rtol=1e-8, atol=0.0, restart=50, maxiter=40)[0] * transient)
