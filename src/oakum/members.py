"""A set of files as one stream of bytes, in a fixed order; what cannot be read becomes erasures."""

from __future__ import annotations

import errno
import hashlib
import os
import stat
import threading
from bisect import bisect_right
from collections import Counter, OrderedDict
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from itertools import accumulate
from pathlib import Path
from typing import Protocol

from oakum.errors import CannotCheck, UsageError
from oakum.files import Fault, let_go, read_into, reason
from oakum.sidecar.table import Kind

OPEN_FILES = 64


@dataclass(frozen=True)
class Member:
    """What is recorded of one file, folder or link. `path` is relative to the root, raw bytes."""

    kind: Kind
    path: bytes
    size: int
    mode: int
    modified_ns: int
    target: bytes = b""


def collect(paths: Sequence[Path], root: Path) -> tuple[list[Member], list[str]]:
    """The members that `paths` (below `root`) stand for, in order, and notes on what was left out.

    Folders come before what is in them, names in the order of their bytes; links are recorded and never
    followed. Raises UsageError for a path named twice, CannotCheck for one that cannot be read.
    """
    members: list[Member] = []
    notes: list[str] = []
    for path in paths:
        if path.exists() and not (path.is_file() or path.is_dir() or path.is_symlink()):
            raise UsageError(
                f"{path} is neither a file, a folder nor a link; name something that can be kept"
            )
        absolute = os.fsencode(path)
        _walk(absolute, os.path.relpath(absolute, os.fsencode(root)), members, notes)
    if len({m.path for m in members}) != len(members):
        raise UsageError("a path was given twice, or a folder and something inside it; name each file once")
    return members, notes


def _walk(path: bytes, relative: bytes, members: list[Member], notes: list[str]) -> None:
    """Append what `path` stands for; its path in the set is `relative`."""
    try:
        found = os.lstat(path)
        if stat.S_ISREG(found.st_mode):
            members.append(_member(Kind.FILE, relative, found, found.st_size))
        elif stat.S_ISLNK(found.st_mode):
            members.append(_member(Kind.LINK, relative, found, 0, os.readlink(path)))
        elif stat.S_ISDIR(found.st_mode):
            members.append(_member(Kind.FOLDER, relative, found, 0))
            for name in sorted(os.listdir(path)):
                _walk(path + b"/" + name, relative + b"/" + name, members, notes)
        else:
            notes.append(f"{os.fsdecode(path)} is neither a file, a folder nor a link and is not protected")
    except OSError as error:
        raise CannotCheck(f"{os.fsdecode(path)} cannot be read: {reason(error)}") from None


def _member(kind: Kind, path: bytes, found: os.stat_result, size: int, target: bytes = b"") -> Member:
    return Member(kind, path, size, stat.S_IMODE(found.st_mode), found.st_mtime_ns, target)


