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
from oakum.files import FileBytes, reason
from oakum.jobs.common import absolute
from oakum.members import Folder, MemberStream, Span
from oakum.sidecar.reading import ByteSource, Section, find_sections
from oakum.sidecar.table import Kind, Piece

Bytes = NDArray[np.uint8]
Range = tuple[int, int]

CHUNK = 8 << 20
"""Bytes of a member read at a time."""


@dataclass
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


class OpenStream(Protocol):
    """The bytes of members end to end, to be closed when done."""

    def read_into(self, offset: int, buffer: memoryview) -> list[Range]:
        """See `MemberStream.read_into`."""

    def close(self) -> None:
        """Close all members."""


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
    unreadable: dict[bytes, list[Range]] = field(default_factory=dict)
    notes: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        files = (m for m in self.members.values() if m.piece.kind is Kind.FILE and m.size)
        self._files = sorted(files, key=lambda m: m.stream_start)
        self._starts = [m.stream_start for m in self._files]

    def stream(self, spans: Sequence[Span], start: int, known_bad: Sequence[Range] = ()) -> OpenStream:
        """The bytes of some spans as they are; the first begins at byte `start` of the whole stream."""
        return MemberStream(self.folder, spans, known_bad)

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
                data = np.empty(min(CHUNK, member.size - start), np.uint8)
                yield start, data, stream.read_into(start, data.data)
        finally:
            stream.close()

    def members_at(self, start: int, length: int) -> list[KnownMember]:
        """The files that hold bytes of a range of the stream, in order."""
        first = max(0, bisect_right(self._starts, start) - 1)
        return self._files[first : bisect_left(self._starts, start + length)]

    def close(self) -> None:
        """Close everything."""
        self.source.close()
        self.folder.close()


Set = TypeVar("Set", bound=ProtectedSet)


def open_set(
    path: Path,
    root: Path | None,
    unreadable: dict[bytes, list[Range]] | None = None,
    target: Path | None = None,
) -> ProtectedSet:
    """Open the sidecar at `path` and look for its members below `root` (None: beside it).

    Raises CannotCheck when the sidecar cannot be read, protects something else than `target`, or its members
    are not there at all.
    """
    opened = assemble(ProtectedSet, path, FileBytes(path), root)
    opened.unreadable = unreadable or {}
    try:
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
        sections, tables = readable(find_sections(source))
        folder = Folder(path.parent if root is None else root)
    except BaseException:
        source.close()
        raise
    return kind(path, folder.root, source, folder, sections, tables, _put_together(sections, tables))


def look_at_members(opened: ProtectedSet) -> None:
    """Say what is there of sections and members, without reading the members."""
    _look_at_sections(opened)
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


def _look_at_sections(opened: ProtectedSet) -> None:
    """Say which windows no section was found for."""
    expected = 0
    for section in opened.sections:
        if section.bootstrap.window != expected:
            opened.notes.append(
                f"the sidecar's sections for windows {expected} to {section.bootstrap.window - 1} are lost"
            )
        expected = section.bootstrap.window + 1
    if not opened.sections[-1].bootstrap.last:
        opened.notes.append(
            f"the sidecar ends after window {expected - 1}; what follows there cannot be checked"
        )


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
    kinds = {Kind.FILE: stat.S_ISREG, Kind.FOLDER: stat.S_ISDIR, Kind.LINK: stat.S_ISLNK}
    if not kinds[piece.kind](found.st_mode):
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
        raise CannotCheck(
            f"none of the {len(files):,} files of {opened.path.name} is in {opened.root}; "
            "check that the medium is mounted, or say with --root where they are"
        )
