"""What one pass of inner and outer decoding loses on the binary symmetric channel, by formula.

From the weights of the inner code, with a byte standing for any 8 of a word's bits (exact in the mean over
all orders of the bits). Textbook arithmetic: Lin and Costello, Error Control Coding, chapters on the weight
distribution of linear codes and on concatenated codes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from math import comb

import numpy as np
from scipy.stats import binom

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.inner import InnerCode
from oakum.algebra.outer import OuterCode

BYTE = 8


@dataclass(frozen=True)
class Spectrum:
    """What becomes of w flips in a word, w = 0..n.

    Shares of the C(n, w) patterns that are decoded, rightly or not, and after which a byte is wrong.
    """

    decoded: np.ndarray
    wrong: np.ndarray


@dataclass(frozen=True)
class SymbolOdds:
    """Chances of one symbol after bounded-distance inner decoding, at one flip rate.

    Its word is flagged, and as received the symbol is right (`flagged_right`) or not (`flagged_wrong`); or
    its word is decoded and the symbol is wrong (`miscorrected`).
    """

    flagged_right: float
    flagged_wrong: float
    miscorrected: float

    @property
    def wrong(self) -> float:
        """The symbol is wrong with nothing erased."""
        return self.flagged_wrong + self.miscorrected


def spectrum(weights: Sequence[int], t: int) -> Spectrum:
    """For a code with this weight distribution, decoded up to t flips.

    Each codeword of weight h has C(h, i) C(n - h, j - i) words at distance j with i of its ones missing, and
    these have weight h + j - 2 i. One of its bytes is zero in the share C(n - 8, h) / C(n, h) of all orders.
    """
    n = len(weights) - 1
    decoded, wrong = np.zeros(n + 1), np.zeros(n + 1)
    for h, count in enumerate(weights):
        nonzero = 1 - comb(n - BYTE, h) / comb(n, h)
        for j in range(t + 1):
            for i in range(max(0, j - n + h), min(h, j) + 1):
                w = h + j - 2 * i
                share = count * comb(h, i) * comb(n - h, j - i) / comb(n, w)
                decoded[w] += share
                wrong[w] += share * nonzero
    return Spectrum(decoded, wrong)


def odds_of(words: Spectrum, rate: float) -> SymbolOdds:
    """The chances of a symbol at a flip rate."""
    n = len(words.decoded) - 1
    weights = np.arange(n + 1)
    chance = binom.pmf(weights, n, rate)
    flagged = chance * np.maximum(1 - words.decoded, 0)
    untouched = np.array([comb(n - BYTE, w) / comb(n, w) for w in range(n + 1)])
    return SymbolOdds(
        float(flagged @ untouched), float(flagged @ (1 - untouched)), float(chance @ words.wrong)
    )


@cache
def _spectrum_of(inner: InnerCode) -> Spectrum:
    return spectrum(inner.weight_distribution(), inner.t)


def symbol_odds(inner: InnerCode, rate: float) -> SymbolOdds:
    """The chances at a flip rate; without an inner code nothing is ever flagged."""
    if not inner.p:
        return SymbolOdds(0.0, 0.0, 1 - (1 - rate) ** BYTE)
    return odds_of(_spectrum_of(inner), rate)


def lost_as_received(outer: OuterCode, odds: SymbolOdds) -> float:
    """The chance that a column has more than r / 2 wrong symbols, with nothing erased."""
    return float(binom.sf(outer.r // 2, outer.n, odds.wrong))


def lost_erasing(outer: OuterCode, odds: SymbolOdds) -> float:
    """The chance that 2 miscorrected + flagged > r in a column with the symbols of flagged words erased."""
    m = np.arange(outer.n + 1)
    flagged = (odds.flagged_right + odds.flagged_wrong) / (1 - odds.miscorrected)
    return float(binom.pmf(m, outer.n, odds.miscorrected) @ binom.sf(outer.r - 2 * m, outer.n - m, flagged))


def lost_in_one_pass(outer: OuterCode, odds: SymbolOdds) -> float:
    """The chance that a column is lost both as received and with all symbols of flagged words erased.

    Of w symbols that are wrong as received z are miscorrected, and x others are flagged:
    the sum over w > r / 2 of P(w) times the sum over z of P(z | w) P(x + w + z > r | w).
    """
    n, r = outer.n, outer.r
    total = 0.0
    for w in range(r // 2 + 1, n + 1):
        z = np.arange(w + 1)
        too_many = binom.sf(r - w - z, n - w, odds.flagged_right / (1 - odds.wrong))
        total += binom.pmf(w, n, odds.wrong) * (binom.pmf(z, w, odds.miscorrected / odds.wrong) @ too_many)
    return float(total)


def lost_columns(code: ConcatenatedCode, rate: float) -> float:
    """The share of columns that one pass loses at a flip rate."""
    return lost_in_one_pass(code.outer, symbol_odds(code.inner, rate))


def rate_of_loss(code: ConcatenatedCode, share: float) -> float:
    """The flip rate at which one pass loses `share` of the columns, to four digits."""
    low, high = 1e-6, 0.1
    while high / low > 1.0001:
        middle = (low * high) ** 0.5
        low, high = (low, middle) if lost_columns(code, middle) > share else (middle, high)
    return high
