"""The density of one regime: constant on each cell, zero elsewhere."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import TYPE_CHECKING, Any, overload

import numpy as np
from numpy.typing import ArrayLike

from perdure._density.checks import check, frozen
from perdure._density.draw import draw_cells
from perdure._density.histogram import Histogram
from perdure._records import BoxGrid, Floats, Integers, Marginal, density_unit
from perdure.errors import UsageError

if TYPE_CHECKING:
    import sparse
    import xarray

__all__ = ["Density"]

Seed = int | np.random.Generator | np.random.SeedSequence | None


@dataclass(frozen=True, eq=False, repr=False)
class Density:
    """Long-run density over state space, constant on each cell and zero off the cells.

    Frozen: the arrays are copies that cannot be written to.

    Parameters
    ----------
    lattice : BoxGrid
        Equal boxes that hold the cells. Units of the state.
    keys : ndarray of int64, shape (n_cell,)
        Row-major indices of the cells in the lattice, ascending.
    mass : ndarray, shape (n_cell,)
        Probability of each cell. Sums to one less the share of time outside the domain; `pdf` and `grid`
        keep to that, averages and draws are those of the time inside. No unit.
    state, units : tuple of str
        Names and units of the components.
    marginals : mapping of str to Marginal
        Histograms along the bursts, finer than the cells; used by `marginal` and `quantile` where present.

    Raises
    ------
    UsageError
        Arrays that do not fit together, masses that are negative or sum to nothing or to more than one.
    """

    lattice: BoxGrid
    keys: Integers
    mass: Floats
    state: tuple[str, ...]
    units: tuple[str, ...]
    marginals: Mapping[str, Marginal] = field(default_factory=dict)

    def __post_init__(self) -> None:
        lattice = replace(
            self.lattice,
            lower=frozen(self.lattice.lower, np.float64),
            width=frozen(self.lattice.width, np.float64),
            counts=frozen(self.lattice.counts, np.int64),
            periodic=frozen(self.lattice.periodic, np.bool_),
        )
        keys, mass = frozen(self.keys, np.int64), frozen(self.mass, np.float64)
        check(lattice, keys, mass, self.state, self.units)
        for name, value in {"lattice": lattice, "keys": keys, "mass": mass}.items():
            object.__setattr__(self, name, value)

    def __reduce__(self) -> tuple[Any, ...]:
        fields = (self.lattice, self.keys, self.mass, self.state, self.units, dict(self.marginals))
        return Density, fields

    def __repr__(self) -> str:
        return f"Density({', '.join(self.state)}: {len(self.keys)} cells)"

    @property
    def unit(self) -> str:
        """Unit of the density: 1 / (product of the units of the state)."""
        return density_unit(self.units)

    @property
    def n_dim(self) -> int:
        return len(self.state)

    @cached_property
    def inside(self) -> float:
        """Share of time inside the domain: the sum of the masses. Below one where a given domain is left."""
        return min(float(self.mass.sum()), 1.0)

    @cached_property
    def value(self) -> Floats:
        """Density of each cell: mass over volume, shape (n_cell,)."""
        return frozen(self.mass / self.lattice.volume, np.float64)

    @cached_property
    def centres(self) -> Floats:
        """Centres of the cells, shape (n_cell, n_dim). Units of the state."""
        return frozen(self.lattice.centres(self.keys), np.float64)

    def edges(self, name: str) -> Floats:
        """Edges of the cells along one component, shape (count + 1,). Unit of the component."""
        axis = self._axis(name)
        edges: Floats = self.lattice.lower[axis] + np.arange(self.lattice.counts[axis] + 1) * self.lattice.width[axis]
        return edges

    # ------------------------------------------------------------------------------- look up

    def pdf(self, points: ArrayLike) -> Floats:
        """Density at points.

        Parameters
        ----------
        points : array_like, shape (..., n_dim)
            Units of the state. Cells are half-open; periodic components wrap around.

        Returns
        -------
        ndarray, shape (...)
            Zero off the cells, nan where a point has a nan. Unit: `unit`.
        """
        points = np.asarray(points, dtype=np.float64)
        if not points.ndim or points.shape[-1] != self.n_dim:
            raise UsageError(
                f"Density.pdf: points has shape {points.shape}; its last axis must hold the "
                f"{self.n_dim} components {', '.join(self.state)}"
                + ("; write points[..., None]" if self.n_dim == 1 else "")
            )
        grid = self.lattice
        with np.errstate(invalid="ignore", over="ignore"):
            place = np.floor((points - grid.lower) / grid.width)
            place = np.where(grid.periodic, np.mod(place, grid.counts), place)
            inside = np.all((place >= 0) & (place < grid.counts), axis=-1)
        index = np.where(np.expand_dims(inside, -1), place, 0).astype(np.int64)
        key = np.ravel_multi_index(tuple(np.moveaxis(index, -1, 0)), tuple(int(n) for n in grid.counts))
        at = np.minimum(np.searchsorted(self.keys, key), len(self.keys) - 1)
        found = np.where(inside & (self.keys[at] == key), self.value[at], 0.0)
        return np.where(np.isnan(points).any(axis=-1), np.nan, found)

    def logpdf(self, points: ArrayLike) -> Floats:
        """Natural logarithm of `pdf`; -inf off the cells."""
        with np.errstate(divide="ignore"):
            logarithm: Floats = np.log(self.pdf(points))
        return logarithm

    # ------------------------------------------------------------------------ draw and average

    def sample(self, size: int | tuple[int, ...], *, rng: Seed) -> Floats:
        """Independent draws: a cell by its mass, then a point uniform in the cell.

        Parameters
        ----------
        size : int or tuple of int
        rng : int, Generator, SeedSequence or None
            The same seed gives the same draws; None draws afresh each time.

        Returns
        -------
        ndarray, shape (*size, n_dim)
            Units of the state.
        """
        shape = (size,) if isinstance(size, int | np.integer) else tuple(size)
        if any(n < 0 for n in shape):
            raise UsageError(f"Density.sample: size is {size}; it must not be negative")
        generator = np.random.default_rng(rng)
        cell = draw_cells(self.mass, int(np.prod(shape)), generator)
        offset = generator.random((len(cell), self.n_dim))
        points = self.lattice.lower + (self.lattice.indices(self.keys)[cell] + offset) * self.lattice.width
        return np.asarray(points.reshape(*shape, self.n_dim))

    @overload
    def mean(self) -> Floats: ...
    @overload
    def mean(self, f: Callable[[Floats], ArrayLike]) -> Any: ...
    def mean(self, f: Callable[[Floats], ArrayLike] | None = None) -> Any:
        """Mean of a function over the time inside, by the midpoint rule: mass times f at each cell's centre.

        What `f` does inside a cell is not seen: the rule is exact for linear functions, and for smooth ones
        its error is of the order of the squared cell width. Observables of the case are better: those are
        averaged along the bursts.

        Parameters
        ----------
        f : callable or None
            Takes points, shape (n, n_dim), returns values, shape (n,) or (n, ...). None: the state itself.

        Returns
        -------
        float or ndarray
            Mean of the values; without `f` the mean state, shape (n_dim,). A periodic component is averaged
            as the number that it is in the lattice.
        """
        if f is None:
            return self._shares @ self.centres
        if not callable(f):
            raise UsageError(
                f"Density.mean: f is {f!r}; it must be a function that takes points of shape "
                f"(n, {self.n_dim}) and returns n values, for example lambda p: p[:, 0] ** 2"
            )
        values = np.asarray(f(self.centres))
        if not values.ndim or len(values) != len(self.mass):
            raise UsageError(
                f"Density.mean: f returned shape {values.shape} for points of shape {self.centres.shape}; "
                f"it must return {len(self.mass)} values, one per point"
            )
        mean = np.tensordot(self._shares, values, axes=1)
        return mean if mean.ndim else mean.item()

    def cov(self) -> Floats:
        """Covariance of the state under the density, shape (n_dim, n_dim).

        Exact for a density that is constant on the cells: that of the centres, plus width**2 / 12 of the
        uniform law inside a cell on the diagonal. Units: products of the state units.
        """
        apart = self.centres - self.mean()
        covariance: Floats = (apart * self._shares[:, None]).T @ apart + np.diag(self.lattice.width**2 / 12.0)
        return covariance

    # ------------------------------------------------------------------------ one component

    def cell_marginal(self, name: str) -> Floats:
        """Mass of each slice of cells across one component, shape (count,): the sum over the other axes."""
        axis = self._axis(name)
        index = self.lattice.indices(self.keys)[:, axis]
        return np.asarray(np.bincount(index, self.mass, int(self.lattice.counts[axis])), dtype=np.float64)

    def marginal(self, name: str) -> Any:
        """Law of one component as a scipy distribution (`pdf`, `cdf`, `ppf`, `rvs`, `interval`, ..).

        Returns
        -------
        scipy.stats.rv_histogram
            From the histogram along the bursts if there is one, else from the cells. It is conditional on the
            range of the histogram; `quantile` counts what lies beyond.
        """
        return self._histogram(name).distribution()

    @overload
    def quantile(self, name: str, q: float) -> float: ...
    @overload
    def quantile(self, name: str, q: ArrayLike) -> Floats: ...
    def quantile(self, name: str, q: ArrayLike) -> Floats | float:
        """Value that one component stays below with probability `q`.

        Parameters
        ----------
        name : str
            State component.
        q : float or array_like
            Between 0 and 1.

        Returns
        -------
        float or ndarray of the shape of `q`
            Unit of the component. -inf or inf: beyond the range of the histogram along the bursts.
        """
        return self._histogram(name).quantile(q)

    @cached_property
    def _shares(self) -> Floats:
        """Masses scaled to sum to one: the law given that the state is inside."""
        return frozen(self.mass / self.mass.sum(), np.float64)

    def _histogram(self, name: str) -> Histogram:
        self._axis(name)
        if name in self.marginals:
            along = self.marginals[name]
            return Histogram(name, along.edges, along.mass, along.below, along.above)
        return Histogram(name, self.edges(name), self.cell_marginal(name), 0.0, 0.0)

    def _axis(self, name: str) -> int:
        if name in self.state:
            return self.state.index(name)
        near = difflib.get_close_matches(str(name), self.state, n=1, cutoff=0.0)[0]
        raise UsageError(
            f"Density: no state component is called {name!r}; there is {', '.join(self.state)}; did you mean {near!r}?"
        )

    # ------------------------------------------------------------------------------- as a grid

    def grid(self) -> sparse.COO:
        """Masses as a sparse array with an axis per component, shape `lattice.counts`."""
        import sparse

        held = np.flatnonzero(self.mass)
        index = self.lattice.indices(self.keys[held]).T
        shape = tuple(int(n) for n in self.lattice.counts)
        # The keys ascend, so nothing needs sorting or summing: that would compile for a second.
        return sparse.COO(index, self.mass[held], shape=shape, sorted=True, has_duplicates=False, fill_value=0.0)

    def to_xarray(self) -> xarray.DataArray:
        """Masses as a labelled array over sparse storage, one dimension per component.

        Raises
        ------
        UsageError
            xarray is not installed.
        """
        try:
            import xarray
        except ImportError as error:
            raise UsageError(
                f"Density.to_xarray: the package xarray cannot be imported ({error}); install it or use `grid`"
            ) from error
        centres = {name: 0.5 * (e[:-1] + e[1:]) for name, e in ((n, self.edges(n)) for n in self.state)}
        coordinates = {
            name: (name, centres[name], {"units": unit, "long_name": f"cell centre in {name}"})
            for name, unit in zip(self.state, self.units, strict=True)
        }
        about = {"units": "1", "long_name": "probability of the cell", "cell_volume": self.lattice.volume}
        return xarray.DataArray(self.grid(), coordinates, dims=self.state, name="mass", attrs=about)
