"""The bootstrap record: code, geometry and identity of a section in 200 bytes, and how it is coded.

Every stretch of a sidecar begins with a sync marker and one copy of this record, coded at a very low rate.
"""

from __future__ import annotations

import hashlib
import struct
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import xxhash

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.inner import InnerCode
from oakum.algebra.outer import OuterCode
from oakum.errors import FormatError, UsageError
from oakum.geometry import Geometry

if TYPE_CHECKING:
    from oakum.kernels.columns import ColumnDecoder

FORMAT_VERSION = 1
MAGIC = b"OAKUM\0"

MARKER = 0xB9770C24F6058D06.to_bytes(8, "big")
"""Begins every stretch. Its aperiodic autocorrelation never exceeds 7 of 64, the best of 200,000 tried."""

MARKER_ERRORS = 10
"""Bits in which a marker may differ and still be taken for one."""

UNKNOWN_LENGTH = (1 << 64) - 1
"""Stands for the length of a stream that had not ended when its section was written."""

LAST_SECTION = 1
FROM_PIPE = 2

_FIELDS = struct.Struct("<6sH HH BBHBB BBBB H Q 32s QQQQQQQQQ II 16s16s16s")
_CHECKSUM = struct.Struct("<Q")
RECORD_BYTES = _FIELDS.size + _CHECKSUM.size
CODEWORDS = 2
CODED_BYTES = CODEWORDS * 255
HEAD_BYTES = len(MARKER) + CODED_BYTES


