"""The groups of a density file, one function each. Every group carries its own axes."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

import h5py
import numpy as np

from perdure._records import (
    BoxGrid,
    CaseRecord,
    Estimate,
    EventResult,
    Floats,
    Integers,
    Marginal,
    ObservableResult,
    Quantity,
    Regime,
    Stage,
    System,
    Tally,
    Target,
    density_unit,
)
from perdure._store.description import to_json
from perdure._store.layout import attrs, bare_dim, free_names, group, put, put_text
from perdure._store.tables import part_names, part_variables, put_quantities

__all__ = [
    "EVENT_COLUMNS",
    "OBSERVABLE_COLUMNS",
    "put_budget",
    "put_cells",
    "put_density",
    "put_effort",
    "put_events",
    "put_marginals",
    "put_matrix",
    "put_observables",
    "put_provenance",
    "put_regimes",
    "put_targets",
]

EVENT_COLUMNS = {
    "share": "share of time spent in the event",
    "entry_rate": "entries into the event per unit time",
    "return_period": "mean time between successive entries",
    "mean_spell": "mean length of an unbroken stay",
}
OBSERVABLE_COLUMNS = {"mean": "long-run mean", "variance": "long-run variance"}


def put_cells(file: h5py.File, estimate: Estimate) -> None:
    """`/cells`: the lattice, the cells in use in their fixed order, their regimes, bursts and basins."""
    grid, system, regimes = estimate.grid, estimate.case.system, estimate.regimes
    made = group(file, "cells", long_name="the partition", axis_names=" ".join(system.state))
    attrs(made, axis_units=to_json(system.units))
    mixed = len(set(system.units)) > 1
    units = {"comment": "units: see axis_units"} if mixed else {"units": system.units[0]}
    axes = np.arange(grid.n_dim, dtype=np.int32)
    put(made, "axis", axes, ("axis",), units="1", long_name="state component")
    put(made, "lower", grid.lower, ("axis",), long_name="lower corner of the lattice", **units)
    put(made, "width", grid.width, ("axis",), long_name="edge lengths of a cell", **units)
    put(made, "counts", grid.counts, ("axis",), units="1", long_name="cells per axis of the lattice")
    put(made, "periodic", grid.periodic, ("axis",), long_name="whether the axis wraps around")
    put_cell_axis(made, estimate.keys)
    member = np.full(len(estimate.keys), -1, dtype=np.int32)
    for k, regime in enumerate(regimes):
        member[regime.cell] = k
    label = "regime that the cell belongs to; -1: none, the cell is left for good"
    put(made, "cell_regime", member, ("cell",), units="1", long_name=label)
    if estimate.cell_bursts is not None:
        bursts = np.asarray(estimate.cell_bursts, dtype=np.int64)
        put(made, "bursts", bursts, ("cell",), units="1", long_name="bursts sent from the cell")
    if estimate.basins is not None:
        columns = np.arange(estimate.basins.shape[1], dtype=np.int32)
        put(made, "regime", columns, ("regime",), units="1", long_name="regime")
        label = "probability of ending in the regime from a start in the cell"
        put(made, "basin", estimate.basins, ("cell", "regime"), units="1", long_name=label)


def put_density(parent: h5py.Group, grid: BoxGrid, keys: Integers, mass: Floats, system: System) -> None:
    """`density`: mass and density of the cells, gathered as CF's "compression by gathering" has it."""
    made = group(parent, "density", long_name="long-run law over the cells")
    fixed = ("cell", "mass", "density", "bnds")
    axes = free_names(system.state, fixed, ("", "_bnds"))
    bare_dim(made, "bnds", 2)
    for k, axis in enumerate(axes):
        edges = grid.lower[k] + np.arange(grid.counts[k] + 1) * grid.width[k]
        put_intervals(made, axis, edges, system.state[k], system.units[k], f"cell centre in {system.state[k]}")
    put_cell_axis(made, keys)
    attrs(made["cell"], compress=" ".join(axes))
    unit = density_unit(system.units)
    put(made, "mass", mass, ("cell",), units="1", long_name="probability of the cell")
    put(
        made,
        "density",
        mass / grid.volume,
        ("cell",),
        units=unit,
        long_name="probability per volume of state space",
    )


