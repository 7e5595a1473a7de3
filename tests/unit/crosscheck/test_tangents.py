"""Growth of tangent vectors and of almost identical pairs, on systems whose exponents are known exactly."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure._crosscheck import tangents
from perdure._crosscheck.tangents import (
    APART,
    BEGIN,
    END,
    FAR,
    Bare,
    Stretching,
    parting,
    relative_distance,
    stir,
    stretching,
    volume_rates,
)

BareOf = Callable[..., Bare]
# spread of the even law on (0, 1)
EVEN = math.sqrt(1.0 / 12.0)
# Copies 1e-7 of the spread away hold a difference to about 1e-16/(1e-7 * 0.29) = 4e-9 a step.
ROUNDING = 1e-8


def stretched(
    bare: Bare,
    state: np.ndarray,
    *,
    k: int | None = None,
    n_step: int = 1,
    n_part: int = 2,
    workers: int = 2,
    limit: float = 1e5,
    enough: Callable[[np.ndarray], bool] = lambda rate: False,
) -> Stretching:
    rngs = np.random.default_rng(7).spawn(n_part)
    k = len(state) if k is None else k
    return stretching(bare, state, k, n_step, rngs, workers, enough, limit, lambda done, total: None)


def even_state(n_dim: int, n: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).uniform(0.0, 1.0, (n_dim, n))


# --------------------------------------------------------------------------------------- stretching


def cat_exponent() -> float:
    """Logarithm of the larger eigenvalue of ((2, 1), (1, 1))."""
    return math.log((3.0 + math.sqrt(5.0)) / 2.0)


@pytest.mark.parametrize("n_step", [1, 3])
def test_exponents_of_the_cat_map(bare_of: BareOf, n_step: int) -> None:
    bare = bare_of("cat", scale=EVEN, period=1.0, magnitude=3.5)
    found = stretched(bare, even_state(2, 32), n_step=n_step, limit=1e5)
    np.testing.assert_allclose(found.rate, [[cat_exponent()] * 32, [-cat_exponent()] * 32], rtol=0.0, atol=ROUNDING)
    np.testing.assert_array_equal(found.lost, 0.0)


def test_copies_come_round_the_torus(bare_of: BareOf, monkeypatch: pytest.MonkeyPatch) -> None:
    """With copies so far away that many a one comes round alone, and none is tried on the other side."""
    monkeypatch.setattr(tangents, "APART", 1e-3)
    monkeypatch.setattr(tangents, "FAR", math.inf)
    bare = bare_of("cat", scale=EVEN, period=1.0, magnitude=3.5)
    found = stretched(bare, even_state(2, 32), limit=3e4)
    np.testing.assert_allclose(found.rate, [[cat_exponent()] * 32, [-cat_exponent()] * 32], rtol=0.0, atol=1e-11)
    # negative control: without the periods those seem stretched
    alone = stretched(replace(bare, period=np.zeros(2)), even_state(2, 32), limit=3e4)
    assert alone.rate[0].mean() > cat_exponent() + 1e-3


def test_exponents_of_a_linear_flow(bare_of: BareOf) -> None:
    """A spiral stretches all directions alike: the logarithm of the scheme's factor over the step, every time.

    A scheme of order 4 takes exp(z) for its series up to z^4.
    """
    h = 0.1
    bare = bare_of("spiral", [0.3, 2.0, 0.0], step=h)
    found = stretched(bare, even_state(2, 20), n_step=5)
    z = h * complex(-0.3, 2.0)
    exact = math.log(abs(1.0 + z + z**2 / 2.0 + z**3 / 6.0 + z**4 / 24.0)) / h
    np.testing.assert_allclose(found.rate, exact, rtol=0.0, atol=ROUNDING)
    assert abs(exact + 0.3) > ROUNDING, "the control must differ: the rate of the equations"
    assert abs(exact + 0.3) < 1e-3


def test_exponents_with_noise_are_those_on_the_same_noise(bare_of: BareOf) -> None:
    """Ornstein-Uhlenbeck: on the same noise every distance shrinks by the scheme's 1 - a + a^2/2, a = theta h."""
    theta, h = 0.8, 0.25
    bare = bare_of("ornstein", [theta, 0.5], step=h, scale=0.4, middle=0.0, magnitude=10.0)
    found = stretched(bare, even_state(1, 20), n_step=2)
    exact = math.log(1.0 - theta * h + 0.5 * (theta * h) ** 2) / h
    np.testing.assert_allclose(found.rate, exact, rtol=0.0, atol=ROUNDING)


