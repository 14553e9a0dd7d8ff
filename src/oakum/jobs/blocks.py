"""Decoding the dirty blocks of a window, and what is kept of the outcome."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import xxhash

from oakum.decoding.block import BlockOutcome, Decoders, decode_blocks
from oakum.geometry import CELL, Geometry
from oakum.jobs.checking import RIGHT, Bytes, Finding, Sink, WindowCheck
from oakum.jobs.groups import GroupReader, Received, Records


def examine(
    records: Records, decoders: Decoders, blocks: list[int], *,
    keep: bool = False, sink: Sink | None = None, evidence: bool = False,
) -> list[Finding]:  # fmt: skip
    """The work unit: decode neighbouring blocks, and reduce what comes out to counts and places.

    With `keep` the corrected bytes come along. A `sink` is given them instead, and of dense groups all bytes.
    With `evidence` the cells that are not right come along as an audit wants them.
    """
    reader = GroupReader(records, blocks)
    correcting = keep or sink is not None
    findings = [
        _examine(block, outcome, decoders, correcting, evidence)
        for block, outcome in _decode_group(reader, decoders, blocks)
    ]
    if sink is not None and records.window.is_dense(blocks):
        for start, data in reader.all_bytes():
            sink(start, data)
    elif correcting:
        for finding, start, data in reader.pieces(findings):
            if sink is not None:
                sink(start, data)
            else:
                finding.corrected.append((start, data))
    if not keep:
        reader.give_back()
    return findings


def _decode_group(
    reader: GroupReader, decoders: Decoders, blocks: list[int]
) -> Iterator[tuple[Received, BlockOutcome]]:
    """Decode as many blocks at once as have about as many cells that are not right as one block has strips.

    A last block that is narrower is decoded alone. More at once would not stay in the CPU's cache.
    """
    g = reader.window.g
    batch: list[Received] = []
    count = 0
    for block in (Received(reader, [number]) for number in blocks):
        cells = int(np.count_nonzero(block.states))
        if batch and (count + cells > g.n or g.width(block.number) < g.width(batch[0].number)):
            yield from _decode_batch(reader, decoders, batch)
            batch, count = [], 0
        batch.append(block)
        count += cells
    yield from _decode_batch(reader, decoders, batch)


def _decode_batch(
    reader: GroupReader, decoders: Decoders, batch: list[Received]
) -> Iterator[tuple[Received, BlockOutcome]]:
    joined = Received(reader, [block.number for block in batch]) if len(batch) > 1 else batch[0]
    return zip(batch, decode_blocks(joined, batch, decoders), strict=True)


def _examine(
    block: Received, outcome: BlockOutcome, decoders: Decoders, keep: bool, evidence: bool
) -> Finding:
    window = block.reader.window
    finding = _data_finding(window, outcome)
    _add_parity_strips(window.g, outcome, finding)
    _add_inner_parity(window, block, outcome, decoders, finding)
    if evidence:
        _add_evidence(window, outcome, finding)
    if keep:
        _keep_corrected(block.reader, outcome)
    return finding


def _data_finding(window: WindowCheck, outcome: BlockOutcome) -> Finding:
    g = window.g
    rows = int(np.searchsorted(outcome.strips, g.k))  # Strips of data come first.
    starts = window.start + outcome.strips[:rows] * g.depth + outcome.number * CELL
    stops = np.minimum(starts + g.width(outcome.number), window.start + g.length)
    wrong = outcome.wrong.at(starts)
    lost = np.flatnonzero(~outcome.finished[:rows])
    return Finding(
        window.section.bootstrap.window, outcome.number, outcome.correctable,
        wrong.places, wrong.bits, wrong.clusters, starts, stops,
        list(zip(starts[lost].tolist(), stops[lost].tolist(), strict=True)),
        int(np.count_nonzero(outcome.erased[:rows])),
        outcome.words_corrected, outcome.words_flagged, outcome.margin, 0, 0, False, outcome.rounds,
        outcome.false_pins,
    )  # fmt: skip


def _keep_corrected(reader: GroupReader, outcome: BlockOutcome) -> None:
    """Put the cells that are to be written back where they were read from."""
    altered = outcome.erased.any(axis=1) | (outcome.wrong.counts(len(outcome.strips)) > 0)
    altered &= outcome.strips < reader.window.g.k
    best = outcome.right if outcome.known.all() else _best(outcome)
    reader.put(outcome.strips[altered], outcome.number, best if altered.all() else best[altered])


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
    rows = slice(int(np.searchsorted(outcome.strips, g.k)), None)
    flips = outcome.flips[rows]
    finding.sidecar_bits += int(np.bitwise_count(flips).sum())
    finding.sidecar_symbols += int(np.count_nonzero(flips))
    finding.sidecar_lost |= not outcome.finished[rows].all()


def _add_inner_parity(
    window: WindowCheck, block: Received, outcome: BlockOutcome, decoders: Decoders, finding: Finding
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
