"""How likely each byte of a word is wrong, given the word's syndrome and the bytes known to be right."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from oakum.kernels.compiler import subroutine
from oakum.kernels.compiling import typed

Bytes = NDArray[np.uint8]
Floats = NDArray[np.float32]

FLAGGED = 255
UNDECODED = 250
"""Statuses from here to FLAGGED - 1 are words that were not decoded at all."""


@subroutine
def place_of(first: int, t: int, width: int) -> int:
    """Where in the cell byte t of a word stands that begins at `first`: words wrap round."""
    place = first + t
    return place - width if place >= width else place


@subroutine
def count_pairs(
    syndrome: int, first: int, size: int, width: int, pinned: Bytes, columns: NDArray[np.uint32],
    bit_of: NDArray[np.int16], touched: Floats,
) -> float:  # fmt: skip
    """The number of pairs of flips in open bytes that explain a syndrome, and how many touch each byte.

    -1 for a syndrome of odd weight, which no pair explains. Parity bits, the last eight, are always open.
    """
    parity_first = len(columns) - 8
    weight = 0
    rest = syndrome
    while rest:
        weight += rest & 1
        rest >>= 1
    if weight & 1:
        return -1.0
    pairs = 1.0 if weight == 2 else 0.0  # Both in the parity.
    for t in range(size):
        touched[t] = 0
        if pinned[place_of(first, t, width)]:
            continue
        for bit in range(8 * t, 8 * t + 8):
            other = bit_of[syndrome ^ columns[bit]]
            if other >= parity_first:
                touched[t] += 1
                pairs += 1
            elif other >= 0 and other >> 3 < size and not pinned[place_of(first, other >> 3, width)]:
                touched[t] += 0.5 if other >> 3 == t else 1.0
                pairs += 0.5
    return pairs


@typed(
    "void(uint8[:, ::1], uint8[:, ::1], uint8[:, ::1], uint8[:, ::1], uint8[:, ::1], int64[::1], intp, intp,"
    " uint32[::1], int16[::1], float32[:, ::1], uint8[:, ::1], float32[::1])"
)
def weigh_words(
    received: Bytes, corrected: Bytes, pinned: Bytes, status: Bytes, syndromes: Bytes,
    staggers: NDArray[np.int64], m: int, p: int, columns: NDArray[np.uint32],
    bit_of: NDArray[np.int16], tables: Floats, doubts: Bytes, touched: Floats,
) -> None:  # fmt: skip
    """Write the chance, times 255, that each byte of `corrected` is wrong into doubts[R, W].

    `tables` as from `doubts.tables`; `bit_of` gives the bit whose check column is a value (-1: none) and has
    entries only for p = 1, where pairs of flips are counted one by one, in `touched`, float32[16].
    """
    rows, width = received.shape
    for row in range(rows):
        offset = staggers[row] % m
        for word in range(status.shape[1]):
            first = offset + word * m
            size = min(m, width - word * m)
            open_bytes = 0
            for t in range(size):
                open_bytes += pinned[row, place_of(first, t, width)] == 0
            if open_bytes == 0:
                continue
            state = status[row, word]
            at_flip, elsewhere = np.float32(0), np.float32(0)
            pairs = np.float32(-1)
            if state == FLAGGED:
                elsewhere = tables[0, open_bytes]
                if p == 1:
                    pairs = count_pairs(
                        syndromes[row, word], first, size, width, pinned[row], columns, bit_of, touched
                    )
            elif state >= UNDECODED:
                elsewhere = tables[1, open_bytes]
            elif state > 0:
                at_flip, elsewhere = tables[2 * state, open_bytes], tables[2 * state + 1, open_bytes]
            others = tables[-2, open_bytes]
            for t in range(size):
                place = place_of(first, t, width)
                if pinned[row, place]:
                    continue
                chance = elsewhere
                if pairs > 0:
                    chance = (touched[t] + others * tables[-1, open_bytes]) / (pairs + others)
                elif received[row, place] != corrected[row, place]:
                    chance = at_flip
                doubts[row, place] = np.uint8(
                    min(np.float32(255), chance * np.float32(255) + np.float32(0.5))
                )
