"""How likely each symbol is wrong, from what the inner decoder saw: the order in which symbols are erased.

A word of u bytes not known to be right, and its parity, has B = 8u + 8p bits that may have flipped, each at
a rate f. Patterns of w flips that give one syndrome number about C(B, w) / 2^(8p - 1) (half of all
syndromes, since the extended codes tell even from odd), and each has the likelihood (f / (1 - f))^w; so e
corrected flips stand against d - e flips elsewhere, and a flagged word holds t + 1 flips, rarely two more.
For p = 1 the pairs behind a flagged word are counted exactly. (Bayes' rule; the counts are those of Lin and
Costello, Error Control Coding, on the weight distribution of cosets, in the mean over all cosets.)
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import InnerCode
from oakum.kernels.compiling import Kernel
from oakum.kernels.words import WORD, WordCodec

Bytes = NDArray[np.uint8]
Floats = NDArray[np.float32]


def doubts(
    codec: WordCodec,
    received: Bytes,
    corrected: Bytes,
    parity: Bytes,
    staggers: NDArray[np.int64],
    status: Bytes,
    pinned: Bytes,
    rate: float,
) -> Bytes:
    """uint8[R, W]: the chance, times 255, that each byte of `corrected` is wrong.

    `received` uint8[R, W] are the cells before inner decoding (with what is pinned put in) and `parity`
    uint8[R, G] as received; `corrected` and `status` are what `WordCodec.correct` made of them; statuses of
    250 to 254 stand for words left as received. `rate` is the flip rate of the bits. Releases the GIL.
    """
    inner = codec.inner
    out = np.zeros(received.shape, np.uint8)
    if not inner.p or not received.size:
        return out
    syndromes = np.empty_like(parity)
    codec.parity_rows(received, staggers, syndromes, cell=received.shape[1])
    syndromes ^= parity
    columns, bit_of = _columns(inner)
    WEIGH_WORDS(
        received, corrected, pinned, status, syndromes, staggers, inner.m, inner.p, columns, bit_of,
        tables(inner, _rounded(rate)), out, np.empty(WORD, np.float32),
    )  # fmt: skip
    return out


@lru_cache(maxsize=8)
def _columns(inner: InnerCode) -> tuple[NDArray[np.uint32], NDArray[np.int16]]:
    columns = np.array(inner.check_columns, np.uint32).ravel()
    bit_of = np.full(256, -1, np.int16)
    if inner.p == 1:
        bit_of[columns] = np.arange(len(columns), dtype=np.int16)
    return columns, bit_of


def _rounded(rate: float) -> float:
    """Two digits are plenty, and let the tables be kept."""
    return float(f"{min(max(rate, 1e-9), 0.1):.1e}")


@lru_cache(maxsize=64)
def tables(inner: InnerCode, rate: float) -> Floats:
    """float32[2 t + 4, 17] by the number of open bytes in a word.

    Row 0: a byte of a flagged word is wrong. 1: one of a word left as received. 2e and 2e + 1, with e flips
    corrected: an altered byte is wrong, another one is. The last two: the weight of two more flips in a
    flagged word against the pairs, and the chance that a byte is among them.
    """
    t, d, p = inner.t, inner.d, inner.p
    odds = rate / (1 - rate)
    out = np.zeros((2 * t + 4, 17), np.float32)
    for u in range(1, inner.m + 1):
        bits = 8 * u + 8 * p
        among = [1 - (1 - 8 / bits) ** w for w in range(d + 3)]
        out[0, u] = among[t + 1]
        out[1, u] = min(1.0, 8 * rate)
        for e in range(1, t + 1):
            others = comb(bits, d - e) / 2 ** (8 * p - 1) * odds ** (d - 2 * e)
            wrong = others / (1 + others)
            out[2 * e, u], out[2 * e + 1, u] = wrong, wrong * among[d - e]
        out[-2, u] = comb(bits, t + 3) / 2 ** (8 * p - 1) * odds**2
        out[-1, u] = among[t + 3]
    return out


def gives_known_doubts(compiled: Callable[..., Any]) -> bool:
    """Whether two flips in the only open byte of a word, and a corrected flip, are weighed right."""
    inner = InnerCode("EH", 15, 1)
    columns, bit_of = _columns(inner)
    received = np.zeros((2, 15), np.uint8)
    corrected = received.copy()
    corrected[1, 4] = 1
    pinned = np.ones((2, 15), np.uint8)
    pinned[0, 3] = pinned[1] = 0
    status = np.array([[255], [1]], np.uint8)
    syndromes = np.array([[columns[24] ^ columns[29]], [columns[32]]], np.uint8)
    table = tables(inner, 0.01)
    found = np.zeros((2, 15), np.uint8)
    staggers = np.zeros(2, np.int64)
    compiled(
        received, corrected, pinned, status, syndromes, staggers, 15, 1, columns, bit_of, table, found,
        np.empty(WORD, np.float32),
    )  # fmt: skip
    explained = [pair for pair in _pairs(columns) if columns[pair[0]] ^ columns[pair[1]] == syndromes[0, 0]]
    inside = [pair for pair in explained if any(24 <= bit < 32 for bit in pair)]
    chance = (len(inside) + table[-2, 1] * table[-1, 1]) / (len(explained) + table[-2, 1])
    expected = np.zeros((2, 15))
    expected[0, 3] = chance
    expected[1] = table[3, 15]
    expected[1, 4] = table[2, 15]
    return bool(np.abs(found - 255 * expected).max() <= 1)


def _pairs(columns: NDArray[np.uint32]) -> list[tuple[int, int]]:
    """Pairs of bits in byte 3 and the parity of a word."""
    open_bits = [*range(24, 32), *range(len(columns) - 8, len(columns))]
    return [(a, b) for i, a in enumerate(open_bits) for b in open_bits[i + 1 :]]


WEIGH_WORDS = Kernel(".doubts_kernels.weigh_words", gives_known_doubts, "the inner code")
