"""Schemes for noisy flows: path by path against a plain version, and their measured weak orders.

All test systems are linear, so that their moments are known in closed form (L. Arnold, Stochastic Differential
Equations, Wiley 1974, section 8.5: moments of linear systems solve linear equations).
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import expm

from helpers.statistics import assert_agrees
from kernels.plain import weak_two
from kernels.support import DRIFT, KICK_1, KICK_2, fly

N = 3_000_000
PAIR = np.array([1.0, 0.5])


def pair_moments(time: float) -> np.ndarray:
    """E[x x], E[x y], E[y x], E[y y] of the pair system at a time, from the start PAIR."""
    one = np.eye(2)
    generator = np.kron(DRIFT, one) + np.kron(one, DRIFT) + np.kron(KICK_1, KICK_1) + np.kron(KICK_2, KICK_2)
    return np.asarray(expm(time * generator) @ np.kron(PAIR, PAIR))


def pair_draws(n: int, step: float, words: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Wiener increments (2, n) and V (2, 2, n) of one step of the kernel `noisy-pair` for stream words."""
    draws = fly("pair-draws", np.zeros((3, n)), stream=words).state
    v = np.zeros((2, 2, n))
    v[1, 0] = np.where(draws[2] >= 0.5, step, -step)
    v[0, 1] = -v[1, 0]
    return np.sqrt(step) * draws[:2], v


def plain_pair(x: np.ndarray, step: float, words: np.ndarray, *, cross: bool = True) -> np.ndarray:
    """One step of the plain version of the weak scheme on the pair system, with the kernel's draws."""
    w, v = pair_draws(x.shape[1], step, words)
    kicks = [lambda x: KICK_1 @ x, lambda x: KICK_2 @ x]
    return weak_two(lambda x: DRIFT @ x, kicks, x, step, w, v, cross=cross)


def words_of(n: int, seed: int) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 2**63, n).astype(np.uint64)


def mean_and_error(sample: np.ndarray) -> tuple[float, float]:
    return float(sample.mean()), float(sample.std() / np.sqrt(sample.size))


def order_of(found: list[tuple[float, float]], exact: float) -> tuple[float, float]:
    """Order and its standard error from (mean, error) at a step and at half of it."""
    (coarse, e1), (fine, e2) = ((mean - exact, error) for mean, error in found)
    return float(np.log2(coarse / fine)), float(np.hypot(e1 / coarse, e2 / fine) / np.log(2.0))


def scalar_order(name: str, parameters: list[float], start: float, power: int, exact: float) -> tuple[float, float]:
    """Order of E[x**power] at time 1, from 4 and 8 steps."""
    found = []
    for n_step in (4, 8):
        x = np.full(N, start)
        flown = fly(name, x, parameters=parameters, step=1.0 / n_step, n_step=n_step, stream=words_of(N, n_step))
        found.append(mean_and_error(flown.state[0] ** power))
    return order_of(found, exact)


def test_weak_scheme_agrees_with_plain_version() -> None:
    """Two noises that do not commute: every lane after one step, drawn from the same streams."""
    words = words_of(5000, 1)
    x = np.random.default_rng(2).uniform(-1.0, 1.0, (2, 5000))
    found = fly("noisy-pair", x, step=0.3, stream=words).state
    np.testing.assert_allclose(found, plain_pair(x, 0.3, words), rtol=0.0, atol=1e-14)
    assert np.abs(found - plain_pair(x, 0.3, words, cross=False)).max() > 0.01, "the control must differ"


def test_euler_agrees_with_plain_version() -> None:
    """One noise: the two normals of a pair serve two steps."""
    words = words_of(1000, 3)
    z = [fly("pair-draws", np.zeros((3, 1000)), stream=words).state[k] for k in (0, 1)]
    x = np.random.default_rng(4).uniform(-1.0, 1.0, 1000)
    found = fly("euler", x, parameters=[0.2, -0.7, 0.3, 0.5], step=0.1, n_step=2, stream=words).state[0]
    for k in range(2):
        x = x + 0.1 * (0.2 - 0.7 * x) + np.sqrt(0.1) * (0.3 + 0.5 * x) * z[k]
    np.testing.assert_allclose(found, x, rtol=0.0, atol=1e-14)


def one_step_of_moments(step: float, *, cross: bool) -> np.ndarray:
    """What a step of the plain version does to E[x x], ..., exactly: quadrature over the normals, both signs.

    The scheme is linear in the state and of degree 2 in each normal, so that 5 nodes of Gauss and Hermite suffice.
    """
    node, weight = np.polynomial.hermite_e.hermegauss(5)
    first, second, sign = (g.ravel() for g in np.meshgrid(node, node, [1.0, -1.0], indexing="ij"))
    part = np.einsum("i,j,k->ijk", weight, weight, [0.5, 0.5]).ravel() / weight.sum() ** 2
    v = np.zeros((2, 2, part.size))
    v[1, 0], v[0, 1] = step * sign, -step * sign
    w = np.sqrt(step) * np.array([first, second])
    kicks = [lambda x: KICK_1 @ x, lambda x: KICK_2 @ x]
    columns = [
        weak_two(lambda x: DRIFT @ x, kicks, np.repeat(unit[:, None], part.size, axis=1), step, w, v, cross=cross)
        for unit in np.eye(2)
    ]
    matrix = np.stack(columns, axis=1)
    return np.asarray(np.einsum("ikn,jln,n->ijkl", matrix, matrix, part).reshape(4, 4))


