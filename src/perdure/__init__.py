"""Long-run statistics of chaotic and noisy systems, each number with an error budget.

The public names below are loaded on first use, so that ``import perdure`` stays light. Every other
module is private (its name begins with an underscore).
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from perdure import errors, systems
    from perdure._case import Case, load_case
    from perdure._density import Density
    from perdure._pipeline import crosscheck, estimate
    from perdure._records import Budget, Quantity
    from perdure._result import Result
    from perdure._result import open_file as open

__all__ = [
    "Budget",
    "Case",
    "Density",
    "Quantity",
    "Result",
    "__version__",
    "crosscheck",
    "errors",
    "estimate",
    "load_case",
    "open",
    "systems",
]

__version__ = "0.1.0"

# Public name -> (module, name there); an empty name stands for the module itself.
_HOMES = {
    "Budget": ("perdure._records", "Budget"),
    "Case": ("perdure._case", "Case"),
    "Density": ("perdure._density", "Density"),
    "Quantity": ("perdure._records", "Quantity"),
    "Result": ("perdure._result", "Result"),
    "crosscheck": ("perdure._pipeline", "crosscheck"),
    "errors": ("perdure.errors", ""),
    "estimate": ("perdure._pipeline", "estimate"),
    "load_case": ("perdure._case", "load_case"),
    "open": ("perdure._result", "open_file"),
    "systems": ("perdure.systems", ""),
}


def __getattr__(name: str) -> Any:
    try:
        module_name, attribute = _HOMES[name]
    except KeyError:
        raise AttributeError(f"module 'perdure' has no attribute {name!r}") from None
    module = import_module(module_name)
    value = getattr(module, attribute) if attribute else module
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(set(globals()) | set(__all__))
