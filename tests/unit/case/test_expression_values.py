"""Random expressions: the printed source, run by Python, and `evaluate` agree with numpy itself."""

from __future__ import annotations

import ast
import operator
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from perdure._case.expressions import evaluate, parse_condition, parse_value

NAMES = ("x", "y", "z")
Values = Mapping[str, NDArray[Any]]

# The functions that a kernel offers, in numpy. Written out here again, apart from those of `evaluate`.
KERNEL: dict[str, Callable[..., Any]] = {
    "f_abs": np.abs, "f_acos": np.arccos, "f_asin": np.arcsin, "f_atan": np.arctan, "f_atan2": np.arctan2,
    "f_cos": np.cos, "f_cosh": np.cosh, "f_exp": np.exp, "f_floor": np.floor, "f_log": np.log,
    "f_max2": np.maximum, "f_min2": np.minimum, "f_mod": np.mod, "f_not": np.logical_not, "f_pow": np.power,
    "f_sign": np.sign, "f_sin": np.sin, "f_sinh": np.sinh, "f_sqrt": np.sqrt, "f_tan": np.tan,
    "f_tanh": np.tanh,
}  # fmt: skip


@dataclass(frozen=True)
class Sample:
    """Text of an expression, fully bracketed, and the same computed by numpy."""

    text: str
    compute: Callable[[Values], Any]


def _name(name: str) -> Sample:
    return Sample(name, lambda v: v[name])


PI = Sample("pi", lambda v: np.array([np.pi]))


def _literal(value: float) -> Sample:
    return Sample(repr(value), lambda v: np.array([float(value)]))


def _call(name: str, *arguments: Sample) -> Sample:
    text = f"{name}({', '.join(argument.text for argument in arguments)})"
    function = KERNEL.get(f"f_{name}") or KERNEL[f"f_{name}2"]
    if len(arguments) < 3:
        return Sample(text, lambda v: function(*(argument.compute(v) for argument in arguments)))
    a, b, c = arguments
    return Sample(text, lambda v: function(function(a.compute(v), b.compute(v)), c.compute(v)))


def _binary(symbol: str, left: Sample, right: Sample) -> Sample:
    functions: dict[str, Callable[[Any, Any], Any]] = {
        "+": operator.add,
        "-": operator.sub,
        "*": operator.mul,
        "/": np.divide,
        "%": np.mod,
    }
    function = functions[symbol]
    return Sample(f"(({left.text}) {symbol} ({right.text}))", lambda v: function(left.compute(v), right.compute(v)))


def _power(base: Sample, exponent: float) -> Sample:
    if exponent == 0.5:
        return Sample(f"(({base.text})**0.5)", lambda v: np.sqrt(base.compute(v)))
    return Sample(f"(({base.text})**({exponent!r}))", lambda v: np.power(base.compute(v), float(exponent)))


def _power_of_name(base: Sample, exponent: str) -> Sample:
    return Sample(f"(({base.text})**{exponent})", lambda v: np.power(base.compute(v), v[exponent]))


def _minus(operand: Sample) -> Sample:
    return Sample(f"(-({operand.text}))", lambda v: -operand.compute(v))


def _choice(condition: Sample, body: Sample, orelse: Sample) -> Sample:
    return Sample(
        f"(({body.text}) if ({condition.text}) else ({orelse.text}))",
        lambda v: np.where(condition.compute(v), body.compute(v), orelse.compute(v)),
    )


_COMPARE = {
    "<": np.less, "<=": np.less_equal, ">": np.greater, ">=": np.greater_equal,
    "==": np.equal, "!=": np.not_equal,
}  # fmt: skip


def _chain(first: Sample, links: list[tuple[str, Sample]]) -> Sample:
    text = f"(({first.text}) " + " ".join(f"{symbol} ({side.text})" for symbol, side in links) + ")"

    def compute(v: Values) -> Any:
        sides = [first.compute(v), *(side.compute(v) for _, side in links)]
        result = np.array([True])
        for left, (symbol, _), right in zip(sides[:-1], links, sides[1:], strict=True):
            result = result & _COMPARE[symbol](left, right)
        return result

    return Sample(text, compute)


def _joined(word: str, parts: list[Sample]) -> Sample:
    function = np.logical_and if word == "and" else np.logical_or

    def compute(v: Values) -> Any:
        result = parts[0].compute(v)
        for part in parts[1:]:
            result = function(result, part.compute(v))
        return result

    return Sample("(" + f" {word} ".join(f"({part.text})" for part in parts) + ")", compute)


def _not(condition: Sample) -> Sample:
    return Sample(f"(not ({condition.text}))", lambda v: np.logical_not(condition.compute(v)))


ONE_ARGUMENT = [name[2:] for name in KERNEL if name not in {"f_atan2", "f_max2", "f_min2", "f_mod", "f_not", "f_pow"}]
KINDS = ["name", "literal", "binary", "call", "power", "minus", "choice"]
LITERALS = st.integers(0, 10**6) | st.floats(0, 1e9, allow_nan=False)
EXPONENTS = st.integers(-64, 64) | st.sampled_from([0.5, 1.5, -2.25, 3.0])


@st.composite
def numbers(draw: st.DrawFn, depth: int = 3) -> Sample:
    """Random arithmetic of at most `depth` levels above names and literals."""
    kind = draw(st.sampled_from(KINDS)) if depth else "name"

    def inner() -> Sample:
        return draw(numbers(depth - 1))

    match kind:
        case "name":
            return draw(st.sampled_from([*map(_name, NAMES), PI]))
        case "literal":
            return _literal(draw(LITERALS))
        case "binary":
            return _binary(draw(st.sampled_from("+-*/%")), inner(), inner())
        case "minus":
            return _minus(inner())
        case "choice":
            return _choice(draw(conditions(depth - 1)), inner(), inner())
        case "power" if draw(st.booleans()):
            return _power_of_name(inner(), draw(st.sampled_from(NAMES)))
        case "power":
            return _power(inner(), draw(EXPONENTS))
    name = draw(st.sampled_from([*ONE_ARGUMENT, "atan2", "min", "max"]))
    n_argument = 1 if name in ONE_ARGUMENT else 2 if name == "atan2" else draw(st.integers(2, 3))
    return _call(name, *(inner() for _ in range(n_argument)))


