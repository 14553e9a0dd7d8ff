"""Frames: how member table, digests and seals are coded, RS(240,120) column by column.

The payload is a header of 32 bytes and the content, row by row. Its rows come first and as they are, so
that whoever finds the header's checksum right reads the content without decoding anything.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.algebra.outer import OuterCode
from oakum.sidecar.layout import FRAME_HEADER, FRAME_ROWS, PAYLOAD_ROWS, Frame

if TYPE_CHECKING:
    from oakum.kernels.columns import ColumnDecoder

Rows = NDArray[np.uint8]

_HEADER = struct.Struct("<Q16sIHH")

SPARE = 4
"""Check symbols that must be left over for a column to be believed when its frame's checksum disagrees."""


@lru_cache(maxsize=1)
def frame_code() -> OuterCode:
    """The code of a frame's columns: 120 check symbols, so that 120 lost or 60 wrong rows are made good."""
    return OuterCode(FRAME_ROWS, PAYLOAD_ROWS)


def payload(frame: Frame, content: bytes, identity: bytes) -> Rows:
    """The payload rows of a frame, uint8[120, width]: header, content, zeros."""
    rest = _place(frame, identity) + content
    rest = rest.ljust(PAYLOAD_ROWS * frame.width - 8, b"\0")
    whole = struct.pack("<Q", xxhash.xxh3_64_intdigest(rest)) + rest
    return np.frombuffer(whole, np.uint8).reshape(PAYLOAD_ROWS, frame.width)


def _place(frame: Frame, identity: bytes) -> bytes:
    """The header after its checksum: which sidecar's frame it is, and which one of it."""
    return identity + struct.pack("<IHH", frame.number, frame.track, 0)


def check_rows(rows: Rows) -> Rows:
    """The check rows uint8[120, width] that belong to payload rows uint8[120, width]."""
    if rows.shape[1] <= 16:  # A handful of columns is not worth waking the compiled kernels for.
        return np.ascontiguousarray(frame_code().encode(rows.T).T)
    from oakum.kernels.stripmap import StripMap

    out = np.empty_like(rows)
    StripMap(frame_code().parity_matrix).apply(rows, out)
    return out


def seal(check: Rows) -> int:
    """The digest that stands among the seals for a frame's check rows."""
    return int(xxhash.xxh3_64_intdigest(np.ascontiguousarray(check).data))


@dataclass(frozen=True)
class Content:
    """What came out of a frame: its content, and which of its bytes are known to be right (None: all)."""

    data: bytes
    known: NDArray[np.bool_] | None

    def count(self) -> int:
        """How many bytes are known to be right."""
        return len(self.data) if self.known is None else int(self.known.sum())


def read_plain(frame: Frame, rows: Rows, identity: bytes) -> Content | None:
    """Read a frame from its payload rows alone; None unless checksum, identity and place agree."""
    whole = rows.tobytes()
    checksum, owner, number, track, _ = _HEADER.unpack_from(whole)
    if (owner, number, track) != (identity, frame.number, frame.track):
        return None
    if checksum != xxhash.xxh3_64_intdigest(memoryview(whole)[8:]):
        return None
    return Content(whole[FRAME_HEADER : FRAME_HEADER + frame.content], None)


@lru_cache(maxsize=1)
def _decoder() -> ColumnDecoder:
    """The compiled decoder, made when the first damaged frame is met."""
    from oakum.kernels.columns import ColumnDecoder

    return ColumnDecoder(frame_code())


def correct(frame: Frame, rows: Rows, erased: Rows | None, identity: bytes) -> Content:
    """Correct a frame from all its rows uint8[240, width] and read what can be read.

    Where columns are beyond help, the bytes of the others are still known: each column is a codeword
    of its own, and with SPARE check symbols left over a wrong one is not accepted by chance.
    """
    decoder = _decoder()
    magnitudes, errors = decoder.decode(decoder.syndromes(rows), erased)
    corrected = (rows ^ magnitudes)[:PAYLOAD_ROWS]
    whole = read_plain(frame, corrected, identity)
    if whole is not None:
        return whole
    lost = np.zeros(frame.width, np.intp) if erased is None else np.count_nonzero(erased, axis=0)
    sure = (errors >= 0) & (2 * errors.astype(np.intp) + lost <= PAYLOAD_ROWS - SPARE)
    solved = np.broadcast_to(sure, (PAYLOAD_ROWS, frame.width)).reshape(-1)
    content = slice(FRAME_HEADER, FRAME_HEADER + frame.content)
    flat = corrected.reshape(-1)
    place = slice(8, FRAME_HEADER)
    if solved[place].all() and flat[place].tobytes() != _place(frame, identity):
        solved = np.zeros_like(solved)  # A whole frame of another place or sidecar says nothing here.
    return Content(flat[content].tobytes(), solved[content])
