"""The magnitudes of 256 columns' errors and erasures at once, by Forney's formula."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes
from oakum.kernels import lanes
from oakum.kernels.lanes import LANES, subroutine

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]

# rows of the working space; `_invert` uses two more after the last
_Z, _SQUARE, _NUMERATOR, _DENOMINATOR, _INVERSE = range(5)


@subroutine
def find_evaluator(locator: Words, degree: int, syndromes: Words, evaluator: Words) -> None:
    """evaluator = S(x) L(x) mod x^degree; the terms above are zero in every lane that is not lost."""
    for j in range(degree):
        lanes.inner_product(evaluator, j, locator, 0, syndromes, j, j + 1)


@subroutine
def find_magnitudes(
    locator: Words, degree: int, evaluator: Words, scale_of: Bytes, roots: Bytes, found: Integers,
    work: Words, staged: Bytes,
) -> None:  # fmt: skip
    """staged[e, lane] = the magnitude at the place whose 1/X is point roots[e, lane], for e < found[lane].

    For a magnitude Y at locator X, Y = X^(-first root) W(z) / D(z) with z = 1/X, where D(x), the terms of
    odd degree of L(x), is x times the derivative (Blahut, section 7.5). `scale_of` holds X^(-first root) for
    every point, or nothing where that is 1. Lanes with fewer roots get what has no meaning.
    """
    last_odd = degree - 1 + degree % 2
    most = 0
    for lane in range(LANES):
        most = max(most, found[lane])
    for e in range(most):
        lanes.from_bytes(work, _NUMERATOR, roots, e, 0)
        lanes.point(work, _Z, work, _NUMERATOR)
        lanes.square(work, _SQUARE, work, _Z)
        lanes.copy(work, _NUMERATOR, evaluator, degree - 1)
        for j in range(degree - 2, -1, -1):
            lanes.multiply_add(work, _NUMERATOR, work, _NUMERATOR, work, _Z, evaluator, j)
        lanes.copy(work, _DENOMINATOR, locator, last_odd)
        for j in range(last_odd - 2, 0, -2):
            lanes.multiply_add(work, _DENOMINATOR, work, _DENOMINATOR, work, _SQUARE, locator, j)
        lanes.multiply(work, _DENOMINATOR, work, _DENOMINATOR, work, _Z)
        _invert(work, _INVERSE, _DENOMINATOR)
        lanes.multiply(work, _NUMERATOR, work, _NUMERATOR, work, _INVERSE)
        if scale_of.size:
            for lane in range(LANES):
                staged[e, lane] = scale_of[roots[e, lane]]
            lanes.from_bytes(work, _Z, staged, e, 0)
            lanes.multiply(work, _NUMERATOR, work, _NUMERATOR, work, _Z)
        lanes.to_bytes(staged, e, work, _NUMERATOR)


@subroutine
def _invert(work: Words, out: int, a: int) -> None:
    """work[out] = 1 / work[a] (0 for 0), as a^254; rows out + 1 and out + 2 are used up."""
    lanes.square(work, out, work, a)  # a^2
    lanes.multiply(work, out + 1, work, out, work, a)  # a^3
    lanes.square(work, out + 2, work, out + 1)
    lanes.square(work, out + 2, work, out + 2)  # a^12
    lanes.multiply(work, out, work, out, work, out + 2)  # a^14
    lanes.multiply(work, out + 2, work, out + 1, work, out + 2)  # a^15
    for _ in range(4):
        lanes.square(work, out + 2, work, out + 2)  # a^240
    lanes.multiply(work, out, work, out, work, out + 2)  # a^254