class Folder:
    """A root folder below which members are opened; no component of a path is ever followed as a link."""

    def __init__(self, root: Path) -> None:
        """Open the folder. Raises CannotCheck when it is not there."""
        try:
            self._fd = os.open(root, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        except OSError as error:
            raise CannotCheck(f"the folder {root} cannot be opened: {reason(error)}") from None
        self.root = root
        self._parent: tuple[bytes, int] | None = None
        self._lock = threading.Lock()

    def open(self, path: bytes) -> int:
        """A descriptor for reading the file at `path`. Raises OSError (ELOOP where a link is in the way)."""
        parent, name = os.path.split(path)
        with self._lock:
            return os.open(
                name, os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK, dir_fd=self._enter(parent)
            )

    def stat(self, path: bytes) -> os.stat_result:
        """What is at `path`, links not followed. Raises OSError."""
        parent, name = os.path.split(path)
        with self._lock:
            return os.stat(name, dir_fd=self._enter(parent), follow_symlinks=False)

    def readlink(self, path: bytes) -> bytes:
        """The target of the link at `path`. Raises OSError."""
        parent, name = os.path.split(path)
        with self._lock:
            return os.readlink(name, dir_fd=self._enter(parent))

    def _enter(self, parent: bytes) -> int:
        """A descriptor of the folder `parent`; the last one is kept."""
        if not parent:
            return self._fd
        if self._parent is not None and self._parent[0] == parent:
            return self._parent[1]
        fd = open_folder(self._fd, parent)
        if self._parent is not None:
            let_go(self._parent[1])
        self._parent = (parent, fd)
        return fd

    def close(self) -> None:
        """Close all descriptors."""
        if self._parent is not None:
            let_go(self._parent[1])
            self._parent = None
        let_go(self._fd)


def open_folder(root: int, path: bytes, *, made: list[bytes] | None = None) -> int:
    """A descriptor of the folder at `path` below the open folder `root`, part by part, links not followed.

    With `made`, parts that are missing are made, and their paths appended to it. Raises OSError.
    """
    flags = os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC | os.O_NOFOLLOW
    fd = os.dup(root)
    try:
        so_far = b""
        for part in filter(None, path.split(b"/")):
            so_far = os.path.join(so_far, part)
            if made is not None:
                with suppress(FileExistsError):
                    os.mkdir(part, dir_fd=fd)
                    made.append(so_far)
            below = os.open(part, flags, dir_fd=fd)
            let_go(fd)
            fd = below
    except BaseException:
        let_go(fd)
        raise
    return fd


@dataclass(frozen=True)
class Span:
    """A piece of a member that is part of a stream."""

    path: bytes
    offset: int
    length: int


class Opener(Protocol):
    """Opens members by their paths."""

    def open(self, path: bytes) -> int:
        """A descriptor for reading the member at `path`. Raises OSError."""


class Stream(Protocol):
    """Bytes of a window by their offset in it."""

    def read_into(self, offset: int, buffer: memoryview) -> list[Fault]:
        """Fill `buffer`; what could not be read is zero and its ranges (in `buffer`) are returned."""

    def fetch(self, offset: int, length: int) -> None:
        """Let the system know that these bytes will be asked for soon."""


class MemberStream:
    """The spans of many members end to end. May be read from several threads."""

    def __init__(
        self, folder: Opener, spans: Sequence[Span], known_bad: Sequence[tuple[int, int]] = ()
    ) -> None:
        """`known_bad`: ranges (start, stop) of the stream that must not even be tried."""
        self._folder = folder
        self._spans = [s for s in spans if s.length]
        self._starts = list(accumulate((s.length for s in self._spans), initial=0))
        self._known_bad = _joined(known_bad)
        self._open: OrderedDict[bytes, int | None] = OrderedDict()
        self._users: Counter[bytes] = Counter()
        self._lock = threading.Lock()

    @property
    def length(self) -> int:
        """Bytes of the whole stream."""
        return self._starts[-1]

    def read_into(self, offset: int, buffer: memoryview) -> list[Fault]:
        """See `Stream`. Bytes past the end of the stream are zeros and no fault: they are virtual."""
        faults: list[Fault] = []
        done = 0
        for start, stop in self._known_bad:
            a, b = max(start - offset, 0), min(stop - offset, len(buffer))
            if a < b:
                faults += self._try(offset, buffer, done, a)
                faults.append((a, b))
                buffer[a:b] = bytes(b - a)
                done = b
        return faults + self._try(offset, buffer, done, len(buffer))

    def _try(self, offset: int, buffer: memoryview, start: int, stop: int) -> list[Fault]:
        """Read the bytes start..stop-1 of `buffer`, none of which is known to be bad."""
        faults = self._read_spans(offset + start, buffer[start:stop])
        return [(start + a, start + b) for a, b in faults]

    def _read_spans(self, offset: int, buffer: memoryview) -> list[Fault]:
        faults: list[Fault] = []
        done = 0
        number = bisect_right(self._starts, offset) - 1
        while done < len(buffer) and number < len(self._spans):
            span = self._spans[number]
            inside = offset + done - self._starts[number]
            size = min(len(buffer) - done, span.length - inside)
            missing = self._read_member(span.path, span.offset + inside, buffer[done : done + size])
            faults += [(done + a, done + b) for a, b in missing]
            done += size
            number += 1
        buffer[done:] = bytes(len(buffer) - done)
        return faults

    def _read_member(self, path: bytes, offset: int, buffer: memoryview) -> list[Fault]:
        with self._lock:
            fd = self._descriptor(path)
            self._users[path] += 1
        try:
            if fd is None:
                buffer[:] = bytes(len(buffer))
                return [(0, len(buffer))]
            return read_into(fd, offset, buffer)
        except OSError as error:
            raise CannotCheck(f"{os.fsdecode(path)} cannot be read: {reason(error)}") from None
        finally:
            with self._lock:
                self._users[path] -= 1
                self._close_some()

    def _descriptor(self, path: bytes) -> int | None:
        """An open descriptor of a member; None when there is no such file (which is remembered)."""
        if path in self._open:
            self._open.move_to_end(path)
            return self._open[path]
        try:
            fd: int | None = self._folder.open(path)
        except OSError as error:
            if error.errno not in (errno.ENOENT, errno.ENOTDIR, errno.ELOOP, errno.ENXIO, errno.EIO):
                raise CannotCheck(f"{os.fsdecode(path)} cannot be opened: {reason(error)}") from None
            fd = None
        if fd is not None and not stat.S_ISREG(os.fstat(fd).st_mode):
            let_go(fd)
            fd = None
        self._open[path] = fd
        return fd

    def _close_some(self) -> None:
        """Close the member that was not used for longest, when too many are open and nobody reads it."""
        if len(self._open) <= OPEN_FILES:
            return
        oldest = next(iter(self._open))
        if not self._users[oldest]:
            fd = self._open.pop(oldest)
            del self._users[oldest]
            if fd is not None:
                let_go(fd)

    def fetch(self, offset: int, length: int) -> None:
        """See `Stream`. Only of a member that is open already: opening others ahead would cost more."""
        number = bisect_right(self._starts, offset) - 1
        if not hasattr(os, "posix_fadvise") or not 0 <= number < len(self._spans):
            return
        span = self._spans[number]
        with self._lock:
            fd = self._open.get(span.path)
            if fd is not None:
                inside = span.offset + offset - self._starts[number]
                os.posix_fadvise(fd, inside, length, os.POSIX_FADV_WILLNEED)

    def forget(self) -> None:
        """Let the system drop what it keeps of open members, so that they are read from the medium again."""
        if hasattr(os, "posix_fadvise"):
            with self._lock:
                for fd in self._open.values():
                    if fd is not None:
                        os.posix_fadvise(fd, 0, 0, os.POSIX_FADV_DONTNEED)

    def path_at(self, offset: int) -> bytes:
        """The member that holds byte `offset` of the stream."""
        return self._spans[bisect_right(self._starts, offset) - 1].path

    def close(self) -> None:
        """Close all open members."""
        for fd in self._open.values():
            if fd is not None:
                let_go(fd)
        self._open.clear()


def _joined(ranges: Sequence[tuple[int, int]]) -> list[tuple[int, int]]:
    """Ranges in order, those that overlap or touch made one."""
    joined: list[tuple[int, int]] = []
    for start, stop in sorted(ranges):
        if joined and start <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(stop, joined[-1][1]))
        else:
            joined.append((start, stop))
    return joined