def put_cell_axis(made: h5py.Group, keys: Integers) -> None:
    label = "row-major index of the cell in the lattice, last component fastest"
    put(made, "cell", np.asarray(keys, dtype=np.int64), ("cell",), units="1", long_name=label)


def put_intervals(made: h5py.Group, name: str, edges: Floats, component: str, unit: str, label: str) -> None:
    """Coordinate of the midpoints with the edges as bounds; the group has an axis `bnds`."""
    middle = 0.5 * (edges[:-1] + edges[1:])
    put(made, name, middle, (name,), units=unit, long_name=label, bounds=f"{name}_bnds", component=component)
    put(made, f"{name}_bnds", np.stack([edges[:-1], edges[1:]], axis=1), (name, "bnds"), units=unit)


def put_marginals(parent: h5py.Group, marginals: Mapping[str, Marginal]) -> None:
    """`marginals/COMPONENT`: histogram of each state component along the bursts."""
    made = group(parent, "marginals", long_name="histograms along the bursts")
    for name, marginal in marginals.items():
        inner = group(made, name, component=name, below=float(marginal.below), above=float(marginal.above))
        beside = marginal_columns(marginal)
        (axis,) = free_names([name], ("mass", *beside, "bnds"), ("", "_bnds"))
        bare_dim(inner, "bnds", 2)
        put_intervals(inner, axis, marginal.edges, name, marginal.unit, f"middle of an interval of {name}")
        label = f"share of time that {name} spends in the interval"
        listed = " ".join(beside)
        put(inner, "mass", marginal.mass, (axis,), units="1", long_name=label, ancillary_variables=listed)
        for variable, (values, what, part) in beside.items():
            put(inner, variable, values, (axis,), units="1", long_name=f"{label}: {what}", **part)


def marginal_columns(marginal: Marginal) -> dict[str, tuple[Floats, str, dict[str, str]]]:
    """What stands beside the masses, by name of the variable: values, what they are, attribute `part` if they are one.

    As for a column of quantities (`tables`): mass_low, mass_high, mass_se, mass_se_PART.
    """
    columns: dict[str, tuple[Floats, str, dict[str, str]]] = {}
    for name, end, values in (("mass_low", "lower", marginal.low), ("mass_high", "upper", marginal.high)):
        if values is not None:
            columns[name] = (values, f"{end} end of 95 %", {})
    columns["mass_se"] = (marginal.error, "standard error", {})
    parts = tuple(marginal.parts)
    for part, name in zip(parts, part_variables("mass", parts), strict=True):
        columns[name] = (marginal.parts[part], f"standard error, part {part}", {"part": part})
    return columns


def put_events(parent: h5py.Group, events: Mapping[str, EventResult], case: CaseRecord) -> None:
    """`events`: a row per event."""
    made = group(parent, "events", long_name="long-run numbers of the events")
    put_text(made, "event", events, ("event",), long_name="event name")
    for name, label in EVENT_COLUMNS.items():
        put_quantities(made, name, [getattr(e, name) for e in events.values()], ("event",), long_name=label)
    conditions = {e.name: e.condition.text for e in case.events}
    ends = {e.name: e.until.text for e in case.events if e.until is not None}
    label = "condition on the state"
    put_text(made, "condition", [conditions.get(name, "") for name in events], ("event",), long_name=label)
    label = "condition that ends a spell; empty: the spell ends where the condition does"
    put_text(made, "until", [ends.get(name, "") for name in events], ("event",), long_name=label)


def put_observables(parent: h5py.Group, observables: Mapping[str, ObservableResult], case: CaseRecord) -> None:
    """`observables`: a row per observable."""
    made = group(parent, "observables", long_name="long-run numbers of the observables")
    put_text(made, "observable", observables, ("observable",), long_name="observable name")
    for name, label in OBSERVABLE_COLUMNS.items():
        column = [getattr(o, name) for o in observables.values()]
        put_quantities(made, name, column, ("observable",), long_name=label)
    known = {o.name: o for o in case.observables}
    formulas = [known[name].expression.text if name in known else "" for name in observables]
    units = [known[name].unit if name in known else "1" for name in observables]
    put_text(made, "expression", formulas, ("observable",), long_name="function of the state")
    put_text(made, "unit", units, ("observable",), long_name="unit of the observable")


