"""Adding up what the windows and blocks of a set gave, to the result that is reported."""

from __future__ import annotations

import os
from bisect import bisect_right
from pathlib import Path

import numpy as np

from oakum.decoding.bursts import BurstCounter
from oakum.jobs.checking import Finding, KnownMember, ProtectedSet, WindowCheck
from oakum.results import BlockReport, MemberReport, MemberState, Outcome, SidecarReport, Totals
from oakum.sidecar.table import Kind


class Tally:
    """Counts over the whole set. Findings may come in any order within a window."""

    def __init__(self, opened: ProtectedSet) -> None:
        self._opened = opened
        self._files = sorted(
            (m for m in opened.members.values() if m.piece.kind is Kind.FILE and m.size), key=lambda m: m.stream_start
        )
        self._starts = np.array([m.stream_start for m in self._files], np.int64)
        self._bits = np.zeros(len(self._files), np.int64)
        self._lost: dict[int, list[tuple[int, int]]] = {}
        self._bursts = BurstCounter()
        self.blocks: list[BlockReport] = []
        self._block_count = 0
        self._symbols = self._corrected = self._flagged = self._erased = self._read = 0
        self._sidecar_bits = self._sidecar_symbols = self._sidecar_unreadable = 0
        self._sidecar_lost = False
        self.false_pins = 0

    def add_window(self, window: WindowCheck) -> None:
        """A window that has been scanned."""
        erased = sum(b - a for a, b in window.faulty)
        self._erased += erased
        self._read += 8 * (window.g.length - erased)
        self._block_count += window.g.blocks
        self._sidecar_bits += window.wear.bits
        self._sidecar_symbols += window.wear.symbols
        self._sidecar_unreadable += window.wear.unreadable
        self._sidecar_lost |= bool(window.wear.lost)

    def add(self, finding: Finding) -> None:
        """A block that has been decoded."""
        bits = int(finding.bits.sum())
        self._symbols += len(finding.places)
        self._corrected += finding.words_corrected
        self._flagged += finding.words_flagged
        self._sidecar_bits += finding.sidecar_bits
        self._sidecar_symbols += finding.sidecar_symbols
        self._sidecar_lost |= finding.sidecar_lost
        self.false_pins += finding.false_pins
        for (start, stop), which in finding.cells:
            self._bursts.add(finding.places[which], finding.bits[which], start, stop)
        if len(finding.places):
            owners = np.searchsorted(self._starts, finding.places, side="right") - 1
            np.add.at(self._bits, owners, finding.bits)
        for start, stop in finding.lost:
            self._add_lost(start, stop)
        state = Outcome.CORRECTABLE if finding.correctable else Outcome.UNCORRECTABLE
        self.blocks.append(
            BlockReport(
                finding.window, finding.block, state, bits, len(finding.places), finding.erased,
                finding.margin if finding.correctable else None,
            )  # fmt: skip
        )

    def _add_lost(self, start: int, stop: int) -> None:
        """Give a lost range of the stream to the members it touches."""
        at = max(0, bisect_right(self._starts, start) - 1)
        while at < len(self._files) and self._files[at].stream_start < stop:
            member = self._files[at]
            a = max(start, member.stream_start) - member.stream_start
            b = min(stop, member.stream_start + member.size) - member.stream_start
            if a < b and not member.right:
                ranges = self._lost.setdefault(at, [])
                if ranges and ranges[-1][1] == a:
                    ranges[-1] = (ranges[-1][0], b)
                else:
                    ranges.append((a, b))
            at += 1

    @property
    def totals(self) -> Totals:
        """The counts over the members' bytes. Call it when everything has been added."""
        self._bursts.finish()
        lost = sum(b.state is Outcome.UNCORRECTABLE for b in self.blocks)
        return Totals(
            bits_read=self._read, bits_flipped=self._bursts.burst + self._bursts.scattered,
            bits_flipped_scattered=self._bursts.scattered, bits_flipped_burst=self._bursts.burst,
            symbols_wrong=self._symbols, words_corrected=self._corrected, words_flagged=self._flagged,
            bytes_erased=self._erased, blocks=self._block_count, blocks_clean=self._block_count - len(self.blocks),
            blocks_correctable=len(self.blocks) - lost, blocks_uncorrectable=lost,
        )  # fmt: skip

    def lost_of(self, member: KnownMember) -> list[tuple[int, int]]:
        """Ranges (offset, end) of a member that could not be put right, in order."""
        at = int(np.searchsorted(self._starts, member.stream_start, side="right")) - 1
        if not member.size or at < 0 or self._files[at] is not member:
            return []
        return sorted(self._lost.get(at, ()))

    def bits_of(self, member: KnownMember) -> int:
        """Flipped bits of a member."""
        at = int(np.searchsorted(self._starts, member.stream_start, side="right")) - 1
        return int(self._bits[at]) if member.size and at >= 0 and self._files[at] is member else 0

    def members(self) -> list[MemberReport]:
        """One report a member, in the order of the table."""
        return [self._report(m) for m in self._opened.members.values()]

    def _report(self, member: KnownMember) -> MemberReport:
        lost = self.lost_of(member)
        bits: int | None = self.bits_of(member)
        detail = member.fault
        if lost or (member.piece.kind is Kind.FILE and not member.right and not member.checked):
            state, bits = MemberState.UNCORRECTABLE, None
        elif member.absent:
            state = MemberState.ABSENT
        elif member.right and not member.fault:
            state = MemberState.INTACT
        elif bits or member.fault or not member.right:
            state = MemberState.ALTERED
        if member.edited and state is not MemberState.INTACT and not member.absent:
            detail = (detail + "; " if detail else "") + "is newer than recorded: edited rather than decayed"
        return MemberReport(
            os.fsdecode(member.piece.path), member.size, state, bits, member.piece.kind.name.lower(), detail,
            member.edited and state is not MemberState.INTACT, tuple((a, b - a) for a, b in lost),
        )  # fmt: skip

    def sidecar(self, path: Path) -> SidecarReport:
        """The condition of the sidecar itself."""
        incomplete = not self._opened.sections[-1].bootstrap.last or len(self._opened.sections) <= (
            self._opened.sections[-1].bootstrap.window
        )
        details = []
        if self._sidecar_unreadable:
            details.append(f"{self._sidecar_unreadable:,} bytes of it could not be read")
        if incomplete:
            details.append("whole sections of it are lost")
        if self._sidecar_lost or incomplete:
            state = Outcome.UNCORRECTABLE
        elif self._sidecar_bits or self._sidecar_symbols or self._sidecar_unreadable:
            state = Outcome.CORRECTABLE
        else:
            state = Outcome.INTACT
        unknown = state is Outcome.UNCORRECTABLE
        return SidecarReport(
            path, state, None if unknown else self._sidecar_bits, None if unknown else self._sidecar_symbols,
            "; ".join(details),
        )  # fmt: skip
