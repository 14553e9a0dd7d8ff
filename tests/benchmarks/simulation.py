"""Blocks in memory, damaged as told, for the real block decoder: what the measurements and their tests share.

A `Laboratory` makes blocks of one code; a `Damaged` block is a `BlockSource` that knows the truth, so that
whatever the decoder vouches for can be held against it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from unittest.mock import patch

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.naming import resolve_code
from oakum.decoding.block import RIGHT, UNKNOWN, WRONG, BlockOutcome, Decoders, decode_block
from oakum.decoding.cells import Cells
from oakum.decoding.columns import Columns, _Posed
from oakum.geometry import CELL, Geometry
from oakum.kernels.stripmap import StripMap

Bytes = NDArray[np.uint8]
Strips = NDArray[np.intp]
Mask = NDArray[np.bool_]
Flips = Iterable[tuple[int, int]]
"""Bits to flip, as (strip, bit number within the row of the cells or of the inner parity)."""


class Laboratory:
    """Makes protected blocks of `width` columns of one code, a named one or one in notation."""

    def __init__(self, name: str, width: int = CELL) -> None:
        self.code: ConcatenatedCode = resolve_code(name)
        self.decoders = Decoders.of(self.code)
        outer, inner = self.code.outer, self.code.inner
        self.geometry = Geometry(outer.n, outer.k, inner.m, inner.p, outer.k * width, width)
        self.staggers = np.array([self.geometry.stagger(i) for i in range(outer.n)], np.int64)
        self._encode = StripMap(outer.parity_matrix)

    def without(self, *, feedback: bool = True, later_trials: bool = True) -> Decoders:
        """The decoders with some of their steps switched off."""
        return replace(self.decoders, feedback=feedback, later_trials=later_trials)

    def block(self, rng: np.random.Generator) -> Damaged:
        """A block of random data, its parity and inner parity, undamaged as yet."""
        g = self.geometry
        cells = np.empty((g.n, g.depth), np.uint8)
        cells[: g.k] = rng.integers(0, 256, (g.k, g.depth), np.uint8)
        self._encode.apply(cells[: g.k], cells[g.k :])
        inner = np.zeros((g.n, g.group(0)), np.uint8)
        if g.p:
            self.decoders.words.parity_rows(cells, self.staggers, inner)
        return Damaged(g, cells, inner)


class Damaged:
    """One block: what was protected (`cells`, `parity`), what is received of it, and whether digests are.

    `digested` is False where the digests of all cells are lost; then even undamaged cells are not known.
    """

    number = 0

    def __init__(self, geometry: Geometry, cells: Bytes, parity: Bytes) -> None:
        self.geometry, self.cells, self.parity = geometry, cells, parity
        self.received, self.received_parity = cells.copy(), parity.copy()
        self.digested = True
        self.wrongly_pinned = 0

    # -- damage --------------------------------------------------------------------------------------

    def flip_at_random(self, rate: float, rng: np.random.Generator) -> Damaged:
        """Flip each bit of cells and inner parity with the chance `rate`."""
        for array in (self.received, self.received_parity):
            bits = 8 * array.size
            places = rng.choice(bits, rng.binomial(bits, rate), replace=False)
            np.bitwise_xor.at(array.reshape(-1), places >> 3, (1 << (places & 7)).astype(np.uint8))
        return self

    def flip(self, cells: Flips, parity: Flips = ()) -> Damaged:
        """Flip single bits."""
        for array, flips in ((self.received, cells), (self.received_parity, parity)):
            for strip, bit in flips:
                array[strip, bit >> 3] ^= 1 << (bit & 7)
        return self

    # -- as the decoder sees it ----------------------------------------------------------------------

    @property
    def states(self) -> Bytes:
        if not self.digested:
            return np.full(len(self.cells), UNKNOWN, np.uint8)
        wrong = (self.received != self.cells).any(axis=1)
        return np.where(wrong, np.uint8(WRONG), np.uint8(RIGHT))

    def rows(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        return self.received[strips], None

    def inner(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        return self.received_parity[strips], None

    def digests(self, strips: Strips) -> tuple[NDArray[np.uint64], Mask]:
        found = [xxhash.xxh3_64_intdigest(self.cells[strip].data) for strip in strips]
        return np.array(found, np.uint64), np.full(len(strips), self.digested)

    def pinned(self, strips: Strips) -> Mask | None:
        return None


@dataclass(frozen=True)
class Findings:
    """What became of a block, held against the truth. Counts are of columns.

    `lost`: not vouched for in full. `wrong`: vouched for in part or in full, and not as protected.
    `false_pins`: solved wrongly at some time, whether or not it was found out later.
    """

    outcome: BlockOutcome
    lost: Mask
    wrong: Mask
    false_pins: int


def decode(block: Damaged, decoders: Decoders) -> Findings:
    """Decode a block and compare every column with the truth, also while the decoder works."""
    block.wrongly_pinned = 0
    with patch("oakum.decoding.block.Columns", _WatchedColumns):
        outcome = decode_block(block, decoders)
    truth = block.cells[outcome.strips]
    lost = ~outcome.known.all(axis=0)
    wrong = (outcome.known & (outcome.right != truth)).any(axis=0)
    return Findings(outcome, lost, wrong, block.wrongly_pinned)


class _WatchedColumns(Columns):
    """Counts the columns that are pinned to something else than the truth."""

    def __init__(self, source: Damaged, decoders: Decoders, cells: Cells) -> None:
        super().__init__(source, decoders, cells)
        self._block, self._truth = source, source.cells[cells.strips]

    def _pin(self, posed: _Posed, magnitudes: Bytes, good: Mask) -> None:
        super()._pin(posed, magnitudes, good)
        places = posed.places[good]
        wrong = self.cells.value[:, places] != self._truth[:, places]
        self._block.wrongly_pinned += int(wrong.any(axis=0).sum())