def put_regimes(file: h5py.File, estimate: Estimate) -> h5py.Group:
    """`/regimes`: a row per regime, and the share of time outside the domain."""
    regimes = estimate.regimes
    made = group(file, "regimes", long_name="closed classes of cells, largest weight first")
    put(made, "regime", np.arange(len(regimes), dtype=np.int32), ("regime",), units="1", long_name="regime")
    weights = [r.weight for r in regimes]
    label = "probability of ending in the regime from a start uniform over the cells"
    put_quantities(made, "weight", weights, ("regime",), long_name=label, with_text=False)
    columns = {
        "period": (
            np.array([r.period for r in regimes], dtype=np.int64),
            "greatest common divisor of cycle lengths",
        ),
        "residual": (np.array([r.residual for r in regimes], dtype=float), "1-norm of mass @ P - mass"),
        "eigenvalue": (
            np.array([r.eigenvalue for r in regimes], dtype=float),
            "sum of mass @ P over sum of mass",
        ),
        "n_cell": (np.array([len(r.cell) for r in regimes], dtype=np.int64), "cells of the regime"),
    }
    for name, (values, label) in columns.items():
        put(made, name, values, ("regime",), units="1", long_name=label)
    label = "share of time outside the domain"
    put_quantities(made, "outside_share", [estimate.outside_share], (), long_name=label, with_text=False)
    return made


def put_budget(file: h5py.File, estimate: Estimate) -> None:
    """`/budget`: every number of the file with its interval and the parts of its error, a column per part.

    The masses of the marginals have theirs beside them, in `/marginals/COMPONENT`.
    """
    rows = dict(numbers(estimate.regimes, estimate.outside_share))
    made = group(file, "budget", long_name="parts of the error of every number")
    put_text(made, "number", rows, ("number",), long_name="where the number stands in this file")
    quantities = list(rows.values())
    put_text(made, "unit", [q.unit for q in quantities], ("number",), long_name="unit of value and errors")
    parts = part_names(quantities)
    columns = {
        "value": [q.value for q in quantities],
        "low": [q.low for q in quantities],
        "high": [q.high for q in quantities],
        "total": [q.error for q in quantities],
    }
    labels = {"value": "the number", "low": "lower end of 95 %", "high": "upper end of 95 %"}
    fixed = ("number", "unit", *columns)
    for part, name in zip(parts, free_names([p.replace(" ", "_") for p in parts], fixed), strict=True):
        columns[name] = [q.parts.get(part) for q in quantities]
    for name, values in columns.items():
        label = labels.get(name, f"standard error: {name.replace('_', ' ')}")
        data = np.array([np.nan if v is None else v for v in values], dtype=float)
        put(made, name, data, ("number",), long_name=label)


def numbers(regimes: Sequence[Regime], outside: Quantity) -> Iterator[tuple[str, Quantity]]:
    """Place and quantity of every number, in the order of the file."""
    for k, regime in enumerate(regimes):
        place = f"regimes/{k}/" if k else ""
        yield f"regimes/{k}/weight", regime.weight
        for name, event in regime.events.items():
            for column in EVENT_COLUMNS:
                yield f"{place}events/{name}/{column}", getattr(event, column)
        for name, observable in regime.observables.items():
            for column in OBSERVABLE_COLUMNS:
                yield f"{place}observables/{name}/{column}", getattr(observable, column)
    yield "regimes/outside_share", outside


