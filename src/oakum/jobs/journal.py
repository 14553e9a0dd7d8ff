"""The journal of a repair in place: what stood in every place that changes, and what is to stand there.

The journal is whole and on the medium before the first byte of a member changes. Read forwards it finishes
a repair that was interrupted, read backwards it brings the damaged state back; both may be done again and
again. It stands beside the sidecar and is named after it.

The file is a row of records, each a header of 40 bytes, the old bytes and the new bytes. The first record
says which set it belongs to, the one of kind END that nothing is missing, the one of kind DONE (appended
later) that the repair was finished, one of kind UNDOING after it that it is being undone. Numbers are little
endian.
"""

from __future__ import annotations

import os
import stat
import struct
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from enum import IntEnum
from pathlib import Path

import xxhash

from oakum.errors import CannotCheck
from oakum.files import NewFile, let_go, read_all, reason, write_all
from oakum.sidecar.table import check_path

SUFFIX = ".journal"
PATCH = 1 << 20
"""The most bytes that one record replaces; also the most that reading a journal allocates at a time."""

_HEADER = struct.Struct("<4s B B H I Q I I I Q")
_MAGIC = b"OakJ"
_VERSION = 1
_CONDITION = struct.Struct("<B I q Q 32s")


class _Kind(IntEnum):
    """What a record is."""

    SET = 1
    ENTRY = 2
    PATCH = 3
    END = 4
    DONE = 5
    UNDOING = 6


class Thing(IntEnum):
    """What an entry is about. Members have the numbers that they have in the sidecar's table."""

    FILE = 1
    FOLDER = 2
    LINK = 3
    SIDECAR = 4


@dataclass(frozen=True)
class Condition:
    """How something stands, or is to stand: permission bits, modification time, size, SHA-256, target.

    `digest` is zero where it is not known, as before a repair; `target` is that of a link.
    """

    mode: int = 0
    modified_ns: int = 0
    size: int = 0
    digest: bytes = bytes(32)
    target: bytes = b""


@dataclass(frozen=True)
class Entry:
    """One thing that changes. `before` is None for what was not there. The sidecar's path is its name."""

    thing: Thing
    path: bytes
    before: Condition | None
    after: Condition


@dataclass(frozen=True)
class Patch:
    """Bytes of an entry that change: `old` and `new` are lengths, `place` is where they stand in the journal.

    With `blind` the old bytes could not be read; going back leaves what is there.
    """

    entry: int
    offset: int
    old: int
    new: int
    blind: bool
    place: int


@dataclass
class Contents:
    """What a journal holds, without the bytes themselves."""

    identity: bytes
    entries: list[Entry] = field(default_factory=list)
    patches: list[list[Patch]] = field(default_factory=list)
    """Of every entry, in the order in which they were written."""

    finished: bool = False


def journal_path(sidecar: Path) -> Path:
    """Where the journal of a sidecar stands."""
    return sidecar.with_name(sidecar.name + SUFFIX)


# -- writing --------------------------------------------------------------------------------------------


class Draft:
    """A journal that is being written. Nothing is changed yet, and without `commit` nothing is left of it."""

    def __init__(self, sidecar: Path, identity: bytes) -> None:
        """Begin the journal of `sidecar`; it will replace one that is there. Raises CannotCheck."""
        self.contents = Contents(identity)
        self._file = NewFile(journal_path(sidecar), overwrite=True)
        self._places: list[int] = []
        """Where the records of the entries begin."""

        self._end = 0
        try:
            self._write(_Kind.SET, 0, 0, identity, b"")
        except BaseException:
            self._file.discard()
            raise

    def add(self, entry: Entry) -> int:
        """Begin an entry; returns its number."""
        number = len(self.contents.entries)
        self._places.append(self._end)
        self._write(_Kind.ENTRY, entry.thing, number, _packed(entry), b"")
        self.contents.entries.append(entry)
        self.contents.patches.append([])
        return number

    def amend(self, number: int, digest: bytes) -> None:
        """Enter the SHA-256 that an entry will have, where it was not known when the entry was begun."""
        entry = self.contents.entries[number]
        entry = replace(entry, after=replace(entry.after, digest=digest))
        record = _record(_Kind.ENTRY, entry.thing, number, _packed(entry), b"", 0)
        self._file.write(self._places[number], record)
        self.contents.entries[number] = entry

    def patch(self, entry: int, offset: int, old: bytes | None, new: bytes) -> None:
        """Bytes of an entry that will change, at most PATCH; `old` is None where it was unreadable."""
        place = self._write(_Kind.PATCH, old is None, entry, old or b"", new, offset)
        patch = Patch(entry, offset, len(old or b""), len(new), old is None, place)
        self.contents.patches[entry].append(patch)

    def _write(self, kind: _Kind, detail: int, entry: int, old: bytes, new: bytes, offset: int = 0) -> int:
        """Append a record; returns where its old bytes begin."""
        self._file.write(self._end, _record(kind, detail, entry, old, new, offset))
        place = self._end + _HEADER.size
        self._end = place + len(old) + len(new)
        return place

    def new_bytes(self, patch: Patch) -> bytes:
        """The bytes that a patch will put in place."""
        return self._file.read(patch.place + patch.old, patch.new)

    def commit(self) -> None:
        """Bring the journal to the medium, folder and all. Raises CannotCheck; then there is none."""
        self._write(_Kind.END, 0, len(self.contents.entries), b"", b"")
        self._file.commit(self._end, mode=0o600)

    def __enter__(self) -> Draft:
        return self

    def __exit__(self, *_: object) -> None:
        self._file.discard()


