"""Manners towards the system's page cache: read ahead, write behind, and leave it as it was found.

What passes through leaves room for what others use; and memory that is used again and again costs less than
memory that the system, or the host of a virtual machine, has to find first.

All of it is advice: where a system does not take it, nothing happens, and no errors are told.
"""

from __future__ import annotations

import os
from contextlib import suppress
from functools import cache
from typing import Any

PAGE = os.sysconf("SC_PAGE_SIZE") if hasattr(os, "sysconf") else 4096

LARGE = 64 << 20
"""Files of at least so many bytes can drive other files out of the cache."""

SAMPLES = 64
"""Pages of a file that are looked at to tell whether it is in the cache."""

_PROT_READ, _MAP_SHARED, _SYNC_FILE_RANGE_WRITE = 1, 1, 2


def is_passing_through(fd: int) -> bool:
    """Whether the file is large and next to nothing of it is in the cache, so that nobody misses it there."""
    with suppress(OSError):
        size = os.fstat(fd).st_size
        found = resident(fd, size) if size >= LARGE else None
        return found is not None and found * 16 <= SAMPLES
    return False


def resident(fd: int, size: int) -> int | None:
    """How many of SAMPLES pages, evenly spread over the file, are in the cache; None where unknown."""
    libc = _libc()
    if libc is None:
        return None
    import ctypes

    address = libc.mmap(None, size, _PROT_READ, _MAP_SHARED, fd, 0)  # Only to ask: it is never looked into.
    if address in (None, ctypes.c_void_p(-1).value):
        return None
    try:
        found = 0
        state = ctypes.c_ubyte()
        for i in range(SAMPLES):
            place = i * size // SAMPLES // PAGE * PAGE
            if libc.mincore(address + place, 1, ctypes.byref(state)):
                return None
            found += state.value & 1
        return found
    finally:
        libc.munmap(address, size)


def fetch(fd: int, offset: int, length: int) -> None:
    """These bytes will be asked for soon."""
    _advise(fd, offset, length, "POSIX_FADV_WILLNEED")


def drop(fd: int, offset: int = 0, length: int = 0) -> None:
    """These bytes (of length 0: all up to the end) will not be asked for again."""
    _advise(fd, offset, length, "POSIX_FADV_DONTNEED")


def _advise(fd: int, offset: int, length: int, advice: str) -> None:
    with suppress(OSError, AttributeError):  # Not every system has it.
        os.posix_fadvise(fd, offset, length, getattr(os, advice))


@cache
def memory() -> int:
    """Bytes of memory of this machine; where that is unknown, as many as a small one has."""
    try:
        return os.sysconf("SC_PHYS_PAGES") * PAGE
    except (AttributeError, ValueError, OSError):
        return 4 << 30


def holds(nbytes: int) -> bool:
    """Whether the cache has room to keep so many bytes until they are read again."""
    return nbytes <= memory() // 2


def is_much(nbytes: int) -> bool:
    """Whether a new file of so many bytes should not stay in the cache."""
    return nbytes >= LARGE


def begin_writing(fd: int) -> None:
    """Begin to bring what was written to the medium, so that fsync finds little left to do.

    Nothing waits for it, and nothing is safe before fsync, which also tells of any failure.
    """
    libc = _libc()
    if libc is not None:
        libc.sync_file_range(fd, 0, 0, _SYNC_FILE_RANGE_WRITE)


@cache
def _libc() -> Any:
    """Calls of Linux that the module `os` does not have; None elsewhere."""
    import ctypes

    try:
        libc = ctypes.CDLL(None)
        libc.mmap.restype = ctypes.c_void_p
        libc.mmap.argtypes = [
            ctypes.c_void_p, ctypes.c_size_t, ctypes.c_int, ctypes.c_int, ctypes.c_int, ctypes.c_int64,
        ]  # fmt: skip
        libc.munmap.argtypes = [ctypes.c_void_p, ctypes.c_size_t]
        libc.mincore.argtypes = [ctypes.c_void_p, ctypes.c_size_t, ctypes.c_void_p]
        libc.sync_file_range.argtypes = [ctypes.c_int, ctypes.c_int64, ctypes.c_int64, ctypes.c_uint]
    except (OSError, TypeError, AttributeError):
        return None
    return libc
