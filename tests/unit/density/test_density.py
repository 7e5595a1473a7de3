"""The density as a distribution: look-up, averages, one component, grid."""

from __future__ import annotations

import pickle
import sys
from dataclasses import FrozenInstanceError

import numpy as np
import pytest

from perdure._density import Density
from perdure._records import BoxGrid, Marginal
from perdure.errors import UsageError

COUNTS = (6, 5, 4)


def make_density(*, inside: float = 1.0, marginals: dict[str, Marginal] | None = None) -> Density:
    """Invented: 3 components, the second periodic, half of the lattice in use."""
    rng = np.random.default_rng(11)
    counts = np.array(COUNTS)
    grid = BoxGrid(np.array([-1.0, 0.0, 10.0]), np.array([0.5, 1.25, 0.1]), counts, np.array([False, True, False]))
    keys = np.sort(rng.choice(counts.prod(), 60, replace=False))
    mass = inside * rng.dirichlet(np.ones(60))
    mass[7] += mass[8]
    mass[8] = 0.0
    return Density(grid, keys, mass, ("x", "theta", "z"), ("m", "1", "m/s"), marginals or {})


def dense(density: Density) -> np.ndarray:
    """Masses of the whole lattice, by the definition of the keys."""
    masses = np.zeros(COUNTS)
    masses.reshape(-1)[density.keys] = density.mass
    return masses


# ----------------------------------------------------------------------------------------- look up


def test_pdf_at_every_cell_centre_of_the_lattice() -> None:
    density = make_density()
    every = density.lattice.centres(np.arange(np.prod(COUNTS)))
    expected = dense(density) / (0.5 * 1.25 * 0.1)
    np.testing.assert_allclose(density.pdf(every.reshape(*COUNTS, 3)), expected, rtol=1e-14)


def test_pdf_is_zero_outside_and_wraps_where_periodic() -> None:
    density = make_density()
    centre = density.centres[0]
    value = density.pdf(centre)
    assert value.shape == ()
    assert value > 0.0
    assert density.pdf(centre + np.array([0.0, 3 * 6.25, 0.0])) == value
    assert density.pdf(centre - np.array([0.0, 6.25, 0.0])) == value
    outside = np.array([[-1.01, 1.0, 10.2], [2.01, 1.0, 10.2], [0.0, 1.0, 9.99], [0.0, 1.0, 10.41]])
    far = np.array([[np.inf, 1.0, 10.2], [1e300, 1.0, 10.2], [-np.inf, 1.0, -np.inf]])
    assert (density.pdf(outside) == 0.0).all()
    assert (density.pdf(far) == 0.0).all()
    assert np.isnan(density.pdf([0.0, np.nan, 10.2]))
    assert density.logpdf(centre) == np.log(value)
    assert density.logpdf(outside[0]) == -np.inf


def test_pdf_of_one_component() -> None:
    grid = BoxGrid(np.array([0.0]), np.array([0.25]), np.array([4]), np.array([False]))
    density = Density(grid, np.array([1, 3]), np.array([0.25, 0.75]), ("x",), ("1",))
    points = np.array([0.0, 0.25, 0.49, 0.5, 0.75, 0.999, 1.0])
    np.testing.assert_array_equal(density.pdf(points[:, None]), [0.0, 1.0, 1.0, 0.0, 3.0, 3.0, 0.0])
    with pytest.raises(UsageError, match=r"shape \(7,\).* write points\[\.\.\., None\]"):
        density.pdf(points)


@pytest.mark.parametrize("points", [1.0, [1.0, 2.0], np.zeros((3, 4))])
def test_points_of_the_wrong_shape(points: object) -> None:
    with pytest.raises(UsageError, match="its last axis must hold the 3 components x, theta, z"):
        make_density().pdf(points)  # type: ignore[arg-type]


# ---------------------------------------------------------------------------------------- averages


def test_mean_and_covariance_against_the_piecewise_integral() -> None:
    """Both against Gauss-Legendre quadrature on every cell, exact for second moments."""
    density = make_density()
    nodes, weights = np.polynomial.legendre.leggauss(2)
    first, second = np.zeros(3), np.zeros((3, 3))
    for key, mass in zip(density.keys, density.mass, strict=True):
        centre = density.lattice.centres(np.array([key]))[0]
        for at in np.ndindex(2, 2, 2):
            point = centre + 0.5 * nodes[list(at)] * density.lattice.width
            weight = mass * np.prod(weights[list(at)]) / 8.0
            first += weight * point
            second += weight * np.outer(point, point)
    np.testing.assert_allclose(density.mean(), first, rtol=1e-13)
    np.testing.assert_allclose(density.cov(), second - np.outer(first, first), atol=1e-12)


