"""Reseeded bursts: weights are kept, the law is that of the long run however coarse the cells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
from scipy.stats import norm

from helpers.statistics import assert_agrees
from kernels.support import fly
from perdure._kernels.rows import BLOWN, OUTSIDE
from perdure._partition import Cover
from perdure._records import BoxGrid, Plan
from perdure._sampling import FIRST_SWEEP, Ensemble, WeightedRows, ensemble, seeds_in
from unit.sampling.support import plan_of, sampler_of

N_REP = 8
SALT = np.uint64(0x5DEECE66D)
PLANE = BoxGrid(np.array([-1.2, -1.0]), np.array([0.2, 0.25]), np.array([11, 9]), np.array([False, False]))
PLAIN = plan_of(PLANE)
SPIRAL = [0.3, 2.0, 0.9]


def line(lower: float, upper: float, n: int) -> BoxGrid:
    return BoxGrid(np.array([lower]), np.array([(upper - lower) / n]), np.array([n]), np.array([False]))


def ensemble_of(
    name: str,
    parameters: Sequence[float],
    plan: Plan,
    n_most: int,
    *,
    copies: bool,
    mass: np.ndarray | None = None,
    salt: np.uint64 = SALT,
    n_replicate: int = N_REP,
) -> Ensemble:
    """An ensemble that starts with this mass (even if None) in the cells of the grid, the states shared out evenly."""
    cover = Cover(10**6)
    keys = plan.seed_keys
    cover.add(keys)
    made = Ensemble(sampler_of(name, parameters, plan), cover, n_replicate, n_most, copies=copies, salt=salt)
    even = np.full(len(keys), 1.0 / len(keys))
    made.start(keys, even if mass is None else mass, even)
    return made


def weights_of(made: Ensemble) -> np.ndarray:
    """Weight of each replicate."""
    return np.bincount(made.owner, weights=made.weight, minlength=made.n_replicate)


# --- the same numbers ---


def flown(workers: int = 1, salt: np.uint64 = SALT, copies: bool = True) -> tuple[list[WeightedRows], Ensemble]:
    """Four sweeps of noisy bursts in the plane, which leave the domain and come back."""
    plan = replace(PLAIN, step=0.02, scheme="weak2")
    made = ensemble_of("noisy-pair", [], plan, 400, copies=copies, salt=salt)
    return [made.sweep(workers) for _ in range(4)], made


@pytest.mark.parametrize("copies", [True, False])
@pytest.mark.parametrize(("workers", "lanes"), [(1, 64), (3, 64), (3, 1500)])
def test_rows_do_not_depend_on_workers_and_blocks(
    workers: int, lanes: int, copies: bool, monkeypatch: pytest.MonkeyPatch
) -> None:
    """To the last bit, as do the states."""
    rows, made = flown(copies=copies)
    blocks = []
    monkeypatch.setattr(ensemble, "LANES_PER_BLOCK", lanes)
    fly_block = Ensemble._fly
    monkeypatch.setattr(Ensemble, "_fly", lambda self, *given: blocks.append(1) or fly_block(self, *given))
    others, other = flown(workers, copies=copies)
    assert len(blocks) > 4, "there must be several blocks a sweep"
    for one, two in zip(rows, others, strict=True):
        for field in fields(WeightedRows):
            np.testing.assert_array_equal(getattr(one, field.name), getattr(two, field.name), err_msg=field.name)
    for name in ("state", "weight", "place", "owner"):
        np.testing.assert_array_equal(getattr(made, name), getattr(other, name), err_msg=name)
    assert OUTSIDE in rows[-1].keys


def test_states_depend_on_the_salt() -> None:
    """Negative control of the comparison: the first rows are the same, what follows is not."""
    (first, *_), made = flown()
    (other_first, *_), other = flown(salt=SALT + np.uint64(1))
    np.testing.assert_array_equal(first.total, other_first.total)
    assert made.state.shape != other.state.shape or not np.array_equal(made.state, other.state)


def test_rows_are_the_weights_that_went() -> None:
    """Targets, sums and marginals of a sweep, some of whose bursts blow up, against bursts flown on plain arrays."""
    parameters = [0.3, 2.0, 14.0]
    made = ensemble_of("spiral", parameters, PLAIN, 600, copies=False)
    # uneven weights
    made.weight = made.weight * np.random.default_rng(1).uniform(0.5, 1.5, made.n_state)
    start, weight, owner = made.state.copy(), made.weight.copy(), made.owner.copy()
    begun = PLAIN.seed_keys[made.place]
    rows = made.sweep(1)
    axis = (PLAIN.axis_lower, PLAIN.axis_upper, 10)
    plain = fly("spiral", start, parameters=parameters, step=0.05, n_step=12, axis=axis, stride=4)
    key = np.empty(len(weight), dtype=np.int64)
    made.sampler.cells.locate(plain.state, key)
    fine = key != BLOWN
    assert rows.n_blown == plain.blown == (~fine).sum() > 0
    weight = np.where(fine, weight, 0.0)
    np.testing.assert_array_equal(rows.keys, np.unique(begun))
    np.testing.assert_array_equal(rows.bursts, np.unique(begun, return_counts=True)[1])
    for i, cell in enumerate(rows.keys):
        mine = begun == cell
        part, names = slice(rows.pointer[i], rows.pointer[i + 1]), np.unique(key[mine])
        np.testing.assert_array_equal(rows.column[part], names)
        expected = [
            np.bincount(owner[mine], weights=weight[mine] * (key[mine] == name), minlength=N_REP) for name in names
        ]
        np.testing.assert_allclose(rows.total[part], expected, rtol=1e-6)
        np.testing.assert_allclose(rows.weight[i], np.sum(expected, axis=0), rtol=1e-12)
        for r in range(N_REP):
            own = mine & (owner == r)
            np.testing.assert_allclose(rows.sums[i, r], plain.sums[:, own] @ weight[own], rtol=1e-12, atol=1e-16)
            dense = np.zeros((24, N_REP))
            slots = slice(rows.slot_pointer[i], rows.slot_pointer[i + 1])
            dense[rows.slot[slots]] = rows.slot_total[slots]
            for k in range(2):
                each = [np.bincount(s, weights=weight[own], minlength=12) for s in plain.slots[:, k, own]]
                np.testing.assert_allclose(dense[12 * k : 12 * k + 12, r], np.sum(each, axis=0), rtol=1e-6)


# --- weights and numbers of states ---


@pytest.mark.parametrize("copies", [True, False])
def test_replicates_keep_their_weight(copies: bool) -> None:
    """Over sweeps in which states leave the domain, come back and find new cells; states stand where they are said
    to, in order."""
    plan = replace(PLAIN, step=0.02, scheme="weak2", seed_keys=PLAIN.seed_keys[30:70])
    made = ensemble_of("noisy-pair", [], plan, 300, copies=copies)
    for _ in range(25):
        rows = made.sweep(1)
        np.testing.assert_allclose(weights_of(made), np.ones(N_REP), rtol=1e-12)
        np.testing.assert_allclose(rows.weight.sum(axis=0), np.ones(N_REP), rtol=1e-12)
        key = np.empty(made.n_state, dtype=np.int64)
        made.sampler.cells.locate(made.state, key)
        np.testing.assert_array_equal(made.keys_at(made.place), key)
        assert (np.diff(made.place * N_REP + made.owner) >= 0).all()
        assert (made.weight > 0.0).all()
    assert made.known.count > 40
    assert (made.place == made.known.count).any()


def test_a_sweep_keeps_the_weight_of_every_group() -> None:
    """What the rows bring into a cell is what stands in it, replicate by replicate."""
    made = flown()[1]
    rows = made.sweep(1)
    held = np.zeros((made.known.count + 1, N_REP))
    np.add.at(held, (made.place, made.owner), made.weight)
    names = made.keys_at(np.arange(made.known.count + 1))
    came = np.zeros_like(held)
    np.add.at(came, np.searchsorted(names, rows.column), rows.total.astype(float))
    # rows are in single precision
    np.testing.assert_allclose(held, came, rtol=1e-5, atol=1e-12)


def test_states_without_noise_only_become_fewer() -> None:
    """Light ones are merged, so that the weights become more even; where they are even all stay."""
    plan = plan_of(line(0.0, 1.0, 256), step=1.0, n_step=2, stride=1, scheme="map")

    def course(mass: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """States, and the number of even ones that are worth as much, after each sweep."""
        made = ensemble_of("logistic", [4.0], plan, 500, copies=False, mass=mass)
        found = []
        for _ in range(100):
            found.append((made.n_state, made.weight.sum() ** 2 / np.sum(made.weight**2)))
            made.sweep(1)
        assert len(np.unique(made.state)) == made.n_state
        return tuple(np.array(found).T)

    mass = 10.0 ** (-np.arange(256) / 20.0)
    number, worth = course(mass / mass.sum())
    assert (np.diff(number) <= 0).all()
    assert 500 * N_REP < number[-1] < 0.9 * number[0]
    assert worth[-1] / number[-1] > 0.9 > worth[0] / number[0]
    even, _ = course(np.full(256, 1.0 / 256.0))
    assert (even == 256 * 2 * N_REP).all()


def test_states_with_noise_stay_as_many_as_wanted() -> None:
    """Each cell by its share in every replicate, at least one, as soon as it is reached."""
    plan = plan_of(line(-4.0, 4.0, 16), step=0.05, n_step=10, scheme="weak2")
    made = ensemble_of("ornstein", [1.0, 2.0**0.5], plan, 320, copies=True)
    share = np.linspace(1.0, 4.0, 16) / 40.0
    made.allot(plan.seed_keys, share)
    wanted = np.maximum(np.round(320 * share), 1).astype(int)
    for _ in range(10):
        made.sweep(1)
        held = np.zeros((17, N_REP), dtype=int)
        np.add.at(held, (made.place, made.owner), 1)
        held = held[:16]
        np.testing.assert_array_equal(held, np.where(held > 0, wanted[:, None], 0))
    assert (held[4:12] > 0).all()
    without_noise = ensemble_of("ornstein", [1.0, 2.0**0.5], plan, 320, copies=False)
    for _ in range(10):
        without_noise.sweep(1)
    assert without_noise.n_state < made.n_state


def test_cells_found_later_hold_one_state() -> None:
    """Of a replicate, until they are given a share."""
    plan = plan_of(line(-4.0, 4.0, 16), step=0.05, n_step=10, scheme="weak2")
    plan = replace(plan, seed_keys=np.array([7, 8]))
    made = ensemble_of("ornstein", [1.0, 2.0**0.5], plan, 100, copies=True)
    for _ in range(4):
        made.sweep(1)
    held = np.zeros((made.known.count + 1, N_REP), dtype=int)
    np.add.at(held, (made.place, made.owner), 1)
    names = made.keys_at(np.arange(made.known.count + 1))
    late = (names != 7) & (names != 8) & (names < OUTSIDE)
    assert late.sum() >= 6
    assert held[late].max() == 1
    assert held[~late & (names < OUTSIDE)].min() == 50
    made.allot(names[late], np.full(late.sum(), 1.0 / late.sum()))
    made.sweep(1)
    after = np.bincount(made.place * N_REP + made.owner)
    assert after.max() == round(100 / late.sum())


def test_states_that_blow_up_leave_their_weight_to_their_replicate() -> None:
    """Rows hold what did not blow up; the states left in a replicate take over in proportion."""
    made = ensemble_of("spiral", [0.3, 2.0, 14.0], PLAIN, 600, copies=True)
    made.weight = made.weight * np.array([1.0, 2.0, 4.0, 8.0] * 2)[made.owner]
    before, owner, weight, start = weights_of(made), made.owner.copy(), made.weight.copy(), made.state.copy()
    plain = fly("spiral", start, parameters=[0.3, 2.0, 14.0], step=0.05, n_step=12)
    lost = np.isnan(plain.state).any(axis=0)
    rows = made.sweep(1)
    assert rows.n_blown == lost.sum() > 20
    np.testing.assert_allclose(weights_of(made), before, rtol=1e-12)
    fine = np.bincount(owner[~lost], weights=weight[~lost])
    np.testing.assert_allclose(rows.weight.sum(axis=0), fine, rtol=1e-12)
    assert (fine < before).all()
    assert np.isfinite(made.state).all()
    assert not rows.total[rows.column == BLOWN].any()
    held, came = np.zeros((made.known.count + 1, N_REP)), np.zeros((made.known.count + 1, N_REP))
    np.add.at(held, (made.place, made.owner), made.weight)
    names, inner = made.keys_at(np.arange(made.known.count + 1)), rows.column != BLOWN
    np.add.at(came, np.searchsorted(names, rows.column[inner]), rows.total[inner].astype(float))
    np.testing.assert_allclose(held, came * before / fine, rtol=1e-5, atol=1e-12)


def test_states_outside_fly_on_and_come_back() -> None:
    """A circle through a domain that holds half of it: every state is in, out and in again, and none is lost."""
    grid = BoxGrid(np.array([0.0, -1.5]), np.array([0.5, 0.5]), np.array([3, 6]), np.array([False, False]))
    plan = plan_of(grid, step=np.pi / 24.0, n_step=12)
    made = ensemble_of("spiral", [0.0, 1.0, 0.0], plan, 90, copies=False, mass=np.full(18, 1.0 / 18.0))
    start, ways = made.n_state, []
    for _ in range(8):
        rows = made.sweep(1)
        weight = rows.weight[rows.keys == OUTSIDE].sum() / N_REP
        at = int(np.searchsorted(rows.keys, OUTSIDE))
        came = rows.total[rows.pointer[at] :][rows.column[rows.pointer[at] :] != OUTSIDE].sum() if weight else 0.0
        ways.append((weight, came / N_REP))
        np.testing.assert_allclose(weights_of(made), np.ones(N_REP), rtol=1e-12)
    weight, came = np.array(ways).T
    assert weight[0] == 0.0
    # a quarter of a turn a sweep: from the right half about half leave, then the other half, then they come back
    np.testing.assert_allclose(weight[1:4], [0.5, 1.0, 0.5], atol=0.06)
    np.testing.assert_allclose(came[2:4], [0.5, 0.5], atol=0.06)
    assert weight[4] < 0.02
    assert made.n_state > 0.8 * start


# --- the law of the long run ---


def averages(made: Ensemble, n_drop: int, n_keep: int, n_key: int) -> tuple[np.ndarray, np.ndarray]:
    """Weight of each cell, with outside as the last, and its weighted sums, over the sweeps kept, by replicate."""
    held = np.zeros((n_key + 1, made.n_replicate))
    sums = np.zeros((made.n_replicate, made.sampler.n_sum))
    for at in range(n_drop + n_keep):
        rows = made.sweep(1)
        if at >= n_drop:
            held[np.where(rows.keys == OUTSIDE, n_key, rows.keys)] += rows.weight / n_keep
            sums += rows.sums.sum(axis=0) / n_keep
    return held, sums


def agrees(values: np.ndarray, exact: np.ndarray) -> None:
    """Estimates by replicate, shape (..., n_replicate), against the exact values; the error is their scatter."""
    error = values.std(axis=-1, ddof=1) / np.sqrt(values.shape[-1])
    assert_agrees(values.mean(axis=-1), exact, error)


def plain_mass(name: str, parameters: Sequence[float], plan: Plan) -> np.ndarray:
    """Mass of the cells by plain bursts from uniform seeds; what leaves the cells is left out."""
    n = len(plan.seed_keys)
    chain = np.zeros((n, n))
    for sweep in range(40):
        block = next(sampler_of(name, parameters, plan).run(plan.seed_keys, sweep=sweep))
        inside = block.target < OUTSIDE
        row = np.repeat(np.arange(n), np.diff(block.pointer))
        np.add.at(chain, (row[inside], block.target[inside]), block.count[inside].sum(axis=1))
    chain /= chain.sum(axis=1, keepdims=True)
    return np.asarray(np.linalg.matrix_power(chain, 5000)[0])


def scheme_deviation(step: float) -> float:
    """Standard deviation of dx = -x dt + sqrt(2) dW in steps of the weak scheme of order 2.

    By hand: x' = (1 - h + h^2/2) x + sqrt(2) (1 - h/2) dW, a Gaussian chain.
    """
    return float(np.sqrt(2.0 * step * (1.0 - step / 2.0) ** 2 / (1.0 - (1.0 - step + step**2 / 2.0) ** 2)))


OU = [1.0, 2.0**0.5]


def ornstein_law(edges: np.ndarray, step: float) -> np.ndarray:
    return np.diff(norm.cdf(edges / scheme_deviation(step)))


@pytest.mark.parametrize(("workers", "n_most"), [(1, 60), (2, 9)])
def test_noisy_law_with_three_cells(workers: int, n_most: int) -> None:
    """Ornstein-Uhlenbeck process in three cells, from a wrong start, by 60 states or by 9; plain bursts from the same
    cells are far off (negative control)."""
    plan = plan_of(line(-6.0, 6.0, 3), step=0.05, n_step=6, stride=6, per_cell=64, scheme="weak2")
    grid = replace(plan.grid, lower=np.array([-5.5]))
    plan = replace(plan, grid=grid, axis_lower=grid.lower, axis_upper=grid.lower + 12.0)
    made = ensemble_of("ornstein", OU, plan, n_most, copies=True, mass=np.array([0.6, 0.1, 0.3]))
    made.allot(plan.seed_keys, np.array([0.4, 0.4, 0.2]))
    exact = ornstein_law(-5.5 + 4.0 * np.arange(4), 0.05)
    held, _ = averages(made, 60, 1500 * 9 // n_most, 3)
    agrees(held[:3], exact)
    assert held[3].max() < 1e-3
    plain = plain_mass("ornstein", OU, plan)
    assert np.abs(plain - exact).max() > 0.05
    with pytest.raises(AssertionError):
        agrees(held[:3], plain)


def test_noisy_law_with_an_outside() -> None:
    """Two cells that hold 68 percent of the law of an Ornstein-Uhlenbeck process; the rest is outside and comes back.
    A law of 1.1 times the deviation does not agree (negative control)."""
    plan = plan_of(line(-1.0, 1.0, 2), step=0.05, n_step=6, stride=6, scheme="weak2")
    made = ensemble_of("ornstein", OU, plan, 60, copies=True, mass=np.array([0.9, 0.1]))
    made.allot(plan.seed_keys, np.array([0.5, 0.5]))
    held, _ = averages(made, 40, 160, 2)

    def law(factor: float) -> np.ndarray:
        inner = np.diff(norm.cdf(np.array([-1.0, 0.0, 1.0]) / (factor * scheme_deviation(0.05))))
        return np.append(inner, 1.0 - inner.sum())

    agrees(held, law(1.0))
    with pytest.raises(AssertionError):
        agrees(held, law(1.1))


def test_law_without_noise_with_three_cells() -> None:
    """Logistic map at r = 4 in three cells: mass and averages of the arcsine law (S. M. Ulam and J. von Neumann, Bull.
    Amer. Math. Soc. 53 (1947) 1120). Plain bursts are far off (negative control)."""
    plan = plan_of(line(0.0, 1.0, 3), step=1.0, n_step=2, stride=1, per_cell=64, scheme="map")
    made = ensemble_of("logistic", [4.0], plan, 60, copies=False, mass=np.array([0.2, 0.7, 0.1]))
    held, sums = averages(made, 60, 800, 3)

    def arcsine(x: Any) -> Any:
        return 2.0 / np.pi * np.arcsin(np.sqrt(x))

    exact = np.diff(arcsine(np.arange(4) / 3.0))
    agrees(held[:3], exact)
    plain = plain_mass("logistic", [4.0], plan)
    assert np.abs(plain - exact).max() > 0.02
    with pytest.raises(AssertionError):
        agrees(held[:3], plain)
    # per event time inside and entries, per observable sums and squares, over the last of two steps; of log x the
    # mean is -2 log 2 and the variance pi^2 / 3
    agrees(sums[:, 0], 1.0 - arcsine(0.9))
    agrees(sums[:, 2], arcsine(0.5) - arcsine(0.2))
    agrees(sums[:, 4], 0.5)
    agrees(sums[:, 5], 3.0 / 8.0)
    agrees(sums[:, 6], -2.0 * np.log(2.0))
    agrees(sums[:, 7], np.pi**2 / 3.0 + 4.0 * np.log(2.0) ** 2)
    with pytest.raises(AssertionError):
        agrees(sums[:, 4], 0.52)


@pytest.mark.parametrize("n_step", [4, 8, 10, 12])
def test_a_map_that_drops_bits_keeps_its_law(n_step: int) -> None:
    """Doubling map in 256 cells, where most states stand alone: quarters of the interval hold a quarter each."""
    plan = plan_of(line(0.0, 1.0, 256), step=1.0, n_step=n_step, stride=n_step, per_cell=16, scheme="map")
    made = ensemble_of("doubling", [], plan, 256, copies=False)
    held, _ = averages(made, 30, 200, 256)
    agrees(held[:256].reshape(4, 64, N_REP).sum(axis=1), np.full(4, 0.25))


def test_without_blur_a_map_that_drops_bits_ends_at_zero(monkeypatch: pytest.MonkeyPatch) -> None:
    """Negative control: 53 bits last 7 sweeps of 8 steps."""
    plan = plan_of(line(0.0, 1.0, 256), step=1.0, n_step=8, stride=8, scheme="map")
    monkeypatch.setattr(ensemble, "BLUR", 0.0)
    made = ensemble_of("doubling", [], plan, 256, copies=False)
    for _ in range(8):
        made.sweep(1)
    assert not made.state.any()


# --- replicates ---


def coarse_noise() -> Ensemble:
    plan = plan_of(line(-6.0, 6.0, 3), step=0.05, n_step=6, stride=6, scheme="weak2")
    return ensemble_of("ornstein", OU, plan, 90, copies=True)


def test_states_of_a_replicate_do_not_depend_on_the_weights_of_others() -> None:
    """Weights of replicate 2 changed: it alone moves on differently."""
    one, two = coarse_noise(), coarse_noise()
    mine = two.owner == 2
    two.weight[mine] *= np.random.default_rng(2).exponential(size=mine.sum())
    for _ in range(6):
        rows, other_rows = one.sweep(1), two.sweep(1)
    rest, other_rest = one.owner != 2, two.owner != 2
    np.testing.assert_array_equal(one.state[:, rest], two.state[:, other_rest])
    np.testing.assert_array_equal(one.weight[rest], two.weight[other_rest])
    # three cells and outside
    weight, other_weight = np.zeros((2, 4, N_REP))
    weight[np.minimum(rows.keys, 3)], other_weight[np.minimum(other_rows.keys, 3)] = rows.weight, other_rows.weight
    np.testing.assert_array_equal(np.delete(weight, 2, axis=1), np.delete(other_weight, 2, axis=1))
    assert not np.array_equal(one.state[:, ~rest], two.state[:, ~other_rest])


def test_replicates_share_no_states_and_do_not_move_together() -> None:
    """Correlations over sweeps of the weighted means of replicates are chance; with themselves they are not (negative
    control)."""
    made = coarse_noise()
    means = []
    for _ in range(400):
        made.sweep(1)
        means.append(np.bincount(made.owner, weights=made.weight * made.state[0], minlength=N_REP))
    for r in range(1, N_REP):
        assert len(np.intersect1d(made.state[0, made.owner == 0], made.state[0, made.owner == r])) == 0
    # a mean forgets by exp(-0.3) a sweep; the square of that sums to the sweeps that count as one
    lag = np.exp(-0.6)
    error = np.sqrt((1.0 + lag) / (1.0 - lag) / 400)
    found = np.corrcoef(np.array(means).T)
    assert_agrees(found[np.triu_indices(N_REP, 1)], 0.0, error)
    with pytest.raises(AssertionError):
        assert_agrees(np.diag(found), 0.0, error)


# --- seeds and thinned states ---


@pytest.mark.parametrize("per_cell", [4, 16, 64])
def test_seeds_are_as_many_as_wanted_in_their_cells(per_cell: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """In order of cell and replicate, all different; where more are wanted than the Sobol set has points, none is asked
    for beyond its end."""
    plan = plan_of(PLANE, per_cell=per_cell, n_replicate=4)
    sampler = sampler_of("spiral", SPIRAL, plan)
    keys, number = np.array([0, 17, 40, 98]), np.array([3, 1, 11, 16])
    asked, fill = [], sampler.cells.fill_seeds

    def noted(keys: np.ndarray, first: np.ndarray, n_replicate: int, sweep: int, state: np.ndarray) -> None:
        asked.append((int(np.diff(first).max()) // n_replicate, sweep))
        fill(keys, first, n_replicate, sweep, state)

    monkeypatch.setattr(sampler.cells, "fill_seeds", noted)
    state, cell, owner = seeds_in(sampler, keys, number, 3, FIRST_SWEEP)
    assert max(n for n, _ in asked) <= len(sampler.cells.base) == per_cell // 4
    assert [sweep for _, sweep in asked] == list(range(FIRST_SWEEP, FIRST_SWEEP + -(-16 * 4 // per_cell)))
    np.testing.assert_array_equal(cell, np.repeat(np.arange(4), 3 * number))
    np.testing.assert_array_equal(owner, np.concatenate([np.repeat(np.arange(3), n) for n in number]))
    key = np.empty(len(cell), dtype=np.int64)
    sampler.cells.locate(state, key)
    np.testing.assert_array_equal(key, keys[cell])
    assert all(len(np.unique(part)) == 3 * 31 for part in state)
    np.testing.assert_array_equal(seeds_in(sampler, keys, number, 3, FIRST_SWEEP)[0], state)
    assert not np.array_equal(seeds_in(sampler, keys, number, 3, FIRST_SWEEP + 40)[0], state)


def test_seeds_are_spread_over_their_cell() -> None:
    """Uniform: the mean of 512 of them in each cell and replicate; not that of half a cell (negative control)."""
    sampler = sampler_of("spiral", SPIRAL, PLAIN)
    state, cell, owner = seeds_in(sampler, np.array([3, 50]), np.array([512, 512]), 2, FIRST_SWEEP)
    corner = PLANE.lower + PLANE.indices(np.array([3, 50]))[cell] * PLANE.width
    place = (state.T - corner) / PLANE.width
    group = cell * 2 + owner
    means = np.array([place[group == g].mean(axis=0) for g in range(4)])
    # Sobol sets scatter less than independent points
    error = np.sqrt(1.0 / 12.0 / 512.0)
    assert_agrees(means, 0.5, error)
    with pytest.raises(AssertionError):
        assert_agrees(means / 2.0, 0.5, error)


@pytest.mark.parametrize("n_most", [10**5, 2000, 700, 100])
def test_thinned_states_keep_the_weights(n_most: int) -> None:
    """Of every group where there is room for one of each, else of every replicate; they are states of the ensemble,
    with the keys of their cells."""
    made = flown()[1]
    group = made.place * N_REP + made.owner
    n_group = len(np.unique(group))
    few = n_most // n_group
    thin = made.thinned(n_most)
    assert 0 < len(thin.weight) <= n_most
    assert thin.state.shape == (2, len(thin.weight))
    kept = {tuple(point) for point in made.state.T}
    assert {tuple(point) for point in thin.state.T} <= kept
    key = np.empty(len(thin.weight), dtype=np.int64)
    made.sampler.cells.locate(thin.state, key)
    np.testing.assert_array_equal(thin.key, key)
    np.testing.assert_allclose(np.bincount(thin.owner, weights=thin.weight), weights_of(made), rtol=1e-12)
    names = made.keys_at(np.arange(made.known.count + 1))
    place = np.searchsorted(names, thin.key)
    held, left = np.zeros((len(names), N_REP)), np.zeros((len(names), N_REP))
    np.add.at(held, (made.place, made.owner), made.weight)
    np.add.at(left, (place, thin.owner), thin.weight)
    if few:
        np.testing.assert_allclose(left, held, rtol=1e-12)
        number = np.bincount(place * N_REP + thin.owner, minlength=len(names) * N_REP)
        before = np.bincount(group, minlength=len(names) * N_REP)
        np.testing.assert_array_equal(number, np.minimum(before, few))
    else:
        np.testing.assert_array_equal(np.bincount(thin.owner), np.full(N_REP, n_most // N_REP))
        # what comes out of a systematic draw is within one share of what went in
        assert np.abs(left - held).max() <= 1.0 / (n_most // N_REP) + 1e-12
        assert np.abs(left - held).max() > 0.0


def test_thinning_to_all_leaves_all() -> None:
    made = flown()[1]
    thin = made.thinned(10**7)
    np.testing.assert_array_equal(thin.state, made.state)
    np.testing.assert_array_equal(thin.weight, made.weight)
    np.testing.assert_array_equal(thin.owner, made.owner)
