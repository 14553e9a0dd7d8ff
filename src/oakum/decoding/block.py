"""The decoding of one block, step by step.

1. Symbols of right cells are fixed: never altered, never erased. What cannot be read is erased.
2. Inner decoding of the other cells; (2a) a cell whose digest now agrees is finished.
3. Outer decoding of the columns, with the erasures of one trial after the other.
4. A solved column pins its bytes; words are decoded again with what is pinned, and so on until nothing
   changes.
5. The digests decide; where a cell has none, the members' SHA-256 will.
"""

from __future__ import annotations

from collections.abc import Sequence

from oakum.decoding.bursts import burst_bytes
from oakum.decoding.cells import Cells
from oakum.decoding.columns import Columns
from oakum.decoding.source import RIGHT, UNKNOWN, WRONG, BlockOutcome, BlockSource, Bytes, Decoders
from oakum.decoding.trials import column_counts
from oakum.kernels.words import FLAGGED

__all__ = ["RIGHT", "UNKNOWN", "WRONG", "BlockOutcome", "BlockSource", "Decoders", "decode_block"]

ROUNDS = 200
"""More rounds of feedback than any block was ever seen to need; a bound, not a tuning."""


def decode_block(source: BlockSource, decoders: Decoders) -> BlockOutcome:
    """Decode one block as far as it goes. Never raises for damage; what is lost is not `finished`."""
    return decode_blocks(source, [source], decoders)[0]


def decode_blocks(
    joined: BlockSource, sources: Sequence[BlockSource], decoders: Decoders
) -> list[BlockOutcome]:
    """Decode blocks of the same width: the inner code at once, what is left then block by block.

    `joined` is all of them as if they were one block: it numbers the strips of its block i from i * n on.
    """
    cells = Cells(joined, decoders.words)
    cells.decode_words()
    blocks = cells.split(len(sources))
    return [_decode(source, block, decoders) for source, block in zip(sources, blocks, strict=True)]


def _decode(source: BlockSource, cells: Cells, decoders: Decoders) -> BlockOutcome:
    """Decode a block whose words have been decoded once."""
    first_value, first_status = cells.value, cells.status
    rounds = 0
    if not cells.finished.all():
        first_value, first_status = first_value.copy(), first_status.copy()
        rounds = _feedback(cells, Columns(source, decoders, cells), decoders)
    return _outcome(source.number, cells, first_value, first_status, rounds, decoders.code.inner.t)


def _feedback(cells: Cells, columns: Columns, decoders: Decoders) -> int:
    """Columns, words, columns ... until nothing changes (step 4). Returns the number of rounds."""
    for number in range(ROUNDS):
        if columns.erase_all():
            return number
        finished = int(cells.finished.sum())
        solved = columns.one_round()
        if not len(columns.open):
            cells.ask_digests()  # Every byte is known: most often nothing is left for the words to do.
        if not cells.finished.all() and (decoders.feedback or not len(columns.open)):
            cells.decode_words()
        if cells.finished.all():
            return number + 1
        if cells.contradicted().any() and columns.withdraw_wrong():
            continue
        if not decoders.feedback:
            return number + 1
        if not solved and int(cells.finished.sum()) == finished and not columns.reconsider():
            return number + 1
    return ROUNDS


def _outcome(
    number: int, cells: Cells, first_value: Bytes, first_status: Bytes, rounds: int, t: int
) -> BlockOutcome:
    """What became of the block (step 5); `first_...`: after the inner code alone."""
    complete = cells.pinned.all(axis=1)
    contradicted = complete & cells.digested & ~cells.finished
    known = cells.pinned
    known[contradicted] = False
    outcome = BlockOutcome(
        number, cells.strips, cells.raw, cells.value, cells.erased,
        known, cells.finished | (complete & ~cells.digested),
        int(((first_status > 0) & (first_status <= t)).sum()), int((first_status == FLAGGED).sum()),
        rounds=rounds, false_pins=cells.false_pins,
    )  # fmt: skip
    outcome.margin = _margin(cells, outcome, first_value)
    return outcome


def _margin(cells: Cells, outcome: BlockOutcome, first_value: Bytes) -> float:
    """1 - max over the columns of (2 wrong + erasures) / r, counted after the inner code."""
    bad = burst_bytes(cells.raw.shape, outcome.wrong.clusters)
    if cells.erased.any():
        bad |= cells.erased
    load = column_counts(bad)
    if first_value is not cells.value:
        wrong = first_value != cells.value
        load += 2 * column_counts(wrong & ~bad if load.any() else wrong)
    return 1.0 - float(load.max(initial=0)) / cells.g.r
