"""User text -> checked `Expression`. Nothing in the text is ever executed."""

from __future__ import annotations

import ast
import warnings
from collections.abc import Collection
from dataclasses import dataclass

from perdure._case import grammar
from perdure._case.evaluation import evaluate
from perdure._case.syntax import CONDITION, NUMBER, Translator
from perdure._records import Expression
from perdure.errors import CaseError

__all__ = ["CONDITION", "NUMBER", "Reading", "evaluate", "parse_condition", "parse_value", "read_expression"]

_SYNTAX_HINTS = (
    ("&&", "write 'and'"),
    ("||", "write 'or'"),
    ("!", "write 'not' before a condition, != for 'is not equal'"),
    (":=", "leave out the assignment"),
    ("=", "write == for 'is equal'"),
)


@dataclass(frozen=True)
class Reading:
    """Outcome of `read_expression`: the expression, or None with the findings that speak against it."""

    expression: Expression | None
    findings: tuple[str, ...] = ()


def parse_value(text: str, names: Collection[str], place: str) -> Expression:
    """Checked arithmetic expression.

    Parameters
    ----------
    text : str
        At most 4096 ASCII characters.
    names : collection of str
        Names that may occur: state components, parameters, draws.
    place : str
        Where the text stands, for messages: ``loop.toml, line 9, [system.equations] x``.

    Raises
    ------
    CaseError
        One problem per mistake: place, what was found, what is allowed, what to do.
    """
    return _required(read_expression(text, names, NUMBER), place)


def parse_condition(text: str, names: Collection[str], place: str) -> Expression:
    """Checked condition: comparisons joined by and/or/not. Arguments and errors as in `parse_value`."""
    return _required(read_expression(text, names, CONDITION), place)


def _required(reading: Reading, place: str) -> Expression:
    if reading.expression is None:
        raise CaseError([f"{place}: {finding}" for finding in reading.findings])
    return reading.expression


def read_expression(text: str, names: Collection[str], kind: str, *, limited: bool = True) -> Reading:
    """Check a text and print its kernel source; mistakes are returned, not raised.

    Parameters
    ----------
    text : str
    names : collection of str
        Names that may occur.
    kind : str
        `NUMBER` or `CONDITION`.
    limited : bool
        False lifts the limits on length, for text that perdure itself wrote.
    """
    line = " ".join(text.split())
    finding = _text_finding(line, limited)
    if finding:
        return Reading(None, (finding,))
    tree = _parse(line)
    if isinstance(tree, str):
        return Reading(None, (tree,))
    n_node = sum(isinstance(node, ast.expr) for node in ast.walk(tree))
    if limited and n_node > grammar.MAX_NODES:
        found = f"found an expression of {n_node} parts; allowed: at most {grammar.MAX_NODES}; shorten it"
        return Reading(None, (found,))
    translator = Translator(line, frozenset(names))
    source = translator.number(tree) if kind == NUMBER else translator.condition(tree)
    if translator.findings:
        return Reading(None, tuple(translator.findings))
    return Reading(Expression(text=text, source=source, names=frozenset(translator.used)))


def _text_finding(line: str, limited: bool) -> str | None:
    if not line:
        return 'found an empty text; allowed: an expression; write one, for example "sigma*(y - x)"'
    if limited and len(line) > grammar.MAX_CHARACTERS:
        return f"found {len(line)} characters; allowed: at most {grammar.MAX_CHARACTERS}; shorten it"
    foreign = next((character for character in line if not character.isascii()), None)
    if foreign is not None:
        position = line.index(foreign) + 1
        return (
            f"found the character {foreign!r} (U+{ord(foreign):04X}) at position {position}; allowed: ASCII "
            "letters, digits and signs; replace it"
        )
    if "#" in line:
        return "found the character '#'; allowed: no comments inside an expression; move it out of the quotes"
    return None


def _parse(line: str) -> ast.expr | str:
    try:
        with warnings.catch_warnings():
            # "1if x" and "0x1for" are only warned about by Python; here they are mistakes.
            warnings.simplefilter("error")
            return ast.parse(line, mode="eval").body
    except SyntaxError as error:
        return _syntax_finding(line, error)
    except (ValueError, MemoryError, RecursionError, OverflowError) as error:
        quoted = line if len(line) <= 60 else line[:57] + "..."
        return (
            f"found {quoted!r}, which cannot be read ({type(error).__name__}); allowed: an expression nested "
            f"at most {grammar.MAX_DEPTH} deep, with numbers below 1.8e308; simplify it"
        )


def _syntax_finding(line: str, error: SyntaxError) -> str:
    position = max(0, min((error.offset or 1) - 1, len(line)))
    window = line[max(0, position - 20) : position + 20]
    remedy = 'correct it, for example "sigma*(y - x)"'
    if "decimal literal" in str(error.msg):
        remedy = "write a product with *, for example 2*x, and a space between a number and a word"
    else:
        for sign, hint in _SYNTAX_HINTS:
            if sign in line.replace("==", "").replace("<=", "").replace(">=", "").replace("!=", ""):
                remedy = hint
                break
    reason = str(error.msg).split(". ")[0][:80]
    return (
        f"found {window!r} at position {position + 1}, which is not an expression ({reason}); allowed: "
        f"arithmetic and conditions on one line; {remedy}"
    )
