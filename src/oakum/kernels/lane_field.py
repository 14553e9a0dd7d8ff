"""The field of the lanes (see `oakum.kernels.lanes`), for all who need not compile.

It is that of 0x11D. The other fields of 256 elements are isomorphic to it: see `field_map`.
"""

from __future__ import annotations

from functools import cache

import numpy as np

from oakum.algebra.field import ORDER, Bytes, Field

FIELD = Field(0x11D)
POINTS = 256
LANES = 256
"""Columns that are worked on at once."""

PLANE_WORDS = LANES // 64
BLOCK_WORDS = 8 * PLANE_WORDS


@cache
def points() -> Bytes:
    """uint8[256]: the field's elements in the order of a Cantor basis b_0 = 1, b_(i+1)^2 + b_(i+1) = b_i.

    Point q is the sum of b_i over the bits i of q.
    """
    elements = np.arange(POINTS, dtype=np.uint8)
    images = FIELD.multiply(elements, elements) ^ elements
    span = np.zeros(1, dtype=np.uint8)
    basis = np.ones(1, dtype=np.uint8)
    while span.size < POINTS:
        span = np.concatenate([span, span ^ basis])
        basis = elements[images == basis][:1]  # none is left after the last
    return span


def field_map(poly: int) -> Bytes:
    """uint8[256]: an isomorphism from GF(2^8) with field polynomial `poly` to the field of the lanes.

    alpha goes to a root g of `poly` in the lanes' field, and alpha^i to g^i (Lidl and Niederreiter, Finite
    Fields, chapter 2). Sums and products of images are the images of sums and products.
    """
    powers_of_x = [i for i in range(9) if poly >> i & 1]
    for log_g in range(1, ORDER):
        powers_of_g = FIELD.exp[log_g * np.arange(ORDER) % ORDER]
        if np.bitwise_xor.reduce(powers_of_g[powers_of_x]) == 0:
            image = np.zeros(256, dtype=np.uint8)
            image[Field(poly).exp[:ORDER]] = powers_of_g
            return image
    raise ValueError(f"the polynomial {poly:#x} has no root in a field of 256 elements")
