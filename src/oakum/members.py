"""A set of files as one stream of bytes, in a fixed order; what cannot be read becomes erasures."""

from __future__ import annotations

import errno
import hashlib
import os
import stat
import threading
from array import array
from bisect import bisect_left, bisect_right
from collections import Counter, OrderedDict
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import suppress
from itertools import accumulate
from pathlib import Path
from typing import NamedTuple, Protocol

from oakum import pagecache, throttle
from oakum.errors import CannotCheck, UsageError
from oakum.files import Fault, aligned, let_go, read_into, reason
from oakum.sidecar.table import Kind, Piece

OPEN_FILES = 64

_FILE = os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK
_FOLDER = os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_DIRECTORY

DIGEST = 32
"""Bytes of a SHA-256."""

SMALL = 64 << 10
"""Bytes up to which a member is opened, read, hashed and closed in one go."""


PIECE = 8 << 20
"""Bytes of a member that are read at a time where it is read alone."""


def collect(paths: Sequence[Path], root: Path) -> tuple[list[Piece], list[str]]:
    """The members that `paths` (below `root`) stand for, as whole, and notes on what was left out.

    Folders come before what is in them, names in the order of their bytes; links are recorded and never
    followed. Raises UsageError for a path named twice, CannotCheck for one that cannot be read.
    """
    members: list[Piece] = []
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


def _walk(path: bytes, relative: bytes, members: list[Piece], notes: list[str]) -> None:
    """Append what `path` stands for; its path in the set is `relative`."""
    try:
        found = os.lstat(path)
        if stat.S_ISREG(found.st_mode):
            members.append(_member(Kind.FILE, relative, found, found.st_size))
        elif stat.S_ISLNK(found.st_mode):
            members.append(_member(Kind.LINK, relative, found, 0)._replace(target=os.readlink(path)))
        elif stat.S_ISDIR(found.st_mode):
            members.append(_member(Kind.FOLDER, relative, found, 0))
            for name in sorted(os.listdir(path)):
                _walk(path + b"/" + name, relative + b"/" + name, members, notes)
        else:
            notes.append(f"{os.fsdecode(path)} is neither a file, a folder nor a link and is not protected")
    except OSError as error:
        raise CannotCheck(f"{os.fsdecode(path)} cannot be read: {reason(error)}") from None


def _member(kind: Kind, path: bytes, found: os.stat_result, size: int) -> Piece:
    return Piece(kind, path, stat.S_IMODE(found.st_mode), found.st_mtime_ns, size, 0, size, True)


