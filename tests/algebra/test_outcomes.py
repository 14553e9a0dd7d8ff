"""What the inner decoder makes of symbols, against brute force, published codes and the real decoder."""

from fractions import Fraction
from math import comb, exp, log

import numpy as np
import pytest

from oakum.algebra.inner import InnerCode, krawtchouk, macwilliams
from oakum.algebra.outcomes import (
    PatternCounts,
    SymbolChances,
    count_patterns,
    log_sum,
    pattern_counts,
    symbol_chances,
)
from oakum.algebra.splits import dual_split, dual_splits, split_weights
from oakum.probability import ColumnChances

HAMMING, BCH6, BCH8 = InnerCode.known()
RATES = (1e-3, 2e-3, 3e-3, 5e-3, 1e-2)


# ---- split weights


@pytest.mark.parametrize("inner", [HAMMING, BCH6], ids=lambda inner: inner.notation)
def test_split_weights_add_up_to_the_weight_distribution(inner: InnerCode) -> None:
    totals = [0] * (inner.n + 1)
    for (v, u), count in split_weights(inner).items():
        totals[v + u] += count
    assert totals == [inner.m * count for count in inner.weight_distribution()]


def test_the_frozen_tables_are_what_listing_the_dual_gives() -> None:
    frozen = {(v, u): n for (v, u), n in _dual_from(split_weights(HAMMING), HAMMING).items() if n}
    assert frozen == dual_splits(HAMMING)


def _dual_from(weights: dict[tuple[int, int], int], inner: InnerCode) -> dict[tuple[int, int], int]:
    """The split MacWilliams identity backwards, in plain loops."""
    inside = [krawtchouk(8, v) for v in range(9)]
    rest = [krawtchouk(inner.n - 8, u) for u in range(inner.n - 7)]
    return {
        (v, u): sum(n * inside[a][v] * rest[b][u] for (a, b), n in weights.items()) >> inner.k
        for v in range(9)
        for u in range(inner.n - 7)
    }


