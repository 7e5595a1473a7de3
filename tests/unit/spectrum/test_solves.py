"""The stationary mass and the two adjoint solves, by each of the three ways of solving."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.sparse import csr_array

from perdure._spectrum import ClassSolver, closed_classes, linear, solves
from perdure._spectrum.linear import Dense, Krylov, SparseFactors
from perdure._transitions import TransitionMatrix
from perdure.errors import NotConvergedError
from unit.transitions.support import dense_counts, tally_of

WAYS = ("dense", "krylov", "factors")
# Relative residual of adjoint solves: rounding, but for the iterative way, which only feeds error bars.
RESIDUAL = {"dense": 1e-12, "factors": 1e-12, "krylov": 1.01 * linear.FOR_ERRORS}


def choose(monkeypatch: pytest.MonkeyPatch, way: str) -> None:
    """Make `ClassSolver` take a way whatever the size of the class."""
    if way != "dense":
        monkeypatch.setattr(solves, "DENSE_MOST", 0)
        monkeypatch.setattr(solves, "MANY_PRODUCTS", 0 if way == "factors" else 10**9)


def closed_counts(n: int, seed: int) -> np.ndarray:
    """Random counts of an irreducible chain without leaks."""
    counts = dense_counts(n, 2, 500, np.random.default_rng(seed))
    counts[:, :2] += counts[:, n:]
    counts[:, n:] = 0
    return counts


def turning_counts(n: int) -> np.ndarray:
    """A slow ring: bursts move on by one or two cells, or stay, with chances that change along the ring."""
    counts = np.zeros((n, n + 2, 2), dtype=int)
    i = np.arange(n)
    one = (60 + 30 * np.sin(2 * np.pi * i / n)).astype(int)
    counts[i, (i + 1) % n], counts[i, (i + 2) % n], counts[i, i] = one[:, None], 5, (95 - one)[:, None]
    return counts


def dense_matrix(counts: np.ndarray) -> np.ndarray:
    total = counts.sum(axis=2)
    return np.asarray(total[:, : len(total)] / total.sum(axis=1, keepdims=True))


def eigenvector(matrix: np.ndarray) -> np.ndarray:
    """Left eigenvector of eigenvalue 1 by LAPACK's QR algorithm."""
    values, vectors = np.linalg.eig(matrix.T)
    mass = np.real(vectors[:, np.argmin(np.abs(values - 1.0))])
    return np.asarray(mass / mass.sum())


def solver_of(counts: np.ndarray) -> ClassSolver:
    tally = tally_of(counts)
    return ClassSolver(TransitionMatrix(tally), closed_classes(tally).members[0])


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("seed", range(3))
def test_mass_is_the_eigenvector(way: str, seed: int, monkeypatch: pytest.MonkeyPatch) -> None:
    choose(monkeypatch, way)
    counts = closed_counts(60, seed)
    solver = solver_of(counts)
    assert type(solver.solver) is {"dense": Dense, "krylov": Krylov, "factors": SparseFactors}[way]
    np.testing.assert_allclose(solver.mass, eigenvector(dense_matrix(counts)), atol=1e-11)
    assert solver.mass.sum() == pytest.approx(1.0, abs=1e-14)
    assert solver.residual < 1e-12
    assert solver.eigenvalue == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("way", ["krylov", "factors"])
