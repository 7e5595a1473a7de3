"""Reported errors against the true spread over many repetitions of a small chain with known rows."""

from __future__ import annotations

from dataclasses import dataclass, replace
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure._records import Marginal, SlotRows
from perdure._spectrum import ClassSolver
from perdure._statistics import HalfStep, Shift, marginal_numbers
from perdure._statistics.intervals import cells_part, interval, quantile
from perdure._statistics.marginals import balanced_signs
from perdure._statistics.numbers import errors_of
from perdure._transitions import TransitionMatrix, scattered_slots
from unit.transitions.support import tally_of

N, N_REP, SIZE = 6, 8, 40
N_REPEAT = 3000

# Masses with coarser cells are not known here.
NO_LADDER = np.zeros((0, N))


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
    sums = np.einsum("ijr,ijk->irk", counts, experiment.g)
    h = solver.adjoint(sums.sum(axis=1) / (SIZE * N_REP)) if adjoint else np.zeros((N, 2))
    return errors_of(transition, solver.mass, h, sums, np.array([[1.0, 0.0, 1.0], [0.0, 1.0, -1.0]]))


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
    sums = np.random.default_rng(3).standard_normal((N, N_REP, 1))
    mass = np.zeros(N)
    mass[2] = 1.0
    error, freedom = errors_of(transition, mass, np.zeros((N, 1)), sums, np.ones((1, 1)))
    assert freedom[0] == pytest.approx(N_REP - 1)
    assert error[0] == pytest.approx((sums[2, :, 0] / SIZE).std(ddof=1) / np.sqrt(N_REP))


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


def padded(counts: np.ndarray) -> np.ndarray:
    """Counts with empty columns for outside and blown up."""
    return np.concatenate([counts, np.zeros((len(counts), 2, counts.shape[2]), dtype=counts.dtype)], axis=1)


def indicator_sums(counts: np.ndarray) -> np.ndarray:
    """How often the bursts ended in each slot of `slots_of`, shape (N, N_REP, 3)."""
    return np.asarray(counts.reshape(N, 3, 2, N_REP).sum(axis=2).transpose(0, 2, 1))


def marginal_of_ends(
    transition: TransitionMatrix, counts: np.ndarray, seed: int, lifted: np.ndarray, halved: HalfStep | None = None
) -> Marginal:
    """Marginal of where bursts end."""
    solver = ClassSolver(transition, np.arange(N))
    plan: Any = SimpleNamespace(axis_lower=np.zeros(1), axis_upper=np.ones(1))
    system: Any = SimpleNamespace(state=("x",), units=("1",))
    return marginal_numbers(
        system,
        plan,
        transition,
        slots_of(counts),
        solver.mass,
        solver.response,
        scattered_slots,
        np.random.default_rng(seed),
        lifted,
        halved,
        transition.tally.bursts.sum(axis=1).astype(int),
    )["x"]


def test_marginal_errors_are_those_of_indicators(tallies: np.ndarray) -> None:
    """The drawn errors, over many draws, against an adjoint solve for the indicator of each slot."""
    counts = tallies[0]
    transition = TransitionMatrix(tally_of(padded(counts)))
    solver = ClassSolver(transition, np.arange(N))
    found = [marginal_of_ends(transition, counts, seed, NO_LADDER) for seed in range(40)]
    sums = indicator_sums(counts)
    mean = sums.sum(axis=1) / (SIZE * N_REP)
    exact = errors_of(transition, solver.mass, solver.adjoint(mean), sums, np.eye(3))[0]
    first = found[0]
    np.testing.assert_allclose([first.below, first.mass[0], first.above], solver.mass @ mean, atol=1e-13)
    squares = [marginal.parts["sampling"] ** 2 for marginal in found]
    variance, scatter = np.mean(squares, axis=0), np.std(squares, axis=0) / np.sqrt(40)
    assert_agrees(variance, exact[1:2] ** 2, scatter)
    flat = errors_of(transition, solver.mass, np.zeros((N, 3)), sums, np.eye(3))[0]
    with pytest.raises(AssertionError):
        assert_agrees(variance, flat[1:2] ** 2, scatter)


# ------------------------------------------------------------------------------- replicates of whole chains


@dataclass(frozen=True)
class Chains:
    """Trajectories of a chain of 2 N states of which cell k holds 2 k and 2 k + 1: cells alone do not tell what comes.

    Attributes
    ----------
    counts : ndarray, shape (n_repeat, N, N, N_REP)
    sums : ndarray, shape (n_repeat, N, N_REP, 2)
        Along the trajectories, of two functions of where a step led to.
    """

    counts: np.ndarray
    sums: np.ndarray
    truth: np.ndarray


N_CHAINS, LENGTH = 2500, 300


