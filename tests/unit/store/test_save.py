"""A density file appears whole or not at all."""

from __future__ import annotations

import contextlib
import errno
import fcntl
import os
import shutil
import stat
import tempfile
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest

from helpers.synthetic_estimate import assert_same, make_estimate
from perdure._store import check_target, load, publish, save, write
from perdure.errors import OutputError

OLD = b"what was there before"


@pytest.fixture
def target(tmp_path: Path) -> Path:
    """A target that already exists."""
    path = tmp_path / "out.h5"
    path.write_bytes(OLD)
    return path


@pytest.fixture
def shared_folder() -> Iterator[Path]:
    """A folder that other users can reach; pytest's own are closed to them."""
    folder = Path(tempfile.mkdtemp())
    folder.chmod(0o777)
    yield folder
    folder.chmod(0o700)
    shutil.rmtree(folder)


@contextlib.contextmanager
def ordinary_user() -> Iterator[None]:
    """Permissions bind in this block, even if the tests run as root."""
    if os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


def fails_with(code: int) -> object:
    def fail(*_: object) -> None:
        raise OSError(code, os.strerror(code))

    return fail


@pytest.mark.parametrize(
    ("code", "said"),
    [
        (errno.ENOSPC, "the disk is full; free some space"),
        (errno.EDQUOT, "the disk quota is used up"),
        (errno.EIO, "Input/output error; give another path"),
    ],
)
def test_failing_write_leaves_the_old_file(target: Path, monkeypatch: pytest.MonkeyPatch, code: int, said: str) -> None:
    monkeypatch.setattr(write, "write_image", fails_with(code))
    estimate = make_estimate(side=4)
    with pytest.raises(OutputError, match=said) as caught:
        save(estimate, target)
    assert str(caught.value).startswith(f"{target}: the density file cannot be written: ")
    assert caught.value.estimate is estimate
    assert target.read_bytes() == OLD
    assert os.listdir(target.parent) == ["out.h5"]
    assert caught.value.exit_status == 2


def test_the_same_write_succeeds_when_nothing_fails(target: Path) -> None:
    """Negative control of the test above."""
    save(make_estimate(side=4), target)
    assert_same(load(target), make_estimate(side=4))
    assert os.listdir(target.parent) == ["out.h5"]


@pytest.mark.parametrize("name", ["fsync", "replace"])
def test_failure_of_the_last_steps(target: Path, monkeypatch: pytest.MonkeyPatch, name: str) -> None:
    monkeypatch.setattr(publish.os, name, fails_with(errno.EIO))
    with pytest.raises(OutputError):
        save(make_estimate(side=4), target)
    assert target.read_bytes() == OLD
    assert os.listdir(target.parent) == ["out.h5"]


