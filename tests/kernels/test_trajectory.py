"""Trajectory kernels against plain Python: steps, noise, events, sums, histograms, samples, low bits."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.stats import kstest

from helpers.statistics import assert_agrees
from kernels.plain import Stream, runge_kutta, weak_two
from kernels.support import DRIFT, KICK_1, KICK_2, SPECS, parameter_array
from perdure._kernels.cache import trajectory_kernel
from perdure._kernels.generate import KernelSpec
from perdure._kernels.schemes import SCHEMES
from perdure._kernels.trajectory import MOST_STEPS, OWN_SCHEMES, PACKED, TOGETHER, steps_together

SPIRAL = (0.3, 2.0, 0.5)
FLIP = (1.0, -1.0, 0.0)
# largest part of the way to the middle that a step of a map begins nearer
MOVED = 2.0**-49
# more than fit into one word, one of which holds always
EVENTS: dict[str, Callable[[np.ndarray, np.ndarray], np.ndarray]] = {
    "v_x > 0.2": lambda x, y: x > 0.2,
    "v_x*v_x + v_y*v_y < 0.3": lambda x, y: x * x + y * y < 0.3,
    "v_y < 0.1": lambda x, y: y < 0.1,
    "v_x < 100.0": lambda x, y: x < 100.0,
    "(v_x > 0.0) & (v_y > 0.0)": lambda x, y: (x > 0.0) & (y > 0.0),
}
FLOW = replace(SPECS["spiral"], scheme="three-eighths", events=tuple(EVENTS))
KERNELS = {
    "flow": FLOW,
    # 1 - x for (1, -1, 0), r x (1 - x) for (0, r, -r)
    "map": KernelSpec(
        "map",
        ("x",),
        ("p", "q", "s"),
        ("v_p + v_x * (v_q + v_s * v_x)",),
        events=("v_x > 0.5", "v_x < 2.0", "v_x < 0.5", "v_x > 0.4"),
        observables=("v_x", "f_log(v_x)"),
    ),
    "bare map": replace(SPECS["logistic"], events=(), observables=()),
    "pair": SPECS["noisy-pair"],
    "ornstein": replace(SPECS["ornstein"], events=("v_x > 0.3",), observables=("v_x",)),
    # a draw of each law
    "noisy map": KernelSpec(
        "map",
        ("a", "u"),
        ("c",),
        ("v_c*v_a + v_e", "v_h"),
        draws=(("e", "normal"), ("h", "uniform")),
    ),
    # two hands that go round, one of them backwards
    "hands": KernelSpec(
        "three-eighths", ("a", "b"), (), ("1.0", "-0.7"), periodic=(("a", 0.0, 2.0 * np.pi), ("b", -1.0, 2.5))
    ),
    "doubling": SPECS["doubling"],
    "identity": replace(SPECS["functions"], observables=()),
}


@dataclass(frozen=True)
class Followed:
    """What a flight filled: state (n_dim, n), sums (n_sum, n), counts (n, n_dim, n_slot), samples, lost lanes."""

    state: np.ndarray
    sums: np.ndarray
    counts: np.ndarray
    samples: np.ndarray
    lost: int


def follow(
    name: str,
    state: Any,
    *,
    parameters: Sequence[float] = (0.0,),
    centres: Sequence[float] | None = None,
    step: float = 1.0,
    n_step: int = 8,
    stream: np.ndarray | None = None,
    axis: tuple[Any, Any, int] | None = None,
    stride: int | None = None,
    every: int | None = None,
    n_sample: int | None = None,
    low_bits: int = 0,
    moved: float = 0.0,
    after: Followed | None = None,
) -> Followed:
    """Fly a kernel of `KERNELS` from state (n_dim, n), or go on `after` another flight.

    `axis` holds lower ends, upper ends and the number of intervals; histograms are taken every `stride` steps, samples
    every `every`, as many as there are unless `n_sample` is given. `low_bits`: of the bits drawn anew.
    """
    spec, together = KERNELS[name], steps_together(KERNELS[name])
    out = np.array(state if after is None else after.state, dtype=float, order="C", ndmin=2)
    n_dim, n = out.shape
    lower, upper, n_interval = axis or (np.zeros(n_dim), np.ones(n_dim), 1)
    lower, upper = np.asarray(lower, dtype=float), np.asarray(upper, dtype=float)
    sums = np.zeros((spec.n_sum, n)) if after is None else after.sums.copy()
    counts = np.zeros((n, n_dim, n_interval + 2), dtype=np.int64) if after is None else after.counts.copy()
    never = 2 * n_step + together
    n_sample = (0 if every is None else n_step // every) if n_sample is None else n_sample
    samples = np.full((n_sample, n_dim, n), -7.0)
    words = np.arange(n, dtype=np.uint64) if stream is None else stream
    values = np.array([*list(parameters)[: len(spec.parameters)], *(centres or [0.0] * len(spec.observables))] or [0.0])
    lost = trajectory_kernel(spec)(
        out, sums, counts, samples, words, values, float(step), n_step, stride or never, every or never, lower,
        n_interval / (upper - lower), np.uint64(2**low_bits - 1), moved,
    )  # fmt: skip
    return Followed(out, sums, counts, samples, int(lost))


def points_of(name: str, n_step: int, every: int, *, counted: bool = False) -> np.ndarray:
    """Steps whose states are sampled, or counted in histograms, every so many steps.

    The steps that a kernel tests together end at a multiple of `every`; their states are taken in turn, from the first
    on in samples and from the second on in histograms.
    """
    together, number = steps_together(KERNELS[name]), np.arange(1, n_step // every + 1)
    member = (number if counted else number - 1) % together
    return np.asarray(number * every - together + 1 + member)


def spiral(x: np.ndarray) -> np.ndarray:
    a, w, q = SPIRAL
    return np.array([-a * x[0] + w * x[1] + q * x[0] ** 2, -w * x[0] - a * x[1]])


def three_eighths(f: Callable[[np.ndarray], np.ndarray], x: np.ndarray, step: float) -> np.ndarray:
    """Kutta's second scheme of order 4, the three-eighths rule (Z. Math. Phys. 46 (1901) 435-453)."""
    k1 = f(x)
    k2 = f(x + step / 3 * k1)
    k3 = f(x + step * (k2 - k1 / 3))
    k4 = f(x + step * (k1 - k2 + k3))
    return np.asarray(x + step / 8 * (k1 + 3 * k2 + 3 * k3 + k4))


