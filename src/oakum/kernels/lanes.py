"""Arithmetic in GF(2^8) on 256 columns at once, bit-sliced.

A *lane block* holds one field element for each of 256 columns (lanes) as eight planes of 256 bits: bit l of
plane b is bit b of lane l's element. Blocks are the rows of arrays uint64[rows, 32]; plane b is words 4b to
4b + 3, and lane l is bit l % 64 of word l // 64. In this form adding is one XOR a plane, and multiplying is
the product of two polynomials over GF(2), made of ANDs and XORs of planes: any CPU does both on its widest
registers, without tables and without branches (Biham 1997, for the idea).

The field is that of `oakum.kernels.lane_field`. All functions are for use in numba's subset of Python. A
block is given by two arguments, its array and its row, and the result comes first.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from llvmlite import ir
from numba import types
from numba.core import cgutils

from oakum.kernels import planes
from oakum.kernels.compiler import subroutine
from oakum.kernels.lane_field import BLOCK_WORDS, LANES, PLANE_WORDS, points
from oakum.kernels.planes import NO_LANES, Rows, number
from oakum.kernels.simd import I1, I64, Builder, Value, intrinsic, variable

__all__ = ["ALL", "BLOCK_WORDS", "LANES", "NONE", "ONE", "PLANE_WORDS", "subroutine"]

NONE, ONE, ALL = np.uint64(0), np.uint64(1), np.uint64(0xFFFF_FFFF_FFFF_FFFF)
"""Words of sets of lanes: no lane, the first, all."""


# -- how intrinsics are made --------------------------------------------------------------------------------


def _void(emit: Callable[..., None], *kinds: Any) -> tuple[Any, Callable[..., Value]]:
    """An intrinsic without result: numba's types of its arguments (None for a number) and its code.

    `emit` is called with the builder and the arguments, arrays as `Rows`. What it writes becomes a function
    of its own, of which a kernel holds one copy however often it calls it: that compiles in less time and
    runs as fast.
    """

    def codegen(context: Any, builder: Builder, signature: Any, arguments: Sequence[Value]) -> Value:
        plain = []
        for kind, argument in zip(signature.args, arguments, strict=True):
            plain += planes.plain(context, builder, kind, argument)
        name = f"oakum.lanes.{emit.__qualname__.partition('.')[0]}"
        function = builder.module.globals.get(name)
        if function is None:
            function = ir.Function(
                builder.module, ir.FunctionType(ir.VoidType(), [value.type for value in plain]), name
            )
            _define(function, emit, signature.args)
        builder.call(function, plain)
        return context.get_dummy_value()

    return types.void(*(types.int64 if kind is None else kind for kind in kinds)), codegen


def _define(function: ir.Function, emit: Callable[..., None], kinds: Sequence[Any]) -> None:
    function.linkage = "linkonce_odr"  # linking joins the copies of a kernel's parts
    for attribute in ("noinline", "nounwind"):
        function.attributes.add(attribute)
    builder = Builder(function.append_basic_block("entry"))
    values = iter(function.args)
    arguments = [
        Rows(builder, kind, next(values), next(values)) if isinstance(kind, types.Array) else next(values)
        for kind in kinds
    ]
    emit(builder, *arguments)
    builder.ret_void()


# -- arithmetic ---------------------------------------------------------------------------------------------


@intrinsic
def copy(typing: Any, out: Any, i: Any, a: Any, j: Any) -> Any:
    """out[i] = a[j]"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value) -> None:
        out.store_block(a.load_block(j), i)

    return _void(emit, out, None, a, None)


@intrinsic
def add(typing: Any, out: Any, i: Any, a: Any, j: Any) -> Any:
    """out[i] += a[j]"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value) -> None:
        out.store_block(planes.add(builder, out.load_block(i), a.load_block(j)), i)

    return _void(emit, out, None, a, None)


@intrinsic
def multiply(typing: Any, out: Any, i: Any, a: Any, j: Any, b: Any, k: Any) -> Any:
    """out[i] = a[j] * b[k]"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value, b: Rows, k: Value) -> None:
        out.store_block(planes.multiply(builder, a.load_block(j), b.load_block(k)), i)

    return _void(emit, out, None, a, None, b, None)


