"""The column decoder: errors and erasures of a Reed-Solomon code, many columns at once.

A column is one outer codeword, and arrays hold one row a symbol: byte [i, c] is symbol i of column c.
Columns whose erasures differ go through `ColumnDecoder.decode`; those that share one set of erasures and are
not wrong elsewhere are solved by one matrix, `ErasureSolver`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import ORDER, Bytes
from oakum.algebra.outer import OuterCode
from oakum.kernels.compiling import Kernel
from oakum.kernels.lane_field import BLOCK_WORDS, FIELD, LANES, PLANE_WORDS, POINTS, field_map, points
from oakum.kernels.parity import ParityEncoder
from oakum.kernels.stripmap import StripMap

FAILED = -1
"""The status of a column that could not be decoded."""

NO_PLACE = 255

CONTROL_ROWS = 8
"""Lane blocks that steer the search for the locator, and what follows."""

FLAG_ROWS = 3
"""Sets of lanes that it keeps."""


class ColumnDecoder:
    """Bounded-distance decoding of columns of `outer`.

    `tier` is that of syndromes and strip maps (see `oakum.kernels.tiers`). All methods may be called from
    several threads at once and release the GIL while they compute.
    """

    def __init__(self, outer: OuterCode, tier: str | None = None) -> None:
        self.outer = outer
        self._tier = tier
        self._checks = ParityEncoder(outer, tier)
        self._tables = Tables(outer)
        self._foreign = outer.field_poly != FIELD.poly
        self._solver = lru_cache(maxsize=64)(self._build_solver)

    def prepare(self) -> None:
        """Compile, or load, everything that the methods need, in the calling thread."""
        self._checks.prepare()
        DECODE_COLUMNS.prepare()

    def syndromes(self, received: Bytes) -> Bytes:
        """The syndromes uint8[r, L] of the columns of `received`, uint8[n, L]. ValueError on other shapes."""
        _check_rows(received, "received", self.outer.n)
        out = np.empty((self.outer.r, received.shape[1]), dtype=np.uint8)
        self._checks.syndromes(received, out)
        return out

    def decode(
        self, syndromes: Bytes, erased: Bytes | None = None, *, only: NDArray[np.intp] | None = None
    ) -> tuple[Bytes, NDArray[np.int16]]:
        """The error magnitudes and a status for every column.

        `syndromes` is uint8[r, L]; `erased`, uint8[n, L], is nonzero where a symbol is erased. Gives the
        magnitudes uint8[n, L], to be XORed onto what was received, and the status int16[L]: the number of
        wrong symbols outside the erased places, or `FAILED` where the column could not be decoded, and
        then its magnitudes are zero. With `only`, ascending numbers of columns, all others are passed over
        (magnitudes and status zero). A column is decoded if and only if a codeword can be had with
        2 * errors + erasures <= r. Raises ValueError on other shapes.
        """
        _check_rows(syndromes, "syndromes", self.outer.r)
        columns = syndromes.shape[1]
        suspect = np.bitwise_or.reduce(syndromes, axis=0)
        if erased is None:
            erased = np.zeros((0, columns), dtype=np.uint8)
        else:
            _check_rows(erased, "erased", self.outer.n)
            if erased.shape[1] != columns:
                raise ValueError(f"erased has {erased.shape[1]} columns, syndromes {columns}")
            suspect = suspect | np.bitwise_or.reduce(erased, axis=0)
        magnitudes = _unaliased(self.outer.n, columns)
        status = np.zeros(columns, dtype=np.int16)
        chosen = np.flatnonzero(suspect) if only is None else only[suspect[only] != 0]
        if chosen.size == 0:
            return magnitudes, status
        tables = self._tables
        if self._foreign:
            syndromes = tables.to_lanes[syndromes]
        DECODE_COLUMNS(
            np.ascontiguousarray(syndromes), np.ascontiguousarray(erased), chosen,
            tables.locators, tables.place_of, tables.scale_of, magnitudes, status, *workspace(self.outer.r),
        )  # fmt: skip
        return tables.from_lanes[magnitudes] if self._foreign else magnitudes, status

    def erasure_solver(self, rows: Sequence[int]) -> ErasureSolver:
        """The solver for columns that all have just the symbols `rows` erased, at most r different ones.

        Kept for the next call with the same rows. Raises ValueError for rows that are not so.
        """
        chosen = tuple(int(row) for row in rows)
        distinct = set(chosen)
        if len(distinct) != len(chosen) or not distinct <= set(range(self.outer.n)):
            raise ValueError(f"the erased rows {chosen} are not different rows from 0 to {self.outer.n - 1}")
        if len(chosen) > self.outer.r:
            raise ValueError(f"{len(chosen)} erased rows given, the code restores {self.outer.r}")
        return self._solver(chosen)

    def _build_solver(self, rows: tuple[int, ...]) -> ErasureSolver:
        return ErasureSolver(self.outer, rows, self._tier)


class Tables:
    """What the kernel has to know about a code.

    locators: uint8[n], for each place its locator X in the lanes' field;
    place_of: uint8[256], the place whose 1/X is the Fourier transform's point q, or `NO_PLACE`;
    scale_of: uint8[256], X^(-first root) at point q; nothing, uint8[0], where all are 1;
    to_lanes, from_lanes: uint8[256], the code's field to the lanes' field and back.
    """

    def __init__(self, outer: OuterCode) -> None:
        self.to_lanes = field_map(outer.field_poly)
        self.from_lanes = np.argsort(self.to_lanes).astype(np.uint8)
        self.locators = self.to_lanes[outer.locators]
        self.place_of = np.full(POINTS, NO_PLACE, dtype=np.uint8)
        self.place_of[np.argsort(points())[FIELD.inverse(self.locators)]] = np.arange(outer.n)
        scales = FIELD.power(points(), outer.first_root % ORDER)
        self.scale_of = scales if outer.first_root else scales[:0]


def workspace(r: int) -> list[NDArray[Any]]:
    """Memory for the kernel to work in, as it takes it after its other arguments.

    Lane blocks, uint64[:, 32]: syndromes, evaluator, locator and the one before, constants and values of the
    Fourier transform, control; sets of lanes, uint64[:, 4]: flags and starts; bytes of a row of columns, of
    staged locators or magnitudes, of roots; numbers of erasures and of roots.
    """
    heights = (r, r, r + 2, r + 2, POINTS, POINTS, CONTROL_ROWS)
    blocks = [np.zeros((rows, BLOCK_WORDS), np.uint64) for rows in heights]
    sets = [np.zeros((rows, PLANE_WORDS), np.uint64) for rows in (FLAG_ROWS, r + 1)]
    rows = [np.zeros((rows, LANES), np.uint8) for rows in (1, r, r)]
    return [*blocks, *sets, *rows, *np.zeros((2, LANES), np.int64)]


class ErasureSolver:
    """The magnitudes of the erased symbols `rows` (s <= r of them) by one matrix for all columns."""

    def __init__(self, outer: OuterCode, rows: tuple[int, ...], tier: str | None = None) -> None:
        self.rows = rows
        self._erasures = len(rows)
        self._map = StripMap(_solution(outer, rows), field_poly=outer.field_poly, tier=tier)
        self._shape = outer.r

    def solve(self, syndromes: Bytes) -> tuple[Bytes, NDArray[np.bool_]]:
        """The magnitudes uint8[s, L] of the erased rows, and bool[L]: whether the other r - s checks agree.

        `syndromes` is uint8[r, L]. Where the checks do not agree, other symbols are wrong and the magnitudes
        mean nothing; with s = r no check is left and all columns agree. Raises ValueError on other shapes.
        """
        _check_rows(syndromes, "syndromes", self._shape)
        out = np.empty_like(syndromes, order="C")
        self._map.apply(syndromes, out)
        agree = np.bitwise_or.reduce(out[self._erasures :], axis=0) == 0
        return out[: self._erasures], agree


def _check_rows(array: Bytes, name: str, rows: int) -> None:
    if array.dtype != np.uint8 or array.ndim != 2 or array.shape[0] != rows:
        raise ValueError(f"{name} is {array.dtype}{list(array.shape)}, but uint8[{rows}, L] is needed")


def _unaliased(rows: int, columns: int) -> Bytes:
    """Zeros uint8[rows, columns] whose rows do not begin at a power of two from each other.

    With such rows, one column's symbols would all compete for the same few lines of the CPU's cache.
    """
    stride = 64 * ((columns + 63) // 64 | 1)
    return np.zeros((rows, stride), dtype=np.uint8)[:, :columns]


def _solution(outer: OuterCode, rows: tuple[int, ...]) -> Bytes:
    """uint8[r, r]: M with M * syndromes = the magnitudes of `rows`, then the checks that are left over.

    Gauss and Jordan's elimination turns [H_E | I], with H_E the check matrix's columns for the rows, into
    [I 0 | M] (one above the other): any s rows of H_E are independent, since the code is MDS.
    """
    field, r = outer.field, outer.r
    table = np.concatenate([outer.check_matrix[:, list(rows)], np.eye(r, dtype=np.uint8)], axis=1)
    for pivot in range(len(rows)):
        table[pivot] = field.multiply(table[pivot], field.inverse(table[pivot, pivot]))
        others = table[:, pivot].copy()
        others[pivot] = 0
        table ^= field.multiply(others[:, None], table[pivot][None, :])
    return np.ascontiguousarray(table[:, len(rows) :])


def decodes_known_errors(compiled: Callable[..., Any]) -> bool:
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
    compiled(
        syndromes, erased, columns, tables.locators, tables.place_of, tables.scale_of, found, status,
        *workspace(outer.r),
    )  # fmt: skip
    expected = np.where(within, np.count_nonzero(errors * (1 - erased), axis=0), FAILED)
    return np.array_equal(status, expected) and np.array_equal(found, errors * within)


DECODE_COLUMNS = Kernel(".columns_kernels.decode_columns", decodes_known_errors, "the column decoder")