def test_exponents_of_the_cycle(bare_of: BareOf) -> None:
    """0 along it and -2 towards it: the radius obeys dr/dt = r - r^3."""
    angle = np.linspace(0.0, 6.0, 16)
    bare = bare_of("cycle", step=0.02, scale=0.7, middle=0.0, magnitude=1.5)
    found = stretched(bare, np.array([np.cos(angle), np.sin(angle)]), n_step=20, limit=1e6)
    np.testing.assert_allclose(found.rate[0], 0.0, atol=1e-6)
    # the scheme's error is of order 4 in the step
    np.testing.assert_allclose(found.rate[1], -2.0, atol=1e-5)


@pytest.mark.parametrize("p", [0.3, 0.55])
def test_exponent_of_a_map_with_two_branches(bare_of: BareOf, p: float) -> None:
    """Two slopes, 1/p with chance p, and a jump: -p ln p - (1 - p) ln(1 - p), the entropy of a coin."""
    n = 64
    bare = bare_of("branches", [p], scale=EVEN, magnitude=3.5)
    found = stretched(bare, even_state(1, n), limit=1e6)
    exact = -p * math.log(p) - (1.0 - p) * math.log1p(-p)
    error = found.rate[0].std(ddof=1) / math.sqrt(n)
    # the variance of a step, whose slopes are independent, over the steps that are kept
    steps = 0.75 * found.steps / 2 / n
    slope = p * (1.0 - p) * math.log(p / (1.0 - p)) ** 2
    assert error == pytest.approx(math.sqrt(slope / steps / n), rel=0.45)
    assert_agrees(found.rate[0].mean(), exact, error, allowance=ROUNDING)
    with pytest.raises(AssertionError):
        assert_agrees(found.rate[0].mean(), exact * 1.05, error, allowance=ROUNDING)


def test_copies_across_a_jump_are_tried_on_the_other_side(bare_of: BareOf, monkeypatch: pytest.MonkeyPatch) -> None:
    """2 x mod 1 has the slope 2 on both sides of its jump: every step stretches by ln 2 exactly.

    With copies far enough away that many a one stands across the jump. Negative control: without the other side they
    seem stretched by the whole jump.
    """
    monkeypatch.setattr(tangents, "APART", 1e-3)
    monkeypatch.setattr(tangents, "FAR", 1e-1)
    bare = bare_of("multiples", [2.0], scale=EVEN, magnitude=3.5)
    found = stretched(bare, even_state(1, 64), limit=2e5)
    np.testing.assert_allclose(found.rate, math.log(2.0), rtol=0.0, atol=1e-11)
    monkeypatch.setattr(tangents, "FAR", math.inf)
    alone = stretched(bare, even_state(1, 64), limit=2e5)
    # a step in 1/(1e-3 * 0.29) straddles the jump, and is stretched by 1/(2e-3 * 0.29)
    expected = 1e-3 * EVEN * math.log(1.0 / (2e-3 * EVEN))
    excess = alone.rate[0] - math.log(2.0)
    assert_agrees(excess.mean(), expected, excess.std(ddof=1) / 8.0, allowance=0.01 * expected)
    assert excess.mean() > 1e-3


@pytest.mark.parametrize("side", [-1.0, 1.0])
def test_a_copy_beside_the_jump(bare_of: BareOf, side: float) -> None:
    """Where a copy stands on the other side of the jump: the slope of the state's own branch."""
    p = 0.3
    bare = bare_of("branches", [p], scale=side)
    # a negative scale puts copies to the left; the jump is at a part of their distance
    state = p - side * APART * np.array([[0.1, 0.5, 0.9, 1.1, 3.0]])
    rng, slope = np.random.default_rng(3), 1.0 / (p if side > 0.0 else 1.0 - p)
    joint = bare.joint(state, 1, APART)
    plain = joint.copy()
    bare.fly_tangents(joint, 1, rng, bare.no_counts(10))
    stretch = np.abs(joint[0, 1] - joint[0, 0]) / APART
    np.testing.assert_allclose(stretch, slope, rtol=1e-7)
    bare.fly(plain, 1, rng, bare.no_counts(10))
    stretch = np.abs(plain[0, 1] - plain[0, 0]) / APART
    np.testing.assert_allclose(stretch[3:], slope, rtol=1e-7)
    assert np.all(stretch[:3] > 1e6), "the control must differ: without the other side"
    # trajectories go the same way
    np.testing.assert_allclose(joint[:, 0], plain[:, 0], rtol=0.0, atol=1e-14)


