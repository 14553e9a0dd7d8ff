"""The decoding of one block, step by step (the numbers are those of the design).

1. Symbols of right cells are fixed: never altered, never erased. What cannot be read is erased.
2. Inner decoding of the other cells; (2a) a cell whose digest now agrees is finished.
3. Outer decoding of the columns, with the erasures of one trial after the other.
4. A solved column pins its bytes; words are decoded again with what is pinned, and so on until nothing
   changes.
5. The digests decide; where a cell has none, the members' SHA-256 will.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.decoding.bursts import cluster
from oakum.decoding.distances import Distances
from oakum.decoding.trials import (
    BELIEVED,
    CHASE_COLUMNS,
    DENSE,
    UNUSABLE,
    USABLE,
    Mask,
    Reliability,
    chance_of_acceptance,
    chase_sets,
    dense_words,
    erasure_trials,
    hopeful,
    neighbouring_rows,
)
from oakum.geometry import Geometry
from oakum.kernels.columns import ColumnDecoder
from oakum.kernels.doubts import doubts
from oakum.kernels.doubts_kernels import weigh_words
from oakum.kernels.words import FLAGGED, WordCodec

Bytes = NDArray[np.uint8]
Strips = NDArray[np.intp]

RIGHT, WRONG, UNKNOWN = 0, 1, 2
"""What the digest says of a cell: it agrees, it does not, or there is none to ask."""

ROUNDS = 200
"""More rounds of feedback than any block was ever seen to need; a bound, not a tuning."""


PATIENCE = 4
"""Times in a row that random trials may fail before the block is left as it is."""

NEIGHBOURS = (6, 3, 2)
"""Lengths from which a run of neighbouring strips, none of them right, is taken for a burst."""

MOST_CHASES = 100
"""Times that random trials are made on one block at the most, which bounds its time to some seconds."""


MOST_SUSPICIONS = 30
"""Times that single columns are suspected of a wrong solution in one block at the most."""


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
        """Prepare the decoders of a code; what has to be compiled is compiled now."""
        words, columns = WordCodec(code.inner), ColumnDecoder(code.outer)
        for codec in (words, columns):
            codec.prepare()
        weigh_words.prepare()
        return Decoders(code, words, columns)


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
        self.heed_density = True
        self.false_pins = 0

    def run(self) -> BlockOutcome:
        self._decode_words()
        first_value, first_status = self.value.copy(), self.status.copy()
        rounds = 0
        if not self.finished.all():
            self._gather_columns()
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
                cells = np.where(self._spread(back.view(np.uint8), rows) != 0, kept, cells)
        self._ask_digests(rows, cells)
        open_rows = ~self.finished[rows]
        self.value[rows[open_rows]] = cells[open_rows]

    def _words_holding(self, chosen: Mask, rows: Strips) -> Mask:
        """Which words, bool[R, words], hold a byte of `chosen`, bool[R, width]; the inverse of `_spread`."""
        m, words = self.g.m, self.status.shape[1]
        held = np.zeros((len(rows), words), bool)
        for stagger in np.unique(self.staggers[rows]):
            here = self.staggers[rows] == stagger
            turned = np.zeros((int(here.sum()), words * m), bool)
            turned[:, : self.width] = np.roll(chosen[here], -int(stagger), axis=1)
            held[here] = turned.reshape(-1, words, m).any(axis=2)
        return held

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
        self.others_right = np.ones(self.symbols.shape, bool)
        self.late_erasures = np.zeros(self.symbols.shape, np.uint8)
        if lost is not None:  # It could be read a moment ago and now cannot.
            self.others_right[others] = ~lost
            self.late_erasures[others] = lost
        self.open = np.arange(self.width)
        self.provisional = np.zeros(self.width, bool)
        self.strict = np.zeros(self.width, bool)
        self.tried_as_received, self.tried_erasures = _Seen(), _Seen()
        self.flip_rate = self._estimate_flip_rate()
        self.chases = MOST_CHASES
        self.suspicions = MOST_SUSPICIONS
        self.erased_together = 0
        self.random = np.random.default_rng(self.source.number)  # Decoding twice gives the same twice.

    def _estimate_flip_rate(self) -> float:
        """The rate of scattered flips, by the share of words without any among those outside bursts."""
        words = self.status[self.status < UNUSABLE - 1]
        words = np.concatenate([words, self.status[self.status == FLAGGED]])
        clean = (np.count_nonzero(words == 0) or 1) / (len(words) or 1)
        return float(1 - clean ** (1 / max(self.d.code.inner.n, 8)))

    def _erase_all(self) -> bool:
        """Solve all columns at once by erasing every cell that is not right, where there are few enough.

        They share one set of erasures, so that one small matrix does it. True when all are finished.
        """
        rows = np.flatnonzero(~self.finished)
        if len(rows) > self.g.r or len(rows) == self.erased_together or self.late_erasures.any():
            return False
        self.erased_together = len(rows)
        self.symbols[self.strips] = self.value
        solver = self.d.columns.erasure_solver(self.strips[rows].tolist())
        magnitudes, agree = solver.solve(self.d.columns.syndromes(self.symbols))
        cells = self.value[rows] ^ magnitudes
        if not agree.all() or (self.given[rows] & (magnitudes != 0)).any():
            return False
        if any(
            self.digested[row] and not self._agrees(row, cell)
            for row, cell in zip(rows.tolist(), cells, strict=True)
        ):
            return False
        for row, cell in zip(rows.tolist(), cells, strict=True):
            self._finish(row, cell)
        return True

    def _posed(self, places: Strips, known: Reliability) -> _Posed:
        """The columns `places` as a problem for the outer decoder."""
        symbols = np.take(self.symbols, places, axis=1)
        symbols[self.strips] = np.take(self.value, places, axis=1)
        fixed = np.take(self.others_right, places, axis=1)
        fixed[self.strips] = ~known.open
        late = np.take(self.late_erasures, places, axis=1)
        syndromes = self.d.columns.syndromes(symbols)
        return _Posed(places, known, symbols, fixed, late, syndromes, self.d.code.inner.d)

    def _try_as_received(self) -> int:
        """Decode the unsolved columns, erasing only what is known to be bad. Returns how many are solved.

        Most columns that can be solved at all are solved so, and what they pin makes all further trials
        better: those wait until this does little.
        """
        known = self._reliability(weighed=False)
        places = self.tried_as_received.changed(self.open, self.value)
        if not len(places):
            return 0
        posed = self._posed(places, known if len(places) == self.width else known.take(places))
        trial = posed.known.erased | posed.known.dense
        return self._try(posed, iter([trial, posed.known.erased] if posed.known.dense.any() else [trial]))

    def _try_erasures(self) -> int:
        """All trials of a round on the unsolved columns. Returns how many were solved."""
        known = self._reliability()
        places = self.tried_erasures.changed(self.open, self.value, known.doubts, known.verdicts)
        if not len(places) or not self.d.later_trials:
            return 0
        posed = self._posed(places, known.take(places))
        return self._try(posed, erasure_trials(posed.known, self.d.code.inner.t), complete=True)

    def _try(self, posed: _Posed, trials: Iterator[Mask], *, complete: bool = False) -> int:
        """Make trial after trial on what is left of a problem; pin what is solved.

        A solution that a codeword within the guarantee might beat has to wait until a `complete` set of
        trials, which would find that codeword, has been made.
        """
        left = np.arange(len(posed.places))
        solved, waiting = np.zeros(len(left), bool), np.zeros(len(left), bool)
        second_best = np.zeros(0, np.uint8)
        sizes = np.full(len(left), -1, np.intp)
        for trial in trials:
            size = np.count_nonzero(trial, axis=0)
            # The sets of a family are nested: one of the same size is the same.
            now = left[(size != sizes)[left] & (size <= self.g.r)[left]]
            sizes = size
            if not len(now):
                continue
            erased = posed.late.copy()
            erased[self.strips] |= trial
            magnitudes, errors = self.d.columns.decode(posed.syndromes, erased, only=now)
            good = np.zeros(len(solved), bool)
            good[now] = errors[now] >= 0
            good &= ~((magnitudes != 0) & posed.fixed).any(axis=0)
            rivalled = self._rivalled(posed, erased, errors, magnitudes, good)
            self._weigh(posed, errors, erased, magnitudes, good)
            if self.d.later_trials and (wait := good & rivalled).any():
                good &= ~wait
                second_best = second_best if waiting.any() else np.zeros_like(magnitudes)
                np.copyto(second_best, magnitudes, where=wait & ~waiting)
                waiting |= wait
            self._pin(posed, magnitudes, good)
            solved |= good
            left = left[~good[left]]
            if not len(left):
                break
        if complete and (waiting & ~solved).any():
            self._pin(posed, second_best, waiting & ~solved)
            solved |= waiting
        self.open = np.setdiff1d(self.open, posed.places[solved], assume_unique=True)
        return int(solved.sum())

    def _chase(self) -> int:
        """Random trial erasures on columns that are just beyond reach. Returns how many were solved."""
        known = self._reliability().take(self.open)
        near = np.flatnonzero(hopeful(known, self.g.r))
        if not len(near):
            return 0
        posed = self._posed(self.open[near], known.take(near))
        count = max(8, min(256, CHASE_COLUMNS // len(near)))
        sets = chase_sets(posed.known, count, self.random)
        erased = np.repeat(posed.late, count, axis=1)
        erased[self.strips] |= sets.reshape(len(self.strips), -1)
        magnitudes, errors = self.d.columns.decode(np.repeat(posed.syndromes, count, axis=1), erased)
        fine = (errors >= 0) & ~((magnitudes != 0) & np.repeat(posed.fixed, count, axis=1)).any(axis=0)
        chance = self._chances(np.repeat(posed.doubtful, count), errors, erased)
        # Any of the trials could have been the one that a wrong word passes.
        chance = np.where(fine, chance + np.log(count), np.inf).reshape(len(near), count)
        best, least = chance.argmin(axis=1), chance.min(axis=1)
        good = (least < BELIEVED) | ((least < USABLE) & ~self.strict[posed.places])
        self.provisional[posed.places[good & (least >= BELIEVED)]] = True
        self._pin(posed, np.take(magnitudes, best + np.arange(len(near)) * count, axis=1), good)
        self.open = np.setdiff1d(self.open, posed.places[good], assume_unique=True)
        return int(good.sum())

    def _reliability(self, *, weighed: bool = True) -> Reliability:
        """What is known of the symbols of all rows; the chances of being wrong only if `weighed`."""
        open_ = ~self.pinned
        status = weights = np.zeros(open_.shape, np.uint8)
        if self.g.p:
            status = np.where(open_, self._spread(self.status), np.uint8(0))
        if self.g.p and weighed:
            kept = np.where(self.pinned, self.value, self.raw)
            weights = doubts(
                self.d.words, kept, self.value, self.parity, self.staggers, self.status,
                self.pinned.view(np.uint8), self.flip_rate,
            )  # fmt: skip
        verdicts = np.where(open_, self._verdicts()[:, np.newaxis], np.uint8(0))
        return Reliability(self.erased & open_, status == DENSE, verdicts, status, weights, open_)

    def _verdicts(self) -> Bytes:
        """Opinions on which rows are parts of bursts as a whole, uint8[R].

        Bit 0: those that are wrong in many of the solved columns. The others: neighbouring strips, in long
        runs only, then in shorter ones too.
        """
        verdicts = np.zeros(len(self.strips), np.uint8)
        solved = np.ones(self.width, bool)
        solved[self.open] = False
        if np.count_nonzero(solved) >= 16:
            wrong = np.count_nonzero((self.value != self.raw) & solved, axis=1)
            verdicts[4 * wrong > np.count_nonzero(solved)] = 1
        rows = np.flatnonzero(~self.finished & ~self.erased.all(axis=1))
        if len(rows) <= 3 * self.g.r:
            room = self.g.r - int(self.erased.any(axis=1).sum())
            for bit, least in enumerate(NEIGHBOURS, 1):
                verdicts[rows[neighbouring_rows(self.strips[rows], room, least)]] |= np.uint8(1 << bit)
        return verdicts

    def _chances(self, doubtful: Strips, errors: NDArray[np.int16], erased: Bytes) -> NDArray[np.float64]:
        """Log of the chance that random words pass for what was found; `doubtful` counts open symbols."""
        erasures = np.count_nonzero(erased, axis=0)
        wrong = np.maximum(errors, 0).astype(np.intp)
        return chance_of_acceptance(np.maximum(doubtful - erasures, 0), wrong, self.g.r - erasures)

    def _weigh(
        self, posed: _Posed, errors: NDArray[np.int16], erased: Bytes, magnitudes: Bytes, good: Mask
    ) -> None:
        """Keep `good` for the sure solutions, and for the time being for some that are not."""
        chance = self._chances(posed.doubtful, errors, erased)
        unsure = np.flatnonzero(good & (chance >= BELIEVED))
        if not len(unsure):
            return
        altered = posed.distances.altered(np.take(magnitudes, unsure, axis=1)[self.strips] != 0, unsure)
        near = posed.distances.of_solutions(altered, unsure) < self.g.r + 1
        strict = self.strict[posed.places[unsure]]
        usable = near | (chance[unsure] < USABLE) & ~strict
        self.provisional[posed.places[unsure[usable & ~strict]]] = True
        good[unsure[~usable]] = False

    def _rivalled(
        self, posed: _Posed, erased: Bytes, errors: NDArray[np.int16], magnitudes: Bytes, good: Mask
    ) -> Mask:
        """The `good` solutions that another codeword, nearer than the guarantee reaches, might beat."""
        distance = self.g.r + 1
        rivalled = np.zeros(len(good), bool)
        most = np.maximum(errors, 0) + np.count_nonzero(erased, axis=0)
        # The cheap bound first: a rival alters D - `most` others at least, for 2 each less the slack.
        which = np.flatnonzero(good & (2 * most + posed.slack > distance))
        if len(which):
            which = which[posed.distances.rival_bound(most[which], which, distance) < distance]
        if len(which):
            altered = posed.distances.altered(np.take(magnitudes, which, axis=1)[self.strips] != 0, which)
            beaten = posed.distances.of_rivals(altered, which, distance) < distance
            rivalled[which] = beaten & (posed.distances.of_solutions(altered, which) >= distance)
        return rivalled

    def _pin(self, posed: _Posed, magnitudes: Bytes, good: Mask) -> None:
        """The bytes of solved columns are known from now on."""
        if not good.any():
            return
        if len(good) == self.width:
            np.copyto(self.value, posed.symbols[self.strips] ^ magnitudes[self.strips], where=good)
            self.pinned |= good
            return
        which = np.flatnonzero(good)
        solved = np.take(posed.symbols, which, axis=1) ^ np.take(magnitudes, which, axis=1)
        self.value[:, posed.places[which]] = solved[self.strips]
        self.pinned[:, posed.places[which]] = True

    # -- step 4: feedback -----------------------------------------------------------------------------

    def _feedback(self) -> int:
        """Columns, words, columns ... until nothing changes. Returns the number of rounds."""
        for number in range(ROUNDS):
            if self._erase_all():
                return number
            finished = int(self.finished.sum())
            solved = self._one_round()
            if self.d.feedback or not len(self.open):
                self._decode_words()
            if self.finished.all():
                return number + 1
            if self._contradicted().any() and self._withdraw_wrong():
                continue
            if not self.d.feedback:
                return number + 1
            if not solved and int(self.finished.sum()) == finished and not self._reconsider():
                return number + 1
        return ROUNDS

    def _one_round(self) -> int:
        """Solve some columns: the costlier trials only when the cheaper ones do little. Returns how many."""
        many = max(1, len(self.open) // 8)
        solved = self._try_as_received()
        if solved < many:
            solved += self._try_erasures()
        for _ in range(PATIENCE):
            if solved or not self.chases or not (self.d.feedback and self.d.later_trials):
                break
            self.chases -= 1
            solved = self._chase()
        return solved

    def _contradicted(self) -> Mask:
        """Which rows are known in full and disagree with their digest, bool[R]."""
        return self.digested & ~self.finished & self.pinned.all(axis=1)

    def _reconsider(self) -> bool:
        """Nothing more can be solved: take back verdicts about density, then what is only provisional.

        Where most columns are solved they stand: most of them are right, and others rest on them.
        """
        if self.heed_density and (self.status == DENSE).any():
            self.heed_density = False
            self.tried_as_received, self.tried_erasures = _Seen(), _Seen()
            self._decode_words()
            return True
        return 2 * len(self.open) > self.width and self._withdraw(np.flatnonzero(self.provisional))

    def _withdraw_wrong(self) -> bool:
        """Digests contradict what is known: take back what the words disagree with, or what is provisional.

        A wrong solution differs from the right one in D symbols at least, and the words of all of these are
        flagged although all their bytes are known.
        """
        rows = np.flatnonzero(self._contradicted())
        flagged = np.count_nonzero(self._spread(self.status[rows], rows) == FLAGGED, axis=0)
        worst = int(flagged.argmax())
        if self.suspicions and flagged[worst] >= 2:
            self.suspicions -= 1
            # Its neighbours share nearly all of its words; alone in a word, a byte is corrected best.
            near = np.arange(max(0, worst - 2), min(self.width, worst + 3))
            return self._withdraw(near[flagged[near] >= flagged[worst] - 2])
        return self._withdraw(np.flatnonzero(self.provisional))

    def _withdraw(self, places: Strips) -> bool:
        """Take back the solutions of some columns, which must be sure the next time."""
        if not len(places):
            return False
        rows = np.flatnonzero(~self.finished)
        self.pinned[np.ix_(rows, places)] = self.given[np.ix_(rows, places)]
        self.open = np.union1d(self.open, places)
        self.provisional[places] = False
        self.strict[places] = True
        self.tried_as_received, self.tried_erasures = _Seen(), _Seen()
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


@dataclass(frozen=True)
class _Posed:
    """Unsolved columns as a problem: their numbers, what is known, the symbols of all n strips."""

    places: Strips
    known: Reliability
    symbols: Bytes
    fixed: Mask
    late: Bytes
    syndromes: Bytes
    inner_distance: int

    @cached_property
    def distances(self) -> Distances:
        """The measure of how far solutions are from what was received."""
        return Distances.of(self.known, self.inner_distance)

    @cached_property
    def slack(self) -> NDArray[np.float64]:
        """How much cheaper than 2 a symbol all symbols of a column together are for a rival, at the most."""
        known, d = self.known, self.inner_distance
        void = np.count_nonzero((known.status >= UNUSABLE) | known.erased, axis=0)
        unclean = np.count_nonzero(known.status, axis=0)
        return np.asarray(void + unclean * ((d - 1) // 2 * 2 / d))

    @cached_property
    def doubtful(self) -> Strips:
        """How many symbols of each column may be wrong."""
        return np.asarray(np.count_nonzero(~self.fixed, axis=0))


class _Seen:
    """What was known of all columns when they were tried last."""

    def __init__(self) -> None:
        self._before: list[Bytes] = []

    def changed(self, places: Strips, *now: Bytes) -> Strips:
        """Those of the columns `places` of which something in the arrays `now` is new."""
        before, self._before = self._before, [array.copy() for array in now]
        if not before:
            return places
        new = np.zeros(now[0].shape[1], bool)
        for a, b in zip(before, now, strict=True):
            new |= (a != b).any(axis=0)
        return places[new[places]]


def burst_bytes(flips: Bytes) -> Mask:
    """Which bytes of each row of `flips` lie inside a burst, right ones too (seen within the cell alone)."""
    height, width = flips.shape
    rows, places = np.nonzero(flips)
    # One long line, with a gap between the rows that no cluster can bridge.
    stride = width + 64
    line = rows.astype(np.int64) * stride + places
    found = cluster(line, np.zeros_like(line))
    bursts = found[found.burst]
    edges = np.zeros(height * stride + 1, np.int8)
    edges[bursts.start] += 1
    edges[bursts.stop] -= 1
    inside = np.cumsum(edges[:-1], dtype=np.int8).reshape(height, stride)
    return np.asarray(inside[:, :width] > 0)
