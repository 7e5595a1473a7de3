"""Texts that try to run Python, exhaust it, or slip past the whitelist: each is refused, none is run."""

from __future__ import annotations

import functools
import sys
import time
from collections.abc import Callable

import pytest

from perdure._case.expressions import parse_condition, parse_value
from perdure.errors import CaseError

NAMES = ("x", "y", "a")

HOSTILE = [
    "x.__class__",
    "x.real",
    "().__class__.__bases__[0].__subclasses__()",
    "__import__('os').getpid()",
    "__builtins__",
    "__debug__",
    "eval('x')",
    "exec('x')",
    "open('a')",
    "print(x)",
    "getattr(x, y)",
    "sin.__call__(x)",
    "(sin)(x)(y)",
    "(lambda: x)()",
    "lambda x: x",
    "[x for x in y]",
    "{x for x in y}",
    "{x: y for x in y}",
    "(x for x in y)",
    "[x, y]",
    "x, y",
    "{1: x}",
    "f'{x}'",
    "f'{open(1)}'",
    "'x' * 10**9",
    "b'x'",
    "'x'",
    "1j",
    "x + 2j",
    "True",
    "None",
    "...",
    "(x := 3)",
    "x := 3",
    "x[0]",
    "x[0:1]",
    "sin(x=1)",
    "sin(*x)",
    "sin(**x)",
    "min(x, *y)",
    "min(x, key=y)",
    "*x",
    "await x",
    "(yield x)",
    "(yield from x)",
    "x if y",
    "x; y",
    "import os",
    "x = y",
    "x @ y",
    "x << 3",
    "x >> 3",
    "1 << 10**9",
    "9**9**9",
    "9**9**9**9*x",
    "2**(2**(2**(2**(2**2))))",
    "1e999",
    "9" * 400,
    "9" * 4000,
    "0x" + "f" * 4000,
    "x**1e999",
    "ｘ",
    "а",  # Cyrillic, looks like the name a
    "x\u200b+ y",
    "x ∗ y",
    "x + ٣",
    "\ud800",
    "x\x00y",
    "x\\\ny",
    "# x",
    "x\n#",
    "1if x > 1else 2",
    "(" * 10_000 + "x" + ")" * 10_000,
    "(" * 1500 + "x" + ")" * 1500,
    "-" * 4000 + "x",
    "not " * 1000 + "x > 1",
    "sin(" * 800 + "x" + ")" * 800,
    "x+" * 500_000 + "x",
    "x" * 4000,
    "[" * 4000,
    "x" + "**x" * 400,
    "x" + " if x > 1 else x" * 60,
    "0 < (1 if " * 20 + "0 < x < 1" + " else 2) < 3" * 20,
]

_watched: list[str] = []
_watching = False


def _audit(event: str, arguments: tuple[object, ...]) -> None:
    if _watching and event in ("exec", "import", "open", "os.system", "subprocess.Popen"):
        _watched.append(event)


# Python offers no way to take a hook off again; this one does nothing outside `watched`.
sys.addaudithook(_audit)


def watched(action: Callable[[], object]) -> list[str]:
    """What `action` ran, imported or opened; the CaseError it raises, if any, is passed over."""
    global _watching
    _watched.clear()
    _watching = True
    try:
        action()
    except CaseError:
        pass
    finally:
        _watching = False
    return list(_watched)


def test_the_watch_notices_evaluation() -> None:
    """Negative control of the next test."""
    assert watched(lambda: eval("1 + 1")) == ["exec"]


@pytest.mark.parametrize("text", HOSTILE, ids=range(len(HOSTILE)))
def test_hostile_text_is_refused_at_once_and_not_run(text: str) -> None:
    start = time.process_time()
    for parse in (parse_value, parse_condition):
        with pytest.raises(CaseError) as caught:
            parse(text, NAMES, "here")
        assert len(str(caught.value)) < 6000
        assert all(problem.startswith("here: found ") for problem in caught.value.problems)
        assert watched(functools.partial(parse, text, NAMES, "here")) == []
    assert time.process_time() - start < 1.0
