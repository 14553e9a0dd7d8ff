"""Opening a sidecar with its members: what is there against what should be, before anything is read."""

from __future__ import annotations

import errno
import os
import stat
from bisect import bisect_left, bisect_right
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from oakum.errors import CannotCheck, FormatError
from oakum.files import FileBytes, aligned, reason
from oakum.jobs.common import absolute
from oakum.jobs.unreadable import UnreadableList
from oakum.members import Folder, MemberStream, OpenStream, Part, Span
from oakum.progress import Progress, Silent
from oakum.sidecar.bootstrap import FROM_PIPE
from oakum.sidecar.reading import ByteSource, Section, find_sections
from oakum.sidecar.table import Kind, Piece

Bytes = NDArray[np.uint8]
Range = tuple[int, int]

CHUNK = 8 << 20
"""Bytes of a member read at a time."""


@dataclass(slots=True)
class KnownMember:
    """A member as the sidecar knows it, put together from the windows that it lies in."""

    piece: Piece
    stream_start: int
    size: int
    sha256: bytes | None
    """None where the section that would say is lost."""

    right: bool = False
    """Its SHA-256 agrees and every byte of it could be read."""

    fault: str = ""
    """What is wrong with it that is not a matter of its bytes, such as its absence."""

    absent: bool = False
    in_the_way: bool = False
    """Something else stands in its place."""

    covered: int = 0
    """Bytes of it that the sections at hand protect."""

    there: int | None = None
    """Bytes that its file has; None where that was not looked at."""

    longer: int = 0
    edited: bool = False
    checked: bool = True
    presumed: bool = False
    """Its SHA-256 was not asked for, and no digest of a cell speaks against it."""

    @property
    def hopeless(self) -> bool:
        """Whether some of it is neither in the file nor protected by any section at hand."""
        return self.there is not None and self.there + self.covered < self.size


class OpenBytes(ByteSource, Protocol):
    """A sidecar's bytes, to be closed when done."""

    def close(self) -> None:
        """Close it."""


@dataclass
class ProtectedSet:
    """An opened sidecar with its members."""

    path: Path
    root: Path
    source: OpenBytes
    folder: Folder
    sections: list[Section]
    tables: list[tuple[Piece, ...]]
    members: dict[bytes, KnownMember]
    unlisted: list[Section] = field(default_factory=list)
    """Sections that were found, but whose member tables are lost."""

    once: bool = False
    """Whether members are read once (but for what is decoded), so that nobody needs them in the cache."""

    unreadable: dict[bytes, list[Range]] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)
    recovered: int = 0
    """How many of `sections` are lost in the sidecar and known again from the data."""

    def __post_init__(self) -> None:
        files = (m for m in self.members.values() if m.piece.kind is Kind.FILE and m.size)
        self.files = sorted(files, key=lambda m: m.stream_start)
        """Those that have bytes, in the order of the stream."""

        self._starts = [m.stream_start for m in self.files]
        self.length = sum(s.geometry.length for s in self.sections)
        """Bytes of the stream for which there are sections."""

    @property
    def incomplete(self) -> bool:
        """Whether sections are lost."""
        numbers = [s.bootstrap.window for s in self.sections]
        return numbers != list(range(len(numbers))) or not self.sections[-1].bootstrap.last

    def adopt(self, found: dict[int, tuple[Section, tuple[Piece, ...]]]) -> None:
        """Take over sections, with their tables, that were lost and are known again, by their windows.

        Their members are right: else nothing would be known again. Others keep the state that they have.
        """
        there = {s.bootstrap.window: (s, t) for s, t in zip(self.sections, self.tables, strict=True)} | found
        self.sections = [there[number][0] for number in sorted(there)]
        self.tables = [there[number][1] for number in sorted(there)]
        self.recovered, self.unlisted = len(found), []
        members = _put_together(self.sections, self.tables)
        for path, member in members.items():
            if path in self.members:
                self.members[path].sha256, self.members[path].covered = member.sha256, member.covered
            else:
                _look_at(self.folder, member)
                member.right = True
        self.members = {path: self.members.get(path, member) for path, member in members.items()}
        self.__post_init__()

    def known_bad(self, spans: Sequence[Part]) -> list[Range]:
        """What the user says cannot be read, as ranges of the stream of some spans."""
        if not self.unreadable:
            return []
        ranges, place = [], 0
        for span in spans:
            for start, stop in self.unreadable.get(span.path, ()):
                a, b = max(start, span.offset), min(stop, span.offset + span.length)
                if a < b:
                    ranges.append((place + a - span.offset, place + b - span.offset))
            place += span.length
        return ranges

    def stream(self, spans: Sequence[Part], start: int, known_bad: Sequence[Range] = ()) -> OpenStream:
        """The bytes of some spans as they are; the first begins at byte `start` of the whole stream."""
        return MemberStream(self.folder, spans, known_bad, once=self.once)

    def read(self, member: KnownMember) -> Iterator[tuple[int, Bytes, list[Range]]]:
        """All of a member's bytes as they are, piece by piece: where, which, and what could not be read.

        It ends soon after the end of the file, however long the sidecar says that the member is.
        """
        path = member.piece.path
        known_bad = self.unreadable.get(path, ())
        stream = self.stream([Span(path, 0, member.size)], member.stream_start, known_bad)
        try:
            there = member.size if member.there is None else member.there
            for start in range(0, min(member.size, there + 1), CHUNK):
                data = aligned(min(CHUNK, member.size - start))
                yield start, data, stream.read_into(start, data.data)
        finally:
            stream.close()

    def members_at(self, start: int, length: int) -> list[KnownMember]:
        """The files that hold bytes of a range of the stream, in order."""
        first = max(0, bisect_right(self._starts, start) - 1)
        return self.files[first : bisect_left(self._starts, start + length)]

    def close(self) -> None:
        """Close everything."""
        self.source.close()
        self.folder.close()


