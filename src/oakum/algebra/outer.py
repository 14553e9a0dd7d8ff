"""Systematic Reed-Solomon codes over GF(2^8), with free field polynomial, first root and root spacing."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache
from math import gcd

import numpy as np
from numpy.typing import ArrayLike

from oakum.algebra.field import ORDER, Bytes, Field
from oakum.errors import UsageError


@dataclass(frozen=True)
class OuterCode:
    """The Reed-Solomon code RS(n, k) with roots beta^first_root .. beta^(first_root + r - 1), r = n - k.

    beta = alpha^root_spacing, and alpha = x generates the field that `field_poly` defines. A codeword is
    c_0 .. c_(n-1), data first (c_0 .. c_(k-1)) and then parity, and stands for the polynomial
    sum of c_i x^(n-1-i). Codes with n < 255 are shortened: the symbols that would come before c_0 are zero.
    The code meets the Singleton bound (Lin and Costello, Error Control Coding, chapter 7).

    Raises `UsageError` for parameters that make no such code.
    """

    n: int
    k: int
    field_poly: int = 0x11D
    first_root: int = 0
    root_spacing: int = 1

    def __post_init__(self) -> None:
        if not 0 < self.k < self.n <= ORDER:
            raise UsageError(
                f"there is no RS({self.n},{self.k}) over bytes; take 0 < k < n <= 255, such as RS(255,223)"
            )
        if not 0 <= self.first_root < ORDER:
            raise UsageError(f"the first root alpha^{self.first_root} is out of range; take 0 to 254")
        if not 0 < self.root_spacing < ORDER or gcd(self.root_spacing, ORDER) != 1:
            raise UsageError(
                f"the root spacing {self.root_spacing} is not coprime to 255; take 1, or 11 as in CCSDS"
            )
        _field(self.field_poly)

    @property
    def r(self) -> int:
        """The number of parity symbols."""
        return self.n - self.k

    @property
    def distance(self) -> int:
        """The minimum distance D = r + 1, in symbols."""
        return self.r + 1

    D = distance

    @property
    def rate(self) -> float:
        return self.k / self.n

    @property
    def field(self) -> Field:
        return _field(self.field_poly)

    @cached_property
    def roots(self) -> Bytes:
        """uint8[r]: the roots of the generator polynomial, in order."""
        exponents = self.root_spacing * (self.first_root + np.arange(self.r))
        return self.field.exp[exponents % ORDER]

    @cached_property
    def locators(self) -> Bytes:
        """uint8[n]: symbol i has the locator beta^(n-1-i)."""
        exponents = self.root_spacing * (self.n - 1 - np.arange(self.n))
        return self.field.exp[exponents % ORDER]

    @cached_property
    def generator(self) -> Bytes:
        """uint8[r+1]: the generator polynomial, the product of (x - root), highest degree first (monic)."""
        polynomial = np.array([1], dtype=np.uint8)
        for root in self.roots:
            times_x = np.append(polynomial, np.uint8(0))
            times_root = np.append(np.uint8(0), self.field.multiply(polynomial, root))
            polynomial = times_x ^ times_root
        return polynomial

    @cached_property
    def parity_matrix(self) -> Bytes:
        """uint8[r, k]: P, with parity symbol j = sum over i of P[j, i] * (data symbol i).

        Column i holds x^(n-1-i) mod g(x), found from column i+1 by one step of the shift register that
        divides by g(x).
        """
        tail = self.generator[1:]
        matrix = np.empty((self.r, self.k), dtype=np.uint8)
        remainder = tail  # x^r mod g(x)
        for i in range(self.k - 1, -1, -1):
            matrix[:, i] = remainder
            shifted = np.append(remainder[1:], np.uint8(0))
            remainder = shifted ^ self.field.multiply(tail, remainder[0])
        return matrix

    @cached_property
    def check_matrix(self) -> Bytes:
        """uint8[r, n]: H[j, i] = roots[j]^(n-1-i), so that H times a codeword is zero."""
        return self.field.power(self.roots[:, None], self.n - 1 - np.arange(self.n)[None, :])

    def encode(self, data: ArrayLike) -> Bytes:
        """The parity uint8[..., r] of data uint8[..., k]: the plain reference, slow.

        Raises `ValueError` on other shapes.
        """
        symbols = np.asarray(data, dtype=np.uint8)
        if symbols.ndim == 0 or symbols.shape[-1] != self.k:
            raise ValueError(f"data of shape {symbols.shape} given, the last axis must have {self.k} symbols")
        products = self.field.multiply(symbols[..., None, :], self.parity_matrix)
        return np.asarray(np.bitwise_xor.reduce(products, axis=-1))


@lru_cache(maxsize=16)
def _field(poly: int) -> Field:
    return Field(poly)
