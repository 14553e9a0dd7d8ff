"""Files: read errors become ranges, new files appear whole or not at all."""

from __future__ import annotations

import errno
import fcntl
import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from support import BadSectors, content

from oakum.errors import CannotCheck, UsageError
from oakum.files import FileBytes, NewFile, read_into, reason


def read(path: Path, offset: int, length: int) -> tuple[bytes, list[tuple[int, int]]]:
    buffer = bytearray(b"?" * length)
    fd = os.open(path, os.O_RDONLY)
    try:
        faults = read_into(fd, offset, memoryview(buffer))
    finally:
        os.close(fd)
    return bytes(buffer), faults


# -- reading ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("code", [errno.EIO, errno.ENODATA, errno.EREMOTEIO])
def test_a_read_error_is_narrowed_to_its_sectors(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, code: int
) -> None:
    file = tmp_path / "f"
    file.write_bytes(content(50_000))
    BadSectors({file: [(10_240, 10_752), (20_480, 28_672), (49_664, 50_000)]}, code).install(monkeypatch)
    got, faults = read(file, 0, 50_000)
    assert faults == [(10_240, 10_752), (20_480, 28_672), (49_664, 50_000)]
    expected = bytearray(content(50_000))
    for a, b in faults:
        expected[a:b] = bytes(b - a)
    assert got == expected
    assert read(file, 10_300, 500) == (bytes(452) + content(50_000)[10_752:10_800], [(0, 452)])
    assert read(file, 30_000, 100) == (content(50_000)[30_000:30_100], [])


