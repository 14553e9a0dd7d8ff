"""The kernel of the column decoder.

Columns are decoded in groups of 256 with the arithmetic of `oakum.kernels.lanes`, in which no step branches
on the content of a single column:

1. erasure locator, the product of (1 - X x) over the erased places' locators X;
2. error and erasure locator L(x) by Berlekamp and Massey's algorithm without inversion, started from the
   erasure locator (Blahut, Algebraic Codes for Data Transmission, section 7.4);
3. roots of L among all 256 elements by the additive Fourier transform (Cantor 1989; Gao and Mateer 2010);
4. evaluator W(x) = S(x) L(x) mod x^r, with S the syndromes, and magnitudes by Forney's formula.

A column is decoded if its locator has as many roots at the code's places as its length says, and the length
leaves room for 2 * errors + erasures <= r. Its syndromes then are exactly those of the magnitudes found: both
obey the recurrence that the locator stands for, and agree in the first of its length.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numba
import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes, Field
from oakum.algebra.outer import OuterCode
from oakum.kernels import lanes
from oakum.kernels.compiling import kernel

FIELD_POLY = lanes.FIELD_POLY
"""The field that the kernel computes in."""

Words = NDArray[np.uint64]
Integers = NDArray[np.int64]

FAILED = -1
"""The status of a column that could not be decoded."""

# rows of the table of the code's places
_LOCATOR, _INVERSE, _SCALE = range(3)
_NO_PLACE = 255

_WORDS = lanes.PLANE_WORDS
_LANES = lanes.LANES
_ALL = np.uint64(0xFFFF_FFFF_FFFF_FFFF)
_ZERO = np.uint64(0)
_ONE = np.uint64(1)

_step: Callable[[Callable[..., Any]], Any] = numba.njit(no_cpython_wrapper=True, no_cfunc_wrapper=True)
"""Decorator of the functions that the kernel calls; nothing else does, and leaving out the ways in saves time."""


# -- tables -------------------------------------------------------------------------------------------------


class Tables:
    """What the kernel has to know about a code.

    places: uint8[3, n], for each place its locator X, 1/X and X^(-first root), in the lanes' field;
    place_of: uint8[256], the place whose 1/X is the Fourier transform's point q, or `_NO_PLACE`;
    to_lanes, from_lanes: uint8[256], the code's field to the lanes' field and back.
    """

    def __init__(self, outer: OuterCode) -> None:
        field = Field(lanes.FIELD_POLY)
        self.to_lanes = lanes.field_map(outer.field_poly)
        self.from_lanes = np.argsort(self.to_lanes).astype(np.uint8)
        self.places = np.empty((3, outer.n), dtype=np.uint8)
        self.places[_LOCATOR] = self.to_lanes[outer.locators]
        self.places[_INVERSE] = field.inverse(self.places[_LOCATOR])
        self.places[_SCALE] = field.power(self.places[_INVERSE], outer.first_root)
        self.place_of = np.full(256, _NO_PLACE, dtype=np.uint8)
        self.place_of[np.argsort(_points())[self.places[_INVERSE]]] = np.arange(outer.n)


@lru_cache(maxsize=1)
def _points() -> Bytes:
    """uint8[256]: the points of the additive Fourier transform; point q is the sum of basis[i] over bits i of q.

    A Cantor basis: basis[0] = 1 and basis[i+1]^2 + basis[i+1] = basis[i] (Gao and Mateer 2010, appendix).
    """
    field = Field(lanes.FIELD_POLY)
    elements = np.arange(256, dtype=np.uint8)
    images = field.multiply(elements, elements) ^ elements
    points = np.zeros(256, dtype=np.uint8)
    basis = 1
    for bit in range(8):
        points[1 << bit : 2 << bit] = points[: 1 << bit] ^ basis
        basis = int(np.flatnonzero(images == basis)[0]) if bit < 7 else 0
    return points


@lru_cache(maxsize=1)
def factors() -> Words:
    """uint64[128, 8]: the even points of the additive Fourier transform, a word for each plane of `lanes.butterfly`."""
    return np.where(_points()[::2, None] >> np.arange(8) & 1 == 1, _ALL, _ZERO)


# -- the kernel ---------------------------------------------------------------------------------------------

# rows of the array of lane blocks that steer Berlekamp and Massey's algorithm
_GAMMA, _DELTA, _SWAP, _COUNTER, _FACTOR = range(5)

# rows of the array of sets of lanes, one bit a lane: in which the locator's length is too great,
# which have used up their erasures, and one for whatever comes
_LOST, _ACTIVE, _FLAGS = range(3)


@_step
def _gather(rows: Bytes, i: int, columns: Integers, gathered: Bytes) -> None:
    """gathered[0, 0..] = row i of `rows` at the columns of the group."""
    for lane in range(columns.size):
        gathered[0, lane] = rows[i, columns[lane]]


@_step
def _are_neighbours(columns: Integers) -> bool:
    """Whether the columns of the group are a full group side by side, and no gathering is needed."""
    return columns.size == _LANES and columns[_LANES - 1] - columns[0] == _LANES - 1


@_step
def _load_syndromes(syndromes: Bytes, columns: Integers, gathered: Bytes, blocks: Words) -> None:
    neighbours = _are_neighbours(columns)
    gathered[0, :] = 0
    for j in range(blocks.shape[0]):
        if neighbours:
            lanes.from_bytes(blocks, j, syndromes, j, columns[0])
        else:
            _gather(syndromes, j, columns, gathered)
            lanes.from_bytes(blocks, j, gathered, 0, 0)


@_step
def _load_erasures(
    erased: Bytes, columns: Integers, locators: Bytes, gathered: Bytes, flags: Words, staged: Bytes, erasures: Integers
) -> None:
    """Set erasures[lane] to the number of erased places and staged[0.., lane] to the locators of the first r."""
    neighbours = _are_neighbours(columns)
    staged[:, :] = 0
    gathered[0, :] = 0
    erasures[:] = 0
    for i in range(erased.shape[0]):
        if neighbours:
            lanes.nonzero_bytes(flags, _FLAGS, erased, i, columns[0])
        else:
            _gather(erased, i, columns, gathered)
            lanes.nonzero_bytes(flags, _FLAGS, gathered, 0, 0)
        for w in range(_WORDS):
            rest = flags[_FLAGS, w]
            while rest:
                lane = 64 * w + lanes.lowest_bit(rest)
                rest &= rest - _ONE
                if erasures[lane] < staged.shape[0]:
                    staged[erasures[lane], lane] = locators[i]
                erasures[lane] += 1


@_step
def _start(erasures: Integers, r: int, starts: Words) -> int:
    """Set bit lane of starts[i] if the search for errors starts at syndrome i; give the most erasures.

    A lane with more than r erasures is lost and runs along as if it had none.
    """
    most = 0
    starts[:, :] = _ZERO
    for lane in range(_LANES):
        count = erasures[lane] if erasures[lane] <= r else 0
        starts[count, lane >> 6] |= _ONE << np.uint64(lane & 63)
        most = max(most, count)
    return most


@_step
def _erasure_locator(staged: Bytes, count: int, locator: Words, control: Words) -> None:
    """locator = the product of (1 - X_e x) for e < count, where X_e is 0 in lanes with fewer erasures."""
    locator[:, :] = _ZERO
    locator[0, :_WORDS] = _ALL
    for e in range(count):
        lanes.from_bytes(control, _FACTOR, staged, e, 0)
        for j in range(e + 1, 0, -1):
            lanes.multiply_add(locator, j, control, _FACTOR, locator, j - 1, locator, j)


@_step
def _degree(polynomial: Words, top: int) -> int:
    """The highest coefficient up to `top` that is not zero in every lane, or 0."""
    while top > 0:
        for word in polynomial[top]:
            if word:
                return top
        top -= 1
    return 0


@_step
def _activate(flags: Words, starts: Words, i: int) -> bool:
    """Add the lanes that start at syndrome i to the active ones; whether there are any."""
    some = _ZERO
    for w in range(_WORDS):
        flags[_ACTIVE, w] |= starts[i, w]
        some |= flags[_ACTIVE, w]
    return some != _ZERO


@_step
def _steer(control: Words, flags: Words) -> bool:
    """Decide for each lane how its locator advances; False if no lane has anything to do but to shift.

    Let j syndromes have been used after the s erasures, for e errors; the counter is k = j - 2 e, in
    two's complement with the lost lanes as its sign. Where the discrepancy is not zero and k >= 0, the
    locator grows to j + 1 - e errors: k becomes -k - 1, which is the complement. In all other lanes k becomes
    k + 1. Lanes that have not started keep everything, which is a step with discrepancy 0 and a swap.
    """
    busy = _ZERO
    for w in range(_WORDS):
        active = flags[_ACTIVE, w]
        nonzero = _ZERO
        for b in range(w, lanes.BLOCK_WORDS, _WORDS):
            control[_DELTA, b] &= active
            nonzero |= control[_DELTA, b]
        grow = nonzero & ~flags[_LOST, w]
        control[_SWAP, w] = grow | ~active
        control[_SWAP, _WORDS + w] = grow
        carry = active & ~grow
        for b in range(w, lanes.BLOCK_WORDS, _WORDS):
            bit = control[_COUNTER, b] ^ grow
            control[_COUNTER, b] = bit ^ carry
            carry &= bit
        flags[_LOST, w] ^= grow ^ carry
        busy |= nonzero | ~active
    return busy != _ZERO


@_step
def _find_locator(
    syndromes: Words, starts: Words, erasures: int, locator: Words, previous: Words, control: Words, flags: Words
) -> int:
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
    flags[:, :] = _ZERO
    control[:, :] = _ZERO
    control[_GAMMA, :_WORDS] = _ALL
    degree = previous_degree = erasures
    lag = 0  # B(x) has to be multiplied by x^lag
    for i in range(r):
        if not _activate(flags, starts, i):
            continue
        lanes.inner_product(control, _DELTA, locator, 0, syndromes, i, min(degree, i) + 1)
        if not _steer(control, flags):
            lag += 1
            continue
        top = min(limit, max(degree, previous_degree + 1 + lag))
        for j in range(top, -1, -1):
            below = j - 1 - lag if j > lag else blank
            lanes.advance(locator, j, previous, j, below, control, _GAMMA, control, _DELTA, control, _SWAP)
        for b in range(lanes.BLOCK_WORDS):
            grow = control[_SWAP, _WORDS + b % _WORDS]
            control[_GAMMA, b] ^= (control[_GAMMA, b] ^ control[_DELTA, b]) & grow
        degree, previous_degree, lag = _degree(locator, top), _degree(previous, top), 0
    return degree


@_step
def _expand(locator: Words, degree: int, constants: Words) -> int:
    """The way down of the additive Fourier transform; gives the number of constants, a power of two.

    f(x) of 2^h coefficients becomes f0(y) + x f1(y) with y = x^2 + x, by Taylor expansion at x^2 + x, and so do
    f0 and f1, whose coefficients take turns in the rows, until all are constants.
    """
    size = 1
    while size <= degree:
        size *= 2
    constants[:size, :] = _ZERO
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


@_step
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


@_step
def _find_roots(
    constants: Words, size: int, factors: Words, place_of: Bytes, flags: Words, values: Words,
    roots: Bytes, found: Integers,
) -> None:  # fmt: skip
    """roots[0..found[lane], lane] = the places at which the locator is zero, in lanes that are not lost."""
    found[:] = 0
    for first in range(0, 256, size):
        _evaluate(constants, size, first, factors, values)
        for row in range(size):
            place = place_of[first + row]
            if place == _NO_PLACE:
                continue
            lanes.nonzero(flags, _FLAGS, values, row)
            for w in range(_WORDS):
                zeros = ~(flags[_FLAGS, w] | flags[_LOST, w])
                while zeros:
                    lane = 64 * w + lanes.lowest_bit(zeros)
                    zeros &= zeros - _ONE
                    roots[found[lane], lane] = place
                    found[lane] += 1


@_step
def _inverse(work: Words, out: int, a: int) -> None:
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


@_step
def _magnitudes(
    locator: Words, degree: int, evaluator: Words, places: Bytes, roots: Bytes, found: Integers, work: Words,
    staged: Bytes,
) -> None:  # fmt: skip
    """staged[e, lane] = the magnitude at the place roots[e, lane], by Forney's formula.

    For an error of magnitude Y at locator X: Y = X^(-first root) W(z) / D(z) with z = 1/X, where D(x), the
    terms of odd degree of L(x), is x times the derivative (Blahut, section 7.5).
    """
    z, squared, numerator, denominator, inverse = 0, 1, 2, 3, 4  # and two more for `_inverse`
    last_odd = degree - 1 + degree % 2
    most = 0
    for lane in range(_LANES):
        most = max(most, found[lane])
    for e in range(most):
        for lane in range(_LANES):
            staged[e, lane] = places[_INVERSE, roots[e, lane]] if e < found[lane] else 0
        lanes.from_bytes(work, z, staged, e, 0)
        lanes.square(work, squared, work, z)
        lanes.copy(work, numerator, evaluator, degree - 1)
        for j in range(degree - 2, -1, -1):
            lanes.multiply_add(work, numerator, work, numerator, work, z, evaluator, j)
        lanes.copy(work, denominator, locator, last_odd)
        for j in range(last_odd - 2, 0, -2):
            lanes.multiply_add(work, denominator, work, denominator, work, squared, locator, j)
        lanes.multiply(work, denominator, work, denominator, work, z)
        _inverse(work, inverse, denominator)
        lanes.multiply(work, numerator, work, numerator, work, inverse)
        for lane in range(_LANES):
            staged[e, lane] = places[_SCALE, roots[e, lane]] if e < found[lane] else 0
        lanes.from_bytes(work, z, staged, e, 0)
        lanes.multiply(work, numerator, work, numerator, work, z)
        lanes.to_bytes(staged, e, work, numerator)


@_step
def _reject_lost(erasures: Integers, r: int, counter: Bytes, flags: Words, found: Integers) -> None:
    """Set found[lane] = FAILED unless the locator has as many roots as it should.

    The counter k = r - s - 2 e gives the number of errors e that the locator stands for.
    """
    for lane in range(_LANES):
        lost = flags[_LOST, lane >> 6] >> np.uint64(lane & 63) & _ONE
        expected = erasures[lane] + (r - erasures[lane] - counter[0, lane]) // 2
        if lost or erasures[lane] > r or found[lane] != expected:
            found[lane] = FAILED


@_step
def _store(
    columns: Integers, erased: Bytes, roots: Bytes, found: Integers, staged: Bytes,
    magnitudes: Bytes, status: NDArray[np.int16],
) -> None:  # fmt: skip
    """Write out the magnitudes and count the errors outside the erased places."""
    for lane in range(columns.size):
        column = columns[lane]
        errors = min(found[lane], 0)  # FAILED or 0
        for e in range(found[lane]):
            place, magnitude = roots[e, lane], staged[e, lane]
            magnitudes[place, column] = magnitude
            if magnitude and not (erased.shape[0] and erased[place, column]):
                errors += 1
        status[column] = errors


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
    compiled(syndromes, erased, columns, tables.places, tables.place_of, factors(), found, status)
    expected = np.where(within, np.count_nonzero(errors * (1 - erased), axis=0), FAILED)
    return np.array_equal(status, expected) and np.array_equal(found, errors * within)


@kernel(
    "void(Array(uint8, 2, 'C', True), Array(uint8, 2, 'C', True), int64[::1], uint8[:, ::1], uint8[::1], "
    "uint64[:, ::1], uint8[:, :], int16[::1])",
    self_test=_self_test,
    purpose="the column decoder",
)
def decode_columns(
    syndromes: Bytes, erased: Bytes, columns: Integers, places: Bytes, place_of: Bytes, factors: Words,
    magnitudes: Bytes, status: NDArray[np.int16],
) -> None:  # fmt: skip
    """Write the magnitudes of the chosen `columns`, in rising order, into magnitudes[n, L] and their status[L].

    erased[n, L] may have no rows: nothing is erased. `places` and `place_of` as in `Tables`.
    """
    r = syndromes.shape[0]
    blocks = np.zeros((r, lanes.BLOCK_WORDS), dtype=np.uint64)
    evaluator = np.zeros((r, lanes.BLOCK_WORDS), dtype=np.uint64)
    locator = np.zeros((r + 2, lanes.BLOCK_WORDS), dtype=np.uint64)
    previous = np.zeros((r + 2, lanes.BLOCK_WORDS), dtype=np.uint64)
    constants = np.zeros((256, lanes.BLOCK_WORDS), dtype=np.uint64)
    values = np.zeros((256, lanes.BLOCK_WORDS), dtype=np.uint64)
    control = np.zeros((8, lanes.BLOCK_WORDS), dtype=np.uint64)
    flags = np.zeros((3, _WORDS), dtype=np.uint64)
    starts = np.zeros((r + 1, _WORDS), dtype=np.uint64)
    gathered = np.zeros((1, _LANES), dtype=np.uint8)
    staged = np.zeros((r, _LANES), dtype=np.uint8)
    roots = np.zeros((r, _LANES), dtype=np.uint8)
    found = np.zeros((1, _LANES), dtype=np.int64)[0]
    erasures = np.zeros((1, _LANES), dtype=np.int64)[0]
    for first in range(0, columns.size, _LANES):
        group = columns[first : first + _LANES]
        _load_syndromes(syndromes, group, gathered, blocks)
        _load_erasures(erased, group, places[_LOCATOR], gathered, flags, staged, erasures)
        most = _start(erasures, r, starts)
        _erasure_locator(staged, most, locator, control)
        degree = _find_locator(blocks, starts, most, locator, previous, control, flags)
        size = _expand(locator, degree, constants)
        _find_roots(constants, size, factors, place_of, flags, values, roots, found)
        lanes.to_bytes(gathered, 0, control, _COUNTER)
        _reject_lost(erasures, r, gathered, flags, found)
        if degree:
            for j in range(degree):
                lanes.inner_product(evaluator, j, locator, 0, blocks, j, j + 1)
            _magnitudes(locator, degree, evaluator, places, roots, found, control, staged)
        _store(group, erased, roots, found, staged, magnitudes, status)
