"""Long-run numbers of a regime, each with its sampling error, and the outcome in words."""

from perdure._statistics.marginals import marginal_numbers
from perdure._statistics.numbers import regime_numbers
from perdure._statistics.outcome import Findings, no_share, outcome_of, outside_quantity, regime_weights

__all__ = [
    "Findings",
    "marginal_numbers",
    "no_share",
    "outcome_of",
    "outside_quantity",
    "regime_numbers",
    "regime_weights",
]