def test_mean_of_a_function() -> None:
    density = make_density()
    assert density.mean(lambda p: p[:, 0]) == pytest.approx(density.mean()[0], rel=1e-14)
    assert isinstance(density.mean(lambda p: p[:, 0]), float)
    np.testing.assert_allclose(density.mean(lambda p: p), density.mean(), rtol=1e-14)
    midpoint = sum(m * c[2] ** 2 for m, c in zip(density.mass, density.centres, strict=True))
    assert density.mean(lambda p: p[:, 2] ** 2) == pytest.approx(midpoint, rel=1e-13)
    with pytest.raises(UsageError, match="f is 'x\\*\\*2'; it must be a function"):
        density.mean("x**2")  # type: ignore[arg-type]
    for wrong in (lambda p: 1.0, lambda p: p.T):
        with pytest.raises(UsageError, match="it must return 60 values"):
            density.mean(wrong)


def test_share_of_time_outside_the_domain() -> None:
    """Masses may sum to less than one: averages are those of the time inside, the density keeps that sum."""
    whole, part = make_density(), make_density(inside=0.75)
    assert whole.inside == pytest.approx(1.0, abs=1e-14)
    assert part.inside == pytest.approx(0.75, rel=1e-14)
    np.testing.assert_allclose(part.mean(), whole.mean(), rtol=1e-13)
    np.testing.assert_allclose(part.cov(), whole.cov(), rtol=1e-11)
    np.testing.assert_allclose(part.pdf(part.centres), 0.75 * whole.pdf(part.centres), rtol=1e-13)
    np.testing.assert_array_equal(part.sample(5, rng=1), whole.sample(5, rng=1))
    assert part.quantile("x", 0.3) == pytest.approx(whole.quantile("x", 0.3), rel=1e-13)


# ----------------------------------------------------------------------------------- one component


def test_cell_marginal_is_the_sum_over_the_other_axes() -> None:
    density = make_density()
    grid = density.grid()
    assert grid.shape == COUNTS
    assert grid.nnz == 59, "the cell without mass is left out"
    np.testing.assert_array_equal(grid.todense(), dense(density))
    for axis, name in enumerate(density.state):
        others = tuple({0, 1, 2} - {axis})
        np.testing.assert_allclose(density.cell_marginal(name), grid.sum(axis=others).todense(), rtol=1e-14, atol=1e-17)
        assert density.cell_marginal(name).shape == (COUNTS[axis],)


def test_marginal_and_quantile_from_the_cells() -> None:
    density = make_density()
    law = density.marginal("z")
    edges = density.edges("z")
    heap = np.concatenate([[0.0], np.cumsum(density.cell_marginal("z"))])
    np.testing.assert_allclose(law.cdf(edges), heap, atol=1e-14)
    q = np.array([[0.01, 0.3], [0.5, 0.99]])
    np.testing.assert_allclose(density.quantile("z", q), law.ppf(q), rtol=1e-13)
    np.testing.assert_allclose(law.cdf(density.quantile("z", q)), q, rtol=1e-11)
    assert isinstance(density.quantile("z", 0.5), float)


def along_the_bursts(below: float, above: float) -> dict[str, Marginal]:
    mass = np.array([0.0, 0.25, 0.0, 0.5, 0.25, 0.0]) * (1.0 - below - above)
    edges = np.array([0.0, 1.0, 2.0, 3.0, 5.0, 6.0, 7.0])
    return {"x": Marginal(edges, mass, 0.1 * mass, below, above, "m")}


def test_quantile_along_the_bursts() -> None:
    density = make_density(marginals=along_the_bursts(0.0, 0.0))
    found = density.quantile("x", [0.0, 0.125, 0.25, 0.5, 0.75, 0.875, 1.0])
    np.testing.assert_allclose(found, [1.0, 1.5, 2.0, 4.0, 5.0, 5.5, 6.0], rtol=1e-14)
    assert density.marginal("x").ppf(0.5) == pytest.approx(4.0)
    assert density.marginal("x").pdf(4.0) == pytest.approx(0.25)
    assert density.marginal("z").pdf(4.0) == 0.0, "from the cells where there is no histogram"


def test_quantile_beyond_the_histogram() -> None:
    """A fifth below and a tenth above: quantiles there are infinite, the others count what is beyond."""
    density = make_density(marginals=along_the_bursts(0.2, 0.1))
    found = density.quantile("x", [0.0, 0.1, 0.2 + 0.7 * 0.5, 0.95, 1.0])
    np.testing.assert_allclose(found, [-np.inf, -np.inf, 4.0, np.inf, np.inf], rtol=1e-12)
    assert density.marginal("x").ppf(0.5) == pytest.approx(4.0), "conditional on the range"


