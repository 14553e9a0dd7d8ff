"""The word codec's inner loops: the parity of all words of a cell, and correcting words.

A cell is first copied to scratch memory in the order of its words, beginning at its stagger offset and
wrapping round, with zeros after its last byte: so every word is m bytes at a multiple of m, and a last word
that is shortened needs no other care. All inner codes have m + p = 16.

Parity comes in two ways that give the same bytes. ``shuffle`` (also for the gfni tier): 32 words are
transposed, so that a vector holds byte t of each, and goes through the nibble tables of byte t.
``portable``: one table of 256 parities for each byte of the word.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from llvmlite import ir
from numba.core import cgutils
from numpy.typing import NDArray

from oakum.kernels.compiler import subroutine
from oakum.kernels.compiling import typed
from oakum.kernels.simd import (
    I32,
    I64,
    Builder,
    Value,
    byte_vector,
    clear,
    constant_bytes,
    copy,
    intrinsic,
    load,
    nothing,
    shuffle,
    shuffle_lanes,
    signature,
    store,
)
from oakum.kernels.words import FLAGGED, GROUP, WORD


def transposed(builder: Builder, rows: list[Value]) -> list[Value]:
    """16 vectors of one or two blocks of 16 bytes: vector t has byte t of all rows, block by block.

    Interleaving row i with row i + 8 turns the row number and the byte number, written one after the other
    as 8 bits, by one place; four such steps exchange them.
    """
    lanes = rows[0].type.count
    for _ in range(4):
        halves = []
        for half in (0, 8):
            mask = [
                lane + side * lanes
                for block in range(0, lanes, 16)
                for lane in range(block + half, block + half + 8)
                for side in (0, 1)
            ]
            halves.append(ir.Constant(ir.VectorType(I32, lanes), [I32(i) for i in mask]))
        rows = [builder.shuffle_vector(rows[i], rows[i + 8], half) for i in range(8) for half in halves]
    return rows


@intrinsic
def group_parity(
    typingctx: Any, planes: Any, plane_size: Any, message: Any, m: Any, p: Any, tables: Any
) -> Any:
    """Parity byte j of 32 words to `planes` + j * `plane_size`; `tables` is uint8[p, 16, 2, 16]."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        planes, plane_size, message, m, p, tables = arguments
        lanes = shuffle_lanes()
        for first in range(0, GROUP, lanes):
            rows = []
            for w in range(16):
                blocks = [
                    load(
                        builder, builder.add(message, builder.mul(m, I64(first + block + w))), byte_vector(16)
                    )
                    for block in range(0, lanes, 16)
                ]
                rows.append(joined(builder, blocks))
            nibbles = []
            for row in transposed(builder, rows):
                nibbles.append(builder.and_(row, constant_bytes(15, lanes)))
                nibbles.append(builder.lshr(row, constant_bytes(4, lanes)))
            with cgutils.for_range(builder, p, intp=I64) as loop:
                table = builder.add(tables, builder.mul(loop.index, I64(2 * 16 * WORD)))
                total: Value = constant_bytes(0, lanes)
                for t, index in enumerate(nibbles):
                    values = load(builder, table, byte_vector(16), 16 * t)
                    total = builder.xor(total, shuffle(builder, values, index))
                place = builder.add(planes, builder.mul(loop.index, plane_size))
                store(builder, total, place, first)
        return nothing(context)

    return signature(6), generate


def joined(builder: Builder, blocks: list[Value]) -> Value:
    """One vector of the lanes of one or two."""
    if len(blocks) == 1:
        return blocks[0]
    lanes = ir.Constant(ir.VectorType(I32, 32), [I32(i) for i in range(32)])
    return builder.shuffle_vector(blocks[0], blocks[1], lanes)


def emit_weave(builder: Builder, arguments: Sequence[Value], p: int) -> None:
    target, planes, plane_size = arguments
    kind = byte_vector(GROUP)
    loaded = [load(builder, builder.add(planes, builder.mul(plane_size, I64(j))), kind) for j in range(p)]
    loaded += [ir.Constant(kind, ir.Undefined)] * (4 - p)
    ascending = ir.Constant(ir.VectorType(I32, 64), [I32(i) for i in range(64)])
    pairs = [builder.shuffle_vector(loaded[i], loaded[i + 1], ascending) for i in (0, 2)]
    order = [I32(GROUP * j + w) for w in range(GROUP) for j in range(p)]
    woven = builder.shuffle_vector(*pairs, ir.Constant(ir.VectorType(I32, GROUP * p), order))
    store(builder, woven, target)


