"""The roots of 256 polynomials at once, by the additive Fourier transform.

A polynomial of 2^h coefficients is evaluated at all 256 elements by h * 128 multiplications, instead of 255
for each coefficient (Cantor 1989; Gao and Mateer, Additive fast Fourier transforms over finite fields, 2010).
The points are ordered by a Cantor basis b_0 = 1, b_(i+1)^2 + b_(i+1) = b_i: point q is the sum of b_i
over the bits i of q, so that point 2q + 1 is point 2q plus 1, and x^2 + x of both is point q.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes
from oakum.kernels import lanes
from oakum.kernels.lanes import ALL, FIELD, NONE, ONE, PLANE_WORDS, subroutine
from oakum.kernels.locator import CHOSEN, LOST

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]

POINTS = 256
NO_PLACE = 255


@lru_cache(maxsize=1)
def points() -> Bytes:
    """uint8[256]: the points in order."""
    elements = np.arange(256, dtype=np.uint8)
    images = FIELD.multiply(elements, elements) ^ elements
    span = np.zeros(1, dtype=np.uint8)
    basis = np.ones(1, dtype=np.uint8)
    while span.size < POINTS:
        span = np.concatenate([span, span ^ basis])
        basis = elements[images == basis][:1]  # none is left after the last
    return span


@lru_cache(maxsize=1)
def factors() -> Words:
    """uint64[128, 8]: the even points, each as the words of its planes (see `lanes.butterfly`)."""
    return np.where(points()[::2, None] >> np.arange(8) & 1 == 1, ALL, NONE)


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
def _evaluate(constants: Words, size: int, first: int, factors: Words, values: Words) -> None:
    """The way up: values[q] = the locator at point first + q, for q < size.

    With y = x^2 + x, f(x) = f0(y) + x f1(y) and f(x + 1) = f(x) + f1(y). In a Cantor basis, points 2q and
    2q + 1 of one step have y = point q of the step before, which stands in the same rows.
    """
    for row in range(size):
        lanes.copy(values, row, constants, row)
    stride = size // 2
    while stride:
        for start in range(0, size, 2 * stride):
            q = (first + start) // (2 * stride)
            for row in range(start, start + stride):
                lanes.butterfly(values, row, row + stride, factors, q)
        stride //= 2


@subroutine
def find_roots(
    constants: Words, size: int, factors: Words, place_of: Bytes, flags: Words, values: Words,
    roots: Bytes, found: Integers,
) -> None:  # fmt: skip
    """roots[0..found[lane], lane] = the places at which the locator is zero, in lanes that are not lost."""
    found[:] = 0
    for first in range(0, 256, size):
        _evaluate(constants, size, first, factors, values)
        for row in range(size):
            place = place_of[first + row]
            if place == NO_PLACE:
                continue
            lanes.nonzero(flags, CHOSEN, values, row)
            for w in range(PLANE_WORDS):
                zeros = ~(flags[CHOSEN, w] | flags[LOST, w])
                while zeros:
                    lane = 64 * w + lanes.lowest_bit(zeros)
                    zeros &= zeros - ONE
                    roots[found[lane], lane] = place
                    found[lane] += 1
