"""The roots of 256 polynomials at once, by the additive Fourier transform.

A polynomial of 2^h coefficients is evaluated at all 256 elements by h * 128 multiplications, instead of 255
for each coefficient (Cantor 1989; Gao and Mateer, Additive fast Fourier transforms over finite fields, 2010).
The points are ordered by a Cantor basis (see `oakum.kernels.planes.points`), so that point 2q + 1 is point 2q
plus 1, and x^2 + x of both is point q.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes
from oakum.kernels import lanes
from oakum.kernels.columns import NO_PLACE
from oakum.kernels.lane_field import POINTS
from oakum.kernels.lanes import NONE, ONE, PLANE_WORDS, subroutine
from oakum.kernels.locator import CHOSEN, LOST

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]


@subroutine
def expand(locator: Words, degree: int, constants: Words) -> int:
    """The way down of the additive Fourier transform; gives the number of constants, a power of two.

    f(x) of 2^h coefficients becomes f0(y) + x f1(y) with y = x^2 + x, by Taylor expansion at x^2 + x, and so
    do f0 and f1, whose coefficients take turns in the rows, until all are constants.
    """
    size = 1
    while size <= degree:
        size *= 2
    constants[:size, :] = NONE
    for row in range(degree + 1):
        lanes.copy(constants, row, locator, row)
    stride = 1
    while stride < size:
        width = size
        while width >= 4 * stride:
            quarter = width // 4
            for block in range(0, size, width):
                for row in range(block, block + quarter):
                    lanes.add(constants, row + 2 * quarter, constants, row + 3 * quarter)
                    lanes.add(constants, row + quarter, constants, row + 2 * quarter)
            width //= 2
        stride *= 2
    return size


@subroutine
def _evaluate(constants: Words, degree: int, size: int, first: int, values: Words) -> None:
    """The way up: values[q] = the locator at point first + q, for q < size.

    With y = x^2 + x, f(x) = f0(y) + x f1(y) and f(x + 1) = f(x) + f1(y). In a Cantor basis, points 2q and
    2q + 1 of one step have y = point q of the step before, which stands in the same rows. The way down moves
    coefficients only to lower rows, so that above the degree f1 is zero in the first step.
    """
    half = size // 2
    lanes.copy(values, 0, constants, 0)
    for row in range(half):
        lanes.copy(values, row, constants, row)
        if row + half <= degree:
            lanes.copy(values, row + half, constants, row + half)
            lanes.butterfly(values, row, row + half, first // size)
        else:
            lanes.copy(values, row + half, constants, row)
    stride = half // 2
    while stride:
        for start in range(0, size, 2 * stride):
            q = (first + start) // (2 * stride)
            for row in range(start, start + stride):
                lanes.butterfly(values, row, row + stride, q)
        stride //= 2


@subroutine
def find_roots(
    constants: Words, degree: int, size: int, place_of: Bytes, flags: Words, values: Words, roots: Bytes,
    found: Integers,
) -> None:  # fmt: skip
    """roots[0..found[lane], lane] = the points at which the locator is zero, in lanes that are not lost.

    They are given by their numbers; those at which the code has no place are left out.
    """
    found[:] = 0
    for first in range(0, POINTS, size):
        _evaluate(constants, degree, size, first, values)
        for row in range(size):
            point = np.uint8(first + row)
            if place_of[point] == NO_PLACE:
                continue
            lanes.nonzero(flags, CHOSEN, values, row)
            for w in range(PLANE_WORDS):
                zeros = ~(flags[CHOSEN, w] | flags[LOST, w])
                while zeros:
                    lane = 64 * w + lanes.lowest_bit(zeros)
                    zeros &= zeros - ONE
                    roots[found[lane], lane] = point
                    found[lane] += 1
