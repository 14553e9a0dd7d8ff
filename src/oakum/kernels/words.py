"""The word codec: inner parity of cells, and inner decoding.

A cell of a strip is cut into words of m bytes. The strip's number staggers them: the words of strip i begin
at byte i mod m of the cell and wrap round inside it; cells shorter than 2m are not staggered. The last word
is shortened: the bytes that it lacks are zero. The parity of word w is bytes w*p .. (w+1)*p - 1 of the cell's
group of parity.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache, partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import InnerCode
from oakum.kernels import tiers
from oakum.kernels.arrays import check_rows
from oakum.kernels.compiling import Kernel
from oakum.kernels.scratch import scratch

Bytes = NDArray[np.uint8]
Staggers = NDArray[np.integer[Any]] | Sequence[int]

CELL = 4096
WORD = 16
"""Bytes of a word with its parity."""

GROUP = 32
"""Words whose parity is computed together."""

FLAGGED = 255
"""Status of a word that holds more flips than can be corrected, or flips in bytes known to be right."""


class WordCodec:
    """Encoder and bounded-distance decoder of one inner code. `tier` as in `oakum.kernels.tiers`.

    Without an inner code (`InnerCode.none()`) cells have no words, and every method leaves its arrays alone.
    """

    def __init__(self, inner: InnerCode, tier: str | None = None) -> None:
        self.inner = inner
        self.tier = tiers.current_tier() if tier is None else tiers.check_tier(tier)
        if inner.p:
            self._tables = parity_tables(inner, self.tier)
            self._kernel = PARITY_KERNELS[self.tier].prepare()

    def prepare(self, *, correcting: bool = True) -> None:
        """Compile, or load, what the methods need (`correct` only if `correcting`), in the calling thread."""
        if self.inner.p:
            PARITY_KERNELS[self.tier].prepare()
            if correcting:
                CORRECT.prepare()
                SPREAD.prepare()

    def words(self, cell_length: int) -> int:
        """The number of words in a cell of `cell_length` bytes."""
        return -(-cell_length // self.inner.m) if self.inner.p else 0

    def group_size(self, cell_length: int) -> int:
        """Bytes of inner parity that a cell of `cell_length` bytes has."""
        return self.words(cell_length) * self.inner.p

    def parity(
        self, data: Bytes, stagger: int, out: Bytes, *, cell: int = CELL, step: int | None = None
    ) -> None:
        """Inner parity of consecutive cells of one strip.

        `data` is uint8[N] and begins with a cell; the last cell may be shorter than `cell` bytes. The parity
        of cell c goes to `out` from byte c * `step` on; by default groups follow each other. `stagger` is the
        strip's number. Releases the GIL. Raises ValueError for arrays that are not as described.
        """
        if data.ndim != 1 or out.ndim != 1:
            raise ValueError("data and out are one-dimensional")
        self.parity_rows(data[np.newaxis], [stagger], out[np.newaxis], cell=cell, step=step)

    def parity_rows(
        self, data: Bytes, staggers: Staggers, out: Bytes, *, cell: int = CELL, step: int | None = None
    ) -> None:
        """`parity` for many strips at once: `data` is uint8[R, N], `out` uint8[R, ...], `staggers` int[R]."""
        check_rows(data, "data")
        check_rows(out, "out")
        rows, length = data.shape
        if cell < 1:
            raise ValueError("a cell has at least one byte")
        if not (self.inner.p and length):
            return
        cells = -(-length // cell)
        group = self.group_size(min(cell, length))
        step = group if step is None else step
        if step < group and cells > 1:
            raise ValueError(f"the parity of a cell takes {group} bytes and has {step}")
        needed = (cells - 1) * step + self.group_size(length - (cells - 1) * cell)
        if out.shape[0] != rows or out.shape[1] < needed or not out.flags.writeable:
            raise ValueError(f"out should be {rows} rows of at least {needed} bytes that can be written")
        run_parity(self._kernel, self.inner, self._tables, data, in_order(staggers, rows), out, cell, step)

    def correct(
        self, cells: Bytes, parity: Bytes, staggers: Staggers, status: Bytes, *, pinned: Bytes | None = None
    ) -> None:
        """Correct up to t = (d - 1) // 2 flips in every word, in place.

        `cells` is uint8[R, W], one cell a row; `parity` is uint8[R, group_size(W)] as received; `staggers`
        are the strips' numbers, int[R]. `status` is uint8[R, words(W)] and becomes 0 for a clean word, 1..t
        for flips that were corrected (in parity too) and 255 for a flagged word, whose bytes stay as they
        are. Bytes where `pinned` (uint8[R, W]) is not 0 are known to be right: a correction that would touch
        one is refused, and its word flagged.

        Releases the GIL. Raises ValueError for arrays that are not as described.
        """
        check_rows(cells, "cells")
        rows, width = cells.shape
        expected = {"parity": self.group_size(width), "status": self.words(width), "pinned": width}
        given = {"parity": parity, "status": status, **({} if pinned is None else {"pinned": pinned})}
        for name, array in given.items():
            check_rows(array, name)
            if array.shape != (rows, expected[name]):
                raise ValueError(f"{name} is {array.shape} and should be {(rows, expected[name])}")
        if not (cells.flags.writeable and parity.flags.writeable and status.flags.writeable):
            raise ValueError("cells, parity and status are written")
        if not (self.inner.p and width):
            return
        in_rows = in_order(staggers, rows)
        syndromes = np.empty((rows, expected["parity"]), np.uint8)
        self.parity_rows(cells, in_rows, syndromes, cell=width)
        syndromes ^= parity
        if pinned is None:
            pinned = np.zeros(cells.shape, np.uint8)
        run_correct(CORRECT.prepare(), self.inner, cells, parity, syndromes, in_rows, status, pinned)

    def spread(self, status: Bytes, staggers: Staggers, width: int) -> Bytes:
        """For each byte of the cells the status of its word: uint8[R, width] from uint8[R, words(width)]."""
        out = np.zeros((len(status), width), np.uint8)
        if self.inner.p:
            SPREAD(status, in_order(staggers, len(status)), self.inner.m, out)
        return out


def padded(words: int) -> int:
    """`words` rounded up to whole groups."""
    return -(-words // GROUP) * GROUP


def scratch_size(words: int, m: int, p: int) -> int:
    """Bytes of scratch memory for one cell: its words in order, planes of parity, and parity."""
    return padded(words) * (m + 2 * p) + 2 * WORD


def in_order(staggers: Staggers, rows: int) -> NDArray[np.int64]:
    """`staggers` as a kernel takes them. Raises ValueError unless there is one for each row."""
    converted = np.array(staggers, np.int64)
    if converted.shape != (rows,) or (converted < 0).any():
        raise ValueError(f"staggers should be {rows} numbers from 0 on")
    return converted


@dataclass(frozen=True)
class Leaders:
    """What corrects words: the places of one or two flips (as far as t allows) for each syndrome.

    Sorted by the low 16 bits of the syndrome (8 where it has no more); entries with low bits b are
    starts[b] .. starts[b + 1] - 1. `places` holds bit number + 1 of each flip in a byte of its own.
    """

    columns: NDArray[np.uint32]
    starts: NDArray[np.uint32]
    syndromes: NDArray[np.uint32]
    places: NDArray[np.uint32]


@cache
def leaders(inner: InnerCode) -> Leaders:
    columns = np.array(inner.check_columns, np.uint32).ravel()
    numbers = np.arange(1, inner.n + 1, dtype=np.uint32)
    syndromes, places = columns, numbers
    if inner.t > 1:
        i, j = np.triu_indices(inner.n, 1)
        syndromes = np.concatenate([syndromes, columns[i] ^ columns[j]])
        places = np.concatenate([places, numbers[i] | numbers[j] << 8])
    buckets = 1 << min(16, 8 * inner.p)
    low_bits = syndromes & np.uint32(buckets - 1)
    order = np.argsort(low_bits, kind="stable")
    starts = np.searchsorted(low_bits[order], np.arange(buckets + 1)).astype(np.uint32)
    return Leaders(columns, starts, syndromes[order], places[order])


@cache
def parity_tables(inner: InnerCode, tier: str) -> NDArray[Any]:
    """What a tier's parity kernel looks up; rows for bytes m.. of the 16 are zero.

    portable: uint32[16, 256]. Otherwise uint8[p, 16, 2, 16]: parity byte j of byte t by low or high nibble.
    """
    full = np.zeros((WORD, 256), np.uint32)
    full[: inner.m] = inner.parity_tables
    if tier == "portable":
        return full
    nibbles = np.arange(16)
    by_nibble = np.stack([full[:, nibbles], full[:, nibbles << 4]], axis=1)
    return np.array([by_nibble >> np.uint32(8 * j) for j in range(inner.p)]).astype(np.uint8, order="C")


def run_parity(
    compiled: Callable[..., Any],
    inner: InnerCode,
    tables: NDArray[Any],
    data: Bytes,
    staggers: NDArray[np.int64],
    out: Bytes,
    cell: int,
    step: int,
) -> None:
    """Call a parity kernel on arrays that have been checked."""
    m, p = inner.m, inner.p
    length = data.shape[1]
    compiled(
        data.ctypes.data,
        data.strides[0],
        length,
        cell,
        staggers,
        out.ctypes.data,
        out.strides[0],
        step,
        m,
        p,
        tables.ctypes.data,
        scratch(scratch_size(-(-min(cell, length) // m), m, p)),
    )


def run_correct(
    compiled: Callable[..., Any],
    inner: InnerCode,
    cells: Bytes,
    parity: Bytes,
    syndromes: Bytes,
    staggers: NDArray[np.int64],
    status: Bytes,
    pinned: Bytes,
) -> None:
    """Call the correcting kernel on arrays that have been checked."""
    status[...] = 0
    if not pinned.flags.writeable:  # numba takes read-only arrays for another type
        pinned = pinned.copy()
    table = leaders(inner)
    arrays = (table.columns, table.starts, table.syndromes, table.places)
    compiled(cells, parity, syndromes, staggers, status, pinned, inner.m, inner.p, inner.t, *arrays)


def gives_known_parity(compiled: Callable[..., Any], tier: str) -> bool:
    """Whether a parity kernel agrees with the codes' tables, for every single bit and for mixed bytes."""
    for inner in InnerCode.known():
        m, p = inner.m, inner.p
        data = np.zeros((2, 8 * m * m + 3), np.uint8)
        data[0, : 8 * m * m] = (
            np.kron(np.eye(m, dtype=np.uint8), 1 << np.arange(8)[:, None]).astype(np.uint8).ravel()
        )
        data[1] = np.arange(data.shape[1]) % 251
        words = -(-data.shape[1] // m)
        out = np.empty((2, words * p), np.uint8)
        run_parity(compiled, inner, parity_tables(inner, tier), data, np.array([0, m]), out, data.shape[1], 0)
        filled = np.zeros((2, words * m), np.uint8)
        filled[:, : data.shape[1]] = data
        each = inner.parity_tables[np.arange(m), filled.reshape(2, words, m)]
        want = np.bitwise_xor.reduce(each, axis=2).astype("<u4").view(np.uint8).reshape(2, words, 4)[..., :p]
        if not np.array_equal(out, want.reshape(2, -1)):
            return False
    return True


def corrects_known_flips(compiled: Callable[..., Any]) -> bool:
    """Whether the zero word comes out again after t flips, for sets of flips that touch every bit."""
    for inner in InnerCode.known():
        m, p, t = inner.m, inner.p, inner.t
        flipped = [np.arange(start, start + t) * 41 % inner.n for start in range(inner.n)]
        bits = np.zeros((inner.n, inner.n), np.uint8)
        for row, places in zip(bits, flipped, strict=True):
            row[places] = 1
        received = np.packbits(bits, axis=1, bitorder="little")
        cells, parity = received[:, :m].copy(), received[:, m:].copy()
        values = np.bitwise_xor.reduce(inner.parity_tables[np.arange(m), cells], axis=1)
        syndromes = values.astype("<u4").view(np.uint8).reshape(-1, 4)[:, :p] ^ parity
        status = np.zeros((inner.n, 1), np.uint8)
        staggers = np.zeros(inner.n, np.int64)
        run_correct(compiled, inner, cells, parity, syndromes, staggers, status, np.zeros_like(cells))
        if cells.any() or parity.any() or (status != t).any():
            return False
    return True


def spreads_known_words(compiled: Callable[..., Any]) -> bool:
    """Whether the words of 7 bytes lie where they should, not staggered and staggered by 2."""
    out = np.zeros((2, 7), np.uint8)
    compiled(np.array([[1, 2, 3]] * 2, np.uint8), np.array([0, 5]), 3, out)
    return out.tolist() == [[1, 1, 1, 2, 2, 2, 3], [2, 3, 1, 1, 1, 2, 2]]


def _parity_kernel(tier: str) -> Kernel:
    return Kernel(f".words_kernels.parity_{tier}", partial(gives_known_parity, tier=tier), "the inner code")


PARITY_KERNELS = {tier: _parity_kernel(tier) for tier in ("shuffle", "portable")}
PARITY_KERNELS["gfni"] = PARITY_KERNELS["shuffle"]  # as fast as memory already
CORRECT = Kernel(".words_kernels.correct", corrects_known_flips, "the inner code")
SPREAD = Kernel(".words_kernels.spread", spreads_known_words, "the inner code")
