"""Writes texts to case files and reads them."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from perdure._case import Case, load_case
from perdure.errors import CaseError

Load = Callable[[str], Case]
Refused = Callable[[str], tuple[str, ...]]


@pytest.fixture
def load(tmp_path: Path) -> Load:
    """Reads a text as the file ``loop.toml``."""

    def read(text: str) -> Case:
        path = tmp_path / "loop.toml"
        path.write_text(text, encoding="utf-8", newline="")
        return load_case(path)

    return read


@pytest.fixture
def refused(load: Load) -> Refused:
    """Reads a text that must be refused; returns the problems."""

    def read(text: str) -> tuple[str, ...]:
        with pytest.raises(CaseError) as caught:
            load(text)
        return caught.value.problems

    return read
