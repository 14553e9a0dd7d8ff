"""LLVM code for arithmetic in GF(2^8) on lane blocks: the instructions behind `oakum.kernels.lanes`.

An element in 256 lanes is eight planes, vectors of 256 bits, lowest power of x first. The functions take and
give planes as values of LLVM's intermediate code and write instructions where `builder` stands.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from llvmlite import ir
from numba import types

from oakum.kernels.lane_field import FIELD, PLANE_WORDS
from oakum.kernels.simd import I1, I8, I64, Builder, Value

Planes = list[Value]

PLANE = ir.VectorType(I64, PLANE_WORDS)
BYTES = ir.VectorType(I8, 64)
FLAGS = ir.VectorType(I1, 64)
NO_LANES = ir.Constant(PLANE, [0] * PLANE_WORDS)


def number(value: int) -> Value:
    return ir.Constant(I64, value)


def all_bytes(byte: int) -> Value:
    return ir.Constant(BYTES, [byte] * 64)


def plain(context: Any, builder: Builder, kind: Any, argument: Value) -> list[Value]:
    """An argument of numba's as numbers and addresses: of a matrix, its data and the length of its rows."""
    if not isinstance(kind, types.Array):
        return [argument]
    view = context.make_array(kind)(context, builder, value=argument)
    return [view.data, builder.extract_value(view.shape, 1)]


class Rows:
    """A matrix of bytes or words in C order, from what `plain` gives."""

    def __init__(self, builder: Builder, kind: types.Array, data: Value, width: Value) -> None:
        self._builder = builder
        self._element = I8 if kind.dtype == types.uint8 else I64
        self._data = data
        self._width = width

    def address(self, row: Value, column: Value, pointed: Any) -> Value:
        """The address of [row, column], to load or store a value of the type `pointed` there."""
        index = self._builder.add(self._builder.mul(row, self._width), column)
        element = self._builder.gep(self._data, [index], source_etype=self._element)
        return self._builder.bitcast(element, pointed.as_pointer())

    def load(self, row: Value, column: Value, pointed: Any) -> Value:
        return self._builder.load(self.address(row, column, pointed), align=self._align, typ=pointed)

    def store(self, value: Value, row: Value, column: Value) -> None:
        self._builder.store(value, self.address(row, column, value.type), align=self._align)

    def load_block(self, row: Value) -> Planes:
        """The planes of the lane block in row `row`."""
        return [self.load(row, number(b * PLANE_WORDS), PLANE) for b in range(8)]

    def store_block(self, planes: Planes, row: Value) -> None:
        for b, plane in enumerate(planes):
            self.store(plane, row, number(b * PLANE_WORDS))

    @property
    def _align(self) -> int:
        return int(self._element.width) // 8


def add(builder: Builder, a: Planes, b: Planes) -> Planes:
    return [builder.xor(x, y) for x, y in zip(a, b, strict=True)]


def multiply(builder: Builder, a: Planes, b: Planes) -> Planes:
    return reduce(builder, join(builder, products(builder, a, b)))


def linear(builder: Builder, a: Planes, images: Sequence[int]) -> Planes:
    """The image of `a` under the linear map that takes x^b to images[b]: nothing but sums of planes."""
    total = [NO_LANES] * 8
    for plane, image in zip(a, images, strict=True):
        total = [builder.xor(t, plane) if image >> p & 1 else t for p, t in enumerate(total)]
    return total


def multiply_by(builder: Builder, a: Planes, factor: int) -> Planes:
    """The product by one element, the same in all lanes."""
    return linear(builder, a, [int(FIELD.multiply(1 << b, factor)) for b in range(8)])


def square(builder: Builder, a: Planes) -> Planes:
    spread = [plane for original in a for plane in (original, NO_LANES)]
    return reduce(builder, spread[:-1])


def halves(builder: Builder, a: Planes) -> list[Planes]:
    """Low half, high half and their sum: the factors of the three products of Karatsuba's method."""
    low, high = a[:4], a[4:]
    return [low, high, add(builder, low, high)]


def products(builder: Builder, a: Planes, b: Planes) -> list[Planes]:
    """The three products of Karatsuba's method, for `join`."""
    factors = zip(halves(builder, a), halves(builder, b), strict=True)
    return [schoolbook(builder, x, y) for x, y in factors]


def schoolbook(builder: Builder, a: Planes, b: Planes, total: Planes | None = None) -> Planes:
    """`total` and the product as polynomials over GF(2): an AND for every pair of planes."""
    product = list(total or [NO_LANES] * (len(a) + len(b) - 1))
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            product[i + j] = builder.xor(product[i + j], builder.and_(x, y))
    return product


def join(builder: Builder, three: list[Planes]) -> Planes:
    """low + x^4 (both - low - high) + x^8 high: 15 planes.

    It is linear: where products are added up, their parts can be added up and joined once.
    """
    low, high, both = three
    joined = [*low, NO_LANES, *high]
    for power, middle in enumerate(add(builder, both, add(builder, low, high)), start=4):
        joined[power] = builder.xor(joined[power], middle)
    return joined


def reduce(builder: Builder, product: Planes) -> Planes:
    """The remainder modulo the field polynomial, from the highest power down."""
    planes = list(product)
    for i in range(len(planes) - 1, 7, -1):
        for power in range(8):
            if FIELD.poly >> power & 1:
                planes[i - 8 + power] = builder.xor(planes[i - 8 + power], planes[i])
    return planes[:8]
