"""The strip map's inner loops, one kernel a tier.

All three work strip by strip (up to 1 KiB of every row), through scratch memory:

1. copy the strip of all K inputs next to each other, so that the inner loops stay in the cache and
   may use whole vectors at the ends of rows;
2. clear the strip of all outputs, or copy what they hold if the result is added to it;
3. XOR the products onto the outputs, 64 columns at a time;
4. copy the outputs back.

Columns never mix, so whatever the scratch memory holds beyond the end of a strip does no harm.

The nibble-table method: Plank, Greenan and Miller, "Screaming fast Galois field arithmetic using Intel
SIMD instructions", FAST 2013. The affine method: the instruction's description in Intel's manual.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any

from llvmlite import ir
from numba.core import cgutils, types

from oakum.kernels.arrays import Arrays
from oakum.kernels.compiler import subroutine
from oakum.kernels.compiling import typed
from oakum.kernels.simd import (
    ARRAYS,
    I8,
    I16,
    I64,
    Builder,
    Value,
    byte_vector,
    call,
    clear,
    constant_bytes,
    copy,
    doubled,
    intrinsic,
    load,
    nothing,
    plus,
    shuffle,
    shuffle_lanes,
    signature,
    splat,
    store,
    variable,
)
from oakum.kernels.stripmap import (
    MULTIPLES_BLOCK,
    MULTIPLES_SIZE,
    NIBBLES_BLOCK,
    NIBBLES_SIZE,
    STRIDE,
    STRIP,
    TILE_COLUMNS,
    TILE_ROWS,
)


@subroutine
def pack(target: int, source: int, stride: int, rows: int, width: int) -> None:
    for row in range(rows):
        copy(target + row * STRIDE, source + row * stride, width)


@subroutine
def begin(arrays: Any, start: int, width: int, scratch: int, packed: int) -> None:
    """Steps 1 and 2: the strip of the inputs to `scratch`, that of the outputs to `packed`."""
    pack(scratch, arrays.source + start, arrays.source_stride, arrays.inputs, width)
    if arrays.accumulate:
        pack(packed, arrays.out + start, arrays.out_stride, arrays.rows, width)
    else:
        clear(packed, arrays.rows * STRIDE)


@subroutine
def finish(arrays: Any, start: int, width: int, packed: int) -> None:
    """Step 4."""
    for row in range(arrays.rows):
        copy(arrays.out + start + row * arrays.out_stride, packed + row * STRIDE, width)


def emit_tile(
    builder: Builder,
    out: Value,
    inputs: Value,
    lanes: int,
    products: Callable[[Value], Sequence[Sequence[Value]]],
) -> None:
    """A register tile: 4 outputs x 2 vectors stay in registers while all inputs pass by.

    `products(i)` emits what input i adds to each of the 4 outputs: two vectors of `lanes` bytes.
    """
    kind = byte_vector(lanes)
    places = [(row, v) for row in range(TILE_ROWS) for v in range(2)]
    sums = {
        (row, v): variable(builder, load(builder, out, kind, row * STRIDE + v * lanes)) for row, v in places
    }
    with cgutils.for_range(builder, inputs, intp=I64) as loop:
        added = products(loop.index)
        for row, v in places:
            total = builder.load(sums[row, v], typ=kind)
            builder.store(builder.xor(total, added[row][v]), sums[row, v])
    for row, v in places:
        store(builder, builder.load(sums[row, v], typ=kind), out, row * STRIDE + v * lanes)


@intrinsic
def gfni_tile(typingctx: Any, out: Any, source: Any, matrices: Any, inputs: Any) -> Any:
    """4 outputs x 64 columns by the affine instruction; `matrices` has 4 of 8 bytes for each input."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        out, source, matrices, inputs = arguments
        kind = byte_vector(32)

        def multiplied(x: Value, matrix: Value) -> Value:
            return call(builder, "llvm.x86.vgf2p8affineqb.256", kind, [x, matrix, I8(0)])

        def products(i: Value) -> list[list[Value]]:
            address = builder.add(source, builder.mul(i, I64(STRIDE)))
            both = [load(builder, address, kind, at) for at in (0, 32)]
            address = builder.add(matrices, builder.mul(i, I64(8 * TILE_ROWS)))
            each = [splat(builder, load(builder, address, I64, 8 * row), 4) for row in range(TILE_ROWS)]
            return [[multiplied(x, builder.bitcast(matrix, kind)) for x in both] for matrix in each]

        emit_tile(builder, out, inputs, 32, products)
        return nothing(context)

    return signature(4), generate


