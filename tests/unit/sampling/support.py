"""Systems, flights and plans for the tests of this room, on the kernels that the kernel tests use."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from kernels.support import SPECS, kernel, parameter_array
from perdure._partition import Boxes
from perdure._records import BoxGrid, Plan, System
from perdure._sampling import BurstSampler, Flight, sobol_base
from perdure._streams import generator, seed_words

KIND = {"map": "map", "rk4": "flow", "weak2": "noisy-flow", "euler-maruyama": "noisy-flow"}


def system_of(name: str) -> System:
    """A system as a case would give it, for the kernel of that name."""
    state = SPECS[name].state
    return System(KIND[SPECS[name].scheme], state, ("1",) * len(state), "1", {})


def flight_of(name: str, parameters: Sequence[float] = (0.0,), seed: int = 1) -> Flight:
    return Flight(kernel(name), parameter_array(name, parameters), SPECS[name].n_sum, generator(seed, "pilot"))


def plan_of(grid: BoxGrid, **changes: Any) -> Plan:
    """A small plan; keyword arguments replace its parts."""
    upper = grid.lower + grid.counts * grid.width
    keys = np.arange(int(np.prod(grid.counts)), dtype=np.int64)
    made = Plan(
        grid=grid,
        bounded=True,
        seed_keys=keys,
        seed_share=np.full(len(keys), 1.0 / len(keys)),
        step=0.05,
        n_step=12,
        per_cell=16,
        n_replicate=4,
        stride=4,
        scheme="rk4",
        axis_lower=grid.lower,
        axis_upper=upper,
        found={},
        pilot={},
    )
    return replace(made, **changes)


def cells_of(plan: Plan, seed: int = 3) -> Boxes:
    size = plan.per_cell // plan.n_replicate
    ends = np.stack([plan.axis_lower, plan.axis_upper], axis=1)
    return Boxes(plan.grid, seed_words(seed, "bursts"), sobol_base(seed, plan.grid.n_dim, size), ends)


def sampler_of(name: str, parameters: Sequence[float], plan: Plan, n_interval: int = 10) -> BurstSampler:
    values = parameter_array(name, parameters)
    return BurstSampler(kernel(name), cells_of(plan), plan, values, SPECS[name].n_sum, n_interval)