def test_plain_version_is_of_order_two_only_with_the_terms_between_noises() -> None:
    """Its moments without sampling error: the plain version, which the kernel follows, is the right scheme."""
    orders = {}
    for cross in (True, False):
        errors = []
        for n in (64, 128):
            step = np.linalg.matrix_power(one_step_of_moments(1.0 / n, cross=cross), n)
            errors.append(step @ np.kron(PAIR, PAIR) - pair_moments(1.0))
        orders[cross] = np.log2(errors[0] / errors[1])
    np.testing.assert_allclose(orders[True], 2.0, atol=0.05)
    np.testing.assert_allclose(orders[False], 1.0, atol=0.15)


def test_weak_scheme_is_of_order_two_for_noise_that_does_not_commute() -> None:
    """E[y y] at time 1 from the kernel; the plain version without the cross terms, on as many draws, is not."""
    exact = float(pair_moments(1.0)[3])
    found, control = [], []
    for n_step in (2, 4):
        step, start = 1.0 / n_step, np.repeat(PAIR[:, None], N, axis=1)
        y = fly("noisy-pair", start, step=step, n_step=n_step, stream=words_of(N, n_step)).state[1]
        found.append(mean_and_error(y**2))
        rough = start[:, : N // 4]
        for k in range(n_step):
            rough = plain_pair(rough, step, words_of(N // 4, 100 * n_step + k), cross=False)
        control.append(mean_and_error(rough[1] ** 2))
    order, error = order_of(found, exact)
    # without sampling error 2 and 4 steps give 1.73, since the next term of the error has the other sign
    assert_agrees(order, 2.0, error, allowance=0.35)
    wrong, error = order_of(control, exact)
    with pytest.raises(AssertionError):
        assert_agrees(wrong, 2.0, error, allowance=0.35)


@pytest.mark.parametrize(("name", "theory"), [("weak2", 2.0), ("euler", 1.0)])
def test_order_for_geometric_brownian_motion(name: str, theory: float) -> None:
    """dx = x dt + 0.3 x dW from 1: E[x^2] = exp(2 + 0.09). The order of the other scheme does not fit."""
    order, error = scalar_order(name, [0.0, 1.0, 0.0, 0.3], 1.0, 2, float(np.exp(2.09)))
    # without sampling error 4 and 8 steps give 1.84 and 0.80
    assert_agrees(order, theory, error, allowance=0.25)
    with pytest.raises(AssertionError):
        assert_agrees(order, 3.0 - theory, error, allowance=0.25)


@pytest.mark.parametrize(
    ("name", "parameters", "theory"),
    [
        ("ornstein", [2.0, 0.6], 2.0),
        ("weak2", [0.0, -2.0, 0.6, 0.0], 2.0),
        ("euler", [0.0, -2.0, 0.6, 0.0], 1.0),
    ],
)
def test_order_for_additive_noise(name: str, parameters: list[float], theory: float) -> None:
    """dx = -2 x dt + 0.6 dW from 2, E[x] = 2 exp(-2): with and without the terms that vanish for such noise."""
    order, error = scalar_order(name, parameters, 2.0, 1, 2.0 * float(np.exp(-2.0)))
    # second order: (1 - h + h^2/2)^(1/h) at h = 2/4 and 2/8 gives 2.26 without any sampling; first order: 1.23
    assert_agrees(order, theory, error, allowance=0.3)
    with pytest.raises(AssertionError):
        assert_agrees(order, 3.0 - theory, error, allowance=0.3)


def test_additive_noise_is_the_special_case_of_the_general_scheme() -> None:
    words, x = words_of(500, 5), np.linspace(-1.0, 1.0, 500)
    short = fly("ornstein", x, parameters=[1.5, 0.4], step=0.1, n_step=9, stream=words)
    full = fly("weak2", x, parameters=[0.0, -1.5, 0.4, 0.0], step=0.1, n_step=9, stream=words)
    np.testing.assert_allclose(short.state, full.state, rtol=0.0, atol=1e-14)


def test_euler_inflates_the_variance_as_it_must() -> None:
    """Stationary variance of the scheme on dx = -x dt + dW, solved by hand: 1 / (2 - step), not 1 / 2."""
    x = fly(
        "euler",
        np.zeros(N // 4),
        parameters=[0.0, -1.0, 1.0, 0.0],
        step=0.4,
        n_step=60,
        stream=words_of(N // 4, 6),
    )
    square, error = mean_and_error(x.state[0] ** 2)
    assert_agrees(square, 1.0 / 1.6, error)
    with pytest.raises(AssertionError):
        assert_agrees(square, 0.5, error)


def test_weak_scheme_keeps_the_variance() -> None:
    """The same law by the scheme of order 2, its stationary variance solved by hand."""
    h = 0.2
    x = fly("ornstein", np.zeros(N // 4), parameters=[1.0, 1.0], step=h, n_step=120, stream=words_of(N // 4, 7))
    square, error = mean_and_error(x.state[0] ** 2)
    # x' = (1 - h + h^2/2) x + (1 - h/2) w: the fixed point of the variance
    factor, kick = 1.0 - h + h * h / 2.0, 1.0 - h / 2.0
    assert_agrees(square, kick**2 * h / (1.0 - factor**2), error)
    assert_agrees(square, 0.5, error, allowance=0.5 * h * h)
    with pytest.raises(AssertionError):
        assert_agrees(square, 1.0 / (2.0 - h), error)
