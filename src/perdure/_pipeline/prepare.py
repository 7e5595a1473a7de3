"""From a case to a plan: compile, fly the pilot, choose."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from perdure._partition import Boxes, lattice
from perdure._pipeline.watch import Clock, Progress
from perdure._records import BoxGrid, CaseRecord, Floats, Integers, Plan
from perdure._sampling import (
    Domain,
    Flight,
    Pilot,
    Visited,
    boxes_per_axis,
    domain,
    further,
    kernel_for,
    make_plan,
    parameter_values,
    scheme_of,
    sobol_base,
    survey,
)
from perdure._streams import generator, seed_words
from perdure.errors import CaseError, NoAttractorError

__all__ = ["Prepared", "prepare"]

# Points after which the pilot stops looking for more cells.
MOST_POINTS = 6_000_000


@dataclass(frozen=True)
class Prepared:
    """A case with its compiled kernel and its plan."""

    case: CaseRecord
    advance: Callable[..., int]
    n_sum: int
    plan: Plan
    centres: Floats

    @property
    def flight(self) -> Flight:
        return Flight(self.advance, parameter_values(self.case), self.n_sum, generator(self.case.seed, "pilot"))

    @property
    def parameters(self) -> Floats:
        """What the kernel is given: parameters and the centres of the observables."""
        return parameter_values(self.case, self.centres)

    @property
    def cells(self) -> Boxes:
        made = self.plan
        size = made.per_cell // made.n_replicate if self.case.bursts.seeds == "sobol" else 0
        return boxes(self.case, made.grid, (made.axis_lower, made.axis_upper), size)


def boxes(case: CaseRecord, grid: BoxGrid, ends: tuple[Floats, Floats], size: int) -> Boxes:
    """Discretiser of a case, with a Sobol set of `size` points (none for 0)."""
    base = sobol_base(case.seed, grid.n_dim, size) if size else np.zeros((0, grid.n_dim), dtype=np.uint32)
    return Boxes(grid, seed_words(case.seed, "bursts"), base, np.stack(ends, axis=1))


def prepare(case: CaseRecord, progress: Progress, clock: Clock, effort: float = 1.0) -> Prepared:
    """Compile, fly the pilot, plan; with less `effort` than 1, fewer bursts and coarser cells."""
    progress("compile", 0, 1)
    advance, n_sum = kernel_for(case)
    clock.stage("compile")
    progress("pilot", 0, 1)
    flight = Flight(advance, parameter_values(case), n_sum, generator(case.seed, "pilot"))
    try:
        pilot = survey(flight, case.system, case.cells, case.bursts)
    except NoAttractorError as error:
        raise NoAttractorError(f"{case.source_name}, {error}") from error
    ends = domain(case.system, case.cells, pilot)
    if not np.all(ends.lower < ends.upper):
        worst = case.system.state[int(np.argmin(ends.upper - ends.lower))]
        raise CaseError(
            f"{case.source_name}, [cells] component {worst!r}: the end that was given lies beyond the states of the "
            "pilot run; give both lower and upper, or neither"
        )
    counts, why = boxes_per_axis(
        case.system, case.cells, pilot, reseeded=case.bursts.reseed is not False, coarse=effort < 1.0
    )
    grid = make_grid(case, ends, counts)
    found = {} if ends.given.all() else {"domain": "range of the pilot run; the cover grows by arrivals"}
    if (ends.closed & ~ends.given).any():
        found["domain"] = "twice the middle 99 percent of the pilot run (heavy tails); beyond is the outside state"
    if not case.cells.counts:
        found["cells"] = why
    visited = visited_cells(case, boxes(case, grid, (ends.lower, ends.upper), 0), pilot, flight)
    if not len(visited.keys):
        raise CaseError(
            f"{case.source_name}, [cells] lower, upper: no state of the pilot run lies inside; the long run covers "
            f"{span(case, pilot.points)}; widen the domain or leave it out"
        )
    made = make_plan(case, pilot, flight, scheme_of(case), grid, ends, visited, found, effort)
    clock.stage("pilot")
    return Prepared(case, advance, n_sum, made, centres_of(case, flight, pilot))


def centres_of(case: CaseRecord, flight: Flight, pilot: Pilot) -> Floats:
    """Median of each observable over states of the pilot, shape (n_observable,); 0 where it is not finite."""
    first = 2 * len(case.events)
    points = pilot.points[:, :: max(1, pilot.points.shape[1] // 4096)]
    seen = flight.flown(points, pilot.step, 1)[1][first::2]
    return np.array([float(np.median(row[np.isfinite(row)])) if np.isfinite(row).any() else 0.0 for row in seen])


def visited_cells(case: CaseRecord, cells: Boxes, pilot: Pilot, flight: Flight) -> Visited:
    """Cells of the pilot's points; it flies on while more than a tenth of them were met only once."""
    points, last, found = pilot.points, pilot.last, Visited.none()
    while True:
        keys = np.empty(points.shape[1], dtype=np.int64)
        cells.locate(np.ascontiguousarray(points), keys)
        found = found.joined(keys)
        if found.seldom <= 0.1 * len(found.keys) or found.n_point >= MOST_POINTS:
            return found
        points, last = further(flight, case.system, last, pilot.step)


def make_grid(case: CaseRecord, ends: Domain, counts: Integers) -> BoxGrid:
    """Lattice of the case: closed at the ends that are so, open elsewhere.

    At an open end the last box reaches a quarter of a box further, so that arrivals a little beyond the pilot's
    extreme do not start a new box, most of which may lie beyond a sharp edge of the long run.
    """
    margin = np.where(ends.closed.T, 0.0, 0.25 * (ends.upper - ends.lower) / counts)
    periodic = np.array([s in case.cells.periodic for s in case.system.state])
    return lattice(ends.lower - margin[0], ends.upper + margin[1], counts, ends.closed, periodic)


def span(case: CaseRecord, points: Floats) -> str:
    """Range of each component in words."""
    ends = zip(case.system.state, points.min(axis=1), points.max(axis=1), strict=True)
    return ", ".join(f"{low:.4g} <= {s} <= {high:.4g}" for s, low, high in ends)
