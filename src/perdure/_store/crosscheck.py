"""The group `/crosscheck`: what long trajectories say; written with the file, or added to one that exists."""

from __future__ import annotations

import hashlib
import io
import os
import shutil
from collections.abc import Iterator
from dataclasses import asdict
from typing import Any

import h5py
import numpy as np

from perdure._records import (
    Arbiter,
    Comparison,
    Crosscheck,
    Distance,
    Growth,
    MarginalComparison,
    Predictability,
    Quantity,
    Starts,
)
from perdure._store.description import from_json, to_json
from perdure._store.layout import OPTIONS, attrs, bare_dim, free_names, group, put, put_text
from perdure._store.publish import Path, check_target, publishing, refusal, room_left
from perdure._store.sections import put_intervals
from perdure._store.tables import floats, optional, put_quantities, read_quantities, texts
from perdure._store.write import MEMORY_LIMIT, digest, faults_named, write_image

__all__ = ["add_crosscheck", "put_crosscheck", "read_crosscheck"]

GROUP = "crosscheck"
DISTANCES = {
    "total_variation": "total variation distance",
    "kolmogorov_smirnov": "Kolmogorov-Smirnov distance",
    "wasserstein": "first Wasserstein distance",
}
TEXTS = ("verdict", "scheme", "command", "created")
NUMBERS = ("level", "step", "duration", "dropped", "seconds")
EFFECTIVE = ("batch means", "matrix")


def put_crosscheck(file: h5py.File, found: Crosscheck) -> None:
    """Write the group."""
    made = group(file, GROUP, long_name="the density beside long trajectories")
    attrs(made, **{name: getattr(found, name) for name in TEXTS})
    attrs(made, **{name: float(getattr(found, name)) for name in NUMBERS}, steps=np.int64(found.steps))
    attrs(made, messages=to_json(found.messages), starts=to_json(asdict(found.starts)))
    attrs(made, arbiter="" if found.arbiter is None else to_json(asdict(found.arbiter)))
    put_distance(made, "cells_total_variation", found.cells, "total variation distance of the cells' masses", "1")
    label = "time in which the slowest mode of the matrix fades by e"
    put_quantities(made, "memory", [found.memory], (), long_name=label)
    put_comparisons(made, found.comparisons, found.memory.unit)
    marginals = group(made, "marginals", long_name="marginals of the trajectories, by regime")
    for regime in dict.fromkeys(row.regime for row in found.marginals):
        place = group(marginals, str(regime), long_name=f"regime {regime}")
        for row in found.marginals:
            if row.regime == regime:
                put_marginal(place, row)
    told = group(made, "predictability", long_name="Lyapunov exponents and what follows from them, by regime")
    for item in found.predictability:
        put_predictability(told, item)


def put_distance(parent: h5py.Group, name: str, distance: Distance, label: str, unit: str) -> None:
    put(parent, name, np.float64(distance.value), (), units=unit, long_name=label)
    expected = f"{label}: what sampling alone gives on average"
    put(parent, f"{name}_expected", np.float64(distance.expected), (), units=unit, long_name=expected)


def put_comparisons(made: h5py.Group, rows: tuple[Comparison, ...], time_unit: str) -> None:
    """A row per number."""
    dims = ("comparison",)
    places = [f"{'' if c.regime == 0 else f'regimes/{c.regime}/'}{c.subject}s/{c.name}/{c.number}" for c in rows]
    put_text(made, "comparison", places, dims, long_name="where the number stands in this file")
    put(made, "regime", np.array([c.regime for c in rows], dtype=np.int32), dims, units="1", long_name="regime")
    for name, label in {"subject": "event or observable", "name": "its name", "number": "which of its numbers"}.items():
        put_text(made, name, [getattr(c, name) for c in rows], dims, long_name=label)
    put_quantities(made, "density", [c.density for c in rows], dims, long_name="number of the density")
    label = "number of the trajectories"
    put_quantities(made, "trajectories", [c.trajectories for c in rows], dims, long_name=label)
    columns: dict[str, tuple[list[float | None], str]] = {
        "distance": ([c.distance for c in rows], "difference over its standard error"),
        "p_value": ([c.p_value for c in rows], "chance of a larger difference, of this number alone"),
        "length": ([c.length for c in rows], "length of each trajectory that would do"),
    }
    for kind in EFFECTIVE:
        sizes = [c.effective.get(kind) for c in rows]
        columns[f"effective_{kind.replace(' ', '_')}"] = (sizes, f"effective sample size by {kind}")
    for name, (column, label) in columns.items():
        values = np.array([np.nan if v is None else v for v in column], dtype=float)
        put(made, name, values, dims, units=time_unit if name == "length" else "1", long_name=label)
    put_text(made, "verdict", [c.verdict for c in rows], dims, long_name="verdict on the number")
    put_text(made, "reason", [c.reason for c in rows], dims, long_name="reason of the verdict; may be empty")


