"""Buffers that end, or begin, at a page that nobody may touch: a step outside ends the process."""

from __future__ import annotations

import ctypes
import mmap

import numpy as np
from numpy.typing import NDArray

PAGE = mmap.PAGESIZE


def guarded(size: int, *, before: bool = False) -> NDArray[np.uint8]:
    """`size` bytes right in front of an unreadable page, or right behind one."""
    pages = -(-size // PAGE)
    memory = mmap.mmap(-1, (pages + 1) * PAGE)
    whole = np.frombuffer(memory, np.uint8)
    guard = whole.ctypes.data + (0 if before else pages * PAGE)
    libc = ctypes.CDLL(None, use_errno=True)
    if libc.mprotect(
        ctypes.c_void_p(guard), ctypes.c_size_t(PAGE), mmap.PROT_NONE if hasattr(mmap, "PROT_NONE") else 0
    ):
        raise OSError(ctypes.get_errno(), "mprotect")
    start = PAGE if before else pages * PAGE - size
    return whole[start : start + size]
