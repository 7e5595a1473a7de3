"""What expressions may contain, what kernel source they become, and how mistakes are worded."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from perdure._case.expressions import evaluate, parse_condition, parse_value
from perdure._case.grammar import FUNCTIONS
from perdure.errors import CaseError

NAMES = ("x", "y", "z", "sigma")
PLACE = "loop.toml, line 9, [system.equations] x"


@pytest.mark.parametrize(
    ("text", "source"),
    [
        ("x", "v_x"),
        ("3", "3.0"),
        ("1_000", "1000.0"),
        ("2.5e-3", "0.0025"),
        ("pi", repr(math.pi)),
        ("-x", "(-v_x)"),
        ("+x", "v_x"),
        ("sigma*(y - x)", "(v_sigma * (v_y - v_x))"),
        ("x - y + z", "(v_x - v_y + v_z)"),
        ("x - (y + z)", "(v_x - (v_y + v_z))"),
        ("x/y*z", "(v_x / v_y * v_z)"),
        ("x/(y*z)", "(v_x / (v_y * v_z))"),
        ("x % 3", "f_mod(v_x, 3.0)"),
        ("x*y % 3", "f_mod((v_x * v_y), 3.0)"),
        ("x**2", "((v_x)**2)"),
        ("x**2.0", "((v_x)**2)"),
        ("x**-2", "((v_x)**(-2))"),
        ("-x**2", "(-((v_x)**2))"),
        ("x**64", "((v_x)**64)"),
        ("x**0.5", "f_sqrt(v_x)"),
        ("x**(1/2)", "f_sqrt(v_x)"),
        ("x**1.5", "f_pow(v_x, 1.5)"),
        ("x**(1/4)", "f_pow(v_x, 0.25)"),
        ("x**y", "f_pow(v_x, v_y)"),
        ("2**x", "f_pow(2.0, v_x)"),
        ("10**20*x", "(((10.0)**20) * v_x)"),
        ("atan2(y, x)", "f_atan2(v_y, v_x)"),
        ("min(x, y)", "f_min2(v_x, v_y)"),
        ("max(x, y, z)", "f_max2(f_max2(v_x, v_y), v_z)"),
        ("1 if x > y else z", "(1.0 if ((v_x) > (v_y)) else v_z)"),
    ],
)
def test_source_of_a_value(text: str, source: str) -> None:
    assert parse_value(text, NAMES, PLACE).source == source


@pytest.mark.parametrize(
    ("text", "source"),
    [
        ("x < y", "((v_x) < (v_y))"),
        ("x != 1", "((v_x) != (1.0))"),
        ("0 < x <= y", "(((0.0) < (v_x)) & ((v_x) <= (v_y)))"),
        ("x > 1 and y < 2", "(((v_x) > (1.0)) & ((v_y) < (2.0)))"),
        ("x > 1 or y < 2 or z == 3", "(((v_x) > (1.0)) | ((v_y) < (2.0)) | ((v_z) == (3.0)))"),
        ("not x > 1", "f_not(((v_x) > (1.0)))"),
        ("x > 1 or y > 1 and z > 1", "(((v_x) > (1.0)) | (((v_y) > (1.0)) & ((v_z) > (1.0))))"),
    ],
)
def test_source_of_a_condition(text: str, source: str) -> None:
    assert parse_condition(text, NAMES, PLACE).source == source


@pytest.mark.parametrize("function", sorted(FUNCTIONS))
def test_every_function_is_printed_and_evaluated(function: str) -> None:
    reference: dict[str, Any] = {
        "acos": np.arccos, "asin": np.arcsin, "atan": np.arctan, "atan2": np.arctan2,
        "max": np.maximum, "min": np.minimum,
    }  # fmt: skip
    n_argument = FUNCTIONS[function]
    expression = parse_value(f"{function}({', '.join('xy'[:n_argument])})", NAMES, PLACE)
    assert expression.source.startswith(f"f_{function}")
    x, y = np.array([0.3, 0.9]), np.array([-0.4, 2.0])
    compute = reference[function] if function in reference else getattr(np, function)
    expected = compute(*(x, y)[:n_argument])
    np.testing.assert_array_equal(evaluate(expression, {"x": x, "y": y}), expected)


def test_names_and_text_are_kept() -> None:
    expression = parse_value("  sigma*(y\n - x) ", NAMES, PLACE)
    assert expression.names == {"sigma", "x", "y"}
    assert expression.text == "  sigma*(y\n - x) "


def test_names_of_the_exponent_and_of_what_stands_before_it_are_kept() -> None:
    assert parse_value("z*x**sin(y)", NAMES, PLACE).names == {"x", "y", "z"}


def test_a_name_may_be_called_e() -> None:
    assert parse_value("e*x", ("x", "e"), PLACE).source == "(v_e * v_x)"


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("x" + "+x" * 249, 125.0),
        ("x" + "-x+x" * 124 + "-x", 0.0),
        ("x" + "/x*x" * 124, 0.5),
    ],
)
def test_a_long_chain_counts_as_one_level(text: str, value: float) -> None:
    expression = parse_value(text, NAMES, PLACE)
    assert float(evaluate(expression, {"x": 0.5})) == value
    compile(expression.source, "source", "eval")


@pytest.mark.parametrize(
    "text",
    [
        "sin(" * 59 + "x" + ")" * 59,
        "-" * 59 + "x",
        "(1 if 0 < " * 29 + "x" + " else 2)" * 29,
        f"max({', '.join(['x'] * 490)})",
        "(" * 150 + "x" + ")" * 150,
        "x" + "**1.5" * 10,
    ],
)
def test_source_of_deep_and_wide_expressions_can_be_compiled(text: str) -> None:
    """Python refuses more than 200 open brackets."""
    expression = parse_value(text, NAMES, PLACE)
    compile(expression.source, "source", "eval")
    assert np.isfinite(evaluate(expression, {"x": 0.5}))


def test_depth_limit_is_exact() -> None:
    assert parse_value("sin(" * 59 + "x" + ")" * 59, NAMES, PLACE).names == {"x"}
    with pytest.raises(CaseError, match="nested deeper than 60 levels; allowed: at most 60"):
        parse_value("sin(" * 60 + "x" + ")" * 60, NAMES, PLACE)


def test_floored_modulo_has_the_sign_of_the_divisor() -> None:
    expression = parse_value("x % y", NAMES, PLACE)
    x, y = np.array([7.0, -7.0, 7.0, -7.0]), np.array([3.0, 3.0, -3.0, -3.0])
    values = evaluate(expression, {"x": x, "y": y})
    np.testing.assert_array_equal(values, [1.0, 2.0, -2.0, -1.0])


def test_evaluation_is_vectorised_and_broadcasts() -> None:
    expression = parse_condition("0 <= x < 1 and not y == 2 or x > 5", NAMES, PLACE)
    x, y = np.array([[-1.0], [0.5], [6.0]]), np.array([1.0, 2.0])
    expected = [[False, False], [True, False], [True, True]]
    np.testing.assert_array_equal(evaluate(expression, {"x": x, "y": y}), expected)


def test_evaluation_gives_inf_and_nan_without_a_warning() -> None:
    assert np.isinf(evaluate(parse_value("1/x", NAMES, PLACE), {"x": 0.0}))
    assert np.isnan(evaluate(parse_value("log(x)", NAMES, PLACE), {"x": -1.0}))


def test_a_missing_value_is_named() -> None:
    with pytest.raises(KeyError, match="x"):
        evaluate(parse_value("x", NAMES, PLACE), {"y": 1.0})


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("sgma*x", ["unknown name 'sgma'", "allowed: sigma, x, y, z, pi", "did you mean 'sigma'?"]),
        ("Sigma*x", ["unknown name 'Sigma'", "did you mean 'sigma'?"]),
        ("e**x", ["unknown name 'e'", "write exp(1)"]),
        ("x + t", ["unknown name 't'", "do not depend on time"]),
        ("qqqq", ["unknown name 'qqqq'", "declare it in [system.parameters]"]),
        ("sine(x)", ["unknown function 'sine'", "did you mean 'sin'?"]),
        ("ln(x)", ["unknown function 'ln'", "write log(x)"]),
        ("x(y - z)", ["'x' is a number", "write x*(...)"]),
        ("sin", ["function 'sin' without arguments"]),
        ("sin()", ["with 0 arguments", "exactly 1 for sin"]),
        ("sin(x, y)", ["with 2 arguments", "exactly 1 for sin"]),
        ("atan2(x)", ["with 1 argument;", "exactly 2 for atan2"]),
        ("min(x)", ["with 1 argument;", "2 or more for min"]),
        ("x ^ 2", ["'x ^ 2'", "a power is written **"]),
        ("x // 2", ["'x // 2'", "write floor(a/b)"]),
        ("2x", ["'2x'", "write a product with *"]),
        ("x = 3", ["'x = 3'", "write == for 'is equal'"]),
        ("x +", ["'x +'", "not an expression"]),
        ("(x", ["not an expression"]),
        ("x > y", ["condition 'x > y' where a number is needed", "(1 if x > y else 0)"]),
        ("1 + (x > y)", ["condition 'x > y' where a number is needed"]),
        ("not x > y", ["condition 'not x > y' where a number is needed"]),
        ("1 if x else 2", ["number 'x' where a condition is needed", "x > 0"]),
        ("x**65", ["exponent '65'", "from -64 to 64"]),
        ("x**-65", ["exponent '-65'"]),
        ("x**(8*9)", ["exponent '8*9'"]),
        ("", ["an empty text"]),
        ("   ", ["an empty text"]),
        ("x # comment", ["the character '#'", "no comments"]),
        ("x − y", ["U+2212", "position 3", "ASCII"]),
        ("x" + " + x" * 1100, ["4401 characters", "at most 4096"]),
        ("+".join(["x"] * 251), ["501 parts", "at most 500"]),
        ("1e999*x", ["'1e999'", "too large for a 64-bit number"]),
    ],
)
def test_message_of_a_refused_value(text: str, parts: list[str]) -> None:
    with pytest.raises(CaseError) as caught:
        parse_value(text, NAMES, PLACE)
    for problem in caught.value.problems:
        assert problem.startswith(f"{PLACE}: found ")
        assert "; allowed: " in problem
    for part in parts:
        assert part in str(caught.value)


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        ("x", ["number 'x' where a condition is needed"]),
        ("x and y > 1", ["number 'x' where a condition is needed"]),
        ("not x", ["number 'x' where a condition is needed"]),
        ("(x > 1) > 0", ["condition 'x > 1' where a number is needed"]),
        ("x > 1 && y > 1", ["write 'and'"]),
        ("x > 1 || y > 1", ["write 'or'"]),
        ("!(x > 1)", ["write 'not'"]),
        ("(x > 1) & (y > 1)", ["write 'and' between conditions"]),
        ("(x > 1) | (y > 1)", ["write 'or' between conditions"]),
        ("~(x > 1)", ["write 'not' before a condition"]),
        ("x in y", ["use < <= > >= == !="]),
        ("x is y", ["use < <= > >= == !="]),
        ("True", ["'True'", "not a number"]),
    ],
)
def test_message_of_a_refused_condition(text: str, parts: list[str]) -> None:
    with pytest.raises(CaseError) as caught:
        parse_condition(text, NAMES, PLACE)
    for part in [f"{PLACE}: found ", "; allowed: ", *parts]:
        assert part in str(caught.value)


def test_every_mistake_of_an_expression_is_named() -> None:
    with pytest.raises(CaseError) as caught:
        parse_value("sgma*x + rho*tan2(y) + sgma", NAMES, PLACE)
    assert [problem.split("'")[1] for problem in caught.value.problems] == ["sgma", "rho", "tan2"]
