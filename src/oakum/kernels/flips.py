"""The kernel that finds flips in cells."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from oakum.kernels.compiling import Kernel


def finds_known_flips(compiled: Callable[..., Any]) -> bool:
    """Two rows of 24 bytes, in which a gap of two right bytes or more parts the clusters."""
    flips = np.zeros((2, 24), np.uint8)
    flips[0, [3, 5, 8, 23]] = 1, 3, 255, 128
    flips[1, [0, 1]] = 7, 6
    places, bits, clusters = np.zeros(6, np.int64), np.zeros(6, np.uint8), np.zeros((4, 6), np.int64)
    count = compiled(flips, flips.view(np.uint64), 2, places, bits, clusters)
    expected = [[3, 8, 23, 24], [6, 9, 24, 26], [2, 1, 1, 2], [3, 8, 1, 5]]
    return (
        count == 4
        and clusters[:, :4].tolist() == expected
        and places.tolist() == [3, 5, 8, 23, 24, 25]
        and bits.tolist() == [1, 2, 8, 1, 3, 2]
    )


FIND_FLIPS = Kernel(".flips_kernels.find_flips", finds_known_flips, "the counting of flips")