def starts(n: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).uniform(-1.0, 1.0, (2, n))


def spiral_path(start: np.ndarray, step: float, n_step: int) -> np.ndarray:
    """States from the start on, shape (n_step + 1, 2, n)."""
    path = [start]
    for _ in range(n_step):
        path.append(three_eighths(spiral, path[-1], step))
    return np.array(path)


def event_sums(inside: np.ndarray) -> np.ndarray:
    """Steps inside and entries, shape (2, n), from membership (n_step + 1, n) that begins at the start."""
    return np.array([inside[1:].sum(axis=0), (inside[1:] & ~inside[:-1]).sum(axis=0)], dtype=float)


def words_of(n: int, seed: int) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 2**64, n, dtype=np.uint64)


# ------------------------------------------------------------------------------------------ steps


def test_the_scheme_of_a_flow_is_not_that_of_its_bursts() -> None:
    assert OWN_SCHEMES["rk4"] == "three-eighths"
    assert set(OWN_SCHEMES) | set(OWN_SCHEMES.values()) <= set(SCHEMES)
    start = starts(50)
    ours, theirs = three_eighths(spiral, start, 0.05), runge_kutta(spiral, start, 0.05)
    assert 1e-10 < np.abs(ours - theirs).max() < 1e-6, "of the same order, but not the same"
    found = follow("flow", start, parameters=SPIRAL, step=0.05, n_step=8).state
    for _ in range(7):
        ours, theirs = three_eighths(spiral, ours, 0.05), runge_kutta(spiral, theirs, 0.05)
    assert np.abs(found - ours).max() < 1e-14
    assert np.abs(found - theirs).max() > 1e-10


@pytest.mark.parametrize("n", [1, 5, 63, 64, 65, 200])
def test_a_flow_agrees_with_the_plain_version(n: int) -> None:
    """Any number of lanes, also one that is not a multiple of the 64 flown together; every few steps."""
    start = starts(n)
    flown = follow("flow", start, parameters=SPIRAL, step=0.05, n_step=40, every=8)
    path = spiral_path(start, 0.05, 40)
    assert flown.samples.shape == (5, 2, n)
    assert points_of("flow", 40, 8).tolist() == [1, 10, 19, 28, 37]
    np.testing.assert_allclose(flown.samples, path[points_of("flow", 40, 8)], rtol=0.0, atol=2e-14)
    np.testing.assert_allclose(flown.state, path[40], rtol=0.0, atol=2e-14)
    assert flown.lost == 0


def test_the_three_eighths_rule_has_order_four() -> None:
    """On equations that are not linear, where schemes of order 4 differ; 16 times less at half the step.

    The truth is from Dormand and Prince's method of order 8 at a tolerance of 1e-13.
    """
    start = np.array([[0.7], [-0.4]])
    exact = solve_ivp(lambda _, x: spiral(x), (0.0, 2.0), start[:, 0], method="DOP853", rtol=1e-13, atol=1e-15).y[:, -1]
    errors = [
        np.linalg.norm(follow("flow", start, parameters=SPIRAL, step=2.0 / n, n_step=n).state[:, 0] - exact)
        for n in (40, 80, 160)
    ]
    assert errors[-1] > 1e-10, "above the rounding and above the error of the truth"
    orders = np.log2(np.array(errors[:-1]) / np.array(errors[1:]))
    # the next term of the error is a step's part of the first, here up to 5 percent: 0.07 in the order
    assert_agrees(orders, 4.0, 0.0, allowance=0.1)
    with pytest.raises(AssertionError):
        assert_agrees(orders, 3.0, 0.0, allowance=0.1)