@intrinsic
def multiply_add(typing: Any, out: Any, i: Any, a: Any, j: Any, b: Any, k: Any, c: Any, m: Any) -> Any:
    """out[i] = a[j] * b[k] + c[m]"""

    def emit(
        builder: Builder, out: Rows, i: Value, a: Rows, j: Value, b: Rows, k: Value, c: Rows, m: Value
    ) -> None:
        product = planes.multiply(builder, a.load_block(j), b.load_block(k))
        out.store_block(planes.add(builder, product, c.load_block(m)), i)

    return _void(emit, out, None, a, None, b, None, c, None)


@intrinsic
def square(typing: Any, out: Any, i: Any, a: Any, j: Any) -> Any:
    """out[i] = a[j]^2"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value) -> None:
        out.store_block(planes.square(builder, a.load_block(j)), i)

    return _void(emit, out, None, a, None)


@intrinsic
def point(typing: Any, out: Any, i: Any, a: Any, j: Any) -> Any:
    """out[i] = the points of the Fourier transform whose numbers are the bytes a[j]"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value) -> None:
        basis = [int(points()[1 << b]) for b in range(8)]
        out.store_block(planes.linear(builder, a.load_block(j), basis), i)

    return _void(emit, out, None, a, None)


@intrinsic
def inner_product(typing: Any, out: Any, i: Any, a: Any, j: Any, b: Any, k: Any, count: Any) -> Any:
    """out[i] = a[j] * b[k] + a[j+1] * b[k-1] + ..., `count` terms: a coefficient of a product"""

    def emit(
        builder: Builder, out: Rows, i: Value, a: Rows, j: Value, b: Rows, k: Value, count: Value
    ) -> None:
        totals = []
        for part in range(3):  # in three passes, so that the sums of each stay in registers
            sums = [variable(builder, planes.NO_LANES) for _ in range(7)]
            with cgutils.for_range(builder, count) as loop:
                x = planes.halves(builder, a.load_block(builder.add(j, loop.index)))[part]
                y = planes.halves(builder, b.load_block(builder.sub(k, loop.index)))[part]
                for total, term in zip(sums, planes.schoolbook(builder, x, y), strict=True):
                    builder.store(builder.xor(builder.load(total), term), total)
            totals.append([builder.load(total) for total in sums])
        out.store_block(planes.reduce(builder, planes.join(builder, totals)), i)

    return _void(emit, out, None, a, None, b, None, None)


@intrinsic
def advance(typing: Any, a: Any, i: Any, b: Any, j: Any, k: Any, control: Any, g: Any, d: Any, s: Any) -> Any:
    """One coefficient of a step of Berlekamp and Massey's algorithm.

    a[i] = control[g] * a[i] + control[d] * b[k], and b[j] = the former a[i] in the lanes of plane 0 of
    control[s], b[k] in the others
    """

    def emit(
        builder: Builder, a: Rows, i: Value, b: Rows, j: Value, k: Value, control: Rows, g: Value, d: Value,
        s: Value,
    ) -> None:  # fmt: skip
        old, shifted = a.load_block(i), b.load_block(k)
        blocks = (control.load_block(g), old, control.load_block(d), shifted)
        parts = zip(*(planes.halves(builder, block) for block in blocks), strict=True)
        sums = [planes.schoolbook(builder, x, y, planes.schoolbook(builder, u, v)) for u, v, x, y in parts]
        a.store_block(planes.reduce(builder, planes.join(builder, sums)), i)
        swapped = control.load(s, number(0), planes.PLANE)
        difference = [builder.and_(swapped, plane) for plane in planes.add(builder, old, shifted)]
        b.store_block(planes.add(builder, shifted, difference), j)

    return _void(emit, a, None, b, None, None, control, None, None, None)


