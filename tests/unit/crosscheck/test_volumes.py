"""Mean rate of change of volumes under a density that is even within its cells."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from helpers.statistics import assert_agrees
from perdure._crosscheck import volumes
from perdure._crosscheck.tangents import Bare
from perdure._crosscheck.volumes import volume_rate
from perdure._records import BoxGrid, Quantity

BareOf = Callable[..., Bare]


def grid_of(lower: list[float], upper: list[float], counts: list[int]) -> BoxGrid:
    low, number = np.array(lower), np.array(counts)
    return BoxGrid(low, (np.array(upper) - low) / number, number, np.zeros(len(number), dtype=bool))


def arcsine_mass(n: int) -> np.ndarray:
    """Masses of n equal cells of (0, 1) under the law of x -> 4 x (1 - x).

    S. M. Ulam and J. von Neumann, Bull. Amer. Math. Soc. 53 (1947) 1120.
    """
    return np.asarray(np.diff(2.0 / np.pi * np.arcsin(np.sqrt(np.linspace(0.0, 1.0, n + 1)))))


def even_mean(n: int) -> np.ndarray:
    """Mean of ln |4 - 8 x| over each of n equal cells of (0, 1), with u ln |u| - u as the integral of ln |u|."""
    u = 4.0 - 8.0 * np.linspace(0.0, 1.0, n + 1)
    integral = np.where(u == 0.0, 0.0, u * np.log(np.abs(np.where(u == 0.0, 1.0, u))) - u)
    return np.asarray(-np.diff(integral) / 8.0 * n)


def logistic_rate(bare_of: BareOf, n: int, mass: np.ndarray, sampling: float = 0.0, seed: int = 1) -> Quantity:
    bare = bare_of("logistic", [4.0], scale=0.35, magnitude=3.0)
    rng = np.random.default_rng(seed)
    return volume_rate(bare, grid_of([0.0], [1.0], [n]), np.arange(n), mass, "1/step", lambda mean: sampling, 1, rng)


@pytest.mark.parametrize("n", [64, 301])
def test_the_logistic_map_expands_by_two(bare_of: BareOf, n: int) -> None:
    """Mean of ln |f'| under the arcsine law: ln 2, the entropy of a coin; the interval holds it.

    That of the masses with an even law in each cell is known as well, and met to the error of the points.
    """
    mass = arcsine_mass(n)
    found = logistic_rate(bare_of, n, mass)
    assert found.value is not None
    assert found.unit == "1/step"
    assert set(found.parts) == {"sampling", "cells", "differences"}
    even = float(mass @ even_mean(n))
    assert_agrees(found.value, even, found.parts["sampling"], allowance=1e-6)
    assert found.parts["sampling"] < 1e-3
    assert abs(found.value - math.log(2.0)) <= 2.0 * (found.error or 0.0)
    assert found.low is not None
    assert found.high is not None
    assert found.low <= math.log(2.0) <= found.high
    # negative control: the even law has ln 4 - 1
    wrong = logistic_rate(bare_of, n, np.full(n, 1.0 / n))
    assert wrong.value is not None
    assert wrong.value == pytest.approx(math.log(4.0) - 1.0, abs=2e-3)
    assert not found.low <= wrong.value <= found.high


def test_smaller_cells_come_nearer(bare_of: BareOf) -> None:
    gaps = []
    for n in (16, 64, 256):
        found = logistic_rate(bare_of, n, arcsine_mass(n))
        assert found.value is not None
        gaps.append((abs(found.value - math.log(2.0)), found.parts["cells"]))
    assert gaps[0][0] > gaps[1][0] > gaps[2][0]
    assert gaps[0][1] > gaps[1][1] > gaps[2][1]


def test_masses_need_not_sum_to_one(bare_of: BareOf) -> None:
    one = logistic_rate(bare_of, 32, arcsine_mass(32))
    half = logistic_rate(bare_of, 32, 0.5 * arcsine_mass(32))
    assert one.value == half.value


def test_the_error_of_the_bursts_is_that_of_the_means_of_the_cells(bare_of: BareOf) -> None:
    """`sampling` is told the means of the cells; its error and that of the points are added in quadrature."""
    told: list[np.ndarray] = []

    def sampling(mean: np.ndarray) -> float:
        told.append(mean.copy())
        return 0.03

    bare = bare_of("logistic", [4.0], scale=0.35, magnitude=3.0)
    grid, mass = grid_of([0.0], [1.0], [64]), arcsine_mass(64)
    found = volume_rate(bare, grid, np.arange(64), mass, "1", sampling, 1, np.random.default_rng(1))
    alone = logistic_rate(bare_of, 64, mass)
    assert len(told) == 1
    # near 1/2 the logarithm is steep: points are further off
    np.testing.assert_allclose(told[0], even_mean(64), rtol=0.0, atol=0.05)
    assert found.parts["sampling"] == pytest.approx(math.hypot(0.03, alone.parts["sampling"]))
    assert found.value == alone.value


def test_the_error_of_the_points_is_no_smaller_than_their_spread(
    bare_of: BareOf, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Over many seeds; few points, so that it counts. Points that fill a cell evenly do better than chance."""
    monkeypatch.setattr(volumes, "N_POINT", 2**8)
    mass = arcsine_mass(32)
    found = [logistic_rate(bare_of, 32, mass, seed=seed) for seed in range(200)]
    value = np.array([number.value for number in found], dtype=float)
    told = np.array([number.parts["sampling"] for number in found])
    error = value.std(ddof=1) / math.sqrt(len(value))
    assert_agrees(value.mean(), mass @ even_mean(32), error, allowance=1e-6)
    assert value.std(ddof=1) < told.mean() < 10.0 * value.std(ddof=1)


