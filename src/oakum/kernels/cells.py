"""Digests of cells without the interpreter, for jobs that have loaded the kernels anyway."""

from __future__ import annotations

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.kernels import cells_kernels as kernels
from oakum.kernels.cells_kernels import CELL


def prepare() -> None:
    """Compile, or load, what `cell_digests` needs, in the calling thread."""
    kernels.digests.prepare()


def cell_digests(data: NDArray[np.uint8]) -> NDArray[np.uint64]:
    """The same as `oakum.digests.cell_digests`, with the GIL released.

    Raises ValueError for an array that is not contiguous bytes.
    """
    if data.dtype != np.uint8 or data.ndim != 1 or not data.flags.c_contiguous:
        raise ValueError("data are not contiguous bytes")
    full, rest = divmod(len(data), CELL)
    digests = np.empty(full + (rest > 0), np.uint64)
    kernels.digests(data.ctypes.data, full, digests.ctypes.data)
    if rest:
        digests[full] = xxhash.xxh3_64_intdigest(data[full * CELL :].data)
    return digests