def test_reach_is_the_largest_distance(bare_of: BareOf) -> None:
    bare = bare_of("cat", scale=[0.5, 2.0], period=[1.0, 0.0])
    joint = np.zeros((2, 3, 2))
    joint[0, 1], joint[0, 2], joint[1, 1], joint[1, 2] = [0.1, 0.95], [0.2, 0.0], [0.0, 0.6], [0.9, 0.0]
    np.testing.assert_allclose(bare.reach(joint), [0.45, 0.3])
    assert FAR > 100.0 * APART


@pytest.mark.parametrize("workers", [1, 3])
def test_workers_do_not_matter(bare_of: BareOf, workers: int) -> None:
    bare = bare_of("branches", [0.3], scale=EVEN, magnitude=3.5, stirred=True)
    one = stretched(bare, even_state(1, 30), n_part=4, limit=3e4)
    two = stretched(bare, even_state(1, 30), n_part=4, limit=3e4, workers=workers)
    np.testing.assert_array_equal(one.rate, two.rate)
    assert one.steps == two.steps
    other = stretched(bare, even_state(1, 30), n_part=3, limit=3e4)
    assert np.any(other.rate != one.rate), "the streams matter"


def test_more_parts_than_trajectories(bare_of: BareOf) -> None:
    bare = bare_of("multiples", [3.0], scale=EVEN, period=1.0, magnitude=3.5)
    found = stretched(bare, even_state(1, 3), n_part=8, limit=3e4)
    np.testing.assert_allclose(found.rate, math.log(3.0), rtol=0.0, atol=ROUNDING)


def test_the_flight_ends_when_it_is_enough_or_at_its_limit(bare_of: BareOf) -> None:
    bare = bare_of("multiples", [3.0], scale=EVEN, period=1.0, magnitude=3.5)
    told: list[tuple[int, int]] = []
    seen: list[np.ndarray] = []

    def enough(rate: np.ndarray) -> bool:
        seen.append(rate.copy())
        return len(seen) == 3

    found = stretching(
        bare, even_state(1, 16), 1, 1, np.random.default_rng(1).spawn(1), 1, enough, 1e6,
        lambda *done: told.append(done),
    )  # fmt: skip
    assert len(seen) == 3
    # each flight takes as many steps as all before: 32, 64 and 128 slices of 2e6/64/32/32 rounds
    per_round = 2 * 16
    length = int(1e6 / 64 / per_round / 32)
    assert found.steps == 128 * length * per_round
    assert [done for done, _ in told] == sorted(done for done, _ in told)
    assert {total for _, total in told} == {10**6}
    limited = stretched(bare, even_state(1, 16), n_part=1, limit=1e6)
    assert 0.5e6 < limited.steps <= 1e6
    few = stretched(bare, even_state(1, 16), n_part=1, limit=1.0)
    assert few.steps == 32 * per_round, "a record is filled in any case"


def test_growth_beyond_the_digits_is_lost(bare_of: BareOf) -> None:
    """Shrunk by 10^10 a step, the difference to a copy holds no digit: said, and the least growth counted."""
    bare = bare_of("multiples", [1e-10], scale=EVEN, magnitude=3.5)
    found = stretched(bare, even_state(1, 8), limit=1e4)
    np.testing.assert_array_equal(found.lost, 1.0)
    np.testing.assert_allclose(found.rate, math.log(bare.low))
    seen = stretched(bare_of("multiples", [1e-6], scale=EVEN, magnitude=3.5), even_state(1, 8), limit=1e4)
    np.testing.assert_array_equal(seen.lost, 0.0)


def test_a_lost_trajectory_has_no_rate_and_is_no_loss_to_rounding(bare_of: BareOf) -> None:
    bare = bare_of("multiples", [3.0], scale=EVEN, period=1.0, magnitude=3.5)
    state = even_state(1, 16)
    state[0, 5] = np.nan
    found = stretched(bare, state, limit=3e4)
    np.testing.assert_array_equal(np.isnan(found.rate[0]), np.arange(16) == 5)
    np.testing.assert_allclose(found.rate[0, np.arange(16) != 5], math.log(3.0), atol=ROUNDING)
    np.testing.assert_array_equal(found.lost, 0.0)


