"""Where in the sidecar everything stands: stretches, slices of the records, pieces of the body.

A section is a page of text and then `stretches` stretches of equal length. A stretch is a head (marker and
bootstrap record), an equal slice of every record frame, padding, and a piece of the body. A frame is a
matrix of 240 rows, 120 of payload and 120 of check symbols, one Reed-Solomon codeword a column; each
stretch holds 240 / stretches consecutive rows, so that the loss of a third of the sidecar leaves 160.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from enum import IntEnum
from functools import cached_property

from oakum.geometry import CELL, SMALL, Geometry, alignment, round_up
from oakum.sidecar.bootstrap import HEAD_BYTES

TEXT_BYTES = 4096
FRAME_ROWS = 240
PAYLOAD_ROWS = 120
FRAME_WIDTH = 4096
FRAME_HEADER = 32
FRAME_CONTENT = PAYLOAD_ROWS * FRAME_WIDTH - FRAME_HEADER
DIGEST_BYTES = 8
MANY = 128 << 20
"""From this window length on a section has 48 stretches; below, rounding so many would cost too much."""


class Track(IntEnum):
    """The sequences of frames: the member table, the digests of four kinds of cells, and the seals.

    A seal is the digest of one frame's check rows, so that damage to them is seen without decoding.
    """

    TABLE = 1
    DATA = 2
    INNER = 3
    PARITY = 4
    PARITY_INNER = 5
    SEALS = 6


CELL_TRACKS = (Track.DATA, Track.INNER, Track.PARITY, Track.PARITY_INNER)
"""The tracks that hold digests of cells."""


def stretches_for(length: int) -> int:
    """How many stretches the section of a window of `length` bytes has."""
    return 4 if length < SMALL else 16 if length < MANY else 48


@dataclass(frozen=True)
class Frame:
    """One frame: its track and number, the content bytes it holds, its width and its place in the slice."""

    track: Track
    number: int
    content: int
    width: int
    place: int


@dataclass(frozen=True)
class Layout:
    """The layout of one section; all offsets are from the section's first byte."""

    geometry: Geometry
    table_length: int

    @cached_property
    def stretches(self) -> int:
        """Number of stretches."""
        return stretches_for(self.geometry.length)

    @property
    def rows(self) -> int:
        """Rows of every frame that one stretch holds."""
        return FRAME_ROWS // self.stretches

    @cached_property
    def cell_counts(self) -> dict[Track, int]:
        """Number of digested cells of each kind."""
        g = self.geometry
        if not g.digested:
            return dict.fromkeys(CELL_TRACKS, 0)
        return {
            Track.DATA: g.data_cells,
            Track.INNER: -(-g.data_inner // CELL),
            Track.PARITY: g.r * g.blocks,
            Track.PARITY_INNER: -(-g.parity_inner // CELL),
        }

    def content(self, track: Track) -> int:
        """Bytes of content of all frames of a track."""
        if track is Track.TABLE:
            return self.table_length
        if track is Track.SEALS:
            return DIGEST_BYTES * sum(self.frame_count(t) for t in Track if t is not Track.SEALS)
        return DIGEST_BYTES * self.cell_counts[track]

    @cached_property
    def _track_places(self) -> list[int]:
        """Where in a slice each track begins, by its number less one; last, where the slice ends."""
        places = [0]
        for track in Track:
            full, rest = divmod(self.content(track), FRAME_CONTENT)
            width = full * FRAME_WIDTH + (self._width(rest) if rest else 0)
            places.append(places[-1] + self.rows * width)
        return places

    @staticmethod
    def _width(content: int) -> int:
        return -(-(content + FRAME_HEADER) // PAYLOAD_ROWS)

    @property
    def slice_bytes(self) -> int:
        """Bytes of records in one stretch."""
        return self._track_places[-1]

    def frame_count(self, track: Track) -> int:
        """Number of frames of a track."""
        return -(-self.content(track) // FRAME_CONTENT)

    def frame(self, track: Track, number: int) -> Frame:
        """The frame of a track by number."""
        content = min(FRAME_CONTENT, self.content(track) - number * FRAME_CONTENT)
        place = self._track_places[track - 1] + number * self.rows * FRAME_WIDTH
        return Frame(track, number, content, self._width(content), place)

    def frames(self) -> Iterator[Frame]:
        """All frames in order, those of the seals last."""
        for track in Track:
            for number in range(self.frame_count(track)):
                yield self.frame(track, number)

    # -- stretches and the body ---------------------------------------------------------------------

    @cached_property
    def piece(self) -> int:
        """Bytes of the body in every stretch but the last, which has what remains."""
        return round_up(-(-self.geometry.body // self.stretches), alignment(self.geometry.length))

    @cached_property
    def prefix(self) -> int:
        """Bytes of a stretch before its piece of the body: head, slice of the records, padding."""
        return round_up(HEAD_BYTES + self.slice_bytes, alignment(self.geometry.length))

    @property
    def stretch_bytes(self) -> int:
        """Distance in bytes from one stretch to the next."""
        return self.prefix + self.piece

    def stretch_start(self, stretch: int) -> int:
        """Offset of a stretch's marker."""
        return TEXT_BYTES + stretch * self.stretch_bytes

    def piece_length(self, stretch: int) -> int:
        """Bytes of the body in one stretch."""
        return max(0, min(self.piece, self.geometry.body - stretch * self.piece))

    @cached_property
    def size(self) -> int:
        """Bytes of the whole section."""
        end = max(self.stretch_start(t) + self.prefix + self.piece_length(t) for t in range(self.stretches))
        return round_up(end, alignment(self.geometry.length))

    def paddings(self) -> Iterator[tuple[int, int]]:
        """The stretches' bytes that hold nothing and are zeros: (place in the section, bytes)."""
        for stretch in range(self.stretches):
            start = self.stretch_start(stretch)
            before = start + HEAD_BYTES + self.slice_bytes
            yield before, start + self.prefix - before
            after = start + self.prefix + self.piece_length(stretch)
            last = stretch == self.stretches - 1
            yield after, (self.size if last else start + self.stretch_bytes) - after

    def body_extents(self, offset: int, length: int) -> Iterator[tuple[int, int, int]]:
        """Where `length` bytes of the body from `offset` stand: (place in the section, done, bytes)."""
        done = 0
        while done < length:
            stretch, inside = divmod(offset + done, self.piece)
            size = min(length - done, self.piece - inside)
            yield self.stretch_start(stretch) + self.prefix + inside, done, size
            done += size

    def payload_extents(self, frame: Frame, offset: int, length: int) -> Iterator[tuple[int, int, int]]:
        """Where `length` bytes of a frame's payload from `offset` stand: (place, done, bytes)."""
        span = self.rows * frame.width
        done = 0
        while done < length:
            stretch, inside = divmod(offset + done, span)
            size = min(length - done, span - inside)
            yield self.stretch_start(stretch) + HEAD_BYTES + frame.place + inside, done, size
            done += size

    def slice_extents(self, frame: Frame) -> Iterator[tuple[int, int]]:
        """Where a frame's rows stand: for each stretch, (place in the section, first row)."""
        for stretch in range(self.stretches):
            yield self.stretch_start(stretch) + HEAD_BYTES + frame.place, stretch * self.rows
