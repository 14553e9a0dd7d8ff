"""Adding up what the windows and blocks of a set gave, to the result that is reported."""

from __future__ import annotations

import os
from functools import cached_property
from pathlib import Path

import numpy as np

from oakum.decoding.bursts import BurstCounter
from oakum.jobs.checking import Finding, WindowCheck
from oakum.jobs.opening import KnownMember, ProtectedSet
from oakum.results import BlockReport, MemberReport, MemberState, Outcome, SidecarReport, Totals
from oakum.sidecar.table import Kind

_KINDS = {kind: kind.name.lower() for kind in Kind}


class Tally:
    """Counts over the whole set. Findings may come in any order within a window."""

    def __init__(self, opened: ProtectedSet) -> None:
        self._opened = opened
        self._starts = np.array([m.stream_start for m in opened.files], np.int64)
        self._bits = np.zeros(len(opened.files), np.int64)
        self._lost: dict[bytes, list[tuple[int, int]]] = {}
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
        nbytes, blocks = window.extent
        self._read += 8 * (nbytes - erased)
        self._block_count += blocks
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
        self._bursts.add(finding.clusters, finding.starts, finding.stops)
        self._add_bits(finding)
        for start, stop in finding.lost:
            self._add_lost(start, stop)
        if not (len(finding.places) or finding.erased or finding.sidecar_bits) and finding.correctable:
            return  # A digest was lost and the bytes that it spoke for are right.
        state = Outcome.CORRECTABLE if finding.correctable else Outcome.UNCORRECTABLE
        self.blocks.append(
            BlockReport(
                finding.window,
                finding.block,
                state,
                bits if finding.correctable else None,
                len(finding.places) if finding.correctable else None,
                finding.erased,
                finding.margin if finding.correctable else None,
            )
        )

    def _add_bits(self, finding: Finding) -> None:
        """Give flipped bits to the members that hold them."""
        if len(self._starts) == 1:
            self._bits[0] += finding.bits.sum(dtype=np.int64)
        else:
            owners = np.searchsorted(self._starts, finding.places, side="right") - 1
            np.add.at(self._bits, owners, finding.bits)

    @property
    def burst_lengths(self) -> list[int]:
        """Lengths in bytes of all bursts, in ascending order. Call it when everything has been added."""
        self._bursts.finish()
        return sorted(self._bursts.lengths.tolist())

    def _add_lost(self, start: int, stop: int) -> None:
        """Give a lost range of the stream to the members it touches."""
        for member in self._opened.members_at(start, stop - start):
            a = max(start, member.stream_start) - member.stream_start
            b = min(stop, member.stream_start + member.size) - member.stream_start
            if a < b and not member.right:
                self._lost.setdefault(member.piece.path, []).append((a, b))

    @property
    def totals(self) -> Totals:
        """The counts over the members' bytes. Call it when everything has been added."""
        self._bursts.finish()
        lost = sum(b.state is Outcome.UNCORRECTABLE for b in self.blocks)
        return Totals(
            bits_read=self._read, bits_flipped=self._bursts.burst + self._bursts.scattered,
            bits_flipped_scattered=self._bursts.scattered, bits_flipped_burst=self._bursts.burst,
            symbols_wrong=self._symbols, words_corrected=self._corrected, words_flagged=self._flagged,
            bytes_erased=self._erased, blocks=self._block_count,
            blocks_clean=self._block_count - len(self.blocks),
            blocks_correctable=len(self.blocks) - lost, blocks_uncorrectable=lost,
        )  # fmt: skip

    def lost_of(self, member: KnownMember) -> list[tuple[int, int]]:
        """Ranges (offset, end) of a member that could not be put right, in order, joined where they touch."""
        joined: list[tuple[int, int]] = []
        for a, b in sorted(self._lost.get(member.piece.path, ())):
            if joined and joined[-1][1] == a:
                joined[-1] = (joined[-1][0], b)
            else:
                joined.append((a, b))
        return joined

    @cached_property
    def _flipped(self) -> dict[bytes, int]:
        """Flipped bits of the members that have any, when everything has been added."""
        files = self._opened.files
        return {files[i].piece.path: int(self._bits[i]) for i in np.flatnonzero(self._bits).tolist()}

    def members(self) -> list[MemberReport]:
        """One report a member, in the order of the table."""
        flipped, lost, decode, intact = self._flipped, self._lost, os.fsdecode, MemberState.INTACT
        return [
            # Nearly all members of a large set are so, and need no closer look.
            MemberReport(decode(m.piece.path), m.size, intact, 0, _KINDS[m.piece.kind])
            if m.right and not m.fault and m.piece.path not in flipped and m.piece.path not in lost
            else self._report(m)
            for m in self._opened.members.values()
        ]

    def _report(self, member: KnownMember) -> MemberReport:
        lost = self.lost_of(member)
        bits: int | None = self._flipped.get(member.piece.path, 0)
        detail = member.fault
        if lost or (member.piece.kind is Kind.FILE and not member.right and not member.checked):
            state, bits = MemberState.UNCORRECTABLE, None
        elif member.absent:
            state = MemberState.ABSENT
        elif (member.right or member.presumed) and not (member.fault or bits):
            state = MemberState.INTACT
        else:
            state = MemberState.ALTERED
        if member.edited and state is not MemberState.INTACT and not member.absent:
            detail = (detail + "; " if detail else "") + "is newer than recorded: edited rather than decayed"
        return MemberReport(
            os.fsdecode(member.piece.path), member.size, state, bits, _KINDS[member.piece.kind], detail,
            member.edited and state is not MemberState.INTACT, tuple((a, b - a) for a, b in lost),
        )  # fmt: skip

    def _foreign_bytes(self) -> int:
        """Bytes before the first section and after the last one that no writer put there."""
        first, last = self._opened.sections[0], self._opened.sections[-1]
        before = max(0, first.base - first.bootstrap.section_offset)
        after = max(0, self._opened.source.size - last.end) if last.bootstrap.last else 0
        return before + after

    def sidecar(self, path: Path, *, members_correctable: bool) -> SidecarReport:
        """The condition of the sidecar itself.

        When every member can be had, so can all of the sidecar whose sections are there: it is written anew.
        """
        incomplete = self._opened.incomplete
        unknown = bool(incomplete or self._sidecar_lost or self._opened.recovered)
        details = []
        if self._sidecar_unreadable:
            details.append(f"{self._sidecar_unreadable:,} bytes of it could not be read")
        if incomplete or self._opened.recovered:
            details.append("whole sections of it are lost")
        foreign = self._foreign_bytes()
        if foreign:
            details.append(f"{foreign:,} bytes that are not its own stand before or after it")
        damaged = bool(
            self._sidecar_bits or self._sidecar_symbols or self._sidecar_unreadable or unknown or foreign
        )
        if incomplete or (self._sidecar_lost and not members_correctable):
            state = Outcome.UNCORRECTABLE
        else:
            state = Outcome.CORRECTABLE if damaged else Outcome.INTACT
        return SidecarReport(
            path, state, None if unknown else self._sidecar_bits, None if unknown else self._sidecar_symbols,
            "; ".join(details),
        )  # fmt: skip