def test_new_low_bits_take_the_copies_along() -> None:
    """Towards 0 by an even part of 2^-36, copies by as much as their trajectory."""
    n = 5000
    state = np.random.default_rng(4).uniform(-1.0, 1.0, (2, n))
    joint = np.stack([state, state + 1e-7, state - 2e-7], axis=1)
    before = joint.copy()
    stir(joint, np.random.default_rng(5))
    part = (before[:, 0] - joint[:, 0]) / before[:, 0] / tangents.STIR
    assert part.min() > -1e-4
    assert part.max() < 1.0 + 1e-4
    error = math.sqrt(1.0 / 12.0 / n)
    assert_agrees(part.mean(axis=1), 0.5, error)
    with pytest.raises(AssertionError):
        assert_agrees(part.mean(axis=1), 0.55, error)
    gap = (joint - joint[:, :1]) - (before - before[:, :1])
    assert np.abs(gap).max() < 4e-16


@pytest.mark.parametrize("m", [2.0, 4.0])
def test_maps_that_lose_bits_have_their_exponent(bare_of: BareOf, m: float) -> None:
    bare = bare_of("multiples", [m], scale=EVEN, period=1.0, magnitude=3.5, stirred=True)
    found = stretched(bare, even_state(1, 16), limit=1e5)
    np.testing.assert_allclose(found.rate, math.log(m), rtol=0.0, atol=ROUNDING)


@pytest.mark.parametrize(("magnitude", "n_step", "step"), [(1.0, 1, 1.0), (1.0, 4, 0.5), (1e3, 2, 1.0)])
def test_what_differences_leave_open(bare_of: BareOf, magnitude: float, n_step: int, step: float) -> None:
    """Their size, 1e-7; or their rounding, where states are far from 0: 2e-9 times the magnitude."""
    bare = bare_of("cat", step=step, magnitude=magnitude)
    assert bare.floor(n_step) == pytest.approx(max(1e-7, 2e-9 * magnitude) / (n_step * step))


# ----------------------------------------------------------------------------------- rates of volumes


@pytest.mark.parametrize("n_step", [1, 5])
def test_volumes_of_a_linear_flow(bare_of: BareOf, n_step: int) -> None:
    """The divergence is -2 a everywhere; to rounding it is that of the scheme's step."""
    h = 0.05
    bare = bare_of("spiral", [0.3, 2.0, 0.0], step=h)
    state = np.random.default_rng(6).uniform(-1.0, 1.0, (2, 5000))
    z = h * complex(-0.3, 2.0)
    exact = 2.0 * math.log(abs(1.0 + z + z**2 / 2.0 + z**3 / 6.0 + z**4 / 24.0)) / h
    found = volume_rates(bare, state, n_step, np.random.default_rng(7))
    assert found.shape == (5000,)
    np.testing.assert_allclose(found, exact, rtol=0.0, atol=2.0 * ROUNDING / (n_step * h))
    assert abs(exact + 0.6) < 1e-4


def test_volumes_of_maps(bare_of: BareOf) -> None:
    """ln |r (1 - 2 x)| of the logistic map, state by state; 0 of the cat map, whose determinant is 1."""
    x = even_state(1, 9000)
    bare = bare_of("logistic", [4.0], scale=0.35, magnitude=3.0)
    found = volume_rates(bare, x, 1, np.random.default_rng(8))
    slope = np.abs(4.0 * (1.0 - 2.0 * x[0]))
    # a copy to the side halves what it sees of the curve: 4 * 1e-7 * 0.35
    clear = slope > 1e-3
    np.testing.assert_allclose(found[clear], np.log(slope[clear]), rtol=0.0, atol=3e-4)
    np.testing.assert_allclose(np.exp(found), slope, rtol=0.0, atol=3e-7)
    cat = bare_of("cat", scale=EVEN, period=1.0, magnitude=3.5)
    # over two steps what is rounded at the longer vector is 47 times as much of the shorter
    for n_step, atol in ((1, 5e-8), (2, 2e-7)):
        found = volume_rates(cat, even_state(2, 500), n_step, np.random.default_rng(9))
        np.testing.assert_allclose(found, 0.0, atol=atol)


def test_volumes_where_a_step_leads_away(bare_of: BareOf) -> None:
    bare = bare_of("spiral", [0.3, 2.0, 0.5], step=0.5)
    state = np.array([[0.1, 1e60, -0.2], [0.0, 0.0, 0.3]])
    found = volume_rates(bare, state, 2, np.random.default_rng(10))
    np.testing.assert_array_equal(np.isnan(found), [False, True, False])


# ------------------------------------------------------------------------------------------ parting


