"""The inner loops of the moments: transposed additive Fourier transforms of columns, one kernel a tier.

`TILE` columns are worked on at a time, so that the rows of one coset and the sums over all cosets, both in
scratch memory, stay in the first-level cache. For every coset:

1. layers 0, 1 (and 2, if the number of layers is odd): rows of the source to scratch memory;
2. further layers, two at a time, in place;
3. the last two layers, XORed onto the sums.

A butterfly of layer i joins rows a and b that are 2^i apart:

    a' = a + b
    b' = b + lambda * a'

with one lambda for all butterflies of a block of 2^(i+1) rows. The lambdas come in the order of their use.
A pass does the layers of 4 or 8 rows in registers before it goes on to the next columns.

The transform that is transposed here: Lin, Chung and Han, "Novel polynomial basis and its application to
Reed-Solomon erasure codes", FOCS 2014.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from typing import Any

from llvmlite import ir
from numba.core import cgutils, types

from oakum.kernels.arrays import Arrays
from oakum.kernels.compiler import subroutine
from oakum.kernels.compiling import typed
from oakum.kernels.parity import POINTS, TILE, VECTOR
from oakum.kernels.simd import (
    ARRAYS,
    I8,
    I32,
    I64,
    Builder,
    Value,
    byte_vector,
    call,
    clear,
    constant_bytes,
    copy,
    intrinsic,
    load,
    nothing,
    plus,
    shuffle,
    shuffle_lanes,
    signature,
    splat,
    store,
)

Multiplier = Callable[[Builder, Value, int, Value], Value]
"""Emits lambda * x, given the address of the lambdas, the number of one of them, and x."""


def affine_multiple(builder: Builder, lambdas: Value, number: int, x: Value) -> Value:
    """By the affine instruction; a lambda is the 8 bytes of its matrix."""
    matrix = builder.bitcast(splat(builder, load(builder, lambdas, I64, 8 * number), 4), x.type)
    return call(builder, "llvm.x86.vgf2p8affineqb.256", x.type, [x, matrix, I8(0)])


def table_multiple(builder: Builder, lambdas: Value, number: int, x: Value) -> Value:
    """By byte shuffles; a lambda is its two nibble tables of 16 bytes."""
    lanes = x.type.count
    by_low, by_high = (load(builder, lambdas, byte_vector(16), 32 * number + at) for at in (0, 16))
    low = builder.and_(x, constant_bytes(15, lanes))
    high = builder.lshr(x, constant_bytes(4, lanes))
    return builder.xor(shuffle(builder, by_low, low), shuffle(builder, by_high, high))


def emit_butterflies(
    builder: Builder, rows: Sequence[Value], lambdas: Value, multiple: Multiplier
) -> list[Value]:
    """All layers of 4 or 8 rows that are in registers."""
    rows = list(rows)
    half, number = 1, 0
    while half < len(rows):
        for block in range(0, len(rows), 2 * half):
            for k in range(block, block + half):
                rows[k] = builder.xor(rows[k], rows[k + half])
                rows[k + half] = builder.xor(rows[k + half], multiple(builder, lambdas, number, rows[k]))
            number += 1
        half *= 2
    return rows


def emit_first(
    builder: Builder, arguments: Sequence[Value], count: int, lanes: int, multiple: Multiplier
) -> None:
    """The first pass, of `count` rows of the source, whose addresses are read from memory.

    A tile takes a few cache lines of each of hundreds of rows, too few for the CPU to see what comes
    next: so the lines of the next tile are asked for here.
    """
    target, addresses, lambdas, width = arguments
    sources = [load(builder, addresses, I64, 8 * i) for i in range(count)]
    with columns(builder, width, lanes) as (column, _):
        places = [builder.add(source, column) for source in sources]
        for place in places:
            prefetch(builder, plus(builder, place, TILE))
        rows = [load(builder, place, byte_vector(lanes)) for place in places]
        place = builder.add(target, column)
        for i, row in enumerate(emit_butterflies(builder, rows, lambdas, multiple)):
            store(builder, row, place, i * TILE)


def emit_later(
    builder: Builder, arguments: Sequence[Value], lanes: int, multiple: Multiplier, add: bool
) -> None:
    """Any later pass: 4 rows, `distance` bytes apart; the result is XORed onto the target with `add`."""
    target, source, distance, lambdas, width = arguments
    kind = byte_vector(lanes)
    offsets = [builder.mul(distance, I64(i)) for i in range(4)]
    with columns(builder, width, lanes) as (column, _):
        source, target = (builder.add(place, column) for place in (source, target))
        rows = [load(builder, builder.add(source, offset), kind) for offset in offsets]
        rows = emit_butterflies(builder, rows, lambdas, multiple)
        for row, offset in zip(rows, offsets, strict=True):
            place = builder.add(target, offset)
            store(builder, builder.xor(row, load(builder, place, kind)) if add else row, place)


def columns(builder: Builder, width: Value, lanes: int) -> AbstractContextManager[Any]:
    """A loop over the columns of a tile, a vector at a time."""
    return cgutils.for_range_slice(builder, I64(0), width, I64(lanes), intp=I64)  # type: ignore[no-any-return]


def prefetch(builder: Builder, address: Value) -> None:
    """Ask for a cache line to be read; an address that is not there does no harm."""
    pointer = builder.inttoptr(address, ir.PointerType())
    reading, keep_in_all_caches, data = I32(0), I32(3), I32(1)
    call(builder, "llvm.prefetch.p0", ir.VoidType(), [pointer, reading, keep_in_all_caches, data])


def first_pass(count: int, lanes: Callable[[], int], multiple: Multiplier) -> Callable[..., Any]:
    """The intrinsic of the first pass, of `count` rows."""

    @intrinsic
    def first(typingctx: Any, target: Any, addresses: Any, lambdas: Any, width: Any) -> Any:
        def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
            emit_first(builder, arguments, count, lanes(), multiple)
            return nothing(context)

        return signature(4), generate

    return first


def later_pass(add: bool, lanes: Callable[[], int], multiple: Multiplier) -> Callable[..., Any]:
    """The intrinsic of a later pass, XORed onto its target with `add`."""

    @intrinsic
    def later(typingctx: Any, target: Any, source: Any, distance: Any, lambdas: Any, width: Any) -> Any:
        def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
            emit_later(builder, arguments, lanes(), multiple, add)
            return nothing(context)

        return signature(5), generate

    return later


def passes(lanes: Callable[[], int], multiple: Multiplier) -> tuple[Callable[..., Any], ...]:
    """The passes of a tier: the first of 4 and of 8 rows, one in place, and the last."""
    return (
        first_pass(4, lanes, multiple),
        first_pass(8, lanes, multiple),
        later_pass(False, lanes, multiple),
        later_pass(True, lanes, multiple),
    )


first4_gfni, first8_gfni, inner_gfni, last_gfni = passes(lambda: VECTOR, affine_multiple)
first4_shuffle, first8_shuffle, inner_shuffle, last_shuffle = passes(shuffle_lanes, table_multiple)


@intrinsic
def load_word(typingctx: Any, address: Any) -> Any:
    """The integer at an address."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        return load(builder, arguments[0], I64)

    return types.intp(types.intp), generate


