"""Systems given by Python functions instead of equations."""

from __future__ import annotations

import hashlib
import inspect
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from perdure._case.problems import Problems, listed, show


@dataclass(frozen=True)
class Functions:
    """Python functions given instead of equations and noise; no case file can name one."""

    function: Any = None
    noise_function: Any = None


def check_functions(
    problems: Problems,
    functions: Functions,
    order: tuple[str, ...],
    kind: str | None,
    has_equations: bool,
) -> None:
    """Add what is wrong with the functions of a system.

    Parameters
    ----------
    order : tuple of str
        Names of state components, parameters and draws: the arguments of the functions.
    kind : str or None
        Kind of the system.
    has_equations : bool
        Whether the table ``[system.equations]`` is there too.
    """
    if functions.function is not None and has_equations:
        problems.add(
            ("system", "equations"),
            "found equations beside a function; allowed: one of the two; remove the other",
        )
    if functions.noise_function is not None and (functions.function is None or kind != "noisy-flow"):
        problems.add(
            ("system", "noise_function"),
            "found a noise function; allowed: only in a noisy-flow given by a function; remove it or give both",
        )
    for key, function in (("function", functions.function), ("noise_function", functions.noise_function)):
        if function is None:
            continue
        if not callable(function):
            problems.add(("system", key), f"found {show(function)}; allowed: a Python function; give one")
        elif not _takes(function, len(order)):
            problems.add(
                ("system", key),
                f"found a function that cannot be called with {len(order)} arguments; allowed: state, "
                f"parameters and draws in order ({listed(order)}); change its arguments",
            )


def _takes(function: Callable[..., Any], n_argument: int) -> bool:
    try:
        inspect.signature(function).bind(*range(n_argument))
    except ValueError:
        return True  # built-in functions do not tell
    except TypeError:
        return False
    return True


def function_comments(functions: Functions) -> str:
    """TOML comments that name the functions, in the place of the equations they stand for."""
    comments = ""
    for role, function in (("equations", functions.function), ("noise", functions.noise_function)):
        if function is None:
            continue
        python_function = getattr(function, "py_func", function)  # what numba compiled
        parts = (getattr(python_function, key, "?") for key in ("__module__", "__qualname__"))
        name = "".join(character for character in ".".join(map(str, parts)) if character.isprintable())
        try:
            digest = hashlib.sha256(inspect.getsource(python_function).encode()).hexdigest()
            origin = f"SHA-256 of its source: {digest}"
        except (OSError, TypeError):
            origin = "its source is not available"
        comments += f"# {role}: Python function {name} ({origin})\n"
    return comments
