"""The one place where files are opened, read and replaced.

Reading never raises for bytes that cannot be read: they come back as zeros together with their ranges.
Writing goes to a temporary file in the same folder, which takes the final name only when it is whole.
"""

from __future__ import annotations

import errno
import fcntl
import mmap
import os
import stat
import struct
import threading
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum import pagecache, throttle
from oakum.errors import CannotCheck, UsageError

Fault = tuple[int, int]

_PAGE = 4096
_SECTOR = 512

_LONG = 1 << 20
"""Reads of this size are worth going past the system's cache."""

_ANONYMOUS = 4 << 20
"""Buffers of this size come straight from the system."""

WRITE_BEHIND = 16 << 20
"""After so many bytes the system is asked to begin writing them to the medium."""


def aligned(length: int) -> NDArray[np.uint8]:
    """uint8[length] of any content that begins at a page, as a buffer to read into.

    Reading copies from the system's pages. Where the target lies 1 to 31 bytes further inside its page than
    the source, `rep movsb` takes four times as long (Zen 3), and that is where malloc puts large arrays.
    numpy asks for huge pages for large arrays, which a virtual machine may have to wait for.
    """
    if length >= _ANONYMOUS:
        return np.frombuffer(mmap.mmap(-1, length), np.uint8)
    room = np.empty(length + _PAGE, np.uint8)
    return room[-room.ctypes.data % _PAGE :][:length]


def read_into(fd: int, offset: int, buffer: memoryview) -> list[Fault]:
    """Fill `buffer` from `offset` of a file. What cannot be read is zero and its ranges are returned.

    A read error is narrowed down to pages of 4 KiB and then to sectors of 512 bytes. Bytes past the end
    of the file count as unreadable. What limits reading (`oakum.throttle`) is minded.
    """
    faults: list[Fault] = []
    done = 0
    limit = throttle.current.get()
    while done < len(buffer):
        part = buffer[done:]
        if limit is not None:
            part = part[: limit.portion]
            limit.take(len(part))
        try:
            got = os.preadv(fd, [part], offset + done)
        except OSError as error:
            if error.errno not in (errno.EIO, errno.ENODATA, errno.EREMOTEIO):
                raise
            done = _step_over(fd, offset, buffer, done, faults)
            continue
        if got == 0:
            buffer[done:] = bytes(len(buffer) - done)
            _add(faults, done, len(buffer))
            break
        done += got
    return faults


def _step_over(fd: int, offset: int, buffer: memoryview, done: int, faults: list[Fault]) -> int:
    """Get past a place that does not read: sector by sector up to the end of its page."""
    end = min(len(buffer), done + _PAGE - (offset + done) % _PAGE)
    while done < end:
        stop = min(end, done + _SECTOR - (offset + done) % _SECTOR)
        try:
            got = os.preadv(fd, [buffer[done:stop]], offset + done)
        except OSError:
            got = 0
        if got < stop - done:
            buffer[done + got : stop] = bytes(stop - done - got)
            _add(faults, done + got, stop)
        done = stop
    return done


def _add(faults: list[Fault], start: int, stop: int) -> None:
    """Append a range, joined to the one before where they touch."""
    if faults and faults[-1][1] == start:
        faults[-1] = (faults[-1][0], stop)
    else:
        faults.append((start, stop))


def _open_directly(path: Path) -> int:
    """A descriptor that reads past the system's cache; -1 where there is no such thing."""
    try:
        return os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_DIRECT)
    except (OSError, AttributeError):
        return -1