@st.composite
def conditions(draw: st.DrawFn, depth: int = 3) -> Sample:
    """Random conditions of at most `depth` levels."""
    kind = draw(st.sampled_from(["chain", "not", "and", "or"])) if depth else "chain"
    if kind == "not":
        return _not(draw(conditions(depth - 1)))
    if kind != "chain":
        return _joined(kind, draw(st.lists(conditions(depth - 1), min_size=2, max_size=3)))
    side = numbers(max(depth - 1, 0))
    link = st.tuples(st.sampled_from(sorted(_COMPARE)), side)
    return _chain(draw(side), draw(st.lists(link, min_size=1, max_size=3)))


points = st.fixed_dictionaries({name: st.floats(-1e3, 1e3) | st.sampled_from([0.0, 1.0, -1.0, 0.5]) for name in NAMES})


class _AsInKernel(ast.NodeTransformer):
    """Number literals as arrays, powers as a function: there 1/0 and (9**64)**64 are inf, not errors."""

    def visit_Constant(self, node: ast.Constant) -> ast.AST:
        return ast.Call(ast.Name("number", ast.Load()), [node], [])

    def visit_BinOp(self, node: ast.BinOp) -> ast.AST:
        if isinstance(node.op, ast.Pow):
            exponent = ast.Constant(ast.literal_eval(node.right))
            return ast.Call(ast.Name("power", ast.Load()), [self.visit(node.left), exponent], [])
        return self.generic_visit(node)


def run(source: str, values: Values) -> Any:
    """The printed source itself, run by Python with a few functions and no builtins."""
    tree = ast.fix_missing_locations(_AsInKernel().visit(ast.parse(source, mode="eval")))
    offered: dict[str, Any] = {
        **KERNEL,
        **{f"v_{name}": value for name, value in values.items()},
        "number": lambda value: np.array([float(value)]),
        "power": lambda base, exponent: np.power(base, float(exponent)),
        "__builtins__": {},
    }
    return eval(compile(tree, "source", "eval"), offered)


def _agree(parse: Callable[..., Any], sample: Sample, point: dict[str, float], spare: bool) -> None:
    text = ast.unparse(ast.parse(sample.text, mode="eval")) if spare else sample.text
    expression = parse(text, NAMES, "here")
    values = {name: np.array([value]) for name, value in point.items()}
    with np.errstate(all="ignore"):
        expected = np.asarray(sample.compute(values))
        from_source = np.asarray(run(expression.source, values))
    np.testing.assert_array_equal(np.ravel(from_source), np.ravel(expected))
    np.testing.assert_array_equal(np.ravel(evaluate(expression, values)), np.ravel(expected))


@given(sample=numbers(), point=points, spare=st.booleans())
@settings(max_examples=250)
def test_values_agree_with_numpy(sample: Sample, point: dict[str, float], spare: bool) -> None:
    """Texts come fully bracketed or (spare) with the fewest brackets that Python needs."""
    _agree(parse_value, sample, point, spare)


@given(sample=conditions(), point=points, spare=st.booleans())
@settings(max_examples=120)
def test_conditions_agree_with_numpy(sample: Sample, point: dict[str, float], spare: bool) -> None:
    _agree(parse_condition, sample, point, spare)


def test_disagreement_is_noticed() -> None:
    """Negative control: a sample whose text and computation differ."""
    wrong = Sample("x - (y - z)", lambda v: v["x"] - v["y"] - v["z"])
    with pytest.raises(AssertionError):
        _agree(parse_value, wrong, {"x": 1.0, "y": 2.0, "z": 4.0}, False)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("x - y - z", 1.0 - 2.0 - 4.0),
        ("x - (y - z)", 1.0 - (2.0 - 4.0)),
        ("z/y/z", 4.0 / 2.0 / 4.0),
        ("-x**2", -1.0),
        ("y**3 + z**-1", 8.25),
        ("2**z % 5", 1.0),
        ("max(x, y, z, 3, -1) - min(z, y, x, 7)", 3.0),
        ("10 if x > 1 else 20 if y > 1 else 30", 20.0),
        ("floor(-2.5) + sign(-3) + abs(-4)", 0.0),
    ],
)
def test_source_as_it_stands_gives_the_value(text: str, value: float) -> None:
    """Run by Python without any change to the source."""
    expression = parse_value(text, NAMES, "here")
    names = {"x": 1.0, "y": 2.0, "z": 4.0}
    offered = {**KERNEL, **{f"v_{name}": number for name, number in names.items()}, "__builtins__": {}}
    assert float(eval(expression.source, offered)) == value
    assert float(evaluate(expression, names)) == value


def test_many_points_at_once_agree_with_one_at_a_time() -> None:
    rng = np.random.default_rng(3)
    expression = parse_value("x*sin(y) + (z if x > y else -z)**2 % 3 - min(x, y, z)", NAMES, "here")
    values = {name: rng.uniform(-2.0, 2.0, 50) for name in NAMES}
    together = evaluate(expression, values)
    alone = [float(evaluate(expression, {name: v[k] for name, v in values.items()})) for k in range(50)]
    np.testing.assert_allclose(together, alone, rtol=1e-12)