@intrinsic
def store_word(typingctx: Any, address: Any, word: Any) -> Any:
    """Put an integer at an address."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        store(builder, arguments[1], arguments[0])
        return nothing(context)

    return signature(2), generate


@subroutine
def locate(addresses: int, order: int, arrays: Any, start: int, first: int, width: int, scratch: int) -> None:
    """Where the row of each point begins, from column `start` on: in the source; at zeros, if there is none.

    Rows whose width is not a multiple of the vectors are copied, for nothing beyond their end may be read.
    """
    copies = scratch + TILE
    for point in range(POINTS):
        row = load_word(order + 8 * point) - first
        address = scratch
        if 0 <= row < arrays.inputs:
            address = arrays.source + row * arrays.source_stride + start
            if width % VECTOR:
                copy(copies + point * TILE, address, width)
                address = copies + point * TILE
        store_word(addresses + 8 * point, address)


@subroutine
def transform(
    passes: Any, sums: int, work: int, addresses: int, lambdas: int, unit: int, layers: int, width: int
) -> None:
    """XOR the transforms of all cosets onto the sums. A lambda is `unit` bytes."""
    first4, first8, inner, last = passes
    size = 1 << layers
    for coset in range(0, POINTS, size):
        if layers & 1:
            layer = 3
            for row in range(0, size, 8):
                first8(work + row * TILE, addresses + 8 * (coset + row), lambdas, width)
                lambdas += 7 * unit
        else:
            layer = 2
            for row in range(0, size, 4):
                first4(work + row * TILE, addresses + 8 * (coset + row), lambdas, width)
                lambdas += 3 * unit
        while layer < layers - 2:
            for block in range(0, size, 4 << layer):
                for row in range(block, block + (1 << layer)):
                    inner(work + row * TILE, work + row * TILE, TILE << layer, lambdas, width)
                lambdas += 3 * unit
            layer += 2
        for row in range(1 << layer):
            last(sums + row * TILE, work + row * TILE, TILE << layer, lambdas, width)
        lambdas += 3 * unit


@subroutine
def moments(
    passes: Any, unit: int, arrays: Any, first: int, order: int, lambdas: int, layers: int, scratch: int
) -> None:
    """The kernel of a tier, whose passes and bytes of a lambda are given."""
    sums = scratch + 8 * POINTS
    work = sums + (TILE << layers)
    rest = work + (TILE << layers)
    clear(rest, TILE)
    for start in range(0, arrays.length, TILE):
        width = min(TILE, arrays.length - start)
        locate(scratch, order, arrays, start, first, width, rest)
        clear(sums, TILE << layers)
        if arrays.accumulate:
            for row in range(arrays.rows):
                copy(sums + row * TILE, arrays.out + row * arrays.out_stride + start, width)
        transform(passes, sums, work, scratch, lambdas, unit, layers, width)
        for row in range(arrays.rows):
            copy(arrays.out + row * arrays.out_stride + start, sums + row * TILE, width)


SIGNATURE = types.void(ARRAYS, types.intp, types.intp, types.intp, types.intp, types.intp)
"""The arrays, the symbol that is the first row of the source, the symbol of each point (int64), lambdas,
layers, and scratch memory."""


@typed(SIGNATURE)
def moments_gfni(arrays: Arrays, first: int, order: int, lambdas: int, layers: int, scratch: int) -> None:
    passes = first4_gfni, first8_gfni, inner_gfni, last_gfni
    moments(passes, 8, arrays, first, order, lambdas, layers, scratch)


@typed(SIGNATURE)
def moments_shuffle(arrays: Arrays, first: int, order: int, lambdas: int, layers: int, scratch: int) -> None:
    passes = first4_shuffle, first8_shuffle, inner_shuffle, last_shuffle
    moments(passes, 32, arrays, first, order, lambdas, layers, scratch)