def put_marginal(parent: h5py.Group, row: MarginalComparison) -> None:
    made = group(parent, row.component, component=row.component, verdict=row.verdict, reason=row.reason)
    attrs(made, p_value=np.nan if row.p_value is None else float(row.p_value), regime=np.int32(row.regime))
    fixed = ("mass", "mass_se", "bnds", *DISTANCES, *(f"{name}_expected" for name in DISTANCES))
    (axis,) = free_names([row.component], fixed, ("", "_bnds"))
    bare_dim(made, "bnds", 2)
    put_intervals(made, axis, row.edges, row.component, row.unit, f"middle of an interval of {row.component}")
    label = f"share of time that {row.component} spends in the interval, by the trajectories"
    put(made, "mass", row.mass, (axis,), units="1", long_name=label, ancillary_variables="mass_se")
    put(made, "mass_se", row.error, (axis,), units="1", long_name=f"{label}: standard error")
    for name, label in DISTANCES.items():
        put_distance(made, name, getattr(row, name), label, row.unit if name == "wasserstein" else "1")


def put_predictability(parent: h5py.Group, item: Predictability) -> None:
    made = group(parent, str(item.regime), long_name=f"regime {item.regime}", verdict=item.verdict)
    attrs(made, hypotheses=to_json(item.hypotheses))
    attrs(made, distance=np.nan if item.distance is None else float(item.distance), regime=np.int32(item.regime))
    axis = np.arange(1, len(item.exponents) + 1, dtype=np.int32)
    put(made, "exponent", axis, ("exponent",), units="1", long_name="number of the exponent, largest first")
    put_quantities(made, "lyapunov", item.exponents, ("exponent",), long_name="Lyapunov exponent")
    labels = {
        "total": "sum of the Lyapunov exponents, along the trajectories",
        "total_density": "mean rate of change of volumes, from the density",
        "entropy": "sum of the positive exponents",
        "dimension": "Kaplan-Yorke dimension",
    }
    for name, label in labels.items():
        put_quantities(made, name, [getattr(item, name)], (), long_name=label)
    growth = item.growth
    label = "median time in which almost identical pairs part"
    put_quantities(made, "growth_time", [growth.time], (), long_name=label)
    beside = {name: getattr(growth, name) for name in ("begin", "end", "early", "late", "n_pair", "n_parted")}
    attrs(made, growth=to_json(beside))


# ------------------------------------------------------------------------------------------- reading


def read_crosscheck(made: h5py.Group) -> Crosscheck:
    """What `put_crosscheck` wrote."""
    plain: dict[str, Any] = {name: str(made.attrs[name]) for name in TEXTS}
    plain |= {name: float(made.attrs[name]) for name in NUMBERS}
    arbiter = str(made.attrs["arbiter"])
    told = from_json(str(made.attrs["starts"]))
    return Crosscheck(
        **plain,
        steps=int(made.attrs["steps"]),
        messages=tuple(from_json(str(made.attrs["messages"]))),
        memory=read_quantities(made, "memory")[0],
        comparisons=tuple(read_comparisons(made)),
        marginals=tuple(read_marginals(made["marginals"])),
        cells=read_distance(made, "cells_total_variation"),
        starts=Starts(**{**told, "in_regime": tuple(told["in_regime"])}),
        predictability=tuple(read_predictability(item) for item in made["predictability"].values()),
        arbiter=Arbiter(**from_json(arbiter)) if arbiter else None,
    )