class Folder:
    """A root folder below which members are opened; no component of a path is ever followed as a link."""

    def __init__(self, root: Path) -> None:
        """Open the folder. Raises CannotCheck when it is not there."""
        try:
            self._fd = os.open(root, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        except OSError as error:
            raise CannotCheck(f"the folder {root} cannot be opened: {reason(error)}") from None
        self.root = root
        self._parent, self._entered = b"", self._fd
        """The folder that was entered last; most members lie in the one of their neighbours."""

        self._lock = threading.Lock()

    def open(self, path: bytes) -> int:
        """A descriptor for reading the file at `path`. Raises OSError (ELOOP where a link is in the way)."""
        parent, _, name = path.rpartition(b"/")
        with self._lock:
            if parent != self._parent:
                self._enter(parent)
            return os.open(name, _FILE, dir_fd=self._entered)

    def stat(self, path: bytes) -> os.stat_result:
        """What is at `path`, links not followed. Raises OSError."""
        parent, _, name = path.rpartition(b"/")
        with self._lock:
            if parent != self._parent:
                self._enter(parent)
            return os.stat(name, dir_fd=self._entered, follow_symlinks=False)

    def readlink(self, path: bytes) -> bytes:
        """The target of the link at `path`. Raises OSError."""
        parent, _, name = path.rpartition(b"/")
        with self._lock:
            if parent != self._parent:
                self._enter(parent)
            return os.readlink(name, dir_fd=self._entered)

    def _enter(self, parent: bytes) -> None:
        """Keep a descriptor of the folder `parent` instead of the one before."""
        fd = open_folder(self._fd, parent) if parent else self._fd
        left, self._parent, self._entered = self._entered, parent, fd
        if left != self._fd:
            let_go(left)

    def close(self) -> None:
        """Close all descriptors."""
        self._enter(b"")
        let_go(self._fd)


def open_folder(root: int, path: bytes, *, made: list[bytes] | None = None) -> int:
    """A descriptor of the folder at `path` below the open folder `root`, part by part, links not followed.

    With `made`, parts that are missing are made, and their paths appended to it. Raises OSError.
    """
    fd = os.dup(root)
    try:
        so_far = b""
        for part in filter(None, path.split(b"/")):
            so_far = os.path.join(so_far, part)
            if made is not None:
                with suppress(FileExistsError):
                    os.mkdir(part, dir_fd=fd)
                    made.append(so_far)
            below = os.open(part, _FOLDER, dir_fd=fd)
            let_go(fd)
            fd = below
    except BaseException:
        let_go(fd)
        raise
    return fd


class Span(NamedTuple):
    """A piece of a member that is part of a stream."""

    path: bytes
    offset: int
    length: int


Part = Span | Piece
"""What is read of a member: an entry of the member table says it too."""


class Opener(Protocol):
    """Opens members by their paths."""

    def open(self, path: bytes) -> int:
        """A descriptor for reading the member at `path`. Raises OSError."""


class Stream(Protocol):
    """Bytes of a window by their offset in it."""

    def read_into(self, offset: int, buffer: memoryview, hasher: MemberHasher | None = None) -> list[Fault]:
        """Fill `buffer`; what could not be read is zero and its ranges (in `buffer`) are returned.

        Small members that the buffer holds as a whole may be given to `hasher` on the way.
        """

    def fetch(self, offset: int, length: int) -> None:
        """Let the system know that these bytes will be asked for soon."""


class OpenStream(Protocol):
    """The bytes of members end to end, to be closed when done."""

    def read_into(self, offset: int, buffer: memoryview, hasher: MemberHasher | None = None) -> list[Fault]:
        """See `Stream`."""

    def close(self) -> None:
        """Close all members."""


class MemberStream:
    """The spans of many members end to end. May be read from several threads."""

    def __init__(
        self,
        folder: Opener,
        spans: Sequence[Part],
        known_bad: Sequence[tuple[int, int]] = (),
        *,
        once: bool = False,
    ) -> None:
        """`known_bad`: ranges (start, stop) of the stream that must not even be tried.

        `once`: what has been read will not be asked for again. Then large members that were not in the
        system's cache leave it behind the reader, and otherwise when they are closed.
        """
        self._folder = folder
        self._spans = spans
        self._starts = array("q", accumulate((s.length for s in spans), initial=0))
        self._known_bad = _joined(known_bad)
        self._open: OrderedDict[bytes, int | None] = OrderedDict()
        self._users: Counter[bytes] = Counter()
        self._once = once
        self._passing: set[bytes] = set()
        """Members to be dropped from the cache."""

        self._closed = False
        self._lock = threading.Lock()
        self._small = threading.Lock()

    @property
    def length(self) -> int:
        """Bytes of the whole stream."""
        return self._starts[-1]

    def read_into(self, offset: int, buffer: memoryview, hasher: MemberHasher | None = None) -> list[Fault]:
        """See `Stream`. Bytes past the end of the stream are zeros and no fault: they are virtual."""
        faults: list[Fault] = []
        done = 0
        for start, stop in self._known_bad:
            a, b = max(start - offset, 0), min(stop - offset, len(buffer))
            if a < b:
                faults += self._try(offset, buffer, done, a, hasher)
                faults.append((a, b))
                buffer[a:b] = bytes(b - a)
                done = b
        return faults + self._try(offset, buffer, done, len(buffer), hasher)

    def _try(
        self, offset: int, buffer: memoryview, start: int, stop: int, hasher: MemberHasher | None
    ) -> list[Fault]:
        """Read the bytes start..stop-1 of `buffer`, none of which is known to be bad."""
        faults = self._read_spans(offset + start, buffer[start:stop], hasher)
        return [(start + a, start + b) for a, b in faults]

    def _read_spans(self, offset: int, buffer: memoryview, hasher: MemberHasher | None) -> list[Fault]:
        faults: list[Fault] = []
        done = 0
        number = bisect_right(self._starts, offset) - 1
        while done < len(buffer) and number < len(self._spans):
            span = self._spans[number]
            inside = offset + done - self._starts[number]
            size = min(len(buffer) - done, span.length - inside)
            if size == span.length <= SMALL:
                number, done = self._read_small(number, done, buffer, faults, hasher)
                continue
            missing = self._read_member(span.path, span.offset + inside, buffer[done : done + size])
            faults += [(done + a, done + b) for a, b in missing]
            done += size
            number += 1
        buffer[done:] = bytes(len(buffer) - done)
        return faults

    def _read_small(
        self, number: int, done: int, buffer: memoryview, faults: list[Fault], hasher: MemberHasher | None
    ) -> tuple[int, int]:
        """Read small spans from `number` on into `buffer` from `done` on, as many as follow and fit.

        One thread at a time: calls of a few microseconds each from several threads would make Python's
        threads wait for one another at every call, and take several times as long.
        """
        with self._small:
            while number < len(self._spans):
                span = self._spans[number]
                stop = done + span.length
                if span.length > SMALL or stop > len(buffer):
                    break
                part = buffer[done:stop]
                if span.length and not self._read_once(span, part):
                    missing = self._read_member(span.path, span.offset, part)
                    faults += [(done + a, done + b) for a, b in missing]
                if hasher is not None and not span.offset:
                    hasher.take(number, part)
                number, done = number + 1, stop
        return number, done

    def _read_once(self, span: Part, buffer: memoryview) -> bool:
        """Open, read, close; False when that does not give all bytes."""
        throttle.take(len(buffer))
        try:
            fd = self._folder.open(span.path)
            try:
                return os.preadv(fd, [buffer], span.offset) == len(buffer)
            finally:
                os.close(fd)
        except OSError:
            return False

    def _read_member(self, path: bytes, offset: int, buffer: memoryview) -> list[Fault]:
        with self._lock:
            fd = self._descriptor(path)
            self._users[path] += 1
        try:
            if fd is None:
                buffer[:] = bytes(len(buffer))
                return [(0, len(buffer))]
            faults = read_into(fd, offset, buffer)
            if self._once and path in self._passing:
                pagecache.drop(fd, offset, len(buffer))
            return faults
        except OSError as error:
            raise CannotCheck(f"{os.fsdecode(path)} cannot be read: {reason(error)}") from None
        finally:
            with self._lock:
                self._users[path] -= 1
                self._close_some(0 if self._closed else OPEN_FILES)

    def _descriptor(self, path: bytes) -> int | None:
        """An open descriptor of a member; None when there is no such file (which is remembered)."""
        if self._closed:
            raise RuntimeError("these members are closed")
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
        if fd is not None and pagecache.is_passing_through(fd):
            self._passing.add(path)
        self._open[path] = fd
        return fd

    def _close_some(self, most: int) -> None:
        """Leave at most so many open; of those that nobody reads, what was not used for longest is closed."""
        if len(self._open) <= most:
            return
        idle = [path for path in self._open if not self._users[path]]
        for path in idle[: len(self._open) - most]:
            del self._users[path]
            self._let_go(path, self._open.pop(path))

    def _let_go(self, path: bytes, fd: int | None) -> None:
        """Close a member; the cache is left as it was found."""
        if fd is None:
            return
        if path in self._passing:
            pagecache.drop(fd)
        let_go(fd)

    def fetch(self, offset: int, length: int) -> None:
        """See `Stream`. Only of a member that is open already: opening others ahead would cost more."""
        number = bisect_right(self._starts, offset) - 1
        if not 0 <= number < len(self._spans):
            return
        span = self._spans[number]
        with self._lock:
            fd = self._open.get(span.path)
            if fd is not None and span.path in self._passing:
                pagecache.fetch(fd, span.offset + offset - self._starts[number], length)

    def forget(self) -> None:
        """Let the system drop what it keeps of open members, so that they are read from the medium again."""
        with self._lock:
            for fd in self._open.values():
                if fd is not None:
                    pagecache.drop(fd)

    def path_at(self, offset: int) -> bytes:
        """The member that holds byte `offset` of the stream."""
        return self._spans[bisect_right(self._starts, offset) - 1].path

    def paths(self, start: int, stop: int) -> list[bytes]:
        """The members that hold bytes of a range of the stream, in order."""
        first = bisect_right(self._starts, start) - 1
        return [span.path for span in self._spans[first : bisect_left(self._starts, stop)] if span.length]

    def close(self) -> None:
        """Close all open members; one that a thread still reads, when it has done so.

        After an interruption there may be such threads: a descriptor closed under one of them could be
        another file's by the time that it is used.
        """
        with self._lock:
            self._closed = True
            self._close_some(0)


def _joined(ranges: Sequence[tuple[int, int]]) -> list[tuple[int, int]]:
    """Ranges in order, those that overlap or touch made one."""
    joined: list[tuple[int, int]] = []
    for start, stop in sorted(ranges):
        if joined and start <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(stop, joined[-1][1]))
        else:
            joined.append((start, stop))
    return joined


