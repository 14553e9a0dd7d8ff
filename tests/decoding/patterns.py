"""Patterns of flips in the words through one column that are as hard on a decoder as so many flips can be.

What a bounded-distance inner decoder makes of a word with w flips, and the fewest flips for it: with e <= t
flips the symbol is right and the word has status e; with d - e flips that lie in a codeword of weight d the
symbol is wrong and the status e as well; with t + 1 flips the word is flagged and the symbol wrong as it
was received. A `Kind` is one such case. How few flips defeat a set of trials is then an integer program.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from functools import cache
from itertools import combinations

import numpy as np

from oakum.algebra.inner import InnerCode
from oakum.geometry import Geometry
from oakum.kernels.columns import ColumnDecoder

FLAGGED = 255


@dataclass(frozen=True)
class Kind:
    """What has become of a word: the inner decoder's status, whether the symbol is wrong, how many flips."""

    status: int
    wrong: bool
    flips: int


def kinds(inner: InnerCode) -> list[Kind]:
    """All cases that can be worth an adversary's flips."""
    return [
        *(Kind(e, True, inner.d - e) for e in range(inner.t + 1)),
        Kind(FLAGGED, True, inner.t + 1),
        *(Kind(e, False, e) for e in range(1, inner.t + 1)),
    ]


def erased_by(trial: int, kind: Kind, t: int) -> bool:
    """Trial 0 erases nothing, trial 1 flagged words, trial 2 also those with t corrected flips, and so on."""
    return trial > 0 and (kind.status == FLAGGED or (kind.status > 0 and kind.status >= t + 2 - trial))


def load(trial: int, kind: Kind, t: int) -> int:
    """What a word costs the outer code in a trial: an erasure 1, a wrong symbol 2."""
    return 1 if erased_by(trial, kind, t) else 2 * kind.wrong


def worst_pattern(inner: InnerCode, n: int, r: int, trials: list[int]) -> Counter[Kind]:
    """The fewest flips that make all of `trials` fail (2 errors + erasures > r): kinds and their numbers.

    Minimise sum of x_k flips_k over integers x_k >= 0 with sum of x_k <= n and, for each trial j, sum of
    x_k load_jk >= r + 1.
    """
    from scipy.optimize import LinearConstraint, milp

    choices = kinds(inner)
    loads = [[load(trial, kind, inner.t) for kind in choices] for trial in trials]
    limits = [LinearConstraint(np.array(loads), lb=r + 1), LinearConstraint(np.ones((1, len(choices))), ub=n)]
    found = milp([kind.flips for kind in choices], integrality=np.ones(len(choices)), constraints=limits)
    assert found.success
    return Counter({kind: round(x) for kind, x in zip(choices, found.x, strict=True) if round(x)})


def flips_in(pattern: Counter[Kind]) -> int:
    """The flips of all words of a pattern together."""
    return sum(kind.flips * count for kind, count in pattern.items())


@dataclass(frozen=True)
class WordPlace:
    """Where the word of a strip that holds a column has its bits."""

    geometry: Geometry
    strip: int
    column: int

    @property
    def inside(self) -> tuple[int, int]:
        """The number of the word in its cell, and that of the column's byte in the word."""
        g = self.geometry
        return divmod((self.column - g.stagger(self.strip)) % g.depth, g.m)

    @property
    def full(self) -> bool:
        """Whether the word is not shortened."""
        return (self.inside[0] + 1) * self.geometry.m <= self.geometry.depth

    def split(self, bits: list[int]) -> tuple[list[tuple[int, int]], list[tuple[int, int]]]:
        """Bits of the word as flips of the cell and of its inner parity (see `simulation.Flips`)."""
        g = self.geometry
        word, _ = self.inside
        start = g.stagger(self.strip) + word * g.m
        cell = [8 * ((start + bit // 8) % g.depth) + bit % 8 for bit in bits if bit < 8 * g.m]
        parity = [8 * word * g.p + bit - 8 * g.m for bit in bits if bit >= 8 * g.m]
        return [(self.strip, bit) for bit in cell], [(self.strip, bit) for bit in parity]


def bits_of(kind: Kind, inner: InnerCode, byte: int, rng: np.random.Generator) -> list[int]:
    """Bits of a word whose flipping makes it a word of `kind`, as seen from byte `byte` of the message."""
    here = int(rng.integers(8 * byte, 8 * byte + 8))
    if kind.status == FLAGGED:
        return [here, *_others(inner, byte, kind.flips - 1, rng)]
    if not kind.wrong:
        return _others(inner, byte, kind.flips, rng)
    codeword = light_codeword(inner, here, rng)
    spared = rng.choice([bit for bit in codeword if bit != here], kind.status, replace=False)
    # The flips that are spared are those that the inner decoder adds, and only then the symbol is wrong ...
    if kind.status and rng.random() < 0.5:  # ... or one of them is the symbol's own.
        spared[0] = here
    return [bit for bit in codeword if bit not in spared]


def _others(inner: InnerCode, byte: int, count: int, rng: np.random.Generator) -> list[int]:
    """Different bits of a word outside one byte."""
    outside = [bit for bit in range(inner.n) if bit // 8 != byte]
    return [int(bit) for bit in rng.choice(outside, count, replace=False)]


def light_codeword(inner: InnerCode, bit: int, rng: np.random.Generator) -> list[int]:
    """The ones of a codeword of weight d that has a one at `bit`, found by meeting in the middle."""
    columns = inner.check_columns.ravel()
    half = inner.d // 2
    while True:
        others = [int(b) for b in rng.choice(inner.n, half - 1, replace=False)]
        syndrome = int(np.bitwise_xor.reduce(columns[[bit, *others]]))
        for partner in _halves(inner).get(syndrome, ()):
            if len({bit, *others, *partner}) == inner.d:
                return sorted({bit, *others, *partner})


@cache
def _halves(inner: InnerCode) -> dict[int, list[tuple[int, ...]]]:
    """All sets of d / 2 bits by their syndrome."""
    columns = inner.check_columns.ravel().tolist()
    found: dict[int, list[tuple[int, ...]]] = {}
    for bits in combinations(range(inner.n), inner.d // 2):
        syndrome = 0
        for bit in bits:
            syndrome ^= columns[bit]
        found.setdefault(syndrome, []).append(bits)
    return found


def rival_flips(decoder: ColumnDecoder, strips: list[int], t: int) -> tuple[dict[int, int], int]:
    """The fewest flips that turn r/2 + 1 symbols into those of another codeword at distance D.

    `strips` are D places. One codeword that is zero elsewhere is found by erasing all of them but one, and
    all its multiples are tried. Gives the pattern for each strip chosen, and the flips it takes, at least
    t + 1 in a word so that the inner decoder does not undo them.
    """
    first, *others = strips
    multiples = np.zeros((decoder.outer.n, 255), np.uint8)
    multiples[first] = np.arange(1, 256)
    multiples[others], _ = decoder.erasure_solver(others).solve(decoder.syndromes(multiples))
    cost = np.maximum(np.bitwise_count(multiples[strips]).astype(int), t + 1)
    needed = decoder.outer.r // 2 + 1
    best = int(np.sort(cost, axis=0)[:needed].sum(axis=0).argmin())
    cheapest = np.argsort(cost[:, best], kind="stable")[:needed]
    return {strips[i]: int(multiples[strips[i], best]) for i in cheapest}, int(cost[cheapest, best].sum())
