"""The inner codes: short binary codes whose message and parity are whole bytes."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache, cached_property

import numpy as np
from numpy.typing import NDArray

from oakum.errors import UsageError

NONE = "none"
EXTENDED_HAMMING = "EH"
EXTENDED_BCH = "EB"

DISTANCES = {
    (EXTENDED_HAMMING, 15, 1): 4,
    (EXTENDED_BCH, 14, 2): 6,
    (EXTENDED_BCH, 13, 3): 8,
    (NONE, 0, 0): 1,
}
"""The true minimum distance of every inner code, by (family, m, p); 1 without a code."""


@dataclass(frozen=True)
class InnerCode:
    """A systematic binary code of m message bytes followed by p parity bytes.

    `family` is "EH" (extended Hamming, m = 15, p = 1), "EB" (extended BCH, m = 14, p = 2 or m = 13, p = 3)
    or "none" (m = p = 0). How the matrices come about stands in `oakum.algebra.freeze`. Bit b of a byte is
    the bit of value 1 << b. A word with fewer than m message bytes is shortened: the bytes that it lacks,
    the last ones of the message, are zero.

    Raises `UsageError` for any other (family, m, p).
    """

    family: str
    m: int
    p: int

    def __post_init__(self) -> None:
        if (self.family, self.m, self.p) not in DISTANCES:
            raise UsageError(
                f"there is no inner code {self.notation}; take EH(128,120), EB(128,112) or EB(128,104)"
            )

    @classmethod
    def none(cls) -> InnerCode:
        """No inner code at all: no words, no parity."""
        return cls(NONE, 0, 0)

    @classmethod
    def known(cls) -> tuple[InnerCode, ...]:
        """Every inner code but "none", the shortest parity first."""
        return tuple(cls(*parameters) for parameters in DISTANCES if parameters[0] != NONE)

    @property
    def n(self) -> int:
        """The length in bits."""
        return 8 * (self.m + self.p)

    @property
    def k(self) -> int:
        """The message length in bits."""
        return 8 * self.m

    @property
    def d(self) -> int:
        """The true minimum distance, 1 without a code."""
        return DISTANCES[self.family, self.m, self.p]

    @property
    def t(self) -> int:
        """The number of flips that are corrected in every word."""
        return (self.d - 1) // 2

    @property
    def rate(self) -> float:
        return 1.0 if self.family == NONE else self.k / self.n

    @property
    def notation(self) -> str:
        """As in the literature, such as "EH(128,120)"."""
        return f"{self.family}({self.n},{self.k})"

    @cached_property
    def check_columns(self) -> NDArray[np.uint32]:
        """uint32[m+p, 8]: the syndrome of the word whose only bit is bit b of byte t.

        Bytes 0..m-1 are the message, then comes the parity; bit b of parity byte j has the column
        1 << (8*j + b). The syndrome of a word is the XOR of the columns of its ones.
        """
        columns = np.zeros((self.m + self.p, 8), dtype=np.uint32)
        if self.family != NONE:
            frozen = _frozen_columns()[self.family, self.m, self.p]
            columns[: self.m] = [[int(column, 16) for column in byte] for byte in frozen]
            columns[self.m :] = (1 << np.arange(8 * self.p, dtype=np.uint32)).reshape(self.p, 8)
        columns.flags.writeable = False
        return columns

    @cached_property
    def parity_tables(self) -> NDArray[np.uint32]:
        """uint32[m, 256]: the parity v is the XOR over t of parity_tables[t, message[t]].

        Parity byte j is (v >> 8*j) & 255.
        """
        values = np.arange(256)
        tables = np.zeros((self.m, 256), dtype=np.uint32)
        for b in range(8):
            tables[:, (values >> b) & 1 == 1] ^= self.check_columns[: self.m, b, None]
        tables.flags.writeable = False
        return tables

    def weight_distribution(self, message_bytes: int | None = None) -> list[int]:
        """A[w], w = 0..n: how many codewords have weight w, exactly.

        With `message_bytes`, of the code shortened to that many message bytes. The dual code is enumerated
        and the MacWilliams identity applied, which takes seconds for p = 3. Raises `ValueError` unless 0 <=
        message_bytes <= m.
        """
        kept = self.m if message_bytes is None else message_bytes
        if not 0 <= kept <= self.m:
            raise ValueError(f"{kept} message bytes of {self.m}")
        columns = np.concatenate([self.check_columns[:kept].ravel(), self.check_columns[self.m :].ravel()])
        return macwilliams(dual_weight_distribution(columns, 8 * self.p))


def dual_weight_distribution(columns: NDArray[np.uint32], r: int) -> list[int]:
    """The weight distribution of the code that the rows of a check matrix generate.

    `columns` are the matrix's n columns as r-bit integers; its rank must be r. The word that the vector u
    picks has the weight (n - T[u]) / 2, where T is the Walsh-Hadamard transform of how often each column
    occurs (MacWilliams and Sloane, The Theory of Error-Correcting Codes, chapter 2, section 3).
    """
    n = len(columns)
    transform = np.bincount(columns, minlength=1 << r).astype(np.int16)
    for bit in range(r):
        pairs = transform.reshape(-1, 2, 1 << bit)
        upper = pairs[:, 1].copy()
        np.subtract(pairs[:, 0], upper, out=pairs[:, 1])
        pairs[:, 0] += upper
    counts = np.bincount((transform + n) >> 1, minlength=n + 1)
    return [int(counts[n - w]) for w in range(n + 1)]


def macwilliams(weights: list[int]) -> list[int]:
    """The weight distribution of the dual of a binary linear code, in exact integers.

    A'[w] = (sum over j of A[j] * K_w(j)) / (sum of A), with the Krawtchouk polynomials K_w
    (MacWilliams and Sloane, chapter 5, theorem 13).
    """
    n = len(weights) - 1
    dual = [0] * (n + 1)
    for j, count in enumerate(weights):
        if count:
            for w, value in enumerate(krawtchouk(n, j)):
                dual[w] += count * value
    size = sum(weights)
    return [total // size for total in dual]


def krawtchouk(n: int, j: int) -> list[int]:
    """K_0(j) .. K_n(j): the coefficients of (1 + x)^(n-j) * (1 - x)^j.

    By the recurrence (w+1) K_(w+1) = (n - 2j) K_w - (n-w+1) K_(w-1) (MacWilliams and Sloane, chapter 5,
    section 7).
    """
    values = [1]
    before = 0
    for w in range(n):
        following = ((n - 2 * j) * values[w] - (n - w + 1) * before) // (w + 1)
        before = values[w]
        values.append(following)
    return values


@cache
def _frozen_columns() -> dict[tuple[str, int, int], list[list[str]]]:
    """The check columns of the message bits in hexadecimal, by code, as `freeze` wrote them."""
    import json
    from importlib.resources import files  # here, since most commands get by without the tables

    text = files("oakum.algebra").joinpath("tables", "inner.json").read_text(encoding="ascii")
    return {(code["family"], code["m"], code["p"]): code["columns"] for code in json.loads(text)["codes"]}
