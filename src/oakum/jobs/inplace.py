"""repair --in-place: put the bytes right where they are, under a journal that can bring them back.

1. Everything is read and decoded; what is to change goes into the draft of a journal, old bytes and new ones.
2. Every member's SHA-256 is asked of its bytes with the new ones laid over them, and a damaged sidecar is
   made anew from these. If something cannot be corrected, nothing has happened.
3. The journal is brought to the medium. From here on an interrupted run is finished by the next one.
4. The journal is carried out, what was written is read back, and the journal is marked as finished.
"""

from __future__ import annotations

import hashlib
import os
import stat
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from oakum.errors import CannotCheck, UsageError
from oakum.files import Fault, NewFile, let_go, read_into, room_in
from oakum.geometry import CELL
from oakum.jobs.checking import RIGHT, Bytes, Finding, Range, WindowCheck
from oakum.jobs.journal import PATCH, Condition, Draft, Entry, Journal, Patch, Thing
from oakum.jobs.lost import recover_sections
from oakum.jobs.opening import KnownMember, ProtectedSet
from oakum.jobs.rebuild import write_sidecar
from oakum.jobs.replay import Place, finish, refuse_unfit, without
from oakum.jobs.tally import Tally
from oakum.jobs.verify import SetCheck
from oakum.members import MemberHasher, MemberStream, Part, Span
from oakum.results import CheckResult, MemberState, Outcome
from oakum.sidecar.reading import ByteSource
from oakum.sidecar.table import Kind

STEP = 1 << 20


class Overlay:
    """A stream of members with the new bytes of a draft laid over what is on the medium."""

    def __init__(self, stream: MemberStream, spans: Sequence[Part], draft: Draft, numbers: dict[bytes, int]):
        self._stream = stream
        self._draft = draft
        self._patches: list[tuple[int, int, Patch]] = []
        """First and last byte (in the stream) that a patch has a say in, in order."""

        place = 0
        for span in spans:
            for patch in draft.contents.patches[numbers[span.path]] if span.path in numbers else ():
                start = place + patch.offset - span.offset
                if start < place + span.length and start + patch.new > place:
                    self._patches.append((start, start + patch.new, patch))
            place += span.length
        self._patches.sort(key=lambda p: p[0])
        self._starts = np.array([start for start, _, _ in self._patches], np.int64)

    def read_into(self, offset: int, buffer: memoryview, hasher: MemberHasher | None = None) -> list[Fault]:
        """See `oakum.members.Stream`."""
        faults = self._stream.read_into(offset, buffer)
        end = offset + len(buffer)
        first = max(0, int(np.searchsorted(self._starts, offset - PATCH)))
        for start, stop, patch in self._patches[first : int(np.searchsorted(self._starts, end))]:
            a, b = max(start, offset), min(stop, end)
            if a < b:
                buffer[a - offset : b - offset] = self._draft.new_bytes(patch)[a - start : b - start]
                faults = without(faults, a - offset, b - offset)
        return faults

    def fetch(self, offset: int, length: int) -> None:
        """See `oakum.members.Stream`."""
        self._stream.fetch(offset, length)

    def close(self) -> None:
        """Close the members."""
        self._stream.close()


