"""Draws have the moments of the density; tolerances are 5 standard errors, with a control that fails."""

from __future__ import annotations

import numpy as np
import pytest

from perdure._density import Density, draw
from perdure._records import BoxGrid
from perdure.errors import UsageError

N = 200_000
CELLS = 40


def make_density(seed: int = 5) -> Density:
    """Invented: two components, the mass falling steeply, every third cell without mass."""
    rng = np.random.default_rng(seed)
    grid = BoxGrid(np.array([-1.0, 2.0]), np.array([0.5, 1.2]), np.array([8, 5]), np.array([False, False]))
    keys = np.sort(rng.choice(CELLS, 24, replace=False))
    mass = rng.exponential(size=24) * np.exp(-keys / 20.0)
    mass[::3] = 0.0
    return Density(grid, keys, mass / mass.sum(), ("x", "y"), ("1", "1"))


def z_scores(points: np.ndarray, density: Density) -> np.ndarray:
    """Deviations of the sample's means and second moments from those of `density`, in standard errors."""
    mean, cov = density.mean(), density.cov()
    apart = points - mean
    columns = [apart[:, 0], apart[:, 1], apart[:, 0] ** 2, apart[:, 1] ** 2, apart[:, 0] * apart[:, 1]]
    exact = [0.0, 0.0, cov[0, 0], cov[1, 1], cov[0, 1]]
    return np.array([(c.mean() - e) / (c.std() / np.sqrt(len(c))) for c, e in zip(columns, exact, strict=True)])


def counts_per_cell(points: np.ndarray, density: Density) -> np.ndarray:
    index = np.floor((points - density.lattice.lower) / density.lattice.width).astype(int)
    key = np.ravel_multi_index(tuple(index.T), tuple(density.lattice.counts))
    counts = np.bincount(key, minlength=CELLS)
    assert counts.sum() == len(points)
    return counts


@pytest.fixture(params=["bisection", "alias"])
def method(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> str:
    if request.param == "alias":
        monkeypatch.setattr(draw, "ALIAS_FROM", 0)
    return str(request.param)


def test_moments(method: str) -> None:
    density = make_density()
    points = density.sample(N, rng=7)
    assert points.shape == (N, 2)
    assert np.abs(z_scores(points, density)).max() < 5.0


def test_moments_notice_points_at_the_centres(method: str) -> None:
    """Negative control: without the spread inside the cells the variances are too small."""
    density = make_density()
    points = density.sample(N, rng=7)
    snapped = density.lattice.lower + density.lattice.width * (
        np.floor((points - density.lattice.lower) / density.lattice.width) + 0.5
    )
    score = np.abs(z_scores(snapped, density))
    assert score[3] > 5.0


def test_moments_notice_another_density(method: str) -> None:
    """Negative control: masses moved by one cell."""
    density = make_density()
    moved = Density(density.lattice, density.keys, np.roll(density.mass, 1), density.state, density.units)
    assert np.abs(z_scores(moved.sample(N, rng=7), density)).max() > 5.0


def test_cells_are_met_as_often_as_their_mass(method: str) -> None:
    """Each count within 5 standard errors of the binomial law, cells without mass never."""
    density = make_density()
    expected = np.zeros(CELLS)
    expected[density.keys] = density.mass
    counts = counts_per_cell(density.sample(N, rng=3), density)
    assert (counts[expected == 0.0] == 0).all()
    held = expected > 0.0
    error = np.sqrt(N * expected[held] * (1.0 - expected[held]))
    assert np.abs((counts[held] - N * expected[held]) / error).max() < 5.0
    flat = np.full(held.sum(), N / held.sum())
    assert np.abs((flat - N * expected[held]) / error).max() > 5.0, "negative control: equal shares"


def test_every_draw_lies_in_the_density(method: str) -> None:
    density = make_density()
    assert (density.pdf(density.sample(20_000, rng=1)) > 0.0).all()


def test_same_seed_same_draws(method: str) -> None:
    density = make_density()
    first = density.sample(50, rng=4)
    np.testing.assert_array_equal(first, density.sample(50, rng=np.random.default_rng(4)))
    assert not np.array_equal(first, density.sample(50, rng=5))
    generator = np.random.default_rng(4)
    density.sample(50, rng=generator)
    assert not np.array_equal(first, density.sample(50, rng=generator))


def test_zero_is_a_seed_and_none_is_not() -> None:
    density = make_density()
    np.testing.assert_array_equal(density.sample(9, rng=0), density.sample(9, rng=0))
    assert not np.array_equal(density.sample(9, rng=None), density.sample(9, rng=None))


@pytest.mark.parametrize(("size", "shape"), [(0, (0, 2)), (3, (3, 2)), ((2, 5), (2, 5, 2)), ((), (2,))])
def test_shapes(size: int | tuple[int, ...], shape: tuple[int, ...]) -> None:
    assert make_density().sample(size, rng=1).shape == shape


def test_negative_size() -> None:
    with pytest.raises(UsageError, match="size is -1; it must not be negative"):
        make_density().sample(-1, rng=1)