def test_a_map_agrees_with_the_plain_version_step_by_step() -> None:
    """Every step from the state before it, to rounding where states are not moved; the last is where the call ends."""
    n, r = 100, 3.9
    x = np.random.default_rng(2).uniform(0.0, 1.0, n)
    flown = follow("bare map", x, parameters=[r], n_step=50, every=1, stream=words_of(n, 3))
    path = np.concatenate([x[None], flown.samples[:, 0]])
    image = r * path[:-1] * (1.0 - path[:-1])
    np.testing.assert_allclose(path[1:], image, rtol=0.0, atol=4.0 * 2.0**-53)
    np.testing.assert_array_equal(flown.state, flown.samples[-1])
    # negative control: another parameter, and the state one step on
    assert np.abs(path[1:] - image * (3.9000001 / r)).max() > 1e-8
    assert np.abs(path[2:] - image[:-1]).max() > 0.1


@pytest.mark.parametrize("middle", [0.25, 1.5])
def test_a_step_of_a_map_begins_nearer_the_middle(middle: float) -> None:
    """By a part of at most `moved` of the way and of the state; far more than usual here, so that it can be seen."""
    n, r, moved = 200, 3.9, 1e-6
    x = np.random.default_rng(2).uniform(0.0, 1.0, n)
    axis = ([middle - 0.75], [middle + 0.75], 10)
    options: dict[str, Any] = {"parameters": [r], "n_step": 50, "every": 1, "axis": axis}
    flown = follow("bare map", x, moved=moved, stream=words_of(n, 3), **options).samples[:, 0]
    path = np.concatenate([x[None], flown])
    before, slope = path[:-1], r * (1.0 - 2.0 * path[:-1])
    clear = np.abs(slope) > 0.1
    moves = ((path[1:] - r * before * (1.0 - before)) / np.where(clear, slope, 1.0))[clear]
    most = (moved * (middle - before + np.where(before < middle, before, -before)))[clear]
    part = moves / most
    # the curve of the map bends by the square of a move, 1e-12; rounding is 1e-16 over moves of 1e-7
    assert part.min() > -1e-4
    assert part.max() < 1.0 + 1e-4
    error = np.sqrt(1.0 / 12.0 / part.size)
    assert_agrees(part.mean(), 0.5, error, allowance=1e-4)
    with pytest.raises(AssertionError):
        assert_agrees(part.mean(), 0.45, error, allowance=1e-4)


def test_what_moves_a_state_is_even_and_goes_inwards() -> None:
    """The identity from 1 and from -1, its middle at 0: states move by an even part of 2^-48."""
    n = 4096
    state = np.tile([[1.0], [0.0], [-1.0]], n)
    axis = (np.full(3, -1.0), np.full(3, 1.0), 7)
    found = follow("identity", state, n_step=1, axis=axis, stream=words_of(n, 4), moved=MOVED).state
    np.testing.assert_array_equal(found[1], 0.0)
    np.testing.assert_array_equal(found[2], -found[0])
    part = (1.0 - found[0]) / (2.0 * MOVED)
    assert part.min() >= 0.0
    assert part.max() <= 1.0
    # in units of 2^-53 the part is rounded, half of the time each way
    error = np.sqrt(1.0 / 12.0 / n)
    assert_agrees(part.mean(), 0.5, error)
    with pytest.raises(AssertionError):
        assert_agrees(part.mean(), 0.45, error)
    still = follow("identity", state, n_step=1, axis=axis, stream=words_of(n, 4)).state
    np.testing.assert_array_equal(still, state)


def test_an_unstable_point_that_rounding_hits_is_left() -> None:
    """x -> 4 x (1 - x) from 0.5: 1, then 0 for ever; where states are moved, the law becomes that of the long run.

    The arcsine law: S. M. Ulam and J. von Neumann, Bull. Amer. Math. Soc. 53 (1947) 1120.
    """
    n = 4096
    options: dict[str, Any] = {"parameters": [4.0], "n_step": 200, "stream": words_of(n, 5)}
    still = follow("bare map", np.full(n, 0.5), **options).state[0]
    assert np.all(still == 0.0), "negative control: it stays at the point"
    found = follow("bare map", np.full(n, 0.5), moved=MOVED, **options).state[0]
    assert found.min() > 0.0
    assert found.max() < 1.0
    # Kolmogorov's limit law passes this with probability 2 exp(-2 * 2.7**2) = 9e-7 (A. N. Kolmogorov, 1933)
    angle = 2.0 / np.pi * np.arcsin(np.sqrt(found))
    assert kstest(angle, "uniform").statistic * np.sqrt(n) < 2.7
    assert kstest(found, "uniform").statistic * np.sqrt(n) > 2.7, "the control must fail"


def test_where_a_step_ends_is_not_touched() -> None:
    """A map that goes to 0.5 from anywhere is at the edge of x > 0.5, not beyond, though its steps begin elsewhere."""
    flown = follow("map", [0.1, 0.5], parameters=[0.5, 0.0, 0.0], n_step=80, axis=([1.0], [3.0], 4), moved=0.1)
    np.testing.assert_array_equal(flown.state, 0.5)
    np.testing.assert_array_equal(flown.sums[:2], 0.0)
    # negative control: the identity is moved over the edge
    moved = follow("map", [0.1, 0.5], parameters=[0.0, 1.0, 0.0], n_step=80, axis=([1.0], [3.0], 4), moved=0.1)
    assert np.all(moved.sums[0] > 0.0)