def test_histogram_without_mass_in_range() -> None:
    density = make_density(marginals={"x": Marginal(np.arange(3.0), np.zeros(2), np.zeros(2), 0.5, 0.5)})
    with pytest.raises(UsageError, match="no mass lies within the histogram, from 0 to 2"):
        density.marginal("x")
    np.testing.assert_array_equal(density.quantile("x", [0.2, 0.8]), [-np.inf, np.inf])


@pytest.mark.parametrize("q", [-0.1, 1.1, np.nan, [0.5, 2.0]])
def test_quantile_of_no_probability(q: object) -> None:
    with pytest.raises(UsageError, match="it must lie between 0 and 1"):
        make_density().quantile("x", q)  # type: ignore[call-overload]


@pytest.mark.parametrize("ask", ["marginal", "cell_marginal", "edges"])
def test_unknown_component(ask: str) -> None:
    with pytest.raises(
        UsageError, match="no state component is called 'thetta'; there is x, theta, z; did you mean 'theta'"
    ):
        getattr(make_density(), ask)("thetta")


# ------------------------------------------------------------------------------------ as an object


def test_frozen() -> None:
    density = make_density()
    with pytest.raises(FrozenInstanceError):
        density.mass = np.zeros(60)  # type: ignore[misc]
    for array in (density.mass, density.keys, density.value, density.centres, density.lattice.lower):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1


def test_arrays_are_copies() -> None:
    mass = np.array([0.5, 0.5])
    grid = BoxGrid(np.zeros(1), np.ones(1), np.array([2]), np.array([False]))
    density = Density(grid, np.array([0, 1]), mass, ("x",), ("1",))
    mass[0] = 9.0
    grid.width[0] = 9.0
    assert density.mass[0] == 0.5
    assert density.lattice.width[0] == 1.0


def test_pickled() -> None:
    density = make_density(marginals=along_the_bursts(0.0, 0.0))
    _ = density.centres
    again = pickle.loads(pickle.dumps(density))
    np.testing.assert_array_equal(again.mass, density.mass)
    assert again.quantile("x", 0.5) == density.quantile("x", 0.5)
    assert not again.mass.flags.writeable


def test_units_and_names() -> None:
    density = make_density()
    assert density.unit == "1/(m * (m/s))"
    assert repr(density) == "Density(x, theta, z: 60 cells)"
    grid = BoxGrid(np.zeros(1), np.ones(1), np.array([2]), np.array([False]))
    for unit, expected in (("1", "1"), ("K", "1/K"), ("m s-1", "1/(m s-1)")):
        assert Density(grid, np.array([0]), np.ones(1), ("x",), (unit,)).unit == expected


def test_to_xarray() -> None:
    density = make_density()
    array = density.to_xarray()
    assert array.dims == ("x", "theta", "z")
    assert array.attrs["units"] == "1"
    assert array["z"].attrs["units"] == "m/s"
    np.testing.assert_array_equal(array.data.todense(), dense(density))
    np.testing.assert_allclose(array["x"], density.edges("x")[:-1] + 0.25, rtol=1e-14)
    np.testing.assert_allclose(array.sum(("x", "z")).data.todense(), density.cell_marginal("theta"), rtol=1e-13)


def test_to_xarray_without_xarray(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "xarray", None)
    with pytest.raises(UsageError, match=r"the package xarray cannot be imported .* install it or use `grid`"):
        make_density().to_xarray()


GRID = BoxGrid(np.zeros(1), np.ones(1), np.array([4]), np.array([False]))


@pytest.mark.parametrize(
    ("keys", "mass", "state", "said"),
    [
        ([0, 1], [0.5, 0.5], ("x", "y"), "2 state names and 1 units for a lattice of 1 axes"),
        ([0, 1], [1.0], ("x",), "must be \\(n_cell,\\)"),
        ([], [], ("x",), "not empty"),
        ([1, 0], [0.5, 0.5], ("x",), "keys must ascend"),
        ([1, 1], [0.5, 0.5], ("x",), "keys must ascend"),
        ([-1, 1], [0.5, 0.5], ("x",), "keys must ascend"),
        ([0, 4], [0.5, 0.5], ("x",), "from 0 to below 4"),
        ([0, 1], [1.5, -0.5], ("x",), "it must be non-negative"),
        ([0, 1], [0.5, np.nan], ("x",), "it must be non-negative"),
        ([0, 1], [0.0, 0.0], ("x",), "mass sums to 0.0"),
        ([0, 1], [0.5, 0.6], ("x",), "mass sums to 1.1"),
    ],
)
def test_what_is_no_density(keys: list[int], mass: list[float], state: tuple[str, ...], said: str) -> None:
    with pytest.raises(UsageError, match=said):
        Density(GRID, np.array(keys), np.array(mass), state, ("1",))