def test_interruption_leaves_the_old_file(target: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(write, "write_image", interrupt)
    with pytest.raises(KeyboardInterrupt):
        save(make_estimate(side=4), target)
    assert target.read_bytes() == OLD
    assert os.listdir(target.parent) == ["out.h5"]


@pytest.mark.parametrize("limit", [0, write.MEMORY_LIMIT])
def test_fault_while_laying_out_carries_the_estimate(target: Path, monkeypatch: pytest.MonkeyPatch, limit: int) -> None:
    """HDF5 reports a full disk as RuntimeError."""

    def fail(*_: object) -> None:
        raise RuntimeError("unable to flush")

    monkeypatch.setattr(write, "put_budget", fail)
    monkeypatch.setattr(write, "MEMORY_LIMIT", limit)
    estimate = make_estimate(side=4)
    with pytest.raises(OutputError, match="RuntimeError: unable to flush") as caught:
        save(estimate, target)
    assert caught.value.estimate is estimate
    assert target.read_bytes() == OLD
    assert os.listdir(target.parent) == ["out.h5"]


def test_text_that_hdf5_cannot_hold(target: Path) -> None:
    estimate = make_estimate(side=4)
    estimate = replace(estimate, case=replace(estimate.case, title="a\0b"))
    with pytest.raises(OutputError, match="laying out the file failed") as caught:
        save(estimate, target)
    assert caught.value.estimate is estimate
    assert target.read_bytes() == OLD


def test_large_file_needs_room(target: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(write, "MEMORY_LIMIT", 0)
    monkeypatch.setattr(write, "room_left", lambda path: 1000)
    with pytest.raises(OutputError, match=r"may need 0\.00 GB, the disk has 0\.00 GB left"):
        save(make_estimate(side=4), target)
    assert target.read_bytes() == OLD


def test_room_left_is_that_of_the_folder(tmp_path: Path) -> None:
    free = shutil.disk_usage(tmp_path).free
    assert publish.room_left(tmp_path / "out.h5") == pytest.approx(free, rel=0.2)


# ------------------------------------------------------------------------------- before long work


def refused(path: str | Path) -> str:
    """What `check_target` says; `save` must say the same, with the estimate."""
    with pytest.raises(OutputError) as caught:
        check_target(path)
    assert caught.value.estimate is None
    estimate = make_estimate(side=4)
    with pytest.raises(OutputError) as again:
        save(estimate, path)
    assert again.value.estimate is estimate
    assert str(again.value).startswith(str(caught.value))
    return str(caught.value)


def test_missing_folder(tmp_path: Path) -> None:
    said = refused(tmp_path / "no" / "out.h5")
    assert "the folder '" in said
    assert "does not exist; make it" in said


def test_folder_that_is_a_file(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    assert "is not a folder" in refused(tmp_path / "file" / "out.h5")


def test_target_is_a_folder(tmp_path: Path) -> None:
    assert "it is a folder; add a file name" in refused(tmp_path)


def test_target_is_a_pipe(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    assert "not an ordinary file" in refused(tmp_path / "pipe")
    assert "not an ordinary file" in refused(os.devnull)


def test_name_too_long(tmp_path: Path) -> None:
    assert "too long" in refused(tmp_path / ("n" * 250))


def test_path_that_is_none() -> None:
    assert "the path is not one" in refused("a\0b")


def test_folder_without_permission(shared_folder: Path) -> None:
    shared_folder.chmod(0o555)
    with ordinary_user():
        said = refused(shared_folder / "out.h5")
    assert "no permission to write in its folder; permit writing there or give another path" in said


def test_write_protected_target(shared_folder: Path) -> None:
    path = shared_folder / "out.h5"
    path.write_bytes(OLD)
    path.chmod(0o444)
    with ordinary_user():
        assert "write-protected" in refused(path)
    assert path.read_bytes() == OLD


def test_read_only_file_system(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(publish.os, "open", fails_with(errno.EROFS))
    assert "the file system is read-only" in refused(tmp_path / "out.h5")


def test_good_target_leaves_no_trace(target: Path) -> None:
    check_target(target)
    check_target(target.parent / "new.h5")
    assert os.listdir(target.parent) == ["out.h5"]
    assert target.read_bytes() == OLD


def test_file_in_the_working_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    check_target("out.h5")
    save(make_estimate(side=4), "out.h5")
    assert os.listdir(tmp_path) == ["out.h5"]


def test_umask_sets_the_mode(tmp_path: Path) -> None:
    before = os.umask(0o027)
    try:
        save(make_estimate(side=4), tmp_path / "out.h5")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "out.h5").stat().st_mode) == 0o640


def test_link_is_followed(tmp_path: Path) -> None:
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "out.h5").symlink_to(tmp_path / "elsewhere" / "real.h5")
    save(make_estimate(side=4), tmp_path / "out.h5")
    assert (tmp_path / "out.h5").is_symlink()
    assert_same(load(tmp_path / "elsewhere" / "real.h5"), make_estimate(side=4))


# ---------------------------------------------------------------------------------- what is left


def test_leftovers_of_the_same_target_are_swept(tmp_path: Path) -> None:
    stale = tmp_path / ".out.h5.0123456789abcdef.part"
    others = [tmp_path / name for name in (".out.h5.old.0123456789abcdef.part", ".new.h5.01.part", "out.h5.part")]
    for path in (stale, *others):
        path.write_bytes(b"half")
    check_target(tmp_path / "out.h5")
    assert not stale.exists()
    assert all(path.exists() for path in others)


def test_file_that_a_living_run_writes_is_kept(tmp_path: Path) -> None:
    descriptor, part = publish.create_part(str(tmp_path), "out.h5")
    check_target(tmp_path / "out.h5")
    assert os.path.exists(part)
    os.close(descriptor)
    check_target(tmp_path / "out.h5")
    assert not os.path.exists(part)


def test_age_decides_where_there_are_no_locks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    fresh, old = tmp_path / ".out.h5.1.part", tmp_path / ".out.h5.2.part"
    for path in (fresh, old):
        path.write_bytes(b"half")
    os.utime(old, (0.0, 0.0))
    monkeypatch.setattr(fcntl, "flock", fails_with(errno.ENOLCK))
    save(make_estimate(side=4), tmp_path / "out.h5")
    assert sorted(os.listdir(tmp_path)) == [fresh.name, "out.h5"]


def test_part_swept_before_it_was_locked_is_made_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    lock, calls = publish.lock, []

    def swept_first(descriptor: int) -> bool | None:
        calls.append(descriptor)
        if len(calls) == 1:
            for path in tmp_path.iterdir():
                path.unlink()
        return lock(descriptor)

    monkeypatch.setattr(publish, "lock", swept_first)
    descriptor, part = publish.create_part(str(tmp_path), "out.h5")
    os.close(descriptor)
    assert len(calls) == 2
    assert os.listdir(tmp_path) == [os.path.basename(part)]


def test_file_tells_nothing_of_where_it_was_made(tmp_path: Path) -> None:
    estimate = replace(make_estimate(), command=f"perdure run {tmp_path}/a.toml --output={tmp_path}/out.h5 ~/x --quiet")
    save(estimate, tmp_path / "out.h5")
    content = (tmp_path / "out.h5").read_bytes()
    for secret in (str(tmp_path), os.getcwd()):
        assert secret.encode() not in content
    assert load(tmp_path / "out.h5").command == "perdure run a.toml --output=out.h5 x --quiet"


@pytest.mark.parametrize("command", ["", "perdure run a.toml -o 'b c.h5'", "perdure run ../a.toml", "perdure 'x"])
def test_command_without_absolute_paths_is_kept_verbatim(command: str) -> None:
    assert write.without_folders(command) == command
