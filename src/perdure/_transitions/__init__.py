"""From rows of counts to the transition matrix."""

from perdure._transitions.assemble import Collected, RowStore, with_outside, without
from perdure._transitions.lump import lumped
from perdure._transitions.matrix import TransitionMatrix, scattered_slots
from perdure._transitions.pooling import Pool, PooledRows, row_sums
from perdure._transitions.reseeded import Combined, combined, positions

__all__ = [
    "Collected",
    "Combined",
    "Pool",
    "PooledRows",
    "RowStore",
    "TransitionMatrix",
    "combined",
    "lumped",
    "positions",
    "row_sums",
    "scattered_slots",
    "with_outside",
    "without",
]
