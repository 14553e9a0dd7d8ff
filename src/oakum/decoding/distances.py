"""How far solutions are from what was received, and whether another codeword may be nearer.

The generalised distance of Forney (IEEE Trans. Inform. Theory 12, 1966), in symbols: with e flips corrected
in its word a symbol has the reliability a = (d - 2e)/d, an erased or flagged one 0; a symbol that a solution
leaves as it is adds 1 - a, one that it alters adds 1 + a. At most one codeword is nearer than D, and the
codeword that was protected is, if the words through its column hold fewer than D d / 2 flips.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from oakum.decoding.trials import Bytes, Mask, Reliability, column_counts
from oakum.kernels.words import FLAGGED

Counts = NDArray[np.intp]
Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Distances:
    """The open symbols of some columns by their reliability, in rising order of it.

    `level` is uint8[R, columns], the number of a symbol's reliability in `reliabilities`, and `FIXED` for
    those that are not open. `counts` is int[reliabilities, columns].
    """

    reliabilities: Floats
    level: Bytes
    counts: Counts

    @staticmethod
    def of(known: Reliability, d: int) -> Distances:
        """For an inner code of distance d; undecoded words are as good as clean ones."""
        t = (d - 1) // 2
        level = np.full(known.status.shape, t + 1, np.uint8)
        corrected = (known.status > 0) & (known.status <= t)
        level[corrected] = t + 1 - known.status[corrected]
        level[known.erased | known.dense | (known.status == FLAGGED)] = 0
        level[~known.open] = FIXED
        reliabilities = np.array([0.0, *((d - 2 * e) / d for e in range(t, -1, -1))])
        return Distances(reliabilities, level, _counts(level, len(reliabilities)))

    def altered(self, wrong: Mask, columns: Counts) -> Counts:
        """How many symbols of each reliability solutions alter: int[reliabilities, len(columns)].

        `wrong` is bool[R, len(columns)].
        """
        level = np.where(wrong, np.take(self.level, columns, axis=1), np.uint8(FIXED))
        return _counts(level, len(self.reliabilities))

    def of_solutions(self, altered: Counts, columns: Counts) -> Floats:
        """The generalised distance of solutions for `columns` that alter so many symbols."""
        return np.asarray(self._least(columns) + 2 * self.reliabilities @ altered)

    def of_rivals(self, altered: Counts, columns: Counts, distance: int) -> Floats:
        """The least generalised distance of any codeword but the solution, infinite where there is none.

        A rival differs from the solution in at least `distance` = D symbols. It costs least if it leaves
        those that the solution alters as they were received and alters the least reliable of the others
        (Taipale and Pursley, IEEE Trans. Inform. Theory 37, 1991).
        """
        return self._rivals(self.counts[:, columns] - altered, altered.sum(axis=0), columns, distance)

    def rival_bound(self, most_altered: Counts, columns: Counts, distance: int) -> Floats:
        """A lower bound on `of_rivals` for solutions that alter at most so many symbols, whichever."""
        return self._rivals(self.counts[:, columns], most_altered, columns, distance)

    def _least(self, columns: Counts) -> Floats:
        """What every codeword costs at least."""
        return np.asarray((1 - self.reliabilities) @ self.counts[:, columns])

    def _rivals(self, free: Counts, altered: Counts, columns: Counts, distance: int) -> Floats:
        missing = distance - altered
        total = self._least(columns)
        for reliability, there in zip(self.reliabilities, free, strict=True):
            taken = np.clip(missing, 0, there)
            total += 2 * reliability * taken
            missing = missing - taken
        return np.where(missing > 0, np.inf, total)


FIXED = 255


def _counts(level: Bytes, levels: int) -> Counts:
    return np.array([column_counts(level == number) for number in range(levels)])