@pytest.mark.parametrize("n_step", [1, 4])
def test_pairs_part_as_a_linear_map_says(bare_of: BareOf, n_step: int) -> None:
    """3 x mod 1: the time from 1e-8 to 0.1 is ln(1e7)/ln 3 for every pair, between steps too."""
    bare = bare_of("multiples", [3.0], scale=EVEN, period=1.0, magnitude=3.5)
    found = parting(bare, even_state(1, 100), n_step, 1000.0, np.random.default_rng(11)).time
    exact = math.log(END / BEGIN) / math.log(3.0)
    if n_step == 1:
        # the first step's difference holds seven digits
        np.testing.assert_allclose(found, exact, rtol=0.0, atol=1e-6)
    else:
        # within the last four steps pairs come round the circle: no later than this, and not a call earlier
        assert np.all((found > 12.0) & (found <= 16.0))
    assert abs(exact - 14.67) < 0.01


def test_pairs_part_on_the_same_noise(bare_of: BareOf) -> None:
    """dx = x dt / 2 + dW: noise moves both alike, and distances grow by the scheme's factor."""
    h = 0.05
    bare = bare_of("ornstein", [-0.5, 1.0], step=h, scale=2.0, middle=0.0)
    found = parting(bare, np.zeros((1, 200)), 2, 200.0, np.random.default_rng(12)).time
    exact = math.log(END / BEGIN) / (math.log(1.0 + 0.5 * h + 0.125 * h * h) / h)
    np.testing.assert_allclose(found, exact, rtol=1e-6)
    # negative control: on noises of their own pairs part at once
    alone = bare_of("ornstein", [-0.5, 1.0], step=h, scale=2.0, middle=0.0)
    joint = np.zeros((1, 1, 400))
    alone.fly(joint, 2, np.random.default_rng(13), alone.no_counts(400))
    apart = relative_distance(alone, joint[:, 0, :200] - joint[:, 0, 200:])
    assert np.median(apart) > 1e5 * BEGIN


def test_copies_fly_on_the_noise_of_their_trajectory(bare_of: BareOf) -> None:
    bare = bare_of("ornstein", [0.8, 0.5], step=0.1, middle=0.0)
    joint = np.zeros((1, 3, 50))
    joint[0, 1], joint[0, 2] = 1.0, -3.0
    bare.fly(joint, 10, np.random.default_rng(14), bare.no_counts(150))
    factor = (1.0 - 0.08 + 0.5 * 0.08**2) ** 10
    np.testing.assert_allclose(joint[0, 1] - joint[0, 0], factor, rtol=1e-12)
    np.testing.assert_allclose(joint[0, 2] - joint[0, 0], -3.0 * factor, rtol=1e-12)
    assert joint[0, 0].std() > 0.1


def test_pairs_that_shrink_never_part(bare_of: BareOf) -> None:
    bare = bare_of("ornstein", [0.8, 0.5], step=0.1, scale=0.4, middle=0.0)
    found = parting(bare, np.zeros((1, 30)), 10, 50.0, np.random.default_rng(15)).time
    assert np.all(np.isinf(found))


def test_pairs_are_given_so_much_time(bare_of: BareOf) -> None:
    """A step short of the time, none has parted; lost pairs never do."""
    bare = bare_of("multiples", [3.0], scale=EVEN, period=1.0, magnitude=3.5)
    for longest, parted in ((14.0, False), (15.0, True)):
        found = parting(bare, even_state(1, 20), 1, longest, np.random.default_rng(16)).time
        assert np.all(np.isfinite(found) == parted)
    state = even_state(1, 20)
    state[0, :4] = np.nan
    found = parting(bare, state, 1, 100.0, np.random.default_rng(17)).time
    np.testing.assert_array_equal(np.isinf(found), np.arange(20) < 4)


def test_pairs_begin_at_the_distance_that_is_told(bare_of: BareOf) -> None:
    """In any number of components, and in units of the distance between unrelated states."""
    bare = bare_of("cat", scale=[EVEN, EVEN], period=1.0)
    rng = np.random.default_rng(18)
    one, two = rng.uniform(0.0, 1.0, (2, 2, 100_000))
    straight = relative_distance(replace(bare, period=np.zeros(2)), one - two)
    square = straight**2
    assert_agrees(square.mean(), 1.0, square.std() / math.sqrt(len(square)))
    short = relative_distance(bare, one - two)
    assert short.max() <= math.sqrt(0.25 / EVEN**2 / 2.0)
    np.testing.assert_allclose(relative_distance(bare, np.array([[0.9], [-0.2]])), math.sqrt(0.05 / 4.0) / EVEN)
    times = parting(bare, even_state(2, 50), 1, 100.0, rng).time
    # a random direction of the cat map: the part along the expanding one grows by 0.9624 a step
    least = math.log(END / BEGIN) / math.log((3.0 + math.sqrt(5.0)) / 2.0)
    assert times.min() > least - 1e-6
    assert np.median(times) < least + 3.0
