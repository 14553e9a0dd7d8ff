"""How the ones of an inner code's words are shared between one message byte and the rest of the word.

An outer symbol is one byte of a word, and what the inner decoder makes of the symbol depends on both parts:
the split weight enumerator B[v, u] counts the codewords with v ones in the byte and u in the other bits. It
comes from that of the dual code by the split MacWilliams identity, each part with its own Krawtchouk
polynomials (MacWilliams and Sloane, The Theory of Error-Correcting Codes, chapter 5, section 6).

All counts are sums over the m message bytes: a column meets every byte of the words equally often, since the
words are staggered. The dual of EB(128,104) has 2^24 words, so the dual enumerators are frozen as a table;
python -m oakum.algebra.splits writes it.
"""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import InnerCode, krawtchouk

BYTE = 8

Split = dict[tuple[int, int], int]
"""How many words have v ones in the byte and u elsewhere, by (v, u)."""


def dual_split(inner: InnerCode, byte: int) -> Split:
    """The split weight enumerator of the dual code for message byte `byte`, by listing all its words."""
    words = np.arange(1 << BYTE * inner.p, dtype=np.uint32)
    inside = _weights(words, inner.check_columns[byte])
    total = inside.copy()
    for t in range(inner.m + inner.p):
        if t != byte:
            total += _weights(words, inner.check_columns[t])
    pairs = inside.astype(np.int32) << 8 | (total - inside)
    counts = np.bincount(pairs)
    return {divmod(int(pair), 256): int(counts[pair]) for pair in np.flatnonzero(counts)}


def _weights(words: NDArray[np.uint32], columns: NDArray[np.uint32]) -> NDArray[np.uint8]:
    """The ones that each combination of the check matrix's rows has in the given columns."""
    weights = np.zeros(len(words), np.uint8)
    for column in columns:
        weights += np.bitwise_count(words & column) & np.uint8(1)
    return weights


def dual_splits(inner: InnerCode) -> Split:
    """The sum of `dual_split` over all message bytes."""
    total: Split = {}
    for byte in range(inner.m):
        for pair, count in dual_split(inner, byte).items():
            total[pair] = total.get(pair, 0) + count
    return total


@cache
def split_weights(inner: InnerCode) -> dict[tuple[int, int], int]:
    """B[v, u] of the code itself, summed over the message bytes, exactly; entries that are 0 are left out."""
    dual = _frozen()[inner.notation]
    rest = inner.n - BYTE
    by_byte = [krawtchouk(BYTE, v) for v in range(BYTE + 1)]
    by_rest = {u: krawtchouk(rest, u) for _, u in dual}
    sums = {
        v: [
            sum(by_byte[dv][v] * count for (dv, du), count in dual.items() if du == column)
            for column in by_rest
        ]
        for v in range(BYTE + 1)
    }
    weights = {}
    for v in range(BYTE + 1):
        for u in range(rest + 1):
            total = sum(a * by_rest[du][u] for a, du in zip(sums[v], by_rest, strict=True))
            if total:
                weights[v, u] = total >> BYTE * inner.p
    return weights


@cache
def _frozen() -> dict[str, Split]:
    from importlib.resources import files

    text = files("oakum.algebra").joinpath("tables", "splits.json").read_text(encoding="ascii")
    return {name: {(v, u): count for v, u, count in rows} for name, rows in json.loads(text).items()}


def frozen_text() -> str:
    """The contents of tables/splits.json: by code, rows of v, u and the number of words of the dual."""
    parts = []
    for inner in InnerCode.known():
        rows = ", ".join(f"[{v}, {u}, {n}]" for (v, u), n in sorted(dual_splits(inner).items()))
        parts.append(f'"{inner.notation}": [{rows}]')
    return "{" + ",\n".join(parts) + "}\n"


if __name__ == "__main__":
    Path(__file__).with_name("tables").joinpath("splits.json").write_text(frozen_text(), encoding="ascii")
