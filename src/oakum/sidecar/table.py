"""The member table: what the members of the set are, and which piece of each is in this window."""

from __future__ import annotations

import re
import struct
from enum import IntEnum
from typing import NamedTuple

from oakum.errors import FormatError
from oakum.geometry import MAX_LENGTH

_ENTRY = struct.Struct("<HBBI q QQQ 32s HH")
MAX_PATH = 32 << 10

PIECE_ENDS = 1
"""Flag: the member ends in this window, so that the digest is that of the whole member."""


class Kind(IntEnum):
    """What a member is."""

    FILE = 1
    FOLDER = 2
    LINK = 3


_KINDS = {int(kind): kind for kind in Kind}

_NAME = rb"(?!\.\.?(?:/|\Z))[^/\0]{1,255}"
_PATH = re.compile(_NAME + rb"(?:/" + _NAME + rb")*")


class Piece(NamedTuple):
    """One entry: a member, and the piece of it that lies in the window.

    `digest` is the SHA-256 of the member from its first byte to the end of the piece; where the member
    ends in this window that is the member's own. Paths are raw bytes, parts separated by "/", relative
    to the folder that holds the sidecar. `size` is that of the whole member (of a pipe: so far).
    """

    kind: Kind
    path: bytes
    mode: int
    modified_ns: int
    size: int
    offset: int
    length: int
    ends: bool
    digest: bytes = bytes(32)
    target: bytes = b""

    def pack(self, digest: bytes | None = None) -> bytes:
        """The entry's bytes, with another `digest` where one is given."""
        total = _ENTRY.size + len(self.path) + len(self.target)
        head = _ENTRY.pack(
            total, self.kind, PIECE_ENDS if self.ends else 0, self.mode, self.modified_ns,
            self.size, self.offset, self.length, digest or self.digest, len(self.path), len(self.target),
        )  # fmt: skip
        return head + self.path + self.target


def packed_length(path: bytes, target: bytes = b"") -> int:
    """Bytes that an entry takes in the table."""
    return _ENTRY.size + len(path) + len(target)


def unpack_table(table: bytes, entries: int, window_length: int) -> tuple[Piece, ...]:
    """Read a whole table. Raises FormatError for whatever a writer would not have written."""
    pieces: list[Piece] = []
    place = covered = 0
    for _ in range(entries):
        if place + _ENTRY.size > len(table):
            raise FormatError("the sidecar's member table ends too early")
        piece, size = _unpack_entry(table, place)
        place += size
        covered += piece.length
        pieces.append(piece)
    # Only the first member may have begun in an earlier window, only the last may go on in the next one.
    in_order = not any(p.offset for p in pieces[1:]) and all(p.ends for p in pieces[:-1])
    if place != len(table) or covered != window_length or not in_order:
        raise FormatError("the sidecar's member table does not fit its stream")
    if len({p.path for p in pieces}) != len(pieces):
        raise FormatError("the sidecar's member table names a member twice")
    return tuple(pieces)


def _unpack_entry(table: bytes, place: int) -> tuple[Piece, int]:
    (total, kind, flags, mode, modified, size, offset, length, digest, path_size, target_size) = (
        _ENTRY.unpack_from(table, place)
    )
    if total != _ENTRY.size + path_size + target_size or place + total > len(table) or kind not in _KINDS:
        raise FormatError("the sidecar's member table contradicts itself")
    at = place + _ENTRY.size
    path = table[at : at + path_size]
    target = table[at + path_size : place + total]
    check_path(path)
    ends = bool(flags & PIECE_ENDS)
    if (
        size > MAX_LENGTH
        or offset + length > size
        or (ends and offset + length != size)
        or (kind != Kind.FILE and (length or not ends))
    ):
        raise FormatError("the sidecar's member table gives a member an impossible size")
    member = _KINDS[kind]
    return Piece(member, path, mode & 0o7777, modified, size, offset, length, ends, digest, target), total


def check_path(path: bytes) -> None:
    """Refuse, with FormatError, a path that could leave the folder it belongs to or cannot be a name."""
    if len(path) > MAX_PATH or not _PATH.fullmatch(path):
        raise FormatError(
            "the sidecar names a member in a way that no file can be named; nothing was written"
        )
