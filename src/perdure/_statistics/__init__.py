"""Long-run numbers of a regime, each with its sampling error, and the outcome in words."""

from perdure._statistics.allocation import allocation, evenness
from perdure._statistics.intervals import Shift, interval, parts_needed, quantile
from perdure._statistics.marginals import HalfStep, marginal_numbers
from perdure._statistics.numbers import errors_of, regime_numbers, scaled
from perdure._statistics.outcome import Findings, no_share, outcome_of, outside_quantity, regime_weights

__all__ = [
    "Findings",
    "HalfStep",
    "Shift",
    "allocation",
    "errors_of",
    "evenness",
    "interval",
    "marginal_numbers",
    "no_share",
    "outcome_of",
    "outside_quantity",
    "parts_needed",
    "quantile",
    "regime_numbers",
    "regime_weights",
    "scaled",
]
