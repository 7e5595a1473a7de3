"""Results in the types that JSON has: what ``perdure show --json`` prints. Missing and infinite numbers are null."""

from perdure._plain.crosscheck import plain_crosscheck
from perdure._plain.results import plain_quantity, plain_regime, plain_stage, plain_target

__all__ = ["plain_crosscheck", "plain_quantity", "plain_regime", "plain_stage", "plain_target"]
