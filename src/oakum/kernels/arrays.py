"""How arrays are given to kernels: rows of bytes, checked before their addresses are taken."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Bytes = NDArray[np.uint8]


class Arrays(NamedTuple):
    """What a kernel is told of the rows it reads and the rows it writes; addresses and sizes in bytes."""

    out: int
    out_stride: int
    rows: int
    source: int
    source_stride: int
    inputs: int
    length: int
    accumulate: int

    @staticmethod
    def of(source: Bytes, out: Bytes, accumulate: bool) -> Arrays:
        inputs, length = source.shape
        return Arrays(
            out.ctypes.data, out.strides[0], len(out),
            source.ctypes.data, source.strides[0], inputs, length, int(accumulate),
        )  # fmt: skip


def check_rows(array: Bytes, name: str) -> None:
    """Raises ValueError unless `array` is two-dimensional, of bytes, with contiguous rows."""
    if not isinstance(array, np.ndarray) or array.dtype != np.uint8 or array.ndim != 2:
        raise ValueError(f"{name} is not a two-dimensional array of uint8")
    if array.size and array.shape[1] > 1 and array.strides[1] != 1:
        raise ValueError(f"the bytes of a row of {name} are not contiguous")
