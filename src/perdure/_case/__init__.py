"""TOML or Python -> checked `Case`. Imports nothing heavier than pydantic and numpy."""

from __future__ import annotations

from perdure._case.case import Case, load_case

__all__ = ["Case", "load_case"]
