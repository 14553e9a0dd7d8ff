"""Sections of a sidecar that are lost whole: what they said, told from the sections around them and the data.

In a set cut into windows each section has a bootstrap record and a member table of its own. What those of a
lost section said follows from its neighbours, save for members that lie in lost windows alone, which are
looked for in the folder, and for SHA-256, which the data gives. Whether all of it is right is no guess: a
record's identity is a hash of record and member table, and the next record holds it. So a lost section is
known again when, and only when, every byte of its data is as it was protected.

Where neither a head of the last section is left nor any section after a lost one, nothing can tell.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

from oakum.errors import OakumError
from oakum.geometry import CELL, Window, plan_windows
from oakum.jobs.opening import CHUNK, ProtectedSet
from oakum.jobs.protect import geometry_of, make_bootstrap, pieces_of, table_length
from oakum.members import MemberHasher, OpenStream, Part, collect
from oakum.progress import Progress
from oakum.sidecar.bootstrap import FROM_PIPE, LAST_SECTION, UNKNOWN_LENGTH, Bootstrap
from oakum.sidecar.layout import TEXT_BYTES, Layout
from oakum.sidecar.reading import Head, Section
from oakum.sidecar.table import Kind, Piece

StreamOf = Callable[[Sequence[Part]], OpenStream]
"""Makes the stream of some spans; how it gets at the members' bytes is its own business."""


def recover_sections(opened: ProtectedSet, stream_of: StreamOf, progress: Progress) -> bool:
    """Give `opened` its lost sections back, with their member tables but without digests of cells.

    False, and nothing is changed, where it cannot be shown what they said.
    """
    search = _Search(opened)
    if not search.windows:
        return False
    tables = search.tables()
    found = search.prove(tables, stream_of, progress) if tables is not None else None
    if found is None:
        return False
    opened.adopt(found)
    return True


