"""The decoding of one block, step by step (the numbers are those of the design).

1. Symbols of right cells are fixed: never altered, never erased. What cannot be read is erased.
2. Inner decoding of the other cells; (2a) a cell whose digest now agrees is finished.
3. Outer decoding of the columns, with the erasures of one trial after the other.
4. A solved column pins its bytes; words are decoded again with what is pinned, and so on until nothing
   changes.
5. The digests decide; where a cell has none, the members' SHA-256 will.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.decoding.bursts import cluster
from oakum.decoding.trials import (
    BELIEVED,
    DENSE,
    UNUSABLE,
    USABLE,
    Mask,
    Reliability,
    chance_of_acceptance,
    dense_words,
    erasure_trials,
    generalised_distance,
    neighbouring_rows,
)
from oakum.geometry import Geometry
from oakum.kernels.columns import ColumnDecoder
from oakum.kernels.words import FLAGGED, WordCodec

Bytes = NDArray[np.uint8]
Strips = NDArray[np.intp]

RIGHT, WRONG, UNKNOWN = 0, 1, 2
"""What the digest says of a cell: it agrees, it does not, or there is none to ask."""

ROUNDS = 60
"""More rounds of feedback than any block was ever seen to need; a bound, not a tuning."""


class BlockSource(Protocol):
    """Where the decoder gets what was received of one block. All arrays have one row a strip asked for."""

    geometry: Geometry
    number: int
    states: NDArray[np.uint8]
    """uint8[n]: RIGHT, WRONG or UNKNOWN for the cell of each strip."""

    def rows(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        """uint8[R, width] as received, and where it could not be read (None: nowhere)."""

    def inner(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        """uint8[R, group] inner parity as received, and where it could not be read."""

    def digests(self, strips: Strips) -> tuple[NDArray[np.uint64], Mask]:
        """Digests of the cells and whether they are known."""

    def pinned(self, strips: Strips) -> Mask | None:
        """Bytes known to be right in cells that are not (they belong to members whose SHA-256 agrees)."""


@dataclass(frozen=True)
class Decoders:
    """The compiled decoders of one code. `feedback` and `later_trials` can be switched off to measure."""

    code: ConcatenatedCode
    words: WordCodec
    columns: ColumnDecoder
    feedback: bool = True
    later_trials: bool = True

    @staticmethod
    def of(code: ConcatenatedCode) -> Decoders:
        """Prepare the decoders of a code."""
        return Decoders(code, WordCodec(code.inner), ColumnDecoder(code.outer))


@dataclass
class BlockOutcome:
    """What became of a block: one row for each strip whose cell was not right.

    `known` marks the bytes that the decoder vouches for; `finished` the cells whose digest agrees or,
    where there is none, all of whose bytes are known. `margin` is that of the words of the design.
    """

    number: int
    strips: Strips
    received: Bytes
    right: Bytes
    erased: Mask
    known: Mask
    finished: Mask
    words_corrected: int = 0
    words_flagged: int = 0
    margin: float = 1.0
    rounds: int = 0
    false_pins: int = 0

    @property
    def correctable(self) -> bool:
        """Whether nothing of the block is lost."""
        return bool(self.finished.all())

    def flips(self) -> Bytes:
        """uint8[R, width]: received XOR right where both are known, zero elsewhere."""
        return np.where(self.known & ~self.erased, self.received ^ self.right, np.uint8(0))


def decode_block(source: BlockSource, decoders: Decoders) -> BlockOutcome:
    """Decode one block as far as it goes. Never raises for damage; what is lost is not `finished`."""
    return _Block(source, decoders).run()


class _Block:
    """The state of one block while it is decoded. Rows are the strips that were not right at the start."""

    def __init__(self, source: BlockSource, decoders: Decoders) -> None:
        g = source.geometry
        self.source = source
        self.d = decoders
        self.g = g
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
        self.status = np.zeros((len(self.strips), self.d.words.words(self.width)), np.uint8)
        self.false_pins = 0

    def run(self) -> BlockOutcome:
        self._decode_words()
        first_value, first_status = self.value.copy(), self.status.copy()
        rounds = 0
        if not self.finished.all():
            self._gather_columns()
            if not self._erase_all():
                rounds = self._feedback()
        return self._outcome(first_value, first_status, rounds)

    # -- step 2: words and digests -----------------------------------------------------------------

    def _words_with(self, mask: Mask | None) -> Mask | None:
        """Which words have a byte of inner parity in `mask`."""
        if mask is None or not self.g.p:
            return None
        return np.asarray(mask.reshape(len(mask), -1, self.g.p).any(axis=2))

    def _decode_words(self) -> None:
        """Decode the words of all unfinished rows from the raw bits and what is pinned; ask the digests."""
        rows = np.flatnonzero(~self.finished)
        kept = np.where(self.pinned[rows], self.value[rows], self.raw[rows])
        cells = kept
        if self.g.p:
            cells = kept.copy()
            status = np.empty((len(rows), self.status.shape[1]), np.uint8)
            pins = self.pinned[rows].view(np.uint8)
            self.d.words.correct(cells, self.parity[rows], self.staggers[rows], status, pinned=pins)
            status[dense_words(status)] = DENSE
            if self.unusable is not None:
                status[self.unusable[rows]] = UNUSABLE
            self.status[rows] = status
            back = (status == DENSE) | (status == UNUSABLE)
            if back.any():
                # A digest may still agree with the corrected cell, and then the verdict was wrong.
                self._ask_digests(rows, cells)
                cells = np.where(self._spread(back.view(np.uint8), rows) != 0, kept, cells)
        self._ask_digests(rows, cells)
        open_rows = ~self.finished[rows]
        self.value[rows[open_rows]] = cells[open_rows]

    def _spread(self, of_words: Bytes, rows: Strips | slice = slice(None)) -> Bytes:
        """A value for each word as one for each byte."""
        return self.d.words.spread(of_words, self.staggers[rows], self.width)

    def _ask_digests(self, rows: Strips, cells: Bytes) -> None:
        """Finish the rows whose cells agree with their digest."""
        for row, cell in zip(rows.tolist(), cells, strict=True):
            if self.digested[row] and not self.finished[row] and self._agrees(row, cell):
                self._finish(row, cell)

    def _agrees(self, row: int, cell: Bytes) -> bool:
        return bool(xxhash.xxh3_64_intdigest(cell.data) == self.digests[row])

    def _finish(self, row: int, cell: Bytes) -> None:
        """A cell is right: all its symbols are fixed from now on."""
        self.false_pins += int(np.count_nonzero(self.pinned[row] & (self.value[row] != cell)))
        self.value[row] = cell
        self.pinned[row] = True
        self.finished[row] = True

    # -- step 3: columns ----------------------------------------------------------------------------

    def _gather_columns(self) -> None:
        """Put together the symbols of all strips; those that were right are read only now."""
        others = np.flatnonzero(self.source.states == RIGHT)
        self.symbols = np.empty((self.g.n, self.width), np.uint8)
        self.symbols[others], lost = self.source.rows(others)
        self.fixed = np.ones(self.symbols.shape, bool)
        self.late_erasures = np.zeros(self.symbols.shape, np.uint8)
        if lost is not None:  # It could be read a moment ago and now cannot.
            self.fixed[others] = ~lost
            self.late_erasures[others] = lost
        self.open = np.arange(self.width)
        self.provisional = np.zeros(self.width, bool)
        self.strict = np.zeros(self.width, bool)
        self.last_tried: tuple[Bytes, Bytes, Bytes] | None = None

    def _erase_all(self) -> bool:
        """Solve all columns at once by erasing every cell that is not right, where there are few enough.

        They share one set of erasures, so that one small matrix does it. True when all are finished.
        """
        rows = np.flatnonzero(~self.finished)
        if len(rows) > self.g.r or self.late_erasures.any():
            return False
        self.symbols[self.strips] = self.value
        solver = self.d.columns.erasure_solver(self.strips[rows].tolist())
        magnitudes, agree = solver.solve(self.d.columns.syndromes(self.symbols))
        cells = self.value[rows] ^ magnitudes
        if not agree.all() or (self.given[rows] & (magnitudes != 0)).any():
            return False
        if any(
            self.digested[row] and not self._agrees(row, cell) for row, cell in zip(rows, cells, strict=True)
        ):
            return False
        for row, cell in zip(rows.tolist(), cells, strict=True):
            self._finish(row, cell)
        return True

    def _solve_columns(self) -> int:
        """One round of trials on the unsolved columns. Returns how many were solved."""
        self.symbols[self.strips] = self.value
        self.fixed[self.strips] = self.pinned
        known = self._reliability()
        places = self._worth_trying(known)
        known = known.take(places)
        syndromes = self.d.columns.syndromes(np.take(self.symbols, places, axis=1))
        left = np.arange(len(places))
        for number, trial in enumerate(erasure_trials(known, self.d.code.inner.t)):
            if not len(left) or (number and not self.d.later_trials):
                break
            erased = np.take(self.late_erasures, places[left], axis=1)
            erased[self.strips] |= trial[:, left]
            magnitudes, errors = self.d.columns.decode(np.take(syndromes, left, axis=1), erased)
            accepted = (errors >= 0) & ~((magnitudes != 0) & self.fixed[:, places[left]]).any(axis=0)
            accepted[accepted] = self._weigh(
                places[left[accepted]], known.take(left[accepted]), errors[accepted], erased[:, accepted],
                magnitudes[:, accepted],
            )  # fmt: skip
            self._pin(places[left[accepted]], magnitudes[:, accepted])
            left = left[~accepted]
        solved = np.setdiff1d(places, places[left])
        self.open = np.setdiff1d(self.open, solved)
        return len(solved)

    def _reliability(self) -> Reliability:
        """What is known of the symbols of all rows."""
        open_ = ~self.pinned
        if self.g.p:
            status = np.where(open_, self._spread(self.status), np.uint8(0))
            open_bytes = np.where(open_, self._open_bytes(open_), np.uint8(0))
        else:
            status, open_bytes = np.zeros(open_.shape, np.uint8), open_.astype(np.uint8)
        burst_rows = open_ & self._burst_rows()[:, np.newaxis]
        return Reliability(self.erased & open_, status == DENSE, burst_rows, status, open_bytes)

    def _open_bytes(self, open_: Mask) -> Bytes:
        """For each byte, how many bytes of its word are not known to be right."""
        m, (rows, words) = self.g.m, self.status.shape
        counts = np.zeros((rows, words), np.uint8)
        for stagger in np.unique(self.staggers):
            chosen = self.staggers == stagger
            rolled = np.zeros((int(chosen.sum()), words * m), np.uint8)
            rolled[:, : self.width] = np.roll(open_[chosen], -int(stagger), axis=1)
            counts[chosen] = rolled.reshape(-1, words, m).sum(axis=2)
        return self._spread(counts)

    def _burst_rows(self) -> Mask:
        """Rows that look like whole parts of a burst: neighbours, or wrong in many of the solved columns."""
        suspects = np.zeros(len(self.strips), bool)
        rows = np.flatnonzero(~self.finished & ~self.erased.all(axis=1))
        if len(rows) <= 3 * self.g.r:
            room = self.g.r - int(self.erased.any(axis=1).sum())
            suspects[rows] = neighbouring_rows(self.strips[rows], room)
        solved = np.setdiff1d(np.arange(self.width), self.open)
        if len(solved) >= 16:
            suspects |= (self.value[:, solved] != self.raw[:, solved]).mean(axis=1) > 0.25
        return suspects

    def _worth_trying(self, known: Reliability) -> Strips:
        """The unsolved columns of which something is known that was not when they were tried last."""
        now = (self.value.copy(), known.status, known.open_bytes)
        before, self.last_tried = self.last_tried, now
        if before is None:
            return self.open
        changed = np.zeros(self.width, bool)
        for a, b in zip(before, now, strict=True):
            changed |= (a != b).any(axis=0)
        return self.open[changed[self.open]]

    def _weigh(
        self, places: Strips, known: Reliability, errors: NDArray[np.int16], erased: Bytes, magnitudes: Bytes
    ) -> Mask:
        """Which solutions may be used: the sure ones, and for the time being some that are not."""
        erasures = (erased != 0).sum(axis=0)
        doubtful = np.maximum((~self.fixed[:, places]).sum(axis=0) - erasures, 0)
        chance = chance_of_acceptance(doubtful, errors.astype(np.intp), self.g.r - erasures)
        sure = chance < BELIEVED
        near = generalised_distance(known, magnitudes[self.strips] != 0, self.d.code.inner.d) <= self.g.r
        usable = ((chance < USABLE) | near) & ~self.strict[places]
        self.provisional[places[usable & ~sure]] = True
        return np.asarray(sure | usable)

    def _pin(self, places: Strips, magnitudes: Bytes) -> None:
        """The bytes of solved columns are known from now on."""
        self.symbols[:, places] ^= magnitudes
        self.value[:, places] = self.symbols[np.ix_(self.strips, places)]
        self.pinned[:, places] = True

    # -- step 4: feedback -----------------------------------------------------------------------------

    def _feedback(self) -> int:
        """Columns, words, columns ... until nothing changes. Returns the number of rounds."""
        for number in range(1, ROUNDS + 1):
            solved = self._solve_columns()
            finished = int(self.finished.sum())
            if self.d.feedback or not len(self.open):
                self._decode_words()
            if self.finished.all():
                return number
            if self._contradicted() and self._withdraw():
                continue
            if not self.d.feedback or (not solved and int(self.finished.sum()) == finished):
                return number
        return ROUNDS

    def _contradicted(self) -> bool:
        """Whether a cell all of whose bytes are known disagrees with its digest."""
        return bool((self.digested & ~self.finished & self.pinned.all(axis=1)).any())

    def _withdraw(self) -> bool:
        """Take back every provisional solution; those columns must be sure the next time."""
        places = np.flatnonzero(self.provisional)
        if not len(places):
            return False
        rows = np.flatnonzero(~self.finished)
        self.pinned[np.ix_(rows, places)] = self.given[np.ix_(rows, places)]
        self.open = np.union1d(self.open, places)
        self.provisional[places] = False
        self.strict[places] = True
        self.last_tried = None
        self._decode_words()
        return True

    # -- step 5: the result ---------------------------------------------------------------------------

    def _outcome(self, first_value: Bytes, first_status: Bytes, rounds: int) -> BlockOutcome:
        complete = self.pinned.all(axis=1)
        contradicted = complete & self.digested & ~self.finished
        t = self.d.code.inner.t
        outcome = BlockOutcome(
            self.source.number, self.strips, self.raw, self.value, self.erased,
            self.pinned & ~contradicted[:, np.newaxis], self.finished | (complete & ~self.digested),
            int(((first_status > 0) & (first_status <= t)).sum()), int((first_status == FLAGGED).sum()),
            rounds=rounds, false_pins=self.false_pins,
        )  # fmt: skip
        outcome.margin = self._margin(outcome, first_value)
        return outcome

    def _margin(self, outcome: BlockOutcome, first_value: Bytes) -> float:
        """1 - max over the columns of (2 wrong + erasures) / r, counted after the inner code."""
        bad = self.erased | burst_bytes(outcome.flips())
        wrong = (first_value != self.value) & ~bad
        load = 2 * wrong.sum(axis=0) + bad.sum(axis=0)
        return 1.0 - float(load.max(initial=0)) / self.g.r


def burst_bytes(flips: Bytes) -> Mask:
    """Which wrong bytes of each row of `flips` lie in a burst (clusters are not followed into other cells)."""
    inside = np.zeros(flips.shape, bool)
    rows, places = np.nonzero(flips)
    if not len(places):
        return inside
    # One long line, with a gap between the rows that no cluster can bridge.
    line = rows.astype(np.int64) * (2 * flips.shape[1] + 64) + places
    found = cluster(line, np.zeros_like(line))
    bursts = found[found.burst]
    which = np.searchsorted(bursts.start, line, side="right") - 1
    member = (
        (which >= 0) & (line < bursts.stop[np.maximum(which, 0)])
        if len(bursts)
        else np.zeros(len(line), bool)
    )
    inside[rows[member], places[member]] = True
    return inside
