"""What must not be in the files of the repository."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
TOP_LEVEL = {
    ".ci", ".gitignore", "DEVELOPERS.md", "LICENSE", "README.md", "cases", "pyproject.toml", "scripts", "src",
    "tests",
}  # fmt: skip

# Spelt in pieces, so that this file does not hold what it looks for.
UNWANTED = {
    "absolute path of a machine": r"(?<![\w.~/-])/(?:home|root|Users|work|mnt|media|private)/\w",
    "absolute path of Windows": r"\b[A-Z]:\\+(?:Users|Program)",
    "host of a package registry": r"(?i)\b(?:pypi|pythonhosted|anaconda|npmjs|proxy\.golang)\.(?:org|com)\b",
    "option for a package index": r"--(?:extra-)?index-" + r"url|--find-" + r"links|--trusted-" + r"host",
    "open task": r"\bTO" + r"DO\b|\bFIX" + r"ME\b|\bXX" + r"X\b",
    "ignored type without a code": r"type:\s*ign" + r"ore(?!\[)",
    "skipped test": r"mark\.sk" + r"ip|pytest\.sk" + r"ip\b|pytest\.importor" + r"skip|unittest\.sk" + r"ip",
}


def repository_files() -> list[Path]:
    """Files tracked by git, and those that would be; without git, all but caches."""
    if shutil.which("git") and (ROOT / ".git").exists():
        command = [
            "git",
            "-c",
            f"safe.directory={ROOT}",
            "ls-files",
            "-z",
            "--cached",
            "--others",
            "--exclude-standard",
        ]
        listed = subprocess.run(command, cwd=ROOT, capture_output=True, check=True).stdout
        names = [name for name in listed.decode().split("\0") if name]
    else:
        found = (path.relative_to(ROOT) for path in ROOT.rglob("*") if path.is_file())
        names = [str(p) for p in found if not {".venv", ".cache", "__pycache__"} & set(p.parts)]
    return [ROOT / name for name in sorted(set(names)) if (ROOT / name).is_file()]


def unwanted_in(text: str) -> list[str]:
    """Kinds of unwanted text that are in `text`."""
    return [kind for kind, pattern in UNWANTED.items() if re.search(pattern, text)]


def text_of(path: Path) -> str | None:
    """Text of a file; None if it is not UTF-8 text."""
    try:
        return path.read_bytes().decode("utf-8")
    except UnicodeDecodeError:
        return None


def test_files_hold_nothing_unwanted() -> None:
    files = repository_files()
    assert len(files) > 20
    found = []
    for path in files:
        text = text_of(path)
        if text is not None:
            found += [f"{path.relative_to(ROOT)}: {kind}" for kind in unwanted_in(text)]
    assert found == []


def test_top_level_holds_these_and_nothing_else() -> None:
    assert {path.relative_to(ROOT).parts[0] for path in repository_files()} == TOP_LEVEL


@pytest.mark.parametrize(
    ("kind", "text"),
    [
        ("absolute path of a machine", "see /ho" + "me/ann/case.toml"),
        ("absolute path of a machine", 'open("/wo' + 'rk/x")'),
        ("absolute path of Windows", "C:" + "\\Users"),
        ("host of a package registry", "https://files.pythonhosted" + ".org/packages"),
        ("host of a package registry", "from PyPI" + ".org"),
        ("option for a package index", "pip install --index-" + "url x"),
        ("open task", "# TO" + "DO: later"),
        ("ignored type without a code", "x = f()  # type: ign" + "ore"),
        ("skipped test", "@pytest.mark.sk" + "ipif(True)"),
    ],
)
def test_unwanted_text_is_noticed(kind: str, text: str) -> None:
    """Negative control."""
    assert unwanted_in(text) == [kind]


@pytest.mark.parametrize(
    "text", ["work/flow", "a/home/b", "/dev/null", "x  # type: ign" + "ore[attr-defined]", "methods"]
)
def test_ordinary_text_is_not_noticed(text: str) -> None:
    assert unwanted_in(text) == []
