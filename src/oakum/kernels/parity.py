"""Parity and syndromes of Reed-Solomon codes by an additive Fourier transform.

The dense strip map multiplies every symbol r times. Here a column c_0 .. c_(n-1) with the locators x_i is
first reduced to moments

    s_j = sum over i of c_i P_j(x_i),    j = 0 .. r-1,

with polynomials P_j of degree j for which all moments together take m/2 multiplications a symbol,
2^m >= r. They say the same as the syndromes, the sums of c_i x_i^j, since the first r of any such
polynomials span the same space. Parity and syndromes follow by a matrix of r rows and columns.

The polynomials are those of Lin, Chung and Han, "Novel polynomial basis and its application to Reed-Solomon
erasure codes", FOCS 2014. An element of GF(2^8) is a byte, and W_i is the subspace of the bytes below 2^i:

    s_0(x) = x,  s_(i+1)(x) = s_i(x) (s_i(x) + s_i(2^i)),  zero on W_i;
    P_j = product of s_i / s_i(2^i) over the bits i of j that are set.

The paper evaluates a polynomial with given coefficients for P_0 .. P_(2^m - 1) at a coset of W_m by m layers
of butterflies; run backwards with every butterfly transposed, they give the moments of symbols whose
locators lie in that coset.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache, partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes, Field
from oakum.algebra.outer import OuterCode
from oakum.kernels import tiers
from oakum.kernels.arrays import Arrays, check_rows
from oakum.kernels.compiling import Kernel
from oakum.kernels.scratch import scratch
from oakum.kernels.stripmap import StripMap, affine_matrices, nibble_tables

CHUNK = 16 * 1024
"""Columns whose moments are held at a time, where they are not kept."""

BUTTERFLY = 2.25
"""Products of the dense map that take as long as one butterfly, measured with AVX2."""

POINTS = 256
"""Elements of the field, each of them a row of the transform; most stand for a symbol of the code."""

TILE = 256
"""Columns worked on at a time: with 5 layers, rows and sums are 16 KiB of the first-level cache."""

VECTOR = 32
"""Bytes of the widest vector of any tier; the width of a tile is made a multiple of it."""

LAYERS = range(4, 8)
"""The numbers of layers that the kernels can do."""


class ParityEncoder:
    """Parity and syndromes of columns of `outer`, bit by bit those of the dense strip maps.

    `tier` as in `oakum.kernels.tiers`; None takes the current one. Where moments do not pay (in the portable
    tier, for codes with few parity or few data symbols, and for codes whose first root is not 1), the dense
    maps do the work. All methods release the GIL and may be called from several threads at once.
    Rows are as for `StripMap.apply`. Raises UsageError for a tier that cannot be used here.
    """

    def __init__(self, outer: OuterCode, tier: str | None = None) -> None:
        self.outer = outer
        self.tier = tiers.current_tier() if tier is None else tiers.check_tier(tier)
        self.transform = Transform.of(outer, self.tier) if pays(outer, self.tier) else None
        if self.transform is None:
            self._sums = self._map(outer.parity_matrix)
            self._checks = self._map(outer.check_matrix)
        else:
            values = basis_values(outer.field, outer.r)[:, outer.locators]
            solution = inverse(outer.field, values[:, outer.k :])
            self._sums = self._map(values)
            self._parity = self._map(solution)
            self._checks = self._map(product(outer.field, outer.check_matrix[:, outer.k :], solution))

    def prepare(self) -> None:
        """Compile, or load, everything that the methods need, in the calling thread."""
        if self.transform is not None:
            KERNELS[self.tier].prepare()

    def apply(self, source: Bytes, out: Bytes) -> None:
        """Set `out`, uint8[r, L], to the parity of the data symbols in `source`.

        `source` is uint8[k', L], k' <= k, the first data symbols of every column; the others are zero.
        Raises ValueError for arrays that are not as described.
        """
        check(source, out, self.outer.k, self.outer.r)
        if self.transform is None:
            self._sums.apply(source, out)
        else:
            self._through_moments(source, out, self._parity)

    def add(self, source: Bytes, sums: Bytes, *, first: int = 0, accumulate: bool = False) -> None:
        """Set `sums`, uint8[r, L], to what data symbols contribute to the parity, or XOR it onto them.

        `source` is uint8[k', L] and stands for data symbols first..first+k'-1. When all have been added,
        `finish` makes parity of the sums. Raises ValueError for arrays that are not as described.
        """
        check(source, sums, self.outer.k, self.outer.r, first)
        self._add(source, sums, first, accumulate)

    def finish(self, sums: Bytes) -> None:
        """Turn sums, uint8[r, L], into parity, in place."""
        check(sums[:0], sums, self.outer.k, self.outer.r)
        if self.transform is not None:
            for start in range(0, sums.shape[1], CHUNK):
                part = sums[:, start : start + CHUNK]
                self._parity.apply(part.copy(), part)

    def syndromes(self, received: Bytes, out: Bytes) -> None:
        """Set `out`, uint8[r, L], to the syndromes of the columns of `received`, uint8[n', L], n' <= n.

        Symbols that are not given are zero. Raises ValueError for arrays that are not as described.
        """
        check(received, out, self.outer.n, self.outer.r)
        if self.transform is None:
            self._checks.apply(received, out)
        else:
            self._through_moments(received, out, self._checks)

    def _map(self, matrix: Bytes) -> StripMap:
        return StripMap(matrix, field_poly=self.outer.field_poly, tier=self.tier)

    def _add(self, source: Bytes, sums: Bytes, first: int, accumulate: bool) -> None:
        transform = self.transform
        if transform is None or len(source) * self.outer.r < transform.cost:
            self._sums.apply(source, sums, first=first, accumulate=accumulate)
        else:
            transform.run(KERNELS[self.tier], source, sums, first, accumulate)

    def _through_moments(self, source: Bytes, out: Bytes, last: StripMap) -> None:
        """Moments, chunk by chunk, and `last` applied to them."""
        length = source.shape[1]
        moments = np.empty((self.outer.r, min(CHUNK, length) + 64), np.uint8)
        for start in range(0, length, CHUNK):
            part = source[:, start : start + CHUNK]
            here = moments[:, : part.shape[1]]
            self._add(part, here, 0, False)
            last.apply(here, out[:, start : start + CHUNK])


@dataclass(frozen=True)
class Transform:
    """What a kernel needs to know of a code.

    `order` is the symbol that has each byte as its locator, int64[256], or far too large a number where there
    is none. `lambdas` are in the order of their use and in the form of the tier.
    """

    layers: int
    order: NDArray[np.int64]
    lambdas: NDArray[Any]

    @staticmethod
    def of(outer: OuterCode, tier: str) -> Transform:
        """The transform for the locators of `outer`."""
        layers = layers_for(outer.r)
        order = np.full(POINTS, 1 << 30, np.int64)
        order[outer.locators] = np.arange(outer.n)
        forms = affine_matrices if tier == "gfni" else nibble_tables
        lambdas = forms(outer.field_poly)[lambdas_in_order(outer.field, layers)]
        return Transform(layers, order, np.ascontiguousarray(lambdas))

    @property
    def cost(self) -> float:
        """The time of the transform of one column, in products of the dense map."""
        return cost(self.layers)

    def run(
        self, kernel: Callable[..., Any], source: Bytes, out: Bytes, first: int, accumulate: bool
    ) -> None:
        """Call a kernel on arrays that have been checked."""
        if not out.size:
            return
        kernel(
            Arrays.of(source, out, accumulate), first, self.order.ctypes.data, self.lambdas.ctypes.data,
            self.layers, scratch(scratch_size(self.layers)),
        )  # fmt: skip


def layers_for(r: int) -> int:
    """m, with 2^m >= r moments; at least what the kernels can do."""
    return max(LAYERS.start, (r - 1).bit_length())


def scratch_size(layers: int) -> int:
    """Bytes of scratch memory for a transform of 2^layers rows."""
    return 8 * POINTS + (1 + (2 << layers) + POINTS) * TILE


def cost(layers: int) -> float:
    """The time of one column's transform, in products of the dense map."""
    return BUTTERFLY * layers * POINTS / 2


def pays(outer: OuterCode, tier: str) -> bool:
    """Whether moments and a small matrix take less time than the dense map."""
    layers = layers_for(outer.r)
    if tier not in KERNELS or layers not in LAYERS or outer.first_root:
        return False
    return cost(layers) + outer.r**2 < outer.r * outer.k


@cache
def subspace_polynomials(field: Field) -> Bytes:
    """uint8[8, 256]: s_i / s_i(2^i) at every x. They are linear: that of x + y is the sum of both."""
    values = [np.arange(POINTS, dtype=np.uint8)]
    for i in range(7):
        values.append(field.multiply(values[i], values[i] ^ values[i][1 << i]))
    scale = field.inverse([values[i][1 << i] for i in range(8)])
    return field.multiply(np.stack(values), scale[:, None])


def basis_values(field: Field, count: int) -> Bytes:
    """uint8[count, 256]: P_j at every x, j < count."""
    values = np.ones((1, POINTS), np.uint8)
    for factor in subspace_polynomials(field):
        values = np.concatenate([values, field.multiply(values, factor)])
    return values[:count]


def lambdas_in_order(field: Field, layers: int) -> Bytes:
    """The lambdas of all cosets in the order in which a kernel uses them (see its `transform`).

    That of a block in layer i is s_i / s_i(2^i) at the block's first point. (P_j = P_k s_i / s_i(2^i) for
    j = k + 2^i, k < 2^i; s_i is the same at all 2^i points of the block's first half, and at those of its
    second half larger by s_i(2^i). So the moments with P_j are lambda * (a + b) + b.)
    """
    values = subspace_polynomials(field)
    used: list[int] = []

    def visit(start: int, layer: int, depth: int) -> None:
        """One pass: 2^depth rows from `start` on, 2^layer apart."""
        for i in range(layer, layer + depth):
            used.extend(int(values[i, start + (b << i)]) for b in range(0, 1 << (depth + layer - i), 2))

    size, opening = 1 << layers, 3 if layers % 2 else 2
    for coset in range(0, POINTS, size):
        for layer, depth in [(0, opening), *((layer, 2) for layer in range(opening, layers, 2))]:
            for start in range(coset, coset + size, 1 << (layer + depth)):
                visit(start, layer, depth)
    return np.array(used, np.uint8)


def product(field: Field, a: Bytes, b: Bytes) -> Bytes:
    """The product of two matrices."""
    return np.asarray(np.bitwise_xor.reduce(field.multiply(a[:, :, None], b[None]), axis=1))


def inverse(field: Field, matrix: Bytes) -> Bytes:
    """The inverse of a matrix whose leading minors are not zero, by Gauss and Jordan's elimination."""
    size = len(matrix)
    table = np.concatenate([matrix, np.eye(size, dtype=np.uint8)], axis=1)
    for pivot in range(size):
        table[pivot] = field.multiply(table[pivot], field.inverse(table[pivot, pivot]))
        others = table[:, pivot].copy()
        others[pivot] = 0
        table ^= field.multiply(others[:, None], table[pivot][None, :])
    return np.ascontiguousarray(table[:, size:])


def check(source: Bytes, out: Bytes, inputs: int, rows: int, first: int = 0) -> None:
    """Raises ValueError unless `source` and `out` are what a method describes."""
    check_rows(source, "source")
    check_rows(out, "out")
    count, length = source.shape
    if not out.flags.writeable:
        raise ValueError("out cannot be written")
    if out.shape != (rows, length):
        raise ValueError(f"out is {out.shape} and should be {(rows, length)}")
    if first < 0 or first + count > inputs:
        raise ValueError(f"symbols {first} to {first + count - 1} are not all among 0 to {inputs - 1}")


def gives_known_answer(compiled: Callable[..., Any], tier: str) -> bool:
    """Whether a kernel finds the moments of columns that hold one symbol each, by every kind of pass."""
    columns = np.arange(TILE + 77)
    for outer in (OuterCode(255, 191), OuterCode(255, 127)):
        symbols, weights = columns % outer.n, (columns % 251 + 1).astype(np.uint8)
        source = np.zeros((outer.n, len(columns)), np.uint8)
        source[symbols, columns] = weights
        out = before = np.resize(weights, (outer.r, len(columns)))
        out = before.copy()
        Transform.of(outer, tier).run(compiled, source[3:], out, 3, True)
        values = basis_values(outer.field, outer.r)[:, outer.locators[symbols]]
        expected = np.where(symbols < 3, 0, outer.field.multiply(values, weights))
        if not np.array_equal(out ^ before, expected):
            return False
    return True


def _kernel(tier: str) -> Kernel:
    known = partial(gives_known_answer, tier=tier)
    return Kernel(f".parity_kernels.moments_{tier}", known, "the parity transform")


KERNELS = {tier: _kernel(tier) for tier in ("gfni", "shuffle")}
