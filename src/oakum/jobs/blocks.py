"""Decoding the dirty blocks of a window: what the decoder is given, and what is kept of its outcome."""

from __future__ import annotations

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.decoding.block import BlockOutcome, Decoders, decode_block
from oakum.geometry import CELL, Geometry
from oakum.jobs.checking import RIGHT, Bytes, Finding, Mask, Range, WindowCheck

Strips = NDArray[np.intp]


class GroupReader:
    """Reads the strips of a group of neighbouring blocks, each strip once and only when it is asked for."""

    def __init__(self, window: WindowCheck, blocks: list[int]) -> None:
        self.window = window
        self._first = blocks[0] * CELL
        self._length = blocks[-1] * CELL + window.g.width(blocks[-1]) - self._first
        self._blocks = blocks
        self._strips: dict[int, tuple[Bytes, list[Range]]] = {}
        self._inner: dict[int, tuple[Bytes, list[Range]]] = {}

    def strip(self, strip: int) -> tuple[Bytes, list[Range]]:
        """A strip's bytes over all blocks of the group, and what could not be read."""
        if strip not in self._strips:
            g = self.window.g
            start = self._first
            if strip < g.k:
                data = np.empty(self._length, np.uint8)
                faults = self.window.stream.read_into(strip * g.depth + start, data.data)
            else:
                data, faults = self.window.section.body((strip - g.k) * g.depth + start, self._length)
            self._strips[strip] = data, faults
        return self._strips[strip]

    def inner(self, strip: int, block: int) -> tuple[Bytes, list[Range]]:
        """The inner parity of one cell, and what of it could not be read.

        That of a data strip lies together for all blocks of the group, that of a block's parity strips too.
        """
        g = self.window.g
        if strip < g.k:
            key, start = strip, g.inner_start(strip, self._blocks[0])
            stop = g.inner_start(strip, self._blocks[-1]) + g.group(self._blocks[-1])
            offset = g.inner_start(strip, block) - start
        else:
            key, start = -1 - block, g.data_inner + g.parity_inner_start(0, block)
            stop = start + g.r * g.group(block)
            offset = (strip - g.k) * g.group(block)
        if key not in self._inner:
            self._inner[key] = self.window.section.body(g.parity_bytes + start, stop - start)
        data, faults = self._inner[key]
        size = g.group(block)
        here = [(max(a - offset, 0), min(b - offset, size)) for a, b in faults]
        return data[offset : offset + size], [(a, b) for a, b in here if a < b]

    def block(self, number: int) -> _Received:
        """One block of the group."""
        return _Received(self, number, number * CELL - self._first)


