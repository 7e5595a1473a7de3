"""What the transition matrix says of long trajectories."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from perdure._crosscheck.evidence import Matrix
from perdure._crosscheck.flight import cell_of
from perdure._pipeline.craft import Craft
from perdure._records import Floats, Quantity
from perdure._sampling import Flight
from perdure._spectrum import ClassSolver, slowest

__all__ = ["matrix_view"]

# Share of time outside the domain from which the cells do not tell how averages vary.
OUTSIDE = 1e-3
# Steps of a burst up to which each is summed by itself.
FEW_STEPS = 32
# Bursts from all cells of a regime for the variance of averages, and the fewest from each.
BURST_POINTS, FEWEST_POINTS = 2**17, 4


def matrix_view(craft: Craft) -> Matrix:
    """Memory time, and the variance of averages along a trajectory, by the matrix."""
    held, time_unit = craft.held, craft.case.system.time_unit
    nothing = Quantity(None, None, None, {}, time_unit, "the matrix was not kept: [output] matrix = false")
    if held.tally is None:
        return Matrix(nothing)
    craft.report("matrix", 0, 1)
    tau = held.plan.duration
    variance: dict[tuple[int, str, str], float] = {}
    times = []
    for r in range(len(held.regimes)):
        solver = craft.solver(r)
        slow = slowest(solver)
        if slow is not None:
            times.append(-tau / math.log(abs(slow)) if abs(slow) > 0.0 else 0.0)
        names = [("event", e.name) for e in craft.case.events]
        names += [("observable", o.name) for o in craft.case.observables]
        if held.regimes[r].mass.sum() < 1.0 - OUTSIDE:
            # bursts that end outside have no cell to go on from
            continue
        found = burst_variance(craft, solver, r) * tau
        variance |= {(r, *name): float(v) for name, v in zip(names, found, strict=True)}
    if not times:
        return Matrix(replace(nothing, reason="the iteration for the slowest mode did not converge"), variance)
    return Matrix(Quantity(max(times), None, None, {}, time_unit), variance)


def burst_variance(craft: Craft, solver: ClassSolver, regime: int) -> Floats:
    """Variance of averages over n bursts that follow each other, times n, shape (n_event + n_observable,).

    With h from the matrix, (I - P) h = g - mu(g), the sum over bursts is one of uncorrelated increments G - mu(g)
    + h(end) - h(begin) (M. I. Gordin, Soviet Math. Dokl. 10 (1969) 1174-1176). Their variance is taken over bursts
    from the cells, each weighted with its mass.
    """
    held, plan = craft.held, craft.held.plan
    grid, cell, mass = held.grid, held.regimes[regime].cell, held.regimes[regime].mass
    n_point = int(np.clip(BURST_POINTS // len(cell), FEWEST_POINTS, BURST_POINTS))
    corner = grid.lower + grid.indices(held.keys[cell]) * grid.width
    place = craft.draws.random((grid.n_dim, len(cell), n_point))
    begin = (corner.T[:, :, None] + place * grid.width[:, None, None]).reshape(grid.n_dim, -1)
    flight = Flight(*craft.burst_kernel, craft.draws)
    rows = [2 * k for k in range(len(craft.case.events) + len(craft.case.observables))]
    if plan.n_step > FEW_STEPS:
        # the kernel leaves the first step of a burst out of its sums
        end, sums = flight.flown(begin, plan.step, plan.n_step)
        mean = sums[rows] / (plan.n_step - 1)
    else:
        end, mean = begin, np.zeros((len(rows), begin.shape[1]))
        for _ in range(plan.n_step):
            end, sums = flight.flown(end, plan.step, 1)
            mean += sums[rows] / plan.n_step
    at = cell_of(grid, held.keys, np.where(np.isfinite(end), end, np.inf))
    # seeds off the long run may lead away
    fine = (at < len(held.keys)).reshape(len(cell), n_point)
    count = np.maximum(fine.sum(axis=1), 1)
    mean = np.where(fine, mean.reshape(len(rows), len(cell), n_point), 0.0)
    values = np.zeros((solver.n, len(rows)))
    values[cell] = (mean.sum(axis=2) / count).T
    h = np.concatenate([solver.adjoint(values), np.zeros((1, len(rows)))])
    h_end = h[np.where(at < len(held.keys), at, -1)].T.reshape(mean.shape)
    step = np.where(fine, mean - (mass @ values[cell])[:, None, None] + h_end - h[cell].T[:, :, None], 0.0)
    return np.asarray(((step**2).sum(axis=2) / count) @ (mass / mass.sum()))