class MemberHasher:
    """SHA-256 of members whose bytes come in order, span by span."""

    def __init__(self) -> None:
        self._spans: list[Span] = []
        self._digests: list[bytes] = []
        self._current = hashlib.sha256()
        self._path: bytes | None = None
        self._left = 0

    def expect(self, spans: Sequence[Span]) -> None:
        """Announce the spans whose bytes come next; the digests of earlier ones are forgotten."""
        self._spans = list(spans)
        self._digests = []
        self._begin()

    def _begin(self) -> None:
        """Step to the next span that has bytes; empty ones are done at once."""
        while len(self._digests) < len(self._spans):
            span = self._spans[len(self._digests)]
            if span.offset == 0 or span.path != self._path:
                self._current = hashlib.sha256()
                self._path = span.path
            self._left = span.length
            if span.length:
                return
            self._digests.append(self._current.digest())

    def update(self, data: memoryview) -> None:
        """The next bytes of the stream."""
        while data:
            part = data[: self._left]
            self._current.update(part)
            data = data[len(part) :]
            self._left -= len(part)
            if not self._left:
                self._digests.append(self._current.digest())
                self._begin()

    @property
    def digests(self) -> list[bytes]:
        """One digest a span: SHA-256 of its member from the first byte to the end of the span."""
        return self._digests