def test_a_hand_wraps_after_every_step() -> None:
    """Forwards and backwards, over many turns and from beyond the ends; no step comes to an end itself."""
    start = np.array([[0.0, 3.0, 6.2, -1.0, 20.0], [-1.0, 0.0, 1.4, 9.0, -30.0]])
    flown = follow("hands", start, step=0.23, n_step=200, every=1, axis=([0.0, -1.0], [2.0 * np.pi, 1.5], 4), stride=1)
    t = 0.23 * np.arange(1, 201)[:, None]
    a = (start[0] + t) % (2.0 * np.pi)
    b = (start[1] - 0.7 * t + 1.0) % 2.5 - 1.0
    assert flown.samples[:, 0].min() >= 0.0
    assert flown.samples[:, 0].max() <= 2.0 * np.pi
    assert flown.samples[:, 1].min() >= -1.0
    assert flown.samples[:, 1].max() <= 1.5
    # where rounding puts a hand on the other side of its end, it is as near on the circle
    for found, plain, period in ((flown.samples[:, 0], a, 2.0 * np.pi), (flown.samples[:, 1], b, 2.5)):
        gap = found - plain
        assert np.abs(gap - period * np.round(gap / period)).max() < 1e-12
        assert np.abs(gap).max() < 1e-12 or np.abs(gap).max() > period - 1e-12
    assert flown.counts[:, :, 1:-1].sum() == 200 * 2 * 5, "nothing beyond the ends"


# ------------------------------------------------------------------------------------------ noise


def test_a_noisy_flow_agrees_with_the_plain_version() -> None:
    """Two noises that do not commute, path by path: normals and signs of each step from the plain stream."""
    n, h, words = 70, 0.1, words_of(70, 6)
    start = starts(n, 7)
    flown = follow("pair", start, step=h, n_step=6, every=1, stream=words)
    streams = [Stream(int(w)) for w in words]
    kicks = [lambda x: KICK_1 @ x, lambda x: KICK_2 @ x]
    x, bare = start, start
    for found in flown.samples:
        w, v = np.empty((2, n)), np.zeros((2, 2, n))
        for lane, stream in enumerate(streams):
            w[:, lane] = np.sqrt(h) * np.array(stream.pair())
            v[1, 0, lane] = h if stream.bits() >> 63 else -h
        v[0, 1] = -v[1, 0]
        x = weak_two(lambda x: DRIFT @ x, kicks, x, h, w, v)
        np.testing.assert_allclose(found, x, rtol=0.0, atol=1e-13)
        bare = weak_two(lambda x: DRIFT @ x, kicks, bare, h, w, np.zeros_like(v))
    assert np.abs(flown.state - bare).max() > 1e-3, "the control must differ: without the signs"


def test_one_normal_a_step_comes_in_pairs() -> None:
    """The kernel of one noise fills two steps at once; and eight steps in a row follow the plain stream."""
    theta, sigma, h = 0.8, 0.5, 0.125
    words = words_of(66, 8)
    path = [np.random.default_rng(9).uniform(-1.0, 1.0, 66)]
    flown = follow("ornstein", path[0], parameters=[theta, sigma], step=h, n_step=72, every=8, stream=words)
    streams = [Stream(int(w)) for w in words]
    for _ in range(36):
        for z in np.array([stream.pair() for stream in streams]).T:
            w, v = np.sqrt(h) * z[None], np.zeros((1, 1, 66))
            noise = [lambda x: np.full_like(x, sigma)]
            path.append(weak_two(lambda x: -theta * x, noise, path[-1][None], h, w, v)[0])
    steps = points_of("ornstein", 72, 8)
    assert steps.tolist() == [1, 10, 19, 28, 37, 46, 55, 64, 65]
    np.testing.assert_allclose(flown.samples[:, 0], np.array(path)[steps], rtol=0.0, atol=1e-13)
    np.testing.assert_allclose(flown.state[0], path[72], rtol=0.0, atol=1e-13)


def test_a_noisy_flow_has_the_right_law() -> None:
    """Ornstein-Uhlenbeck: variance and correlation in time of the scheme's own recursion, which is linear.

    With noise that does not depend on the state it is x -> (1 - a + a^2/2) x + sigma root(h) (1 - a/2) z, a = theta h.
    """
    n, theta, sigma, h = 40_000, 1.2, 0.7, 0.05
    flown = follow(
        "ornstein", np.zeros(n), parameters=[theta, sigma], step=h, n_step=240, every=8, stream=words_of(n, 10)
    )
    factor = 1.0 - theta * h + 0.5 * (theta * h) ** 2
    kick = sigma**2 * h * (1.0 - 0.5 * theta * h) ** 2
    stationary = kick / (1.0 - factor**2)
    last, before = flown.samples[-1, 0], flown.samples[-2, 0]
    first, second = points_of("ornstein", 240, 8)[-2:]
    lag = factor ** (second - first)
    variance = stationary * (1.0 - factor ** (2 * second))
    error = variance / np.sqrt(n)
    assert_agrees(last.mean(), 0.0, np.sqrt(variance / n))
    assert_agrees(last.var(), variance, np.sqrt(2.0) * error)
    # the variance of the earlier sample, and what is left of it
    held = stationary * (1.0 - factor ** (2 * first)) * lag
    assert_agrees(np.mean(last * before), held, np.sqrt(1.0 + lag**2) * error)
    assert kstest(last / np.sqrt(variance), "norm").statistic * np.sqrt(n) < 2.7
    # control: a variance that is 5 percent off, and a state that does not forget
    with pytest.raises(AssertionError):
        assert_agrees(last.var(), 1.05 * variance, np.sqrt(2.0) * error)
    with pytest.raises(AssertionError):
        assert_agrees(np.mean(last * before), variance, np.sqrt(1.0 + lag**2) * error)


