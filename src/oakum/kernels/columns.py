"""The column decoder: errors and erasures of a Reed-Solomon code, many columns at once.

A column is one outer codeword, and arrays hold one row a symbol: byte [i, c] is symbol i of column c.
Columns whose erasures differ go through `ColumnDecoder.decode`; those that share one set of erasures and are
not wrong elsewhere are solved by one matrix, `ErasureSolver`.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Bytes
from oakum.algebra.outer import OuterCode
from oakum.kernels.columns_kernels import FAILED, Tables, decode_columns
from oakum.kernels.lanes import FIELD
from oakum.kernels.parity import ParityEncoder
from oakum.kernels.stripmap import StripMap

__all__ = ["FAILED", "ColumnDecoder", "ErasureSolver"]


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
        decode_columns.prepare()

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
        decode_columns(
            np.ascontiguousarray(syndromes), np.ascontiguousarray(erased), chosen,
            tables.locators, tables.place_of, tables.scale_of, magnitudes, status,
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
