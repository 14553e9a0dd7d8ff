"""What the decoder is given of a block, and what it gives back."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.decoding.bursts import Flips
from oakum.geometry import Geometry
from oakum.kernels.columns import ColumnDecoder
from oakum.kernels.doubts import WEIGH_WORDS
from oakum.kernels.flips import FIND_FLIPS
from oakum.kernels.words import WordCodec

Bytes = NDArray[np.uint8]
Mask = NDArray[np.bool_]
Strips = NDArray[np.intp]

RIGHT, WRONG, UNKNOWN = 0, 1, 2
"""What the digest says of a cell: it agrees, it does not, or there is none to ask."""


class BlockSource(Protocol):
    """Where the decoder gets what was received of one block. All arrays have one row a strip asked for."""

    geometry: Geometry
    number: int
    states: NDArray[np.uint8]
    """uint8[n]: RIGHT, WRONG or UNKNOWN for the cell of each strip."""

    def rows(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        """uint8[R, width] as received, and where it could not be read (None: nowhere)."""

    def inner(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        """uint8[R, group] inner parity as received, and where it could not be read."""

    def digests(self, strips: Strips) -> tuple[NDArray[np.uint64], Mask]:
        """Digests of the cells and whether they are known."""

    def pinned(self, strips: Strips) -> Mask | None:
        """Bytes known to be right in cells that are not (they belong to members whose SHA-256 agrees)."""


@dataclass(frozen=True)
class Decoders:
    """The compiled decoders of one code. `feedback` and `later_trials` can be switched off to measure."""

    code: ConcatenatedCode
    words: WordCodec
    columns: ColumnDecoder
    feedback: bool = True
    later_trials: bool = True

    @staticmethod
    def of(code: ConcatenatedCode) -> Decoders:
        """Prepare the decoders of a code; what has to be compiled is compiled now."""
        words, columns = WordCodec(code.inner), ColumnDecoder(code.outer)
        for codec in (words, columns):
            codec.prepare()
        WEIGH_WORDS.prepare()
        FIND_FLIPS.prepare()
        return Decoders(code, words, columns)


@dataclass
class BlockOutcome:
    """What became of a block: one row for each strip whose cell was not right.

    `known` marks the bytes that the decoder vouches for; `finished` the cells whose digest agrees or,
    where there is none, all of whose bytes are known. `margin` is 1 - max (2 wrong + erasures) / r over the
    columns.
    """

    number: int
    strips: Strips
    received: Bytes
    right: Bytes
    erased: Mask
    known: Mask
    finished: Mask
    words_corrected: int = 0
    words_flagged: int = 0
    margin: float = 1.0
    rounds: int = 0
    false_pins: int = 0

    @property
    def correctable(self) -> bool:
        """Whether nothing of the block is lost."""
        return bool(self.finished.all())

    @cached_property
    def flips(self) -> Bytes:
        """uint8[R, width]: received XOR right where both are known, zero elsewhere."""
        flips = self.received ^ self.right
        if not self.known.all():
            flips[~self.known] = 0
        if self.erased.any():
            flips[self.erased] = 0
        return flips

    @cached_property
    def wrong(self) -> Flips:
        """The bytes that are not zero in `flips`, and how they cluster."""
        return Flips.of(self.flips)