def _record(kind: _Kind, detail: int, entry: int, old: bytes, new: bytes, offset: int) -> bytes:
    head = (_MAGIC, kind, detail, _VERSION, entry, offset, len(old), len(new), 0)
    plain = _HEADER.pack(*head, 0)[:-8]
    return plain + struct.pack("<Q", _checksum(plain, old + new)) + old + new


def _checksum(head: bytes, payload: bytes) -> int:
    digest = xxhash.xxh3_64(head)
    digest.update(payload)
    return int(digest.intdigest())


def _packed(entry: Entry) -> bytes:
    """An entry's path and conditions: length of the path, path, then both conditions."""
    return (
        struct.pack("<H", len(entry.path)) + entry.path + _condition(entry.before) + _condition(entry.after)
    )


def _condition(condition: Condition | None) -> bytes:
    c = condition or Condition()
    fixed = _CONDITION.pack(condition is not None, c.mode, c.modified_ns, c.size, c.digest)
    return fixed + struct.pack("<H", len(c.target)) + c.target


# -- reading --------------------------------------------------------------------------------------------


class Journal:
    """A journal on the medium, checked record by record when it is opened."""

    def __init__(self, sidecar: Path, *, write: bool = True) -> None:
        """Open the journal of `sidecar`, to `write` to it too.

        Raises FileNotFoundError, or CannotCheck for one that is damaged or cannot be read.
        """
        self.path = journal_path(sidecar)
        try:
            flags = os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK
            self._fd = os.open(self.path, flags | (os.O_RDWR if write else os.O_RDONLY))
        except FileNotFoundError:
            raise
        except OSError as error:
            raise CannotCheck(f"{self.path} cannot be opened: {reason(error)}") from None
        try:
            if not stat.S_ISREG(os.fstat(self._fd).st_mode):
                raise self._damaged()
            self.contents = self._read()
        except OSError as error:
            self.close()
            raise CannotCheck(f"{self.path} cannot be read: {reason(error)}") from None
        except BaseException:
            self.close()
            raise

    @property
    def finished(self) -> bool:
        """Whether the repair came to its end."""
        return self.contents.finished

    def _damaged(self) -> CannotCheck:
        return CannotCheck(f"{self.path} is damaged and cannot be used; move it away to go on without it")

    def _read(self) -> Contents:
        contents: Contents | None = None
        ended = False
        for kind, detail, patch, payload in self._records():
            if contents is None:
                if kind is not _Kind.SET or len(payload) != 16:
                    break
                contents = Contents(payload)
            elif ended:
                contents.finished = kind is _Kind.DONE
            elif kind is _Kind.ENTRY:
                contents.entries.append(self._entry(detail, payload))
                contents.patches.append([])
            elif kind is _Kind.PATCH and patch.entry < len(contents.entries):
                contents.patches[patch.entry].append(patch)
            elif kind is _Kind.END and patch.entry == len(contents.entries):
                ended = True
            else:
                break
        if contents is None or not ended:
            raise self._damaged()
        return contents

    def _records(self) -> Iterator[tuple[_Kind, int, Patch, bytes]]:
        """All records that are whole, up to the first one that is not."""
        self._end = place = 0
        while len(head := read_all(self._fd, place, _HEADER.size)) == _HEADER.size:
            magic, kind, detail, version, entry, offset, old, new, _, checksum = _HEADER.unpack(head)
            if (magic, version) != (_MAGIC, _VERSION) or max(old, new) > PATCH or kind not in list(_Kind):
                return
            payload = read_all(self._fd, place + _HEADER.size, old + new)
            if checksum != _checksum(head[:-8], payload):
                return
            patch = Patch(entry, offset, old, new, bool(detail), place + _HEADER.size)
            self._end = place = patch.place + old + new
            yield _Kind(kind), detail, patch, payload

    def _entry(self, thing: int, packed: bytes) -> Entry:
        try:
            length = int.from_bytes(packed[:2], "little")
            path = packed[2 : 2 + length]
            before, place = _unpacked(packed, 2 + length)
            after, place = _unpacked(packed, place)
            entry = Entry(Thing(thing), path, before, after or Condition())
        except (struct.error, ValueError):
            raise self._damaged() from None
        check_path(path)
        if after is None or place != len(packed):
            raise self._damaged()
        return entry

    def old_bytes(self, patch: Patch) -> bytes:
        """The bytes that stood in the patch's place."""
        return read_all(self._fd, patch.place, patch.old)

    def new_bytes(self, patch: Patch) -> bytes:
        """The bytes that the patch puts there."""
        return read_all(self._fd, patch.place + patch.old, patch.new)

    def finish(self) -> None:
        """Note, on the medium, that the repair came to its end. Raises OSError."""
        self._note(_Kind.DONE)

    def begin_undoing(self) -> None:
        """Note, on the medium, that the repair is being undone and is finished no more. Raises OSError."""
        self._note(_Kind.UNDOING)

    def _note(self, kind: _Kind) -> None:
        record = _record(kind, 0, 0, b"", b"", 0)
        write_all(self._fd, self._end, record)
        os.fsync(self._fd)
        self._end += len(record)
        self.contents.finished = kind is _Kind.DONE

    def remove(self) -> None:
        """Take the journal away, for good. Raises OSError."""
        folder = os.open(self.path.parent, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        try:
            os.unlink(self.path.name, dir_fd=folder)
            os.fsync(folder)
        finally:
            let_go(folder)

    def close(self) -> None:
        """Close the file."""
        let_go(self._fd)

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def _unpacked(packed: bytes, place: int) -> tuple[Condition | None, int]:
    there, mode, modified_ns, size, digest = _CONDITION.unpack_from(packed, place)
    place += _CONDITION.size
    (length,) = struct.unpack_from("<H", packed, place)
    place += 2
    target = packed[place : place + length]
    return (Condition(mode, modified_ns, size, digest, target) if there else None), place + length