def read_distance(parent: h5py.Group, name: str) -> Distance:
    return Distance(float(parent[name][()]), float(parent[f"{name}_expected"][()]))


def read_comparisons(made: h5py.Group) -> Iterator[Comparison]:
    words = {name: texts(made, name) for name in ("subject", "name", "number", "verdict", "reason")}
    columns = {name: floats(made, name) for name in ("distance", "p_value", "length")}
    effective = {kind: floats(made, f"effective_{kind.replace(' ', '_')}") for kind in EFFECTIVE}
    density, trajectories = read_quantities(made, "density"), read_quantities(made, "trajectories")
    for i, regime in enumerate(made["regime"][()].tolist()):
        row: dict[str, Any] = {name: values[i] for name, values in words.items()}
        row |= {name: optional(values[i]) for name, values in columns.items()}
        yield Comparison(
            regime=regime,
            density=density[i],
            trajectories=trajectories[i],
            effective={kind: float(values[i]) for kind, values in effective.items() if not np.isnan(values[i])},
            **row,
        )


def read_marginals(made: h5py.Group) -> Iterator[MarginalComparison]:
    for inner in (inner for place in made.values() for inner in place.values()):
        (axis,) = (v for v in inner if "bounds" in inner[v].attrs)
        bounds = inner[inner[axis].attrs["bounds"]][()]
        yield MarginalComparison(
            regime=int(inner.attrs["regime"]),
            component=str(inner.attrs["component"]),
            edges=np.append(bounds[:, 0], bounds[-1:, 1]),
            mass=inner["mass"][()],
            error=inner["mass_se"][()],
            p_value=optional(float(inner.attrs["p_value"])),
            verdict=str(inner.attrs["verdict"]),
            reason=str(inner.attrs["reason"]),
            unit=str(inner[axis].attrs["units"]),
            **{name: read_distance(inner, name) for name in DISTANCES},
        )


def read_predictability(made: h5py.Group) -> Predictability:
    def one(name: str) -> Quantity:
        return read_quantities(made, name)[0]

    return Predictability(
        regime=int(made.attrs["regime"]),
        exponents=tuple(read_quantities(made, "lyapunov")),
        total=one("total"),
        total_density=one("total_density"),
        distance=optional(float(made.attrs["distance"])),
        verdict=str(made.attrs["verdict"]),
        entropy=one("entropy"),
        dimension=one("dimension"),
        growth=Growth(time=one("growth_time"), **from_json(str(made.attrs["growth"]))),
        hypotheses=tuple(from_json(str(made.attrs["hypotheses"]))),
    )


# -------------------------------------------------------------------------------------------- adding


def add_crosscheck(path: Path, found: Crosscheck) -> str:
    """Put a crosscheck into the density file `path`, in place of an earlier one; whole or not at all.

    Returns
    -------
    str
        SHA-256 of the file, hexadecimal.

    Raises
    ------
    OutputError
        Nothing was written; the old file is untouched. `.estimate` of the error is the crosscheck.
    """
    check_target(path, estimate=found)
    size = os.path.getsize(path)
    if size < MEMORY_LIMIT:
        with faults_named(path, found), open(path, "rb") as old:
            image = io.BytesIO(old.read())
            with h5py.File(image, "r+", **OPTIONS) as file:
                replaced(file, found)
        with publishing(path, estimate=found) as (descriptor, _):
            write_image(descriptor, image.getvalue())
        return hashlib.sha256(image.getvalue()).hexdigest()
    left = room_left(path)
    if left < 2 * size:
        cause = f"its copy may need {2 * size / 1e9:.2f} GB, the disk has {left / 1e9:.2f} GB left"
        raise refusal(path, cause, "free some space", found)
    with publishing(path, estimate=found) as (descriptor, part):
        with faults_named(path, found):
            shutil.copyfile(path, part)
            with h5py.File(part, "r+", locking=False, **OPTIONS) as file:
                replaced(file, found)
        return digest(descriptor)


def replaced(file: h5py.File, found: Crosscheck) -> None:
    """Write the group anew; the old one's room in the file stays empty."""
    complete: Any = file.attrs["complete"]
    if GROUP in file:
        del file[GROUP]
    put_crosscheck(file, found)
    attrs(file, complete=bool(complete))