Set = TypeVar("Set", bound=ProtectedSet)


def open_set(
    path: Path,
    root: Path | None,
    unreadable: UnreadableList | None = None,
    target: Path | None = None,
    progress: Progress = Silent(),
) -> ProtectedSet:
    """Open the sidecar at `path` and look for its members below `root` (None: beside it).

    Where whole sections of it are lost, the members are read for what those said (see `oakum.jobs.lost`).
    Raises CannotCheck when the sidecar cannot be read, protects something else than `target`, or its members
    are not there at all, UsageError where `unreadable` names what it does not protect.
    """
    opened = assemble(ProtectedSet, path, FileBytes(path), root)
    listed = unreadable or UnreadableList()
    opened.unreadable = listed.ranges
    try:
        if opened.incomplete:
            from oakum.jobs.lost import recover_sections

            recover_sections(opened, lambda s: opened.stream(s, 0, opened.known_bad(s)), progress)
        if not opened.incomplete:
            listed.refuse_others(opened.members)
        if target is not None:
            _refuse_other(opened, absolute(target))
        look_at_members(opened)
        _refuse_missing_medium(opened)
    except BaseException:
        opened.close()
        raise
    return opened


def assemble(kind: type[Set], path: Path, source: OpenBytes, root: Path | None) -> Set:
    """Read the records of a sidecar; `source` is closed if that fails."""
    try:
        found = find_sections(source)
        sections, tables = readable(found)
        folder = Folder(path.parent if root is None else root)
    except BaseException:
        source.close()
        raise
    members = _put_together(sections, tables)
    unlisted = [s for s in found if s not in sections]
    for record in (s.bootstrap for s in unlisted):
        if record.last and record.flags & FROM_PIPE:  # Earlier windows do not know how long the stream was.
            for member in members.values():
                member.size = record.stream_length
    return kind(path, folder.root, source, folder, sections, tables, members, unlisted)


def look_at_members(opened: ProtectedSet) -> None:
    """Say what is there of the members, without reading them."""
    for member in opened.members.values():
        _look_at(opened.folder, member)


def readable(sections: list[Section]) -> tuple[list[Section], list[tuple[Piece, ...]]]:
    """The sections whose member tables can be read; a section without its table says nothing.

    Raises FormatError when there is none.
    """
    kept, tables = [], []
    lost: FormatError | None = None
    for section in sections:
        try:
            tables.append(section.table())
            kept.append(section)
        except FormatError as error:
            lost = error
    if lost is not None and not kept:
        raise lost
    return kept, tables


def _put_together(
    sections: Sequence[Section], tables: Sequence[tuple[Piece, ...]]
) -> dict[bytes, KnownMember]:
    members: dict[bytes, KnownMember] = {}
    for section, table in zip(sections, tables, strict=True):
        place = section.bootstrap.start
        for piece in table:
            known = members.get(piece.path)
            if known is None:
                known = members[piece.path] = KnownMember(piece, place - piece.offset, piece.size, None)
            known.size = max(known.size, piece.size)
            if piece.ends:
                known.sha256 = piece.digest
            known.covered += piece.length
            place += piece.length
    return members


