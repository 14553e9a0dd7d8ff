"""Digests of cells without the interpreter, for jobs that have loaded the kernels anyway."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.kernels.compiling import Kernel
from oakum.kernels.words import CELL


def prepare() -> None:
    """Compile, or load, what `cell_digests` needs, in the calling thread."""
    _DIGESTS.prepare()


def cell_digests(data: NDArray[np.uint8]) -> NDArray[np.uint64]:
    """The same as `oakum.digests.cell_digests`, with the GIL released.

    Raises ValueError for an array that is not contiguous bytes.
    """
    if data.dtype != np.uint8 or data.ndim != 1 or not data.flags.c_contiguous:
        raise ValueError("data are not contiguous bytes")
    full, rest = divmod(len(data), CELL)
    digests = np.empty(full + (rest > 0), np.uint64)
    _DIGESTS(data.ctypes.data, full, digests.ctypes.data)
    if rest:
        digests[full] = xxhash.xxh3_64_intdigest(data[full * CELL :].data)
    return digests


def gives_known_digests(compiled: Callable[..., Any]) -> bool:
    """Whether the digests are those of the reference implementation, for zeros and mixed bytes."""
    data = np.zeros(3 * CELL, np.uint8)
    data[CELL:] = np.arange(2 * CELL) * 167 % 253
    out = np.zeros(3, np.uint64)
    compiled(data.ctypes.data, 3, out.ctypes.data)
    expected = [xxhash.xxh3_64_intdigest(data[i : i + CELL].tobytes()) for i in range(0, len(data), CELL)]
    return bool(out.tolist() == expected)


_DIGESTS = Kernel(".cells_kernels.digests", gives_known_digests, "the digests of cells")