class InPlace:
    """One repair in place. As a context manager it leaves no draft behind."""

    def __init__(self, opened: ProtectedSet, *, even_newer: bool) -> None:
        self._opened = opened
        self._even_newer = even_newer
        self._place = Place(opened.root, opened.path)
        self._numbers: dict[bytes, int] = {}
        """Of the entries of members, by path."""

        self._draft: Draft | None = None

    # -- drafting ---------------------------------------------------------------------------------------

    def run(self, check: SetCheck, wanted: Sequence[KnownMember]) -> Tally:
        """Draft what is to change, and count the damage."""
        changing = [m for m in wanted if not m.right or m.fault]
        self._refuse(changing)
        self._refuse_full(check, changing)
        self._draft = Draft(self._opened.path, self._opened.sections[0].bootstrap.set_identity)
        for member in changing:
            self._begin(self._draft, member)
        check.progress.phase("decoding", sum(len(w.dirty_blocks()) * w.block_bytes for w in check.windows))
        tally = Tally(self._opened)
        for window in check.windows:
            tally.add_window(window)
            for finding in window.findings(check.decoders, keep=True):
                tally.add(finding)
                self._correct(self._draft, window, finding)
                check.progress.advance(window.block_bytes)
        if self._opened.incomplete and self._all_at_hand:  # Corrected data may tell what they said.
            self._recover(self._draft, check)
        return tally

    def _recover(self, draft: Draft, check: SetCheck) -> None:
        recover_sections(self._opened, lambda spans: self._stream(draft, spans), check.progress)
        for path, number in self._numbers.items():
            draft.amend(number, self._opened.members[path].sha256 or bytes(32))

    @property
    def _all_at_hand(self) -> bool:
        """Whether every member is right in its place or will be."""
        return all(m.right or path in self._numbers for path, m in self._opened.members.items())

    def _refuse(self, changing: Sequence[KnownMember]) -> None:
        for member in changing:
            path = self._opened.root / os.fsdecode(member.piece.path)
            if member.in_the_way and member.piece.kind is not Kind.LINK:
                raise UsageError(f"{path} {member.fault}; move away what stands there")
            if member.edited and not self._even_newer:
                raise UsageError(
                    f"{path} is newer than recorded, which looks edited rather than decayed; "
                    "--even-newer puts back what was protected"
                )

    def _refuse_full(self, check: SetCheck, changing: Sequence[KnownMember]) -> None:
        """Say before the work that there is no room for journal and members."""
        cells = sum(int(np.count_nonzero(w.data != RIGHT)) for w in check.windows)
        worn = any(bool(w.wear) or (w.parity != RIGHT).any() or w.inner_suspects for w in check.windows)
        need = 2 * CELL * cells + sum(m.size for m in changing if m.absent)
        need += sum(m.longer for m in changing) + (2 * self._opened.source.size if worn else 0)
        free = room_in(self._opened.path.parent)
        if need > free:
            raise CannotCheck(
                f"{self._opened.path.parent} has room for {free:,} bytes, and journal and corrections need "
                f"up to {need:,}; free some, or write elsewhere with --output"
            )

    def _begin(self, draft: Draft, member: KnownMember) -> None:
        """The entry of a member, and what stands beyond its end."""
        piece = member.piece
        thing = Thing[piece.kind.name]
        before = None if member.absent and not member.in_the_way else self._standing(member)
        mode = piece.mode & 0o777 if before is None else before.mode
        modified = piece.modified_ns if before is None or member.edited else before.modified_ns
        after = Condition(mode, modified, member.size, member.sha256 or bytes(32), piece.target)
        number = self._numbers[piece.path] = draft.add(Entry(thing, piece.path, before, after))
        for start in range(member.size, member.size + member.longer, PATCH):
            length = min(PATCH, member.size + member.longer - start)
            data, faults = self._read(member, start, length)
            self._patch(draft, number, start, data, faults, b"")

    def _standing(self, member: KnownMember) -> Condition:
        path = member.piece.path
        found = self._opened.folder.stat(path)
        target = b""
        if member.piece.kind is Kind.LINK:
            if not stat.S_ISLNK(found.st_mode):
                raise UsageError(f"{self._opened.root / os.fsdecode(path)} {member.fault}; move it away")
            target = self._opened.folder.readlink(path)
        return Condition(stat.S_IMODE(found.st_mode), found.st_mtime_ns, found.st_size, target=target)

    def _read(self, member: KnownMember, offset: int, length: int) -> tuple[Bytes, list[Fault]]:
        data = np.zeros(length, np.uint8)
        fd = self._opened.folder.open(member.piece.path)
        try:
            return data, read_into(fd, offset, data.data)
        finally:
            let_go(fd)

    def _correct(self, draft: Draft, window: WindowCheck, finding: Finding) -> None:
        """Patches for the corrected bytes of a block, one for each member that has some of them."""
        for start, data in finding.corrected:
            received = np.empty(len(data), np.uint8)
            faults = window.stream.read_into(start - window.start, received.data)
            for member in self._opened.members_at(start, len(data)):
                number = self._numbers.get(member.piece.path)
                a = max(start, member.stream_start) - start
                b = min(start + len(data), member.stream_start + member.size) - start
                if number is not None and a < b:
                    inside = [(max(x, a) - a, min(y, b) - a) for x, y in faults if x < b and y > a]
                    offset = start + a - member.stream_start
                    self._patch(draft, number, offset, received[a:b], inside, data[a:b].tobytes())

    @staticmethod
    def _patch(
        draft: Draft, number: int, offset: int, old: Bytes, faults: Sequence[Range], new: bytes
    ) -> None:
        """Patches for a range, cut where bytes that could be read meet those that could not."""
        place = 0
        for a, b in [*faults, (len(old), len(old))]:
            if place < a:
                draft.patch(number, offset + place, old[place:a].tobytes(), new[place:a])
            if a < b:
                draft.patch(number, offset + a, None, new[a:b])
            place = b

    # -- judging and doing ------------------------------------------------------------------------------

    def finish(self, result: CheckResult, check: SetCheck, memory: int) -> CheckResult:
        """Ask the SHA-256 of every member as it will be, then change all of them or none."""
        draft = self._draft
        assert draft is not None
        check.progress.phase("checking the corrections", sum(e.after.size for e in draft.contents.entries))
        wrong = {p for p in self._numbers if not self._will_be_right(draft, p, check)}
        if wrong:
            return _nothing_written(result, wrong)
        sidecar_too = self._draft_sidecar(draft, result, check, memory)
        if not draft.contents.entries:
            return result
        refuse_unfit(draft.contents, self._place)
        draft.commit()
        check.progress.phase("writing", None)
        with Journal(self._opened.path) as journal:
            finish(journal, self._place)
            note = f"what stood there before is in {journal.path}; oakum repair --roll-back brings it back"
        members = tuple(
            m._replace(mended=self._opened.root / m.path) if os.fsencode(m.path) in self._numbers else m
            for m in result.members
        )
        sidecar = replace(result.sidecar, mended=self._opened.path) if sidecar_too else result.sidecar
        return replace(result, members=members, sidecar=sidecar, notes=(*result.notes, note))

    def _stream(self, draft: Draft, spans: Sequence[Part]) -> Overlay:
        return Overlay(MemberStream(self._opened.folder, spans), spans, draft, self._numbers)

    def _will_be_right(self, draft: Draft, path: bytes, check: SetCheck) -> bool:
        entry = draft.contents.entries[self._numbers[path]]
        if entry.thing is not Thing.FILE:
            return True
        digest = hashlib.sha256()
        stream = self._stream(draft, [Span(path, 0, entry.after.size)])
        try:
            for start in range(0, entry.after.size, STEP):
                buffer = bytearray(min(STEP, entry.after.size - start))
                if stream.read_into(start, memoryview(buffer)):
                    return False
                digest.update(buffer)
                check.progress.advance(len(buffer))
        finally:
            stream.close()
        return digest.digest() == entry.after.digest

    def _draft_sidecar(self, draft: Draft, result: CheckResult, check: SetCheck, memory: int) -> bool:
        """Draft the sidecar as it should be, when it is damaged and every member will be at hand."""
        if result.sidecar.state is Outcome.INTACT or not self._all_at_hand:
            return False
        path = self._opened.path
        with NewFile(path, overwrite=True) as file:
            length = write_sidecar(self._opened, check, lambda s: self._stream(draft, s), file, memory)
            if length is None:
                return False
            digest = hashlib.sha256()
            for start in range(0, length, STEP):
                digest.update(file.read(start, min(STEP, length - start)))
            found = os.stat(path)
            before = Condition(stat.S_IMODE(found.st_mode), found.st_mtime_ns, found.st_size)
            after = Condition(before.mode, before.modified_ns, length, digest.digest())
            number = draft.add(Entry(Thing.SIDECAR, os.fsencode(path.name), before, after))
            self._compare(draft, number, self._opened.source, file, length)
        return True

    def _compare(self, draft: Draft, number: int, old: ByteSource, new: NewFile, length: int) -> None:
        """Patches for every cell's worth of bytes in which the old and the new sidecar differ."""
        for start in range(0, max(length, old.size), CELL):
            right = new.read(start, max(0, min(CELL, length - start)))
            data, faults = old.read(start, min(CELL, max(length, old.size) - start))
            if faults or data.tobytes() != right:
                self._patch(draft, number, start, data, faults, right)

    def __enter__(self) -> InPlace:
        return self

    def __exit__(self, *_: object) -> None:
        if self._draft is not None:
            self._draft.__exit__()
        self._place.close()


def _nothing_written(result: CheckResult, wrong: set[bytes]) -> CheckResult:
    members = tuple(
        m._replace(state=MemberState.UNCORRECTABLE, bits_flipped=None) if os.fsencode(m.path) in wrong else m
        for m in result.members
    )
    note = "nothing was written, since not everything can be corrected; --member names what can be had"
    return replace(result, outcome=Outcome.UNCORRECTABLE, members=members, notes=(*result.notes, note))
