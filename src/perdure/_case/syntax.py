"""From Python's syntax tree of user text to kernel source, through a whitelist."""

from __future__ import annotations

import ast
from collections.abc import Callable, Collection
from dataclasses import dataclass
from typing import Any

import numpy as np

from perdure._case import grammar
from perdure._case.evaluation import evaluate_tree, source_tree

NUMBER, CONDITION, UNKNOWN = "number", "condition", "unknown"

# Operators that may share one flat chain: Python evaluates a chain from the left, and so does the kernel.
_CHAINS: dict[type[ast.operator], tuple[type[ast.operator], ...]] = {
    ast.Add: (ast.Add, ast.Sub),
    ast.Sub: (ast.Add, ast.Sub),
    ast.Mult: (ast.Mult, ast.Div),
    ast.Div: (ast.Mult, ast.Div),
}
_SYMBOLS: dict[type[ast.AST], str] = {
    ast.Add: "+",
    ast.Sub: "-",
    ast.Mult: "*",
    ast.Div: "/",
    ast.Lt: "<",
    ast.LtE: "<=",
    ast.Gt: ">",
    ast.GtE: ">=",
    ast.Eq: "==",
    ast.NotEq: "!=",
}
ALLOWED = (
    "numbers, declared names, pi, + - * / ** %, comparisons, and/or/not, 'a if condition else b' and the "
    "functions " + ", ".join(sorted(grammar.FUNCTIONS))
)


@dataclass(frozen=True)
class Piece:
    """Source of a part of an expression and what it is: a number, a condition, or unknown after a mistake."""

    source: str
    kind: str


_BROKEN = Piece("0.0", UNKNOWN)


