"""Discretisers: what cuts state space into cells, and the cover of cells in use."""

from perdure._partition.boxes import Boxes, hull, lattice, tightened
from perdure._partition.cover import Cover

__all__ = ["Boxes", "Cover", "hull", "lattice", "tightened"]
