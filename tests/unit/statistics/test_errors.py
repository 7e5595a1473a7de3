"""Reported errors against the true spread over many repetitions of a small chain with known rows."""

from __future__ import annotations

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure._records import SlotRows
from perdure._spectrum import ClassSolver
from perdure._statistics import marginal_numbers
from perdure._statistics.marginals import balanced_signs
from perdure._statistics.numbers import errors_of
from perdure._transitions import TransitionMatrix, scattered_slots
from unit.transitions.support import tally_of

N, N_REP, SIZE = 6, 8, 40
N_REPEAT = 3000


@dataclass(frozen=True)
class Experiment:
    """A chain whose bursts from i to j have the values g[i, j, :] of two functions."""

    rows: np.ndarray
    g: np.ndarray

    def mean(self, rows: np.ndarray) -> np.ndarray:
        """Long-run means of the two functions, for rows (..., N, N)."""
        shifted = np.eye(N) - rows + 1.0 / N
        mass = np.linalg.solve(np.swapaxes(shifted, -1, -2), np.full((*rows.shape[:-2], N, 1), 1.0 / N))[..., 0]
        return np.asarray(np.einsum("...i,...ij,ijk->...k", mass, rows, self.g))


@pytest.fixture(scope="module")
def experiment() -> Experiment:
    """Slow between two halves, so that errors of the rows build up."""
    rng = np.random.default_rng(1)
    rows = rng.exponential(size=(N, N))
    rows[:3, 3:] *= 0.08
    rows[3:, :3] *= 0.05
    g = rng.standard_normal((N, N, 2))
    g[:, :3, 0] += 2.0
    return Experiment(rows / rows.sum(axis=1, keepdims=True), g)


@pytest.fixture(scope="module")
def tallies(experiment: Experiment) -> np.ndarray:
    """Counts, shape (N_REPEAT, N, N, N_REP)."""
    drawn = np.random.default_rng(2).multinomial(SIZE, experiment.rows, size=(N_REPEAT, N_REP, N))
    return np.moveaxis(drawn, 1, 3)


def reported(experiment: Experiment, counts: np.ndarray, *, adjoint: bool = True) -> tuple[np.ndarray, np.ndarray]:
    """Standard errors and degrees of freedom of both means and of their difference."""
    padded = np.concatenate([counts, np.zeros((N, 2, N_REP), dtype=counts.dtype)], axis=1)
    transition = TransitionMatrix(tally_of(padded))
    solver = ClassSolver(transition, np.arange(N))
    means = np.einsum("ijr,ijk->irk", counts, experiment.g) / SIZE
    h = solver.adjoint(means.mean(axis=1)) if adjoint else np.zeros((N, 2))
    return errors_of(transition, solver.mass, h, means, np.array([[1.0, 0.0, 1.0], [0.0, 1.0, -1.0]]))


def mean_error(experiment: Experiment, tallies: np.ndarray, **options: bool) -> np.ndarray:
    """Root mean square of the reported errors."""
    found = [reported(experiment, counts, **options)[0] for counts in tallies[::10]]
    return np.asarray(np.sqrt(np.mean(np.square(found), axis=0)))


@pytest.fixture(scope="module")
def spread(experiment: Experiment, tallies: np.ndarray) -> np.ndarray:
    """True standard deviation of both means and of their difference."""
    means = experiment.mean(tallies.sum(axis=3) / (SIZE * N_REP))
    assert_agrees(
        means.mean(axis=0), experiment.mean(experiment.rows), means.std(axis=0) / np.sqrt(N_REPEAT), allowance=0.01
    )
    return np.asarray(np.concatenate([means, means[:, :1] - means[:, 1:]], axis=1).std(axis=0, ddof=1))


def test_reported_error_is_the_true_spread(experiment: Experiment, tallies: np.ndarray, spread: np.ndarray) -> None:
    """Within 10 percent, of which 1.3 are the sampling error of the spread itself."""
    np.testing.assert_allclose(mean_error(experiment, tallies), spread, rtol=0.1)


def test_error_without_the_adjoint_term_is_wrong(
    experiment: Experiment, tallies: np.ndarray, spread: np.ndarray
) -> None:
    """Negative control: the scatter of the functions alone misses what the rows do to the mass."""
    ratio = mean_error(experiment, tallies, adjoint=False) / spread
    assert np.all(np.abs(ratio - 1.0) > 0.1)


