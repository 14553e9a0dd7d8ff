"""Scratch memory for kernels, one piece a thread, kept from call to call.

Fresh memory of this size comes from the operating system page by page, which takes longer than a short
call of a kernel.
"""

from __future__ import annotations

import threading

import numpy as np

ALIGNMENT = 64

_own = threading.local()


def scratch(size: int) -> int:
    """The address of at least `size` bytes, a multiple of 64; good until the same thread asks again."""
    memory = getattr(_own, "memory", None)
    if memory is None or memory.size < size + ALIGNMENT:
        memory = _own.memory = np.empty(size + ALIGNMENT, np.uint8)
        _own.address = -(-memory.ctypes.data // ALIGNMENT) * ALIGNMENT
    return int(_own.address)