@pytest.fixture(scope="module")
def chains() -> Chains:
    """The half of its cell that a state is in stays the same for some 16 steps, whatever cells are passed."""
    rng = np.random.default_rng(21)
    cells, hidden = rng.exponential(size=(2, N, N)) ** 2, np.array([[0.95, 0.05], [0.08, 0.92]])
    cells /= cells.sum(axis=2, keepdims=True)
    rows = np.zeros((2 * N, 2 * N))
    for a in range(2):
        for b in range(2):
            rows[a::2, b::2] = cells[a] * hidden[a, b]
    g = rng.standard_normal((2 * N, 2))
    g[1::2, 0] += 1.5
    mass = np.linalg.solve(np.eye(2 * N) - rows.T + 1.0 / (2 * N), np.full(2 * N, 1.0 / (2 * N)))
    n = N_CHAINS * N_REP
    state = np.searchsorted(np.cumsum(mass), rng.random(n) * mass.sum())
    ladder, counts, sums = np.cumsum(rows, axis=1), np.zeros(n * N * N, dtype=int), np.zeros((n * N, 2))
    for _ in range(LENGTH):
        after = np.minimum((ladder[state] < rng.random(n)[:, None]).sum(axis=1), 2 * N - 1)
        row = np.arange(n) * N + state // 2
        counts[row * N + after // 2] += 1
        sums[row] += g[after]
        state = after
    counts, sums = counts.reshape(N_CHAINS, N_REP, N, N), sums.reshape(N_CHAINS, N_REP, N, 2)
    return Chains(np.moveaxis(counts, 1, 3), sums.swapaxes(1, 2), mass @ rows @ g)


MIX = np.array([[1.0, 0.0, 1.0], [0.0, 1.0, -1.0]])


def whole(counts: np.ndarray, *, together: bool = True) -> TransitionMatrix:
    return TransitionMatrix(replace(tally_of(padded(counts)), together=together))


def solved(chains: Chains, k: int, *, together: bool) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Both means and their difference, standard errors and degrees of freedom of repetition `k`."""
    counts, sums = chains.counts[k], chains.sums[k]
    transition = whole(counts, together=together)
    solver = ClassSolver(transition, np.arange(N))
    mean = sums.sum(axis=1) / counts.sum(axis=(1, 2))[:, None]
    error, freedom = errors_of(transition, solver.mass, solver.adjoint(mean), sums, MIX)
    return (solver.mass @ mean) @ MIX, error, freedom


def test_errors_of_whole_replicates_are_the_true_spread(chains: Chains) -> None:
    """Within 10 percent, of which 1.4 are the sampling error of the spread; row by row they are wrong (control)."""
    every = [solved(chains, k, together=True) for k in range(N_CHAINS)]
    values = np.array([value for value, _, _ in every])
    spread = values.std(axis=0, ddof=1)
    assert_agrees(values.mean(axis=0), chains.truth @ MIX, spread / np.sqrt(N_CHAINS), allowance=0.05 * spread)
    error = np.sqrt(np.mean([e**2 for _, e, _ in every], axis=0))
    np.testing.assert_allclose(error, spread, rtol=0.1)
    apart = np.sqrt(np.mean([solved(chains, k, together=False)[1] ** 2 for k in range(0, N_CHAINS, 10)], axis=0))
    assert apart[0] < 0.7 * spread[0]
    with pytest.raises(AssertionError):
        np.testing.assert_allclose(apart, spread, rtol=0.1)


def test_intervals_of_whole_replicates_hold_the_truth(chains: Chains) -> None:
    """95 percent with the seven degrees of freedom of eight replicates; 5 standard errors of 2500 trials are 2.2."""
    inside = {7.0: 0, 1e9: 0}
    for k in range(N_CHAINS):
        value, error, freedom = solved(chains, k, together=True)
        assert np.all(freedom == N_REP - 1)
        for taken in inside:
            inside[taken] += bool(abs(value[0] - chains.truth[0]) <= quantile(taken) * error[0])
    share = np.sqrt(0.95 * 0.05 / N_CHAINS)
    assert_agrees(inside[7.0] / N_CHAINS, 0.95, share)
    with pytest.raises(AssertionError):
        assert_agrees(inside[1e9] / N_CHAINS, 0.95, share)


def test_whole_replicates_by_hand() -> None:
    """Two cells of mass 1/4 and 3/4, two replicates; in cell 0 the second sent nothing and adds nothing.

    Bursts 4 and 0, 2 and 2, and a flat adjoint solution. Sums 8 and 0, 6 and 2: in cell 0 all is as in the mean; in
    cell 1, of mean 2 a burst, the replicates found 2 more and 2 less than their 4, of 4 bursts with the mass 3/4.
    """
    counts = np.zeros((2, 4, 2), dtype=int)
    counts[0, :2, 0], counts[1, :2] = 2, 1
    sums, mass = np.array([[8.0, 0.0], [6.0, 2.0]])[:, :, None], np.array([0.25, 0.75])
    for together in (True, False):
        error, freedom = errors_of(as_counted(counts, together), mass, np.zeros((2, 1)), sums, np.ones((1, 1)))
        # errors +-(2/4) 3/4, squares added over the replicates, times R/(R - 1) = 2
        assert error[0] == pytest.approx(np.sqrt(2.0 * 2.0 * (0.5 * 0.75) ** 2))
        assert freedom[0] == pytest.approx(1.0)


def as_counted(counts: np.ndarray, together: bool) -> TransitionMatrix:
    """As counts are: their last two columns are outside and blown up."""
    return TransitionMatrix(replace(tally_of(counts), together=together))


def test_errors_that_cancel_between_rows() -> None:
    """What one replicate finds too much in one cell and too little in the other: no error of the whole, but of rows."""
    counts = np.zeros((2, 4, 4), dtype=int)
    counts[:, :2] = 5
    up = np.array([1.0, -1.0, 2.0, -2.0])
    sums, mass = np.stack([10.0 + up, 10.0 - up])[:, :, None], np.array([0.5, 0.5])
    found = {
        together: errors_of(as_counted(counts, together), mass, np.zeros((2, 1)), sums, np.ones((1, 1)))[0][0]
        for together in (True, False)
    }
    assert found[True] == pytest.approx(0.0, abs=1e-15)
    # two rows: 1/2 of the standard error of the mean of 40 bursts, sums of 10 each
    assert found[False] == pytest.approx(np.sqrt(2.0) * 0.5 * (up / 10).std(ddof=1) / 2.0)


def test_weights_may_be_any_size(chains: Chains) -> None:
    """Weights in other units give the same errors: only their proportions matter."""
    counts, sums = chains.counts[0], chains.sums[0]
    mass, h = np.full(N, 1.0 / N), np.random.default_rng(5).standard_normal((N, 2))
    one, tally = whole(counts), whole(counts).tally
    scaled = TransitionMatrix(
        replace(tally, count=(0.37 * tally.count).astype(np.float32), bursts=0.37 * tally.bursts.astype(float))
    )
    np.testing.assert_allclose(
        errors_of(scaled, mass, h, 0.37 * sums, MIX)[0], errors_of(one, mass, h, sums, MIX)[0], rtol=1e-6
    )


def test_marginal_errors_of_whole_replicates_are_those_of_indicators(chains: Chains) -> None:
    """No draws: the same sums over the rows, to rounding, and the interval of the same number; rows apart differ."""
    counts = chains.counts[1]
    sums = indicator_sums(counts)
    mean = sums.sum(axis=1) / counts.sum(axis=(1, 2))[:, None]
    solver = ClassSolver(whole(counts), np.arange(N))
    exact = {
        together: errors_of(whole(counts, together=together), solver.mass, solver.adjoint(mean), sums, np.eye(3))[0][1]
        for together in (True, False)
    }
    found = marginal_of_ends(whole(counts), counts, 1, NO_LADDER)
    assert found.parts["sampling"][0] == pytest.approx(exact[True], rel=1e-10)
    assert exact[False] != pytest.approx(exact[True], rel=1e-2)
    # random signs must not matter
    assert marginal_of_ends(whole(counts), counts, 2, NO_LADDER).parts["sampling"] == found.parts["sampling"]
    named = interval(float(found.mass[0]), exact[True], N_REP - 1.0, "1", "share")
    assert found.low is not None
    assert found.high is not None
    assert (found.low[0], found.high[0]) == pytest.approx((named.low, named.high), rel=1e-10)


@pytest.mark.parametrize("together", [True, False])
def test_other_parts_of_marginal_errors_are_those_of_indicators(chains: Chains, together: bool) -> None:
    """Part of the cells from a ladder, part of the step from a change of mass and of what bursts find."""
    counts = chains.counts[2]
    sums, transition = indicator_sums(counts), whole(counts, together=together)
    mean = sums.sum(axis=1) / counts.sum(axis=(1, 2))[:, None]
    solver = ClassSolver(transition, np.arange(N))
    rng = np.random.default_rng(9)
    lifted = rng.dirichlet(200.0 * solver.mass, 2)
    change = 0.01 * rng.standard_normal((N, N_REP)) + np.linspace(-0.02, 0.02, N)[:, None]
    slots = 0.01 * rng.standard_normal((N_REP, 3)) + 0.03
    halved = HalfStep(change, np.zeros((N_REP, 2)), slots, 2.0)
    found = marginal_of_ends(transition, counts, 1, lifted, halved)
    values = [float((mass @ mean)[1]) for mass in (solver.mass, *lifted)]
    assert found.parts["cells"][0] == pytest.approx(cells_part((values[0], values[1], values[2])), rel=1e-10)
    step = Shift(change.T @ mean + slots, 2.0).part(np.eye(3))[1]
    assert step > 0.01
    assert found.parts["step"][0] == pytest.approx(step, rel=1e-10)
    assert found.error[0] == pytest.approx(np.sqrt(sum(float(part[0]) ** 2 for part in found.parts.values())))
    plain = marginal_of_ends(transition, counts, 1, NO_LADDER)
    assert set(plain.parts) == {"sampling"}
    assert plain.parts["sampling"] == pytest.approx(found.parts["sampling"])
    assert found.low is not None
    assert plain.low is not None
    assert found.low[0] < plain.low[0]
