"""Finding sections and reading records, whole, damaged and hostile. Sidecars here are bytes in memory."""

from __future__ import annotations

import io
import struct
from collections.abc import Iterable
from contextlib import suppress
from dataclasses import fields, replace

import numpy as np
import pytest
import xxhash
from hypothesis import given, settings
from hypothesis import strategies as st
from support import Memory, Range, content, overwritten, with_flips

from oakum import FormatError, protect_pipe
from oakum.sidecar.bootstrap import MARKER, RECORD_BYTES, Bootstrap, CodeParameters, encode, unpack
from oakum.sidecar.frames import Content
from oakum.sidecar.layout import FRAME_CONTENT, HEAD_BYTES, TEXT_BYTES, Layout, Track
from oakum.sidecar.reading import Section, examine_records, find_marker, find_sections

CODE = "RS(60,40)+EH(128,120)"
WINDOW = 40 * 4096


def pipe(data: bytes, code: str = CODE) -> bytes:
    out = io.BytesIO()
    protect_pipe(io.BytesIO(data), name="f", output=out, code=code, depth=4096)
    return out.getvalue()


ONE = pipe(content(WINDOW))
"""One section of 16 stretches."""

FIVE = pipe(content(4 * WINDOW + 1000))
"""Four sections of 16 stretches and a last one of 4."""


def windows(data: bytes, lost: Iterable[Range] = ()) -> list[int]:
    return [s.bootstrap.window for s in find_sections(Memory(data, lost))]


def only(data: bytes, lost: Iterable[Range] = ()) -> Section:
    (section,) = find_sections(Memory(data, lost))
    return section


FIRST = only(ONE)
BASES = [s.base for s in find_sections(Memory(FIVE))]


# -- finding ---------------------------------------------------------------------------------------


def test_whole_sidecars() -> None:
    assert windows(ONE) == [0]
    assert windows(FIVE) == [0, 1, 2, 3, 4]
    sections = find_sections(Memory(FIVE))
    assert [s.base for s in sections[1:]] == [s.end for s in sections[:-1]]
    assert sections[-1].end == len(FIVE)
    assert [s.bootstrap.section_offset for s in sections] == BASES
    assert [s.bootstrap.last for s in sections] == [False] * 4 + [True]
    assert all(not examine_records(s) for s in sections)


def test_sections_form_a_chain() -> None:
    sections = find_sections(Memory(FIVE))
    assert [s.bootstrap.parent for s in sections] == [bytes(16)] + [
        s.bootstrap.identity for s in sections[:-1]
    ]
    assert {s.bootstrap.set_identity for s in sections} == {sections[0].bootstrap.identity}


@pytest.mark.parametrize("kept", range(16))
def test_one_head_of_sixteen_is_enough(kept: int) -> None:
    hurt = bytearray(ONE)
    for t in range(16):
        if t != kept:
            start = FIRST.layout.stretch_start(t)
            hurt[start : start + HEAD_BYTES] = content(HEAD_BYTES, t)
    section = only(bytes(hurt))
    assert (section.base, section.bootstrap) == (0, FIRST.bootstrap)
    assert section.table() == FIRST.table()


