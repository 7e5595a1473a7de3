"""Refuses expressions that are not finite at any trial state, such as those that divide by zero "
"everywhere."""

from __future__ import annotations

import ast
import math
import re
from collections.abc import Iterator, Mapping

import numpy as np
from numpy.typing import NDArray

from perdure._case.evaluation import evaluate_tree, numeric_parts, tree_names
from perdure._case.positions import Path
from perdure._case.problems import Problems
from perdure._records import CellOptions, Event, Expression, Observable, System

N_TRIAL = 512
# From far below to far above the scales that models are usually written in.
SMALLEST, LARGEST = 1e-3, 1e4

_PREFIX = re.compile(r"\b[vf]_(?=[A-Za-z])")


def probe(
    problems: Problems,
    system: System,
    events: tuple[Event, ...],
    observables: tuple[Observable, ...],
    cells: CellOptions,
) -> None:
    """Evaluate every expression at 512 trial states; add those that are finite at none.

    The states are random with a fixed seed, of magnitudes from 1e-3 to 1e4 and both signs; half of
    them lie in the domain where [cells] gives one.
    """
    values = trial_values(system, cells)
    constants = {name: parameter.value for name, parameter in system.parameters.items()}
    for path, expression in _expressions(system, events, observables):
        for part in numeric_parts(expression.source):
            if not np.isfinite(evaluate_tree(part, values)).any():
                problems.add(path, f"found {_cause(part, constants)}")
                break


def trial_values(system: System, cells: CellOptions) -> dict[str, float | NDArray[np.float64]]:
    """Values of parameters, and N_TRIAL trial values of each state component and draw. Units of the state."""
    rng = np.random.default_rng(0)
    values: dict[str, float | NDArray[np.float64]] = {
        name: parameter.value for name, parameter in system.parameters.items()
    }
    half = N_TRIAL // 2
    # All components of a state share a magnitude.
    scale = 10.0 ** rng.uniform(math.log10(SMALLEST), math.log10(LARGEST), N_TRIAL)
    for name in system.state:
        trial = scale * rng.uniform(-1.0, 1.0, N_TRIAL)
        # Models of amounts are defined for positive states only.
        trial[::2] = np.abs(trial[::2])
        low, high = cells.lower.get(name), cells.upper.get(name)
        if low is not None and high is not None:
            trial[half:] = rng.uniform(low, high, half)
        elif low is not None:
            trial[half:] = low + np.abs(trial[half:])
        elif high is not None:
            trial[half:] = high - np.abs(trial[half:])
        values[name] = trial
    for name, law in system.draws:
        values[name] = rng.standard_normal(N_TRIAL) if law == "normal" else rng.random(N_TRIAL)
    return values


def _expressions(
    system: System, events: tuple[Event, ...], observables: tuple[Observable, ...]
) -> Iterator[tuple[Path, Expression]]:
    for name, equation in zip(system.state, system.equations, strict=False):
        yield ("system", "equations", name), equation
    for name, row in zip(system.state, system.noise, strict=False):
        for coefficient in row:
            yield ("system", "noise", name), coefficient
    for event in events:
        yield ("events", event.name), event.condition
        if event.until is not None:
            yield ("events", event.name, "until"), event.until
    for observable in observables:
        yield ("observables", observable.name), observable.expression


def _cause(part: ast.expr, constants: Mapping[str, float]) -> str:
    for node in ast.walk(part):
        divisor = _divisor(node)
        if divisor is not None and _is_constant(divisor, constants) and evaluate_tree(divisor, constants) == 0.0:
            return (
                f"division by zero: {_zero_text(divisor, constants)}; allowed: a divisor that is not 0 "
                "everywhere; change the parameter or the expression"
            )
    # The smallest constant part that is not finite comes last in a walk from the top.
    for node in reversed(list(ast.walk(part))):
        if (
            isinstance(node, ast.expr)
            and not isinstance(node, ast.Name)
            and _is_constant(node, constants)
            and not np.isfinite(evaluate_tree(node, constants))
        ):
            value = float(evaluate_tree(node, constants))
            return (
                f"{_readable(node)!r}, which is {value}{_with(node, constants)}; allowed: finite values; "
                "change the parameters or the expression"
            )
    return (
        f"{_readable(part)!r}, which is not finite at any of {N_TRIAL} trial states; allowed: expressions "
        "that are finite where the system lives; correct it, or give that region as [cells] lower and upper "
        "if it is narrow"
    )


def _divisor(node: ast.AST) -> ast.expr | None:
    match node:
        case ast.BinOp(op=ast.Div(), right=divisor):
            return divisor
        case ast.Call(func=ast.Name(id="f_mod"), args=[_, divisor]):
            return divisor
    return None


def _is_constant(node: ast.expr, constants: Mapping[str, float]) -> bool:
    return tree_names(node) <= constants.keys()


def _zero_text(divisor: ast.expr, constants: Mapping[str, float]) -> str:
    if isinstance(divisor, ast.Name):
        return f"parameter {_readable(divisor)} is 0"
    return f"the divisor {_readable(divisor)} is 0{_with(divisor, constants)}"


def _with(node: ast.expr, constants: Mapping[str, float]) -> str:
    names = sorted(tree_names(node))
    return " with " + ", ".join(f"{name} = {constants[name]!r}" for name in names) if names else ""


def _readable(node: ast.expr) -> str:
    text = _PREFIX.sub("", ast.unparse(node))
    return text if len(text) <= 80 else text[:77] + "..."
