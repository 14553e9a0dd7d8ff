"""verify: read everything, say what is damaged and whether it can be put right; write nothing."""

from __future__ import annotations

import hashlib
import os
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from oakum import __version__
from oakum.algebra.concatenated import ConcatenatedCode
from oakum.errors import FormatError
from oakum.jobs import DEFAULT_MEMORY, resuming
from oakum.jobs.checking import UNKNOWN, Finding, WindowCheck
from oakum.jobs.common import announce_compiling, find_sidecar, summarise
from oakum.jobs.opening import KnownMember, ProtectedSet, lost_sections, open_set
from oakum.jobs.replay import unfinished
from oakum.jobs.resuming import State, beside, in_state_folder, key_of
from oakum.jobs.scanned import Scanned
from oakum.jobs.unreadable import read_unreadable
from oakum.members import MemberHasher
from oakum.pools import Pools
from oakum.progress import Progress, Silent
from oakum.results import BlockReport, CheckResult, MemberState, Outcome
from oakum.sidecar.table import Kind

if TYPE_CHECKING:
    from oakum.decoding.block import Decoders
    from oakum.jobs.tally import Tally


def verify(
    target: Path,
    *,
    sidecar: Path | None = None,
    root: Path | None = None,
    digests_only: bool = False,
    unreadable: Path | None = None,
    memory: int = DEFAULT_MEMORY,
    jobs: int | None = None,
    fresh: bool = False,
    progress: Progress = Silent(),
) -> CheckResult:
    """Check a protected set against its sidecar and say what could be corrected.

    `digests_only` leaves out the members' SHA-256. `unreadable` names a CSV of `path,offset,length` that
    must not be read. Raises CannotCheck where nothing can be said at all.

    A run over a large set that is interrupted (KeyboardInterrupt and the like, or a kill) leaves a state
    behind, and the next one goes on from there, unless it is to start `fresh`.
    """
    begin = time.monotonic()
    opened = open_set(find_sidecar(target, sidecar), root, read_unreadable(unreadable), target, progress)
    opened.once = True
    try:
        with Pools(jobs) as pools:
            check = SetCheck(opened, pools, progress)
            state = _state(opened, digests_only)
            check.scanned = Scanned(state, opened.sections, fresh=fresh)
            if check.scanned.skipped:
                opened.notes.append(_skipped(check.scanned.skipped, opened))
                progress.note(opened.notes[-1])
            elif state.there and not fresh:
                opened.notes.append(state.of_no_use)
            try:
                with state.needed():
                    tally = check.run(hashing=not digests_only)
            finally:
                check.close()
        result = result_of("verify", target, check, tally, time.monotonic() - begin)
        return replace(result, notes=(*result.notes, *_warnings(check)))
    finally:
        opened.close()


def _state(opened: ProtectedSet, digests_only: bool) -> State:
    """The state file of this run, beside the sidecar or in the user's state folder; small sets have none."""
    sidecar = opened.path
    places = [beside(sidecar), *filter(None, [in_state_folder(sidecar)])]
    if opened.length < resuming.LEAST:
        places = [place for place in places if os.path.lexists(place)]
    if not places:
        return State([], "")
    found = os.stat(sidecar)
    as_it_is = found.st_dev, found.st_ino, found.st_size, found.st_mtime_ns, found.st_ctime_ns
    identities = [s.bootstrap.identity for s in opened.sections]
    facts = __version__, as_it_is, identities, digests_only, sorted(opened.unreadable.items())
    return State(places, key_of(opened.folder, opened.members, *facts))


def _skipped(nbytes: int, opened: ProtectedSet) -> str:
    """A sentence on what need not be read again."""
    return f"an earlier run was interrupted; {nbytes:,} of {opened.length:,} bytes need not be read again"


def _warnings(check: SetCheck) -> Iterator[str]:
    """What should be known before the next damage comes."""
    if unfinished(check.opened.path):
        yield (
            "a repair in place was interrupted: oakum repair --in-place finishes it, --roll-back undoes it"
        )
    worn = [w for w in check.windows if w.burst_left() < w.g.guaranteed_burst]
    if worn:
        worst = min(worn, key=WindowCheck.burst_left)
        yield (
            "as long as the sidecar stays damaged, one contiguous loss of "
            f"{worst.burst_left():,} bytes in the members can be put right anywhere, where it was "
            f"{worst.g.guaranteed_burst:,}; oakum repair mends the sidecar"
        )
    unknown = sum(int((w.data == UNKNOWN).sum()) for w in check.windows if w.g.digested)
    if unknown:
        yield (
            f"the digests of {unknown:,} cells of 4,096 bytes are lost with parts of the sidecar; damage in "
            "them takes longer to find, and may be beyond correction sooner"
        )


