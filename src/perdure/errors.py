"""Every exception perdure raises on purpose.

Each message names the place, what was found, what is allowed and what to do. An error that comes after
work was done carries that work, so that nothing computed is lost.
"""

from __future__ import annotations

__all__ = [
    "CaseError",
    "DensityFileError",
    "EstimateError",
    "NoAttractorError",
    "NotConvergedError",
    "OutputError",
    "PerdureError",
    "ResourceError",
    "UsageError",
]


class PerdureError(Exception):
    """Base of all errors raised by perdure on purpose."""

    exit_status = 2


class CaseError(PerdureError, ValueError):
    """A case (file or Python) that cannot be run as written.

    Attributes
    ----------
    problems : tuple of str
        One line per mistake, each with place, what was found, what is allowed and what to do.
    """

    def __init__(self, problems: str | list[str] | tuple[str, ...]) -> None:
        self.problems = (problems,) if isinstance(problems, str) else tuple(problems)
        super().__init__("\n".join(self.problems))


class UsageError(PerdureError, ValueError):
    """An argument of a public function or of the command line that is not allowed."""


class DensityFileError(PerdureError, OSError):
    """A density file that is missing, damaged, foreign or of a newer format."""


class OutputError(PerdureError, OSError):
    """The result cannot be written where it was asked for; `.estimate` holds it when there is one."""

    def __init__(self, message: str, estimate: object | None = None) -> None:
        self.estimate = estimate
        super().__init__(message)


class EstimateError(PerdureError, RuntimeError):
    """The case is well formed, but its numbers cannot be had; `.found` holds what was learnt."""

    exit_status = 1

    def __init__(self, message: str, found: object | None = None) -> None:
        self.found = found
        super().__init__(message)


class NoAttractorError(EstimateError):
    """Every pilot trajectory left all bounds or became non-finite."""

    exit_status = 2


class NotConvergedError(EstimateError):
    """An iterative solve stopped above its tolerance; the best estimate so far is in `.found`."""


class ResourceError(PerdureError, RuntimeError):
    """Memory, time or a worker was lacking; everything finished so far is kept."""

    exit_status = 3