def test_a_noisy_map_agrees_with_the_plain_version() -> None:
    """Normals of two steps first, then their uniforms, from the plain stream."""
    n, c = 67, 0.6
    words = words_of(n, 11)
    start = starts(n, 12)
    flown = follow("noisy map", start, parameters=[c], n_step=8, stream=words)
    streams = [Stream(int(w)) for w in words]
    a = start[0]
    for _ in range(4):
        z = np.array([stream.pair() for stream in streams])
        u = np.array([[stream.uniform() for _ in range(2)] for stream in streams])
        a = c * (c * a + z[:, 0]) + z[:, 1]
    np.testing.assert_allclose(flown.state[0], a, rtol=0.0, atol=1e-13)
    np.testing.assert_array_equal(flown.state[1], u[:, 1])


def test_a_noisy_map_has_the_right_law() -> None:
    """a -> 0.6 a + e has the variance 1/(1 - 0.36) and forgets by 0.6 a step; u is even and independent of it."""
    n, c = 100_000, 0.6
    flown = follow("noisy map", np.zeros((2, n)), parameters=[c], n_step=64, every=2, stream=words_of(n, 13))
    (before, _), (a, u) = flown.samples[-2:]
    lag = c ** np.diff(points_of("noisy map", 64, 2)[-2:])[0]
    deviation = 1.0 / np.sqrt(1.0 - c * c)
    score = a / deviation
    error = 1.0 / np.sqrt(n)
    for found, exact, spread in (
        (score.mean(), 0.0, 1.0),
        (score.var(), 1.0, np.sqrt(2.0)),
        (np.mean(score * before) / deviation, lag, np.sqrt(1.0 + lag**2)),
        (np.mean(score * (u - 0.5)) * np.sqrt(12.0), 0.0, 1.0),
    ):
        assert_agrees(found, exact, spread * error)
        with pytest.raises(AssertionError):
            assert_agrees(found, exact + 0.05, spread * error)
    for sample, law, wrong in ((score, "norm", "uniform"), (u, "uniform", "norm")):
        assert kstest(sample, law).statistic * np.sqrt(n) < 2.7
        assert kstest(sample, wrong).statistic * np.sqrt(n) > 2.7


@pytest.mark.parametrize("name", ["ornstein", "noisy map", "map"])
def test_lanes_do_not_depend_on_their_neighbours(name: str) -> None:
    words, n_dim = words_of(100, 15), len(KERNELS[name].state)
    start = np.random.default_rng(16).uniform(0.1, 0.9, (n_dim, 100))
    options: dict[str, Any] = {
        "parameters": [0.0, 3.9, -3.9] if name == "map" else [0.9, 0.3],
        "step": 0.1,
        "n_step": 48,
        "moved": MOVED,
    }
    whole = follow(name, start, stream=words, **options)
    part = follow(name, start[:, 61:72], stream=words[61:72], **options)
    np.testing.assert_array_equal(whole.state[:, 61:72], part.state)
    np.testing.assert_array_equal(whole.sums[:, 61:72], part.sums)
    other = follow(name, start[:, 61:72], stream=words[60:71], **options)
    assert np.any(other.state != part.state), "the stream matters"


# ------------------------------------------------------------------------------------------- sums


def flow_sums(path: np.ndarray, centres: Sequence[float] = (0.0, 0.0)) -> np.ndarray:
    """Sums of the kernel `flow` over a path (n_step + 1, 2, n), by plain numpy."""
    x, y = path[:, 0], path[:, 1]
    rows = [event_sums(condition(x, y)) for condition in EVENTS.values()]
    for value, centre in zip((x, x * y), centres, strict=True):
        apart = value[1:] - centre
        rows.append(np.array([apart.sum(axis=0), (apart**2).sum(axis=0)]))
    return np.concatenate(rows)


def test_sums_of_a_flow_agree_with_recorded_paths() -> None:
    """Time inside and entries of five events, which take two words; sums and squares of two observables."""
    n, n_event = 333, len(EVENTS)
    assert n_event > PACKED
    start = starts(n)
    flown = follow("flow", start, parameters=SPIRAL, step=0.05, n_step=400)
    expected = flow_sums(spiral_path(start, 0.05, 400))
    np.testing.assert_array_equal(flown.sums[: 2 * n_event], expected[: 2 * n_event])
    np.testing.assert_allclose(flown.sums[2 * n_event :], expected[2 * n_event :], rtol=0.0, atol=1e-11)
    assert flown.sums[1].max() >= 2.0, "several entries"
    assert np.all(flown.sums[6] == 400.0), "the event that holds always"
    assert np.all(flown.sums[7] == 0.0), "which no trajectory enters"


