"""Writing a damaged sidecar anew from members that are right: the same bytes as when it was first written."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Protocol

from oakum.encoding import Changed, Kernels, Unreadable, WindowEncoder, plan_reading
from oakum.files import NewFile
from oakum.jobs.opening import ProtectedSet
from oakum.jobs.protect import Placed, pack_table
from oakum.jobs.verify import SetCheck
from oakum.members import MemberHasher, MemberStream, Opener, Part, Stream
from oakum.sidecar.reading import Section
from oakum.sidecar.table import Kind, Piece
from oakum.sidecar.writing import SectionWriter


class Source(Stream, Protocol):
    """A stream of members that is closed when it has been read."""

    def close(self) -> None:
        """Close the members."""


StreamOf = Callable[[Sequence[Part]], Source]
"""Makes the stream of some spans; how it gets at the corrected bytes is its own business."""


def rebuild_sidecar(opened: ProtectedSet, check: SetCheck, members: Opener, path: Path, memory: int) -> bool:
    """Write the sidecar of `opened` to `path`, reading members through `members`.

    True when every section came out with the identity it had; otherwise nothing is written.
    """
    with NewFile(path) as file:
        length = write_sidecar(opened, check, lambda spans: MemberStream(members, spans), file, memory)
        if length is None:
            return False
        file.commit(length)
    return True


def write_sidecar(
    opened: ProtectedSet, check: SetCheck, stream_of: StreamOf, file: NewFile, memory: int
) -> int | None:
    """Write the sidecar of `opened` anew into `file`, and return its length in bytes.

    None when it did not come out with the identities that its sections had, or when sections are lost of
    which it is not known what they said (see `oakum.jobs.lost`): then protect makes a new one.
    """
    sections = opened.sections
    if opened.incomplete:
        return None
    kernels = Kernels.of(check.code)
    hasher = MemberHasher()
    check.progress.phase("writing the sidecar anew", sum(s.geometry.length for s in sections))
    for section, table in zip(sections, opened.tables, strict=True):
        if not _write_section(section, table, check, stream_of, file, kernels, hasher, memory):
            return None
    last = sections[-1]
    return last.bootstrap.section_offset + last.layout.size


def _write_section(
    section: Section,
    table: tuple[Piece, ...],
    check: SetCheck,
    stream_of: StreamOf,
    file: NewFile,
    kernels: Kernels,
    hasher: MemberHasher,
    memory: int,
) -> bool:
    spans = [piece for piece in table if piece.kind is Kind.FILE]
    writer = SectionWriter(section.bootstrap, section.layout, Placed(file, section.bootstrap.section_offset))
    stream = stream_of(spans)
    try:
        hasher.expect(spans)
        encoder = WindowEncoder(
            section.geometry, kernels, writer, stream, hasher, check.pools, check.progress.advance
        )
        encoder.run(plan_reading(section.geometry, memory))
    except (Unreadable, Changed):
        return False
    finally:
        stream.close()
    return writer.finish(pack_table(table, hasher.digests)).identity == section.bootstrap.identity
