"""The writer of new files and its locks, where others are at work on the same names."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable
from contextlib import ExitStack
from pathlib import Path
from typing import Any

import pytest

from oakum.errors import CannotCheck
from oakum.files import Lock, NewFile, room_in, temporary_name, try_lock


def failing(name: str, code: int, *, only: Callable[..., bool] = lambda *a: True) -> Callable[..., Any]:
    """A function of `os` that fails where `only` says so."""
    true = getattr(os, name)

    def call(*args: Any, **options: Any) -> Any:
        if only(*args):
            raise OSError(code, os.strerror(code))
        return true(*args, **options)

    return call


def test_what_a_dead_run_left_behind_is_taken_away(tmp_path: Path) -> None:
    leftover = tmp_path / os.fsdecode(temporary_name(b"f"))
    leftover.write_bytes(b"half of it")
    with NewFile(tmp_path / "f") as file:
        file.write(0, b"whole")
        file.commit(5)
    assert (tmp_path / "f").read_bytes() == b"whole"
    assert os.listdir(tmp_path) == ["f"]


def test_what_a_living_run_writes_is_left_alone(tmp_path: Path) -> None:
    with NewFile(tmp_path / "f") as file:
        file.write(0, b"mine")
        for _ in range(2):
            with pytest.raises(CannotCheck, match="another run is writing"):
                NewFile(tmp_path / "f")
        file.commit(4)
    assert os.listdir(tmp_path) == ["f"]


def test_a_parked_file_that_another_run_took(tmp_path: Path) -> None:
    """A parked file is not locked; who comes back to it sees that it is another's, and leaves it alone."""
    file = NewFile(tmp_path / "f")
    file.park()
    with NewFile(tmp_path / "f") as other:
        other.write(0, b"theirs")
        with pytest.raises(CannotCheck, match="another run is writing"):
            file.write(0, b"mine")
        file.discard()
        other.commit(6)
    assert (tmp_path / "f").read_bytes() == b"theirs"
    assert os.listdir(tmp_path) == ["f"]


def test_a_file_whose_name_was_taken_while_it_was_open(tmp_path: Path) -> None:
    """As on a file system without locks: the wrong file never gets the name."""
    part = tmp_path / os.fsdecode(temporary_name(b"f"))
    with pytest.raises(CannotCheck, match="another run is writing"), NewFile(tmp_path / "f") as file:
        part.unlink()
        part.write_bytes(b"theirs")
        file.commit(0)
    assert part.read_bytes() == b"theirs"
    assert not (tmp_path / "f").exists()


def test_a_file_that_was_taken_away_while_it_was_open(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="another run is writing"), NewFile(tmp_path / "f") as file:
        (tmp_path / os.fsdecode(temporary_name(b"f"))).unlink()
        file.commit(0)
    assert os.listdir(tmp_path) == []


def test_a_parked_file_that_cannot_be_opened_for_a_while(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """As when too many files are open: what was written before is not lost by it."""
    with NewFile(tmp_path / "f") as file:
        file.write(0, b"one ")
        file.park()
        with monkeypatch.context() as patch:
            patch.setattr(
                os, "open", failing("open", errno.EMFILE, only=lambda name, *_: b"part" in os.fsencode(name))
            )
            with pytest.raises(CannotCheck, match="too many open files"):
                file.write(4, b"two")
        file.write(4, b"two")
        file.commit(7)
    assert (tmp_path / "f").read_bytes() == b"one two"


def test_a_lock_that_comes_too_late(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Somebody locks the temporary file between its making and our lock."""
    monkeypatch.setattr("oakum.files.try_lock", lambda fd, alone=True: False)
    with pytest.raises(CannotCheck, match="another run is writing"):
        NewFile(tmp_path / "f")
    with pytest.raises(CannotCheck, match="another run is at work"):
        Lock(Path(__file__))
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("name", ["pwrite", "ftruncate", "pread", "fstat", "dup", "fchmod", "utime", "fsync"])
def test_every_failure_is_one_sentence(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, name: str) -> None:
    with ExitStack() as stack:
        stack.enter_context(pytest.raises(CannotCheck, match="f c.*: input/output error"))
        patch = stack.enter_context(monkeypatch.context())
        if name == "fstat":
            patch.setattr(os, name, failing(name, errno.EIO))
        with NewFile(tmp_path / "f") as file:
            patch.setattr(os, name, failing(name, errno.EIO))
            file.write(0, b"1")
            file.resize(1)
            file.read(0, 1)
            file.sync()
            file.commit(1, mode=0o600, modified_ns=1)
    assert os.listdir(tmp_path) == []


def test_what_cannot_be_read_back(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="cannot be read back"), NewFile(tmp_path / "f") as file:
        file.write(0, b"123")
        file.read(1, 3)


def test_a_signal_while_it_is_made(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Python runs a handler when `open` has come back, before its result is kept anywhere."""
    true = os.open

    def interrupted(path: Any, flags: int, *args: Any, **options: Any) -> int:
        fd = true(path, flags, *args, **options)
        if flags & os.O_CREAT:
            raise KeyboardInterrupt
        return fd

    monkeypatch.setattr(os, "open", interrupted)
    with pytest.raises(KeyboardInterrupt):
        NewFile(tmp_path / "f")
    assert os.listdir(tmp_path) == []


def test_a_file_that_nobody_took_hold_of(tmp_path: Path) -> None:
    NewFile(tmp_path / "f")
    assert os.listdir(tmp_path) == []


def test_owner_and_names(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "fchown", failing("fchown", errno.EPERM))
    with NewFile(tmp_path / "f") as file:
        file.commit(0, owner=(0, 0))
    names = {temporary_name(b"n" * 230), temporary_name(b"n" * 231), temporary_name(b"n" * 230 + b"m")}
    assert len(names) == 3 and max(map(len, names)) <= 255
    assert room_in(tmp_path) > 0


def test_a_file_that_may_not_be_written_is_locked_for_reading(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Two such locks get along; one for writing gets along with none."""
    path = tmp_path / "f"
    path.write_bytes(b"")
    writing = lambda place, flags, *_: flags & os.O_RDWR  # noqa: E731
    with monkeypatch.context() as patch:
        patch.setattr(os, "open", failing("open", errno.EROFS, only=writing))
        with Lock(path), Lock(path):
            patch.undo()
            with pytest.raises(CannotCheck, match="another run is at work"):
                Lock(path)
    lock = Lock(path)
    lock.release()
    lock.release()
    for code in (errno.EIO, errno.ENOENT):
        with monkeypatch.context() as patch:
            patch.setattr(os, "open", failing("open", code, only=writing))
            with pytest.raises(CannotCheck, match="cannot be opened"):
                Lock(path)


def test_a_file_that_is_replaced_while_it_is_opened(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "f"
    path.write_bytes(b"old")
    true, swapped = os.open, False

    def swap(place: Any, *args: Any, **options: Any) -> int:
        nonlocal swapped
        fd = true(place, *args, **options)
        if not swapped:
            swapped = True
            (tmp_path / "g").write_bytes(b"new")
            os.rename(tmp_path / "g", path)
        return fd

    with monkeypatch.context() as patch:
        patch.setattr(os, "open", swap)
        lock = Lock(path)
    with pytest.raises(CannotCheck, match="another run"):
        Lock(path)
    lock.release()


def test_a_file_system_without_locks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def unknown(*_: object) -> None:
        raise OSError(errno.ENOLCK, os.strerror(errno.ENOLCK))

    monkeypatch.setattr("fcntl.fcntl", unknown)
    fd = os.open(tmp_path, os.O_RDONLY)
    assert try_lock(fd)
    os.close(fd)
