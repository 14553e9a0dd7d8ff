"""Which symbols a trial erases, and which solutions may be believed.

Two families of trials make a round. The first erases the symbols that are likeliest to be wrong, one
threshold after the other, by the chances of `oakum.kernels.doubts`. The second is generalised minimum
distance decoding on the reliabilities that a bounded-distance inner decoder leaves (Forney, IEEE Trans.
Inform. Theory 12, 1966): nothing erased beyond what is known to be bad, then the flagged words, then also
the words in which most flips were corrected; the guarantee rests on it. Verdicts about bursts add trials
before these; they never take one away.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from oakum.kernels.words import FLAGGED

Bytes = NDArray[np.uint8]
Places = NDArray[np.intp]
Mask = NDArray[np.bool_]

DENSE = 254
"""Status of a word that lies in a burst, of its data or of its inner parity: its bytes stay as received."""

UNUSABLE = 253
"""Status of a word whose inner parity could not be read: its bytes stay as received."""

BELIEVED = float(np.log(1e-9))
"""Log of the chance below which a column that a random word could have passed for is believed."""

USABLE = float(np.log(1e-4))
"""Log of the chance below which such a column is used until something speaks against it."""

THRESHOLDS = (0.5, 0.4, 0.32, 0.25, 0.2, 0.15, 0.1)
"""Chances of being wrong from which symbols are erased. Above a half, erasing is better on average."""

CHASE_COLUMNS = 4096
"""Trials of random erasures made at a time, shared out among the columns."""

REACH = 5.0
"""How far beyond the code's reach a column may be expected to be for such trials to be made."""

DENSE_RUN = 32
"""So many words in a row without a clean one are a burst in the data or in its inner parity ..."""

BY_CHANCE = float(np.log(1e-6))
"""... if the log of the chance that scattered flips leave no clean word among so many is below this."""


@dataclass(frozen=True)
class Reliability:
    """What is known of each symbol of the rows in question, arrays of shape [R, columns].

    `erased`: known to be bad. `dense`: inside a burst, by the density of its words. `verdicts`: several
    opinions on which rows are parts of bursts as a whole, uint8 with one bit for each. `status`: that of the
    symbol's word (see `WordCodec.correct`). `doubts`: the chance, times 255, that the symbol is wrong.
    `open`: not known to be right; elsewhere nothing else is set.
    """

    erased: Mask
    dense: Mask
    verdicts: Bytes
    status: Bytes
    doubts: Bytes
    open: Mask

    def take(self, columns: Places) -> Reliability:
        """The same for some of the columns."""
        return Reliability(
            np.take(self.erased, columns, axis=1),
            np.take(self.dense, columns, axis=1),
            np.take(self.verdicts, columns, axis=1),
            np.take(self.status, columns, axis=1),
            np.take(self.doubts, columns, axis=1),
            np.take(self.open, columns, axis=1),
        )


def column_counts(marked: Mask) -> Places:
    """How many symbols are marked in each column of bool[R, columns], with R at most 255."""
    # numpy's own count along this axis takes ten times as long.
    sums: Bytes = np.add.reduce(marked.view(np.uint8), axis=0, dtype=np.uint8)
    return sums.astype(np.intp)


def erasure_trials(known: Reliability, t: int) -> Iterator[Mask]:
    """The sets of symbols to erase, bool[R, columns], most promising first."""
    opinions = [
        known.verdicts & np.uint8(1 << bit) != 0
        for bit in range(int(known.verdicts.max(initial=0)).bit_length())
    ]
    bases = [known.erased | opinion for opinion in (known.dense, *opinions) if opinion.any()]
    for base in [*bases, known.erased]:
        yield base
        for threshold in THRESHOLDS:
            yield base | (known.doubts >= np.uint8(np.ceil(255 * threshold)))
        flagged = known.status == FLAGGED
        yield base | flagged
        for least in range(t, 0, -1):
            yield base | flagged | ((known.status >= least) & (known.status <= t))


def hopeful(known: Reliability, r: int) -> Mask:
    """Columns, bool[columns], for which a few well chosen erasures more may be enough.

    Each symbol costs twice its chance of being wrong, or 1 when it is erased; a column that is expected to
    cost more than r + REACH is left for later.
    """
    cost = np.minimum(known.doubts.astype(np.float32) / 127.5, 1.0).sum(axis=0)
    return np.asarray(cost <= r + REACH)