def _read_directly(fd: int, offset: int, length: int) -> NDArray[np.uint8] | None:
    """uint8[length] from `offset` of such a descriptor, which reads whole pages; None if it cannot."""
    before = offset % _PAGE
    room = aligned(-(-(before + length) // _PAGE) * _PAGE)
    throttle.take(len(room))
    try:
        got = os.preadv(fd, [room.data], offset - before)
    except OSError:
        return None
    return room[before : before + length] if got >= before + length else None


class FileBytes:
    """A file as a source of bytes that may be missing; satisfies the sidecar reader's `ByteSource`."""

    def __init__(self, path: Path) -> None:
        """Open `path` for reading. Raises CannotCheck with a plain sentence when that is not possible."""
        try:
            self._fd = os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK)
        except OSError as error:
            raise CannotCheck(f"{path} cannot be opened: {reason(error)}") from None
        found = os.fstat(self._fd)
        if not stat.S_ISREG(found.st_mode):
            let_go(self._fd)
            raise CannotCheck(f"{path} is not a file; name the sidecar itself")
        self.path = path
        self.size = found.st_size
        self._passing = pagecache.is_passing_through(self._fd)
        self._direct = _open_directly(path) if self._passing else -1

    def read(self, offset: int, length: int) -> tuple[NDArray[np.uint8], list[Fault]]:
        """uint8[length] from `offset` (which may be negative or past the end), and what is missing."""
        if self._direct >= 0 and length >= _LONG and 0 <= offset <= self.size - length:
            found = _read_directly(self._direct, offset, length)
            if found is not None:
                return found, []
        out = aligned(length)
        before = min(max(0, -offset), length)
        out[:before] = 0
        faults = [(0, before)] if before else []
        if before < length:
            for start, stop in read_into(self._fd, offset + before, out.data[before:]):
                _add(faults, before + start, before + stop)
        return out, faults

    def close(self) -> None:
        """Close the file; the system's cache is left as it was found."""
        if self._passing:
            pagecache.drop(self._fd)
        if self._direct >= 0:
            let_go(self._direct)
        let_go(self._fd)

    def __enter__(self) -> FileBytes:
        return self

    def __exit__(self, kind: object, value: object, trace: object) -> None:
        self.close()


class Lock:
    """The right to be the only one that works on a file, held until `release` or the end of the process.

    The lock belongs to the open file description (Linux: OFD locks), so that it does not vanish when some
    other descriptor of the file is closed. Where the file may not be written to it is a shared lock.
    """

    def __init__(self, path: Path, advice: str = "wait until it has finished") -> None:
        """Lock the file at `path`. Raises CannotCheck when another run holds it or it cannot be opened."""
        self.path = path
        self._advice = advice
        self._fd = -1
        self._take()

    def _take(self) -> None:
        try:
            while self._fd < 0:
                fd, alone = _open_to_lock(self.path)
                try:
                    if not try_lock(fd, alone=alone):
                        raise CannotCheck(f"another run is at work on {self.path}; {self._advice}")
                    # It may have been replaced while we opened it: then this is a lock on nothing.
                    if os.path.samestat(os.fstat(fd), os.stat(self.path)):
                        self._fd, fd = fd, -1
                finally:
                    if fd >= 0:
                        let_go(fd)
        except OSError as error:
            raise CannotCheck(f"{self.path} cannot be opened: {reason(error)}") from None

    def renew(self) -> None:
        """Lock the file that now has the name, after it was replaced."""
        self.release()
        self._take()

    def release(self) -> None:
        """Give up the lock."""
        if self._fd >= 0:
            let_go(self._fd)
            self._fd = -1

    def __enter__(self) -> Lock:
        return self

    def __exit__(self, *_: object) -> None:
        self.release()


def _open_to_lock(path: Path) -> tuple[int, bool]:
    """A descriptor to lock, and whether it can hold a lock that excludes all others."""
    try:
        return os.open(path, os.O_RDWR | os.O_CLOEXEC | os.O_NONBLOCK), True
    except OSError as error:
        if error.errno not in (errno.EACCES, errno.EPERM, errno.EROFS):
            raise
        return os.open(path, os.O_RDONLY | os.O_CLOEXEC | os.O_NONBLOCK), False


def try_lock(fd: int, *, alone: bool = True) -> bool:
    """Lock a whole file, without waiting. False when somebody else holds it; True where locks are unknown."""
    # struct flock of Linux: type, whence, start, length (0: all of it), process (0: none, as OFD demands).
    request = struct.pack("hhqqi0q", fcntl.F_WRLCK if alone else fcntl.F_RDLCK, os.SEEK_SET, 0, 0, 0)
    try:
        fcntl.fcntl(fd, fcntl.F_OFD_SETLK, request)
    except OSError as error:
        return error.errno not in (errno.EAGAIN, errno.EACCES)
    return True


def room_in(folder: Path) -> int:
    """Bytes that an ordinary user can still write to the file system that `folder` is on."""
    found = os.statvfs(folder)
    return found.f_bavail * found.f_frsize


class NewFile:
    """A file in the making: written under a temporary name, given its own by `commit`.

    Used as a context manager; without `commit` nothing is left behind. What a killed run left behind is
    taken away by the next one that makes the same file: the temporary name follows from the file's own,
    and a lock tells whether its maker is still alive. A file that is not needed for a while can be
    `park`ed, so that thousands can be in the making at a time.
    """

    def __init__(
        self,
        path: Path,
        *,
        overwrite: bool = False,
        open_folder: Callable[[], int] | None = None,
        advice: str = "move it away, choose another name or give --overwrite",
        go_on: bool = False,
        run: str = "",
    ) -> None:
        """Begin a file that will be `path`. Raises UsageError when it exists and must not be replaced.

        With `go_on`, what a dead run left behind under the temporary name is kept, to be gone on with. Such
        runs have a name, `run`, so that nobody else takes it away or has written to it.

        `open_folder` gives a descriptor of the folder that the file goes to; by default it is opened by name.
        `advice` says what to do about a file that exists.
        """
        self.path = path
        self._overwrite = overwrite
        self._advice = advice
        self._folder_opener = open_folder
        self._name = os.fsencode(path.name)
        self._temporary = temporary_name(self._name, run)
        self._folder = self._fd = -1
        self._writing = threading.Lock()
        """Threads that write at a time would wait for the file in the system, which lets them spin."""

        self._unsent = self._sent = 0
        """Bytes that the system has not been, and has been, asked to write to the medium."""

        self._begun = False
        """Whether there may be a temporary file of ours."""

        self.keep = False
        """Whether it stays under its temporary name when the run is interrupted, for a later one."""

        self.found = False
        """Whether something was there to be gone on with."""

        self._identity = (-1, -1)
        """Device and number of the temporary file, once it is ours."""

        try:
            self._folder = self._open_folder()
            if not overwrite and self._exists():
                raise self._taken()
            self._create(go_on)
        except OSError as error:
            self.discard()
            raise CannotCheck(f"{path} cannot be written: {reason(error)}") from None
        except BaseException:
            self.discard()
            raise

    def _open_folder(self) -> int:
        if self._folder_opener is not None:
            return self._folder_opener()
        return os.open(self.path.parent, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)

    def _create(self, go_on: bool) -> None:
        """Make the temporary file; one that a dead run left behind goes first, or is ours with `go_on`."""
        flags = os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC | os.O_NOFOLLOW
        self._begun = True
        try:
            self._fd = os.open(self._temporary, flags, 0o666, dir_fd=self._folder)
        except FileExistsError:
            if go_on:
                self._fd, self.found = self._open_leftover(), True
            else:
                self._take_away_leftover()
                self._fd = os.open(self._temporary, flags, 0o666, dir_fd=self._folder)
        self._identity = _identity(self._fd)
        self._lock()

    def _open_leftover(self) -> int:
        """A descriptor of what a dead run left behind, locked."""
        flags = os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK
        fd = os.open(self._temporary, flags, dir_fd=self._folder)
        if not try_lock(fd):
            let_go(fd)
            raise self._in_use()
        return fd

    def _take_away_leftover(self) -> None:
        fd = self._open_leftover()
        try:
            os.unlink(self._temporary, dir_fd=self._folder)
        finally:
            let_go(fd)

    def _lock(self) -> None:
        if not try_lock(self._fd):
            raise self._in_use()

    def _in_use(self) -> CannotCheck:
        return CannotCheck(f"another run is writing {self.path}; wait until it has finished")

    def _exists(self) -> bool:
        try:
            os.stat(self._name, dir_fd=self._folder, follow_symlinks=False)
        except FileNotFoundError:
            return False
        return True

    def _taken(self) -> UsageError:
        return UsageError(f"{self.path} exists already; {self._advice}")

    @property
    def fd(self) -> int:
        """The open descriptor."""
        if self._fd < 0:
            if self._folder < 0:
                self._folder = self._open_folder()
            fd = os.open(self._temporary, os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW, dir_fd=self._folder)
            if _identity(fd) != self._identity or not try_lock(fd):  # It was taken for a leftover meanwhile.
                let_go(fd)
                self._begun = False
                raise self._in_use()
            self._fd = fd
        return self._fd

    def park(self) -> None:
        """Close all descriptors until the file is used again."""
        self._close()

    def _close(self) -> None:
        """Close what is open; that a descriptor is closed is all that counts here, not what it says."""
        fds, self._fd, self._folder = (self._fd, self._folder), -1, -1
        for fd in fds:
            if fd >= 0:
                let_go(fd)

    def write(self, offset: int, data: bytes | bytearray | memoryview) -> None:
        """Put all of `data` at `offset`; several threads may do so at a time."""
        try:
            write_all(self.fd, offset, data)
        except OSError as error:
            raise self._failed(reason(error)) from None
        with self._writing:
            self._unsent += len(data)
            if self._unsent < WRITE_BEHIND:
                return
            self._sent += self._unsent
            self._unsent = 0
        pagecache.begin_writing(self.fd)
        if pagecache.is_much(self._sent):
            pagecache.drop(self.fd)

    def sync(self) -> None:
        """Bring what was written so far to the medium, for a state that speaks of it."""
        try:
            os.fsync(self.fd)
        except OSError as error:
            raise self._failed(reason(error)) from None

    def resize(self, length: int) -> None:
        """Make the file `length` bytes long; what is new reads as zeros."""
        try:
            os.ftruncate(self.fd, length)
        except OSError as error:
            raise self._failed(reason(error)) from None

    def read(self, offset: int, length: int) -> bytes:
        """The bytes written at `offset`."""
        try:
            data = read_all(self.fd, offset, length)
        except OSError as error:
            raise self._failed(reason(error)) from None
        if len(data) != length:
            raise self._failed("what was written cannot be read back")
        return data

    def read_into(self, offset: int, buffer: memoryview) -> None:
        """Fill `buffer` with the bytes written at `offset`."""
        try:
            faults = read_into(self.fd, offset, buffer)
        except OSError as error:
            raise self._failed(reason(error)) from None
        if faults:
            raise self._failed("what was written cannot be read back")

    def _failed(self, why: str) -> CannotCheck:
        return CannotCheck(f"{self.path} could not be written: {why}")

    def commit(
        self,
        length: int,
        *,
        mode: int | None = None,
        modified_ns: int | None = None,
        owner: tuple[int, int] | None = None,
    ) -> None:
        """Check the length, bring the file to the medium and give it its name.

        Mode, time and (where that is allowed) owner are set first, where they are given.

        Raises CannotCheck where any of this fails: then the file that had the name still has it, except
        when only the folder could not be brought to the medium.
        """
        try:
            fd = self.fd
            if os.fstat(fd).st_size != length:
                raise self._failed("its length is not what was written")
            if owner is not None:
                with suppress(PermissionError):
                    os.fchown(fd, *owner)
            if mode is not None:
                os.fchmod(fd, mode)
            if modified_ns is not None:
                os.utime(fd, ns=(modified_ns, modified_ns))
            os.fsync(fd)
            # Closing can fail on network file systems. The second descriptor holds the lock meanwhile.
            self._fd = os.dup(fd)
            os.close(fd)
            self._place()
            self._begun = False
            os.fsync(self._folder)
        except OSError as error:
            raise self._failed(reason(error)) from None
        self._close()

    def _place(self) -> None:
        """Rename; where nothing may be replaced, `link` makes sure that nothing came in between."""
        here = self._folder
        if not self._is_ours():
            raise self._in_use()
        if not self._overwrite:
            try:
                os.link(self._temporary, self._name, src_dir_fd=here, dst_dir_fd=here, follow_symlinks=False)
            except FileExistsError:
                raise self._taken() from None
            except OSError:  # A file system without hard links.
                if self._exists():
                    raise self._taken() from None
            else:
                os.unlink(self._temporary, dir_fd=here)
                return
        os.rename(self._temporary, self._name, src_dir_fd=here, dst_dir_fd=here)

    def _is_ours(self, *, otherwise: bool = False) -> bool:
        """Whether the temporary name still stands for our file; `otherwise` where that is unknown."""
        try:
            found = os.stat(self._temporary, dir_fd=self._folder, follow_symlinks=False)
        except OSError:
            return otherwise
        return (found.st_dev, found.st_ino) == self._identity

    def discard(self) -> None:
        """Take away what was written so far; nothing happens after `commit`."""
        if self._begun:
            self._begun = False
            with suppress(OSError, CannotCheck):  # Its whole folder may be gone.
                if self._folder < 0:
                    self._folder = self._open_folder()
                if self._identity == (-1, -1):  # A signal came while it was made.
                    self._take_away_leftover()
                elif self._is_ours(otherwise=self._fd >= 0):
                    os.unlink(self._temporary, dir_fd=self._folder)
        self._close()

    def __del__(self) -> None:
        """For a signal that comes before whoever asked for the file has got hold of it."""
        self.discard()

    def __enter__(self) -> NewFile:
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if self.keep and kind is not None and not issubclass(kind, Exception):
            self._begun = False
            self._close()
        self.discard()


def temporary_name(name: bytes, run: str = "") -> bytes:
    """The name under which a file is made that will be called `name`, by a run of the name `run`."""
    if len(name) > 200:
        name = name[:180] + b"-" + xxhash.xxh3_64_hexdigest(name).encode()
    return b".%s%s.oakum-part" % (name, b"." + run.encode() if run else b"")


def take_away_leftovers(path: Path, *, but: str) -> None:
    """Remove what dead runs with names, all but one, have left of the file at `path`."""
    kept = temporary_name(os.fsencode(path.name), but)
    start = kept[: -len(f"{but}.oakum-part")]
    for name in os.listdir(os.fsencode(path.parent)):
        if (
            name.startswith(start)
            and name.endswith(b".oakum-part")
            and len(name) == len(kept)
            and name != kept
        ):
            with suppress(OSError, CannotCheck), Lock(path.parent / os.fsdecode(name)):
                os.unlink(os.path.join(os.fsencode(path.parent), name))


def _identity(fd: int) -> tuple[int, int]:
    found = os.fstat(fd)
    return found.st_dev, found.st_ino


def write_all(fd: int, offset: int, data: bytes | bytearray | memoryview) -> None:
    """Put all of `data` at `offset` of an open file. Raises OSError."""
    view = memoryview(data)
    while view:
        written = os.pwrite(fd, view, offset)
        offset += written
        view = view[written:]


def read_all(fd: int, offset: int, length: int) -> bytes:
    """`length` bytes from `offset` of an open file, fewer where it ends before. Raises OSError."""
    parts = []
    while length:
        part = os.pread(fd, length, offset)
        if not part:
            break
        parts.append(part)
        offset += len(part)
        length -= len(part)
    return b"".join(parts)


def let_go(fd: int) -> None:
    """Close a descriptor that was only read from: an error has nothing to tell then."""
    with suppress(OSError):
        os.close(fd)


def reason(error: OSError) -> str:
    """The system's reason for an error in plain words, without a number."""
    text = os.strerror(error.errno) if error.errno else str(error)
    return text[:1].lower() + text[1:]
