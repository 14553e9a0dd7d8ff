"""What is fuzzed, and menders that carry mutations past checksums and identities.

A target takes any bytes and returns; nothing but the error that the user would be told may escape from what
it calls, and that it swallows. A mender takes mutated bytes and makes the checksums right again that would
otherwise end the reading at the first step.
"""

from __future__ import annotations

import os
import tempfile
from dataclasses import replace
from pathlib import Path

import numpy as np
import xxhash

from oakum.errors import FormatError, UsageError
from oakum.jobs.unreadable import read_unreadable
from oakum.sidecar.bootstrap import MAGIC, MARKER, RECORD_BYTES, Bootstrap, decode, encode, unpack
from oakum.sidecar.frames import payload
from oakum.sidecar.layout import CELL_TRACKS, FRAME_HEADER, TEXT_BYTES, Layout, Track
from oakum.sidecar.reading import Section, examine_records, find_sections

LARGEST = 64 << 10
"""No input is longer; the first record of a sidecar stands well before that."""


class Memory:
    """Bytes as a sidecar reader's source."""

    def __init__(self, data: bytes) -> None:
        self.data = data
        self.size = len(data)

    def read(self, offset: int, length: int) -> tuple[np.ndarray, list[tuple[int, int]]]:
        """uint8[length] from `offset`, zeros where there is nothing, and those places."""
        out = np.zeros(length, np.uint8)
        a, b = min(max(0, -offset), length), max(0, min(length, self.size - offset))
        if a < b:
            out[a:b] = np.frombuffer(self.data[offset + a : offset + b], np.uint8)
        return out, [(x, y) for x, y in ((0, a), (max(a, b), length)) if x < y]


def bootstrap(data: bytes) -> None:
    """The bootstrap record: 200 bytes, or a coded copy of 510."""
    try:
        for record in (unpack(data), decode(data[:510].ljust(510, b"\0"))):
            found = record[0] if isinstance(record, tuple) else record
            if found is not None:
                Layout(found.geometry, found.table_length)
                found.code.code()
                assert unpack(found.pack()) == found
    except FormatError:
        pass


def reader(data: bytes) -> None:
    """A whole sidecar: sections, member tables, digests, and the wear of the records."""
    try:
        for section in find_sections(Memory(data)):
            _read(section)
    except FormatError:
        pass


def _read(section: Section) -> None:
    section.table()
    for track in CELL_TRACKS:
        count = section.layout.cell_counts[track]
        section.digests(track, 0, min(count, 1000))
        section.digests(track, max(0, count - 10), min(count, 10))
    section.body(0, min(section.geometry.body, 1 << 20))
    examine_records(section)


def unreadable(data: bytes) -> None:
    """The CSV of what cannot be read."""
    fd, name = tempfile.mkstemp()
    try:
        os.write(fd, data)
        for ranges in read_unreadable(Path(name)).ranges.values():
            assert all(0 <= a < b < 1 << 62 for a, b in ranges)
    except UsageError:
        pass
    finally:
        os.close(fd)
        os.unlink(name)


# -- menders ------------------------------------------------------------------------------------------


def mend_record(data: bytes) -> bytes:
    """Magic and checksum of a bootstrap record made right, and its check symbols where there is room."""
    body = MAGIC + data[len(MAGIC) : RECORD_BYTES - 8].ljust(RECORD_BYTES - 8 - len(MAGIC), b"\0")
    record = body + xxhash.xxh3_64_digest(body)[::-1]
    return encode(record) if len(data) >= 510 else record


def mend_sidecar(data: bytes) -> bytes:
    """All heads made those of the first record, as it now is, and the member table given its identity."""
    at = TEXT_BYTES + len(MARKER)
    record = mend_record(data[at : at + RECORD_BYTES])
    out = bytearray(data.ljust(at + 510, b"\0"))
    out[at - len(MARKER) : at + 510] = MARKER + encode(record)
    try:
        found = unpack(record)
        layout = Layout(found.geometry, found.table_length) if found is not None else None
    except FormatError:
        return bytes(out)
    if found is None or layout is None or layout.size > 4 * LARGEST or found.table_length > LARGEST:
        return bytes(out)
    return _with_identity(found, layout, out)


def _with_identity(found: Bootstrap, layout: Layout, out: bytearray) -> bytes:
    frames = [layout.frame(Track.TABLE, i) for i in range(layout.frame_count(Track.TABLE))]
    contents = []
    for frame in frames:
        extents = layout.payload_extents(frame, FRAME_HEADER, frame.content)
        contents.append(b"".join(bytes(out[p : p + n]).ljust(n, b"\0") for p, _, n in extents))
    named = found.identified(b"".join(contents))
    for frame, content in zip(frames, contents, strict=True):
        rows = payload(frame, content, named.identity).tobytes()
        for place, done, size in layout.payload_extents(frame, 0, len(rows)):
            if place + size <= len(out):
                out[place : place + size] = rows[done : done + size]
    for stretch in range(layout.stretches):
        place = layout.stretch_start(stretch)
        head = MARKER + encode(replace(named, stretch=stretch).pack())
        if place + len(head) <= len(out):
            out[place : place + len(head)] = head
    return bytes(out)


def keep(data: bytes) -> bytes:
    """Nothing to mend."""
    return data


TARGETS = {
    "bootstrap": (bootstrap, mend_record),
    "reader": (reader, mend_sidecar),
    "unreadable": (unreadable, keep),
}
"""Each target by name, with its mender."""
