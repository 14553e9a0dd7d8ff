"""XXH3-64 of cells of 4,096 bytes with seed 0, eight lanes of 64 bits at a time.

As the specification of the xxHash family has it for inputs of more than 240 bytes: stripes of 64 bytes are
accumulated, 16 to a block, with a secret that moves on by 8 bytes a stripe; between blocks the lanes are
scrambled; the last stripe takes a part of the secret of its own; merging makes 64 bits of the lanes.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from llvmlite import ir

from oakum.kernels.compiling import typed
from oakum.kernels.simd import I32, I64, Builder, Value, intrinsic, load, nothing, signature, store
from oakum.kernels.words import CELL

STRIPE = 64
BLOCK = 16
"""Stripes between two scramblings."""

LANES = ir.VectorType(I64, 8)
I128 = ir.IntType(128)

PRIME32 = (0x9E3779B1, 0x85EBCA77, 0xC2B2AE3D)
PRIME64 = (
    0x9E3779B185EBCA87,
    0xC2B2AE3D27D4EB4F,
    0x165667B19E3779F9,
    0x85EBCA77C2B2AE63,
    0x27D4EB2F165667C5,
)
PRIME_MX1 = 0x165667919E3779F9

START = (PRIME32[2], *PRIME64[:4], PRIME32[1], PRIME64[4], PRIME32[0])

SECRET = bytes.fromhex(
    "b8fe6c3923a44bbe7c01812cf721ad1cded46de9839097db7240a4a4b7b3671fcb79e64eccc0e578825ad07dccff7221"
    "b8084674f743248ee03590e6813a264c3c2852bb91c300cb88d0658b1b532ea371644897a20df94e3819ef46a9deacd8"
    "a8fa763fe39c343ff9dcbbc7c70b4f1d8a51e04bcdb45931c89f7ec9d9787364eac5ac8334d3ebc3c581a0fffa1363eb"
    "170ddd51b7f0da49d316552629d4689e2b16be587d47a1fc8ff8b8d17ad031ce45cb3a8f95160428afd7fbcabb4b407e"
)
LAST, MERGE = len(SECRET) - STRIPE - 7, 11
"""Where the secret of the last stripe begins, and that of merging."""


def lanes_of(values: Sequence[int]) -> Value:
    return ir.Constant(LANES, [I64(value) for value in values])


def secret_lanes(offset: int) -> Value:
    return lanes_of(np.frombuffer(SECRET, "<u8", 8, offset).tolist())


def accumulated(builder: Builder, lanes: Value, data: Value, offset: int, secret: int) -> Value:
    """One stripe more: lane i takes the product of the halves of its keyed word, and its neighbour's word."""
    word = load(builder, data, LANES, offset)
    keyed = builder.xor(word, secret_lanes(secret))
    low, high = builder.and_(keyed, lanes_of([0xFFFFFFFF] * 8)), builder.lshr(keyed, lanes_of([32] * 8))
    swap = ir.Constant(ir.VectorType(I32, 8), [I32(i ^ 1) for i in range(8)])
    neighbours = builder.shuffle_vector(word, ir.Constant(LANES, ir.Undefined), swap)
    return builder.add(builder.add(lanes, neighbours), builder.mul(low, high))


def scrambled(builder: Builder, lanes: Value) -> Value:
    mixed = builder.xor(lanes, builder.lshr(lanes, lanes_of([47] * 8)))
    keyed = builder.xor(mixed, secret_lanes(len(SECRET) - STRIPE))
    return builder.mul(keyed, lanes_of([PRIME32[0]] * 8))


def merged(builder: Builder, lanes: Value, size: int) -> Value:
    """64 bits: pairs of keyed lanes are multiplied, both halves of the products added up, and mixed."""
    keyed = builder.xor(lanes, secret_lanes(MERGE))
    total: Value = I64(size * PRIME64[0] % (1 << 64))
    for i in range(0, 8, 2):
        pair = [builder.zext(builder.extract_element(keyed, I32(i + j)), I128) for j in range(2)]
        product = builder.mul(*pair)
        folded = builder.xor(product, builder.lshr(product, I128(64)))
        total = builder.add(total, builder.trunc(folded, I64))
    total = builder.mul(builder.xor(total, builder.lshr(total, I64(37))), I64(PRIME_MX1))
    return builder.xor(total, builder.lshr(total, I64(32)))


@intrinsic
def digest(typingctx: Any, out: Any, cell: Any) -> Any:
    """8 bytes at `out`: XXH3-64 of the 4,096 bytes at `cell`."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        out, cell = arguments
        lanes = lanes_of(START)
        for stripe in range((CELL - 1) // STRIPE):
            lanes = accumulated(builder, lanes, cell, stripe * STRIPE, stripe % BLOCK * 8)
            if stripe % BLOCK == BLOCK - 1:
                lanes = scrambled(builder, lanes)
        lanes = accumulated(builder, lanes, cell, CELL - STRIPE, LAST)
        store(builder, merged(builder, lanes, CELL), out)
        return nothing(context)

    return signature(2), generate


@typed("void(intp, intp, intp)")
def digests(data: int, cells: int, out: int) -> None:
    """XXH3-64 of consecutive cells at `data`, uint64 at `out`."""
    for c in range(cells):
        digest(out + 8 * c, data + CELL * c)
