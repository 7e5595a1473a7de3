"""Running bursts: the pilot, the plan, and blocks of cells that come back as finished rows."""

from perdure._sampling.bursts import BlockRows, BurstSampler, sobol_base
from perdure._sampling.kernels import kernel_for, parameter_values, scheme_of
from perdure._sampling.outside import OutsideRow, outside_row
from perdure._sampling.pilot import Flight, Pilot, further, survey
from perdure._sampling.planning import Domain, Visited, boxes_per_axis, bursts_per_cell, domain, make_plan

__all__ = [
    "BlockRows",
    "BurstSampler",
    "Domain",
    "Flight",
    "OutsideRow",
    "Pilot",
    "Visited",
    "boxes_per_axis",
    "bursts_per_cell",
    "domain",
    "further",
    "kernel_for",
    "make_plan",
    "outside_row",
    "parameter_values",
    "scheme_of",
    "sobol_base",
    "survey",
]
