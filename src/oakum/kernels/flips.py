"""Flips in cells: where they are, how many bits, and which of them stand close together."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.kernels.compiling import kernel

Bytes = NDArray[np.uint8]
Integers = NDArray[np.int64]


def _self_test(compiled: Callable[..., Any]) -> bool:
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


@kernel(
    "intp(uint8[:, ::1], uint64[:, ::1], intp, int64[::1], uint8[::1], int64[:, ::1])",
    self_test=_self_test,
    purpose="the counting of flips",
)
def find_flips(
    flips: Bytes, eights: NDArray[np.uint64], gap: int, places: Integers, bits: Bytes, clusters: Integers
) -> int:
    """Write the place of every byte that is not zero in flips[R, W], row after row, and its count of bits.

    `eights` is the same memory, eight bytes at a time. `clusters` gets first place, end (exclusive), wrong
    bytes and flipped bits of each stretch of a row with fewer than `gap` zeros between its bytes; returned is
    how many there are.
    """
    rows, width = flips.shape
    found, cluster = 0, -1
    wrong, flipped = 0, 0
    for row in range(rows):
        last = -gap - 1
        for eight in range(width >> 3):
            if not eights[row, eight]:
                continue
            for column in range(8 * eight, 8 * eight + 8):
                value = int(flips[row, column])
                if not value:
                    continue
                pairs = value - (value >> 1 & 0x55)
                fours = (pairs & 0x33) + (pairs >> 2 & 0x33)
                count = (fours + (fours >> 4)) & 15
                place = row * width + column
                if column - last > gap:
                    cluster += 1
                    clusters[0, cluster] = place
                    wrong, flipped = 0, 0
                wrong += 1
                flipped += count
                clusters[1, cluster] = place + 1
                clusters[2, cluster] = wrong
                clusters[3, cluster] = flipped
                last = column
                places[found] = place
                bits[found] = count
                found += 1
    return cluster + 1
