"""Running bursts: the pilot, the plan, and blocks of cells that come back as finished rows."""

from perdure._sampling.bursts import BlockRows, BurstSampler, sobol_base
from perdure._sampling.ensemble import FIRST_SWEEP, Ensemble, Starts, WeightedRows, seeds_in
from perdure._sampling.halving import Pairs, pairs
from perdure._sampling.kernels import kernel_for, parameter_values, scheme_of, trajectories_for
from perdure._sampling.outside import OutsideRow, outside_row
from perdure._sampling.pilot import Flight, Pilot, further, survey
from perdure._sampling.planning import (
    PLAIN_PART,
    Domain,
    Visited,
    boxes_per_axis,
    burst_budget,
    bursts_per_cell,
    domain,
    make_plan,
)

__all__ = [
    "FIRST_SWEEP",
    "PLAIN_PART",
    "BlockRows",
    "BurstSampler",
    "Domain",
    "Ensemble",
    "Flight",
    "OutsideRow",
    "Pairs",
    "Pilot",
    "Starts",
    "Visited",
    "WeightedRows",
    "boxes_per_axis",
    "burst_budget",
    "bursts_per_cell",
    "domain",
    "further",
    "kernel_for",
    "make_plan",
    "outside_row",
    "pairs",
    "parameter_values",
    "scheme_of",
    "seeds_in",
    "sobol_base",
    "survey",
    "trajectories_for",
]