class Translator:
    """Prints one expression; `findings` holds every mistake met, `used` the names that occur.

    Parameters
    ----------
    text : str
        The text that the tree was parsed from, on one line (for quoting pieces of it).
    names : collection of str
        Names that the expression may use.
    """

    def __init__(self, text: str, names: Collection[str]) -> None:
        self.text = text
        self.names = names
        self.findings: list[str] = []
        self.used: set[str] = set()
        self._visitors: dict[type[ast.expr], Callable[[Any, int], Piece]] = {
            ast.Constant: self._constant,
            ast.Name: self._name,
            ast.UnaryOp: self._unary,
            ast.BinOp: self._binary,
            ast.Compare: self._compare,
            ast.BoolOp: self._boolean,
            ast.IfExp: self._choice,
            ast.Call: self._call,
        }

    def number(self, node: ast.expr, depth: int = 1) -> str:
        """Source of `node`, which must be a number."""
        piece = self._visit(node, depth)
        if piece.kind == CONDITION:
            quoted = self._quote(node)
            self._add(
                f"found the condition {quoted!r} where a number is needed; allowed: a number; "
                f"write (1 if {quoted} else 0) if that is meant"
            )
        return piece.source

    def condition(self, node: ast.expr, depth: int = 1) -> str:
        """Source of `node`, which must be a condition."""
        piece = self._visit(node, depth)
        if piece.kind == NUMBER:
            quoted = self._quote(node)
            self._add(
                f"found the number {quoted!r} where a condition is needed; allowed: comparisons such as "
                f"{quoted} > 0, joined by and/or/not; compare it with something"
            )
        return piece.source

    def _add(self, finding: str) -> None:
        if finding not in self.findings:
            self.findings.append(finding)

    def _quote(self, node: ast.expr) -> str:
        piece = self.text[node.col_offset : node.end_col_offset]
        return piece if len(piece) <= 60 else piece[:57] + "..."

    def _refuse(self, node: ast.expr, what: str, remedy: str = "rewrite it with these") -> Piece:
        self._add(f"found {self._quote(node)!r}, {what}; allowed: {ALLOWED}; {remedy}")
        return _BROKEN

    def _visit(self, node: ast.expr, depth: int) -> Piece:
        if depth > grammar.MAX_DEPTH:
            self._add(
                f"found an expression nested deeper than {grammar.MAX_DEPTH} levels; allowed: at most "
                f"{grammar.MAX_DEPTH}; simplify it"
            )
            return _BROKEN
        visitor = self._visitors.get(type(node))
        if visitor is None:
            kind = type(node).__name__
            return self._refuse(node, grammar.WORDS.get(kind, "which is not arithmetic"))
        piece = visitor(node, depth)
        if len(piece.source) > grammar.MAX_SOURCE:
            self._add(
                "found chains of comparisons nested inside each other, too long once written out; "
                "allowed: chains whose middle is short; split them with 'and'"
            )
            return _BROKEN
        return piece

    def _constant(self, node: ast.Constant, depth: int) -> Piece:
        value = node.value
        if isinstance(value, bool) or value is None or value is Ellipsis:
            return self._refuse(node, "which is not a number", "write a comparison or a number")
        if not isinstance(value, (int, float)):
            word = "a complex number" if isinstance(value, complex) else "a text"
            return self._refuse(node, word)
        try:
            number = float(value)
        except OverflowError:
            number = np.inf
        if not np.isfinite(number):
            return self._refuse(node, "too large for a 64-bit number", "write a number below 1.8e308")
        return Piece(repr(number), NUMBER)

    def _name(self, node: ast.Name, depth: int) -> Piece:
        name = node.id
        if name in self.names:
            self.used.add(name)
            return Piece(f"v_{name}", NUMBER)
        if name in grammar.CONSTANTS:
            return Piece(repr(grammar.CONSTANTS[name]), NUMBER)
        if name in grammar.FUNCTIONS:
            self._add(f"found the function {name!r} without arguments; allowed: {name}(...); give its arguments")
            return _BROKEN
        self._add(f"found the unknown name {name[:80]!r}; allowed: {self._name_list()}; {self._name_remedy(name)}")
        return _BROKEN

    def _name_list(self) -> str:
        names = sorted(self.names)
        shown = ", ".join(names[:24]) + (f" and {len(names) - 24} more" if len(names) > 24 else "")
        return f"{shown}, pi" if shown else "pi"

    def _name_remedy(self, name: str) -> str:
        if name == "t":
            return "this version computes systems whose equations do not depend on time"
        if name in grammar.INSTEAD:
            return f"write {grammar.INSTEAD[name]}"
        close = grammar.nearest(name, [*self.names, *grammar.CONSTANTS])
        return f"did you mean {close!r}?" if close else "declare it in [system.parameters] or correct it"

    def _unary(self, node: ast.UnaryOp, depth: int) -> Piece:
        if isinstance(node.op, ast.Not):
            return Piece(f"f_not({self.condition(node.operand, depth + 1)})", CONDITION)
        if isinstance(node.op, ast.Invert):
            return self._refuse(node, "an operator that is not allowed", grammar.OPERATORS_INSTEAD["Invert"])
        source = self.number(node.operand, depth + 1)
        return Piece(f"(-{source})" if isinstance(node.op, ast.USub) else source, NUMBER)

    def _binary(self, node: ast.BinOp, depth: int) -> Piece:
        if isinstance(node.op, ast.Pow):
            return self._power(node, depth)
        if isinstance(node.op, ast.Mod):
            left, right = self.number(node.left, depth + 1), self.number(node.right, depth + 1)
            return Piece(f"f_mod({left}, {right})", NUMBER)
        chain = _CHAINS.get(type(node.op))
        if chain is None:
            remedy = grammar.OPERATORS_INSTEAD.get(type(node.op).__name__, "rewrite it with these")
            return self._refuse(node, "an operator that is not allowed", remedy)
        terms: list[tuple[str, ast.expr]] = []
        head: ast.expr = node
        while isinstance(head, ast.BinOp) and isinstance(head.op, chain):
            terms.append((_SYMBOLS[type(head.op)], head.right))
            head = head.left
        parts = [self.number(head, depth + 1)]
        parts += [f"{symbol} {self.number(term, depth + 1)}" for symbol, term in reversed(terms)]
        return Piece(f"({' '.join(parts)})", NUMBER)

    def _power(self, node: ast.BinOp, depth: int) -> Piece:
        base = self.number(node.left, depth + 1)
        met, used = len(self.findings), set(self.used)
        self.used.clear()
        exponent = self.number(node.right, depth + 1)
        is_constant, self.used = not self.used, self.used | used
        if len(self.findings) > met:
            return _BROKEN
        if not is_constant:
            return Piece(f"f_pow({base}, {exponent})", NUMBER)
        value = float(evaluate_tree(source_tree(exponent), {}))
        if not abs(value) <= grammar.MAX_EXPONENT:
            self._add(
                f"found the exponent {self._quote(node.right)!r}; allowed: constant exponents from "
                f"-{grammar.MAX_EXPONENT} to {grammar.MAX_EXPONENT}; rewrite the power with a smaller one"
            )
            return _BROKEN
        if value == int(value):
            return Piece(f"(({base})**{int(value)})" if value >= 0 else f"(({base})**({int(value)}))", NUMBER)
        if value == 0.5:
            return Piece(f"f_sqrt({base})", NUMBER)
        return Piece(f"f_pow({base}, {value!r})", NUMBER)

    def _compare(self, node: ast.Compare, depth: int) -> Piece:
        for op in node.ops:
            if type(op) not in _SYMBOLS:
                return self._refuse(node, "a comparison that is not allowed", "use < <= > >= == !=")
        sides = [self.number(side, depth + 1) for side in (node.left, *node.comparators)]
        links = [
            f"(({left}) {_SYMBOLS[type(op)]} ({right}))"
            for left, op, right in zip(sides[:-1], node.ops, sides[1:], strict=True)
        ]
        return Piece(links[0] if len(links) == 1 else f"({' & '.join(links)})", CONDITION)

    def _boolean(self, node: ast.BoolOp, depth: int) -> Piece:
        joint = " & " if isinstance(node.op, ast.And) else " | "
        return Piece(f"({joint.join(self.condition(value, depth + 1) for value in node.values)})", CONDITION)

    def _choice(self, node: ast.IfExp, depth: int) -> Piece:
        body, test, orelse = (
            self.number(node.body, depth + 1),
            self.condition(node.test, depth + 1),
            self.number(node.orelse, depth + 1),
        )
        return Piece(f"({body} if {test} else {orelse})", NUMBER)

    def _call(self, node: ast.Call, depth: int) -> Piece:
        if not isinstance(node.func, ast.Name):
            return self._refuse(node, "a call of something that is not a function of the list")
        name, n_given = node.func.id, len(node.args)
        if name not in grammar.FUNCTIONS:
            return self._unknown_function(node, name)
        if node.keywords or any(isinstance(argument, ast.Starred) for argument in node.args):
            return self._refuse(node, "with a named or starred argument", f"write {name}(...) with plain arguments")
        n_needed, open_ended = grammar.FUNCTIONS[name], name in grammar.ANY_NUMBER_OF_ARGUMENTS
        if n_given < n_needed or (n_given > n_needed and not open_ended):
            allowed = f"{n_needed} or more" if open_ended else f"exactly {n_needed}"
            self._add(
                f"found {self._quote(node)!r} with {n_given} argument{'s' * (n_given != 1)}; "
                f"allowed: {allowed} for {name}; correct the arguments"
            )
            return _BROKEN
        arguments = [self.number(argument, depth + 1) for argument in node.args]
        if open_ended:
            return Piece(_halves(f"f_{name}2", arguments), NUMBER)
        return Piece(f"f_{name}({', '.join(arguments)})", NUMBER)

    def _unknown_function(self, node: ast.Call, name: str) -> Piece:
        if name in self.names:
            self._add(
                f"found {self._quote(node)!r}, but {name!r} is a number; allowed: functions may be called; "
                f"write {name}*(...) for a product"
            )
            return _BROKEN
        close = grammar.nearest(name, grammar.FUNCTIONS)
        remedy = "rewrite it with these"
        if name in grammar.INSTEAD:
            remedy = f"write {grammar.INSTEAD[name]}"
        elif close:
            remedy = f"did you mean {close!r}?"
        functions = ", ".join(sorted(grammar.FUNCTIONS))
        self._add(f"found the unknown function {name[:80]!r}; allowed: {functions}; {remedy}")
        return _BROKEN


def _halves(function: str, arguments: list[str]) -> str:
    # Halving keeps the brackets shallow: Python refuses text with more than 200 open at once.
    if len(arguments) == 1:
        return arguments[0]
    middle = (len(arguments) + 1) // 2
    return f"{function}({_halves(function, arguments[:middle])}, {_halves(function, arguments[middle:])})"
