"""What bounded-distance inner decoding makes of a word and of one symbol in it, on a symmetric channel.

Every error pattern of a word leads to one of three outcomes: it is corrected, it is flagged and kept as
received, or it is taken for another codeword. Patterns are counted exactly, by weight, in integers; only
then comes the flip rate p, in logarithms, so that no probability is too small to be told apart from zero.
The counting is the classical one of decoder error by the weight distribution (Blahut, Algebraic Codes for
Data Transmission, chapter 12), refined by whether the symbol in question is hit.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from math import comb, log

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import NONE, InnerCode
from oakum.algebra.splits import BYTE, split_weights

Floats = NDArray[np.float64]
Count = int | Fraction
"""Fractions occur where a published enumerator is spread evenly over the places of a word."""


@dataclass(frozen=True)
class SymbolChances:
    """Natural logarithms of the chances of what becomes of one symbol; -inf for what cannot be.

    `wrong_as_received`: it is wrong when flagged words are kept as they came. `wrong_unflagged`: its word was
    taken for another codeword that differs in it. `flagged`: its word is flagged.
    """

    wrong_as_received: float
    wrong_unflagged: float
    flagged: float


@dataclass(frozen=True)
class PatternCounts:
    """Error patterns of a word by their weight j = 0..N, as logarithms of counts a message byte."""

    flagged: Floats
    flagged_hit: Floats
    """Flagged patterns that hit the byte."""

    mistaken_hit: Floats
    """Patterns taken for a codeword that is not zero in the byte."""


def symbol_chances(inner: InnerCode, p: float) -> SymbolChances:
    """The outcomes of one symbol when every bit of its word is flipped with chance `p`, 0 <= p <= 1/2.

    Without an inner code nothing is flagged, and a symbol is wrong when any of its bits is.
    """
    if p <= 0:
        return SymbolChances(-np.inf, -np.inf, -np.inf)
    if inner.family == NONE:
        wrong = float(np.log(-np.expm1(BYTE * np.log1p(-p))))
        return SymbolChances(wrong, wrong, -np.inf)
    counts = pattern_counts(inner)
    weights = np.arange(inner.n + 1)
    each = weights * np.log(p) + (inner.n - weights) * np.log1p(-p)
    unflagged = log_sum(counts.mistaken_hit + each)
    kept = log_sum(counts.flagged_hit + each)
    return SymbolChances(float(np.logaddexp(unflagged, kept)), unflagged, log_sum(counts.flagged + each))


@cache
def pattern_counts(inner: InnerCode) -> PatternCounts:
    """The error patterns of a whole word of `inner`, averaged over its message bytes."""
    return count_patterns(split_weights(inner), inner.n, inner.t, inner.m)


def count_patterns(weights: Mapping[tuple[int, int], Count], n: int, t: int, share: int) -> PatternCounts:
    """Count the error patterns of words of n bits in which up to t flips are corrected.

    `weights` is a split weight enumerator B[v, u], summed over `share` bytes.
    """
    rest = n - BYTE
    mistaken: list[Count] = [0] * (n + 1)
    hit, mistaken_hit = mistaken.copy(), mistaken.copy()
    for (v, u), codewords in weights.items():
        if v + u == 0:
            continue
        for inside, outside, patterns in _near(v, u, rest, t):
            number = codewords * patterns
            mistaken[inside + outside] += number
            hit[inside + outside] += number if inside else 0
            mistaken_hit[inside + outside] += number if v else 0
    beyond = range(t + 1, n + 1)
    flagged = [share * comb(n, j) - mistaken[j] for j in beyond]
    flagged_hit = [share * (comb(n, j) - comb(rest, j)) - hit[j] for j in beyond]
    return PatternCounts(
        *(_log_each([0] * (n + 1 - len(c)) + c, share) for c in (flagged, flagged_hit, mistaken_hit))
    )


def _near(v: int, u: int, rest: int, t: int) -> list[tuple[int, int, int]]:
    """Patterns within t of a codeword with v ones in the byte and u elsewhere, by their own two weights.

    a ones of the codeword are missing and b others are there, in the byte (a1, b1) and elsewhere (a2, b2).
    """
    found = []
    for a1 in range(min(v, t) + 1):
        for b1 in range(min(BYTE - v, t - a1) + 1):
            inside = comb(v, a1) * comb(BYTE - v, b1)
            for a2 in range(min(u, t - a1 - b1) + 1):
                for b2 in range(min(rest - u, t - a1 - b1 - a2) + 1):
                    number = inside * comb(u, a2) * comb(rest - u, b2)
                    found.append((v - a1 + b1, u - a2 + b2, number))
    return found


def _log_each(counts: Sequence[Count], share: int) -> Floats:
    """Logarithms of counts / share."""
    return np.array([log(c) - log(share) if c else -np.inf for c in counts])


def log_sum(logs: Floats) -> float:
    """The logarithm of the sum of exp(logs), without overflow or underflow."""
    top = float(logs.max(initial=-np.inf))
    return top if top == -np.inf else top + float(np.log(np.exp(logs - top).sum()))
