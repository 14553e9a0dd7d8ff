"""The cells of a block that were not right: their words, their digests, and what is known of their bytes."""

from __future__ import annotations

from collections.abc import Iterator
from copy import copy
from itertools import pairwise

import numpy as np

from oakum.algebra.inner import InnerCode
from oakum.decoding.source import RIGHT, BlockSource, Bytes, Mask, Strips
from oakum.decoding.trials import DENSE, UNUSABLE, dense_words, has_unclean_run
from oakum.digests import cell_digests
from oakum.kernels.words import FLAGGED, WordCodec


class Cells:
    """One row for each cell that was not right at the start; arrays are [R, width] of bytes.

    They may be those of several blocks, one after the other (see `decode_blocks`), until these are `split`.

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
        self.staggers = self.strips % g.n % g.m if g.p else np.zeros_like(self.strips)
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
        cells = kept = self.kept(rows)
        if self.g.p:
            cells = kept.copy()
            status = np.empty((len(rows), self.status.shape[1]), np.uint8)
            pins = self.pinned[rows].view(np.uint8)
            self.words.correct(cells, self.parity[rows], self.staggers[rows], status, pinned=pins)
            if self.heed_density and has_unclean_run(status):
                for block in self._blocks(rows):
                    status[block][dense_words(status[block])] = DENSE
            if self.unusable is not None:
                status[self.unusable[rows]] = UNUSABLE
            if self.erased.any():  # What stands for an unreadable byte was never received.
                status[self._words_holding(self.erased[rows] & ~self.pinned[rows], rows)] = UNUSABLE
            self.status[rows] = status
            back = (status == DENSE) | (status == UNUSABLE)
            if back.any():
                # A digest may still agree with the corrected cell, and then the verdict was wrong.
                wrong = np.flatnonzero(~self.agree(rows, cells))
                stays = self.spread(back[wrong].view(np.uint8), rows[wrong])
                cells[wrong] = chosen(stays != 0, kept[wrong], cells[wrong])
        self.value[rows] = cells
        self._finish(rows[self.agree(rows, cells)])

    def _blocks(self, rows: Strips) -> Iterator[slice]:
        """Which of some rows belong to each block."""
        bounds = np.flatnonzero(np.diff(self.strips[rows] // self.g.n, prepend=-1, append=-1)).tolist()
        return (slice(begin, end) for begin, end in pairwise(bounds))

    def split(self, blocks: int) -> list[Cells]:
        """The cells of each block on their own, in arrays that are parts of these."""
        parts = []
        bounds = np.searchsorted(self.strips, self.g.n * np.arange(blocks + 1)).tolist()
        for number, (begin, end) in enumerate(pairwise(bounds)):
            part = copy(self)
            for name, array in vars(self).items():
                if isinstance(array, np.ndarray):
                    setattr(part, name, array[begin:end])
            part.strips = part.strips - number * self.g.n
            parts.append(part)
        return parts

    def kept(self, rows: Strips) -> Bytes:
        """Some rows as they were received, with what is pinned put in."""
        pinned = self.pinned[rows]
        return chosen(pinned, self.value[rows], self.raw[rows]) if pinned.any() else self.raw[rows]

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
        self._finish(rows[self.agree(rows, self.value[rows])])

    def agree(self, rows: Strips, cells: Bytes) -> Mask:
        """Which of the cells agree with the digests of their rows, bool[len(rows)]; none without a digest."""
        found = cell_digests(cells.reshape(-1), self.width)
        return np.asarray(self.digested[rows] & (found == self.digests[rows]))

    def replace(self, rows: Strips, cells: Bytes) -> None:
        """These are the cells of some rows, whatever had been taken for known of them."""
        self.false_pins += int(np.count_nonzero(self.pinned[rows] & (self.value[rows] != cells)))
        self.value[rows] = cells
        self._finish(rows)

    def _finish(self, rows: Strips) -> None:
        """Cells are right: all their symbols are fixed from now on."""
        self.pinned[rows] = True
        self.finished[rows] = True

    def contradicted(self) -> Mask:
        """Which rows are known in full and disagree with their digest, bool[R]."""
        return self.digested & ~self.finished & self.pinned.all(axis=1)

    def release(self, places: Strips) -> None:
        """Columns whose solutions are taken back: their bytes are known no longer."""
        rows = np.flatnonzero(~self.finished)
        self.pinned[np.ix_(rows, places)] = self.given[np.ix_(rows, places)]
        self.decode_words()


def flip_rate(status: Bytes, inner: InnerCode) -> float:
    """The rate of scattered flips, by the share of words without any among those outside bursts."""
    words = status[(status < UNUSABLE) | (status == FLAGGED)]
    clean = (np.count_nonzero(words == 0) or 1) / (len(words) or 1)
    return float(1 - clean ** (1 / max(inner.n, 8)))


def chosen(mask: Mask, where: Bytes, elsewhere: Bytes) -> Bytes:
    """Bytes of `where` where the mask is set, of the other array elsewhere: `numpy.where`, vectorised."""
    return np.asarray(elsewhere ^ ((elsewhere ^ where) & np.negative(mask.view(np.uint8))))