def test_sums_notice_a_shift_by_one_step() -> None:
    """Negative control: from the start on instead of from the first step, other sums come out."""
    start = starts(333)
    flown = follow("flow", start, parameters=SPIRAL, step=0.05, n_step=400)
    path = spiral_path(start, 0.05, 400)
    shifted = flow_sums(np.concatenate([path[:1], path[:-1]]))
    assert np.any(flown.sums[0] != shifted[0])


def test_an_entry_between_two_calls_counts_once() -> None:
    """Several calls leave what one call leaves in state and sums; entries from the given state on."""
    start = starts(130)
    axis = ([-0.6, -0.5], [0.8, 0.6], 12)
    options: dict[str, Any] = {"parameters": SPIRAL, "step": 0.05, "axis": axis, "stride": 8}
    whole = follow("flow", start, n_step=240, **options)
    parts = follow("flow", start, n_step=8, **options)
    for _ in range(29):
        parts = follow("flow", start, n_step=8, after=parts, **options)
    np.testing.assert_array_equal(parts.state, whole.state)
    np.testing.assert_array_equal(parts.sums[: 2 * len(EVENTS)], whole.sums[: 2 * len(EVENTS)])
    np.testing.assert_allclose(parts.sums[2 * len(EVENTS) :], whole.sums[2 * len(EVENTS) :], rtol=1e-13, atol=1e-13)
    assert parts.counts.sum() == whole.counts.sum() == 2 * 30 * 130
    # negative control: entries that the first step of a call makes are not few
    path = spiral_path(start, 0.05, 240)[:, 0] > 0.2
    assert (path[1::8] & ~path[0:-1:8]).sum() > 10


def test_an_entry_needs_a_start_outside() -> None:
    """Begun inside, no entry; begun outside, the first step may be one. x -> 1 - x from 0.4, 0.6, 0.45, 0.3."""
    flown = follow("map", [[0.4, 0.6, 0.45, 0.3]], parameters=FLIP)
    expected = [
        [4, 4, 4, 4],  # x > 0.5
        [4, 4, 4, 4],
        [8, 8, 8, 8],  # x < 2
        [0, 0, 0, 0],
        [4, 4, 4, 4],  # x < 0.5
        [4, 4, 4, 4],
        # x > 0.4, to which 1 - 0.6 does not belong, being 0.4 itself
        [4, 4, 8, 4],
        [4, 4, 0, 4],
    ]
    np.testing.assert_array_equal(flown.sums[:8], expected)


def test_counters_hold_the_most_steps_of_a_call() -> None:
    """Events that share a word do not spill into each other, even where all hold at every step."""
    n_step = MOST_STEPS
    assert n_step % TOGETHER == 0
    sums = follow("map", [[0.45, 0.55, 0.1]], parameters=FLIP, n_step=n_step).sums
    half = n_step // 2
    expected = [[half] * 3, [half] * 3, [n_step] * 3, [0] * 3, [half] * 3, [half] * 3]
    np.testing.assert_array_equal(sums[:6], expected)
    np.testing.assert_array_equal(sums[6:8], [[n_step, n_step, half], [0, 0, half]])


def test_sums_of_a_map_agree_with_the_plain_version() -> None:
    """Eight steps at a time from the state before them, since the map doubles a difference at every step."""
    n, r = 130, 3.9
    x = np.random.default_rng(17).uniform(0.0, 1.0, n)
    expected = np.zeros((12, n))
    flown: Followed | None = None
    for call in range(20):
        begin = x if flown is None else flown.state[0].copy()
        flown = follow(
            "map", x, parameters=[0.0, r, -r], centres=[0.6, -0.5], stream=words_of(n, call), moved=MOVED, after=flown
        )
        path = [begin]
        for _ in range(8):
            path.append(r * path[-1] * (1.0 - path[-1]))
        p = np.array(path)
        assert np.abs(p[:, :, None] - np.array([0.4, 0.5])).min() > 1e-9, "no state in doubt"
        for k, inside in enumerate((p > 0.5, p < 2.0, p < 0.5, p > 0.4)):
            expected[2 * k : 2 * k + 2] += event_sums(inside)
        for row, value in ((8, p[1:] - 0.6), (10, np.log(p[1:]) + 0.5)):
            expected[row] += value.sum(axis=0)
            expected[row + 1] += (value**2).sum(axis=0)
    assert flown is not None
    np.testing.assert_array_equal(flown.sums[:8], expected[:8])
    np.testing.assert_allclose(flown.sums[8:], expected[8:], rtol=0.0, atol=1e-8)


