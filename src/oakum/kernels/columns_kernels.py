"""The kernel of the column decoder.

Columns are decoded in groups of 256 with the arithmetic of `oakum.kernels.lanes`; no step of it branches on
the content of a single column:

1. erasure locator, the product of (1 - X x) over the erased places' locators X;
2. error and erasure locator L(x), by Berlekamp and Massey's algorithm (`oakum.kernels.locator`);
3. roots of L(x) by the additive Fourier transform (`oakum.kernels.roots`);
4. evaluator W(x) = S(x) L(x) mod x^r, with S the syndromes, and magnitudes by Forney's formula
   (`oakum.kernels.magnitudes`).

A column is decoded if its locator has as many roots at the code's places as its length says, and the length
leaves room for 2 * errors + erasures <= r. Its syndromes then are exactly those of the magnitudes found: both
obey the recurrence that the locator stands for, and agree in the first of its length.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes
from oakum.kernels import lanes
from oakum.kernels.columns import FAILED
from oakum.kernels.compiling import typed
from oakum.kernels.lanes import LANES, ONE, PLANE_WORDS, subroutine
from oakum.kernels.locator import (
    CHOSEN,
    COUNTER,
    LOST,
    find_erasure_locator,
    find_locator,
    find_starts,
)
from oakum.kernels.magnitudes import find_evaluator, find_magnitudes
from oakum.kernels.roots import expand, find_roots

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]

# -- columns to lanes ---------------------------------------------------------------------------------------


@subroutine
def _gather(rows: Bytes, i: int, columns: Integers, gathered: Bytes) -> None:
    """gathered[0, 0..] = row i of `rows` at the columns of the group."""
    for lane in range(columns.size):
        gathered[0, lane] = rows[i, columns[lane]]


@subroutine
def _are_neighbours(columns: Integers) -> bool:
    """Whether the columns of the group are a full group side by side, and no gathering is needed."""
    return columns.size == LANES and columns[LANES - 1] - columns[0] == LANES - 1


@subroutine
def _load_syndromes(syndromes: Bytes, columns: Integers, gathered: Bytes, blocks: Words) -> None:
    """blocks = the syndromes of the group's columns, zeros in lanes without a column."""
    neighbours = _are_neighbours(columns)
    gathered[0, :] = 0
    for j in range(blocks.shape[0]):
        if neighbours:
            lanes.from_bytes(blocks, j, syndromes, j, columns[0])
        else:
            _gather(syndromes, j, columns, gathered)
            lanes.from_bytes(blocks, j, gathered, 0, 0)


@subroutine
def _load_erasures(
    erased: Bytes, columns: Integers, locators: Bytes, gathered: Bytes, flags: Words, staged: Bytes,
    erasures: Integers,
) -> None:  # fmt: skip
    """erasures[lane] = the number of erased places, staged[0.., lane] = the locators of the first r."""
    neighbours = _are_neighbours(columns)
    staged[:, :] = 0
    gathered[0, :] = 0
    erasures[:] = 0
    for i in range(erased.shape[0]):
        if neighbours:
            lanes.nonzero_bytes(flags, CHOSEN, erased, i, columns[0])
        else:
            _gather(erased, i, columns, gathered)
            lanes.nonzero_bytes(flags, CHOSEN, gathered, 0, 0)
        for w in range(PLANE_WORDS):
            rest = flags[CHOSEN, w]
            while rest:
                lane = 64 * w + lanes.lowest_bit(rest)
                rest &= rest - ONE
                if erasures[lane] < staged.shape[0]:
                    staged[erasures[lane], lane] = locators[i]
                erasures[lane] += 1


# -- lanes to columns ---------------------------------------------------------------------------------------


@subroutine
def _reject_lost(erasures: Integers, r: int, counter: Bytes, flags: Words, found: Integers) -> None:
    """Set found[lane] = FAILED unless the locator has as many roots as it should.

    The counter k = r - s - 2 e gives the number of errors e that the locator stands for.
    """
    for lane in range(LANES):
        lost = flags[LOST, lane >> 6] >> np.uint64(lane & 63) & ONE
        expected = erasures[lane] + (r - erasures[lane] - counter[0, lane] >> 1)
        if lost or erasures[lane] > r or found[lane] != expected:
            found[lane] = FAILED


@subroutine
def _store(
    columns: Integers, erased: Bytes, place_of: Bytes, roots: Bytes, found: Integers, staged: Bytes,
    magnitudes: Bytes, status: NDArray[np.int16],
) -> None:  # fmt: skip
    """Write out the magnitudes and count the errors outside the erased places.

    Magnitudes there are never zero: a shorter locator would have done, and the algorithm finds the shortest.
    """
    for lane in range(columns.size):
        column = columns[lane]
        errors = min(found[lane], 0)  # FAILED or 0
        for e in range(found[lane]):
            place = place_of[roots[e, lane]]
            magnitudes[place, column] = staged[e, lane]
            if not (erased.shape[0] and erased[place, column]):
                errors += 1
        status[column] = errors


# -- the kernel ---------------------------------------------------------------------------------------------


@typed(
    "void(Array(uint8, 2, 'C', True), Array(uint8, 2, 'C', True), int64[::1], uint8[::1], uint8[::1], "
    "uint8[::1], uint8[:, :], int16[::1], uint64[:, ::1], uint64[:, ::1], uint64[:, ::1], uint64[:, ::1], "
    "uint64[:, ::1], uint64[:, ::1], uint64[:, ::1], uint64[:, ::1], uint64[:, ::1], uint8[:, ::1], "
    "uint8[:, ::1], uint8[:, ::1], int64[::1], int64[::1])"
)
def decode_columns(
    syndromes: Bytes, erased: Bytes, columns: Integers, locators: Bytes, place_of: Bytes, scale_of: Bytes,
    magnitudes: Bytes, status: NDArray[np.int16], blocks: Words, evaluator: Words, locator: Words,
    previous: Words, constants: Words, values: Words, control: Words, flags: Words, starts: Words,
    gathered: Bytes, staged: Bytes, roots: Bytes, erasures: Integers, found: Integers,
) -> None:  # fmt: skip
    """Write the magnitudes of the chosen `columns` into magnitudes[n, L] and their status into status[L].

    `columns` are in rising order. erased[n, L] may have no rows: nothing is erased. The three tables
    are those of `columns.Tables`; from `blocks` on it is memory to work in, see `columns.workspace`.
    """
    r = syndromes.shape[0]
    for first in range(0, columns.size, LANES):
        group = columns[first : first + LANES]
        _load_syndromes(syndromes, group, gathered, blocks)
        _load_erasures(erased, group, locators, gathered, flags, staged, erasures)
        most = find_starts(erasures, r, starts)
        find_erasure_locator(staged, most, locator, control)
        degree = find_locator(blocks, starts, most, locator, previous, control, flags)
        size = expand(locator, degree, constants)
        find_roots(constants, degree, size, place_of, flags, values, roots, found)
        lanes.to_bytes(gathered, 0, control, COUNTER)
        _reject_lost(erasures, r, gathered, flags, found)
        if degree:
            find_evaluator(locator, degree, blocks, evaluator)
            find_magnitudes(locator, degree, evaluator, scale_of, roots, found, control, staged)
        _store(group, erased, place_of, roots, found, staged, magnitudes, status)
