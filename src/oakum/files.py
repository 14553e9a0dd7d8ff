"""The one place where files are opened, read and replaced.

Reading never raises for bytes that cannot be read: they come back as zeros together with their ranges.
Writing goes to a temporary file in the same folder, which takes the final name only when it is whole.
"""

from __future__ import annotations

import errno
import os
import secrets
import stat
from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from oakum.errors import CannotCheck, UsageError

Fault = tuple[int, int]

_PAGE = 4096
_SECTOR = 512


def read_into(fd: int, offset: int, buffer: memoryview) -> list[Fault]:
    """Fill `buffer` from `offset` of a file. What cannot be read is zero and its ranges are returned.

    A read error is narrowed down to pages of 4 KiB and then to sectors of 512 bytes. Bytes past the end
    of the file count as unreadable.
    """
    faults: list[Fault] = []
    done = 0
    while done < len(buffer):
        try:
            got = os.preadv(fd, [buffer[done:]], offset + done)
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
            os.close(self._fd)
            raise CannotCheck(f"{path} is not a file; name the sidecar itself")
        self.path = path
        self.size = found.st_size

    def read(self, offset: int, length: int) -> tuple[NDArray[np.uint8], list[Fault]]:
        """uint8[length] from `offset` (which may be negative or past the end), and what is missing."""
        out = np.zeros(length, np.uint8)
        before = min(max(0, -offset), length)
        faults = [(0, before)] if before else []
        if before < length:
            for start, stop in read_into(self._fd, offset + before, out.data[before:]):
                _add(faults, before + start, before + stop)
        return out, faults

    def close(self) -> None:
        """Close the file."""
        os.close(self._fd)

    def __enter__(self) -> FileBytes:
        return self

    def __exit__(self, kind: object, value: object, trace: object) -> None:
        self.close()


class NewFile:
    """A file in the making: written under a temporary name, given its own by `commit`.

    Used as a context manager; without `commit` nothing is left behind. A file that is not needed for a
    while can be `park`ed, so that thousands can be in the making at a time.
    """

    def __init__(
        self,
        path: Path,
        *,
        overwrite: bool = False,
        open_folder: Callable[[], int] | None = None,
        advice: str = "move it away, choose another name or give --overwrite",
    ) -> None:
        """Begin a file that will be `path`. Raises UsageError when it exists and must not be replaced.

        `open_folder` gives a descriptor of the folder that the file goes to; by default it is opened by name.
        `advice` says what to do about a file that exists.
        """
        self.path = path
        self._overwrite = overwrite
        self._advice = advice
        self._open_folder = open_folder or self._open_parent
        name = os.fsencode(path.name)
        self._name = name
        self._temporary = b".%s.%s.part" % (name[:200], secrets.token_hex(6).encode())
        self._folder = self._fd = -1
        self._committed = False
        try:
            self._folder = self._open_folder()
            if not overwrite and self._exists():
                raise self._taken()
            flags = os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC | os.O_NOFOLLOW
            self._fd = os.open(self._temporary, flags, 0o666, dir_fd=self._folder)
        except OSError as error:
            self._close()
            raise CannotCheck(f"{path} cannot be written: {reason(error)}") from None
        except BaseException:
            self._close()
            raise

    def _open_parent(self) -> int:
        return os.open(self.path.parent, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)

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
            self._fd = os.open(self._temporary, os.O_RDWR | os.O_CLOEXEC | os.O_NOFOLLOW, dir_fd=self._folder)
        return self._fd

    def park(self) -> None:
        """Close all descriptors until the file is used again."""
        self._close()

    def _close(self) -> None:
        for fd in (self._fd, self._folder):
            if fd >= 0:
                os.close(fd)
        self._fd = self._folder = -1

    def write(self, offset: int, data: bytes | bytearray | memoryview) -> None:
        """Put all of `data` at `offset`."""
        view = memoryview(data)
        try:
            while view:
                written = os.pwrite(self.fd, view, offset)
                offset += written
                view = view[written:]
        except OSError as error:
            raise CannotCheck(f"{self.path} could not be written: {reason(error)}") from None

    def resize(self, length: int) -> None:
        """Make the file `length` bytes long; what is new reads as zeros."""
        try:
            os.ftruncate(self.fd, length)
        except OSError as error:
            raise CannotCheck(f"{self.path} could not be written: {reason(error)}") from None

    def read(self, offset: int, length: int) -> bytes:
        """The bytes written at `offset`."""
        data = os.pread(self.fd, length, offset)
        if len(data) != length:
            raise CannotCheck(f"{self.path} could not be written: what was written cannot be read back")
        return data

    def commit(self, length: int, *, mode: int | None = None, modified_ns: int | None = None) -> None:
        """Check the length, set mode and time, bring the file to the medium and give it its name."""
        try:
            fd = self.fd
            if os.fstat(fd).st_size != length:
                raise CannotCheck(f"{self.path} could not be written: its length is not what was written")
            if mode is not None:
                os.fchmod(fd, mode)
            if modified_ns is not None:
                os.utime(fd, ns=(modified_ns, modified_ns))
            os.fsync(fd)
            os.close(fd)
            self._fd = -1
            self._place()
            os.fsync(self._folder)
        except OSError as error:
            raise CannotCheck(f"{self.path} could not be written: {reason(error)}") from None
        self._committed = True
        self._close()

    def _place(self) -> None:
        """Rename; where nothing may be replaced, `link` makes sure that nothing came in between."""
        here = self._folder
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

    def discard(self) -> None:
        """Take away what was written so far."""
        if self._committed:
            return
        try:
            if self._folder < 0:
                self._folder = self._open_folder()
            os.unlink(self._temporary, dir_fd=self._folder)
        except OSError:
            pass  # It was never made, or its whole folder is gone.
        self._close()

    def __enter__(self) -> NewFile:
        return self

    def __exit__(self, *_: object) -> None:
        self.discard()


def reason(error: OSError) -> str:
    """The system's reason for an error in plain words, without a number."""
    text = os.strerror(error.errno) if error.errno else str(error)
    return text[:1].lower() + text[1:]
