"""The field GF(2^8) in plain numpy: bytes are elements, XOR is addition."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from oakum.errors import UsageError

Bytes = NDArray[np.uint8]

ORDER = 255
"""The number of nonzero elements; the exponents of alpha count modulo this."""


@dataclass(frozen=True)
class Field:
    """GF(2^8) = GF(2)[x] / poly, with generator alpha = x.

    `poly` is the field polynomial as an integer, bit i for x^i. Raises `UsageError` unless it has degree 8
    and x is a generator of the 255 nonzero elements (the polynomial is primitive).
    """

    poly: int = 0x11D

    def __post_init__(self) -> None:
        if not 0x100 <= self.poly <= 0x1FF:
            raise UsageError(f"the field polynomial {self.poly:#x} has not degree 8; take one such as 0x11d")
        if len(set(_powers_of_x(self.poly))) != ORDER:
            raise UsageError(f"the field polynomial {self.poly:#x} is not primitive; take one such as 0x11d")

    @cached_property
    def exp(self) -> Bytes:
        """uint8[510]: exp[i] = alpha^i, two periods, so that a sum of two logarithms needs no reduction."""
        return _frozen(np.array(_powers_of_x(self.poly) * 2, dtype=np.uint8))

    @cached_property
    def log(self) -> NDArray[np.int16]:
        """int16[256]: the inverse of `exp`; log[0] is -1, since 0 has no logarithm."""
        log = np.full(256, -1, dtype=np.int16)
        log[self.exp[:ORDER]] = np.arange(ORDER)
        log.flags.writeable = False
        return log

    @cached_property
    def multiplication_table(self) -> Bytes:
        """uint8[256, 256]: the product of every pair of elements."""
        log = self.log.astype(np.intp)
        table = self.exp[log[:, None] + log[None, :]]
        table[0, :] = table[:, 0] = 0
        return _frozen(table)

    def multiply(self, a: ArrayLike, b: ArrayLike) -> Bytes:
        """The products of two uint8 arrays, element by element, broadcast as numpy does."""
        return np.asarray(self.multiplication_table[np.asarray(a, np.uint8), np.asarray(b, np.uint8)])

    def inverse(self, a: ArrayLike) -> Bytes:
        """1/a, element by element. Raises `ZeroDivisionError` where a is 0."""
        return self.power(a, -1)

    def power(self, a: ArrayLike, exponent: ArrayLike) -> Bytes:
        """a^exponent, element by element; exponents are integers of either sign, and 0^0 = 1.

        Raises `ZeroDivisionError` where 0 is raised to a negative exponent.
        """
        base, e = np.broadcast_arrays(np.asarray(a, np.uint8), np.asarray(exponent, np.int64))
        zero = base == 0
        if np.any(zero & (e < 0)):
            raise ZeroDivisionError("0 has no inverse in a field")
        powers = self.exp[(self.log[base].astype(np.int64) * (e % ORDER)) % ORDER]
        return np.asarray(np.where(zero, e == 0, powers), dtype=np.uint8)


@lru_cache(maxsize=64)
def _powers_of_x(poly: int) -> tuple[int, ...]:
    """x^0 .. x^254 modulo `poly`, as integers."""
    powers = []
    element = 1
    for _ in range(ORDER):
        powers.append(element)
        element <<= 1
        if element & 0x100:
            element ^= poly
    return tuple(powers)


def _frozen(array: Bytes) -> Bytes:
    array.flags.writeable = False
    return array
