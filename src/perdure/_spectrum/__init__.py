"""Closed classes, the stationary mass, adjoint solves, absorption."""

from perdure._spectrum.absorption import absorption, visits
from perdure._spectrum.classes import Classes, closed_classes, lasting, parts_without, period_of
from perdure._spectrum.memory import slowest
from perdure._spectrum.solves import ClassSolver

__all__ = [
    "ClassSolver",
    "Classes",
    "absorption",
    "closed_classes",
    "lasting",
    "parts_without",
    "period_of",
    "slowest",
    "visits",
]
