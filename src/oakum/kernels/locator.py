"""The error and erasure locator of 256 columns at once.

Berlekamp and Massey's algorithm, without inversion and started from the erasure locator (Blahut, Algebraic
Codes for Data Transmission, section 7.4), on lane blocks (see `oakum.kernels.lanes`). What differs from lane
to lane is decided by sets of lanes, one bit each.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes
from oakum.kernels import lanes
from oakum.kernels.lanes import ALL, BLOCK_WORDS, LANES, NONE, ONE, PLANE_WORDS, subroutine

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]

# rows of the lane blocks that steer the algorithm; rows after these are anyone's
GAMMA, DELTA, SWAP, COUNTER, FACTOR = range(5)

# rows of the sets of lanes: whose locator is too long, who have used up their erasures, and any other set
LOST, ACTIVE, CHOSEN = range(3)


@subroutine
def find_starts(erasures: Integers, r: int, starts: Words) -> int:
    """Set bit lane of starts[i] if the search for errors starts at syndrome i; give the most erasures.

    A lane with more than r erasures is lost and runs along as if it had none.
    """
    most = 0
    starts[:, :] = NONE
    for lane in range(LANES):
        count = erasures[lane] if erasures[lane] <= r else 0
        starts[count, lane >> 6] |= ONE << np.uint64(lane & 63)
        most = max(most, count)
    return most


@subroutine
def find_erasure_locator(staged: Bytes, count: int, locator: Words, control: Words) -> None:
    """locator = the product of (1 - X_e x) for e < count, where X_e is 0 in lanes with fewer erasures."""
    locator[:, :] = NONE
    locator[0, :PLANE_WORDS] = ALL
    for e in range(count):
        lanes.from_bytes(control, FACTOR, staged, e, 0)
        for j in range(e + 1, 0, -1):
            lanes.multiply_add(locator, j, control, FACTOR, locator, j - 1, locator, j)


@subroutine
def _degree(polynomial: Words, top: int) -> int:
    """The highest coefficient up to `top` that is not zero in every lane, or 0."""
    while top > 0:
        for word in polynomial[top]:
            if word:
                return top
        top -= 1
    return 0


@subroutine
def _activate(flags: Words, starts: Words, i: int) -> bool:
    """Add the lanes that start at syndrome i to the active ones; whether there are any."""
    some = NONE
    for w in range(PLANE_WORDS):
        flags[ACTIVE, w] |= starts[i, w]
        some |= flags[ACTIVE, w]
    return bool(some != NONE)


@subroutine
def _steer(control: Words, flags: Words) -> bool:
    """Decide for each lane how its locator advances; False if no lane has anything to do but to shift.

    Let j syndromes have been used after the s erasures, for e errors; the counter is k = j - 2 e, in
    two's complement with the lost lanes as its sign. Where the discrepancy is not zero and k >= 0, the
    locator grows to j + 1 - e errors: k becomes -k - 1, which is the complement. In all other lanes k becomes
    k + 1. Lanes that have not started keep everything, which is a step with discrepancy 0 and a swap.
    """
    busy = NONE
    for w in range(PLANE_WORDS):
        active = flags[ACTIVE, w]
        nonzero = NONE
        for b in range(w, BLOCK_WORDS, PLANE_WORDS):
            control[DELTA, b] &= active
            nonzero |= control[DELTA, b]
        grow = nonzero & ~flags[LOST, w]
        control[SWAP, w] = grow | ~active
        control[SWAP, PLANE_WORDS + w] = grow
        carry = active & ~grow
        for b in range(w, BLOCK_WORDS, PLANE_WORDS):
            bit = control[COUNTER, b] ^ grow
            control[COUNTER, b] = bit ^ carry
            carry &= bit
        flags[LOST, w] ^= grow ^ carry
        busy |= nonzero | ~active
    return bool(busy != NONE)


@subroutine
def find_locator(
    syndromes: Words, starts: Words, erasures: int, locator: Words, previous: Words, control: Words,
    flags: Words,
) -> int:  # fmt: skip
    """Berlekamp and Massey's algorithm from the erasure locator in `locator`; gives the greatest degree.

    In each step, with discrepancy d and the last discrepancy g that made the locator grow,
    L(x) becomes g L(x) + d x B(x), and B(x) becomes L(x) where that grows, x B(x) elsewhere.
    Coefficients above (r + erasures) / 2 belong only to lanes that are lost, and are left out.
    """
    r = syndromes.shape[0]
    limit = (r + erasures) // 2
    blank = previous.shape[0] - 1  # a row that stays zero
    for row in range(locator.shape[0]):
        lanes.copy(previous, row, locator, row)
    flags[:, :] = NONE
    control[:, :] = NONE
    control[GAMMA, :PLANE_WORDS] = ALL
    degree = previous_degree = erasures
    lag = 0  # B(x) has to be multiplied by x^lag
    for i in range(r):
        if not _activate(flags, starts, i):
            continue
        lanes.inner_product(control, DELTA, locator, 0, syndromes, i, min(degree, i) + 1)
        if not _steer(control, flags):
            lag += 1
            continue
        top = min(limit, max(degree, previous_degree + 1 + lag))
        for j in range(top, -1, -1):
            below = j - 1 - lag if j > lag else blank
            lanes.advance(locator, j, previous, j, below, control, GAMMA, DELTA, SWAP)
        for b in range(BLOCK_WORDS):
            grow = control[SWAP, PLANE_WORDS + b % PLANE_WORDS]
            control[GAMMA, b] ^= (control[GAMMA, b] ^ control[DELTA, b]) & grow
        degree, previous_degree, lag = _degree(locator, top), _degree(previous, top), 0
    return degree
