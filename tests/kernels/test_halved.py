"""Kernels that halve their steps on the same noise: against the ordinary ones, plain versions, and exact laws."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from kernels.plain import split_mix, weak_two
from kernels.support import DRIFT, KICK_1, KICK_2, SPECS, Flown, fly
from perdure._kernels.cache import burst_kernel
from perdure._kernels.generate import SALT, KernelSpec, module_source

N = 200_000
SPIRAL = (0.3, 2.0, 0.5)
# time inside, entries, the same again, then values and squares of two observables
SCALE = np.array([0.5, 1.0, 0.5, 1.0, 0.5, 0.5, 0.5, 0.5])[:, None]
TURN = 2.0 * np.pi
# a hand that goes round at unit speed, seen in the first part of its turn
DIAL = KernelSpec(
    "rk4", ("a",), (), ("1.0",), events=("v_a < 1.0",), observables=("v_a",), periodic=(("a", 0.0, TURN),), halved=True
)


def fly_halved(
    name: str,
    state: Any,
    *,
    parameters: Sequence[float] = (),
    step: float,
    n_step: int,
    stream: np.ndarray | None = None,
    axis: tuple[Any, Any, int] | None = None,
    stride: int = 1,
) -> Flown:
    """Fly a kernel of `SPECS`, or `DIAL`, with halved steps; arguments as those of `fly`, of whole steps."""
    spec = DIAL if name == "dial" else replace(SPECS[name], halved=True)
    out = np.array(state, dtype=float, order="C", ndmin=2)
    n_dim, n = out.shape
    lower, upper, n_interval = axis or (np.zeros(n_dim), np.ones(n_dim), 1)
    values = np.array([*parameters, *np.zeros(len(spec.observables)), 0.0])
    assert len(parameters) == len(spec.parameters)
    sums = np.full((spec.n_sum, n), -7.0)
    slots = np.zeros((n_step // stride if axis else 0, n_dim, n), dtype=np.uint16)
    words = np.arange(n, dtype=np.uint64) if stream is None else stream
    scale, n_slot = n_interval / (upper - lower), float(n_interval + 2)
    blown = burst_kernel(spec)(out, sums, slots, words, values, step, n_step, stride, lower, scale, n_slot)
    return Flown(out, sums, slots, int(blown))


def spiral_starts(n: int) -> np.ndarray:
    return np.random.default_rng(1).uniform(-1.0, 1.0, (2, n))


def words_of(n: int, seed: int) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 2**63, n).astype(np.uint64)


def bridge_words(words: np.ndarray) -> np.ndarray:
    """Words of the second generator."""
    return np.array([split_mix(int(word) ^ SALT) for word in words], dtype=np.uint64)


def draws_of(words: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The first two normals (2, n), and the sign (n,) that follows, of streams."""
    drawn = fly("pair-draws", np.zeros((3, len(words))), stream=words).state
    return drawn[:2], np.where(drawn[2] >= 0.5, 1.0, -1.0)


@pytest.mark.parametrize("n", [1, 65, 200])
def test_flow_is_that_of_twice_as_many_steps(n: int) -> None:
    start = spiral_starts(n)
    halved = fly_halved("spiral", start, parameters=SPIRAL, step=0.1, n_step=10)
    double = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=20)
    np.testing.assert_allclose(halved.state, double.state, rtol=0.0, atol=1e-14)
    whole = fly("spiral", start, parameters=SPIRAL, step=0.1, n_step=10)
    assert np.abs(halved.state - whole.state).max() > 1e-9, "the control must differ"


def test_sums_of_a_flow_are_on_the_scale_of_whole_steps() -> None:
    """Twice as many steps, of which the second belongs to the first whole step as well and is taken off."""
    start, options = spiral_starts(333), {"parameters": SPIRAL, "step": 0.05}
    halved = fly_halved("spiral", start, parameters=SPIRAL, step=0.1, n_step=50).sums
    double = fly("spiral", start, n_step=100, **options).sums
    second = fly("spiral", fly("spiral", start, **options).state, **options).sums
    np.testing.assert_allclose(halved, SCALE * (double - second), rtol=0.0, atol=1e-12)
    assert halved[1].max() >= 2.0, "starts must give several entries"
    for wrong in (SCALE * double, 0.5 * (double - second), double - second):
        assert np.abs(halved - wrong).max() > 0.4, "the controls must differ"


