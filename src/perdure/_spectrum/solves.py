"""The stationary mass of a closed class, checked, and adjoint solves on it."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array

from perdure._records import Floats, Integers, Tally, Transition
from perdure._spectrum.linear import Dense, Krylov, LinearSolver, SparseFactors
from perdure.errors import NotConvergedError

__all__ = ["ClassSolver"]

# Cells up to which a class is solved densely.
DENSE_MOST = 1500
# GMRES that needs more products than this is slow because bursts move little, and then factors fill little:
# up to so many entries they are the faster way.
MANY_PRODUCTS = 150
FACTOR_MOST = 1_500_000
# Largest residual (1-norm) and negative mass accepted.
ACCEPTED, NEGATIVE = 1e-10, 1e-9


class ClassSolver:
    """Solves on one closed class; vectors have one entry per cell of the matrix and are zero outside the class.

    Parameters
    ----------
    transition : Transition
    members : ndarray of int64
        Cells of the class, ascending.

    Attributes
    ----------
    mass : ndarray, shape (n_cell,)
        Stationary mass, sums to one.
    residual : float
        1-norm of mass @ P - mass.
    eigenvalue : float
        sum(mass @ P) / sum(mass).

    Raises
    ------
    NotConvergedError
        Residual above 1e-10 or negative mass beyond rounding; the best vector is in `.found`.
    """

    def __init__(self, transition: Transition, members: Integers) -> None:
        self.transition = transition
        self.members = members
        self.n = transition.n_cell
        self.solver = self._choose()
        self.mass = self._checked(self.solver.stationary())
        pushed = transition.left(self.mass)
        self.residual = float(np.abs(pushed - self.mass).sum())
        self.eigenvalue = float(pushed.sum() / self.mass.sum())

    def _choose(self) -> LinearSolver:
        tally, members = self.transition.tally, self.members
        if len(members) <= DENSE_MOST:
            return Dense(class_matrix(tally, members).toarray())
        krylov = Krylov(self._push, self._pull, len(members))
        entries = int((tally.pointer[members + 1] - tally.pointer[members]).sum())
        if krylov.products > MANY_PRODUCTS and entries <= FACTOR_MOST:
            return SparseFactors(class_matrix(tally, members), int(np.argmax(krylov.mass)))
        return krylov

    def _push(self, mass: Floats) -> Floats:
        return self.transition.left(self._spread(mass))[self.members]

    def _pull(self, values: Floats) -> Floats:
        return self.transition.right(self._spread(values))[self.members]

    def _spread(self, values: Floats) -> Floats:
        out = np.zeros((self.n, *values.shape[1:]))
        out[self.members] = values
        return out

    def _checked(self, mass: Floats) -> Floats:
        negative = float(-mass[mass < 0.0].sum())
        residual = float(np.abs(self._push(mass) - mass).sum())
        if not negative <= NEGATIVE or not residual <= ACCEPTED:
            raise NotConvergedError(
                f"stationary mass of a class of {len(mass)} cells: residual {residual:.1e} (allowed {ACCEPTED:.0e}), "
                f"negative mass {negative:.1e} (allowed {NEGATIVE:.0e}); use fewer cells or longer bursts",
                found=self._spread(mass),
            )
        mass = np.maximum(mass, 0.0)
        return self._spread(mass / mass.sum())

    @property
    def rough(self) -> bool:
        """Whether a solve for an error bar stopped at a relative residual above one percent."""
        return self.solver.worst > 0.01

    def adjoint(self, values: Floats) -> Floats:
        """h with (I - P) h = values - mass . values on the class, mass . h = 0; values and h (n_cell, k)."""
        rhs = (values - self.mass @ values)[self.members]
        # what is left of a constant is rounding, and no system has it as right-hand side
        size = np.abs(values[self.members]).max(axis=0, initial=0.0)
        rhs[:, np.abs(rhs).max(axis=0, initial=0.0) <= 1e-12 * size] = 0.0
        h = self._spread(self.solver.right(rhs))
        h[self.members] -= self.mass @ h
        return h

    def response(self, push: Floats) -> Floats:
        """y with y (I - P) = push and sum zero: first-order change of the mass; push and y (n_cell, k).

        Each column of `push` sums to zero over the class, up to rounding, which is taken out.
        """
        push = push - push[self.members].sum(axis=0) * self.mass[:, None]
        y = self._spread(self.solver.left(push[self.members]))
        return np.asarray(y - y.sum(axis=0) * self.mass[:, None])


def class_matrix(tally: Tally, members: Integers) -> csr_array:
    """P on a closed class as a float matrix, shape (len(members), len(members))."""
    lengths = tally.pointer[members + 1] - tally.pointer[members]
    pointer = np.concatenate([[0], np.cumsum(lengths)])
    at = np.arange(pointer[-1]) + np.repeat(tally.pointer[members] - pointer[:-1], lengths)
    place = np.full(tally.n_cell + 2, -1, dtype=np.int64)
    place[members] = np.arange(len(members))
    value = tally.count[at].sum(axis=1, dtype=float) / np.repeat(tally.bursts[members].sum(axis=1), lengths)
    return csr_array((value, place[tally.column[at]], pointer), shape=(len(members), len(members)))
