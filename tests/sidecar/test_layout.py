"""Layout: every byte of a section has exactly one purpose, and there are not too many of them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from support import content

from oakum import protect
from oakum.algebra.naming import NAMED, resolve_code
from oakum.geometry import LARGE, SMALL, Geometry, whole_depth
from oakum.sidecar.bootstrap import HEAD_BYTES
from oakum.sidecar.layout import CELL_TRACKS, FRAME_HEADER, MANY, TEXT_BYTES, Layout, Track, stretches_for
from oakum.sidecar.table import packed_length

CODES = ("shelf", "slim", "stout", "plain", "RS(20,15)", "RS(255,254)", "RS(60,40)+EB(128,104)", "RS(2,1)")


def layout(code: str, length: int, table: int = 100) -> Layout:
    c = resolve_code(code)
    depth = whole_depth(length, c.outer.k)
    return Layout(Geometry(c.outer.n, c.outer.k, c.inner.m, c.inner.p, length, depth), table)


LAYOUTS = st.builds(
    layout,
    st.sampled_from(CODES),
    st.one_of(st.integers(0, 2000), st.integers(0, 3 * SMALL), st.integers(0, 2_000_000)),
    st.one_of(st.integers(1, 500), st.integers(1, 600_000)),
)


@given(LAYOUTS)
def test_every_byte_has_one_purpose(place: Layout) -> None:
    uses = np.zeros(place.size, np.uint8)
    uses[:TEXT_BYTES] += 1
    for t in range(place.stretches):
        start = place.stretch_start(t)
        uses[start : start + HEAD_BYTES] += 1
    for frame in place.frames():
        rows = 0
        for start, row in place.slice_extents(frame):
            assert row == rows
            uses[start : start + place.rows * frame.width] += 1
            rows += place.rows
        assert rows == 240
    done = 0
    for start, at, size in place.body_extents(0, place.geometry.body):
        assert at == done
        uses[start : start + size] += 1
        done += size
    assert done == place.geometry.body
    for start, size in place.paddings():
        assert size >= 0
        uses[start : start + size] += 1
    assert (uses == 1).all()


@given(LAYOUTS, st.data())
def test_a_piece_of_the_body_is_where_the_whole_says(place: Layout, data: st.DataObject) -> None:
    body = place.geometry.body
    if not body:
        return
    a = data.draw(st.integers(0, body - 1))
    b = data.draw(st.integers(a + 1, min(body, a + 100_000)))
    where = np.concatenate([np.arange(p, p + n) for p, _, n in place.body_extents(0, body)])
    part = np.concatenate([np.arange(p, p + n) for p, _, n in place.body_extents(a, b - a)])
    assert np.array_equal(part, where[a:b])


@given(LAYOUTS)
def test_payload_extents_are_the_first_rows(place: Layout) -> None:
    for frame in place.frames():
        rows = [np.arange(p, p + place.rows * frame.width) for p, _ in place.slice_extents(frame)]
        payload = np.concatenate(rows)[: 120 * frame.width]
        part = [np.arange(p, p + n) for p, _, n in place.payload_extents(frame, FRAME_HEADER, frame.content)]
        assert np.array_equal(np.concatenate(part), payload[FRAME_HEADER:][: frame.content])


@given(LAYOUTS)
def test_every_cell_has_a_digest(place: Layout) -> None:
    """Every byte belongs to a digested cell, parity strips and inner parity included."""
    g, counts = place.geometry, place.cell_counts
    if not g.digested:
        assert not any(counts.values())
        return
    assert counts[Track.DATA] == g.data_cells
    assert counts[Track.PARITY] * 4096 >= g.parity_bytes
    assert counts[Track.INNER] * 4096 >= g.data_inner > (counts[Track.INNER] - 1) * 4096 or not g.p
    assert counts[Track.PARITY_INNER] * 4096 >= g.parity_inner
    for track in CELL_TRACKS:
        assert place.content(track) == 8 * counts[track]
        assert (
            sum(place.frame(track, i).content for i in range(place.frame_count(track))) == 8 * counts[track]
        )


def test_there_are_many_stretches_where_the_size_allows() -> None:
    assert [stretches_for(n) for n in (0, SMALL - 1, SMALL, MANY - 1, MANY)] == [4, 4, 16, 16, 48]
    big = layout("shelf", LARGE + 1)
    assert big.prefix % 4096 == big.piece % 4096 == big.size % 4096 == 0


def overhead(code: str, length: int) -> float:
    """The sidecar's bytes beyond what the code's own overhead is, as a share of the stream."""
    return (layout(code, length).size - NAMED[code].overhead * length) / length


@pytest.mark.parametrize("code", NAMED)
@pytest.mark.parametrize(
    ("length", "most"),
    [(1 << 20, 0.03), (64 << 20, 0.01), (200_000_000, 0.01), (1 << 32, 0.01), (1 << 40, 0.01)],
)  # fmt: skip
def test_overhead_beyond_the_code_is_small(code: str, length: int, most: float) -> None:
    """At most 1 % of the stream from 64 MiB, 3 % at 1 MiB."""
    assert overhead(code, length) <= most


def test_overhead_falls_nowhere_short_between_sizes() -> None:
    """From 64 MiB on no length is worse than 1 %, whatever the rounding does."""
    lengths = np.random.default_rng(5).integers(64 << 20, 1 << 30, 300).tolist()
    assert max(overhead(code, n) for code in NAMED for n in lengths) <= 0.01


def test_a_member_costs_at_most_200_bytes() -> None:
    """Before wrapping; here with a path of 100 bytes."""
    assert packed_length(b"p" * 100) <= 200
    assert packed_length(b"") == 76


def test_size_is_the_size_of_the_file(tmp_path: Path) -> None:
    for length in (0, 1, 70_000, 1_000_000):
        (tmp_path / "f").write_bytes(content(length))
        result = protect([tmp_path / "f"], overwrite=True)
        assert result.sidecar.stat().st_size == layout("shelf", length, packed_length(b"f")).size