def test_sums_of_a_single_step_are_those_of_both_halves() -> None:
    start, options = spiral_starts(333), {"parameters": SPIRAL, "step": 0.25}
    halved = fly_halved("spiral", start, parameters=SPIRAL, step=0.5, n_step=1).sums
    first = fly("spiral", start, **options)
    second = fly("spiral", first.state, **options)
    np.testing.assert_allclose(halved, SCALE * (first.sums + second.sums), rtol=0.0, atol=1e-14)
    assert (first.sums[1] != second.sums[1]).any()


def test_entries_are_counted_at_half_steps_and_states_wrap_there() -> None:
    """The hand moves by 2 in half a step: every place that it comes to within a turn is seen, as 2 pi > 2 + 1."""
    start = np.random.default_rng(2).uniform(0.0, TURN, 500)
    found = fly_halved("dial", start, step=4.0, n_step=40)
    path = (start + 2.0 * np.arange(81)[:, None]) % TURN
    inside = path < 1.0
    np.testing.assert_allclose(found.state[0], path[-1], rtol=0.0, atol=1e-11)
    np.testing.assert_array_equal(found.sums[0], 0.5 * inside[3:].sum(axis=0))
    np.testing.assert_array_equal(found.sums[1], (inside[3:] & ~inside[2:-1]).sum(axis=0))
    # sums of 78 angles and of their squares, each to the rounding of 80 steps
    np.testing.assert_allclose(found.sums[2], 0.5 * path[3:].sum(axis=0), rtol=0.0, atol=1e-9)
    np.testing.assert_allclose(found.sums[3], 0.5 * (path[3:] ** 2).sum(axis=0), rtol=0.0, atol=1e-8)
    whole = inside[::2]
    assert found.sums[1].mean() > 1.5 * (whole[2:] & ~whole[1:-1]).sum(axis=0).mean(), "whole steps must miss some"


