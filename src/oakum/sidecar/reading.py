"""Reading a sidecar: find its sections by their markers, and take out of each what can be read.

Bytes come from a `ByteSource` and what it could not read counts as erased. Nothing that is read here is
trusted: a `Layout` only comes from a checked `Geometry`, and every size is held against the source.
"""

from __future__ import annotations

import threading
from collections import Counter, OrderedDict
from collections.abc import Iterator
from contextlib import suppress
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from oakum.errors import FormatError
from oakum.geometry import MAX_LENGTH, Geometry
from oakum.sidecar.bootstrap import (
    CODED_BYTES,
    HEAD_BYTES,
    MARKER,
    MARKER_ERRORS,
    RECORD_BYTES,
    Bootstrap,
    decode,
    decode_all,
    encode,
    unpack,
)
from oakum.sidecar.frames import Content, Rows, check_rows, correct, payload, read_plain, seal
from oakum.sidecar.layout import (
    DIGEST_BYTES,
    FRAME_CONTENT,
    FRAME_ROWS,
    PAYLOAD_ROWS,
    TEXT_BYTES,
    Frame,
    Layout,
    Track,
)
from oakum.sidecar.table import Piece, packed_length, unpack_table
from oakum.sidecar.text import page

Fault = tuple[int, int]
"""A range (start, stop), relative to what was asked for, that could not be read and was filled with zeros."""

SCAN_STEP = 1 << 20
AT_A_TIME = 512
FRAMES_KEPT = 64


class ByteSource(Protocol):
    """Random access to bytes that may be missing. Any offset may be asked for, also negative ones."""

    @property
    def size(self) -> int:
        """Length in bytes."""

    def read(self, offset: int, length: int) -> tuple[Rows, list[Fault]]:
        """uint8[length] from `offset`, zeros where nothing could be read, and those places."""


@dataclass(frozen=True)
class Head:
    """A bootstrap record that was found, and where its stretch begins."""

    place: int
    bootstrap: Bootstrap
    layout: Layout

    @property
    def base(self) -> int:
        """Offset of the section's first byte in the source (negative where its front is missing)."""
        return self.place - self.layout.stretch_start(self.bootstrap.stretch)


