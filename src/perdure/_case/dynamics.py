"""A system in plain numpy, for checks that must not rest on the compiled kernels."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np
from numpy.typing import NDArray

from perdure._case.evaluation import evaluate
from perdure._records import Floats, System

__all__ = ["right_hand_side"]


def right_hand_side(system: System) -> Callable[[Floats], Floats]:
    """dx/dt (or the next state of a map without draws) as a function from states (n_dim, n) to (n_dim, n)."""
    constants = {name: parameter.value for name, parameter in system.parameters.items()}
    if system.function is not None:
        function = getattr(system.function, "py_func", system.function)
        fixed = tuple(constants.values())

        def called(state: Floats) -> Floats:
            columns = [np.atleast_1d(function(*(float(v) for v in column), *fixed)) for column in state.T]
            return np.array(columns, dtype=float).T

        return called

    def evaluated(state: Floats) -> Floats:
        values: Mapping[str, float | NDArray[np.float64]] = {**constants, **dict(zip(system.state, state, strict=True))}
        return np.array([np.broadcast_to(evaluate(e, values), state.shape[1:]) for e in system.equations], dtype=float)

    return evaluated