def test_degrees_of_freedom(experiment: Experiment, tallies: np.ndarray) -> None:
    """Between those of one row and those of all (F. E. Satterthwaite, 1946); one row gives exactly its own."""
    _, freedom = reported(experiment, tallies[0])
    assert np.all((freedom >= N_REP - 1) & (freedom <= N * (N_REP - 1)))
    transition = TransitionMatrix(tally_of(np.concatenate([tallies[0], np.zeros((N, 2, N_REP), dtype=int)], axis=1)))
    means = np.random.default_rng(3).standard_normal((N, N_REP, 1))
    mass = np.zeros(N)
    mass[2] = 1.0
    error, freedom = errors_of(transition, mass, np.zeros((N, 1)), means, np.ones((1, 1)))
    assert freedom[0] == pytest.approx(N_REP - 1)
    assert error[0] == pytest.approx(means[2, :, 0].std(ddof=1) / np.sqrt(N_REP))


def test_no_spread_no_error(experiment: Experiment, tallies: np.ndarray) -> None:
    transition = TransitionMatrix(tally_of(np.concatenate([tallies[0], np.zeros((N, 2, N_REP), dtype=int)], axis=1)))
    mass, still = np.full(N, 1.0 / N), np.ones((N, N_REP, 1))
    error, freedom = errors_of(transition, mass, np.zeros((N, 1)), still, np.ones((1, 1)))
    assert error[0] == 0.0
    assert freedom[0] == 1e9


@pytest.mark.parametrize("n_rep", [2, 4, 8])
def test_balanced_signs(n_rep: int) -> None:
    """Zero sums; each sign even; two replicates of a cell go apart by -1 / (R - 1); cells are independent."""
    signs = balanced_signs(500, n_rep, 40, np.random.default_rng(4))
    assert signs.shape == (500, n_rep, 40)
    assert set(np.unique(signs)) == {-1, 1}
    assert not signs.sum(axis=1).any()
    size = np.sqrt(500 * 40)
    assert_agrees(signs.mean(axis=(0, 2)), 0.0, 1.0 / size)
    pair = (signs[:, 0] * signs[:, 1]).mean()
    exact = -1.0 / (n_rep - 1)
    assert_agrees(pair, exact, np.sqrt(1.0 - exact**2) / size)
    assert_agrees((signs[1:, 0] * signs[:-1, 0]).mean(), 0.0, 1.0 / size)
    if n_rep > 2:
        with pytest.raises(AssertionError):
            assert_agrees(pair, 0.0, np.sqrt(1.0 - exact**2) / size)


def slots_of(counts: np.ndarray) -> SlotRows:
    """Marginal counts of one component, one point a burst, in slots of two cells each: 1 of them is beyond the axis."""
    slot = counts.reshape(N, 3, 2, N_REP).sum(axis=2)
    rows, column = np.nonzero(slot.any(axis=2))
    pointer = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=N))])
    return SlotRows(pointer, column.astype(np.uint16), slot[rows, column], 1, 1)


def test_marginal_errors_are_those_of_indicators(experiment: Experiment, tallies: np.ndarray) -> None:
    """The drawn errors, over many draws, against an adjoint solve for the indicator of each slot."""
    counts = tallies[0]
    transition = TransitionMatrix(tally_of(np.concatenate([counts, np.zeros((N, 2, N_REP), dtype=int)], axis=1)))
    solver = ClassSolver(transition, np.arange(N))
    plan = SimpleNamespace(axis_lower=np.zeros(1), axis_upper=np.ones(1))
    system = SimpleNamespace(state=("x",), units=("1",))
    squares, found = [], None
    for seed in range(40):
        found = marginal_numbers(
            system,  # type: ignore[arg-type]
            plan,  # type: ignore[arg-type]
            transition,
            slots_of(counts),
            solver.mass,
            solver.response,
            scattered_slots,
            np.random.default_rng(seed),
        )["x"]
        squares.append(found.error**2)
    means = counts.reshape(N, 3, 2, N_REP).sum(axis=2).transpose(0, 2, 1) / SIZE
    value = solver.mass @ means.mean(axis=1)
    exact = errors_of(transition, solver.mass, solver.adjoint(means.mean(axis=1)), means, np.eye(3))[0]
    assert found is not None
    np.testing.assert_allclose([found.below, found.mass[0], found.above], value, atol=1e-13)
    variance, scatter = np.mean(squares, axis=0), np.std(squares, axis=0) / np.sqrt(40)
    assert_agrees(variance, exact[1:2] ** 2, scatter)
    flat = errors_of(transition, solver.mass, np.zeros((N, 3)), means, np.eye(3))[0]
    with pytest.raises(AssertionError):
        assert_agrees(variance, flat[1:2] ** 2, scatter)