@pytest.mark.parametrize("size", [1, 100, TEXT_BYTES, 5000, len(ONE) // 2])
def test_the_front_is_missing(size: int) -> None:
    section = only(ONE[size:])
    assert (section.base, section.bootstrap) == (-size, FIRST.bootstrap)


@pytest.mark.parametrize("size", [1, 4095, 100_000, (1 << 20) - 3, (1 << 20) + 5])
def test_bytes_inserted_before(size: int) -> None:
    section = only(content(size) + ONE)
    assert (section.base, section.bootstrap) == (size, FIRST.bootstrap)
    assert section.table() == FIRST.table()
    assert windows(content(size) + FIVE) == [0, 1, 2, 3, 4]


@pytest.mark.parametrize("end", [BASES[1], BASES[1] + 5000, BASES[4], len(FIVE) - 1])
def test_the_end_is_cut(end: int) -> None:
    expected = [w for w, base in enumerate(BASES) if base + TEXT_BYTES + HEAD_BYTES <= end]
    assert windows(FIVE[:end]) == expected


@pytest.mark.parametrize("gone", [0, 1, 2, 3])
def test_a_section_that_is_lost_takes_no_other_with_it(gone: int) -> None:
    start, length = BASES[gone], BASES[gone + 1] - BASES[gone]
    rest = [w for w in range(5) if w != gone]
    assert windows(overwritten(FIVE, start, length)) == rest
    assert windows(FIVE[:start] + bytes(length) + FIVE[start + length :]) == rest
    assert windows(FIVE, [(start, start + length)]) == rest
    assert windows(FIVE[:start] + FIVE[start + length :]) == rest


@given(st.integers(0, 1000))
@settings(max_examples=8)
def test_flips_everywhere(seed: int) -> None:
    """One bit in two hundred is wrong: all sections and the table are still there."""
    hurt = with_flips(FIVE, len(FIVE) * 8 // 200, seed)
    sections = find_sections(Memory(hurt))
    assert [s.bootstrap.window for s in sections] == [0, 1, 2, 3, 4]
    assert [s.table() for s in sections] == [s.table() for s in find_sections(Memory(FIVE))]


def with_foreign_heads(stretches: Iterable[int]) -> bytes:
    """ONE with the heads of another sidecar's stretches."""
    other = pipe(content(WINDOW, 9))
    out = bytearray(ONE)
    for t in stretches:
        start = FIRST.layout.stretch_start(t)
        out[start : start + HEAD_BYTES] = other[start : start + HEAD_BYTES]
    return bytes(out)


@pytest.mark.parametrize("stretches", [range(1), range(7), range(3, 10), range(9, 16)])
def test_heads_of_another_sidecar_are_outvoted(stretches: range) -> None:
    section = only(with_foreign_heads(stretches))
    assert section.bootstrap == FIRST.bootstrap
    assert section.table() == FIRST.table()


def test_heads_of_another_sidecar_outvote() -> None:
    section = only(with_foreign_heads(range(9)))
    assert section.bootstrap.identity != FIRST.bootstrap.identity
    with pytest.raises(FormatError):
        section.table()


def test_sections_of_another_set_are_left_out() -> None:
    other = pipe(content(3 * WINDOW, 9))
    start, stop = BASES[1], BASES[2]
    foreign = find_sections(Memory(other))[1]
    mixed = FIVE[:start] + other[foreign.base : foreign.end] + FIVE[stop:]
    assert windows(mixed) == [0, 2, 3, 4]


@pytest.mark.parametrize(
    "data", [b"", b"x", content(3_000_000), bytes(100_000), MARKER * 1500, b"\xff" * 9999]
)
def test_nothing_to_be_found(data: bytes) -> None:
    with pytest.raises(FormatError, match="not an oakum sidecar"):
        find_sections(Memory(data))


def test_false_positives_of_the_marker_are_passed_over() -> None:
    """Markers that no record follows, and a record that a marker does not begin, mislead nobody."""
    fakes = b"".join(MARKER + content(600, i) for i in range(50))
    assert only(fakes + ONE).base == len(fakes)


# -- the marker ------------------------------------------------------------------------------------


def test_marker_is_found_with_up_to_ten_wrong_bits() -> None:
    rng = np.random.default_rng(7)
    for count in (0, 1, 10, 11, 12):
        data = np.zeros(500, np.uint8)
        data[200:208] = np.frombuffer(with_flips(MARKER, count, int(rng.integers(1000))), np.uint8)
        assert (200 in find_marker(data)) == (count <= 10)


def test_marker_at_both_ends_and_in_too_little() -> None:
    mark = np.frombuffer(MARKER, np.uint8)
    assert find_marker(mark).tolist() == [0]
    assert find_marker(np.concatenate([mark, mark])).tolist() == [0, 8]
    for length in range(8):
        assert len(find_marker(mark[:length])) == 0


def test_false_matches_are_rare() -> None:
    """1.0e-8 per position (binomial); in 8 million positions more than two is a chance of 1e-4."""
    data = np.random.default_rng(11).integers(0, 256, 8_000_000, np.uint8)
    assert len(find_marker(data)) <= 2


# -- records ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("third", range(0, 11))
@pytest.mark.parametrize("how", ["lost", "zeros", "noise"])
def test_any_third_may_go(third: int, how: str) -> None:
    """As oakum-sidecar(5) promises, member table and digests survive the loss of any third of the sidecar."""
    length = len(ONE) // 3
    start = third * (len(ONE) - length) // 10
    gone = (start, start + length)
    if how == "lost":
        section = only(ONE, [gone])
    else:
        section = only(ONE[:start] + (bytes(length) if how == "zeros" else content(length)) + ONE[gone[1] :])
    assert section.table() == FIRST.table()
    for track in (Track.DATA, Track.INNER, Track.PARITY, Track.PARITY_INNER):
        count = section.layout.content(track) // 8
        values, known = section.digests(track, 0, count)
        assert known is None
        assert np.array_equal(values, FIRST.digests(track, 0, count)[0])


def many(count: int, length: int) -> bytes:
    """A sidecar that is mostly records: `count` members, all but the first of them empty."""
    from test_writing import section_bytes

    return section_bytes("shelf", length, 0, 0, count)


@pytest.mark.parametrize(
    "data", [pipe(b"x"), pipe(content(30_000)), many(3000, 100), many(3000, 70_000)], ids=range(4)
)
@pytest.mark.parametrize("how", ["zeros", "noise"])
def test_any_third_of_a_small_sidecar_may_be_overwritten(data: bytes, how: str) -> None:
    """Nothing says which bytes are lost; unreadable heads give it away."""
    right = only(data)
    length = (len(data) - TEXT_BYTES) // 3
    for start in range(0, len(data) - length, len(data) // 50):
        other = bytes(length) if how == "zeros" else content(length)
        section = only(data[:start] + other + data[start + length :])
        assert section.table() == right.table(), start


def test_digests_beside_a_hopeless_column_are_still_known() -> None:
    """All but one of the columns of a frame can be solved: just the digests with a byte in it are unknown."""
    frame = FIRST.layout.frame(Track.DATA, 0)
    hurt = bytearray(ONE)
    for place, row in FIRST.layout.slice_extents(frame):
        for i in range(FIRST.layout.rows):
            if row + i < 130:
                hurt[place + i * frame.width + 2] ^= 0x5A
    count = FIRST.geometry.data_cells
    values, known = only(bytes(hurt)).digests(Track.DATA, 0, count)
    right, _ = FIRST.digests(Track.DATA, 0, count)
    in_column = {(i - 32) // 8 for i in range(32, 32 + 8 * count) if i % frame.width == 2}
    assert known is not None
    assert set(np.flatnonzero(~known).tolist()) == in_column
    assert np.array_equal(values[known], right[known])


def test_guesses_at_what_is_lost_save_what_they_can() -> None:
    """Six of 16 stretches are noise, heads and all, and in half of the columns 20 more rows are wrong.

    RS(240,120): 90 rows lost leave room for 15 wrong ones, and 90 wrong ones alone are beyond it.
    """
    frame, layout = FIRST.layout.frame(Track.DATA, 0), FIRST.layout
    hurt = bytearray(ONE)
    for stretch in range(6):
        start = layout.stretch_start(stretch)
        hurt[start : start + layout.prefix] = content(layout.prefix, stretch)
    places = [start for start, _ in layout.slice_extents(frame)]
    for row in range(200, 220):
        place = places[row // layout.rows] + row % layout.rows * frame.width
        for column in range(2, frame.width):
            hurt[place + column] ^= 0x5A
    found, right = only(bytes(hurt)).frame(Track.DATA, 0), FIRST.frame(Track.DATA, 0).data
    assert found.known is not None
    assert found.known.tolist() == [i % frame.width < 2 for i in range(32, 32 + len(right))]
    assert all(found.data[i] == right[i] for i in np.flatnonzero(found.known).tolist())


def test_guesses_do_not_forget_what_could_not_be_read() -> None:
    """Four stretches are noise, heads and all; of three more all but the heads cannot be read.

    RS(240,120): 105 rows lost, and 60 rows lost and 45 wrong would be too many.
    """
    layout = FIRST.layout
    hurt = bytearray(ONE)
    for stretch in range(4):
        start = layout.stretch_start(stretch)
        hurt[start : start + layout.prefix] = content(layout.prefix, stretch)
    starts = [layout.stretch_start(stretch) for stretch in (9, 10, 11)]
    section = only(bytes(hurt), [(s + HEAD_BYTES, s + layout.prefix) for s in starts])
    assert section.table() == FIRST.table()
    count = FIRST.geometry.data_cells
    values, known = section.digests(Track.DATA, 0, count)
    assert known is None
    assert np.array_equal(values, FIRST.digests(Track.DATA, 0, count)[0])


def test_digests_of_several_frames(monkeypatch: pytest.MonkeyPatch) -> None:
    """Each frame says which of its digests are known; a range may begin and end inside of frames."""
    per_frame = FRAME_CONTENT // 8
    right = np.random.default_rng(1).integers(0, 1 << 64, 3 * per_frame, np.uint64)
    unknown = {per_frame - 2, 2 * per_frame + 1}

    def frame(self: Section, track: Track, number: int) -> Content:
        first = number * per_frame
        known = np.ones((per_frame, 8), bool)
        for digest in unknown & set(range(first, first + per_frame)):
            known[digest - first, 5] = False
        whole = known.all()
        return Content(right[first : first + per_frame].tobytes(), None if whole else known.reshape(-1))

    monkeypatch.setattr(Section, "frame", frame)
    for first, count in ((0, 5), (per_frame - 3, 7), (per_frame, per_frame), (per_frame - 3, per_frame + 6)):
        values, known = FIRST.digests(Track.DATA, first, count)
        assert np.array_equal(values, right[first : first + count])
        expected = [number not in unknown for number in range(first, first + count)]
        assert ([True] * count if known is None else known.tolist()) == expected


def test_frames_that_are_not_kept_are_read_again(monkeypatch: pytest.MonkeyPatch) -> None:
    section = only(ONE)
    monkeypatch.setattr("oakum.sidecar.reading.FRAMES_KEPT", 2)
    for _ in range(2):
        for track in Track:
            count = section.layout.content(track) // 8
            if track is not Track.TABLE:
                assert np.array_equal(section.digests(track, 0, count)[0], FIRST.digests(track, 0, count)[0])
        assert section.table() == FIRST.table()
        assert len(section._kept) == 2


def test_what_cannot_be_read_of_the_body() -> None:
    """A range of two stretches: two places of the body, which is cut where the first stretch ends."""
    layout = FIRST.layout
    a, b = layout.stretch_start(3) - 50, layout.stretch_start(3) + layout.prefix + 70
    body, faults = only(ONE, [(a, b)]).body(100, layout.geometry.body - 100)
    border = 3 * layout.piece - 100
    padding = layout.stretch_bytes - layout.prefix - layout.piece
    assert faults == [(border - 50 + padding, border), (border, border + 70)]
    right, none = FIRST.body(100, layout.geometry.body - 100)
    assert (none, set(body[border - 50 + padding : border + 70].tolist())) == ([], {0})
    assert np.array_equal(np.delete(body, range(border - 50 + padding, border + 70)),
                          np.delete(right, range(border - 50 + padding, border + 70)))  # fmt: skip


def test_digests_are_those_of_the_bytes() -> None:
    data = content(WINDOW)
    g = FIRST.geometry
    values, _ = FIRST.digests(Track.DATA, 0, g.data_cells)
    assert values.tolist() == [xxhash.xxh3_64_intdigest(data[i : i + 4096]) for i in range(0, WINDOW, 4096)]
    body, _ = FIRST.body(0, g.body)
    parity, _ = FIRST.digests(Track.PARITY, 0, g.r)
    assert parity.tolist() == [xxhash.xxh3_64_intdigest(body[j * g.depth :][: g.depth]) for j in range(g.r)]
    some, _ = FIRST.digests(Track.DATA, 3, 5)
    assert np.array_equal(some, values[3:8])


def test_tables_beyond_correction_are_said_to_be() -> None:
    hurt = bytearray(ONE)
    for t in range(0, 16):
        start = FIRST.layout.stretch_start(t) + HEAD_BYTES
        if t % 8:
            hurt[start : start + FIRST.layout.slice_bytes] = content(FIRST.layout.slice_bytes, t)
    with pytest.raises(FormatError, match="list of members is damaged beyond correction"):
        only(bytes(hurt)).table()


@given(st.integers(0, len(ONE) - 1), st.integers(0, 7))
def test_wear_counts_every_flip_outside_the_body(place: int, bit: int) -> None:
    hurt = bytearray(ONE)
    hurt[place] ^= 1 << bit
    wear = examine_records(only(bytes(hurt)))
    layout = FIRST.layout
    in_body = any(
        start <= place < start + size for start, _, size in layout.body_extents(0, layout.geometry.body)
    )
    assert (wear.bits, wear.symbols, wear.lost) == ((0, 0, 0) if in_body else (1, 1, 0))


def places_in_records() -> list[int]:
    """A byte of the page, of a head, of padding, and of every frame one of header, content and check rows."""
    layout = FIRST.layout
    places = [5, layout.stretch_start(2) + 300, next(place for place, n in layout.paddings() if n)]
    for frame in layout.frames():
        for offset in (3, 20, 40, 120 * frame.width - 1, 120 * frame.width, 240 * frame.width - 1):
            stretch, inside = divmod(offset, layout.rows * frame.width)
            places.append(list(layout.slice_extents(frame))[stretch][0] + inside)
    return places


@pytest.mark.parametrize("place", places_in_records())
def test_wear_counts_a_byte_of_every_kind(place: int) -> None:
    hurt = ONE[:place] + bytes([ONE[place] ^ 0x81]) + ONE[place + 1 :]
    wear = examine_records(only(hurt))
    assert (wear.bits, wear.symbols, wear.unreadable, wear.lost) == (2, 1, 0, 0)
    wear = examine_records(only(ONE, [(place, place + 1)]))
    assert (wear.bits, wear.symbols, wear.unreadable, wear.lost) == (0, 0, 1, 0)


def test_wear_of_frames_that_are_lost() -> None:
    """Nothing is known of their bytes any more; those of the seals' frame are asked without their seals."""
    for track in (Track.DATA, Track.SEALS):
        frame = FIRST.layout.frame(track, 0)
        hurt = bytearray(ONE)
        for place, _ in FIRST.layout.slice_extents(frame):
            size = FIRST.layout.rows * frame.width
            hurt[place : place + size] = content(size, place)
        wear = examine_records(only(bytes(hurt)))
        assert (wear.bits, wear.symbols, wear.lost) == (0, 0, 240 * frame.width)
        assert wear


def test_wear_counts_what_could_not_be_read() -> None:
    """A head, a page and a slice of every frame are unreadable; padding and body are not counted twice."""
    layout = FIRST.layout
    start = layout.stretch_start(3)
    wear = examine_records(only(ONE, [(100, 700), (start, start + layout.prefix)]))
    assert (wear.unreadable, wear.bits, wear.lost) == (600 + layout.prefix, 0, 0)
    assert wear


# -- hostile records -------------------------------------------------------------------------------


def with_record(**changes: object) -> bytes:
    """The sidecar ONE with other fields in all sixteen copies of its record, checksums mended."""
    out = bytearray(ONE)
    for t in range(16):
        raw = replace(FIRST.bootstrap, stretch=t, **changes).pack()  # type: ignore[arg-type]
        start = FIRST.layout.stretch_start(t)
        out[start : start + HEAD_BYTES] = MARKER + encode(raw)
    return bytes(out)


def consume(data: bytes) -> None:
    """Do with a sidecar all that a reader does before it touches a member."""
    for section in find_sections(Memory(data)):
        section.bootstrap.code.code()
        section.table()
        examine_records(section)


@pytest.mark.parametrize(
    ("fits", "promises"),
    [
        ({"entries": 1}, {"entries": 2}),
        ({"table_length": 2 * 76, "entries": 2}, {"table_length": 2 * 76 - 1, "entries": 2}),
        ({"stream_length": WINDOW}, {"stream_length": WINDOW - 1}),
        ({"start": 7, "stream_length": WINDOW + 7}, {"start": 8, "stream_length": WINDOW + 7}),
        ({"start": 1 << 60, "stream_length": 1 << 62}, {"start": (1 << 60) + 1, "stream_length": 1 << 62}),
        ({"section_offset": 1 << 60}, {"section_offset": (1 << 60) + 1}),
        ({"stretches": 16}, {"stretches": 17}),
    ],
)
def test_records_that_promise_more_than_there_can_be(fits: dict[str, int], promises: dict[str, int]) -> None:
    """No number is above 2^60; an entry has at least 76 bytes."""
    assert windows(with_record(**fits)) == [0]
    with pytest.raises(FormatError, match="promises more than the sidecar can hold"):
        windows(with_record(**promises))


def test_a_section_may_be_four_times_what_is_left_and_a_megabyte() -> None:
    table = 500_000
    left = (Layout(FIRST.geometry, table).size - (1 << 20)) // 4
    data = with_record(table_length=table)[:left].ljust(left, b"\0")
    assert windows(data) == [0]
    with pytest.raises(FormatError, match="promises more than the sidecar can hold"):
        windows(data[:-1])


NUMBERS = {f.name: 64 for f in fields(Bootstrap) if f.type == "int"} | {
    "stretches": 16, "entries": 32, "flags": 32}  # fmt: skip
EXTREMES = [0, 1, 2, 63, 64, 255, 4096, (1 << 16) - 1, (1 << 31) - 1, (1 << 32) - 1, 1 << 40, 1 << 60,
            (1 << 60) + 1, (1 << 63) - 1, 1 << 63, (1 << 64) - 4096, (1 << 64) - 1]  # fmt: skip


@pytest.mark.parametrize("name", sorted(set(NUMBERS) - {"stretch", "version", "cell"}))
def test_extreme_figures_in_a_record(name: str) -> None:
    for value in EXTREMES:
        if value < 1 << NUMBERS[name]:
            with suppress(FormatError):
                consume(with_record(**{name: value}))


@pytest.mark.parametrize("name", [f.name for f in fields(CodeParameters) if f.type == "int"])
def test_extreme_figures_in_the_code(name: str) -> None:
    width = {"field_poly": 16, "matrix_digest": 64}.get(name, 8)
    for value in (0, 1, 2, 31, 32, 33, 128, 254, 255, 0x11D, 0x12D, 0xFFFF, (1 << 64) - 1):
        if value < 1 << width:
            with suppress(FormatError):
                consume(with_record(code=replace(FIRST.bootstrap.code, **{name: value})))


@given(st.lists(st.tuples(st.integers(6, RECORD_BYTES - 9), st.integers(0, 255)), min_size=1, max_size=4))
@settings(max_examples=150)
def test_fuzzed_records_with_mended_checksums(changes: list[tuple[int, int]]) -> None:
    raw = bytearray(FIRST.bootstrap.pack())
    for place, value in changes:
        raw[place] = value
    raw[-8:] = struct.pack("<Q", xxhash.xxh3_64_intdigest(bytes(raw[:-8])))
    out = bytearray(ONE)
    for t in range(16):
        start = FIRST.layout.stretch_start(t)
        out[start : start + HEAD_BYTES] = MARKER + encode(bytes(raw))
    with suppress(FormatError):
        consume(bytes(out))


def test_a_table_that_was_exchanged_is_refused() -> None:
    """Content with a checksum that fits, but not what the identity was made from."""
    from oakum.sidecar.frames import check_rows, payload

    frame = FIRST.layout.frame(Track.TABLE, 0)
    table = bytearray(FIRST.table_bytes())
    table[8] ^= 1  # A mode that lets others write.
    rows = payload(frame, bytes(table), FIRST.bootstrap.identity)
    rows = np.concatenate([rows, check_rows(rows)])
    out = bytearray(ONE)
    for place, row in FIRST.layout.slice_extents(frame):
        part = rows[row : row + FIRST.layout.rows].tobytes()
        out[place : place + len(part)] = part
    with pytest.raises(FormatError, match="do not belong together"):
        only(bytes(out)).table()


def test_a_newer_version_is_named() -> None:
    with pytest.raises(FormatError, match="format version 2"):
        find_sections(Memory(with_record(version=2)))
    assert unpack(FIRST.bootstrap.pack()) is not None