def test_a_flow_with_the_same_divergence_everywhere(bare_of: BareOf) -> None:
    """-2 a of a linear spiral, that of the scheme's step to rounding: no part of the error but rounding."""
    h = 0.05
    bare = bare_of("spiral", [0.3, 2.0, 0.0], step=h)
    grid, rng = grid_of([-1.0, -2.0], [1.0, 2.0], [8, 6]), np.random.default_rng(2)
    keys = np.sort(rng.choice(48, 30, replace=False))
    mass = rng.exponential(size=30)
    found = volume_rate(bare, grid, keys, mass, "1/s", lambda mean: 0.0, 4, rng)
    z = h * complex(-0.3, 2.0)
    exact = 2.0 * math.log(abs(1.0 + z + z**2 / 2.0 + z**3 / 6.0 + z**4 / 24.0)) / h
    assert found.value is not None
    assert found.value == pytest.approx(exact, abs=1e-8)
    assert found.value == pytest.approx(-0.6, abs=1e-5)
    # differences of 1e-7 over a step of 0.05 hold a rate to about 2e-8 at every point; what is said is 1e-7 for each
    assert max(found.parts["sampling"], found.parts["cells"]) < 1e-7
    assert found.parts["differences"] == pytest.approx(2.0 * 1e-7 / (4.0 * h))


def test_a_divergence_that_changes_from_place_to_place(bare_of: BareOf) -> None:
    """dr/dt = r - r^3 and a turn: the divergence is 2 - 4 r^2; of a single cell beside the origin, of a pair."""
    h = 0.001
    bare = bare_of("cycle", step=h, middle=0.0)
    grid = grid_of([-1.0, -1.0], [1.0, 1.0], [4, 4])

    def rate(keys: list[int], mass: list[float]) -> Quantity:
        rng = np.random.default_rng(3)
        return volume_rate(bare, grid, np.array(keys), np.array(mass), "1", lambda mean: 0.0, 1, rng)

    # cells (2, 2) and (3, 3), of which the mean of x^2 is 1/12 and 7/12
    alone = rate([10], [1.0])
    assert alone.value == pytest.approx(2.0 - 8.0 / 12.0, abs=2e-3)
    # nothing to compare with: the spread in the cell, of 4 (x^2 + y^2), x^2 of variance 1/80 - 1/144
    within = 4.0 * math.sqrt(2.0 * (0.5**4 / 5.0 - (0.5**2 / 3.0) ** 2))
    assert alone.parts["cells"] == pytest.approx(within, rel=0.01)
    # both are of one cell of twice the width: a coarse law gives them the same rate
    pair = rate([10, 15], [0.75, 0.25])
    near, far = 2.0 - 8.0 / 12.0, 2.0 - 8.0 * 7.0 / 12.0
    assert pair.value == pytest.approx(0.75 * near + 0.25 * far, abs=2e-3)
    assert pair.parts["cells"] == pytest.approx(0.25 * (near - far), abs=4e-3)


def test_points_that_lead_away_are_left_out(bare_of: BareOf, monkeypatch: pytest.MonkeyPatch) -> None:
    """A cell of which half leads away has the mean of the other half."""

    def rates(bare: Bare, state: np.ndarray, n_step: int, rng: np.random.Generator) -> np.ndarray:
        return np.where(state[0] > 1.5, np.nan, state[0])

    monkeypatch.setattr(volumes, "volume_rates", rates)
    told: list[np.ndarray] = []
    grid, mass = grid_of([0.0], [2.0], [2]), np.array([0.5, 0.5])
    bare, rng = bare_of("logistic", [4.0]), np.random.default_rng(4)
    found = volume_rate(bare, grid, np.arange(2), mass, "1", lambda mean: told.append(mean) or 0.0, 1, rng)
    np.testing.assert_allclose(told[0], [0.5, 1.25], atol=2e-3)
    assert found.value == pytest.approx(0.875, abs=2e-3)
    assert found.parts["sampling"] == pytest.approx(
        math.hypot(0.5 * math.sqrt(1.0 / 12.0 / 4096), 0.5 * math.sqrt(0.25 / 12.0 / 2048)), rel=0.02
    )