def lost_sections(opened: ProtectedSet) -> Iterator[str]:
    """Say which windows have no section in the sidecar, and what follows from that."""
    if opened.recovered:
        yield (
            f"of the sidecar's {len(opened.sections):,} sections {opened.recovered:,} can no longer be read; "
            "all of the data that they are for is as it was protected, so that they can be written anew"
        )
    expected = 0
    heads = [s.bootstrap.window + 1 for s in opened.unlisted if s.bootstrap.last]
    for window in [s.bootstrap.window for s in opened.sections] + heads:
        if window != expected:
            which = (
                f"section for window {expected} is"
                if window == expected + 1
                else f"sections for windows {expected} to {window - 1} are"
            )
            yield (
                f"the sidecar's {which} lost; damage there can be neither found nor put right, and the "
                "sidecar can be written anew only once all of the data there is shown to be as it was"
            )
        expected = window + 1
    if not heads and not opened.sections[-1].bootstrap.last:
        yield (
            f"the sidecar ends after window {expected - 1}; what follows there cannot be checked, and "
            "nothing is left that says what its sections held: repair what can be had, then protect it again"
        )


_IS_KIND = {Kind.FILE: stat.S_ISREG, Kind.FOLDER: stat.S_ISDIR, Kind.LINK: stat.S_ISLNK}


def _look_at(folder: Folder, member: KnownMember) -> None:
    """Compare what is there with what should be, without reading it."""
    piece = member.piece
    try:
        found = folder.stat(piece.path)
    except (FileNotFoundError, NotADirectoryError):
        member.absent, member.fault, member.there = True, "is not there", 0
        return
    except OSError as error:
        if error.errno != errno.ELOOP:
            raise CannotCheck(f"{os.fsdecode(piece.path)} cannot be looked at: {reason(error)}") from None
        member.there = 0
        member.absent, member.fault = True, "is not there; a link stands in its way"
        return
    if not _IS_KIND[piece.kind](found.st_mode):
        member.absent, member.in_the_way, member.there = True, True, 0
        member.fault = f"is no {piece.kind.name.lower()} any more"
    elif piece.kind is Kind.LINK:
        member.right = folder.readlink(piece.path) == piece.target
        member.fault = "" if member.right else "points elsewhere"
    elif piece.kind is Kind.FOLDER:
        member.right = True
    else:
        member.there = found.st_size
        member.edited = found.st_mtime_ns > piece.modified_ns > 0
        member.longer = max(0, found.st_size - member.size) if member.sha256 is not None else 0
        if found.st_size < member.size:
            member.fault = f"is {member.size - found.st_size:,} bytes short"
        elif member.longer:
            member.fault = f"has {member.longer:,} bytes added at its end"


def _refuse_other(opened: ProtectedSet, target: Path) -> None:
    """A target that is not the sidecar itself must be a member, a folder of members, or hold them all."""
    root = Path(os.path.realpath(opened.root))
    if target == absolute(opened.path) or root.is_relative_to(target):
        return
    if not target.is_relative_to(root):
        raise CannotCheck(
            f"{opened.path} looks for its files in {root}, and {target} is not there; "
            f"say with --root {target.parent} where they are"
        )
    name = os.fsencode(target.relative_to(root))
    if not any(path == name or path.startswith(name + b"/") for path in opened.members):
        raise CannotCheck(f"{opened.path} does not protect {target}; oakum describe lists what it protects")


def _refuse_missing_medium(opened: ProtectedSet) -> None:
    """When no file is there, and they cannot all be restored, the medium is missing and not the files."""
    files = [m for m in opened.members.values() if m.piece.kind is Kind.FILE]
    restorable = sum(s.geometry.r * s.geometry.depth for s in opened.sections)
    if files and all(m.absent for m in files) and sum(m.size for m in files) > restorable:
        none = "the file" if len(files) == 1 else f"none of the {len(files):,} files"
        there = "is not in" if len(files) == 1 else "is in"
        raise CannotCheck(
            f"{none} of {opened.path.name} {there} {opened.root}; "
            "check that the medium is mounted, or say with --root where they are"
        )