class _Received:
    """One block as the decoder asks for it (see `BlockSource`)."""

    def __init__(self, reader: GroupReader, number: int, offset: int) -> None:
        self._reader = reader
        self._window = reader.window
        self._offset = offset
        self.geometry: Geometry = reader.window.g
        self.number = number
        self.states = reader.window.states(number)

    def rows(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        width = self.geometry.width(self.number)
        out = np.empty((len(strips), width), np.uint8)
        lost: Mask | None = None
        for row, strip in enumerate(strips.tolist()):
            data, faults = self._reader.strip(strip)
            out[row] = data[self._offset : self._offset + width]
            for start, stop in faults:
                a, b = max(start - self._offset, 0), min(stop - self._offset, width)
                if a < b:
                    lost = np.zeros(out.shape, bool) if lost is None else lost
                    lost[row, a:b] = True
        return out, lost

    def inner(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        g, b = self.geometry, self.number
        out = np.zeros((len(strips), g.group(b)), np.uint8)
        if not g.p:
            return out, None
        lost: Mask | None = None
        for row, strip in enumerate(strips.tolist()):
            if strip < g.k and g.cell_number(strip, b) >= g.data_cells:
                continue  # A virtual cell: zeros, and so is its inner parity.
            out[row], faults = self._reader.inner(strip, b)
            for start, stop in faults:
                lost = np.zeros(out.shape, bool) if lost is None else lost
                lost[row, start:stop] = True
        return out, lost

    def digests(self, strips: Strips) -> tuple[NDArray[np.uint64], Mask]:
        return self._window.digests_of(self.number, strips)

    def pinned(self, strips: Strips) -> Mask | None:
        return self._window.pinned(self.number, strips)


def examine(
    window: WindowCheck, block: _Received, decoders: Decoders, *, keep: bool, evidence: bool = False
) -> Finding:
    """Decode a block and reduce the outcome to counts, places and, with `keep`, corrected bytes.

    With `evidence` the cells that are not right come along as an audit wants them.
    """
    outcome = decode_block(block, decoders)
    finding = _data_finding(window, outcome, keep=keep)
    _add_parity_strips(window.g, outcome, finding)
    _add_inner_parity(window, block, outcome, decoders, finding)
    if evidence:
        _add_evidence(window, outcome, finding)
    return finding


def _data_finding(window: WindowCheck, outcome: BlockOutcome, *, keep: bool) -> Finding:
    g = window.g
    rows = np.flatnonzero(outcome.strips < g.k)
    finding = Finding(
        window.section.bootstrap.window, outcome.number, outcome.correctable,
        np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0, np.int64), [],
        int(outcome.erased[rows].sum()),
        outcome.words_corrected, outcome.words_flagged, outcome.margin, 0, 0, False, outcome.rounds,
        outcome.false_pins,
    )  # fmt: skip
    starts = window.start + outcome.strips[rows] * g.depth + outcome.number * CELL
    stops = np.minimum(starts + g.width(outcome.number), window.start + g.length)
    wrong_rows, columns = outcome.wrong
    inside = np.searchsorted(wrong_rows, len(rows))  # Strips of data come first.
    wrong_rows, columns = wrong_rows[:inside], columns[:inside]
    finding.places = starts[wrong_rows] + columns
    finding.bits = np.bitwise_count(outcome.flips[wrong_rows, columns]).astype(np.int64)
    finding.starts, finding.stops = starts, stops
    lost = np.flatnonzero(~outcome.finished[rows])
    finding.lost = list(zip(starts[lost].tolist(), stops[lost].tolist(), strict=True))
    if keep:
        altered = np.zeros(len(rows), bool)
        altered[wrong_rows] = True
        altered |= outcome.erased[rows].any(axis=1)
        best = outcome.right if outcome.known.all() else _best(outcome)
        for i in np.flatnonzero(altered).tolist():
            finding.corrected.append((int(starts[i]), best[i, : stops[i] - starts[i]]))
    return finding


def _add_evidence(window: WindowCheck, outcome: BlockOutcome, finding: Finding) -> None:
    """What an audit wants to see of cells of data: both versions, and whether a second reading differed."""
    g = window.g
    for row in np.flatnonzero(outcome.strips < g.k).tolist():
        strip, erased = int(outcome.strips[row]), outcome.erased[row]
        start = window.start + strip * g.depth + outcome.number * CELL
        length = min(g.width(outcome.number), window.start + g.length - start)
        received, right = outcome.received[row], outcome.right[row]
        seen = window.seen.get(g.cell_number(strip, outcome.number))
        if seen is not None and not erased.any() and seen != xxhash.xxh3_64_intdigest(received.data):
            finding.unsteady += 1
        if outcome.finished[row]:
            received = np.where(erased, right, received)
            if (received != right).any():
                finding.evidence.append((start, received[:length], right[:length]))
        elif not erased.any():
            finding.evidence.append((start, received[:length], None))


def _best(outcome: BlockOutcome) -> Bytes:
    """The cells as far as they are known: corrected where that is sure, as received elsewhere."""
    return np.asarray(np.where(outcome.known, outcome.right, outcome.received))


def _add_parity_strips(g: Geometry, outcome: BlockOutcome, finding: Finding) -> None:
    rows = np.flatnonzero(outcome.strips >= g.k)
    flips = outcome.flips[rows]
    finding.sidecar_bits += int(np.bitwise_count(flips).sum())
    finding.sidecar_symbols += int(np.count_nonzero(flips))
    finding.sidecar_lost |= not outcome.finished[rows].all()


def _add_inner_parity(
    window: WindowCheck, block: _Received, outcome: BlockOutcome, decoders: Decoders, finding: Finding
) -> None:
    """Hold inner parity that its digests do not vouch for against that of the cells as they now are."""
    g = window.g
    suspects = np.array(sorted(window.inner_suspects.get(outcome.number, ())), np.intp)
    if not len(suspects) or not g.p:
        return
    cells, lost = block.rows(suspects)
    rows_of = {int(strip): row for row, strip in enumerate(outcome.strips)}
    sure = np.ones(len(suspects), bool)
    if lost is not None:
        sure[lost.any(axis=1)] = False
    for i, strip in enumerate(suspects.tolist()):
        if block.states[strip] != RIGHT:
            cells[i], sure[i] = outcome.right[rows_of[strip]], outcome.finished[rows_of[strip]]
    right = np.empty((len(suspects), g.group(outcome.number)), np.uint8)
    decoders.words.parity_rows(cells, suspects % g.m, right, cell=cells.shape[1])
    received, unreadable = block.inner(suspects)
    virtual = (suspects < g.k) & (suspects * g.blocks + outcome.number >= g.data_cells)
    difference = received ^ right
    difference[~sure | virtual] = 0
    if unreadable is not None:
        difference[unreadable] = 0
    finding.sidecar_bits += int(np.bitwise_count(difference).sum())
    finding.sidecar_symbols += int(np.count_nonzero(difference))
    finding.sidecar_lost |= not sure.all()
