"""Where starts end: the probability of each closed class from every cell."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csc_array, csr_array, eye_array
from scipy.sparse.linalg import LinearOperator, gmres, splu

from perdure._records import Floats, Integers, Transition
from perdure._spectrum.solves import FACTOR_MOST
from perdure.errors import NotConvergedError

__all__ = ["absorption", "visits"]


def absorption(transition: Transition, members: tuple[Integers, ...]) -> Floats:
    """Probability, shape (n_cell, n_class), of ending in each closed class from each cell.

    Rows sum to one less the probability of ending outside. On the transient cells it solves
    (I - P) b = P 1_class (J. G. Kemeny and J. L. Snell, Finite Markov Chains, 1960, theorem 3.3.7).

    Raises
    ------
    NotConvergedError
        Neither iteration nor factors solve the system.
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
    found = solved(transition, transient, push, 1e-10, transposed=False)
    return np.asarray(np.clip(found * transient[:, None] + target, 0.0, 1.0))


def visits(transition: Transition, members: tuple[Integers, ...], start: Floats) -> Floats:
    """Mean number of bursts sent from each transient cell before absorption, shape (n_cell,).

    Starts have law `start` (n_cell,), sum one. Solves v (I - P) = start on the transient cells.

    Raises
    ------
    NotConvergedError
        As `absorption`.
    """
    transient = np.ones(transition.n_cell)
    for cells in members:
        transient[cells] = 0.0
    rhs = start * transient
    return solved(transition, transient, rhs[:, None], 1e-8, transposed=True)[:, 0] * transient


def solved(transition: Transition, transient: Floats, rhs: Floats, rtol: float, *, transposed: bool) -> Floats:
    """Solution x of (I - P) x = rhs, or of x (I - P) = rhs, on the transient cells; rhs and x (n_cell, k).

    GMRES; where it stalls, because bursts move little, factors, which fill little there.
    """
    product = transition.left if transposed else transition.right
    matrix = LinearOperator(
        (transition.n_cell, transition.n_cell),
        matvec=lambda x: x - transient * product(x * transient),
        dtype=float,
    )
    columns = []
    for column in rhs.T:
        x, status = gmres(matrix, column, rtol=rtol, atol=0.0, restart=50, maxiter=40)
        if status != 0:
            return factored(transition, transient, rhs, transposed=transposed)
        columns.append(x)
    return np.stack(columns, axis=1)


def factored(transition: Transition, transient: Floats, rhs: Floats, *, transposed: bool) -> Floats:
    """`solved` by sparse factors of I - P on the transient cells."""
    tally, n = transition.tally, transition.n_cell
    cells = np.flatnonzero(transient)
    entries = int((tally.pointer[cells + 1] - tally.pointer[cells]).sum())
    if entries > FACTOR_MOST:
        raise NotConvergedError(
            f"where starts from {len(cells)} transient cells end: the iteration stopped early, and {entries} entries "
            f"are too many to factor (allowed {FACTOR_MOST}); use fewer cells or longer bursts"
        )
    value = tally.count.sum(axis=1, dtype=float) / np.repeat(tally.bursts.sum(axis=1), np.diff(tally.pointer))
    whole = csr_array((value, tally.column, tally.pointer), shape=(n, n + 2))
    inner = eye_array(len(cells), format="csr") - whole[cells][:, cells]
    out = np.zeros_like(rhs)
    out[cells] = splu(csc_array(inner)).solve(np.ascontiguousarray(rhs[cells]), trans="T" if transposed else "N")
    return out
