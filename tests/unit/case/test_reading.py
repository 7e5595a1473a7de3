"""Files that are no case files, lines of a text, and what loading a case costs."""

from __future__ import annotations

import os
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from perdure._case import load_case
from perdure._case.positions import Positions
from perdure.errors import CaseError, UsageError

MAP = '[system]\nkind = "map"\nstate = ["x"]\n[system.equations]\nx = "4*x*(1 - x)"\n'

FILES = [
    (b"", "a.toml: found an empty file"),
    (b"  \n# nothing\n", "a.toml: found an empty file"),
    (b"\xef\xbb\xbf", "a.toml: found an empty file"),
    (b"[case]\ntitle = '\xff'\n", "a.toml, line 2: found the byte 0xff, which is not UTF-8"),
    (MAP.encode("utf-16"), "a.toml, line 1: found the byte 0xff, which is not UTF-8"),
    (b"\x89HDF\r\n\x1a\n", "a.toml, line 1: found the byte 0x89, which is not UTF-8"),
    (b"#" * (2**20 + 1), "a.toml: found more than 1 MiB; allowed: case files up to 1 MiB"),
    (b"[case]\ntitle = \n", "a.toml, line 2, column 9: found text that is not TOML"),
    (b"[case\n", "a.toml, line 1, column 6: found text that is not TOML"),
    (b"[a]\nb = 1\nb = 2\n", "a.toml, line 3, column 6: found text that is not TOML"),
    (b"[a]\n[a]\n", "a.toml, line 2, column 3: found text that is not TOML"),
    (b"a = [1,", "a.toml, end of document: found text that is not TOML"),
    (b"a = \x00", "a.toml, line 1, column 5: found text that is not TOML"),
    (b"a = " + b"[" * 100_000, "a.toml: found brackets nested too deep"),
    (b"a = " + b"{a=" * 50_000, "a.toml: found brackets nested too deep"),
    (b"a = 1" + b"0" * 5000, "a.toml: found a number or date that cannot be read"),
]


@pytest.mark.parametrize(("content", "message"), FILES, ids=range(len(FILES)))
def test_what_is_no_case_file_is_refused(tmp_path: Path, content: bytes, message: str) -> None:
    path = tmp_path / "a.toml"
    path.write_bytes(content)
    with pytest.raises(CaseError) as caught:
        load_case(path)
    assert str(caught.value).startswith(message)
    assert "; allowed: " in str(caught.value)
    assert len(caught.value.problems) == 1


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(CaseError, match=r"^b\.toml: found no such file \(.*\); allowed: an existing case file"):
        load_case(tmp_path / "b.toml")


def test_folder(tmp_path: Path) -> None:
    with pytest.raises(CaseError, match=r"found a folder; allowed: a case file"):
        load_case(tmp_path)


def test_a_file_as_a_folder_and_a_nul_in_the_path(tmp_path: Path) -> None:
    (tmp_path / "a").write_text("")
    for path in (str(tmp_path / "a" / "b.toml"), "a\0b"):
        with pytest.raises(CaseError, match=r"found a file that cannot be read \(.*\); allowed: a readable file"):
            load_case(path)


def test_a_pipe_is_refused_without_waiting_for_it(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "a.toml")
    with pytest.raises(CaseError, match="found a pipe or device"):
        load_case(tmp_path / "a.toml")


def test_a_file_of_the_largest_size_is_read(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    path.write_text(MAP + "#" * (2**20 - len(MAP)))
    assert load_case(path).system.state == ("x",)


def test_control_characters_of_a_file_name_do_not_reach_title_and_messages(tmp_path: Path) -> None:
    path = tmp_path / "a\nb.toml"
    path.write_text(MAP)
    assert (load_case(path).title, load_case(path).source_name) == ("a?b", "a?b.toml")


@pytest.mark.parametrize("seed", [-1, 2**128 + 1, True, 1.0, "3"])
def test_seed_argument_is_checked(tmp_path: Path, seed: int) -> None:
    path = tmp_path / "a.toml"
    path.write_text(MAP)
    with pytest.raises(UsageError, match=r"load_case, seed: found .*; allowed: a whole number from 0 to 2\*\*128"):
        load_case(path, seed=seed)


# -------------------------------------------------------------------------------------------- lines

TEXT = """# first
[a]
b = 1
c = [
  1,
  2,
]

[a.d]
"e f" = '''
several
lines'''
g.h = 3
[[k]]
m = 1
[[k]]
m = { n = [1, 2] }
"""


@pytest.mark.parametrize(
    ("path", "line"),
    [
        (("a",), 2),
        (("a", "b"), 3),
        (("a", "c"), 4),
        (("a", "c", 1), 4),
        (("a", "d"), 9),
        (("a", "d", "e f"), 10),
        (("a", "d", "g", "h"), 13),
        (("a", "d", "missing"), 9),
        (("a", "missing", "deeper"), 2),
        (("k", 0, "m"), 15),
        (("k", 1, "m", "n", 0), 17),
        (("missing",), None),
        ((), None),
    ],
)
def test_line_of_a_path(path: tuple[str | int, ...], line: int | None) -> None:
    assert Positions(TEXT).line(path) == line
    assert Positions("\ufeff" + TEXT.replace("\n", "\r\n")).line(path) == line


@given(st.lists(st.sampled_from(["one", "array", "text", "comment", "table"]), min_size=1, max_size=12))
def test_line_of_every_key_of_a_random_text(parts: list[str]) -> None:
    lines: list[str] = []
    expected: dict[tuple[str, ...], int] = {}
    table: tuple[str, ...] = ()
    for k, part in enumerate(parts):
        if part == "table":
            table = (f"t{k}",)
            lines.append(f"[t{k}]")
            expected[table] = len(lines)
        elif part == "comment":
            lines += ["", f"# k{k} = 3"]
        else:
            expected[*table, f"k{k}"] = len(lines) + 1
            lines += {
                "one": [f"k{k} = 1"],
                "array": [f"k{k} = [", "1,", "]"],
                "text": [f'k{k} = """', 'a = 1"""'],
            }[part]
    text = "\n".join(lines) + "\n"
    tomllib.loads(text)
    positions = Positions(text)
    for path, line in expected.items():
        assert positions.line(path) == line


def test_a_text_too_long_to_search_gives_up_in_time() -> None:
    text = "a = [\n" + "1,\n" * 100_000 + "]\n[b]\nc = 1\n"
    start = time.process_time()
    assert Positions(text).line(("b", "c")) is None
    assert time.process_time() - start < 15.0


# ------------------------------------------------------------------------------------------- imports

LOADED = """
import sys
from perdure._case import load_case
load_case(sys.argv[1])
print(*{"numba", "scipy", "sympy", "h5py", "sklearn", "sparse", "matplotlib", "click"} & set(sys.modules))
"""


def test_loading_imports_nothing_heavy(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    path.write_text(MAP)
    done = subprocess.run([sys.executable, "-c", LOADED, str(path)], capture_output=True, check=True, text=True)
    assert done.stdout.split() == []
