"""Flips in cells: where they are, how many bits, and which of them stand close together."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from oakum.kernels.compiling import typed

Bytes = NDArray[np.uint8]
Integers = NDArray[np.int64]


@typed("intp(uint8[:, ::1], uint64[:, ::1], intp, int64[::1], uint8[::1], int64[:, ::1])")
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
