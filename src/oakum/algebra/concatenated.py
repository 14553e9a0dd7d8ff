"""An outer and an inner code together, with the parameters of the binary code that they make."""

from __future__ import annotations

from dataclasses import dataclass

from oakum.algebra.inner import NONE, InnerCode
from oakum.algebra.outer import OuterCode

SYMBOL_BITS = 8


@dataclass(frozen=True)
class BinaryParameters:
    """Length and dimension in bits, and the guaranteed minimum distance, of a binary linear code."""

    n: int
    k: int
    d: int

    @property
    def rate(self) -> float:
        return self.k / self.n

    @property
    def relative_distance(self) -> float:
        """The guaranteed distance as a fraction of the length."""
        return self.d / self.n

    @property
    def guaranteed_flips(self) -> int:
        """The flips that can always be corrected, wherever they are."""
        return (self.d - 1) // 2


@dataclass(frozen=True)
class ConcatenatedCode:
    """An outer code whose symbols travel in words of an inner code (Forney, Concatenated Codes, 1966).

    An inner word carries m symbols, one each of m outer codewords. Those m codewords and the n words that
    hold them are the smallest binary code in which every word is complete; `n_bits`, `k_bits` and
    `guaranteed_distance` are its parameters. Without an inner code it is one outer codeword, taken as bits. A
    relative distance is only comparable between codes that span as many outer codewords: hold `parameters`
    against `same_data_expanded`.
    """

    name: str
    outer: OuterCode
    inner: InnerCode

    @property
    def outer_codewords(self) -> int:
        """How many outer codewords share their inner words: m, or 1 without an inner code."""
        return max(1, self.inner.m)

    @property
    def n_bits(self) -> int:
        word_bytes = self.outer_codewords + self.inner.p
        return self.outer.n * SYMBOL_BITS * word_bytes

    @property
    def k_bits(self) -> int:
        return self.outer.k * SYMBOL_BITS * self.outer_codewords

    @property
    def guaranteed_distance(self) -> int:
        """D * d bits; without an inner code only D, since a symbol may differ in a single bit."""
        return self.outer.distance * self.inner.d

    @property
    def guaranteed_flips(self) -> int:
        """The flips in the n words through a column that never keep it from being recovered."""
        return self.parameters.guaranteed_flips

    @property
    def rate(self) -> float:
        return self.k_bits / self.n_bits

    @property
    def overhead(self) -> float:
        """Parity as a fraction of the data: 1/rate - 1."""
        return self.n_bits / self.k_bits - 1

    @property
    def parameters(self) -> BinaryParameters:
        return BinaryParameters(self.n_bits, self.k_bits, self.guaranteed_distance)

    @property
    def relative_distance(self) -> float:
        return self.parameters.relative_distance

    @property
    def bit_expansion(self) -> BinaryParameters:
        """One outer codeword, each symbol as eight bits: the rate unchanged, the distance still only D."""
        return BinaryParameters(self.outer.n * SYMBOL_BITS, self.outer.k * SYMBOL_BITS, self.outer.distance)

    @property
    def same_data_expanded(self) -> BinaryParameters:
        """The bit expansion of all the outer codewords that `parameters` spans: k is `k_bits`, d still D."""
        one = self.bit_expansion
        return BinaryParameters(one.n * self.outer_codewords, one.k * self.outer_codewords, one.d)

    @property
    def notation(self) -> str:
        """Lengths and dimensions as in the literature, such as "RS(255,223)+EH(128,120)"."""
        outer = f"RS({self.outer.n},{self.outer.k})"
        return outer if self.inner.family == NONE else f"{outer}+{self.inner.notation}"
