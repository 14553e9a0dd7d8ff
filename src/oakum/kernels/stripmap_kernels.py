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
from numba.core import cgutils

from oakum.kernels.compiling import kernel
from oakum.kernels.simd import (
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
    inlined,
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

STRIP = 1024
"""Columns worked on at a time: all inputs of a (255, 223) code fit the second-level cache."""

STRIDE = STRIP + 64
"""Distance of the rows in scratch memory; not a power of two, or all would share a few cache lines."""

TILE_ROWS = 4
TILE_COLUMNS = 64

TABLES_BLOCK = 8
"""Inputs whose multiples the portable kernel holds at a time: 8 * 2 KiB fit the first-level cache."""


def scratch_size(rows: int, inputs: int) -> int:
    """Bytes of scratch memory that a kernel needs for `rows` outputs and `inputs` inputs."""
    return (inputs + -(-rows // TILE_ROWS) * TILE_ROWS) * STRIDE + TABLES_BLOCK * 32 * TILE_COLUMNS


@inlined
def pack(target: int, source: int, stride: int, rows: int, width: int) -> None:
    for row in range(rows):
        copy(target + row * STRIDE, source + row * stride, width)


@inlined
def unpack(target: int, stride: int, source: int, rows: int, width: int) -> None:
    for row in range(rows):
        copy(target + row * stride, source + row * STRIDE, width)


@inlined
def begin(packed: int, out: int, stride: int, rows: int, width: int, accumulate: int) -> None:
    if accumulate:
        pack(packed, out, stride, rows, width)
    else:
        clear(packed, rows * STRIDE)


def emit_tile(
    builder: Builder,
    out: Value,
    source: Value,
    inputs: Value,
    lanes: int,
    vectors: int,
    products: Callable[[Value, int, list[Value]], list[Value]],
    prepare: Callable[[Value], Any],
) -> None:
    """A register tile: 4 outputs x `vectors` vectors stay in registers while all inputs pass by.

    `prepare` makes of a vector of input what `products(i, row, prepared vectors)` needs.
    """
    kind = byte_vector(lanes)
    places = [(row, v) for row in range(TILE_ROWS) for v in range(vectors)]
    sums = {
        place: variable(builder, load(builder, out, kind, place[0] * STRIDE + place[1] * lanes))
        for place in places
    }
    with cgutils.for_range(builder, inputs, intp=I64) as loop:
        address = builder.add(source, builder.mul(loop.index, I64(STRIDE)))
        prepared = [prepare(load(builder, address, kind, v * lanes)) for v in range(vectors)]
        for row in range(TILE_ROWS):
            for v, product in enumerate(products(loop.index, row, prepared)):
                total = builder.load(sums[row, v], typ=kind)
                builder.store(builder.xor(total, product), sums[row, v])
    for row, v in places:
        store(builder, builder.load(sums[row, v], typ=kind), out, row * STRIDE + v * lanes)


@intrinsic
def shuffle_tile(typingctx: Any, out: Any, source: Any, offsets: Any, inputs: Any, tables: Any) -> Any:
    """4 outputs x 64 columns by nibble tables.

    `offsets` has 4 uint16 for each input: where in `tables` the coefficient's two tables of 16 bytes begin.
    """

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        out, source, offsets, inputs, tables = arguments
        lanes = shuffle_lanes()
        low_bits, four = constant_bytes(15, lanes), constant_bytes(4, lanes)

        def nibbles(x: Value) -> tuple[Value, Value]:
            return builder.and_(x, low_bits), builder.lshr(x, four)

        def products(i: Value, row: int, prepared: list[Any]) -> list[Value]:
            place = builder.add(offsets, builder.mul(i, I64(2 * TILE_ROWS)))
            table = builder.add(tables, builder.zext(load(builder, place, I16, 2 * row), I64))
            low, high = (load(builder, table, byte_vector(16), at) for at in (0, 16))
            return [
                builder.xor(shuffle(builder, low, bits), shuffle(builder, high, more_bits))
                for bits, more_bits in prepared
            ]

        for column in range(0, TILE_COLUMNS, 2 * lanes):
            emit_tile(
                builder,
                plus(builder, out, column),
                plus(builder, source, column),
                inputs,
                lanes,
                2,
                products,
                nibbles,
            )
        return nothing(context)

    return signature(5), generate


@intrinsic
def gfni_tile(typingctx: Any, out: Any, source: Any, matrices: Any, inputs: Any) -> Any:
    """4 outputs x 64 columns by the affine instruction; `matrices` has 4 of 8 bytes for each input."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        out, source, matrices, inputs = arguments
        lanes = 32

        def products(i: Value, row: int, prepared: list[Value]) -> list[Value]:
            place = builder.add(matrices, builder.mul(i, I64(8 * TILE_ROWS)))
            matrix = splat(builder, load(builder, place, I64, 8 * row), lanes // 8)
            matrix = builder.bitcast(matrix, byte_vector(lanes))
            name = "llvm.x86.vgf2p8affineqb.256"
            return [call(builder, name, x.type, [x, matrix, I8(0)]) for x in prepared]

        emit_tile(builder, out, source, inputs, lanes, 2, products, lambda x: x)
        return nothing(context)

    return signature(4), generate


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
            table = builder.add(tables, builder.mul(loop.index, I64(32 * TILE_COLUMNS)))
            place = builder.add(offsets, builder.mul(loop.index, I64(4)))
            for nibble in range(2):
                offset = builder.zext(load(builder, place, I16, 2 * nibble), I64)
                multiple = load(builder, builder.add(table, offset), kind)
                builder.store(builder.xor(builder.load(total, typ=kind), multiple), total)
        store(builder, builder.load(total, typ=kind), out)
        return nothing(context)

    return signature(4), generate


ARGUMENTS = "intp, intp, intp, intp, intp, intp, intp, intp, intp, intp, intp, intp"
"""The three kernels' arguments, all addresses or sizes in bytes: out, its row stride, rows, source, its row
stride, inputs, length, whether to accumulate, coefficients of the first input, their distance from one
group of outputs to the next, scratch memory, and the tier's constant (see `stripmap.prepared`)."""


def self_test(name: str) -> Callable[[Callable[..., Any]], bool]:
    """A known answer for the kernel of a tier: a matrix of all bytes times all bytes."""

    def agrees(compiled: Callable[..., Any]) -> bool:
        from oakum.kernels import stripmap

        return stripmap.gives_known_answer(compiled, name)

    return agrees


@kernel(f"void({ARGUMENTS})", self_test=self_test("gfni"), purpose="the strip map")
def map_gfni(
    out: int,
    out_stride: int,
    rows: int,
    source: int,
    source_stride: int,
    inputs: int,
    length: int,
    accumulate: int,
    matrices: int,
    group_size: int,
    scratch: int,
    unused: int,
) -> None:
    packed = scratch + inputs * STRIDE
    for start in range(0, length, STRIP):
        width = min(STRIP, length - start)
        pack(scratch, source + start, source_stride, inputs, width)
        begin(packed, out + start, out_stride, rows, width, accumulate)
        for group in range((rows + TILE_ROWS - 1) // TILE_ROWS):
            for column in range(0, width, TILE_COLUMNS):
                target = packed + group * TILE_ROWS * STRIDE + column
                gfni_tile(target, scratch + column, matrices + group * group_size, inputs)
        unpack(out + start, out_stride, packed, rows, width)


@kernel(f"void({ARGUMENTS})", self_test=self_test("shuffle"), purpose="the strip map")
def map_shuffle(
    out: int,
    out_stride: int,
    rows: int,
    source: int,
    source_stride: int,
    inputs: int,
    length: int,
    accumulate: int,
    offsets: int,
    group_size: int,
    scratch: int,
    tables: int,
) -> None:
    packed = scratch + inputs * STRIDE
    for start in range(0, length, STRIP):
        width = min(STRIP, length - start)
        pack(scratch, source + start, source_stride, inputs, width)
        begin(packed, out + start, out_stride, rows, width, accumulate)
        for group in range((rows + TILE_ROWS - 1) // TILE_ROWS):
            for column in range(0, width, TILE_COLUMNS):
                target = packed + group * TILE_ROWS * STRIDE + column
                shuffle_tile(target, scratch + column, offsets + group * group_size, inputs, tables)
        unpack(out + start, out_stride, packed, rows, width)


@kernel(f"void({ARGUMENTS})", self_test=self_test("portable"), purpose="the strip map")
def map_portable(
    out: int,
    out_stride: int,
    rows: int,
    source: int,
    source_stride: int,
    inputs: int,
    length: int,
    accumulate: int,
    offsets: int,
    row_size: int,
    scratch: int,
    reduction: int,
) -> None:
    packed = scratch + inputs * STRIDE
    tables = packed + rows * STRIDE
    for start in range(0, length, STRIP):
        width = min(STRIP, length - start)
        pack(scratch, source + start, source_stride, inputs, width)
        begin(packed, out + start, out_stride, rows, width, accumulate)
        for column in range(0, width, TILE_COLUMNS):
            for block in range(0, inputs, TABLES_BLOCK):
                here = min(TABLES_BLOCK, inputs - block)
                for i in range(here):
                    x = scratch + (block + i) * STRIDE + column
                    build_multiples(tables + i * 32 * TILE_COLUMNS, x, reduction)
                for row in range(rows):
                    coefficients = offsets + row * row_size + block * 4
                    add_multiples(packed + row * STRIDE + column, tables, coefficients, here)
        unpack(out + start, out_stride, packed, rows, width)