def chase_sets(known: Reliability, count: int, random: np.random.Generator) -> Mask:
    """`count` sets of symbols to erase for each column, bool[R, columns, count].

    In the manner of Chase (IEEE Trans. Inform. Theory 18, 1972), but drawn at random: on top of what is
    likelier wrong than right, one to four others, each the likelier the more doubtful it is. Erasing one
    wrong symbol gains one, erasing two wrong ones gains two, a right one loses one.
    """
    base = known.erased | (known.doubts >= 255 * THRESHOLDS[0])
    weights = known.doubts.astype(np.float32) + np.float32(0.01)
    weights[base | ~known.open] = 1e-9
    rows, columns = base.shape
    # The greatest of log weight + Gumbel noise are a sample without replacement (Efraimidis and Spirakis).
    noise = np.maximum(random.standard_exponential((rows, columns, count), np.float32), np.float32(1e-30))
    keys = np.log(weights)[:, :, np.newaxis] - np.log(noise)
    most = min(4, rows)
    chosen = np.argpartition(keys, rows - most, axis=0)[rows - most :]
    sets = np.repeat(base[:, :, np.newaxis], count, axis=2)
    for rank in range(most):
        now = np.arange(count) % most >= rank
        sets[:, :, now] |= _one_hot(chosen[rank][:, now], rows)
    return sets


def _one_hot(rows: Places, count: int) -> Mask:
    return np.asarray(np.arange(count)[:, np.newaxis, np.newaxis] == rows[np.newaxis])


_LOG_FACTORIAL = np.concatenate([[0.0], np.cumsum(np.log(np.arange(1, 256)))])


def chance_of_acceptance(places: Places, errors: Places, checks: Places) -> NDArray[np.float64]:
    """Natural log of the chance that a random word is decoded to `errors` wrong symbols.

    `places` is the number of symbols that may be wrong and are not erased, `checks` = r - erasures:
    C(places, e) (255/256)^e 256^(e - checks) (the expected number of codewords so near a random word).
    """
    errors = np.minimum(errors, places)
    choose = _LOG_FACTORIAL[places] - _LOG_FACTORIAL[errors] - _LOG_FACTORIAL[places - errors]
    return np.asarray(choose + errors * np.log(255 / 256) + (errors - checks) * np.log(256.0))


def dense_words(status: Bytes) -> Mask:
    """Which words, bool[R, words], lie in a run without a clean one that is too long for scattered flips.

    The share of clean words is taken from those outside such runs, so that the runs can only grow longer.
    """
    run = DENSE_RUN
    while True:
        dense = unclean_runs(status, run)
        if not dense.any():
            return dense
        longer = _least_run(status[~dense])
        if longer <= run:
            return dense
        run = longer


def unclean_runs(status: Bytes, run: int) -> Mask:
    """Which words lie among at least `run` in a row none of which is clean."""
    rows, words = status.shape
    if words < run:
        return np.zeros(status.shape, bool)
    clean = np.zeros((rows, words + 1), np.int32)
    np.cumsum(status == 0, axis=1, out=clean[:, 1:])
    begins = clean[:, run:] == clean[:, :-run]
    if not begins.any():
        return np.zeros(status.shape, bool)
    covered = np.zeros((rows, words + 1), np.int32)
    covered[:, : begins.shape[1]] += begins
    covered[:, run:] -= begins[:, : words + 1 - run]
    return np.asarray(np.cumsum(covered, axis=1)[:, :words] > 0)


def has_unclean_run(status: Bytes) -> bool:
    """Whether there can be `DENSE_RUN` words in a row none of which is clean; a quick look."""
    # Pieces of eight words are compared at once; any 15 words in a row hold such a piece.
    unclean = np.zeros((len(status), -(-status.shape[1] // 8)), np.uint64)
    unclean.view(bool)[:, : status.shape[1]] = status != 0
    return bool((unclean == 0x0101010101010101).any())


def _least_run(outside: Bytes) -> int:
    """The least run of words without a clean one that is no accident, by the statuses `outside` of runs."""
    clean = np.count_nonzero(outside == 0) / max(outside.size, 1)
    return DENSE_RUN if clean in (0, 1) else max(DENSE_RUN, int(np.ceil(BY_CHANCE / np.log1p(-clean))))


def neighbouring_rows(strips: Places, room: int, least: int) -> Mask:
    """Which of the strips in question stand next to each other, as those of one long burst do.

    Runs of at least `least`, the longest first, as many as there is `room` for in erasures; none where there
    is no such run.
    """
    chosen = np.zeros(len(strips), bool)
    if not len(strips):
        return chosen
    opens = np.flatnonzero(np.diff(strips, prepend=-2) != 1)
    lengths = np.diff(np.append(opens, len(strips)))
    for i in np.argsort(-lengths, kind="stable"):
        if lengths[i] < least or lengths[i] > room:
            continue
        chosen[opens[i] : opens[i] + lengths[i]] = True
        room -= int(lengths[i])
    return chosen
