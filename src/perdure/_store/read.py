"""Read density files: checked when opened, each part read when first asked for."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterable, Iterator, Mapping
from functools import cached_property
from typing import Any, TypeVar

import h5py
import numpy as np
from numpy.typing import NDArray

from perdure._records import (
    BoxGrid,
    CaseRecord,
    Crosscheck,
    Estimate,
    EventResult,
    Floats,
    Integers,
    Marginal,
    ObservableResult,
    Plan,
    Quantity,
    Regime,
    Stage,
    Tally,
    Target,
)
from perdure._store.crosscheck import read_crosscheck
from perdure._store.description import case_from_json, from_json, plan_from_json
from perdure._store.opening import check_root, opened, plain_attribute, reason_of
from perdure._store.sections import EVENT_COLUMNS, OBSERVABLE_COLUMNS
from perdure._store.tables import floats, optional, part_columns, read_quantities, texts
from perdure.errors import DensityFileError

__all__ = ["StoredEstimate", "load", "open_file"]

T = TypeVar("T")


def open_file(path: str | os.PathLike[str]) -> StoredEstimate:
    """Open a density file for reading.

    Raises
    ------
    DensityFileError
        The file is missing, unreadable, no density file, unfinished, damaged or of a newer format.
    """
    return StoredEstimate(path)


def load(path: str | os.PathLike[str]) -> Estimate:
    """Read a whole density file into memory; errors as for `open_file`."""
    with open_file(path) as stored:
        return stored.estimate()


class StoredEstimate:
    """What a density file holds, under the names of `Estimate`.

    Root attributes are read when the file is opened; everything else when first asked for. The file stays
    open, so that a later run that replaces it does not mix into what is read here. Pickled by path.

    Every property can raise `DensityFileError` when its part of the file is damaged.
    """

    def __init__(self, path: str | os.PathLike[str]) -> None:
        self.path = os.path.abspath(os.fspath(path))
        self._label = os.fspath(path)
        self._file = opened(self.path, self._label)
        try:
            with self._reading("root attributes"):
                self._root = {key: plain_attribute(value) for key, value in self._file.attrs.items()}
            check_root(self._root, self._label)
        except BaseException:
            self._file.close()
            raise

    def __enter__(self) -> StoredEstimate:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()

    def __reduce__(self) -> tuple[type[StoredEstimate], tuple[str]]:
        return StoredEstimate, (self.path,)

    def close(self) -> None:
        """Let go of the file; parts already read stay available."""
        with contextlib.suppress(Exception):
            self._file.close()

    # ------------------------------------------------------------------------------ small things

    @cached_property
    def case(self) -> CaseRecord:
        """The case as data: expressions carry their text only; `text` is the whole case file."""
        with self._reading("attribute case"):
            return case_from_json(self._root["case"], text=self._root["case_text"], seed=self._root["seed"])

    @cached_property
    def plan(self) -> Plan:
        keys = self._array("provenance/seed_key", np.int64)
        share = self._array("provenance/seed_share", np.float64)
        with self._reading("attribute plan"):
            return plan_from_json(self._root["plan"], seed_keys=keys, seed_share=share)

    @property
    def outcome(self) -> str:
        return self._text("outcome")

    @cached_property
    def messages(self) -> tuple[str, ...]:
        with self._reading("attribute messages"):
            return tuple(str(line) for line in self._json("messages"))

    @property
    def checks_passed(self) -> bool:
        with self._reading("attribute checks_passed"):
            return bool(self._root["checks_passed"])

    @cached_property
    def timings(self) -> Mapping[str, float]:
        with self._reading("attribute timings"):
            return {name: float(seconds) for name, seconds in self._json("timings").items()}

    @cached_property
    def packages(self) -> Mapping[str, str]:
        with self._reading("attribute packages"):
            return {name: str(version) for name, version in self._json("packages").items()}

    @cached_property
    def counts(self) -> Mapping[str, int]:
        with self._reading("attribute counts"):
            return {name: int(n) for name, n in self._json("counts").items()}

    @property
    def command(self) -> str:
        return self._text("command")

    @property
    def created(self) -> str:
        return self._text("created")

    @property
    def cpu(self) -> str:
        """Model of the processor that wrote the file."""
        return self._text("cpu")

    # --------------------------------------------------------------------------------- partition

    @cached_property
    def grid(self) -> BoxGrid:
        return BoxGrid(
            self._array("cells/lower", np.float64),
            self._array("cells/width", np.float64),
            self._array("cells/counts", np.int64),
            self._array("cells/periodic", np.int8).astype(bool),
        )

    @cached_property
    def keys(self) -> Integers:
        return self._array("cells/cell", np.int64)

    @property
    def n_cell(self) -> int:
        with self._reading("/cells/cell"):
            return int(self._group("cells")["cell"].shape[0])

    @cached_property
    def basins(self) -> NDArray[np.float32] | None:
        return self._array("cells/basin", np.float32) if self._holds("basin", "cells") else None

    @cached_property
    def tally(self) -> Tally | None:
        if not self._holds("matrix"):
            return None
        with self._reading("/matrix"):
            together = bool(self._group("matrix").attrs.get("together", False))
        return Tally(
            self._array("matrix/pointer", np.int64),
            self._array("matrix/column", np.int32),
            self._array("matrix/count", None),
            self._array("matrix/bursts", None),
            together,
        )

    @cached_property
    def cell_bursts(self) -> Integers | None:
        """Bursts sent from each cell; None where they were not counted."""
        return self._array("cells/bursts", np.int64) if self._holds("bursts", "cells") else None

    # ----------------------------------------------------------------------------------- regimes

    @property
    def n_regime(self) -> int:
        with self._reading("/regimes/regime"):
            return int(self._group("regimes")["regime"].shape[0])

    @cached_property
    def outside_share(self) -> Quantity:
        with self._reading("/regimes/outside_share"):
            return read_quantities(self._group("regimes"), "outside_share")[0]

    @cached_property
    def weights(self) -> tuple[Quantity, ...]:
        """Weight of each regime."""
        with self._reading("/regimes/weight"):
            return tuple(read_quantities(self._group("regimes"), "weight"))

    def cells_of(self, regime: int) -> Integers:
        """Indices into `keys` of the cells of a regime."""
        return np.flatnonzero(self._cell_regime == regime)

    @cached_property
    def _cell_regime(self) -> NDArray[np.int32]:
        return self._array("cells/cell_regime", np.int32)

    def mass_of(self, regime: int) -> Floats:
        """Mass of the cells of a regime."""
        mass = self._array(f"{place(regime)}density/mass", np.float64)
        cells = self.cells_of(regime)
        if len(mass) != (len(cells) if regime else self.n_cell):
            raise self._damaged(f"/{place(regime)}density/mass", f"{len(mass)} masses for {len(cells)} cells")
        if not (np.all(mass >= 0.0) and mass.sum() < 1.0 + 1e-6):
            raise self._damaged(f"/{place(regime)}density/mass", f"the masses sum to {mass.sum()!r}")
        return mass if regime else mass[cells]

    def events_of(self, regime: int) -> Mapping[str, EventResult]:
        return self._table(f"{place(regime)}events", "event", EventResult, EVENT_COLUMNS)

    def observables_of(self, regime: int) -> Mapping[str, ObservableResult]:
        return self._table(f"{place(regime)}observables", "observable", ObservableResult, OBSERVABLE_COLUMNS)

    def marginals_of(self, regime: int) -> Mapping[str, Marginal]:
        where = f"{place(regime)}marginals"
        with self._reading(f"/{where}"):
            return {name: read_marginal(group, name) for name, group in self._group(where).items()}

    @cached_property
    def regimes(self) -> tuple[Regime, ...]:
        period = self._array("regimes/period", np.int64)
        residual, eigenvalue = (self._array(f"regimes/{name}", np.float64) for name in ("residual", "eigenvalue"))
        return tuple(
            Regime(
                weight=self.weights[k],
                cell=self.cells_of(k),
                mass=self.mass_of(k),
                period=int(period[k]),
                residual=float(residual[k]),
                eigenvalue=float(eigenvalue[k]),
                events=self.events_of(k),
                observables=self.observables_of(k),
                marginals=self.marginals_of(k),
            )
            for k in range(self.n_regime)
        )

    # ------------------------------------------------------------------------------------ effort

    @cached_property
    def effort(self) -> tuple[Stage, ...]:
        """Where the bursts went, by stage; empty in files that do not tell."""
        if not self._holds("effort"):
            return ()
        with self._reading("/effort"):
            group = self._group("effort")
            counted = zip(*(group[name][()].tolist() for name in ("sweeps", "bursts", "steps", "seconds")), strict=True)
            return tuple(Stage(name, *row) for name, row in zip(texts(group, "stage"), counted, strict=True))

    @cached_property
    def targets(self) -> tuple[Target, ...]:
        """Accuracies asked for and reached; empty where nothing was steered."""
        if not self._holds("targets"):
            return ()
        with self._reading("/targets"):
            group = self._group("targets")
            wanted, reached = floats(group, "wanted"), floats(group, "reached")
            met = group["met"][()]
            events, columns, reasons = (texts(group, name) for name in ("event", "number", "reason"))
            return tuple(
                Target(event, columns[i], float(wanted[i]), optional(reached[i]), bool(met[i]), reasons[i])
                for i, event in enumerate(events)
            )

    @cached_property
    def crosscheck(self) -> Crosscheck | None:
        """What long trajectories say; None where none were flown."""
        if not self._holds("crosscheck"):
            return None
        with self._reading("/crosscheck"):
            return read_crosscheck(self._group("crosscheck"))

    def estimate(self) -> Estimate:
        """All of it, in memory."""
        names = Estimate.__dataclass_fields__
        return Estimate(**{name: getattr(self, name) for name in names})

    # ----------------------------------------------------------------------------------- reading

    def _group(self, name: str = "/") -> h5py.Group:
        if not self._file:
            raise DensityFileError(f"{self._label}: this density file was closed; open it again to read more of it")
        return self._file[name]

    def _holds(self, name: str, group: str = "/") -> bool:
        """Whether a part that not every file has is there."""
        with self._reading(group if group == "/" else f"/{group}"):
            return name in self._group(group)

    def _array(self, name: str, dtype: Any) -> NDArray[Any]:
        with self._reading(f"/{name}"):
            array: NDArray[Any] = np.asarray(self._group()[name][()], dtype=dtype)
        array.flags.writeable = False
        return array

    def _table(self, where: str, axis: str, row: type[T], fields: Iterable[str]) -> dict[str, T]:
        """Rows of a table of quantities, by name; the columns are the fields of `row`."""
        with self._reading(f"/{where}"):
            group = self._group(where)
            names = texts(group, axis)
            columns = {name: read_quantities(group, name) for name in fields}
            return {name: row(**{c: q[i] for c, q in columns.items()}) for i, name in enumerate(names)}

    def _text(self, name: str) -> str:
        with self._reading(f"attribute {name}"):
            return str(self._root[name])

    def _json(self, name: str) -> Any:
        with self._reading(f"attribute {name}"):
            return from_json(self._root[name])

    def _damaged(self, what: str, why: str) -> DensityFileError:
        return DensityFileError(
            f"{self._label}, {what}: cannot be read ({why}); the file is damaged: "
            "restore it from a copy or run the case again"
        )

    @contextlib.contextmanager
    def _reading(self, what: str) -> Iterator[None]:
        """No error of the HDF5 library reaches the user: damage can surface as almost any of them."""
        try:
            yield
        except DensityFileError:
            raise
        except Exception as error:
            raise self._damaged(what, reason_of(error)) from error


def place(regime: int) -> str:
    """Where the groups of a regime lie: those of the first at the root."""
    return f"regimes/{regime}/" if regime else ""


def read_marginal(group: h5py.Group, name: str) -> Marginal:
    (axis,) = (v for v in group if "bounds" in group[v].attrs)
    bounds = group[group[axis].attrs["bounds"]][()]
    beside = str(group["mass"].attrs["ancillary_variables"]).split(" ")
    low, high = (group[end][()] if end in beside else None for end in ("mass_low", "mass_high"))
    return Marginal(
        edges=np.append(bounds[:, 0], bounds[-1:, 1]),
        mass=group["mass"][()],
        error=group["mass_se"][()],
        below=float(group.attrs["below"]),
        above=float(group.attrs["above"]),
        unit=str(group[axis].attrs["units"]),
        parts=part_columns(group, beside),
        low=low,
        high=high,
    )
