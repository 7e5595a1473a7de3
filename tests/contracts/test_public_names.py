"""The public names are these, and each can be imported."""

from __future__ import annotations

import ast
import inspect
from pathlib import Path

import pytest

import perdure

PUBLIC = [
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
FOLDER = Path(perdure.__file__).parent


def test_list_is_the_public_names() -> None:
    assert perdure.__all__ == PUBLIC
    assert sorted(PUBLIC) == PUBLIC


@pytest.mark.parametrize("name", PUBLIC)
def test_name_can_be_imported(name: str) -> None:
    namespace: dict[str, object] = {}
    exec(f"from perdure import {name} as found", namespace)
    assert namespace["found"] is getattr(perdure, name)


def test_names_are_listed_before_they_are_loaded() -> None:
    assert set(PUBLIC) <= set(dir(perdure))


def test_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="'perdure' has no attribute 'estimat'"):
        perdure.estimat  # noqa: B018


def test_type_checkers_see_the_same_homes() -> None:
    """The imports under TYPE_CHECKING and the table of lazy names say the same."""
    tree = ast.parse((FOLDER / "__init__.py").read_text(encoding="utf-8"))
    block = next(node for node in tree.body if isinstance(node, ast.If))
    seen = {}
    for node in ast.walk(block):
        if isinstance(node, ast.ImportFrom):
            for alias in node.names:
                home = (f"perdure.{alias.name}", "") if node.module == "perdure" else (node.module, alias.name)
                seen[alias.asname or alias.name] = home
    assert seen == perdure._HOMES
    assert set(seen) == set(PUBLIC) - {"__version__"}


def test_all_other_modules_are_private() -> None:
    modules = {path.name.removesuffix(".py") for path in FOLDER.iterdir() if path.suffix in ("", ".py")}
    assert {name for name in modules if not name.startswith("_")} == {"errors", "systems"}


def test_options_of_estimate_are_keywords() -> None:
    parameters = inspect.signature(perdure.estimate).parameters
    kinds = {name: parameter.kind for name, parameter in parameters.items()}
    assert kinds.pop("case") is inspect.Parameter.POSITIONAL_OR_KEYWORD
    assert set(kinds.values()) == {inspect.Parameter.KEYWORD_ONLY}
    # a run is steered by the last two
    assert set(kinds) | {"accuracy", "budget"} == {"workers", "progress", "command", "accuracy", "budget"}


def test_errors_list_is_what_the_module_defines() -> None:
    defined = [name for name, item in vars(perdure.errors).items() if inspect.isclass(item)]
    assert sorted(defined) == perdure.errors.__all__
