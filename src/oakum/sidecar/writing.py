"""Writing a section: digests and body as they come, records sealed at the end, when the identity is known."""

from __future__ import annotations

from dataclasses import replace
from typing import Protocol

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.sidecar.bootstrap import MARKER, Bootstrap, encode
from oakum.sidecar.frames import check_rows, payload, seal
from oakum.sidecar.layout import DIGEST_BYTES, FRAME_CONTENT, FRAME_HEADER, PAYLOAD_ROWS, Frame, Layout, Track
from oakum.sidecar.text import page

Data = bytes | bytearray | memoryview
Kept = dict[Track, tuple[int, bytes]]
"""Frames of a track that have been laid down, and the content of the next one."""


class Sink(Protocol):
    """Where the bytes of a section go; offsets are from the section's first byte."""

    def write(self, offset: int, data: Data) -> None:
        """Put `data` at `offset`."""

    def read(self, offset: int, length: int) -> bytes:
        """The `length` bytes at `offset`, as written before."""


class SectionWriter:
    """Puts everything of one section in its place. Only `write_body` may be called from several threads.

    Content of the frames is laid down plainly as it comes, so that nothing grows with the stream in
    memory; `finish` reads it back, frame by frame, and adds headers and check rows.
    """

    def __init__(self, bootstrap: Bootstrap, layout: Layout, sink: Sink) -> None:
        self._bootstrap = bootstrap
        self._layout = layout
        self._sink = sink
        self._pending: dict[Track, bytearray] = {track: bytearray() for track in Track}
        self._laid: dict[Track, int] = dict.fromkeys(Track, 0)

    def add_digests(self, track: Track, digests: NDArray[np.uint64]) -> None:
        """Append digests of cells, in the order of the track."""
        self._append(track, digests.astype("<u8").tobytes())

    def lay_down(self, track: Track) -> None:
        """Lay down all digests of a track, so that `laid` finds them. Nothing may be added afterwards."""
        self._lay(track)

    def laid(self, track: Track, first: int, count: int) -> NDArray[np.uint64]:
        """`count` digests of a track from number `first`, as they were laid down."""
        per_frame = FRAME_CONTENT // DIGEST_BYTES
        data = b""
        while count:
            number, inside = divmod(first, per_frame)
            size = min(count, per_frame - inside)
            frame = self._layout.frame(track, number)
            extents = self._layout.payload_extents(
                frame, FRAME_HEADER + inside * DIGEST_BYTES, size * DIGEST_BYTES
            )
            data += b"".join(self._sink.read(place, length) for place, _, length in extents)
            first, count = first + size, count - size
        return np.frombuffer(data, "<u8")

    def kept(self, *tracks: Track) -> Kept:
        """How far some tracks have come, for `go_on` in a later run with the same sink."""
        return {track: (self._laid[track], bytes(self._pending[track])) for track in tracks}

    def go_on(self, kept: Kept) -> None:
        """Begin where tracks had come to."""
        for track, (laid, pending) in kept.items():
            self._laid[track], self._pending[track] = laid, bytearray(pending)

    def write_body(self, offset: int, data: NDArray[np.uint8]) -> None:
        """Put contiguous bytes at `offset` of the body."""
        view = data.data
        for place, done, size in self._layout.body_extents(offset, len(view)):
            self._sink.write(place, view[done : done + size])

    def finish(self, table: bytes) -> Bootstrap:
        """Write member table, headers, check rows, seals, heads and text. Returns the final record."""
        if not self._layout.geometry.digested:
            extents = self._layout.body_extents(0, self._layout.geometry.body)
            body = b"".join(self._sink.read(place, size) for place, _, size in extents)
            self._bootstrap = replace(self._bootstrap, body_digest=xxhash.xxh3_64_intdigest(body))
        bootstrap = self._bootstrap.identified(table)
        self._append(Track.TABLE, table)
        for track in Track:
            self._lay(track)
        seals = [
            self._seal(frame, bootstrap.identity)
            for frame in self._layout.frames()
            if frame.track != Track.SEALS
        ]
        self._append(Track.SEALS, np.array(seals, "<u8").tobytes())
        self._lay(Track.SEALS)
        for number in range(self._layout.frame_count(Track.SEALS)):
            self._seal(self._layout.frame(Track.SEALS, number), bootstrap.identity)
        self._write_heads(bootstrap)
        return bootstrap

    def _append(self, track: Track, content: bytes) -> None:
        pending = self._pending[track]
        pending += content
        while len(pending) >= FRAME_CONTENT:
            self._lay(track)

    def _lay(self, track: Track) -> None:
        """Lay down one frame's worth of pending content in its place, without header and check rows."""
        content = self._pending[track][:FRAME_CONTENT]
        if not content:
            return
        del self._pending[track][:FRAME_CONTENT]
        frame = self._layout.frame(track, self._laid[track])
        self._laid[track] += 1
        for place, done, size in self._layout.payload_extents(frame, FRAME_HEADER, len(content)):
            self._sink.write(place, content[done : done + size])

    def _seal(self, frame: Frame, identity: bytes) -> int:
        extents = self._layout.payload_extents(frame, FRAME_HEADER, frame.content)
        content = b"".join(self._sink.read(place, size) for place, _, size in extents)
        rows = np.empty((2 * PAYLOAD_ROWS, frame.width), np.uint8)
        rows[:PAYLOAD_ROWS] = payload(frame, content, identity)
        rows[PAYLOAD_ROWS:] = check_rows(rows[:PAYLOAD_ROWS])
        for place, first in self._layout.slice_extents(frame):
            self._sink.write(place, rows[first : first + self._layout.rows].data.cast("B"))
        return seal(rows[PAYLOAD_ROWS:])

    def _write_heads(self, bootstrap: Bootstrap) -> None:
        layout = self._layout
        self._sink.write(0, page(bootstrap, layout))
        for stretch in range(layout.stretches):
            head = MARKER + encode(replace(bootstrap, stretch=stretch).pack())
            self._sink.write(layout.stretch_start(stretch), head)
        for place, length in layout.paddings():
            self._sink.write(place, bytes(length))
