"""One block in memory, encoded with the plain references, for the decoder's tests to damage."""

from __future__ import annotations

import numpy as np
import xxhash

from oakum.algebra.naming import resolve_code
from oakum.geometry import Geometry

RIGHT, WRONG, UNKNOWN = 0, 1, 2


class MemoryBlock:
    """A `BlockSource` of `width` columns (a multiple of 64) of random data. Damage it at will.

    `sent` and `sent_inner` keep what is right. `asked` lists the strips of each call of `rows`.
    """

    def __init__(self, code: str, width: int = 128, seed: int = 1) -> None:
        self.code = c = resolve_code(code)
        self.geometry = g = Geometry(c.outer.n, c.outer.k, c.inner.m, c.inner.p, c.outer.k * width, width)
        self.number = 0
        data = np.random.default_rng([seed, width]).integers(0, 256, (g.k, width), np.uint8)
        self.sent = np.concatenate([data, c.outer.encode(data.T).T])
        self.sent_inner = np.stack([self._inner(i, cell) for i, cell in enumerate(self.sent)])
        self.strips, self.inner_received = self.sent.copy(), self.sent_inner.copy()
        self.lost = np.zeros(self.sent.shape, bool)
        self.lost_inner = np.zeros(self.sent_inner.shape, bool)
        self.vouched = np.zeros(self.sent.shape, bool)
        self.withheld = np.zeros(g.n, bool)
        self.asked: list[list[int]] = []

    def _inner(self, strip: int, cell: np.ndarray) -> np.ndarray:
        """Word by word as oakum-sidecar(5) says: the cell turned by the stagger, the last word filled up."""
        m, p = self.geometry.m, self.geometry.p
        if not p:
            return np.empty(0, np.uint8)
        turned = np.roll(cell, -(strip % m))
        words = np.append(turned, np.zeros(-len(turned) % m, np.uint8)).reshape(-1, m)
        values = np.bitwise_xor.reduce(self.code.inner.parity_tables[np.arange(m), words], axis=1)
        return np.stack([values >> 8 * j & 255 for j in range(p)], axis=1).astype(np.uint8).reshape(-1)

    def word_of(self, strip: int, column: int) -> tuple[int, np.ndarray]:
        """Number and columns of the word that holds a byte."""
        m, width = self.geometry.m, self.sent.shape[1]
        place = (column - strip % m) % width
        word = place // m
        return word, (np.arange(word * m, min((word + 1) * m, width)) + strip % m) % width

    # -- what the decoder asks for ---------------------------------------------------------------------------

    @property
    def states(self) -> np.ndarray:
        received = np.where(self.lost, np.uint8(0), self.strips)
        wrong = ((received != self.sent) | self.lost).any(axis=1)
        return np.where(self.withheld, UNKNOWN, np.where(wrong, WRONG, RIGHT)).astype(np.uint8)

    def rows(self, strips: np.ndarray) -> tuple[np.ndarray, np.ndarray | None]:
        self.asked.append(strips.tolist())
        lost = self.lost[strips]
        return np.where(lost, np.uint8(0), self.strips[strips]), lost if lost.any() else None

    def inner(self, strips: np.ndarray) -> tuple[np.ndarray, np.ndarray | None]:
        lost = self.lost_inner[strips]
        return np.where(lost, np.uint8(0), self.inner_received[strips]), lost if lost.any() else None

    def digests(self, strips: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        values = [xxhash.xxh3_64_intdigest(self.sent[i].tobytes()) for i in strips]
        return np.array(values, np.uint64), ~self.withheld[strips]

    def pinned(self, strips: np.ndarray) -> np.ndarray | None:
        vouched = self.vouched[strips]
        return vouched if vouched.any() else None