def test_many_pages_in_a_row_are_passed_quickly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A hole of n pages costs a few reads a page, not one for each byte or the whole rest each time."""
    file = tmp_path / "f"
    file.write_bytes(content(1 << 20))
    bad = BadSectors({file: [(1 << 18, 1 << 19)]}).install(monkeypatch)
    assert read(file, 0, 1 << 20)[1] == [(1 << 18, 1 << 19)]
    assert bad.calls <= 10 * 64 + 3


@given(st.lists(st.tuples(st.integers(0, 78), st.integers(1, 20)), max_size=4), st.integers(0, 40_000),
       st.integers(0, 45_000))  # fmt: skip
def test_any_bad_sectors_and_any_range(
    tmp_path_factory: pytest.TempPathFactory, bad: list[tuple[int, int]], offset: int, length: int
) -> None:
    file = tmp_path_factory.mktemp("sectors") / "f"
    data = content(40_000)
    file.write_bytes(data)
    with pytest.MonkeyPatch.context() as patch:
        BadSectors({file: [(512 * a, 512 * (a + n)) for a, n in bad]}).install(patch)
        got, faults = read(file, offset, length)
    lost = {i for a, n in bad for i in range(512 * a, 512 * (a + n))} | set(range(40_000, 90_000))
    assert [i for a, b in faults for i in range(a, b)] == [i for i in range(length) if offset + i in lost]
    assert got == bytes(0 if offset + i in lost else data[offset + i] for i in range(length))


def test_short_reads_are_read_on(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "f").write_bytes(content(5000))
    through = os.preadv
    monkeypatch.setattr(os, "preadv", lambda fd, buffers, at: through(fd, [buffers[0][:7]], at))
    assert read(tmp_path / "f", 3, 4990) == (content(5000)[3:4993], [])


def test_other_errors_are_passed_on(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "f").write_bytes(content(5000))
    BadSectors({tmp_path / "f": [(0, 5000)]}, errno.EBADF).install(monkeypatch)
    with pytest.raises(OSError):
        read(tmp_path / "f", 0, 10)


@given(st.integers(-300, 300), st.integers(0, 600))
def test_a_source_answers_for_every_offset(
    tmp_path_factory: pytest.TempPathFactory, offset: int, length: int
) -> None:
    file = tmp_path_factory.mktemp("source") / "f"
    file.write_bytes(content(200))
    with FileBytes(file) as source:
        assert source.size == 200
        got, faults = source.read(offset, length)
    there = [0 <= offset + i < 200 for i in range(length)]
    assert got.tobytes() == bytes(content(200)[offset + i] if there[i] else 0 for i in range(length))
    assert [i for a, b in faults for i in range(a, b)] == [i for i in range(length) if not there[i]]
    assert all(a < b for a, b in faults)


@pytest.mark.parametrize("missing", ["O_DIRECT", "open", "preadv"])
def test_what_cannot_be_read_past_the_cache_is_read_through_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, missing: str
) -> None:
    """No such flag, a file system that refuses it, an error in such a read: the bytes come all the same."""
    (tmp_path / "f").write_bytes(content(3 << 20))
    monkeypatch.setattr("oakum.pagecache.is_passing_through", lambda fd: True)
    direct, true_open, true_read = os.O_DIRECT, os.open, os.preadv
    if missing == "O_DIRECT":
        monkeypatch.delattr(os, "O_DIRECT")

    def opening(path: Path, flags: int) -> int:
        if missing == "open" and flags & direct:
            raise OSError(errno.EINVAL, "invalid argument")
        return true_open(path, flags)

    def reading(fd: int, buffers: list[memoryview], offset: int) -> int:
        if missing == "preadv" and fcntl.fcntl(fd, fcntl.F_GETFL) & direct:
            raise OSError(errno.EIO, "input/output error")
        return true_read(fd, buffers, offset)

    monkeypatch.setattr(os, "open", opening)
    monkeypatch.setattr(os, "preadv", reading)
    with FileBytes(tmp_path / "f") as source:
        found, faults = source.read(5000, 2 << 20)
    assert (found.tobytes(), faults) == (content(3 << 20)[5000 : 5000 + (2 << 20)], [])


def test_sources_that_are_none(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(CannotCheck, match="cannot be opened: no such file"):
        FileBytes(tmp_path / "nothing")
    for place in (tmp_path, tmp_path / "pipe"):
        with pytest.raises(CannotCheck, match="is not a file"):
            FileBytes(place)


# -- writing ---------------------------------------------------------------------------------------


def test_a_new_file_appears_whole(tmp_path: Path) -> None:
    with NewFile(tmp_path / "f") as file:
        file.write(4, b"5678")
        assert not (tmp_path / "f").exists()
        file.write(0, b"1234")
        assert file.read(2, 4) == b"3456"
        file.commit(8, mode=0o640, modified_ns=10**18 + 7)
    assert (tmp_path / "f").read_bytes() == b"12345678"
    found = (tmp_path / "f").stat()
    assert (found.st_mode & 0o777, found.st_mtime_ns) == (0o640, 10**18 + 7)
    assert os.listdir(tmp_path) == ["f"]


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt])
def test_without_commit_nothing_is_left(tmp_path: Path, error: type[BaseException]) -> None:
    before = len(os.listdir("/proc/self/fd"))
    with pytest.raises(error), NewFile(tmp_path / "f") as file:
        file.write(0, b"1")
        raise error
    with NewFile(tmp_path / "f") as file:
        file.write(0, b"1")
        file.park()
    assert os.listdir(tmp_path) == []
    assert len(os.listdir("/proc/self/fd")) == before


def test_a_wrong_length_is_no_commit(tmp_path: Path) -> None:
    with pytest.raises(CannotCheck, match="its length is not"), NewFile(tmp_path / "f") as file:
        file.write(0, b"123")
        file.commit(4)
    assert os.listdir(tmp_path) == []


def test_an_existing_file_is_refused_at_once_and_at_the_end(tmp_path: Path) -> None:
    (tmp_path / "f").write_bytes(b"mine")
    with pytest.raises(UsageError, match="f exists already; .* give --overwrite"):
        NewFile(tmp_path / "f")
    with pytest.raises(UsageError, match="f exists already; go away"):
        NewFile(tmp_path / "f", advice="go away")
    with pytest.raises(UsageError, match="g exists already"), NewFile(tmp_path / "g") as file:
        (tmp_path / "g").write_bytes(b"came in between")
        file.write(0, b"1")
        file.commit(1)
    (tmp_path / "dangling").symlink_to("nowhere")
    with pytest.raises(UsageError, match="exists already"):
        NewFile(tmp_path / "dangling")
    assert (tmp_path / "f").read_bytes() == b"mine"
    assert (tmp_path / "g").read_bytes() == b"came in between"
    assert sorted(os.listdir(tmp_path)) == ["dangling", "f", "g"]


def test_overwriting_keeps_the_old_one_until_the_end(tmp_path: Path) -> None:
    (tmp_path / "f").write_bytes(b"old")
    with NewFile(tmp_path / "f", overwrite=True) as file:
        file.write(0, b"newer")
        assert (tmp_path / "f").read_bytes() == b"old"
        file.commit(5)
    assert (tmp_path / "f").read_bytes() == b"newer"
    with NewFile(tmp_path / "f", overwrite=True) as file:
        file.write(0, b"x")
    assert (tmp_path / "f").read_bytes() == b"newer"


def test_a_file_system_without_hard_links(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object, **__: object) -> None:
        raise OSError(errno.EPERM, "Operation not permitted")

    monkeypatch.setattr(os, "link", refuse)
    with NewFile(tmp_path / "f") as file:
        file.write(0, b"1")
        file.commit(1)
    with pytest.raises(UsageError, match="exists already"), NewFile(tmp_path / "g") as file:
        (tmp_path / "g").write_bytes(b"mine")
        file.commit(0)
    assert sorted(os.listdir(tmp_path)) == ["f", "g"]
    assert (tmp_path / "g").read_bytes() == b"mine"


def test_parked_files_go_on_where_they_were(tmp_path: Path) -> None:
    files = [NewFile(tmp_path / f"{i}") for i in range(50)]
    before = len(os.listdir("/proc/self/fd"))
    for i, file in enumerate(files):
        file.write(0, b"%03d" % i)
        file.park()
    assert len(os.listdir("/proc/self/fd")) == before - 100
    for i, file in enumerate(files):
        file.write(3, b"!")
        assert file.read(0, 4) == b"%03d!" % i
        file.commit(4)
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == {f"{i}": b"%03d!" % i for i in range(50)}


def test_where_nothing_can_be_written(tmp_path: Path) -> None:
    (tmp_path / "file").write_bytes(b"")
    for place in (tmp_path / "no/f", tmp_path / "file/f"):
        with pytest.raises(CannotCheck, match="cannot be written"):
            NewFile(place)


def test_a_medium_that_does_not_take_it(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object) -> None:
        raise OSError(errno.EIO, "Input/output error")

    refused = pytest.raises(CannotCheck, match="could not be written: input/output error")
    with refused, NewFile(tmp_path / "f") as file, monkeypatch.context() as patch:
        patch.setattr(os, "fsync", fail)
        file.write(0, b"1")
        file.commit(1)
    assert os.listdir(tmp_path) == []


def test_long_names(tmp_path: Path) -> None:
    name = "n" * 255
    with NewFile(tmp_path / name) as file:
        file.commit(0)
    assert os.listdir(tmp_path) == [name]


def test_reasons_are_plain() -> None:
    assert reason(OSError(errno.ENOSPC, "x")) == "no space left on device"
    assert reason(OSError("Something odd")) == "something odd"
