"""Plain references for the strip map and the word codec: straight from the definitions, in numpy and slow."""

from __future__ import annotations

from functools import cache
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import InnerCode

Bytes = NDArray[np.uint8]

FLAGGED = 255


def multiply(a: Bytes, b: Bytes, field_poly: int) -> Bytes:
    """Products in GF(2^8): multiply as polynomials, then divide by the field polynomial."""
    product = np.zeros(np.broadcast_shapes(np.shape(a), np.shape(b)), np.int64)
    for i in range(8):
        product ^= np.where(np.asarray(b) >> i & 1, np.asarray(a).astype(np.int64) << i, 0)
    for i in range(14, 7, -1):
        product ^= np.where(product >> i & 1, field_poly << (i - 8), 0)
    return product.astype(np.uint8)


def strip_map(matrix: Bytes, source: Bytes, field_poly: int = 0x11D) -> Bytes:
    """Y[j, :] = xor over i of A[j, i] * X[i, :]."""
    out = np.zeros((matrix.shape[0], source.shape[1]), np.uint8)
    for i in range(matrix.shape[1]):
        out ^= multiply(matrix[:, i, None], source[i], field_poly)
    return out


def word_places(width: int, m: int, stagger: int) -> list[list[int]]:
    """For each word of a cell the places of its bytes in the cell."""
    offset = stagger % m if width >= 2 * m else 0
    rotated = [(offset + q) % width for q in range(width)]
    return [rotated[start : start + m] for start in range(0, width, m)]


def syndrome(inner: InnerCode, message: list[int], parity: list[int]) -> int:
    """The XOR of the check columns of all ones, bit by bit."""
    word = message + [0] * (inner.m - len(message)) + parity
    columns = [int(inner.check_columns[t, b]) for t in range(len(word)) for b in range(8) if word[t] >> b & 1]
    return int(np.bitwise_xor.reduce(columns)) if columns else 0


def cell_parity(inner: InnerCode, cell: Bytes, stagger: int) -> Bytes:
    parity = []
    for places in word_places(len(cell), inner.m, stagger) if inner.p else []:
        value = syndrome(inner, [int(cell[i]) for i in places], [0] * inner.p)
        parity += list(value.to_bytes(inner.p, "little"))
    return np.array(parity, np.uint8)


@cache
def coset_leaders(inner: InnerCode) -> dict[int, tuple[int, ...]]:
    """Every syndrome that at most t flips give, and the flips."""
    columns = [int(c) for c in inner.check_columns.ravel()]
    found: dict[int, tuple[int, ...]] = {}
    for size in range(inner.t + 1):
        for flipped in combinations(range(inner.n), size):
            value = 0
            for bit in flipped:
                value ^= columns[bit]
            assert value not in found, (
                "two sets of t flips with one syndrome: the code's distance is less than 2t + 1"
            )
            found[value] = flipped
    return found


def correct_cell(
    inner: InnerCode, cell: Bytes, parity: Bytes, stagger: int, pinned: Bytes | None = None
) -> list[int]:
    """Bounded-distance decoding of one cell in place; the status of each word."""
    status = []
    for w, places in enumerate(word_places(len(cell), inner.m, stagger)):
        own = parity[w * inner.p : (w + 1) * inner.p]
        value = syndrome(inner, [int(cell[i]) for i in places], [int(v) for v in own])
        flipped = coset_leaders(inner).get(value)
        if flipped is None or not all(
            bit // 8 >= inner.m
            or (bit // 8 < len(places) and (pinned is None or not pinned[places[bit // 8]]))
            for bit in flipped
        ):
            status.append(FLAGGED)
            continue
        for bit in flipped:
            t, mask = bit // 8, np.uint8(1 << bit % 8)
            if t < inner.m:
                cell[places[t]] ^= mask
            else:
                own[t - inner.m] ^= mask
        status.append(len(flipped))
    return status