class _Search:
    """One search for what lost sections said. `windows` is empty where there is nothing to go by."""

    def __init__(self, opened: ProtectedSet) -> None:
        self._opened = opened
        self._sections = {s.bootstrap.window: s for s in opened.sections}
        self._heads = {s.bootstrap.window: s for s in opened.unlisted} | self._sections
        self._last: Bootstrap = self._heads[max(self._heads)].bootstrap
        self._code = self._last.code.code()
        self._pipe = bool(self._last.flags & FROM_PIPE)
        self.windows = self._plan()
        self._lost = {w.index for w in self.windows} - set(self._sections)

    def _plan(self) -> Sequence[Window]:
        """All windows of the set, where the records at hand say how it was cut, and agree."""
        last, k = self._last, self._code.outer.k
        count = last.window + 1
        plausible = count * TEXT_BYTES <= 4 * self._opened.source.size + (1 << 20)
        if not (last.last and plausible and last.set_depth and last.set_depth % CELL == 0):
            return ()
        if -(-last.stream_length // (k * last.set_depth)) != count:
            return ()
        windows = plan_windows(last.stream_length, k, last.set_depth)
        records = [section.bootstrap for section in self._heads.values()]
        agree = all(windows[b.window] == Window(b.window, b.start, b.length, b.depth) for b in records)
        return windows if agree else ()

    # -- the member tables ------------------------------------------------------------------------------

    def tables(self) -> list[list[Piece]] | None:
        """The member tables of all windows, without digests; None where members are missing or too many."""
        members = self._members()
        if sum(m.size for m in members) != self._last.stream_length:
            return None
        tables = list(pieces_of(members, self.windows))
        if self._pipe:  # The writer of a pipe knew no more of its size.
            tables = [[p._replace(size=p.offset + p.length) for p in table] for table in tables]
        return tables

    def _members(self) -> list[Piece]:
        """All members in the order of the stream, those of lost windows alone from the folder."""
        known = list(self._opened.members.values())
        members = [m.piece._replace(size=m.size, offset=0, length=m.size, ends=True) for m in known]
        ends = [m.stream_start + m.size for m in known]
        if not any(self._is_lost(place) for place in (0, *ends)):
            return members
        numbers = {m.path: i for i, m in enumerate(members)}
        merged: list[Piece] = []
        place = done = 0
        for member in self._in_folder(members):
            number = numbers.get(member.path)
            if number is None and self._is_lost(place):
                merged.append(member)
            elif number is not None and number >= done:
                merged += members[done : number + 1]
                place, done = ends[number], number + 1
        return merged + members[done:]

    def _is_lost(self, place: int) -> bool:
        """Whether a member that begins at this byte of the stream begins in a lost window."""
        return min(place // self.windows[0].length, len(self.windows) - 1) in self._lost

    def _in_folder(self, members: Sequence[Piece]) -> list[Piece]:
        """What protect would find today below the folders, or at the places, of known members."""
        root = self._opened.root
        tops = dict.fromkeys(root / os.fsdecode(m.path.split(b"/")[0]) for m in members)
        try:
            return collect([top for top in tops if os.path.lexists(top)], Path(root))[0]
        except OakumError:
            return []

    # -- the proof --------------------------------------------------------------------------------------

    def prove(
        self, tables: Sequence[list[Piece]], stream_of: StreamOf, progress: Progress
    ) -> dict[int, tuple[Section, tuple[Piece, ...]]] | None:
        """The lost sections and their tables, by window; None when the identities do not agree."""
        involved = {p.path for number in self._lost for p in tables[number]}
        until = max(self._lost) + 1
        spans = [
            [piece for piece in table if piece.kind is Kind.FILE and piece.path in involved]
            for table in tables[:until]
        ]
        progress.phase("reading for lost sections", sum(s.length for some in spans for s in some))
        found: dict[int, tuple[Section, tuple[Piece, ...]]] = {}
        hasher = MemberHasher()
        parent, place = bytes(16), 0
        for window, pieces, some in zip(self.windows, tables, spans, strict=False):
            digests = _digests(some, stream_of, hasher, progress)
            if digests is None:
                return None
            section = self._sections.get(window.index)
            if section is None:
                table = _with_digests(pieces, digests)
                section = self._told(window, table, parent, place)
                if section is None:
                    return None
                found[window.index] = section, table
            parent = section.bootstrap.identity
            place = section.bootstrap.section_offset + section.layout.size
        return found

    def _told(self, window: Window, table: Sequence[Piece], parent: bytes, place: int) -> Section | None:
        """The section of a lost window; None when its identity is not the one that is known of it."""
        head, after = self._heads.get(window.index), self._heads.get(window.index + 1)
        layout = Layout(geometry_of(self._code, window), table_length(table))
        ends = window.index == self._last.window
        record = make_bootstrap(
            self._code, layout, window, self._last.set_depth,
            UNKNOWN_LENGTH if self._pipe and not ends else self._last.stream_length, place, len(table),
            (FROM_PIPE if self._pipe else 0) | (LAST_SECTION if ends else 0), parent, self._last.set_identity,
        )  # fmt: skip
        if head is not None:
            record = replace(record, body_digest=head.bootstrap.body_digest)
        record = record.identified(b"".join(p.pack() for p in table))
        named = head.bootstrap.identity if head else after.bootstrap.parent if after else record.identity
        if record.identity != named or record.set_identity != self._last.set_identity:
            return None
        if head is not None:
            return head
        first = self._opened.sections[0]
        base = first.base - first.bootstrap.section_offset + place
        return Section(self._opened.source, Head(base + layout.stretch_start(0), record, layout))


def _digests(
    spans: Sequence[Part], stream_of: StreamOf, hasher: MemberHasher, progress: Progress
) -> list[bytes] | None:
    """The SHA-256 of members up to the ends of spans; None when not all of them can be read."""
    hasher.expect(spans)
    stream = stream_of(spans)
    try:
        length = sum(span.length for span in spans)
        buffer = bytearray(min(CHUNK, length))
        for start in range(0, length, CHUNK):
            part = memoryview(buffer)[: min(CHUNK, length - start)]
            if stream.read_into(start, part):
                return None
            hasher.update(part)
            progress.advance(len(part))
    finally:
        stream.close()
    return hasher.digests


def _with_digests(pieces: Sequence[Piece], digests: Sequence[bytes]) -> tuple[Piece, ...]:
    """The entries of a table with one digest for every file among them."""
    remaining = iter(digests)
    return tuple(p._replace(digest=next(remaining)) if p.kind is Kind.FILE else p for p in pieces)