def test_words_of_weight_four_are_split_as_listing_them_says() -> None:
    columns = HAMMING.check_columns.ravel().tolist()
    where: dict[int, list[tuple[int, int]]] = {}
    for i in range(128):
        for j in range(i):
            where.setdefault(columns[i] ^ columns[j], []).append((j, i))
    counted: dict[tuple[int, int], int] = {}
    for pairs in where.values():
        for x in range(len(pairs)):
            for y in range(x):
                places = {*pairs[x], *pairs[y]}
                for byte in range(HAMMING.m):
                    v = sum(place // 8 == byte for place in places)
                    counted[v, 4 - v] = counted.get((v, 4 - v), 0) + 1
    # Each word of weight 4 falls into two pairs in three ways.
    expected = {key: 3 * n for key, n in split_weights(HAMMING).items() if sum(key) == 4}
    assert counted == expected


def test_one_byte_of_the_longest_dual() -> None:
    split = dual_split(BCH8, 5)
    assert sum(split.values()) == 1 << 24
    assert all(count > 0 for count in split.values()) and split[0, 0] == 1


# ---- chances of a symbol


def test_every_pattern_has_one_outcome() -> None:
    counts = pattern_counts(HAMMING)
    # Weight 2: none is corrected; even weights never come within one flip of another codeword.
    assert exp(counts.flagged[2]) == pytest.approx(comb(128, 2))
    assert exp(counts.flagged_hit[2]) == pytest.approx(comb(128, 2) - comb(120, 2))
    # Weight 3: all odd syndromes belong to a single flip, so that all are taken for a codeword of weight 4.
    assert counts.flagged[3] == -np.inf


def test_without_an_inner_code_a_symbol_is_wrong_when_any_bit_is() -> None:
    chances = symbol_chances(InnerCode.none(), 1e-3)
    assert exp(chances.wrong_as_received) == pytest.approx(1 - (1 - 1e-3) ** 8, rel=1e-12)
    assert chances.flagged == -np.inf


def test_chances_far_below_the_smallest_float() -> None:
    chances = symbol_chances(BCH8, 1e-100)
    # Three flips are corrected and four flagged: C(128, 4) p^4, and half as many hits in proportion.
    assert chances.flagged == pytest.approx(log(comb(128, 4)) - 400 * log(10), rel=1e-9)
    # The likeliest mistake: five of the eight ones of a word of weight 8, at distance 3.
    assert chances.wrong_unflagged < -480 * log(10)


@pytest.mark.parametrize("inner", [HAMMING, BCH6, BCH8], ids=lambda inner: inner.notation)
def test_the_word_decoder_does_what_the_counts_say(inner: InnerCode) -> None:
    """The real decoder on all-zero words with random flips; five standard deviations at the most."""
    from oakum.kernels.words import FLAGGED, WordCodec

    rng = np.random.default_rng(41)
    words, rate = 60_000, 0.02
    flips = rng.random((words, inner.n)) < rate
    received = np.packbits(flips, axis=1, bitorder="little")
    cells, parity = received[:, : inner.m].copy(), received[:, inner.m :].copy()
    status = np.empty((words, 1), np.uint8)
    WordCodec(inner).correct(cells, parity, np.zeros(words, np.int64), status)
    flagged = status[:, 0] == FLAGGED
    chances = symbol_chances(inner, rate)
    for seen, expected in (
        (flagged.mean(), exp(chances.flagged)),
        (np.count_nonzero(cells) / cells.size, exp(chances.wrong_as_received)),
        (np.count_nonzero(cells[~flagged]) / cells.size, exp(chances.wrong_unflagged)),
    ):
        # Bytes of one word go together, so that words and not bytes are the sample.
        assert seen == pytest.approx(expected, abs=5 * (expected / words) ** 0.5)


# ---- a whole column in one pass. No published table: another program summed the binomial laws of the
#      better of both ways (computed; its Monte Carlo agreed within its error)


def _one_pass(r: int, symbol: SymbolChances) -> float:
    return exp(ColumnChances(255, symbol).log_loss(r))


@pytest.mark.parametrize(
    ("r", "inner", "printed"),
    [
        (46, InnerCode.none(), ("2.2e-18", "5.9e-12", "1.6e-08", "8.4e-05", "1.8e-01")),
        (32, HAMMING, ("5.7e-34", "7.6e-19", "9.1e-12", "1.3e-05", "3.7e-01")),
        (60, InnerCode.none(), ("1.1e-26", "3.9e-18", "1.8e-13", "3.4e-08", "8.4e-03")),
    ],
)
def test_one_pass_table(r: int, inner: InnerCode, printed: tuple[str, ...]) -> None:
    assert tuple(f"{_one_pass(r, symbol_chances(inner, p)):.1e}" for p in RATES) == printed


@pytest.mark.parametrize(
    ("r", "printed"),
    [
        (16, ("7.8e-33", "7.9e-21", "6.8e-14", "2.2e-06", "3.0e-01")),
        (32, ("4.7e-68", "1.3e-45", "2.1e-32", "5.8e-17", "1.1e-03")),
    ],
)
def test_one_pass_table_with_fifteen_check_bits(r: int, printed: tuple[str, ...]) -> None:
    """The table's [128,112,6] has 15 check bits: the shortened extended BCH code [127,112,6], A6 = 325374."""
    assert tuple(f"{_one_pass(r, _fifteen_check_bits(p)):.1e}" for p in RATES) == printed


def _fifteen_check_bits(p: float) -> SymbolChances:
    # The dual of [128,113,6] has weights 0, 56, 64, 72 and 128 (MacWilliams and Sloane, chapter 15; memory).
    dual = [0] * 129
    dual[0] = dual[128] = 1
    dual[56] = dual[72] = 8128
    dual[64] = 2**15 - 2 - 2 * 8128
    longer = macwilliams(dual)
    assert (longer[6], longer[8]) == (341376, 87288624)  # enumeration of the dual, MacWilliams (computed)
    shorter = [count * (128 - w) // 128 for w, count in enumerate(longer)][:128]
    assert shorter[6] == 325374  # the same of the shortened code (computed)
    spread = {
        (v, u): Fraction(shorter[v + u] * comb(8, v) * comb(119, u), comb(127, v + u))
        for v in range(9)
        for u in range(120)
        if shorter[v + u]
    }
    return _chances(count_patterns(spread, 127, 2, 1), 127, p)


def _chances(counts: PatternCounts, n: int, p: float) -> SymbolChances:
    weights = np.arange(n + 1)
    each = weights * log(p) + (n - weights) * np.log1p(-p)
    unflagged = log_sum(counts.mistaken_hit + each)
    return SymbolChances(
        float(np.logaddexp(unflagged, log_sum(counts.flagged_hit + each))),
        unflagged,
        log_sum(counts.flagged + each),
    )


def test_the_subcode_with_fewer_light_words_does_better() -> None:
    # Our [128,112,6] spends its sixteenth check bit: A6 = 169344 in 128 bits instead of 325374 in 127.
    assert _one_pass(16, symbol_chances(BCH6, 3e-3)) < _one_pass(16, _fifteen_check_bits(3e-3))
