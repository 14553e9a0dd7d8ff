"""describe: what a sidecar says about itself."""

from __future__ import annotations

import os
from pathlib import Path

from oakum.files import FileBytes
from oakum.jobs.common import absolute, find_sidecar, summarise
from oakum.jobs.opening import readable
from oakum.results import Description, MemberDescription
from oakum.sidecar.reading import find_sections
from oakum.sidecar.table import Kind, Piece


def describe(sidecar: Path) -> Description:
    """Read a sidecar's records. Raises CannotCheck (FormatError) when it has none that can be read."""
    path = absolute(find_sidecar(sidecar, None))
    with FileBytes(path) as source:
        found = find_sections(source)
        sections, tables = readable(found)
        members = _members(tables)
        first, last = sections[0].bootstrap, sections[-1].bootstrap
        notes = [] if last.last else ["the sidecar's end is missing; its last sections say no more"]
        if len(sections) < len(found):
            notes.append("the list of members of some sections is damaged beyond correction and is left out")
        full = sections[:-1] or sections
        return Description(
            path, first.version, first.set_identity.hex(), summarise(first.code.code()),
            last.start + last.length, source.size, first.depth, len(sections),
            sum(s.geometry.blocks for s in sections), min(s.geometry.guaranteed_burst for s in full),
            tuple(members), tuple(notes),
        )  # fmt: skip


def _members(tables: list[tuple[Piece, ...]]) -> list[MemberDescription]:
    """All members in order; of one that lies in several windows the last entry counts."""
    pieces: dict[bytes, Piece] = {}
    for table in tables:
        for piece in table:
            pieces[piece.path] = piece
    return [
        MemberDescription(
            os.fsdecode(p.path), p.path, p.kind.name.lower(), p.size,
            p.digest if p.kind is Kind.FILE and p.ends else None, p.modified_ns, p.mode,
            os.fsdecode(p.target) if p.kind is Kind.LINK else None,
        )
        for p in pieces.values()
    ]  # fmt: skip