class Section:
    """One section that was found. Frames are read when asked for and a few are kept."""

    def __init__(self, source: ByteSource, head: Head) -> None:
        self.source = source
        self.base = head.base
        self.bootstrap = replace(head.bootstrap, stretch=0)
        self.layout = head.layout
        self._kept: OrderedDict[tuple[Track, int], Content] = OrderedDict()
        self._lock = threading.Lock()

    @property
    def geometry(self) -> Geometry:
        """The window's geometry."""
        return self.layout.geometry

    @property
    def end(self) -> int:
        """Offset in the source of the first byte after the section."""
        return self.base + self.layout.size

    def read(self, offset: int, length: int) -> tuple[Rows, list[Fault]]:
        """Bytes of the section by their offset in it."""
        return self.source.read(self.base + offset, length)

    def body(self, offset: int, length: int) -> tuple[Rows, list[Fault]]:
        """`length` bytes of the body from `offset`."""
        extents = list(self.layout.body_extents(offset, length))
        if len(extents) == 1:
            return self.read(extents[0][0], length)
        out = np.empty(length, np.uint8)
        faults = []
        for place, done, size in extents:
            out[done : done + size], missing = self.read(place, size)
            faults += [(done + a, done + b) for a, b in missing]
        return out, faults

    def rows(self, frame: Frame, last: int = FRAME_ROWS) -> tuple[Rows, Rows | None]:
        """The first `last` rows of a frame, and where they could not be read (None: they all could)."""
        count = self.layout.rows
        rows = np.empty((FRAME_ROWS, frame.width), np.uint8)
        erased: Rows | None = None
        for place, row in self.layout.slice_extents(frame):
            if row >= last:
                break
            data, faults = self.read(place, count * frame.width)
            rows[row : row + count] = data.reshape(count, frame.width)
            if faults:
                erased = np.zeros_like(rows) if erased is None else erased
                flat = erased[row : row + count].reshape(-1)
                for start, stop in faults:
                    flat[start:stop] = 1
        return rows[:last], None if erased is None else erased[:last]

    def frame(self, track: Track, number: int) -> Content:
        """The content of a frame, corrected where that was necessary."""
        key = (track, number)
        with self._lock:
            if key not in self._kept:
                self._kept[key] = self._read_frame(self.layout.frame(track, number))
                if len(self._kept) > FRAMES_KEPT:
                    self._kept.popitem(last=False)
            self._kept.move_to_end(key)
            return self._kept[key]

    def _read_frame(self, frame: Frame) -> Content:
        rows, _ = self.rows(frame, PAYLOAD_ROWS)
        content = read_plain(frame, rows, self.bootstrap.identity)
        if content is None:
            rows, erased = self.rows(frame)
            content = correct(frame, rows, erased, self.bootstrap.identity)
        for torn in self._torn if content.known is not None else ():
            more = np.broadcast_to(torn[:, np.newaxis], rows.shape)
            other = correct(frame, rows, more if erased is None else more | erased, self.bootstrap.identity)
            content = max(content, other, key=Content.count)
        return content

    @cached_property
    def _torn(self) -> list[Rows]:
        """Guesses, uint8[240], at which rows of the frames are lost where nothing says that they are.

        Those of stretches whose head cannot be read. A burst that took a head may also have begun behind the
        head before it, and may have ended before the last rows: so with that stretch too, or half of each.
        """
        starts = [self.base + self.layout.stretch_start(t) for t in range(self.layout.stretches)]
        headless = np.repeat([_read_head(self.source, s) is None for s in starts], self.layout.rows)
        headless = headless.astype(np.uint8)
        if not headless.any():
            return []
        sooner = [
            np.append(headless[n:], np.zeros(n, np.uint8)) for n in (self.layout.rows, self.layout.rows // 2)
        ]
        return [headless, headless | sooner[0], sooner[1]]

    def digests(
        self, track: Track, first: int, count: int
    ) -> tuple[NDArray[np.uint64], NDArray[np.bool_] | None]:
        """`count` digests of a track from number `first`, and which of them are known (None: all)."""
        values = np.empty(count, "<u8")
        known: NDArray[np.bool_] | None = None
        per_frame = FRAME_CONTENT // DIGEST_BYTES
        done = 0
        while done < count:
            number, inside = divmod(first + done, per_frame)
            content = self.frame(track, number)
            size = min(count - done, per_frame - inside)
            values[done : done + size] = np.frombuffer(content.data, "<u8", size, inside * DIGEST_BYTES)
            if content.known is not None:
                known = np.ones(count, bool) if known is None else known
                whole = np.asarray(content.known.reshape(-1, DIGEST_BYTES).all(axis=1))
                known[done : done + size] = whole[inside : inside + size]
            done += size
        return values, known

    def table(self) -> tuple[Piece, ...]:
        """The member table. Raises FormatError where it is lost or not the one of this section."""
        data = self.table_bytes()
        return unpack_table(data, self.bootstrap.entries, self.bootstrap.length)

    def table_bytes(self) -> bytes:
        """The member table as it was written. Raises FormatError where it is lost."""
        frames = [self.frame(Track.TABLE, i) for i in range(self.layout.frame_count(Track.TABLE))]
        if any(f.known is not None for f in frames):
            raise FormatError(
                "the sidecar's list of members is damaged beyond correction; "
                "without it nothing can be checked"
            )
        data = b"".join(f.data for f in frames)
        if self.bootstrap.identified(data).identity != self.bootstrap.identity:
            raise FormatError(
                "the sidecar's records do not belong together; it may have been pieced together"
            )
        return data


# -- finding sections -------------------------------------------------------------------------------


def find_sections(source: ByteSource) -> list[Section]:
    """All sections of the sidecar in `source`, in order of their windows.

    Sections are looked for where the one before ends; where no head is found there, the source is
    searched for markers from there on. Raises FormatError where nothing is found at all.
    """
    sections: dict[int, Section] = {}
    place = 0
    while head := _head_at(source, place + TEXT_BYTES) or next(_scan(source, place), None):
        section = Section(source, _most_common(source, head))
        sections.setdefault(section.bootstrap.window, section)
        place = section.end
        if section.bootstrap.last:
            break
    if not sections:
        raise FormatError("this is not an oakum sidecar, or nothing of it can be recognised any more")
    owner, _ = Counter(s.bootstrap.set_identity for s in sections.values()).most_common(1)[0]
    return [s for _, s in sorted(sections.items()) if s.bootstrap.set_identity == owner]


def _most_common(source: ByteSource, head: Head) -> Head:
    """The head of a section that most of its stretches have: one of them may be from another sidecar."""
    found: Counter[Bootstrap] = Counter()
    for stretch in range(head.layout.stretches):
        place = head.base + head.layout.stretch_start(stretch) + len(MARKER)
        with suppress(FormatError):
            record = unpack(source.read(place, RECORD_BYTES)[0].tobytes())
            if record is not None:
                found[replace(record, stretch=head.bootstrap.stretch)] += 1
    best = found.most_common(1)
    if not best or found[head.bootstrap] == best[0][1]:
        return head
    return _head(source, head.place, best[0][0])


def _head_at(source: ByteSource, place: int) -> Head | None:
    """The head at `place`, if a marker is there and its bootstrap record can be read."""
    bootstrap = _read_head(source, place)
    if bootstrap is None:
        return None
    return _head(source, place, bootstrap)


def _head(source: ByteSource, place: int, bootstrap: Bootstrap) -> Head:
    layout = Layout(bootstrap.geometry, bootstrap.table_length)
    _check(bootstrap, layout, source.size)
    return Head(place, bootstrap, layout)


def _read_head(source: ByteSource, place: int) -> Bootstrap | None:
    """The bootstrap record of the head at `place`; None where there is no marker or no record."""
    data, _ = source.read(place, HEAD_BYTES)
    if not len(find_marker(data[: len(MARKER)])):
        return None
    found = decode(data[len(MARKER) :].tobytes())
    return None if found is None else found[0]


def _check(bootstrap: Bootstrap, layout: Layout, size: int) -> None:
    """Refuse a record that promises more than the sidecar at hand can hold (cut short by less than 3/4)."""
    plausible = (
        bootstrap.stretches == layout.stretches
        and layout.size <= 4 * size + (1 << 20)
        and packed_length(b"") * bootstrap.entries <= bootstrap.table_length
        and bootstrap.start + bootstrap.length <= bootstrap.stream_length
        and max(bootstrap.start, bootstrap.section_offset) <= MAX_LENGTH
    )
    if not plausible:
        raise FormatError("the sidecar's bootstrap record promises more than the sidecar can hold")


def _scan(source: ByteSource, start: int) -> Iterator[Head]:
    """All heads from `start` on, found by their markers."""
    for place in range(max(0, start), source.size, SCAN_STEP):
        data, _ = source.read(place, min(SCAN_STEP + len(MARKER) - 1, source.size - place))
        places = [place + int(offset) for offset in find_marker(data)]
        for first in range(0, len(places), AT_A_TIME):
            yield from _heads(source, places[first : first + AT_A_TIME])


def _heads(source: ByteSource, places: list[int]) -> Iterator[Head]:
    """The heads that begin at places where a marker was found, as far as they are any."""
    copies = [source.read(place + len(MARKER), CODED_BYTES)[0].tobytes() for place in places]
    for place, bootstrap in zip(places, decode_all(copies), strict=True):
        if bootstrap is not None:
            yield _head(source, place, bootstrap)


def find_marker(data: Rows) -> NDArray[np.intp]:
    """Offsets at which the marker stands in uint8[L] with at most MARKER_ERRORS wrong bits."""
    count = max(0, len(data) - len(MARKER) + 1)
    distance = np.zeros(count, np.uint8)
    for i, value in enumerate(MARKER):
        distance += np.bitwise_count(data[i : i + count] ^ np.uint8(value))
    return np.flatnonzero(distance <= MARKER_ERRORS)


# -- the condition of the records themselves ------------------------------------------------------------


@dataclass
class Wear:
    """What was found wrong in a sidecar's own bytes."""

    bits: int = 0
    symbols: int = 0
    unreadable: int = 0
    lost: int = 0
    """Bytes of which nothing is known any more."""

    def __bool__(self) -> bool:
        return bool(self.symbols or self.unreadable or self.lost)

    def add(self, received: Rows, right: Rows, faults: list[Fault]) -> None:
        """Count the difference between received bytes and the right ones of the same places."""
        difference = received.reshape(-1) ^ right.reshape(-1)
        for start, stop in faults:
            difference[start:stop] = 0
            self.unreadable += stop - start
        self.bits += int(np.bitwise_count(difference).sum())
        self.symbols += int(np.count_nonzero(difference))


def examine_records(section: Section) -> Wear:
    """Hold text, heads, padding and frames of a section against what they should be."""
    wear = Wear()
    for offset, right in _plain_parts(section):
        received, faults = section.read(offset, len(right))
        wear.add(received, np.frombuffer(right, np.uint8), faults)
    for frame, expected in zip(section.layout.frames(), _seals(section), strict=True):
        _examine_frame(section, frame, expected, wear)
    return wear


def _plain_parts(section: Section) -> Iterator[tuple[int, bytes]]:
    """All parts of a section that follow from its bootstrap record: (offset, right bytes)."""
    layout = section.layout
    yield 0, page(section.bootstrap, layout)
    for stretch in range(layout.stretches):
        head = MARKER + encode(replace(section.bootstrap, stretch=stretch).pack())
        yield layout.stretch_start(stretch), head
    for place, length in layout.paddings():
        yield place, bytes(length)


def _seals(section: Section) -> list[int | None]:
    """The digest of the check rows of every frame; None for the seals' own, which have none.

    One that is lost agrees with nothing, so that its frame is looked at more closely.
    """
    own = section.layout.frame_count(Track.SEALS)
    values, _ = section.digests(Track.SEALS, 0, section.layout.content(Track.SEALS) // DIGEST_BYTES)
    return [*values.tolist(), *[None] * own]


def _examine_frame(section: Section, frame: Frame, expected: int | None, wear: Wear) -> None:
    identity = section.bootstrap.identity
    rows, erased = section.rows(frame)
    whole = erased is None and read_plain(frame, rows[:PAYLOAD_ROWS], identity) is not None
    if whole and seal(rows[PAYLOAD_ROWS:]) == expected:
        return
    content = section.frame(frame.track, frame.number)
    if content.known is not None:
        wear.lost += FRAME_ROWS * frame.width
        return
    right = np.empty_like(rows)
    right[:PAYLOAD_ROWS] = payload(frame, content.data, identity)
    right[PAYLOAD_ROWS:] = check_rows(right[:PAYLOAD_ROWS])
    if erased is not None:
        wear.unreadable += int(np.count_nonzero(erased))
        right = np.where(erased, rows, right)
    wear.add(rows, right, [])


__all__ = [
    "CODED_BYTES",
    "ByteSource",
    "Fault",
    "Head",
    "Section",
    "Wear",
    "examine_records",
    "find_sections",
]
