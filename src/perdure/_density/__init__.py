"""The long-run density as a distribution: look up, draw, average, marginals, quantiles, grid."""

from perdure._density.density import Density

__all__ = ["Density"]