@lru_cache(maxsize=1)
def bootstrap_code() -> OuterCode:
    """RS(255,100): two codewords hold a record, byte by byte in turn; 77 wrong symbols each are corrected."""
    return OuterCode(255, RECORD_BYTES // CODEWORDS)


@dataclass(frozen=True)
class CodeParameters:
    """The code's parameters as the sidecar records them; `matrix_digest` pins the inner check matrix."""

    name: str
    n: int
    k: int
    field_poly: int
    first_root: int
    root_spacing: int
    family: str
    m: int
    p: int
    d: int
    matrix_digest: int

    @staticmethod
    def of(code: ConcatenatedCode) -> CodeParameters:
        """The parameters of a code."""
        o, i = code.outer, code.inner
        return CodeParameters(code.name, o.n, o.k, o.field_poly, o.first_root, o.root_spacing,
                              i.family, i.m, i.p, i.d, _matrix_digest(i))  # fmt: skip

    def code(self) -> ConcatenatedCode:
        """The code itself. Raises FormatError where this program does not have it."""
        try:
            outer = OuterCode(self.n, self.k, self.field_poly, self.first_root, self.root_spacing)
            inner = InnerCode(self.family, self.m, self.p)
        except UsageError as error:
            raise FormatError(f"the sidecar uses a code that this program does not have: {error}") from None
        if inner.d != self.d or _matrix_digest(inner) != self.matrix_digest:
            raise FormatError("the sidecar uses an inner code of another matrix than this program's")
        return ConcatenatedCode(self.name, outer, inner)


def _matrix_digest(inner: InnerCode) -> int:
    return int(xxhash.xxh3_64_intdigest(inner.check_columns.astype("<u4").tobytes()))


_FAMILIES = ("none", "EH", "EB")


@dataclass(frozen=True)
class Bootstrap:
    """One section's bootstrap record. Lengths in bytes; offsets are in the stream or in the sidecar.

    `body_digest` is the XXH3-64 of the whole body where cells have no digests of their own, else 0.
    """

    code: CodeParameters
    stretches: int
    window: int
    start: int
    length: int
    depth: int
    set_depth: int
    stream_length: int
    section_offset: int
    table_length: int
    body_digest: int
    entries: int
    flags: int
    parent: bytes = bytes(16)
    set_identity: bytes = bytes(16)
    identity: bytes = bytes(16)
    stretch: int = 0
    version: int = FORMAT_VERSION
    cell: int = field(default=4096)

    @property
    def geometry(self) -> Geometry:
        """The window's geometry, checked."""
        c = self.code
        return Geometry(c.n, c.k, c.m, c.p, self.length, self.depth)

    @property
    def last(self) -> bool:
        """Whether no section follows this one."""
        return bool(self.flags & LAST_SECTION)

    def pack(self) -> bytes:
        """The 200 bytes of the record, checksum included."""
        c = self.code
        body = _FIELDS.pack(
            MAGIC, self.version, self.stretch, self.stretches,
            c.n, c.k, c.field_poly, c.first_root, c.root_spacing,
            _FAMILIES.index(c.family), c.m, c.p, c.d, self.cell, c.matrix_digest, c.name.encode(),
            self.window, self.start, self.length, self.depth, self.set_depth, self.stream_length,
            self.section_offset, self.table_length, self.body_digest, self.entries, self.flags,
            self.parent, self.set_identity, self.identity,
        )  # fmt: skip
        return body + _CHECKSUM.pack(xxhash.xxh3_64_intdigest(body))

    def identified(self, table: bytes) -> Bootstrap:
        """The record with its identity: a hash of the record itself and of the member table.

        The first section's identity is the identity of the set.
        """
        plain = replace(self, stretch=0, identity=bytes(16), set_identity=bytes(16)).pack()
        identity = hashlib.sha256(b"oakum section\0" + plain[: _FIELDS.size - 32] + table).digest()[:16]
        return replace(
            self, identity=identity, set_identity=identity if self.window == 0 else self.set_identity
        )


def unpack(record: bytes) -> Bootstrap | None:
    """Read 200 bytes. None when they are no bootstrap record at all (magic or checksum do not agree).

    Raises FormatError for a record that is whole but not one that this version can use.
    """
    body, checksum = record[: _FIELDS.size], record[_FIELDS.size : RECORD_BYTES]
    if len(record) < RECORD_BYTES or body[:6] != MAGIC:
        return None
    if _CHECKSUM.unpack(checksum)[0] != xxhash.xxh3_64_intdigest(body):
        return None
    (_, version, stretch, stretches, n, k, poly, first_root, spacing, family, m, p, d, cell, digest, name,
     window, start, length, depth, set_depth, stream_length, section_offset, table_length, body_digest,
     entries, flags, parent, set_identity, identity) = _FIELDS.unpack(body)  # fmt: skip
    if not version:
        raise FormatError("the sidecar's bootstrap record contradicts itself")
    if version > FORMAT_VERSION:
        raise FormatError(
            f"the sidecar has format version {version}, this program reads up to {FORMAT_VERSION}; "
            "use a newer release of oakum"
        )
    if family >= len(_FAMILIES) or cell != 4096 or stretch >= stretches:
        raise FormatError("the sidecar's bootstrap record contradicts itself")
    try:
        text = name.rstrip(b"\0").decode("ascii")
    except UnicodeDecodeError:
        raise FormatError("the sidecar's bootstrap record names its code in no readable way") from None
    code = CodeParameters(text, n, k, poly, first_root, spacing, _FAMILIES[family], m, p, d, digest)
    return Bootstrap(
        code, stretches, window, start, length, depth, set_depth, stream_length, section_offset, table_length,
        body_digest, entries, flags, parent, set_identity, identity, stretch, version,
    )  # fmt: skip


def encode(record: bytes) -> bytes:
    """The 510 coded bytes of a record: the record itself, then its check symbols, codewords in turn."""
    data = np.frombuffer(record, np.uint8).reshape(-1, CODEWORDS).T
    return record + bootstrap_code().encode(data).T.tobytes()


@lru_cache(maxsize=1)
def _decoder() -> ColumnDecoder:
    """The compiled decoder, made when the first damaged copy is met."""
    from oakum.kernels.columns import ColumnDecoder

    return ColumnDecoder(bootstrap_code())


def decode(coded: bytes) -> tuple[Bootstrap, int] | None:
    """Correct and read one coded copy. Returns the record and the number of bits that were wrong.

    None when there is no record to be read.
    """
    (found,) = decode_all([coded])
    return None if found is None else (found, count_bits(encode(found.pack()), coded))


def decode_all(copies: Sequence[bytes]) -> list[Bootstrap | None]:
    """Correct and read many coded copies at once, so that a file full of false ones costs little.

    The systematic bytes are tried first, so that a copy that is whole costs no decoding. Raises FormatError
    for a record that this version cannot use.
    """
    found = [unpack(coded) for coded in copies]
    damaged = [i for i, record in enumerate(found) if record is None]
    if damaged:
        decoder = _decoder()
        received = np.frombuffer(b"".join(copies[i] for i in damaged), np.uint8)
        columns = np.ascontiguousarray(
            received.reshape(-1, 255, CODEWORDS).transpose(1, 0, 2).reshape(255, -1)
        )
        magnitudes, errors = decoder.decode(decoder.syndromes(columns))
        records = (columns ^ magnitudes)[: RECORD_BYTES // CODEWORDS]
        solved = (errors.reshape(-1, CODEWORDS) >= 0).all(axis=1)
        for at in np.flatnonzero(solved).tolist():
            found[damaged[at]] = unpack(records[:, CODEWORDS * at : CODEWORDS * (at + 1)].tobytes())
    return found


def count_bits(right: bytes, received: bytes) -> int:
    """Number of bits in which two byte strings of one length differ."""
    difference = np.frombuffer(right, np.uint8) ^ np.frombuffer(received, np.uint8)
    return int(np.bitwise_count(difference).sum())
