"""The cells of a block that were not right: their words, their digests, and what is known of their bytes."""

from __future__ import annotations

import numpy as np
import xxhash

from oakum.decoding.source import RIGHT, BlockSource, Bytes, Mask, Strips
from oakum.decoding.trials import DENSE, UNUSABLE, dense_words
from oakum.kernels.words import FLAGGED, WordCodec


class Cells:
    """One row for each strip whose cell was not right at the start; arrays are [R, width] of bytes.

    `raw` is what was received, `value` what the bytes are taken to be now, `pinned` which of them are known
    to be right, `given` which were so from the start. `status` is that of the words, [R, words], and
    `finished` marks the rows that are done with.
    """

    def __init__(self, source: BlockSource, words: WordCodec) -> None:
        g = source.geometry
        self.g = g
        self.words = words
        self.width = g.width(source.number)
        self.strips = np.flatnonzero(source.states != RIGHT)
        self.raw, erased = source.rows(self.strips)
        self.erased = np.zeros(self.raw.shape, bool) if erased is None else erased
        self.parity, unreadable = source.inner(self.strips)
        self.unusable = self._words_with(unreadable)
        self.digests, self.digested = source.digests(self.strips)
        self.staggers = np.array([g.stagger(int(s)) for s in self.strips], np.int64)
        given = source.pinned(self.strips)
        self.given = np.zeros(self.raw.shape, bool) if given is None else given
        self.pinned = self.given.copy()
        self.value = self.raw.copy()
        self.finished = np.zeros(len(self.strips), bool)
        self.status = np.zeros((len(self.strips), words.words(self.width)), np.uint8)
        self.heed_density = True
        self.false_pins = 0

    def _words_with(self, mask: Mask | None) -> Mask | None:
        """Which words have a byte of inner parity in `mask`."""
        if mask is None or not self.g.p:
            return None
        return np.asarray(mask.reshape(len(mask), -1, self.g.p).any(axis=2))

    def decode_words(self) -> None:
        """Decode the words of all unfinished rows from the raw bits and what is pinned; ask the digests."""
        rows = np.flatnonzero(~self.finished)
        kept = np.where(self.pinned[rows], self.value[rows], self.raw[rows])
        cells = kept
        if self.g.p:
            cells = kept.copy()
            status = np.empty((len(rows), self.status.shape[1]), np.uint8)
            pins = self.pinned[rows].view(np.uint8)
            self.words.correct(cells, self.parity[rows], self.staggers[rows], status, pinned=pins)
            if self.heed_density:
                status[dense_words(status)] = DENSE
            if self.unusable is not None:
                status[self.unusable[rows]] = UNUSABLE
            if self.erased.any():  # What stands for an unreadable byte was never received.
                status[self._words_holding(self.erased[rows] & ~self.pinned[rows], rows)] = UNUSABLE
            self.status[rows] = status
            back = (status == DENSE) | (status == UNUSABLE)
            if back.any():
                # A digest may still agree with the corrected cell, and then the verdict was wrong.
                self._ask_digests(rows, cells)
                cells = np.where(self.spread(back.view(np.uint8), rows) != 0, kept, cells)
        self._ask_digests(rows, cells)
        open_rows = ~self.finished[rows]
        self.value[rows[open_rows]] = cells[open_rows]

    def _words_holding(self, chosen: Mask, rows: Strips) -> Mask:
        """Which words, bool[R, words], hold a byte of `chosen`, bool[R, width]; the inverse of `spread`."""
        m, words = self.g.m, self.status.shape[1]
        held = np.zeros((len(rows), words), bool)
        for stagger in np.unique(self.staggers[rows]):
            here = self.staggers[rows] == stagger
            turned = np.zeros((int(here.sum()), words * m), bool)
            turned[:, : self.width] = np.roll(chosen[here], -int(stagger), axis=1)
            held[here] = turned.reshape(-1, words, m).any(axis=2)
        return held

    def spread(self, of_words: Bytes, rows: Strips | slice = slice(None)) -> Bytes:
        """A value for each word as one for each byte."""
        return self.words.spread(of_words, self.staggers[rows], self.width)

    def ask_digests(self) -> None:
        """Ask the digests of all unfinished rows about the bytes as they are taken to be now."""
        rows = np.flatnonzero(~self.finished)
        self._ask_digests(rows, self.value[rows])

    def _ask_digests(self, rows: Strips, cells: Bytes) -> None:
        """Finish the rows whose cells agree with their digest."""
        for row, cell in zip(rows.tolist(), cells, strict=True):
            if self.digested[row] and not self.finished[row] and self.agrees(row, cell):
                self.finish(row, cell)

    def agrees(self, row: int, cell: Bytes) -> bool:
        return bool(xxhash.xxh3_64_intdigest(cell.data) == self.digests[row])

    def finish(self, row: int, cell: Bytes) -> None:
        """A cell is right: all its symbols are fixed from now on."""
        self.false_pins += int(np.count_nonzero(self.pinned[row] & (self.value[row] != cell)))
        self.value[row] = cell
        self.pinned[row] = True
        self.finished[row] = True

    def contradicted(self) -> Mask:
        """Which rows are known in full and disagree with their digest, bool[R]."""
        return self.digested & ~self.finished & self.pinned.all(axis=1)

    def release(self, places: Strips) -> None:
        """Columns whose solutions are taken back: their bytes are known no longer."""
        rows = np.flatnonzero(~self.finished)
        self.pinned[np.ix_(rows, places)] = self.given[np.ix_(rows, places)]
        self.decode_words()

    def flip_rate(self) -> float:
        """The rate of scattered flips, by the share of words without any among those outside bursts."""
        words = self.status[(self.status < UNUSABLE) | (self.status == FLAGGED)]
        clean = (np.count_nonzero(words == 0) or 1) / (len(words) or 1)
        return float(1 - clean ** (1 / max(self.words.inner.n, 8)))
