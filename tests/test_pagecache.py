"""Large files leave the page cache as it was found. Asked of the system itself, by mincore(2)."""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from support import content

from oakum import files, pagecache, protect, verify
from oakum.encoding import RESERVE
from oakum.files import FileBytes, NewFile

pytestmark = pytest.mark.skipif(sys.platform != "linux", reason="asks Linux")

SIZE = 3_000_000


@pytest.fixture
def file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A file that counts as large; skipped where a file system (one in memory) drops nothing."""
    monkeypatch.setattr(pagecache, "LARGE", 1 << 20)
    path = tmp_path / "f"
    path.write_bytes(content(SIZE))
    forget(path)
    if cached(path):
        pytest.skip("this file system keeps files in memory")
    yield path


def forget(path: Path) -> None:
    """Drop a file from the cache, which takes that it is on the medium."""
    fd = os.open(path, os.O_RDWR)
    os.fsync(fd)
    os.posix_fadvise(fd, 0, 0, os.POSIX_FADV_DONTNEED)
    os.close(fd)


def cached(path: Path) -> int:
    """Of 64 pages, how many are in the cache."""
    fd = os.open(path, os.O_RDONLY)
    found = pagecache.resident(fd, path.stat().st_size)
    os.close(fd)
    assert found is not None
    return found


JOBS: list[Callable[[Path], object]] = [
    lambda path: protect([path], overwrite=True),
    lambda path: protect([path], overwrite=True, depth=8192),
    lambda path: protect([path], overwrite=True, memory=RESERVE + (1 << 20)),
    lambda path: verify(path),
    lambda path: verify(path, digests_only=True),
]


@pytest.mark.parametrize("job", JOBS)
def test_a_file_that_was_not_in_the_cache_is_not_left_there(
    file: Path, job: Callable[[Path], object]
) -> None:
    protect([file])
    forget(file)
    job(file)
    assert cached(file) == 0


@pytest.mark.parametrize("job", JOBS)
def test_a_file_that_was_in_the_cache_stays_there(file: Path, job: Callable[[Path], object]) -> None:
    protect([file])
    file.read_bytes()
    job(file)
    assert cached(file) == pagecache.SAMPLES


def test_a_file_that_was_partly_there_is_left_alone(file: Path) -> None:
    with file.open("rb") as opened:
        opened.read(SIZE // 2)
    assert cached(file) > pagecache.SAMPLES // 4
    protect([file])
    assert cached(file) > pagecache.SAMPLES // 4


def test_small_files_are_nobody_s_business(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(pagecache, "LARGE", SIZE + 1)
    protect([file])
    assert cached(file) == pagecache.SAMPLES


@pytest.mark.parametrize("call", ["posix_fadvise", "fstat"])
def test_advice_that_is_not_taken_costs_nothing(
    file: Path, monkeypatch: pytest.MonkeyPatch, call: str
) -> None:
    def refuse(*_: object) -> None:
        raise OSError(38, "not implemented")

    fd = os.open(file, os.O_RDONLY)
    monkeypatch.setattr(os, call, refuse)
    passing = pagecache.is_passing_through(fd)
    pagecache.fetch(fd, 0, 100)
    pagecache.drop(fd)
    monkeypatch.undo()
    os.close(fd)
    assert passing is False or call == "posix_fadvise"


def test_systems_without_these_calls(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(pagecache, "_libc", lambda: None)
    assert verify_after_protect(file)
    assert cached_without_libc(file) is None


def verify_after_protect(path: Path) -> bool:
    protect([path], overwrite=True)
    return verify(path).outcome.value == "intact"


def cached_without_libc(path: Path) -> int | None:
    fd = os.open(path, os.O_RDONLY)
    try:
        return pagecache.resident(fd, SIZE)
    finally:
        os.close(fd)


def test_large_files_are_written_behind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, file: Path) -> None:
    """Of a large file that is written little stays in the cache, and what was written is what is read."""
    monkeypatch.setattr(files, "WRITE_BEHIND", 1 << 18)
    data = content(1 << 18)
    with NewFile(tmp_path / "n") as new:
        for i in range(64):
            new.write(i * len(data), data)
        new.commit(64 * len(data))
    assert cached(tmp_path / "n") < pagecache.SAMPLES
    assert (tmp_path / "n").read_bytes() == 64 * data


def test_a_large_sidecar_is_read_past_the_cache(file: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The same bytes at any place and length; where it cannot be done, the usual way."""
    data = file.read_bytes()
    for refuse in (False, True):
        forget(file)
        with FileBytes(file) as source:
            if refuse:
                monkeypatch.setattr(files, "_read_directly", lambda *_: None)
            for offset, length in [
                (0, 1 << 20),
                (4097, 1_500_001),
                (SIZE - (1 << 20), 1 << 20),
                (7, SIZE - 7),
            ]:
                found, faults = source.read(offset, length)
                assert found.tobytes() == data[offset : offset + length]
                assert not faults
            found, faults = source.read(SIZE - (1 << 20), 2 << 20)
            assert faults == [(1 << 20, 2 << 20)]
            if not refuse:
                assert cached(file) < pagecache.SAMPLES
        assert cached(file) == 0