@intrinsic
def butterfly(typing: Any, a: Any, i: Any, j: Any, q: Any) -> Any:
    """a[i] += f * a[j], then a[j] += a[i], where f is point 2q of the Fourier transform, in all lanes

    A product by a constant is nothing but sums of planes, so every f has a piece of code of its own.
    """

    def emit(builder: Builder, a: Rows, i: Value, j: Value, q: Value) -> None:
        second = a.load_block(j)
        done = builder.function.append_basic_block("done")
        ways = []
        choice = builder.switch(q, done)  # to `done`, with whatever product, if there is no such point
        for number_of_point, factor in enumerate(points()[::2]):
            block = builder.function.append_basic_block()
            choice.add_case(number(number_of_point), block)
            builder.position_at_end(block)
            ways.append((planes.multiply_by(builder, second, int(factor)), block))
            builder.branch(done)
        ways.append(([NO_LANES] * 8, builder.function.entry_basic_block))
        builder.position_at_end(done)
        product = []
        for plane in range(8):
            product.append(builder.phi(planes.PLANE))
            for values, block in ways:
                product[plane].add_incoming(values[plane], block)
        first = planes.add(builder, a.load_block(i), product)
        a.store_block(first, i)
        a.store_block(planes.add(builder, a.load_block(j), first), j)

    return _void(emit, a, None, None, None)


# -- sets of lanes ------------------------------------------------------------------------------------------


@intrinsic
def nonzero(typing: Any, out: Any, i: Any, a: Any, j: Any) -> Any:
    """Words out[i, 0..3] = the lanes in which a[j] is not zero"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value) -> None:
        found = planes.NO_LANES
        for plane in a.load_block(j):
            found = builder.or_(found, plane)
        out.store(found, i, number(0))

    return _void(emit, out, None, a, None)


@intrinsic
def nonzero_bytes(typing: Any, out: Any, i: Any, a: Any, j: Any, first: Any) -> Any:
    """Words out[i, 0..3] = the lanes in which the bytes a[j, first..first+255] are not zero"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value, first: Value) -> None:
        for word in range(PLANE_WORDS):
            some = a.load(j, builder.add(first, number(64 * word)), planes.BYTES)
            flags = builder.icmp_unsigned("!=", some, planes.all_bytes(0))
            out.store(builder.bitcast(flags, I64), i, number(word))

    return _void(emit, out, None, a, None, None)


@intrinsic
def lowest_bit(typing: Any, word: Any) -> Any:
    """The number of the lowest bit that is set in `word`, which is not zero"""

    def codegen(context: Any, builder: Builder, signature: Any, arguments: Sequence[Value]) -> Value:
        return builder.cttz(arguments[0], ir.Constant(I1, 1))

    return types.int64(types.uint64), codegen


# -- bytes to planes and back -------------------------------------------------------------------------------


@intrinsic
def from_bytes(typing: Any, out: Any, i: Any, a: Any, j: Any, first: Any) -> Any:
    """out[i] = the elements that are the bytes a[j, first..first+255]"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value, first: Value) -> None:
        for word in range(PLANE_WORDS):
            elements = a.load(j, builder.add(first, number(64 * word)), planes.BYTES)
            for plane in range(8):
                # CPUs with byte vectors can collect the bytes' signs in a word
                at_sign = builder.shl(elements, planes.all_bytes(7 - plane))
                flags = builder.icmp_signed("<", at_sign, planes.all_bytes(0))
                out.store(builder.bitcast(flags, I64), i, number(PLANE_WORDS * plane + word))

    return _void(emit, out, None, a, None, None)


@intrinsic
def to_bytes(typing: Any, out: Any, i: Any, a: Any, j: Any) -> Any:
    """The bytes out[i, 0..255] = the elements of a[j]"""

    def emit(builder: Builder, out: Rows, i: Value, a: Rows, j: Value) -> None:
        for word in range(PLANE_WORDS):
            elements = planes.all_bytes(0)
            for plane in range(8):
                lanes = a.load(j, number(PLANE_WORDS * plane + word), I64)
                flags = builder.bitcast(lanes, planes.FLAGS)
                power = builder.select(flags, planes.all_bytes(1 << plane), planes.all_bytes(0))
                elements = builder.or_(elements, power)
            out.store(elements, i, number(64 * word))

    return _void(emit, out, None, a, None)