def test_pair_of_eigenvalues_close_to_the_unit_circle(way: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """An eigen-solver may take such a pair for the dominant one; power iteration has hardly begun (the control)."""
    choose(monkeypatch, way)
    n = 100
    counts = turning_counts(n)
    matrix = dense_matrix(counts)
    size = np.sort(np.abs(np.linalg.eigvals(matrix)))
    assert 0.998 < size[-3] <= size[-2] < 1.0
    exact = np.linalg.solve((np.eye(n) - matrix + 1.0 / n).T, np.full(n, 1.0 / n))
    solver = solver_of(counts)
    np.testing.assert_allclose(solver.mass, exact, rtol=1e-8)
    power = np.full(n, 1.0 / n)
    for _ in range(1000):
        power = power @ matrix
    power_error, own_error = np.abs(power - exact).sum(), np.abs(solver.mass - exact).sum()
    assert power_error > 1e3 * own_error


@pytest.mark.parametrize("period", [2, 3])
@pytest.mark.parametrize("way", WAYS)
def test_periodic_chain(way: str, period: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Eigenvalues all round the unit circle; the mass is still the average over the cycle."""
    choose(monkeypatch, way)
    n, rng = 10 * period, np.random.default_rng(period)
    counts = np.zeros((n, n + 2, 2), dtype=int)
    for i in range(n):
        group = (i // 10 + 1) % period
        counts[i, 10 * group : 10 * group + 10] = rng.multinomial(40, np.full(10, 0.1), 2).T
    solver = solver_of(counts)
    np.testing.assert_allclose(solver.mass.reshape(period, 10).sum(axis=1), 1.0 / period, atol=1e-12)
    np.testing.assert_allclose(solver.mass @ dense_matrix(counts), solver.mass, atol=1e-13)


@pytest.mark.parametrize("way", WAYS)
def test_adjoint_and_response(way: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Both systems to their residual, their side conditions to rounding, and the duality between them."""
    choose(monkeypatch, way)
    counts = closed_counts(80, 7)
    solver, matrix = solver_of(counts), dense_matrix(counts)
    rng = np.random.default_rng(8)
    values, push = rng.standard_normal((80, 3)), rng.standard_normal((80, 2))
    push -= push.mean(axis=0)
    h, y = solver.adjoint(values), solver.response(push)
    centred = values - solver.mass @ values
    allowed = RESIDUAL[way]
    assert np.linalg.norm(h - matrix @ h - centred) <= allowed * np.linalg.norm(centred)
    assert np.linalg.norm(y - matrix.T @ y - push) <= allowed * np.linalg.norm(push)
    np.testing.assert_allclose(solver.mass @ h, 0.0, atol=1e-13)
    np.testing.assert_allclose(y.sum(axis=0), 0.0, atol=1e-12)
    # y (I - P) h is push h on one side and y g on the other
    np.testing.assert_allclose(push.T @ h, y.T @ values, atol=20.0 * allowed * float(np.linalg.norm(push)))


def test_ways_agree() -> None:
    """The three solvers on one matrix: masses to 1e-9, direct solves to 1e-9 up to what each leaves free."""
    matrix = dense_matrix(closed_counts(150, 9))
    dense, factors = Dense(matrix), SparseFactors(csr_array(matrix), 3)
    krylov = Krylov(lambda x: matrix.T @ x, lambda x: matrix @ x, 150)
    np.testing.assert_allclose(factors.stationary(), dense.stationary(), atol=1e-12)
    np.testing.assert_allclose(krylov.stationary(), dense.stationary(), atol=1e-9 / 150)
    rng, mass = np.random.default_rng(10), dense.stationary()
    rhs = rng.standard_normal((150, 2))
    right, left = rhs - mass @ rhs, rhs - rhs.mean(axis=0)

    def centred(h: np.ndarray) -> np.ndarray:
        return np.asarray(h - mass @ h)

    def balanced(y: np.ndarray) -> np.ndarray:
        return np.asarray(y - y.sum(axis=0) * mass[:, None])

    h, y = centred(dense.right(right)), balanced(dense.left(left))
    np.testing.assert_allclose(centred(factors.right(right)), h, atol=1e-9)
    np.testing.assert_allclose(balanced(factors.left(left)), y, atol=1e-9)
    loose = 50.0 * linear.FOR_ERRORS
    np.testing.assert_allclose(centred(krylov.right(right)), h, atol=loose * np.abs(h).max())
    np.testing.assert_allclose(balanced(krylov.left(left)), y, atol=loose * np.abs(y).max())


@pytest.mark.parametrize("way", WAYS)
def test_class_among_others(way: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Cells of other classes and transient ones keep mass zero; each class is solved by itself."""
    choose(monkeypatch, way)
    one, two = closed_counts(12, 1), closed_counts(9, 2)
    counts = np.zeros((24, 26, 2), dtype=int)
    counts[:12, :12], counts[12:21, 12:21] = one[:, :12], two[:, :9]
    counts[21:24] = np.random.default_rng(3).integers(1, 9, (3, 26, 2))
    tally = tally_of(counts)
    classes = closed_classes(tally).members
    assert [len(cells) for cells in classes] == [12, 9]
    for cells, own in zip(classes, (one, two), strict=True):
        solver = ClassSolver(TransitionMatrix(tally), cells)
        np.testing.assert_allclose(solver.mass[cells], eigenvector(dense_matrix(own)), atol=1e-11)
        off = np.setdiff1d(np.arange(24), cells)
        assert not solver.mass[off].any()
        assert not solver.adjoint(np.random.default_rng(4).standard_normal((24, 2)))[off].any()
        assert not solver.response(np.ones((24, 1)))[off].any()


@pytest.mark.parametrize("way", WAYS)
def test_class_of_one_cell(way: str, monkeypatch: pytest.MonkeyPatch) -> None:
    choose(monkeypatch, way)
    counts = np.zeros((3, 5, 2), dtype=int)
    counts[0, 0], counts[1, 2], counts[2, [0, 4]] = 4, 4, 2
    solver = solver_of(counts)
    np.testing.assert_array_equal(solver.mass, [1.0, 0.0, 0.0])
    assert not solver.adjoint(np.array([[3.0], [1.0], [2.0]])).any()
    assert not solver.response(np.zeros((3, 1))).any()


def test_early_stop_is_an_error(monkeypatch: pytest.MonkeyPatch) -> None:
    """An iteration that ends too soon: the error holds the best vector, over all cells of the matrix."""
    choose(monkeypatch, "krylov")
    monkeypatch.setattr(linear, "AIM", 1e-6)
    message = r"100 cells: residual .* \(allowed 1e-10\).*; use fewer cells"
    with pytest.raises(NotConvergedError, match=message) as caught:
        solver_of(turning_counts(100))
    found = caught.value.found
    assert isinstance(found, np.ndarray)
    assert found.shape == (100,)
    assert found.sum() == pytest.approx(1.0)


def test_negative_mass_is_an_error(monkeypatch: pytest.MonkeyPatch) -> None:
    """A vector with a small residual but a negative part is not taken."""
    counts = closed_counts(20, 5)
    solver = solver_of(counts)
    bad = solver.mass.copy()
    bad[3] = -1e-6
    monkeypatch.setattr(solves, "ACCEPTED", 1.0)
    with pytest.raises(NotConvergedError, match=r"negative mass 1\.0e-06 \(allowed 1e-09\)"):
        solver._checked(bad)
    with pytest.raises(NotConvergedError, match="residual nan"):
        solver._checked(bad * np.nan)
