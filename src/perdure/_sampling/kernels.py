"""From a case to its compiled burst kernel."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from perdure._kernels.cache import burst_kernel, trajectory_kernel
from perdure._kernels.generate import KernelSpec
from perdure._kernels.trajectory import OWN_SCHEMES, steps_together
from perdure._records import CaseRecord, Floats
from perdure.errors import CaseError

__all__ = ["TrajectoryKernel", "kernel_for", "parameter_values", "scheme_of", "trajectories_for"]


def scheme_of(case: CaseRecord) -> str:
    """Time-stepping scheme: as given, else the usual one of the kind."""
    usual = {"map": "map", "noisy-map": "map", "flow": "rk4", "noisy-flow": "weak2"}
    return case.bursts.scheme or usual[case.system.kind]


def parameter_values(case: CaseRecord, centres: Floats | None = None) -> Floats:
    """Parameters, then the centres of the observables (0 if None), in the order of the kernel; at least one number."""
    values = np.array([p.value for p in case.system.parameters.values()], dtype=float)
    centres = np.zeros(len(case.observables)) if centres is None else centres
    joined = np.concatenate([values, centres])
    return joined if len(joined) else np.zeros(1)


def kernel_spec(case: CaseRecord, *, halved: bool = False) -> KernelSpec:
    system, lower, upper = case.system, case.cells.lower, case.cells.upper
    return KernelSpec(
        scheme=scheme_of(case),
        state=system.state,
        parameters=tuple(system.parameters),
        drift=tuple(e.source for e in system.equations),
        noise=tuple(tuple((e.source, e.names) for e in row) for row in system.noise),
        draws=system.draws,
        events=tuple(e.condition.source for e in case.events),
        observables=tuple(o.expression.source for o in case.observables),
        periodic=tuple((s, lower[s], upper[s] - lower[s]) for s in case.cells.periodic),
        function=system.function,
        noise_function=system.noise_function,
        halved=halved,
    )


def kernel_for(case: CaseRecord, halved: bool = False) -> tuple[Callable[..., int], int]:
    """The compiled kernel, and the number of its sums; if `halved`, of steps of half the length on the same noise.

    Raises
    ------
    CaseError
        A Python function that numba cannot compile.
    ValueError
        A map is to be halved.
    """
    return compiled(case, kernel_spec(case, halved=halved), burst_kernel)


@dataclass(frozen=True)
class TrajectoryKernel:
    """A compiled trajectory kernel, the number of its sums, its scheme, and what its steps are multiples of."""

    follow: Callable[..., int]
    n_sum: int
    scheme: str
    together: int


def trajectories_for(case: CaseRecord, *, bare: bool = False) -> TrajectoryKernel:
    """The compiled trajectory kernel; if `bare`, without events and observables.

    Raises
    ------
    CaseError
        A Python function that numba cannot compile.
    """
    spec = kernel_spec(case)
    spec = replace(spec, scheme=OWN_SCHEMES.get(spec.scheme, spec.scheme))
    if bare:
        spec = replace(spec, events=(), observables=())
    return TrajectoryKernel(*compiled(case, spec, trajectory_kernel), spec.scheme, steps_together(spec))


def compiled(
    case: CaseRecord, spec: KernelSpec, compiler: Callable[[KernelSpec], Callable[..., int]]
) -> tuple[Callable[..., int], int]:
    try:
        return compiler(spec), spec.n_sum
    except TypeError as error:
        raise CaseError(
            f"{case.source_name}, system function: numba could not compile it; allowed: a function of floats that "
            f"returns a float or a tuple of floats, in numba's part of Python; numba says: {first_lines(str(error))}"
        ) from error


def first_lines(text: str) -> str:
    lines = [line.strip() for line in text.splitlines() if line.strip()]
    return " / ".join(lines[:6])