@intrinsic
def split_nibbles(typingctx: Any, target: Any, source: Any) -> Any:
    """64 columns as vectors of low and of high nibbles in turn."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        target, source = arguments
        lanes = shuffle_lanes()
        for column in range(0, TILE_COLUMNS, lanes):
            x = load(builder, source, byte_vector(lanes), column)
            store(builder, builder.and_(x, constant_bytes(15, lanes)), target, 2 * column)
            store(builder, builder.lshr(x, constant_bytes(4, lanes)), target, 2 * column + lanes)
        return nothing(context)

    return signature(2), generate


@intrinsic
def shuffle_tile(typingctx: Any, out: Any, nibbles: Any, offsets: Any, inputs: Any, tables: Any) -> Any:
    """4 outputs x 64 columns by nibble tables.

    `offsets` has 4 uint16 for each input: where in `tables` the coefficient's two tables of 16 bytes begin.
    """

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        out, nibbles, offsets, inputs, tables = arguments
        lanes = shuffle_lanes()
        kind = byte_vector(lanes)

        def emit_half(column: int) -> None:
            def products(i: Value) -> list[list[Value]]:
                address = plus(builder, builder.add(nibbles, builder.mul(i, I64(NIBBLES_SIZE))), 2 * column)
                split = [[load(builder, address, kind, (2 * v + h) * lanes) for h in (0, 1)] for v in (0, 1)]
                address = builder.add(offsets, builder.mul(i, I64(2 * TILE_ROWS)))
                return [multiplied(split, load(builder, address, I16, 2 * row)) for row in range(TILE_ROWS)]

            emit_tile(builder, plus(builder, out, column), inputs, lanes, products)

        def multiplied(split: list[list[Value]], offset: Value) -> list[Value]:
            table = builder.add(tables, builder.zext(offset, I64))
            by_low, by_high = (load(builder, table, byte_vector(16), at) for at in (0, 16))
            return [
                builder.xor(shuffle(builder, by_low, low), shuffle(builder, by_high, high))
                for low, high in split
            ]

        for column in range(0, TILE_COLUMNS, 2 * lanes):
            emit_half(column)
        return nothing(context)

    return signature(5), generate


@intrinsic
def build_multiples(typingctx: Any, target: Any, source: Any, reduction: Any) -> Any:
    """Multiples of 64 columns of one input: v * x at entry v and 16 v * x at entry 16 + v, v = 0..15."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        target, source, reduction = arguments
        lanes = TILE_COLUMNS
        low_terms = splat(builder, builder.trunc(reduction, I8), lanes)
        power = load(builder, source, byte_vector(lanes))
        for half in range(2):
            multiples = [ir.Constant(power.type, None)]
            for _ in range(4):
                multiples += [builder.xor(power, multiple) for multiple in multiples]
                power = doubled(builder, power, low_terms)
            for v, multiple in enumerate(multiples):
                store(builder, multiple, target, (16 * half + v) * lanes)
        return nothing(context)

    return signature(3), generate


