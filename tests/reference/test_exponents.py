"""Published Lyapunov exponents: within three standard errors, which are below half a percent."""

from __future__ import annotations

import math

import pytest

import perdure
from perdure import Case, Quantity
from perdure._records import Predictability
from reference.cases import TABLES

# Exponents, and half of the last digit that they were published with.
PUBLISHED: dict[str, tuple[tuple[float, ...], float]] = {
    # J. C. Sprott, Chaos and Time-Series Analysis, Oxford University Press 2003
    "P22-lorenz63": ((0.9056, 0.0, -14.572), 5e-4),
    # the first as there; the determinant of the derivative is -0.3 everywhere
    "P13-henon": ((0.41922, math.log(0.3) - 0.41922), 5e-6),
    # logarithms of the eigenvalues of ((2, 1), (1, 1))
    "P12-cat": ((math.log((3.0 + 5.0**0.5) / 2.0), -math.log((3.0 + 5.0**0.5) / 2.0)), 1e-6),
}


@pytest.fixture(scope="module", params=list(PUBLISHED))
def case(request: pytest.FixtureRequest) -> tuple[str, Predictability]:
    result = perdure.estimate(Case(title=request.param, seed=1, **TABLES[request.param]))
    found = perdure.crosscheck(result, duration=4096.0 * result.plan.step).crosscheck
    assert found is not None
    return request.param, found.predictability[0]


def is_near(number: Quantity, published: float, digits: float, largest: float) -> bool:
    assert number.value is not None
    assert number.error is not None
    sharp = number.error <= 0.005 * (abs(published) or largest)
    return sharp and abs(number.value - published) <= 3.0 * math.hypot(number.error, digits)


def test_exponents(case: tuple[str, Predictability]) -> None:
    name, told = case
    published, digits = PUBLISHED[name]
    largest = max(abs(value) for value in published)
    assert [is_near(e, p, digits, largest) for e, p in zip(told.exponents, published, strict=True)] == [True] * len(
        published
    )
    # negative control: exponents that are one percent off are not near
    assert not is_near(told.exponents[0], 1.02 * published[0], digits, largest)


def test_their_sum_is_the_change_of_volumes(case: tuple[str, Predictability]) -> None:
    name, told = case
    exact = {"P22-lorenz63": -(10.0 + 1.0 + 8.0 / 3.0), "P13-henon": math.log(0.3), "P12-cat": 0.0}[name]
    assert told.total.value == pytest.approx(exact, abs=2e-5)
    assert told.total_density.value == pytest.approx(exact, abs=2e-5)
    assert told.verdict == "agrees"


def test_dimension(case: tuple[str, Predictability]) -> None:
    name, told = case
    # 2 + (0.9056 + 0)/14.572 and 1 + 0.41922/1.62319, from the exponents above; the cat map keeps areas
    exact, digits = {"P22-lorenz63": (2.0621, 1e-4), "P13-henon": (1.25827, 1e-5), "P12-cat": (2.0, 1e-6)}[name]
    assert told.dimension.value is not None
    assert abs(told.dimension.value - exact) <= 3.0 * math.hypot(told.dimension.error or 0.0, digits)
