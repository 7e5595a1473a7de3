"""The functions of the lanes against arithmetic of 64 bits (x87 long double), alone and inside a kernel."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from kernels.support import fly
from perdure._kernels import lane_math

inf, nan = math.inf, math.nan


def ulps(value: np.ndarray, exact: np.ndarray) -> np.ndarray:
    """Errors in units of the last place of the exact value."""
    place = np.spacing(np.abs(exact.astype(float)))
    return np.asarray(np.abs((value.astype(np.longdouble) - exact) / place), dtype=float)


def long(function: Callable[..., np.ndarray], x: np.ndarray) -> np.ndarray:
    return np.asarray(function(x.astype(np.longdouble)))


def each(function: Callable[..., float], x: np.ndarray) -> np.ndarray:
    """The function alone, compiled, point by point."""
    return np.array([function(v) for v in x])


def through_lanes(row: int, **points: np.ndarray) -> np.ndarray:
    """Observable `row` of the kernel of functions: the values that the vector code gives."""
    n = len(next(iter(points.values())))
    state = np.array([points.get(name, np.ones(n)) for name in "abc"])
    flown = fly("functions", state)
    assert flown.blown == 0
    return np.asarray(flown.sums[2 * row])


def exponents() -> np.ndarray:
    rng = np.random.default_rng(1)
    return np.concatenate([rng.uniform(-700.0, 700.0, 30_000), rng.uniform(-1.0, 1.0, 10_000), [0.0, 1.0, -700.0]])


def positives() -> np.ndarray:
    """Over all magnitudes that a lane may hold, and closely around 1, where the logarithm loses digits."""
    rng = np.random.default_rng(2)
    near = 1.0 + rng.uniform(-1.0, 1.0, 10_000) * 10.0 ** rng.uniform(-12.0, -0.5, 10_000)
    return np.concatenate([10.0 ** rng.uniform(-307.0, 99.0, 20_000), near, [1.0, 2.0, 0.5]])


def angles() -> np.ndarray:
    rng = np.random.default_rng(3)
    near = np.round(rng.uniform(-3e5, 3e5, 5000)) * (math.pi / 2)
    return np.concatenate([rng.uniform(-1e6, 1e6, 20_000), rng.uniform(-4.0, 4.0, 10_000), near])


@pytest.mark.parametrize("inside", [False, True])
def test_exp(inside: bool) -> None:
    x = exponents()
    value = through_lanes(0, a=x) if inside else each(lane_math.f_exp, x)
    assert ulps(value, long(np.exp, x)).max() <= 1.5


@pytest.mark.parametrize("inside", [False, True])
def test_log(inside: bool) -> None:
    x = positives()
    value = through_lanes(1, b=x) if inside else each(lane_math.f_log, x)
    assert ulps(value, long(np.log, x)).max() <= 2.0


@pytest.mark.parametrize("inside", [False, True])
@pytest.mark.parametrize(("row", "name"), [(2, "sin"), (3, "cos")])
def test_sin_and_cos(row: int, name: str, inside: bool) -> None:
    """The stated error is 2 units of the last place of 1: relative digits are lost next to the zeros."""
    x = angles()
    value = through_lanes(row, c=x) if inside else each(getattr(lane_math, f"f_{name}"), x)
    apart = np.abs(value - long(getattr(np, name), x)).astype(float)
    assert apart.max() <= 2.0 * np.spacing(1.0)


def test_errors_are_noticed() -> None:
    """Negative control: single precision, and a reduction by a rounded pi, do not pass."""
    x = np.linspace(-80.0, 80.0, 1001)
    assert ulps(np.exp(x.astype(np.float32)).astype(float), long(np.exp, x)).max() > 1e3
    x = angles()
    k = np.floor(x / math.pi + 0.5)
    rough = np.sin(x - k * math.pi) * (-1.0) ** k
    assert np.abs(rough - np.sin(x)).max() > 1e3 * np.spacing(1.0)


def test_exp_up_to_the_largest_double() -> None:
    """The last stretch before overflow, where 2**1024 must not be formed."""
    x = np.linspace(700.0, 709.78, 2001)
    assert ulps(each(lane_math.f_exp, x), long(np.exp, x)).max() <= 1.5


@pytest.mark.parametrize(
    ("name", "x", "expected"),
    [
        ("exp", nan, nan), ("exp", inf, inf), ("exp", -inf, 0.0), ("exp", 0.0, 1.0), ("exp", -0.0, 1.0),
        ("exp", 710.0, inf), ("exp", -1000.0, 0.0),
        ("log", nan, nan), ("log", inf, inf), ("log", -inf, nan), ("log", 0.0, -inf), ("log", -0.0, -inf),
        ("log", 1.0, 0.0), ("log", -1.0, nan), ("log", -1e-320, nan), ("log", 5e-324, math.log(5e-324)),
        ("log", 1e-310, math.log(1e-310)), ("log", 1.7976931348623157e308, math.log(1.7976931348623157e308)),
        ("sin", nan, nan), ("sin", inf, nan), ("sin", -inf, nan), ("sin", 0.0, 0.0),
        ("cos", nan, nan), ("cos", inf, nan), ("cos", -inf, nan), ("cos", 0.0, 1.0),
        ("sqrt", nan, nan), ("sqrt", inf, inf), ("sqrt", -1.0, nan), ("sqrt", 0.0, 0.0), ("sqrt", 2.25, 1.5),
        ("abs", nan, nan), ("abs", -inf, inf), ("abs", -2.5, 2.5),
        ("floor", nan, nan), ("floor", -0.5, -1.0), ("floor", inf, inf),
        ("sign", nan, nan), ("sign", -2.0, -1.0), ("sign", 0.0, 0.0), ("sign", inf, 1.0),
        ("tan", nan, nan), ("tanh", inf, 1.0), ("sinh", -inf, -inf), ("cosh", -inf, inf), ("atan", inf, math.pi / 2),
        ("asin", 2.0, nan), ("acos", -2.0, nan), ("asin", 1.0, math.pi / 2), ("acos", 1.0, 0.0),
    ],
)  # fmt: skip
def test_special_values(name: str, x: float, expected: float) -> None:
    value = getattr(lane_math, f"f_{name}")(x)
    if math.isfinite(expected):
        assert value == pytest.approx(expected, rel=4e-16, abs=1e-16)
    else:
        np.testing.assert_equal(value, expected)


@pytest.mark.parametrize(
    ("name", "x", "y", "expected"),
    [
        ("min2", 1.0, 2.0, 1.0), ("min2", 2.0, 1.0, 1.0), ("min2", nan, 1.0, nan), ("min2", 1.0, nan, nan),
        ("min2", -inf, 1.0, -inf), ("max2", 1.0, 2.0, 2.0), ("max2", 2.0, 1.0, 2.0), ("max2", nan, 1.0, nan),
        ("max2", 1.0, nan, nan), ("max2", 1.0, inf, inf),
        ("mod", 7.5, 2.0, 1.5), ("mod", -0.5, 2.0, 1.5), ("mod", 7.5, -2.0, -0.5), ("mod", nan, 1.0, nan),
        ("mod", 1.0, nan, nan), ("mod", inf, 1.0, nan), ("mod", 4.0, 2.0, 0.0),
        ("pow", 2.0, 10.0, 1024.0), ("pow", -2.0, 0.5, nan), ("pow", 0.0, -1.0, inf), ("pow", nan, 0.0, 1.0),
        ("atan2", 1.0, -1.0, 0.75 * math.pi), ("atan2", -0.0, -1.0, -math.pi),
    ],
)  # fmt: skip
def test_special_values_of_two(name: str, x: float, y: float, expected: float) -> None:
    np.testing.assert_allclose(getattr(lane_math, f"f_{name}")(x, y), expected, rtol=4e-16)


@pytest.mark.parametrize(("given", "expected"), [(True, False), (False, True)])
def test_not(given: bool, expected: bool) -> None:
    assert lane_math.f_not(given) is expected


@pytest.mark.parametrize("inside", [False, True])
def test_mod_is_floored(inside: bool) -> None:
    """Equal to Python's % up to rounding of the quotient, which counts as a whole turn where it happens."""
    x = np.random.default_rng(4).uniform(-1e3, 1e3, 5000)
    value = through_lanes(4, c=x) if inside else np.array([lane_math.f_mod(v, 0.7) for v in x])
    apart = np.abs(value - np.mod(x, 0.7))
    assert np.minimum(apart, np.abs(apart - 0.7)).max() <= 1e3 * np.spacing(1.0)
    assert np.median(apart) <= 1e3 * np.spacing(1.0)


def test_bits_and_floats() -> None:
    """A uniform draw lies inside (0, 1) even for the extreme words."""
    low, high = lane_math.unit_open(np.uint64(0)), lane_math.unit_open(np.uint64(2**64 - 1))
    assert low == 2.0**-53
    assert high == 1.0 - 2.0**-53