def put_matrix(file: h5py.File, tally: Tally, n_cell: int) -> None:
    """`/matrix`: the tally as compressed rows; that of the outside state, if any, comes last.

    Counts of bursts are integers; those of reseeded bursts are floats, weights in units of bursts.
    """
    made = group(file, "matrix", long_name="counts of bursts from cell to cell, by replicate")
    attrs(made, outside_column=np.int64(n_cell), blown_up_column=np.int64(n_cell + 1))
    if tally.together:
        attrs(made, together=True, comment="a replicate is an ensemble: only replicates are independent, not rows")
    weighted = ": weights in units of bursts" if tally.count.dtype.kind == "f" else ""
    for name, size in {
        "row_end": tally.n_cell + 1,
        "row": tally.n_cell,
        "entry": len(tally.column),
        "replicate": tally.count.shape[1],
    }.items():
        bare_dim(made, name, size)
    label = "row i holds the entries pointer[i] to pointer[i + 1] - 1"
    put(made, "pointer", np.asarray(tally.pointer, dtype=np.int64), ("row_end",), units="1", long_name=label)
    label = "position of the target in the order of cells; the outside and the blown-up state follow them"
    put(made, "column", np.asarray(tally.column, dtype=np.int32), ("entry",), units="1", long_name=label)
    label = f"bursts that went there{weighted}"
    put(made, "count", tally.count, ("entry", "replicate"), units="1", long_name=label)
    bursts = np.asarray(tally.bursts, dtype=np.float64 if tally.bursts.dtype.kind == "f" else np.int64)
    label = f"bursts sent from the cell{weighted}"
    put(made, "bursts", bursts, ("row", "replicate"), units="1", long_name=label)


def put_effort(file: h5py.File, effort: Sequence[Stage]) -> None:
    """`/effort`: where the bursts went, a row per stage."""
    made = group(file, "effort", long_name="where the bursts went, by stage")
    put_text(made, "stage", [stage.name for stage in effort], ("stage",), long_name="stage of the run")
    labels = {"sweeps": "passes over the cells", "bursts": "bursts sent", "steps": "time steps taken"}
    for name, label in labels.items():
        counted = np.array([getattr(stage, name) for stage in effort], dtype=np.int64)
        put(made, name, counted, ("stage",), units="1", long_name=label)
    seconds = np.array([stage.seconds for stage in effort], dtype=float)
    put(made, "seconds", seconds, ("stage",), units="s", long_name="wall time of the stage")


def put_targets(file: h5py.File, targets: Sequence[Target]) -> None:
    """`/targets`: a row for each number that the accuracy asked for applies to."""
    made = group(file, "targets", long_name="accuracy asked for and reached")
    places = [f"events/{target.event}/{target.number}" for target in targets]
    put_text(made, "target", places, ("target",), long_name="where the number stands in this file")
    for name, label in {"event": "event name", "number": "which number of the event"}.items():
        put_text(made, name, [getattr(target, name) for target in targets], ("target",), long_name=label)
    half_width = "half-width of the 95 percent interval over the value"
    wanted = np.array([target.wanted for target in targets], dtype=float)
    put(made, "wanted", wanted, ("target",), units="1", long_name=f"{half_width}: largest allowed")
    reached = np.array([np.nan if t.reached is None else t.reached for t in targets], dtype=float)
    put(made, "reached", reached, ("target",), units="1", long_name=f"{half_width}: reached")
    met = np.array([target.met for target in targets], dtype=bool)
    put(made, "met", met, ("target",), long_name="whether the accuracy asked for was reached")
    label = "what limits it; empty if met"
    put_text(made, "reason", [target.reason for target in targets], ("target",), long_name=label)


def put_provenance(file: h5py.File, estimate: Estimate) -> None:
    """`/provenance`: seconds per stage, counts, and the cells that the pilot visited."""
    made = group(file, "provenance", long_name="how the numbers were made")
    put_text(made, "stage", estimate.timings, ("stage",), long_name="stage of the run")
    seconds = np.array(list(estimate.timings.values()), dtype=float)
    put(made, "seconds", seconds, ("stage",), units="s", long_name="wall time of the stage")
    put_text(made, "counter", estimate.counts, ("counter",), long_name="what was counted")
    counted = np.array([int(n) for n in estimate.counts.values()], dtype=np.int64)
    put(made, "count", counted, ("counter",), units="1", long_name="count")
    label = "cells that pilot trajectories visited, as indices in the lattice of the plan"
    keys = np.asarray(estimate.plan.seed_keys, dtype=np.int64)
    put(made, "seed_key", keys, ("seed_key",), units="1", long_name=label)
    label = "part of the pilot's points in the cell"
    put(
        made,
        "seed_share",
        np.asarray(estimate.plan.seed_share, float),
        ("seed_key",),
        units="1",
        long_name=label,
    )
