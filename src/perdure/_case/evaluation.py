"""Values of checked expressions in numpy, by walking the source that `syntax` printed."""

from __future__ import annotations

import ast
import functools
import operator
from collections.abc import Callable, Iterator, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from perdure._records import Expression

_FUNCTIONS: dict[str, Callable[..., Any]] = {
    "f_abs": np.abs,
    "f_acos": np.arccos,
    "f_asin": np.arcsin,
    "f_atan": np.arctan,
    "f_atan2": np.arctan2,
    "f_cos": np.cos,
    "f_cosh": np.cosh,
    "f_exp": np.exp,
    "f_floor": np.floor,
    "f_log": np.log,
    "f_max2": np.maximum,
    "f_min2": np.minimum,
    "f_mod": np.mod,
    "f_not": np.logical_not,
    "f_pow": np.power,
    "f_sign": np.sign,
    "f_sin": np.sin,
    "f_sinh": np.sinh,
    "f_sqrt": np.sqrt,
    "f_tan": np.tan,
    "f_tanh": np.tanh,
}
_OPERATORS: dict[type[ast.AST], Callable[[Any, Any], Any]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: np.divide,
    ast.BitAnd: np.logical_and,
    ast.BitOr: np.logical_or,
    ast.Lt: np.less,
    ast.LtE: np.less_equal,
    ast.Gt: np.greater,
    ast.GtE: np.greater_equal,
    ast.Eq: np.equal,
    ast.NotEq: np.not_equal,
}


@functools.lru_cache(maxsize=512)
def source_tree(source: str) -> ast.expr:
    """Syntax tree of a source printed by perdure. Never hand user text to this function."""
    return ast.parse(source, mode="eval").body


def evaluate(expression: Expression, values: Mapping[str, float | NDArray[np.float64]]) -> NDArray[Any]:
    """Value of an expression in numpy, vectorised; both branches of a choice are evaluated.

    Parameters
    ----------
    expression : Expression
    values : mapping of str to float or ndarray
        A value for every name of `expression.names`; shapes must broadcast.

    Returns
    -------
    ndarray
        Float64 for a value, bool for a condition; shape () if no array was given. Division by zero and the
        like give inf or nan without a warning.

    Raises
    ------
    KeyError
        A name of the expression has no value.
    """
    return evaluate_tree(source_tree(expression.source), values)


def evaluate_tree(node: ast.expr, values: Mapping[str, float | NDArray[np.float64]]) -> NDArray[Any]:
    """As `evaluate`, for a part of a tree made by `source_tree`."""
    with np.errstate(all="ignore"):
        return np.asarray(_value(node, values))


def _value(node: ast.expr, values: Mapping[str, Any]) -> Any:
    match node:
        case ast.Constant(value=number):
            return np.float64(number)  # type: ignore[arg-type]
        case ast.Name(id=name):
            return np.asarray(values[name[2:]], dtype=np.float64)
        case ast.UnaryOp(operand=operand):
            return -_value(operand, values)
        case ast.BinOp(left=base, op=ast.Pow(), right=exponent):
            return np.power(_value(base, values), _value(exponent, values))
        case ast.BinOp(left=left, op=op, right=right) | ast.Compare(left=left, ops=[op], comparators=[right]):
            return _OPERATORS[type(op)](_value(left, values), _value(right, values))
        case ast.IfExp(test=test, body=body, orelse=orelse):
            return np.where(_value(test, values), _value(body, values), _value(orelse, values))
        case ast.Call(func=ast.Name(id=name), args=arguments):
            return _FUNCTIONS[name](*(_value(argument, values) for argument in arguments))
    raise AssertionError(f"not printed by perdure: {ast.unparse(node)}")


def numeric_parts(source: str) -> list[ast.expr]:
    """The parts that must be finite for an expression to mean anything.

    Returns
    -------
    list of ast.expr
        The whole tree of a value; of a condition, both sides of each of its comparisons.
    """
    return list(_numeric_parts(source_tree(source)))


def _numeric_parts(node: ast.expr) -> Iterator[ast.expr]:
    match node:
        case ast.Compare(left=left, comparators=[right]):
            yield from (left, right)
        case ast.BinOp(left=left, op=ast.BitAnd() | ast.BitOr(), right=right):
            yield from _numeric_parts(left)
            yield from _numeric_parts(right)
        case ast.Call(func=ast.Name(id="f_not"), args=[argument]):
            yield from _numeric_parts(argument)
        case _:
            yield node


def tree_names(node: ast.expr) -> frozenset[str]:
    """Names (without prefix) of state components, parameters and draws in a part of a source tree."""
    return frozenset(part.id[2:] for part in ast.walk(node) if isinstance(part, ast.Name) and part.id.startswith("v_"))