def bytes_of(stream: OpenStream, length: int) -> Iterator[tuple[memoryview, list[Fault]]]:
    """The first bytes of a stream, piece by piece, and what could not be read of each; then it is closed."""
    try:
        buffer = aligned(min(PIECE, length)).data
        for start in range(0, length, PIECE):
            part = buffer[: length - start]
            yield part, stream.read_into(start, part)
    finally:
        stream.close()


Again = Callable[[Part], Iterable[tuple[memoryview, list[Fault]]]]


class MemberHasher:
    """SHA-256 of members whose bytes come in order, span by span."""

    def __init__(self) -> None:
        self._spans: Sequence[Part] = ()
        self._ends = array("q")
        self._at = self._number = 0
        """Bytes of the stream that have been hashed, and the span that the next one is in."""

        self._current = hashlib.sha256()
        self._path: bytes | None = None
        self._digests, self._known = bytearray(), bytearray()
        """Of the spans, end to end, and 1 for each that is known: some become so before their turn."""

    def expect(self, spans: Sequence[Part]) -> None:
        """Announce the spans whose bytes come next; the digests of earlier ones are forgotten."""
        self._spans = spans
        self._ends = array("q", accumulate(span.length for span in spans))
        self._digests, self._known = bytearray(DIGEST * len(spans)), bytearray(len(spans))
        self._at = self._number = 0
        self._begin()

    def _begin(self) -> None:
        """Begin the next span that has bytes; empty ones are done at once."""
        while self._number < len(self._spans):
            span = self._spans[self._number]
            if span.offset == 0 or span.path != self._path:
                self._current = hashlib.sha256()
                self._path = span.path
            if span.length:
                return
            self._finish()

    def _finish(self) -> None:
        self._keep(self._number, self._current.digest())
        self._number += 1

    def _keep(self, number: int, digest: bytes) -> None:
        self._digests[DIGEST * number : DIGEST * (number + 1)] = digest
        self._known[number] = 1

    def go_on(self, spans: Sequence[Part], digests: Sequence[bytes], position: int, again: Again) -> bool:
        """Like `expect`, where an earlier run came as far as byte `position` and gave `digests` (see below).

        A member that it had begun is hashed from its first byte, since SHA-256 half done cannot be kept;
        `again` gives the bytes. False when some of them could not be read.
        """
        self.expect(spans)
        for number, digest in enumerate(digests):
            self._keep(number, digest)
        self._at, self._number, self._path = position, len(digests), None
        self._begin()
        if self._number == len(spans):
            return True
        span = spans[self._number]
        inside = position - (self._ends[self._number] - span.length)
        whole = True
        for data, faults in again(Span(span.path, 0, span.offset + inside)):
            self._current.update(data)
            whole = whole and not faults
        return whole

    def take(self, number: int, data: memoryview) -> None:
        """All bytes of a span, one that begins a member. Any thread may call this before its turn."""
        self._keep(number, hashlib.sha256(data).digest())

    def update(self, data: memoryview) -> None:
        """The next bytes of the stream, those that were taken before included."""
        start, stop = self._at, self._at + len(data)
        # The last one may go on in the next window: then all of its bytes are needed here.
        whole = min(bisect_right(self._ends, stop), len(self._spans) - 1)
        while self._at < stop:
            if self._number < whole and self._known[self._number]:
                unknown = self._known.find(0, self._number, whole)
                self._number = whole if unknown < 0 else unknown
                self._at = self._ends[self._number - 1]
            else:
                end = min(self._ends[self._number], stop)
                self._current.update(data[self._at - start : end - start])
                self._at = end
                if end < self._ends[self._number]:
                    return
                self._finish()
            self._begin()

    def digests_before(self, position: int) -> list[bytes]:
        """The digests of the spans that end at or before byte `position`, which has been hashed."""
        return self._first(min(self._number, bisect_right(self._ends, position)))

    @property
    def digests(self) -> list[bytes]:
        """One digest a span: SHA-256 of its member from the first byte to the end of the span."""
        return self._first(self._number)

    def _first(self, count: int) -> list[bytes]:
        digests = bytes(self._digests[: DIGEST * count])
        return [digests[i : i + DIGEST] for i in range(0, len(digests), DIGEST)]
