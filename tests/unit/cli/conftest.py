"""The commands on a stand-in for the engine."""

from __future__ import annotations

import sys
from pathlib import Path
from types import ModuleType

import pytest

from unit.cli.fakes import Engine


@pytest.fixture
def engine(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Engine:
    """The stand-in, in a folder of its own that holds ``loop.toml``."""
    fake = Engine()
    parts = {
        "perdure._case": ("load_case",),
        "perdure._pipeline": ("crosscheck", "estimate", "plan", "forecast_cost"),
        "perdure._result": ("open_file",),
    }
    for name, functions in parts.items():
        module = ModuleType(name)
        for function in functions:
            setattr(module, function, getattr(fake, function))
        monkeypatch.setitem(sys.modules, name, module)
    monkeypatch.chdir(tmp_path)
    (tmp_path / "loop.toml").write_text("[case]\n", encoding="utf-8")
    return fake
