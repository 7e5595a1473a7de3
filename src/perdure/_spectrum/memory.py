"""The slowest mode of a closed class."""

from __future__ import annotations

import numpy as np
from scipy.sparse.linalg import ArpackError, LinearOperator, eigs

from perdure._records import Floats
from perdure._spectrum.solves import ClassSolver, class_matrix

__all__ = ["slowest"]

# Cells up to which all eigenvalues are computed.
DENSE_MOST = 500
# An eigenvalue so close to the unit circle is a cycle of the cells, not a mode that fades.
ON_CIRCLE = 1e-9


def slowest(solver: ClassSolver) -> complex | None:
    """Eigenvalue of largest magnitude below 1; None where there is none or the iteration did not converge.

    The known pair, eigenvalue 1 with the stationary mass, is taken out of the operator first.
    """
    transition, members = solver.transition, solver.members
    n = len(members)
    if n < 2:
        return None
    if n <= DENSE_MOST:
        matrix = class_matrix(transition.tally, members).toarray() - solver.mass[members][None, :]
        return largest(np.linalg.eigvals(matrix))

    def pull(x: Floats) -> Floats:
        full = np.zeros(transition.n_cell)
        full[members] = np.asarray(x).ravel()
        return transition.right(full)[members] - solver.mass @ full

    operator = LinearOperator((n, n), matvec=pull, dtype=float)
    start = np.random.default_rng(0).standard_normal(n)
    try:
        found = eigs(operator, k=4, which="LM", v0=start, tol=1e-8, maxiter=300, return_eigenvectors=False)
    except ArpackError:
        return None
    return largest(found)


def largest(eigenvalues: Floats) -> complex | None:
    fading = eigenvalues[np.abs(eigenvalues) < 1.0 - ON_CIRCLE]
    return complex(fading[np.argmax(np.abs(fading))]) if len(fading) else None