def test_centres_keep_the_digits_of_a_variance() -> None:
    """Observables x and x y of states at rest near (1e9, 2): without centres no digit is left."""
    x = 1e9 + np.random.default_rng(5).standard_normal(4096)
    state = np.array([x, np.full_like(x, 2.0)])
    first = 2 * len(EVENTS)
    rest: dict[str, Any] = {"parameters": [0.0, 0.0, 0.0], "n_step": 8}
    sums = follow("flow", state, centres=[1e9, -7.0], **rest).sums[first:]
    expected = [x - 1e9, (x - 1e9) ** 2, 2.0 * x + 7.0, (2.0 * x + 7.0) ** 2]
    np.testing.assert_allclose(sums, 8.0 * np.array(expected), rtol=1e-14)

    def variance(found: np.ndarray) -> float:
        mean, square = found.mean(axis=1) / 8.0
        return float(square - mean**2)

    assert variance(sums[:2]) == pytest.approx(np.var(x), rel=1e-10)
    assert abs(variance(follow("flow", state, **rest).sums[first : first + 2]) - np.var(x)) > 0.1


def test_sums_are_added_to() -> None:
    start = starts(70)
    once = follow("flow", start, parameters=SPIRAL, step=0.05)
    base = replace(once, state=start, sums=np.full_like(once.sums, 1000.0), counts=np.full_like(once.counts, 7))
    again = follow("flow", None, parameters=SPIRAL, step=0.05, after=base, stride=8)
    np.testing.assert_allclose(again.sums, once.sums + 1000.0, rtol=1e-14)
    assert again.counts.sum() == base.counts.sum() + 2 * 70


# ---------------------------------------------------------------------------- histograms, samples


@pytest.mark.parametrize("stride", [8, 16, 40])
def test_counts_agree_with_a_histogram(stride: int) -> None:
    """Slot 0 lies below the axis, the last above it; a histogram for each trajectory."""
    start = starts(100)
    lower, upper, n_interval = np.array([-0.3, -0.2]), np.array([0.2, 0.25]), 9
    flown = follow(
        "flow", start, parameters=SPIRAL, step=0.05, n_step=240, axis=(lower, upper, n_interval), stride=stride
    )
    steps = points_of("flow", 240, stride, counted=True)
    path = spiral_path(start, 0.05, 240)[steps]
    for k in range(2):
        edges = np.concatenate([[-np.inf], np.linspace(lower[k], upper[k], n_interval + 1), [np.inf]])
        assert np.abs(path[:, k, :, None] - edges[1:-1]).min() > 1e-9, "no state in doubt"
        expected = np.array([np.histogram(path[:, k, i], edges)[0] for i in range(100)])
        np.testing.assert_array_equal(flown.counts[:, k], expected)
        assert expected[:, [0, -1]].sum(axis=0).min() > 0, "both ends must be passed"
    other = spiral_path(start, 0.05, 240)[steps - 1]
    edges = np.concatenate([[-np.inf], np.linspace(lower[0], upper[0], n_interval + 1), [np.inf]])
    shifted = np.array([np.histogram(other[:, 0, i], edges)[0] for i in range(100)])
    assert np.any(flown.counts[:, 0] != shifted), "the control must differ: a step earlier"


def test_counts_at_edges_and_beyond_all_bounds() -> None:
    """Intervals hold their lower edge; huge values are beyond the ends, what is no number is below them."""
    values = np.array([-0.25, 0.0, 0.249, 0.251, 0.999, 1.0001, 1e99, -1e99, np.inf, -np.inf, np.nan])
    state = np.array([values, np.ones_like(values), np.zeros_like(values)])
    flown = follow("identity", state, n_step=3, axis=(np.zeros(3), np.ones(3), 4), stride=1)
    expected = np.zeros((11, 6), dtype=np.int64)
    # infinity less infinity, on the way to the middle, is no number
    expected[np.arange(11), [0, 1, 1, 2, 4, 5, 5, 0, 0, 0, 0]] = 3
    np.testing.assert_array_equal(flown.counts[:, 0], expected)
    assert flown.lost == 3


@pytest.mark.parametrize(("every", "n_sample", "filled"), [(8, 3, 3), (8, 12, 10), (16, 5, 5), (40, 4, 2), (96, 2, 0)])
def test_samples_go_as_far_as_there_is_room(every: int, n_sample: int, filled: int) -> None:
    start = starts(70)
    flown = follow("flow", start, parameters=SPIRAL, step=0.05, n_step=80, every=every, n_sample=n_sample)
    path = spiral_path(start, 0.05, 80)
    steps = points_of("flow", 80, every)[:filled]
    np.testing.assert_allclose(flown.samples[:filled], path[steps], rtol=0.0, atol=2e-14)
    assert np.all(flown.samples[filled:] == -7.0), "the rest is not touched"


def test_steps_that_belong_together() -> None:
    """Tested kernels eight at a time; others one, or two where a step takes an odd number of normals."""
    expected = {"flow": 8, "map": 8, "ornstein": 8, "noisy map": 2, "bare map": 1, "hands": 1, "pair": 1, "identity": 1}
    assert {name: steps_together(KERNELS[name]) for name in expected} == expected
    assert steps_together(SPECS["ornstein"]) == 2
    assert steps_together(SPECS["draws"]) == 2


# ----------------------------------------------------------------------------------- lost, low bits