@pytest.mark.parametrize("stride", [1, 3, 4])
def test_marginals_are_tallied_at_whole_steps(stride: int) -> None:
    start, axis = spiral_starts(200), (np.array([-0.5, -0.3]), np.array([0.4, 0.6]), 9)
    halved = fly_halved("spiral", start, parameters=SPIRAL, step=0.1, n_step=12, axis=axis, stride=stride)
    double = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=24, axis=axis, stride=2 * stride)
    assert halved.slots.shape == (12 // stride, 2, 200)
    np.testing.assert_array_equal(halved.slots, double.slots)
    early = fly("spiral", start, parameters=SPIRAL, step=0.05, n_step=24, axis=axis, stride=stride)
    assert np.any(halved.slots != early.slots[: 12 // stride]), "the control must differ"


def test_blow_up_marks_nan_and_leaves_no_sums() -> None:
    start = spiral_starts(130)
    start[:, 3::7] = 50.0
    lost = np.arange(130) % 7 == 3
    flown = fly_halved("spiral", start, parameters=SPIRAL, step=0.1, n_step=20)
    assert flown.blown == lost.sum()
    np.testing.assert_array_equal(np.isnan(flown.state), [lost, lost])
    assert (flown.sums[:, lost] == 0.0).all()


def test_maps_cannot_be_halved() -> None:
    with pytest.raises(ValueError, match="map has no half step"):
        module_source(replace(SPECS["logistic"], halved=True))


@pytest.mark.parametrize(("name", "parameters"), [("euler", [0.0, 0.0, 0.7, 0.0]), ("ornstein", [0.0, 0.7])])
def test_halves_add_up_to_the_increments_of_the_ordinary_kernel(name: str, parameters: list[float]) -> None:
    """dx = 0.7 dW: the same ends to rounding from the same streams, and from no others; an odd number of steps."""
    words, start = words_of(1000, 3), np.zeros(1000)
    options: dict[str, Any] = {"parameters": parameters, "step": 0.3, "n_step": 7}
    whole = fly(name, start, stream=words, **options).state
    np.testing.assert_allclose(fly_halved(name, start, stream=words, **options).state, whole, rtol=0.0, atol=1e-14)
    other = fly_halved(name, start, stream=words[::-1].copy(), **options).state
    assert np.median(np.abs(other - whole)) > 0.1


def test_euler_agrees_with_plain_version() -> None:
    """Two steps of one noise, each as two halves with the normals (z + b) / root(2) and (z - b) / root(2)."""
    words = words_of(1000, 4)
    z, b = draws_of(words)[0], draws_of(bridge_words(words))[0]
    start = np.random.default_rng(5).uniform(-1.0, 1.0, 1000)
    found = fly_halved("euler", start, parameters=[0.2, -0.7, 0.3, 0.5], step=0.2, n_step=2, stream=words).state[0]

    def plain(size: float) -> np.ndarray:
        """End points with bridging normals of that size."""
        x = start
        for k in range(2):
            for side in (size, -size):
                w = np.sqrt(0.1) * (z[k] + side * b[k]) / np.sqrt(2.0)
                x = x + 0.1 * (0.2 - 0.7 * x) + (0.3 + 0.5 * x) * w
        return x

    np.testing.assert_allclose(found, plain(1.0), rtol=0.0, atol=1e-14)
    for wrong in (-1.0, 0.0, 0.9):
        assert np.abs(found - plain(wrong)).max() > 1e-3, "the controls must differ"


def test_weak_scheme_agrees_with_plain_version() -> None:
    """Two noises that do not commute: the first half takes the sign of the step, the second one of its own."""
    words = words_of(5000, 6)
    (z, sign), (b, bridge_sign) = draws_of(words), draws_of(bridge_words(words))
    start = np.random.default_rng(7).uniform(-1.0, 1.0, (2, 5000))
    found = fly_halved("noisy-pair", start, step=0.4, n_step=1, stream=words).state

    def plain(first_sign: np.ndarray, second_sign: np.ndarray) -> np.ndarray:
        x, kicks = start, [lambda x: KICK_1 @ x, lambda x: KICK_2 @ x]
        for side, signs in ((1.0, first_sign), (-1.0, second_sign)):
            v = np.zeros((2, 2, 5000))
            v[1, 0], v[0, 1] = 0.2 * signs, -0.2 * signs
            x = weak_two(lambda x: DRIFT @ x, kicks, x, 0.2, np.sqrt(0.1) * (z + side * b), v)
        return x

    np.testing.assert_allclose(found, plain(sign, bridge_sign), rtol=0.0, atol=1e-14)
    for first, second in ((bridge_sign, sign), (sign, sign), (bridge_sign, bridge_sign)):
        assert np.abs(found - plain(first, second)).max() > 1e-3, "the controls must differ"


@pytest.mark.parametrize("kind", ["run", "counted"])
def test_bridging_draws_are_independent_of_the_others(kind: str) -> None:
    """Correlation coefficients in value and in size, in standard errors; and the first four moments."""
    words = words_of(N, 8) if kind == "run" else np.arange(N, dtype=np.uint64)
    (z, sign), (b, bridge_sign) = draws_of(words), draws_of(bridge_words(words))
    error = 1.0 / np.sqrt(N)
    ones, twos = [*z, sign, *z**2], [*b, bridge_sign, *b**2]
    found = [np.corrcoef(one, two)[0, 1] for one in ones for two in twos]
    assert_agrees(found, 0.0, error)
    moments = [np.mean(b**k, axis=1) for k in range(1, 5)]
    exact, spread = np.array([[0.0], [1.0], [0.0], [3.0]]), np.sqrt([[1.0], [2.0], [15.0], [96.0]])
    assert_agrees(moments, exact, spread * error)
    with pytest.raises(AssertionError):
        assert_agrees(np.corrcoef(z[0], b[0] + 0.02 * z[0])[0, 1], 0.0, error)
    with pytest.raises(AssertionError):
        assert_agrees(np.mean((1.02 * b) ** 2, axis=1), 1.0, np.sqrt(2.0) * error)


def factors(name: str, step: float) -> tuple[float, float]:
    """By how much a step of a scheme multiplies the state of dx = -x dt + dW, and the increment of W."""
    if name == "euler":
        return 1.0 - step, 1.0
    return 1.0 - step + step**2 / 2.0, 1.0 - step / 2.0


def law_of_pair(name: str, step: float, n_step: int, size: float = 1.0) -> tuple[np.ndarray, np.ndarray]:
    """Mean (2,), from 1, and covariance (2, 2) of the ends of a pair, exactly; bridging normals of a size."""
    whole, kick = factors(name, step)
    half, half_kick = factors(name, step / 2.0)
    move = np.diag([whole, half**2])
    from_z = np.sqrt(step) * np.array([kick, half_kick * (half + 1.0) / 2.0])
    from_b = np.sqrt(step) * np.array([0.0, size * half_kick * (half - 1.0) / 2.0])
    mean, cov = np.ones(2), np.zeros((2, 2))
    for _ in range(n_step):
        mean, cov = move @ mean, move @ cov @ move + np.outer(from_z, from_z) + np.outer(from_b, from_b)
    return mean, cov


def ends_of_pairs(name: str, step: float, n_step: int, n: int = N) -> np.ndarray:
    """Ends, shape (2, n), of dx = -x dt + dW from 1 by the ordinary and by the halved kernel."""
    parameters = {"euler": [0.0, -1.0, 1.0, 0.0], "ornstein": [1.0, 1.0]}[name]
    options: dict[str, Any] = {"parameters": parameters, "step": step, "n_step": n_step, "stream": words_of(n, n_step)}
    return np.concatenate([fly(name, np.ones(n), **options).state, fly_halved(name, np.ones(n), **options).state])


def assert_variance(sample: np.ndarray, exact: float) -> None:
    """Variance of a normal sample, whose standard error is exact * root(2 / n)."""
    assert_agrees(sample.var(), exact, exact * np.sqrt(2.0 / sample.size))


@pytest.mark.parametrize("name", ["euler", "ornstein"])
def test_pairs_have_their_joint_law(name: str) -> None:
    """Means, covariance, and the variance of the difference, of Gaussian pairs, against exact values."""
    ends = ends_of_pairs(name, 0.5, 3)
    mean, cov = law_of_pair(name, 0.5, 3)
    assert_agrees(ends.mean(axis=1), mean, np.sqrt(np.diag(cov) / N))
    error = np.sqrt((np.outer(np.diag(cov), np.diag(cov)) + cov**2) / N)
    assert_agrees(np.cov(ends), cov, error)
    apart = np.array([1.0, -1.0])
    assert_variance(ends[0] - ends[1], apart @ cov @ apart)
    assert cov[0, 1] / np.sqrt(cov[0, 0] * cov[1, 1]) > 0.98, "ends of a pair must be strongly correlated"
    with pytest.raises(AssertionError):
        assert_agrees(np.cov(ends[0], np.roll(ends[1], 1)), cov, error)
    for size in (0.9, 1.1):
        wrong = law_of_pair(name, 0.5, 3, size)[1]
        with pytest.raises(AssertionError):
            assert_variance(ends[0] - ends[1], apart @ wrong @ apart)


@pytest.mark.parametrize("name", ["euler", "ornstein"])
def test_halved_ends_have_the_law_of_half_the_step(name: str) -> None:
    """Variance of six steps of half the length, a geometric sum; steps so long that the size of b matters."""
    ends = ends_of_pairs(name, 1.0, 3)

    def variance(step: float, n_step: int) -> float:
        factor, kick = factors(name, step)
        return float(kick**2 * step * sum(factor ** (2 * k) for k in range(n_step)))

    assert_variance(ends[1], variance(0.5, 6))
    assert_variance(ends[0], variance(1.0, 3))
    for wrong in (variance(1.0, 3), law_of_pair(name, 1.0, 3, 0.7)[1][1, 1], law_of_pair(name, 1.0, 3, 1.3)[1][1, 1]):
        with pytest.raises(AssertionError):
            assert_variance(ends[1], wrong)


def test_a_sample_with_a_bridge_of_wrong_size_is_caught() -> None:
    """Negative control of the variance above: numpy's normals, the right size passes and a size of 1.3 does not."""
    z, b = np.random.default_rng(9).standard_normal((2, 3, N))
    exact = law_of_pair("euler", 1.0, 3)[1][1, 1]

    def sample(size: float) -> np.ndarray:
        x = np.ones(N)
        for k in range(3):
            for side in (size, -size):
                x = 0.5 * x + np.sqrt(0.25) * (z[k] + side * b[k])
        return x

    assert_variance(sample(1.0), exact)
    with pytest.raises(AssertionError):
        assert_variance(sample(1.3), exact)


def order(coarse: float, fine: float, coarse_error: float, fine_error: float) -> tuple[float, float]:
    """Order in the step from values at a step and at half of it, and its standard error."""
    error = np.hypot(coarse_error / coarse, fine_error / fine) / np.log(2.0)
    return float(np.log2(coarse / fine)), float(error)


@pytest.mark.parametrize(("name", "weak"), [("euler", 1.0), ("ornstein", 2.0)])
def test_differences_of_pairs_shrink_with_the_order_of_the_scheme(name: str, weak: float) -> None:
    """4 and 8 steps to time 1: the spread with the strong order for additive noise, 1; the mean with the weak one."""
    apart = [np.subtract(*ends_of_pairs(name, 1.0 / n, n, 5 * N)) for n in (4, 8)]
    spread = [float(sample.std()) for sample in apart]
    found, error = order(*spread, *(s / np.sqrt(2.0 * 5 * N) for s in spread))
    # without sampling error, from the exact law of the pairs: 1.10 (euler) and 1.00
    assert_agrees(found, 1.0, error, allowance=0.2)
    for wrong in (0.5, 1.5):
        with pytest.raises(AssertionError):
            assert_agrees(found, wrong, error, allowance=0.2)
    mean = [abs(float(sample.mean())) for sample in apart]
    found, error = order(*mean, *(s / np.sqrt(5.0 * N) for s in spread))
    # likewise: 1.13 (euler) and 2.16
    assert_agrees(found, weak, error, allowance=0.2)
    with pytest.raises(AssertionError):
        assert_agrees(found, 3.0 - weak, error, allowance=0.2)


def test_noise_that_does_not_commute_has_the_mean_of_half_the_step() -> None:
    """On the linear pair the mean of the weak scheme is a product of 1 + A h + (A h)^2 / 2; h = 0.5 is told apart."""
    start = np.repeat([[1.0], [0.5]], N, axis=1)
    options: dict[str, Any] = {"step": 0.5, "n_step": 2, "stream": words_of(N, 10)}
    whole = fly("noisy-pair", start, **options).state
    halved = fly_halved("noisy-pair", start, **options).state

    def mean(step: float, n_step: int) -> np.ndarray:
        one = np.eye(2) + step * DRIFT + step**2 / 2.0 * DRIFT @ DRIFT
        return np.asarray(np.linalg.matrix_power(one, n_step) @ start[:, 0])

    assert_agrees(halved.mean(axis=1), mean(0.25, 4), halved.std(axis=1) / np.sqrt(N))
    difference = halved - whole
    error = difference.std(axis=1) / np.sqrt(N)
    assert_agrees(difference.mean(axis=1), mean(0.25, 4) - mean(0.5, 2), error)
    assert (difference.std(axis=1) < 0.5 * halved.std(axis=1)).all(), "ends of a pair must be correlated"
    with pytest.raises(AssertionError):
        assert_agrees(difference.mean(axis=1), 0.0, error)
