"""What a run gives and what a density file gives back, under the same names."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Mapping
from functools import cached_property
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from perdure._density import Density
from perdure._plain import plain_crosscheck, plain_quantity, plain_regime, plain_stage, plain_target
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
from perdure.errors import EstimateError, UsageError

if TYPE_CHECKING:
    from perdure._store import StoredEstimate

__all__ = ["DensityFile", "Result", "open_file"]


class Result:
    """Long-run statistics of a case.

    `events`, `observables`, `marginals` and `density` are those of the first regime, the one of largest
    weight; `regimes` holds them all. Arrays must not be changed.

    Parameters
    ----------
    estimate : Estimate
    """

    _held: Estimate | StoredEstimate

    def __init__(self, estimate: Estimate) -> None:
        self._held = estimate

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self._held,)

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self.title!r}: {self.outcome}, {self.n_cell} cells)"

    # -------------------------------------------------------------------------------- the case

    @property
    def case(self) -> CaseRecord:
        """The case; read from a file its expressions carry their text only (`case_text` can be run again)."""
        return self._held.case

    @property
    def title(self) -> str:
        return self.case.title

    @property
    def case_text(self) -> str:
        """The case file, verbatim."""
        return self.case.text

    @property
    def case_sha256(self) -> str:
        """SHA-256 of the bytes of `case_text`, hexadecimal."""
        return hashlib.sha256(self.case.text.encode()).hexdigest()

    @property
    def seed(self) -> int:
        return self.case.seed

    @property
    def caution(self) -> str:
        """What has to be said wherever the numbers are shown; empty if nothing."""
        return self.case.caution

    @property
    def kind(self) -> str:
        return self.case.system.kind

    @property
    def state(self) -> tuple[str, ...]:
        return self.case.system.state

    @property
    def units(self) -> tuple[str, ...]:
        return self.case.system.units

    @property
    def time_unit(self) -> str:
        return self.case.system.time_unit

    # --------------------------------------------------------------------------------- the run

    @property
    def plan(self) -> Plan:
        return self._held.plan

    @property
    def outcome(self) -> str:
        """ "one-regime", "several-regimes", "periodic" or "leaking"."""
        return self._held.outcome

    @property
    def messages(self) -> tuple[str, ...]:
        return self._held.messages

    @property
    def checks_passed(self) -> bool:
        return self._held.checks_passed

    @property
    def timings(self) -> Mapping[str, float]:
        """Seconds per stage."""
        return MappingProxyType(dict(self._held.timings))

    @property
    def packages(self) -> Mapping[str, str]:
        return MappingProxyType(dict(self._held.packages))

    @property
    def counts(self) -> Mapping[str, int]:
        return MappingProxyType(dict(self._held.counts))

    @property
    def effort(self) -> tuple[Stage, ...]:
        """Where the bursts went, by stage; empty where it is not on record."""
        return self._held.effort

    @property
    def cell_bursts(self) -> Integers | None:
        """Bursts sent from each cell, shape (n_cell,); None where it is not on record."""
        return self._held.cell_bursts

    @property
    def focus(self) -> tuple[float, tuple[float, ...]] | None:
        """Part of the cells that got half of the bursts, the most favoured ones, and their mass in each regime.

        No unit. None where bursts by cell are not on record.
        """
        bursts = self.cell_bursts
        if bursts is None or not bursts.any():
            return None
        order = np.argsort(-bursts, kind="stable")
        n_favoured = int(np.searchsorted(2 * np.cumsum(bursts[order]), bursts.sum())) + 1
        favoured = np.zeros(len(bursts), dtype=bool)
        favoured[order[:n_favoured]] = True
        laws = [self._law(k) for k in range(len(self._weights()))]
        return n_favoured / len(bursts), tuple(float(mass[favoured[cell]].sum()) for cell, mass in laws)

    @property
    def targets(self) -> tuple[Target, ...]:
        """Accuracies that were asked for, and what was reached; empty where nothing was steered."""
        return self._held.targets

    @property
    def crosscheck(self) -> Crosscheck | None:
        """What long trajectories say; None where none were flown."""
        return self._held.crosscheck

    @property
    def command(self) -> str:
        return self._held.command

    @property
    def created(self) -> str:
        return self._held.created

    # ----------------------------------------------------------------------------- the numbers

    @property
    def regimes(self) -> tuple[Regime, ...]:
        return self._held.regimes

    @cached_property
    def events(self) -> Mapping[str, EventResult]:
        return MappingProxyType(dict(self._events(0)) if self._weights() else {})

    @cached_property
    def observables(self) -> Mapping[str, ObservableResult]:
        return MappingProxyType(dict(self._observables(0)) if self._weights() else {})

    @cached_property
    def marginals(self) -> Mapping[str, Marginal]:
        return MappingProxyType(dict(self._marginals(0)) if self._weights() else {})

    @cached_property
    def density(self) -> Density:
        """Density of the first regime; errors as for `density_of`."""
        return self.density_of(0)

    def density_of(self, regime: int) -> Density:
        """Density of one regime.

        Raises
        ------
        EstimateError
            There is no regime: every class of cells leaks.
        UsageError
            No regime of that number.
        """
        n = len(self._weights())
        if not n:
            raise EstimateError(
                f"{self.title}: no long-run density exists (outcome {self.outcome!r}): " + " ".join(self.messages)
            )
        if not 0 <= regime < n:
            raise UsageError(f"density_of: regime is {regime}; it must be from 0 to {n - 1}")
        cell, mass = self._law(regime)
        return Density(self.grid, self.keys[cell], mass, self.state, self.units, dict(self._marginals(regime)))

    @property
    def outside_share(self) -> Quantity:
        """Share of time outside the domain."""
        return self._held.outside_share

    @property
    def grid(self) -> BoxGrid:
        return self._held.grid

    @property
    def keys(self) -> Integers:
        """Row-major indices of the cells in `grid`, ascending: the fixed order of the cells."""
        return self._held.keys

    @property
    def n_cell(self) -> int:
        return self._n_cell()

    @property
    def basins(self) -> NDArray[np.float32] | None:
        """Probability of ending in each regime from each cell, shape (n_cell, n_regime), or None."""
        return self._held.basins

    @property
    def tally(self) -> Tally | None:
        """Counts of bursts from cell to cell; None where they were not kept."""
        return self._held.tally

    def matrix(self) -> Tally:
        """Counts of bursts from cell to cell.

        Raises
        ------
        UsageError
            They were not kept.
        """
        tally = self.tally
        if tally is None:
            raise UsageError(f"{self.title}: the matrix was not kept; set [output] matrix = true and run again")
        return tally

    @property
    def estimate(self) -> Estimate:
        """Everything as one record, in memory."""
        held = self._held
        return held if isinstance(held, Estimate) else held.estimate()

    # ------------------------------------------------------------------------------------ out

    def save(self, path: str | os.PathLike[str]) -> str:
        """Write a density file, whole or not at all.

        Returns
        -------
        str
            SHA-256 of the file, hexadecimal.

        Raises
        ------
        OutputError
            Nothing was written; an old file is untouched.
        """
        from perdure._store import save

        return save(self.estimate, path)

    def to_dict(self) -> dict[str, Any]:
        """All numbers in types that JSON has: what ``perdure show --json`` prints. nan, inf: None."""
        weights = self._weights()
        return {
            "case": {
                "title": self.title,
                "seed": self.seed,
                "sha256": self.case_sha256,
                "kind": self.kind,
                "state": list(self.state),
                "units": list(self.units),
                "time_unit": self.time_unit,
                "caution": self.caution,
                "outcome": self.outcome,
                "messages": list(self.messages),
                "checks_passed": self.checks_passed,
                "accuracy": self.case.accuracy,
            },
            "regimes": [
                plain_regime(weight, self._events(k), self._observables(k), self._marginals(k))
                for k, weight in enumerate(weights)
            ],
            "cells": self.n_cell,
            "outside_share": plain_quantity(self.outside_share),
            "effort": [plain_stage(stage) for stage in self.effort],
            "half_of_bursts": self._plain_focus(),
            "targets": [plain_target(target) for target in self.targets],
            "crosscheck": None if self.crosscheck is None else plain_crosscheck(self.crosscheck),
        }

    def _plain_focus(self) -> dict[str, Any] | None:
        focus = self.focus
        return None if focus is None else {"cells": focus[0], "mass": list(focus[1])}

    # ------------------------------------------------- per regime; a file reads each part by itself

    def _n_cell(self) -> int:
        return len(self.keys)

    def _weights(self) -> tuple[Quantity, ...]:
        return tuple(r.weight for r in self.regimes)

    def _law(self, regime: int) -> tuple[Integers, Floats]:
        return self.regimes[regime].cell, self.regimes[regime].mass

    def _events(self, regime: int) -> Mapping[str, EventResult]:
        return self.regimes[regime].events

    def _observables(self, regime: int) -> Mapping[str, ObservableResult]:
        return self.regimes[regime].observables

    def _marginals(self, regime: int) -> Mapping[str, Marginal]:
        return self.regimes[regime].marginals


class DensityFile(Result):
    """A `Result` that reads its parts from a density file when they are first asked for.

    Works as a context manager and is pickled by its path. The file stays open until `close`; a new file that
    takes its place meanwhile is not seen. Any part can raise `DensityFileError` if the file is damaged there.

    Parameters
    ----------
    path : path-like

    Raises
    ------
    DensityFileError
        The file is missing, unreadable, no density file, unfinished, damaged or of a newer format.
    """

    _held: StoredEstimate

    def __init__(self, path: str | os.PathLike[str]) -> None:
        from perdure._store import open_file as open_stored

        self._held = open_stored(path)

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.path,)

    def __enter__(self) -> DensityFile:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()

    @property
    def path(self) -> str:
        return self._held.path

    @property
    def cpu(self) -> str:
        """Model of the processor that wrote the file."""
        return self._held.cpu

    def close(self) -> None:
        """Let go of the file; parts already read stay available."""
        self._held.close()

    def _n_cell(self) -> int:
        return self._held.n_cell

    def _weights(self) -> tuple[Quantity, ...]:
        return self._held.weights

    def _law(self, regime: int) -> tuple[Integers, Floats]:
        return self._held.cells_of(regime), self._held.mass_of(regime)

    def _events(self, regime: int) -> Mapping[str, EventResult]:
        return self._held.events_of(regime)

    def _observables(self, regime: int) -> Mapping[str, ObservableResult]:
        return self._held.observables_of(regime)

    def _marginals(self, regime: int) -> Mapping[str, Marginal]:
        return self._held.marginals_of(regime)


def open_file(path: str | os.PathLike[str]) -> DensityFile:
    """Open a density file: ``perdure.open``.

    Parameters
    ----------
    path : path-like

    Returns
    -------
    DensityFile
        Reads its parts when first asked for; use it in a ``with`` statement or `close` it.

    Raises
    ------
    DensityFileError
        The file is missing, unreadable, no density file, unfinished, damaged or of a newer format.
    """
    return DensityFile(path)
