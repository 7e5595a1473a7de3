"""From rows of counts to the transition matrix."""

from perdure._transitions.assemble import Collected, RowStore, with_outside, without
from perdure._transitions.lump import lumped
from perdure._transitions.matrix import TransitionMatrix, scattered_slots

__all__ = ["Collected", "RowStore", "TransitionMatrix", "lumped", "scattered_slots", "with_outside", "without"]
