"""Digests of cells: XXH3-64, which finds accidents (not attackers) at the speed of memory."""

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.geometry import CELL


def cell_digests(data: NDArray[np.uint8], cell: int = CELL) -> NDArray[np.uint64]:
    """XXH3-64 of the cells of uint8[L] (contiguous), uint64[cells]; the last cell may be shorter."""
    view = data.data
    digest = xxhash.xxh3_64_intdigest
    return np.array([digest(view[i : i + cell]) for i in range(0, len(view), cell)], np.uint64)
