"""The columns of a block that are not solved yet, and the rounds of trials on them."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.decoding.cells import Cells, flip_rate
from oakum.decoding.distances import Distances
from oakum.decoding.source import RIGHT, BlockSource, Bytes, Decoders, Mask, Strips
from oakum.decoding.trials import (
    BELIEVED,
    CHASE_COLUMNS,
    DENSE,
    UNUSABLE,
    USABLE,
    Reliability,
    chance_of_acceptance,
    chase_sets,
    column_counts,
    erasure_trials,
    hopeful,
    neighbouring_rows,
)
from oakum.kernels.doubts import doubts
from oakum.kernels.words import FLAGGED

PATIENCE = 4
"""Times in a row that random trials may fail before the block is left as it is."""

NEIGHBOURS = (6, 3, 2)
"""Lengths from which a run of neighbouring strips, none of them right, is taken for a burst."""

MOST_CHASES = 100
"""Times that random trials are made on one block at the most, which bounds its time to some seconds."""

MOST_SUSPICIONS = 30
"""Times that single columns are suspected of a wrong solution in one block at the most."""


class Columns:
    """The symbols of all n strips, and which columns are `open`: not solved yet.

    Solutions go into `cells`, whose bytes they pin; `provisional` marks those that may be taken back,
    `strict` the columns where that has happened.
    """

    def __init__(self, source: BlockSource, decoders: Decoders, cells: Cells) -> None:
        """Put together the symbols of all strips; those that were right are read only now."""
        self.cells = cells
        self.d = decoders
        self.g = source.geometry
        self.width = cells.width
        others = np.flatnonzero(source.states == RIGHT)
        self.symbols = np.empty((self.g.n, self.width), np.uint8)
        self.symbols[others], lost = source.rows(others)
        self.fixed = np.full(self.symbols.shape, 255, np.uint8)
        self.late_erasures = np.zeros(self.symbols.shape, bool)
        if lost is not None:  # It could be read a moment ago and now cannot.
            self.fixed[others] = np.where(lost, np.uint8(0), np.uint8(255))
            self.late_erasures[others] = lost
        self.open = np.arange(self.width)
        self.provisional = np.zeros(self.width, bool)
        self.strict = np.zeros(self.width, bool)
        self.tried_as_received, self.tried_erasures = _Seen(), _Seen()
        self._first_status = cells.status.copy()
        self.chases = MOST_CHASES
        self.suspicions = MOST_SUSPICIONS
        self.erased_together = 0
        self._number = source.number

    @cached_property
    def flip_rate(self) -> float:
        """The rate of scattered flips, by what the inner code alone made of the words."""
        return flip_rate(self._first_status, self.d.code.inner)

    @cached_property
    def random(self) -> np.random.Generator:
        """Where random trials come from: decoding twice gives the same twice."""
        return np.random.default_rng(self._number)

    def one_round(self) -> int:
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

    def erase_all(self) -> bool:
        """Solve all columns at once by erasing every cell that is not right, where there are few enough.

        They share one set of erasures, so that one small matrix does it. True when all are finished.
        """
        rows = np.flatnonzero(~self.cells.finished)
        if len(rows) > self.g.r or len(rows) == self.erased_together or self.late_erasures.any():
            return False
        self.erased_together = len(rows)
        self.symbols[self.cells.strips] = self.cells.value
        solver = self.d.columns.erasure_solver(self.cells.strips[rows].tolist())
        magnitudes, agree = solver.solve(self.d.columns.syndromes(self.symbols))
        if not agree.all() or (self.cells.given[rows] & (magnitudes != 0)).any():
            return False
        cells = self.cells.value[rows] ^ magnitudes
        if (self.cells.digested[rows] & ~self.cells.agree(rows, cells)).any():
            return False
        self.cells.replace(rows, cells)
        return True

    def _posed(self, places: Strips, known: Reliability) -> _Posed:
        """The columns `places` as a problem for the outer decoder."""
        symbols, fixed = self._at(places, self.symbols), self._at(places, self.fixed)
        symbols[self.cells.strips] = self._at(places, self.cells.value)
        fixed[self.cells.strips] = known.open.view(np.uint8) - np.uint8(1)
        late = self._at(places, self.late_erasures)
        syndromes = self.d.columns.syndromes(symbols)
        return _Posed(places, known, fixed, late, syndromes, self.d.code.inner.d)

    def _at(self, places: Strips, array: NDArray[Any]) -> NDArray[Any]:
        """Some columns of an array; the array itself, and no copy, when they are all."""
        return array if len(places) == self.width else np.take(array, places, axis=1)

    def _try_as_received(self) -> int:
        """Decode the unsolved columns, erasing only what is known to be bad. Returns how many are solved.

        Most columns that can be solved at all are solved so, and what they pin makes all further trials
        better: those wait until this does little.
        """
        known = self._reliability(weighed=False)
        places = self.tried_as_received.changed(self.open, self.cells.value)
        if not len(places):
            return 0
        posed = self._posed(places, known if len(places) == self.width else known.take(places))
        trial = posed.known.erased | posed.known.dense
        return self._try(posed, iter([trial, posed.known.erased] if posed.known.dense.any() else [trial]))

    def _try_erasures(self) -> int:
        """All trials of a round on the unsolved columns. Returns how many were solved."""
        known = self._reliability(weighed=True)
        places = self.tried_erasures.changed(self.open, self.cells.value, known.doubts, known.verdicts)
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
            size = column_counts(trial)
            # The sets of a family are nested: one of the same size is the same.
            now = left[(size != sizes)[left] & (size <= self.g.r)[left]]
            sizes = size
            if not len(now):
                continue
            erasures = size + posed.late_count
            erased = posed.erasing(self.cells.strips, trial) if erasures.any() else None
            magnitudes, errors = self.d.columns.decode(posed.syndromes, erased, only=now)
            good = np.zeros(len(solved), bool)
            good[now] = errors[now] >= 0
            good &= ~_meet(magnitudes, posed.fixed)
            rivalled = self._rivalled(posed, erasures, errors, magnitudes, good)
            self._weigh(posed, errors, erasures, magnitudes, good)
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
        self._close(posed.places[solved])
        return int(solved.sum())

    def _close(self, places: Strips) -> None:
        """Columns that are solved are open no longer."""
        still = np.zeros(self.width, bool)
        still[self.open] = True
        still[places] = False
        self.open = np.flatnonzero(still)

    def _chase(self) -> int:
        """Random trial erasures on columns that are just beyond reach. Returns how many were solved."""
        known = self._reliability(weighed=True).take(self.open)
        near = np.flatnonzero(hopeful(known, self.g.r))
        count = max(8, min(256, CHASE_COLUMNS // max(1, len(near))))
        # Without an inner code all symbols are equally doubtful: a few trials would gain next to nothing.
        if not len(near) or (count < 64 and not self.g.p):
            return 0
        posed = self._posed(self.open[near], known.take(near))
        sets = chase_sets(posed.known, count, self.random)
        erased = np.repeat(posed.late, count, axis=1).view(np.uint8)
        erased[self.cells.strips] |= sets.reshape(len(self.cells.strips), -1)
        magnitudes, errors = self.d.columns.decode(np.repeat(posed.syndromes, count, axis=1), erased)
        fine = (errors >= 0) & ~_meet(magnitudes, np.repeat(posed.fixed, count, axis=1))
        chance = self._chances(np.repeat(posed.doubtful, count), errors, np.count_nonzero(erased, axis=0))
        # Any of the trials could have been the one that a wrong word passes.
        chance = np.where(fine, chance + np.log(count), np.inf).reshape(len(near), count)
        best, least = chance.argmin(axis=1), chance.min(axis=1)
        good = (least < BELIEVED) | ((least < USABLE) & ~self.strict[posed.places])
        self.provisional[posed.places[good & (least >= BELIEVED)]] = True
        self._pin(posed, np.take(magnitudes, best + np.arange(len(near)) * count, axis=1), good)
        self._close(posed.places[good])
        return int(good.sum())

    def _reliability(self, *, weighed: bool) -> Reliability:
        """What is known of the symbols of all rows; verdicts and chances of being wrong only if `weighed`."""
        cells = self.cells
        open_ = ~cells.pinned
        status = weights = verdicts = np.zeros(open_.shape, np.uint8)
        erased = dense = status.view(bool)
        if self.g.p:
            status = cells.spread(cells.status) * open_.view(np.uint8)
        if weighed and self.g.p:
            weights = doubts(
                self.d.words, cells.kept(np.arange(len(open_))), cells.value, cells.parity, cells.staggers,
                cells.status, cells.pinned.view(np.uint8), self.flip_rate,
            )  # fmt: skip
        if weighed:
            verdicts = self._verdicts()[:, np.newaxis] * open_.view(np.uint8)
        if cells.erased.any():
            erased = cells.erased & open_
        if (cells.status == DENSE).any():
            dense = status == DENSE
        return Reliability(erased, dense, verdicts, status, weights, open_)

    def _verdicts(self) -> Bytes:
        """Opinions on which rows are parts of bursts as a whole, uint8[R].

        Bit 0: those that are wrong in many of the solved columns. The others: neighbouring strips, in long
        runs only, then in shorter ones too.
        """
        verdicts = np.zeros(len(self.cells.strips), np.uint8)
        solved = np.ones(self.width, bool)
        solved[self.open] = False
        if np.count_nonzero(solved) >= 16:
            wrong = np.count_nonzero((self.cells.value != self.cells.raw) & solved, axis=1)
            verdicts[4 * wrong > np.count_nonzero(solved)] = 1
        rows = np.flatnonzero(~self.cells.finished & ~self.cells.erased.all(axis=1))
        if len(rows) <= 3 * self.g.r:
            room = self.g.r - int(self.cells.erased.any(axis=1).sum())
            for bit, least in enumerate(NEIGHBOURS, 1):
                verdicts[rows[neighbouring_rows(self.cells.strips[rows], room, least)]] |= np.uint8(1 << bit)
        return verdicts

    def _chances(self, doubtful: Strips, errors: NDArray[np.int16], erasures: Strips) -> NDArray[np.float64]:
        """Log of the chance that random words pass for what was found; `doubtful` counts open symbols."""
        wrong = np.maximum(errors, 0).astype(np.intp)
        return chance_of_acceptance(np.maximum(doubtful - erasures, 0), wrong, self.g.r - erasures)

    def _weigh(
        self, posed: _Posed, errors: NDArray[np.int16], erasures: Strips, magnitudes: Bytes, good: Mask
    ) -> None:
        """Keep `good` for the sure solutions, and for the time being for some that are not."""
        chance = self._chances(posed.doubtful, errors, erasures)
        unsure = np.flatnonzero(good & (chance >= BELIEVED))
        if not len(unsure):
            return
        altered = posed.distances.altered(np.take(magnitudes, unsure, axis=1)[self.cells.strips] != 0, unsure)
        near = posed.distances.of_solutions(altered, unsure) < self.g.r + 1
        strict = self.strict[posed.places[unsure]]
        usable = near | (chance[unsure] < USABLE) & ~strict
        self.provisional[posed.places[unsure[usable & ~strict]]] = True
        good[unsure[~usable]] = False

    def _rivalled(
        self, posed: _Posed, erasures: Strips, errors: NDArray[np.int16], magnitudes: Bytes, good: Mask
    ) -> Mask:
        """The `good` solutions that another codeword, nearer than the guarantee reaches, might beat."""
        distance = self.g.r + 1
        rivalled = np.zeros(len(good), bool)
        most = np.maximum(errors, 0) + erasures
        # The cheap bound first: a rival alters D - `most` others at least, for 2 each less the slack.
        which = np.flatnonzero(good & (posed.least_distance < distance) & (2 * most + posed.slack > distance))
        if len(which):
            which = which[posed.distances.rival_bound(most[which], which, distance) < distance]
        if len(which):
            wrong = np.take(magnitudes, which, axis=1)[self.cells.strips] != 0
            altered = posed.distances.altered(wrong, which)
            beaten = posed.distances.of_rivals(altered, which, distance) < distance
            rivalled[which] = beaten & (posed.distances.of_solutions(altered, which) >= distance)
        return rivalled

    def _pin(self, posed: _Posed, magnitudes: Bytes, good: Mask) -> None:
        """The bytes of solved columns are known from now on."""
        cells = self.cells
        if not good.any():
            return
        if len(good) == self.width:
            cells.value ^= magnitudes[cells.strips] & np.negative(good.view(np.uint8))
            cells.pinned |= good
            return
        which = np.flatnonzero(good)
        cells.value[:, posed.places[which]] ^= np.take(magnitudes, which, axis=1)[cells.strips]
        cells.pinned[:, posed.places[which]] = True

    def reconsider(self) -> bool:
        """Nothing more can be solved: take back verdicts about density, then what is only provisional.

        Where most columns are solved they stand: most of them are right, and others rest on them.
        """
        if self.cells.heed_density and (self.cells.status == DENSE).any():
            self.cells.heed_density = False
            self.tried_as_received, self.tried_erasures = _Seen(), _Seen()
            self.cells.decode_words()
            return True
        return 2 * len(self.open) > self.width and self._withdraw(np.flatnonzero(self.provisional))

    def withdraw_wrong(self) -> bool:
        """Digests contradict what is known: take back what the words disagree with, or what is provisional.

        A wrong solution differs from the right one in D symbols at least, and the words of all of these are
        flagged although all their bytes are known.
        """
        rows = np.flatnonzero(self.cells.contradicted())
        flagged = np.count_nonzero(self.cells.spread(self.cells.status[rows], rows) == FLAGGED, axis=0)
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
        self.open = np.union1d(self.open, places)
        self.provisional[places] = False
        self.strict[places] = True
        self.tried_as_received, self.tried_erasures = _Seen(), _Seen()
        self.cells.release(places)
        return True


def _meet(magnitudes: Bytes, fixed: Bytes) -> Mask:
    """Which columns, bool[columns], a solution alters where they are `fixed`."""
    return np.asarray(np.bitwise_or.reduce(magnitudes & fixed, axis=0) != 0)


@dataclass(frozen=True)
class _Posed:
    """Unsolved columns as a problem: their numbers, what is known, and of all n strips what follows.

    `fixed` is 255 for symbols that are right and 0 for others, `late` marks erasures in cells that were
    right; `syndromes` is uint8[r, columns].
    """

    places: Strips
    known: Reliability
    fixed: Bytes
    late: Mask
    syndromes: Bytes
    inner_distance: int

    def erasing(self, strips: Strips, trial: Mask) -> Bytes:
        """uint8[n, columns]: what a trial on the rows of `strips` erases."""
        erased = self.late.copy()
        erased[strips] = trial
        return erased.view(np.uint8)

    @cached_property
    def late_count(self) -> Strips:
        """How many symbols of each column were lost after they had been right."""
        return column_counts(self.late)

    @cached_property
    def distances(self) -> Distances:
        """The measure of how far solutions are from what was received."""
        return Distances.of(self.known, self.inner_distance)

    @cached_property
    def least_distance(self) -> NDArray[np.float64]:
        """A lower bound on the generalised distance of any codeword, for each column."""
        void, corrected = self._unclean
        return np.asarray(void + corrected * (2 / self.inner_distance))

    @cached_property
    def slack(self) -> NDArray[np.float64]:
        """How much cheaper than 2 a symbol all symbols of a column together are for a rival, at the most."""
        void, corrected = self._unclean
        return np.asarray(void + corrected * ((self.inner_distance - 1) // 2 * 2 / self.inner_distance))

    @cached_property
    def _unclean(self) -> tuple[Strips, Strips]:
        """How many symbols of each column have no reliability at all, and how many one between 0 and 1."""
        status = self.known.status
        if not self.known.erased.any():
            undecoded = column_counts(status >= UNUSABLE)
            return column_counts(status >= DENSE), column_counts(status != 0) - undecoded
        void = self.known.erased | (self.known.status >= DENSE)
        corrected = (self.known.status != 0) & (self.known.status < UNUSABLE) & ~void
        return column_counts(void), column_counts(corrected)

    @cached_property
    def doubtful(self) -> Strips:
        """How many symbols of each column may be wrong."""
        return column_counts(self.fixed == 0)


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