@intrinsic
def add_multiples(typingctx: Any, out: Any, tables: Any, offsets: Any, inputs: Any) -> Any:
    """XOR onto 64 columns of one output the multiples of `inputs` inputs.

    `offsets` has two uint16 for each input: where the multiples for the coefficient's low and high nibble
    begin in the input's 2 KiB of `tables`.
    """

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        out, tables, offsets, inputs = arguments
        kind = byte_vector(TILE_COLUMNS)
        total = variable(builder, load(builder, out, kind))
        with cgutils.for_range(builder, inputs, intp=I64) as loop:
            table = builder.add(tables, builder.mul(loop.index, I64(MULTIPLES_SIZE)))
            place = builder.add(offsets, builder.mul(loop.index, I64(4)))
            for nibble in range(2):
                offset = builder.zext(load(builder, place, I16, 2 * nibble), I64)
                multiple = load(builder, builder.add(table, offset), kind)
                builder.store(builder.xor(builder.load(total, typ=kind), multiple), total)
        store(builder, builder.load(total, typ=kind), out)
        return nothing(context)

    return signature(4), generate


SIGNATURE = types.void(ARRAYS, types.intp, types.intp, types.intp, types.intp)
"""The arrays, coefficients of the first input, their distance from one group of outputs to the next, scratch
memory, and the tier's constant (see `stripmap.prepared`)."""


@typed(SIGNATURE)
def map_gfni(arrays: Arrays, matrices: int, group_size: int, scratch: int, unused: int) -> None:
    packed = scratch + arrays.inputs * STRIDE
    for start in range(0, arrays.length, STRIP):
        width = min(STRIP, arrays.length - start)
        begin(arrays, start, width, scratch, packed)
        for group in range((arrays.rows + TILE_ROWS - 1) // TILE_ROWS):
            for column in range(0, width, TILE_COLUMNS):
                target = packed + group * TILE_ROWS * STRIDE + column
                gfni_tile(target, scratch + column, matrices + group * group_size, arrays.inputs)
        finish(arrays, start, width, packed)


@typed(SIGNATURE)
def map_shuffle(arrays: Arrays, offsets: int, group_size: int, scratch: int, tables: int) -> None:
    groups = (arrays.rows + TILE_ROWS - 1) // TILE_ROWS
    packed = scratch + arrays.inputs * STRIDE
    nibbles = packed + groups * TILE_ROWS * STRIDE
    for start in range(0, arrays.length, STRIP):
        width = min(STRIP, arrays.length - start)
        begin(arrays, start, width, scratch, packed)
        for column in range(0, width, TILE_COLUMNS):
            for block in range(0, arrays.inputs, NIBBLES_BLOCK):
                here = min(NIBBLES_BLOCK, arrays.inputs - block)
                for i in range(here):
                    split_nibbles(nibbles + i * NIBBLES_SIZE, scratch + (block + i) * STRIDE + column)
                for group in range(groups):
                    target = packed + group * TILE_ROWS * STRIDE + column
                    coefficients = offsets + group * group_size + block * 2 * TILE_ROWS
                    shuffle_tile(target, nibbles, coefficients, here, tables)
        finish(arrays, start, width, packed)


@typed(SIGNATURE)
def map_portable(arrays: Arrays, offsets: int, row_size: int, scratch: int, reduction: int) -> None:
    packed = scratch + arrays.inputs * STRIDE
    tables = packed + arrays.rows * STRIDE
    for start in range(0, arrays.length, STRIP):
        width = min(STRIP, arrays.length - start)
        begin(arrays, start, width, scratch, packed)
        for column in range(0, width, TILE_COLUMNS):
            for block in range(0, arrays.inputs, MULTIPLES_BLOCK):
                here = min(MULTIPLES_BLOCK, arrays.inputs - block)
                for i in range(here):
                    x = scratch + (block + i) * STRIDE + column
                    build_multiples(tables + i * MULTIPLES_SIZE, x, reduction)
                for row in range(arrays.rows):
                    coefficients = offsets + row * row_size + block * 4
                    add_multiples(packed + row * STRIDE + column, tables, coefficients, here)
        finish(arrays, start, width, packed)
