"""What many tests need: content from seeds, trees of files, damage, and counts taken without oakum."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path

import numpy as np
import pytest

Range = tuple[int, int]


def content(length: int, seed: int = 1) -> bytes:
    """`length` bytes that look random and are the same in every run."""
    return np.random.default_rng([seed, length]).integers(0, 256, length, np.uint8).tobytes()


def plant(folder: Path, files: Mapping[str, bytes]) -> Path:
    """Write files below `folder`; a name that ends in "/" makes an empty folder."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, data in files.items():
        place = folder / name
        if name.endswith("/"):
            place.mkdir(parents=True)
        else:
            place.parent.mkdir(parents=True, exist_ok=True)
            place.write_bytes(data)
    return folder


def snapshot(folder: Path) -> dict[str, bytes | str | None]:
    """Everything below a folder: bytes of files, targets of links, None for folders."""
    found: dict[str, bytes | str | None] = {}
    for path in sorted(folder.rglob("*")):
        name = path.relative_to(folder).as_posix()
        found[name] = (
            os.readlink(path) if path.is_symlink() else path.read_bytes() if path.is_file() else None
        )
    return found


def flipped_bits(a: bytes, b: bytes) -> int:
    """The population count of a XOR b, for strings of one length."""
    assert len(a) == len(b)
    return (int.from_bytes(a, "big") ^ int.from_bytes(b, "big")).bit_count()


def with_flips(data: bytes, count: int, seed: int = 2, within: Range | None = None) -> bytes:
    """`data` with `count` different bits flipped at random places (of bytes `within` only)."""
    start, stop = within or (0, len(data))
    places = np.random.default_rng([seed, count]).choice(8 * (stop - start), count, replace=False)
    out = bytearray(data)
    for place in places.tolist():
        out[start + place // 8] ^= 1 << place % 8
    return bytes(out)


def overwritten(data: bytes, start: int, length: int, seed: int = 3) -> bytes:
    """`data` with `length` bytes from `start` on replaced by others."""
    length = min(length, len(data) - start)
    return data[:start] + content(length, seed) + data[start + length :]


def rewrite(path: Path, data: bytes) -> None:
    """Change a file's content as decay does: permission bits and times stay as they were."""
    before = path.stat()
    mode = before.st_mode & 0o7777
    path.chmod(0o600)
    path.write_bytes(data)
    path.chmod(mode)
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))


class BadSectors:
    """Stands in for `os.preadv` on a medium on which some ranges of some files give a read error.

    As Linux does, a read that begins before a bad place stops there and one that begins in it fails.
    `calls` counts the reads that touched the files.
    """

    def __init__(self, bad: Mapping[Path, Iterable[Range]], code: int = errno.EIO) -> None:
        self._bad = {(s := p.stat()).st_dev * (1 << 64) + s.st_ino: sorted(r) for p, r in bad.items()}
        self._code = code
        self._true: Callable[..., int] = os.preadv
        self.calls = 0

    def __call__(self, fd: int, buffers: list[memoryview], offset: int) -> int:
        found = os.fstat(fd)
        ranges = self._bad.get(found.st_dev * (1 << 64) + found.st_ino)
        if ranges is None:
            return self._true(fd, buffers, offset)
        self.calls += 1
        (buffer,) = buffers
        stop = offset + len(buffer)
        for a, b in ranges:
            if a <= offset < b:
                raise OSError(self._code, os.strerror(self._code))
            if offset < a < stop:
                stop = a
        return self._true(fd, [buffer[: stop - offset]], offset)

    def install(self, monkeypatch: pytest.MonkeyPatch) -> BadSectors:
        """Put it in place until the test ends."""
        monkeypatch.setattr(os, "preadv", self)
        return self


class Memory:
    """Bytes in memory as a sidecar reader's source; ranges in `lost` cannot be read."""

    def __init__(self, data: bytes, lost: Iterable[Range] = ()) -> None:
        self.data = data
        self.lost = list(lost)
        self.size = len(data)

    def read(self, offset: int, length: int) -> tuple[np.ndarray, list[Range]]:
        """uint8[length] from `offset`, zeros where there is nothing, and those places, in order."""
        out = np.zeros(length, np.uint8)
        a, b = min(max(0, -offset), length), max(0, min(length, self.size - offset))
        faults = [(0, a)] if a else []
        if a < b:
            out[a:b] = np.frombuffer(self.data[offset + a : offset + b], np.uint8)
        for start, stop in self.lost:
            start, stop = max(start - offset, a), min(stop - offset, b)
            if start < stop:
                out[start:stop] = 0
                faults.append((start, stop))
        if b < length:
            faults.append((max(a, b), length))
        return out, faults
