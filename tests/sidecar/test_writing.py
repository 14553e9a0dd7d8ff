"""Writing sections: whatever the order and the pieces in which digests and body come, the same bytes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import xxhash
from hypothesis import given, settings
from hypothesis import strategies as st
from support import Memory, content

from oakum.algebra.naming import resolve_code
from oakum.geometry import Geometry, whole_depth
from oakum.sidecar.bootstrap import LAST_SECTION, Bootstrap, CodeParameters
from oakum.sidecar.layout import CELL_TRACKS, FRAME_CONTENT, Layout, Track
from oakum.sidecar.reading import examine_records, find_sections
from oakum.sidecar.table import Kind, Piece
from oakum.sidecar.text import page
from oakum.sidecar.writing import SectionWriter


class Buffer:
    """A sink in memory that refuses to be written past its end, and full of rubbish at first."""

    def __init__(self, size: int) -> None:
        self.data = bytearray(content(size, 77))

    def write(self, offset: int, data: bytes | bytearray | memoryview) -> None:
        assert offset >= 0
        assert offset + len(data) <= len(self.data)
        self.data[offset : offset + len(data)] = data

    def read(self, offset: int, length: int) -> bytes:
        return bytes(self.data[offset : offset + length])


def prepared(code: str, length: int, members: int = 1) -> tuple[Bootstrap, Layout, bytes]:
    c = resolve_code(code)
    g = Geometry(c.outer.n, c.outer.k, c.inner.m, c.inner.p, length, whole_depth(length, c.outer.k))
    sizes = [length] + [0] * (members - 1)
    table = b"".join(
        Piece(Kind.FILE, b"%05d" % i, 0o644, i, size, 0, size, True, bytes([i % 256]) * 32).pack()
        for i, size in enumerate(sizes)
    )
    layout = Layout(g, len(table))
    record = Bootstrap(
        CodeParameters.of(c), layout.stretches, 0, 0, length, g.depth, 0, length, 0, len(table), 0, members,
        LAST_SECTION,
    )  # fmt: skip
    return record, layout, table


def section_bytes(code: str, length: int, cuts: int, seed: int, members: int = 1) -> bytes:
    """A section of made-up body and digests, handed over in `cuts` pieces at random places."""
    record, layout, table = prepared(code, length, members)
    sink = Buffer(layout.size)
    writer = SectionWriter(record, layout, sink)
    rng = np.random.default_rng(seed)
    body = np.frombuffer(content(layout.geometry.body, 5), np.uint8)
    pieces = np.split(body, np.sort(rng.integers(0, len(body) + 1, cuts)))
    starts = np.cumsum([0, *map(len, pieces)])
    for i in rng.permutation(len(pieces)).tolist():
        writer.write_body(int(starts[i]), pieces[i])
    for track in CELL_TRACKS:
        digests = np.arange(layout.cell_counts[track], dtype=np.uint64) * np.uint64(track + 1000)
        for part in np.split(digests, np.sort(rng.integers(0, len(digests) + 1, cuts))):
            writer.add_digests(track, part)
    writer.finish(table)
    return bytes(sink.data)


@pytest.mark.parametrize("code", ["shelf", "plain", "RS(255,254)"])
@pytest.mark.parametrize("length", [0, 1, 5000, 70_000, 3_000_000])
@given(st.integers(0, 9), st.integers(0, 1000))
@settings(max_examples=4)
def test_order_and_pieces_do_not_show(code: str, length: int, cuts: int, seed: int) -> None:
    assert section_bytes(code, length, cuts, seed) == section_bytes(code, length, 0, 0)


@pytest.mark.parametrize("code", ["shelf", "plain", "RS(255,254)"])
@pytest.mark.parametrize("length", [0, 1, 5000, 70_000, 3_000_000])
def test_what_is_written_is_read(code: str, length: int) -> None:
    """No byte is left as it was in the sink, and all records are whole."""
    data = section_bytes(code, length, 3, 1)
    (section,) = find_sections(Memory(data))
    record, layout, table = prepared(code, length)
    assert section.end == len(data)
    assert section.table_bytes() == table
    assert section.bootstrap == replace(
        record, body_digest=section.bootstrap.body_digest
    ).identified(table)  # fmt: skip
    assert data[:4096] == page(section.bootstrap, layout)
    body, faults = section.body(0, layout.geometry.body)
    assert (body.tobytes(), faults) == (content(layout.geometry.body, 5), [])
    for track in CELL_TRACKS:
        count = layout.cell_counts[track]
        values, known = section.digests(track, 0, count)
        assert known is None
        assert np.array_equal(values, np.arange(count, dtype=np.uint64) * np.uint64(track + 1000))
    sealed = [frame for frame in layout.frames() if frame.track is not Track.SEALS]
    seals, known = section.digests(Track.SEALS, 0, len(sealed))
    assert known is None
    assert seals.tolist() == [
        xxhash.xxh3_64_intdigest(section.rows(frame)[0][120:].tobytes()) for frame in sealed
    ]
    assert not examine_records(section)
    assert section_bytes(code, length, 0, 9) == data


def test_tables_of_many_frames() -> None:
    """9,000 members: the table takes more than one frame, and each frame is found."""
    data = section_bytes("shelf", 100_000, 0, 0, members=9000)
    (section,) = find_sections(Memory(data))
    assert section.layout.frame_count(Track.TABLE) == 2
    assert section.layout.content(Track.TABLE) > FRAME_CONTENT
    assert [p.path for p in section.table()] == [b"%05d" % i for i in range(9000)]
    assert not examine_records(section)


def test_digests_that_were_laid_down_are_found_again() -> None:
    """Over the border of two frames, as the second of two reads needs them."""
    record, layout, _ = prepared("plain", 300 << 20)
    sink = Buffer(layout.size)
    writer = SectionWriter(record, layout, sink)
    count = layout.cell_counts[Track.DATA]
    assert count > FRAME_CONTENT // 8
    digests = np.random.default_rng(3).integers(0, 1 << 64, count, np.uint64)
    writer.add_digests(Track.DATA, digests)
    writer.lay_down(Track.DATA)
    border = FRAME_CONTENT // 8
    for first, size in [(0, 1), (border - 3, 7), (border, 10), (count - 5, 5), (10, 0), (0, count)]:
        assert np.array_equal(writer.laid(Track.DATA, first, size), digests[first : first + size])
