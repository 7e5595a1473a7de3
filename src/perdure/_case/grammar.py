"""What an expression of a case may contain: functions, constants, limits, and hints for what is foreign."""

from __future__ import annotations

import difflib
import keyword
import math
import re
from collections.abc import Iterable

# Number of arguments of each function; min and max take this many or more.
FUNCTIONS: dict[str, int] = {
    "abs": 1,
    "acos": 1,
    "asin": 1,
    "atan": 1,
    "atan2": 2,
    "cos": 1,
    "cosh": 1,
    "exp": 1,
    "floor": 1,
    "log": 1,
    "max": 2,
    "min": 2,
    "sign": 1,
    "sin": 1,
    "sinh": 1,
    "sqrt": 1,
    "tan": 1,
    "tanh": 1,
}
ANY_NUMBER_OF_ARGUMENTS = ("max", "min")
CONSTANTS: dict[str, float] = {"pi": math.pi}

# `t` is kept free for forced systems, so that cases written today keep their meaning.
RESERVED = frozenset({*FUNCTIONS, *CONSTANTS, "t"})

MAX_CHARACTERS = 4096
MAX_NODES = 500
MAX_DEPTH = 60
MAX_EXPONENT = 64
# Chains of comparisons repeat their middle; nested chains could otherwise double the source 30 times over.
MAX_SOURCE = 65536

INSTEAD: dict[str, str] = {
    "arccos": "acos(x)",
    "arcsin": "asin(x)",
    "arctan": "atan(x)",
    "arctan2": "atan2(y, x)",
    "cbrt": "sign(x)*abs(x)**(1/3)",
    "ceil": "-floor(-x)",
    "e": "exp(1)",
    "fabs": "abs(x)",
    "heaviside": "1 if x > 0 else 0",
    "int": "floor(x)",
    "ln": "log(x)",
    "log10": "log(x)/log(10)",
    "log2": "log(x)/log(2)",
    "mod": "x % y",
    "pow": "x**y",
    "round": "floor(x + 0.5)",
    "sgn": "sign(x)",
    "where": "a if condition else b",
}

OPERATORS_INSTEAD: dict[str, str] = {
    "BitXor": "a power is written **",
    "BitAnd": "write 'and' between conditions",
    "BitOr": "write 'or' between conditions",
    "FloorDiv": "write floor(a/b)",
    "Invert": "write 'not' before a condition",
}

# Syntax that is refused, in words.
WORDS: dict[str, str] = {
    "Attribute": "an attribute",
    "Await": "await",
    "Dict": "a dictionary",
    "DictComp": "a comprehension",
    "GeneratorExp": "a comprehension",
    "JoinedStr": "a text",
    "Lambda": "a lambda",
    "List": "a list",
    "ListComp": "a comprehension",
    "NamedExpr": "an assignment",
    "Set": "a set",
    "SetComp": "a comprehension",
    "Starred": "a starred argument",
    "Subscript": "a subscript",
    "Tuple": "a list of values",
    "Yield": "yield",
    "YieldFrom": "yield",
}

_NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]{0,63}")


def nearest(word: str, choices: Iterable[str]) -> str | None:
    """The choice most like `word`, or None if none is alike. Capitals do not count."""
    by_lower: dict[str, str] = {}
    for choice in choices:
        by_lower.setdefault(choice.lower(), choice)
    found = difflib.get_close_matches(word[:80].lower(), list(by_lower), n=1, cutoff=0.6)
    return by_lower[found[0]] if found else None


def name_finding(name: str) -> str | None:
    """What is wrong with the name of a state component, parameter or draw; None if nothing is.

    Returns
    -------
    str or None
        "found ...; allowed: ...; what to do".
    """
    if not _NAME.fullmatch(name):
        return (
            f"found the name {name[:80]!r}; allowed: a letter followed by letters, digits and underscores, "
            "ASCII only, at most 64 characters; rename it"
        )
    if keyword.iskeyword(name):
        return f"found the name {name!r}, which is a reserved word; allowed: any other name; rename it"
    if name in FUNCTIONS:
        return f"found the name {name!r}, which is a function; allowed: any other name; rename it"
    if name in CONSTANTS:
        return f"found the name {name!r}, which is a constant; allowed: any other name; rename it"
    if name in RESERVED:
        return f"found the name {name!r}, which is reserved for time; allowed: any other name; rename it"
    return None