@intrinsic
def weave2(typingctx: Any, target: Any, planes: Any, plane_size: Any) -> Any:
    """The bytes of two planes, 32 words of each, in turn."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        emit_weave(builder, arguments, 2)
        return nothing(context)

    return signature(3), generate


@intrinsic
def weave3(typingctx: Any, target: Any, planes: Any, plane_size: Any) -> Any:
    """The bytes of three planes, 32 words of each, in turn."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        emit_weave(builder, arguments, 3)
        return nothing(context)

    return signature(3), generate


@intrinsic
def word_parity(typingctx: Any, target: Any, message: Any, tables: Any) -> Any:
    """4 bytes at `target`: the XOR of tables[t, message byte t]; `tables` is uint32[16, 256]."""

    def generate(context: Any, builder: Builder, sig: Any, arguments: Sequence[Value]) -> Value:
        target, message, tables = arguments
        halves = [load(builder, message, I64, at) for at in (0, 8)]
        total: Value = I32(0)
        for t in range(WORD):
            byte = builder.and_(builder.lshr(halves[t // 8], I64(8 * (t % 8))), I64(255))
            entry = builder.add(tables, builder.shl(byte, I64(2)))
            total = builder.xor(total, load(builder, entry, I32, 1024 * t))
        store(builder, total, target)
        return nothing(context)

    return signature(3), generate


@subroutine
def arrange(target: int, cell: int, width: int, offset: int, size: int) -> None:
    """The cell's bytes from `offset` on and round, then zeros up to `size`."""
    copy(target, cell + offset, width - offset)
    copy(target + width - offset, cell, offset)
    clear(target + width, size - width)


@subroutine
def parities_shuffle(target: int, message: int, words: int, m: int, p: int, tables: int, planes: int) -> None:
    """The parity of `words` words (and of the zeros that fill the last group), p bytes each."""
    size = (words + GROUP - 1) // GROUP * GROUP
    if p == 1:
        planes = target
    for w in range(0, words, GROUP):
        group_parity(planes + w, size, message + w * m, m, p, tables)
    if p == 2:
        for w in range(0, words, GROUP):
            weave2(target + w * p, planes + w, size)
    if p == 3:
        for w in range(0, words, GROUP):
            weave3(target + w * p, planes + w, size)


@subroutine
def parities_portable(target: int, message: int, words: int, m: int, p: int, tables: int, _: int) -> None:
    """The same; the 4 bytes of each word are overwritten by the next from byte p on."""
    for w in range(words):
        word_parity(target + w * p, message + w * m, tables)


@subroutine
def offset_of(stagger: int, width: int, m: int) -> int:
    """Where in a cell of `width` bytes its first word begins."""
    return stagger % m if width >= 2 * m else 0


@subroutine
def cells_parity(
    parities: Any, data: int, stride: int, length: int, cell: int, staggers: NDArray[np.int64], out: int,
    out_stride: int, step: int, m: int, p: int, tables: int, scratch: int,
) -> None:  # fmt: skip
    """The kernel of a tier, whose `parities` are given."""
    for row in range(len(staggers)):
        for start in range(0, length, cell):
            width = min(cell, length - start)
            words = (width + m - 1) // m
            size = (words + GROUP - 1) // GROUP * GROUP
            offset = offset_of(staggers[row], width, m)
            arrange(scratch, data + row * stride + start, width, offset, size * m + WORD)
            computed = scratch + size * m + WORD
            parities(computed, scratch, words, m, p, tables, computed + size * p)
            copy(out + row * out_stride + start // cell * step, computed, words * p)


PARITY_SIGNATURE = "void(intp, intp, intp, intp, int64[::1], intp, intp, intp, intp, intp, intp, intp)"
"""Data, distance of its rows, their length, cell size, stagger of each row, out, distance of its rows,
distance of the cells' parities in a row, m, p, the tier's tables, scratch memory."""


@typed(PARITY_SIGNATURE)
def parity_shuffle(
    data: int, stride: int, length: int, cell: int, staggers: NDArray[np.int64], out: int, out_stride: int,
    step: int, m: int, p: int, tables: int, scratch: int,
) -> None:  # fmt: skip
    cells_parity(
        parities_shuffle, data, stride, length, cell, staggers, out, out_stride, step, m, p, tables, scratch
    )


@typed(PARITY_SIGNATURE)
def parity_portable(
    data: int, stride: int, length: int, cell: int, staggers: NDArray[np.int64], out: int, out_stride: int,
    step: int, m: int, p: int, tables: int, scratch: int,
) -> None:  # fmt: skip
    cells_parity(
        parities_portable, data, stride, length, cell, staggers, out, out_stride, step, m, p, tables, scratch
    )


@typed("void(uint8[:, :], int64[::1], intp, uint8[:, ::1])")
def spread(of_words: NDArray[np.uint8], staggers: NDArray[np.int64], m: int, out: NDArray[np.uint8]) -> None:
    """What `of_words` has for a word goes to all its bytes in `out`, which is zero before."""
    rows, width = out.shape
    for row in range(rows):
        offset = offset_of(staggers[row], width, m)
        for word in range(of_words.shape[1]):
            value = of_words[row, word]
            if value:
                for place in range(word * m, min((word + 1) * m, width)):
                    out[row, (offset + place) % width] = value


@subroutine
def leader(syndrome: int, starts: NDArray[Any], known: NDArray[Any], places: NDArray[Any]) -> int:
    """The places of the one or two flips that give `syndrome`, packed; 0 if there are none such.

    Entries are sorted by the low bits of their syndromes: low bits b have starts[b] .. starts[b + 1] - 1.
    """
    low_bits = syndrome & (len(starts) - 2)
    for entry in range(starts[low_bits], starts[low_bits + 1]):
        if known[entry] == syndrome:
            return int(places[entry])
    return 0


@subroutine
def flips(
    syndrome: int,
    t: int,
    columns: NDArray[Any],
    starts: NDArray[Any],
    known: NDArray[Any],
    places: NDArray[Any],
) -> int:
    """The places of the at most t flips that give `syndrome`, bit number + 1 in a byte each; 0 if none do.

    Three flips are found by guessing one. At most one set of t flips fits (d > 2t), so the first is it.
    """
    found = leader(syndrome, starts, known, places)
    if found or t < 3:
        return int(found)
    for bit in range(len(columns)):
        found = leader(syndrome ^ columns[bit], starts, known, places)
        if found:
            return int(found << 8 | (bit + 1))
    return 0


@subroutine
def allowed(found: int, word: int, m: int, offset: int, pinned: NDArray[Any]) -> bool:
    """Whether all flips are in bytes that are there and, as far as is known, may be wrong."""
    width = len(pinned)
    while found:
        byte = ((found & 255) - 1) >> 3
        place = word * m + byte
        if byte < m and (place >= width or pinned[(offset + place) % width]):
            return False
        found >>= 8
    return True


@subroutine
def flip(found: int, word: int, m: int, p: int, offset: int, cell: NDArray[Any], parity: NDArray[Any]) -> int:
    """Turn the bits round; returns how many."""
    count = 0
    while found:
        bit = (found & 255) - 1
        mask = 1 << (bit & 7)
        byte = bit >> 3
        if byte < m:
            cell[(offset + word * m + byte) % len(cell)] ^= mask
        else:
            parity[word * p + byte - m] ^= mask
        count += 1
        found >>= 8
    return count


@typed(
    "void(uint8[:, :], uint8[:, :], uint8[:, ::1], int64[::1], uint8[:, :], uint8[:, :],"
    " intp, intp, intp, uint32[::1], uint32[::1], uint32[::1], uint32[::1])"
)
def correct(
    cells: NDArray[np.uint8],
    parity: NDArray[np.uint8],
    syndromes: NDArray[np.uint8],
    staggers: NDArray[np.int64],
    status: NDArray[np.uint8],
    pinned: NDArray[np.uint8],
    m: int,
    p: int,
    t: int,
    columns: NDArray[np.uint32],
    starts: NDArray[np.uint32],
    known: NDArray[np.uint32],
    places: NDArray[np.uint32],
) -> None:
    """Correct the words of each row, p bytes of syndrome each; the status of clean words is left as it is."""
    for row in range(len(cells)):
        offset = offset_of(staggers[row], cells.shape[1], m)
        for word in range(status.shape[1]):
            syndrome = 0
            for j in range(p):
                syndrome |= syndromes[row, word * p + j] << (8 * j)
            if syndrome:
                found = flips(syndrome, t, columns, starts, known, places)
                if found and allowed(found, word, m, offset, pinned[row]):
                    status[row, word] = flip(found, word, m, p, offset, cells[row], parity[row])
                else:
                    status[row, word] = FLAGGED