@dataclass
class SetCheck:
    """The check of a whole set: scan every window, then decode what is dirty in it."""

    opened: ProtectedSet
    pools: Pools
    progress: Progress

    def __post_init__(self) -> None:
        self.code: ConcatenatedCode = self.opened.sections[0].bootstrap.code.code()
        if any(s.bootstrap.code != self.opened.sections[0].bootstrap.code for s in self.opened.sections):
            raise FormatError("the sections of this sidecar use different codes; it was pieced together")
        self._decoders: Decoders | None = None
        self._load_lock = threading.Lock()
        self.windows: list[WindowCheck] = []
        self.scanned: Scanned | None = None

    def decoders(self) -> Decoders:
        """The compiled decoders, loaded when first needed: intact sets never wait for them."""
        with self._load_lock:
            if self._decoders is None:
                from oakum.decoding.block import Decoders

                announce_compiling(self.progress)
                self._decoders = Decoders.of(self.code)
            return self._decoders

    def scan(self, *, hashing: bool) -> None:
        """Read everything in order, and note what is not right."""
        opened = self.opened
        total = sum(s.geometry.length + s.geometry.body for s in opened.sections)
        self.progress.phase("reading", total - (0 if self.scanned is None else self.scanned.skipped))
        hasher = MemberHasher() if hashing else None
        for number in range(len(opened.sections)):
            window = WindowCheck(opened, number, self.progress, self.pools)
            self.windows.append(window)
            if self.scanned is not None:
                self.scanned.begin(window, hasher)
            self.scan_window(window, hasher)
        self._settle_members(hashing=hashing)

    def scan_window(self, window: WindowCheck, hasher: MemberHasher | None) -> None:
        """Read one window; an audit may read less of it, and asks for more."""
        window.scan(hasher)

    def take(self, finding: Finding) -> None:
        """A decoded block, for those who want more of it than the tally."""

    def _settle_members(self, *, hashing: bool) -> None:
        """Without SHA-256, members are right when all their cells are and nothing else speaks against it."""
        damaged: set[bytes] = set()
        for window in self.windows:
            if not window.g.length or not window.has_damage(0, window.g.length, unknown=hashing):
                continue
            place = 0
            for piece in window.pieces:
                if piece.length and window.has_damage(place, place + piece.length, unknown=hashing):
                    damaged.add(piece.path)
                place += piece.length
        for member in self.opened.members.values():
            if member.piece.kind is not Kind.FILE:
                continue
            sound = not member.absent and member.piece.path not in damaged
            if not hashing:
                member.presumed = sound
            elif sound and not member.right and member.sha256 is None:  # Its last window is lost.
                member.right = True
            elif sound and not member.right and self.opened.incomplete:  # An earlier one is.
                member.right = self._has_its_sha256(member)
            member.checked = member.right or member.presumed or not sound

    def _has_its_sha256(self, member: KnownMember) -> bool:
        digest = hashlib.sha256()
        for _, data, faults in self.opened.read(member):
            if faults:
                return False
            digest.update(data.data)
        return digest.digest() == member.sha256

    def run(self, *, hashing: bool) -> Tally:
        """Scan, decode, add up."""
        from oakum.jobs.tally import Tally

        self.scan(hashing=hashing)
        tally = Tally(self.opened)
        dirty = sum(len(w.dirty_blocks()) for w in self.windows)
        if dirty:
            self.progress.phase("decoding", sum(len(w.dirty_blocks()) * w.block_bytes for w in self.windows))
        for window in self.windows:
            tally.add_window(window)
            for finding in window.findings(self.decoders):
                tally.add(finding)
                self.take(finding)
                self.progress.advance(window.block_bytes)
        return tally

    def close(self) -> None:
        """Close the members of all windows."""
        for window in self.windows:
            window.close()


def result_of(command: str, target: Path, check: SetCheck, tally: Tally, seconds: float) -> CheckResult:
    """The record of a finished check."""
    members = tuple(tally.members())
    correctable = all(m.state is not MemberState.UNCORRECTABLE for m in members)
    sidecar = tally.sidecar(check.opened.path, members_correctable=correctable)
    if not correctable or sidecar.state is Outcome.UNCORRECTABLE:
        outcome = Outcome.UNCORRECTABLE
    elif all(m.state is MemberState.INTACT for m in members) and sidecar.state is Outcome.INTACT:
        outcome = Outcome.INTACT
    else:
        outcome = Outcome.CORRECTABLE
    return CheckResult(
        command, target, outcome, summarise(check.code), tally.totals,
        tuple(sorted(tally.blocks, key=_order)), members, sidecar, seconds,
        (*lost_sections(check.opened), *check.opened.notes),
    )  # fmt: skip


def _order(block: BlockReport) -> tuple[int, int]:
    return block.window, block.block