def test_lost_trajectories_become_nan() -> None:
    """Only those that leave all bounds; their neighbours are not touched; lost they remain."""
    start = starts(130)
    start[:, 3::7] = 50.0
    lost = np.zeros(130, dtype=bool)
    lost[3::7] = True
    options: dict[str, Any] = {"parameters": SPIRAL, "step": 0.05, "n_step": 40}
    flown = follow("flow", start, **options)
    assert flown.lost == lost.sum()
    assert np.isnan(flown.state[:, lost]).all()
    kept = follow("flow", start[:, ~lost], **options)
    assert kept.lost == 0
    np.testing.assert_array_equal(flown.state[:, ~lost], kept.state)
    np.testing.assert_array_equal(flown.sums[:, ~lost], kept.sums)
    again = follow("flow", None, after=flown, stride=8, every=8, **options)
    assert again.lost == lost.sum()
    assert np.isnan(again.state[:, lost]).all()
    assert np.isnan(again.samples[:, :, lost]).all()
    # events are not met any more
    np.testing.assert_array_equal(again.sums[: 2 * len(EVENTS), lost], flown.sums[: 2 * len(EVENTS), lost])


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf, 1e101])
def test_a_start_that_is_no_state_is_lost(bad: float) -> None:
    flown = follow("identity", [[0.1, bad, 0.3], [1.0, 1.0, 1.0], [0.0, 0.0, 0.0]], n_step=1)
    assert flown.lost == 1
    np.testing.assert_array_equal(np.isnan(flown.state).all(axis=0), [False, True, False])


def test_a_map_that_doubles_does_not_end_at_zero() -> None:
    """2 x mod 1: left alone it ends at 0 after the 53 bits of its state; with new low bits it goes on."""
    n = 8192
    x = np.random.default_rng(19).uniform(0.0, 1.0, n)
    alone = follow("doubling", x, n_step=200, stream=words_of(n, 20)).state[0]
    assert np.all(alone == 0.0)
    found = follow("doubling", x, n_step=200, stream=words_of(n, 20), low_bits=24).state[0]
    assert found.min() > 0.0
    assert found.max() < 1.0
    assert len(np.unique(found)) == n
    assert kstest(found, "uniform").statistic * np.sqrt(n) < 2.7
    assert kstest(alone, "uniform").statistic * np.sqrt(n) > 2.7, "the control must fail"


def identity_from(values: np.ndarray, bits: int, seed: int) -> np.ndarray:
    """One step of the identity, and the low bits drawn anew."""
    state = np.array([values, values, np.zeros_like(values)])
    found = follow("identity", state, n_step=1, stream=words_of(len(values), seed), low_bits=bits).state
    assert np.all(found[2] == 0.0), "0 has no low bits"
    return found[0]


@pytest.mark.parametrize("bits", [8, 16, 24])
def test_low_bits_drawn_anew_never_grow_a_state(bits: int) -> None:
    """States of both signs, and just above powers of two, where there are few bits below; by 2^(bits - 52) at most."""
    rng = np.random.default_rng(21)
    values = np.concatenate(
        [
            rng.uniform(-1.0, 1.0, 3000),
            10.0 ** rng.uniform(-280.0, 90.0, 3000) * rng.choice([-1.0, 1.0], 3000),
            np.ldexp(1.0 + rng.integers(0, 3, 3000) * 2.0**-52, rng.integers(-900, 300, 3000)),
        ]
    )
    found = identity_from(values, bits, 22)
    assert np.all(np.abs(found) <= np.abs(values))
    assert np.all(np.sign(found) == np.sign(values))
    part = 1.0 - found / values
    # half as many bits again below a power of two
    assert part.max() <= 2.0 ** (bits - 52) * 1.01
    assert part.max() > 2.0 ** (bits - 53.5)


def test_low_bits_drawn_anew_are_even() -> None:
    """The drop of a state in its last bits is even over 2^24; with nothing drawn it is none (control)."""
    n, bits = 20_000, 24
    values = np.full(n, 1.5)
    drop = (1.5 - identity_from(values, bits, 23)) / 2.0**-52 / 2.0**bits
    assert kstest(drop, "uniform").statistic * np.sqrt(n) < 2.7
    none = 1.5 - identity_from(values, 0, 23)
    assert np.all(none == 0.0)
    assert kstest(none, "uniform").statistic * np.sqrt(n) > 2.7


@pytest.mark.parametrize("value", [0.0, 1e-301, -1e-305, 5e-324])
def test_low_bits_of_next_to_nothing_stay(value: float) -> None:
    """Below 1e-300 a block of low bits may be all there is."""
    found = identity_from(np.full(64, value), 24, 24)
    np.testing.assert_array_equal(found, value)


def test_parameters_and_centres_share_an_array() -> None:
    """The array of the trajectories is that of the bursts: parameters, then centres."""
    np.testing.assert_array_equal(parameter_array("logistic", [3.9], [0.5, -1.0]), [3.9, 0.5, -1.0])
    flown = follow("map", [0.7], parameters=FLIP, centres=[0.5, -1.0])
    log = 4.0 * (np.log(0.3) + np.log(0.7))
    np.testing.assert_allclose(flown.sums[[8, 10], 0], [0.0, log + 8.0], atol=1e-12)
