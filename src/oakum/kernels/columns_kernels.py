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

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import ORDER, Bytes
from oakum.algebra.outer import OuterCode
from oakum.kernels import lanes
from oakum.kernels.compiling import kernel
from oakum.kernels.lanes import BLOCK_WORDS, FIELD, LANES, ONE, PLANE_WORDS, subroutine
from oakum.kernels.locator import (
    CHOSEN,
    CONTROL_ROWS,
    COUNTER,
    FLAG_ROWS,
    LOST,
    find_erasure_locator,
    find_locator,
    find_starts,
)
from oakum.kernels.magnitudes import find_evaluator, find_magnitudes
from oakum.kernels.planes import POINTS, points
from oakum.kernels.roots import NO_PLACE, expand, find_roots

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]

FAILED = -1
"""The status of a column that could not be decoded."""


class Tables:
    """What the kernel has to know about a code.

    locators: uint8[n], for each place its locator X in the lanes' field;
    place_of: uint8[256], the place whose 1/X is the Fourier transform's point q, or `NO_PLACE`;
    scale_of: uint8[256], X^(-first root) at point q; nothing, uint8[0], where all are 1;
    to_lanes, from_lanes: uint8[256], the code's field to the lanes' field and back.
    """

    def __init__(self, outer: OuterCode) -> None:
        self.to_lanes = lanes.field_map(outer.field_poly)
        self.from_lanes = np.argsort(self.to_lanes).astype(np.uint8)
        self.locators = self.to_lanes[outer.locators]
        self.place_of = np.full(POINTS, NO_PLACE, dtype=np.uint8)
        self.place_of[np.argsort(points())[FIELD.inverse(self.locators)]] = np.arange(outer.n)
        scales = FIELD.power(points(), outer.first_root % ORDER)
        self.scale_of = scales if outer.first_root else scales[:0]


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


def _self_test(compiled: Callable[..., Any]) -> bool:
    """300 columns of RS(255,223) with 0 to 20 wrong symbols, in every other one half of them erased."""
    outer = OuterCode(255, 223)
    tables = Tables(outer)
    columns = np.arange(300)
    errors, erased = np.zeros((2, outer.n, columns.size), dtype=np.uint8)
    within = np.zeros(columns.size, dtype=bool)
    for c in columns:
        wrong = (c + 11 * np.arange(c % 21)) % outer.n
        errors[wrong, c] = 1 + (c + 37 * wrong) % 255
        known = wrong[: wrong.size // 2] if c % 2 else wrong[:0]
        erased[known, c] = 1
        within[c] = 2 * wrong.size - known.size <= outer.r
    syndromes = np.zeros((outer.r, columns.size), dtype=np.uint8)
    for i in range(outer.n):
        syndromes ^= outer.field.multiply(outer.check_matrix[:, i, None], errors[i][None, :])
    found = np.zeros_like(errors)
    status = np.zeros(columns.size, dtype=np.int16)
    compiled(syndromes, erased, columns, tables.locators, tables.place_of, tables.scale_of, found, status)
    expected = np.where(within, np.count_nonzero(errors * (1 - erased), axis=0), FAILED)
    return np.array_equal(status, expected) and np.array_equal(found, errors * within)


@kernel(
    "void(Array(uint8, 2, 'C', True), Array(uint8, 2, 'C', True), int64[::1], uint8[::1], uint8[::1], "
    "uint8[::1], uint8[:, :], int16[::1])",
    self_test=_self_test,
    purpose="the column decoder",
)
def decode_columns(
    syndromes: Bytes, erased: Bytes, columns: Integers, locators: Bytes, place_of: Bytes, scale_of: Bytes,
    magnitudes: Bytes, status: NDArray[np.int16],
) -> None:  # fmt: skip
    """Write the magnitudes of the chosen `columns` into magnitudes[n, L] and their status into status[L].

    `columns` are in rising order. erased[n, L] may have no rows: nothing is erased. The three tables
    are those of `Tables`.
    """
    r = syndromes.shape[0]
    blocks = np.zeros((r, BLOCK_WORDS), dtype=np.uint64)
    evaluator = np.zeros((r, BLOCK_WORDS), dtype=np.uint64)
    locator = np.zeros((r + 2, BLOCK_WORDS), dtype=np.uint64)
    previous = np.zeros((r + 2, BLOCK_WORDS), dtype=np.uint64)
    constants = np.zeros((POINTS, BLOCK_WORDS), dtype=np.uint64)
    values = np.zeros((POINTS, BLOCK_WORDS), dtype=np.uint64)
    control = np.zeros((CONTROL_ROWS, BLOCK_WORDS), dtype=np.uint64)
    flags = np.zeros((FLAG_ROWS, PLANE_WORDS), dtype=np.uint64)
    starts = np.zeros((r + 1, PLANE_WORDS), dtype=np.uint64)
    gathered = np.zeros((1, LANES), dtype=np.uint8)
    staged = np.zeros((r, LANES), dtype=np.uint8)
    roots = np.zeros((r, LANES), dtype=np.uint8)
    counts = np.zeros((2, LANES), dtype=np.int64)
    erasures, found = counts[0], counts[1]
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
