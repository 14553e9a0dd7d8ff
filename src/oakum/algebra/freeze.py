"""Builds the inner codes with `galois` and writes the frozen tables: python -m oakum.algebra.freeze

Extended Hamming [128,120,4]. Any order of the 120 bytes of odd weight >= 3 as columns of the check matrix
gives this code. Here bit b of message byte t has the column c_t rotated left by b, where c_0 < c_1 < ... <
c_14 are the bytes of odd weight >= 3 that are the least of their own eight rotations. The parity byte is then
the sum of c_t(x) * message_t(x) modulo x^8 + 1, and takes eight rotations a word. (A Horner scheme over all
16 bytes, with the map A^t for byte t, does not exist: the orbits of A on the 128 bytes of odd weight would
need lengths that are multiples of 16, and no 8 x 8 matrix has such orbits only.)

Extended BCH. The positions of a word are the elements x of GF(128) = GF(2)[a] / (a^7 + a^3 + 1) in the order
0, 1, a, a^2, ..., a^126. Position x has the check column (1, x, x^3, ...), seven bits an odd power. Spare
check bits are spent on values tr(a^c * x^s) with the trace from GF(128) to GF(2): the family of "trace
monomials", s running over all cyclotomic cosets that the code does not check yet. Parity bits are the last
positions whose columns are linearly independent, chosen greedily from the end; message and parity each keep
the order of the positions, bit b of byte t being number 8t + b. The columns are written in the basis in which
the parity bits have unit vectors.

Since x -> a^i * x and x -> x^2 map each BCH code to itself, the first value can be taken as tr(x^s), and c of
the second up to doubling modulo 127. Searching the whole family gives tr(x^5) for m = 14 and tr(x^7), tr(a
x^7) for m = 13: bits of the next root of the BCH code. Ties go to the least (s, c), the first value before
the second.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache, cached_property
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.inner import (
    EXTENDED_BCH,
    EXTENDED_HAMMING,
    dual_weight_distribution,
    krawtchouk,
    macwilliams,
)

FIELD_POLY = 0x89
"""GF(128) by x^7 + x^3 + 1, as in the published tables of binary BCH codes."""

FAMILY = "tr(a^c x^s) at position x of GF(128), a^7 = a^3 + 1; columns: one message byte a line, bit 0 first"
"""What the frozen tables say about their spare check bits and their order."""

Q = 128
Monomial = tuple[int, int]
"""(s, c) stands for the function tr(a^c * x^s)."""

SPARE_BITS: dict[int, tuple[Monomial, ...]] = {2: ((5, 0),), 3: ((7, 0), (7, 1))}
"""What the search found for p parity bytes."""


@dataclass(frozen=True)
class ExtendedBCH:
    """The extended BCH code of length 128 with the check columns (1, x, x^3, .., x^(2t-1)) and d = 2t + 2."""

    t: int

    @property
    def d(self) -> int:
        return 2 * self.t + 2

    @property
    def check_bits(self) -> int:
        return 1 + 7 * self.t

    def columns(self, spare: tuple[Monomial, ...]) -> list[int]:
        """The check column of each position as an integer, with one more bit for each value of `spare`."""
        columns = [1] * Q
        shift = 1
        for power in range(1, 2 * self.t, 2):
            columns = [c | int(v) << shift for c, v in zip(columns, _elements() ** power, strict=True)]
            shift += 7
        for monomial in spare:
            columns = [c | int(v) << shift for c, v in zip(columns, trace_monomial(monomial), strict=True)]
            shift += 1
        return columns

    def cosets(self) -> list[int]:
        """The least exponents s of the cyclotomic cosets modulo 127 that the code does not check."""
        leaders = {min(s * 2**i % 127 for i in range(7)) for s in range(1, 127)}
        return sorted(leaders - set(range(1, 2 * self.t, 2)))

    @cached_property
    def codewords_of_weight_d(self) -> int:
        columns = np.array(self.columns(()), dtype=np.uint32)
        return macwilliams(dual_weight_distribution(columns, self.check_bits))[self.d]

    def signed_count(self, *monomials: Monomial, weight: int | None = None) -> int:
        """The codewords of even `weight` (d by default) that meet the check `monomials`, less the others.

        The check: the sum of all the monomials over the ones of the codeword is 0.

        The MacWilliams identity for a coset of the dual code: the mean of K_weight over the weights of that
        coset. Each coset word is the sum of 1 or 0, tr(bx), and a function of the higher powers; one
        Walsh-Hadamard transform gives the weights for all b, and K_weight is even, so that the added 1 does
        not matter.
        """
        wanted = self.d if weight is None else weight
        function = np.zeros(Q, dtype=np.uint8)
        for monomial in monomials:
            function ^= trace_monomial(monomial)
        signs = (1 - 2 * function.astype(np.float32)) * self.higher_powers
        transform = np.abs(signs @ characters()).astype(np.int64)
        counts = np.bincount(transform.ravel(), minlength=Q + 1)
        total = sum(
            int(count) * krawtchouk(Q, (Q - w) // 2)[wanted] for w, count in enumerate(counts) if count
        )
        return total // transform.size

    @cached_property
    def higher_powers(self) -> NDArray[np.float32]:
        """float32[128^(t-1), 128]: (-1)^f for every sum f of tr(b x^3), tr(b x^5) .. tr(b x^(2t-1))."""
        rows = np.ones((1, Q), dtype=np.float32)
        for power in range(3, 2 * self.t, 2):
            values = [np.zeros(Q, dtype=np.uint8)] + [trace_monomial((power, c)) for c in range(127)]
            signs = (1 - 2 * np.array(values, dtype=np.int8)).astype(np.float32)
            rows = (rows[:, None, :] * signs[None, :, :]).reshape(-1, Q)
        return rows

    def search(self, cosets: list[int] | None = None) -> tuple[int, tuple[Monomial, ...]]:
        """The fewest codewords of weight d that spare check bits leave, and the monomials that do it.

        The spare bits are those up to the next whole byte: one for t = 2, two for t = 3. `cosets` limits the
        exponents.
        """
        exponents = self.cosets() if cosets is None else cosets
        whole = self.codewords_of_weight_d
        single = {s: self.signed_count((s, 0)) for s in exponents}
        if -self.check_bits % 8 == 1:
            return min(((whole + single[s]) // 2, ((s, 0),)) for s in exponents)
        return min(
            ((whole + single[s] + single[u] + self.signed_count((s, 0), (u, c))) // 4, ((s, 0), (u, c)))
            for s, u, c in _pairs(exponents)
        )


def _pairs(exponents: list[int]) -> Iterator[tuple[int, int, int]]:
    """Every pair tr(x^s), tr(a^c x^u) with s <= u, once up to x -> x^2."""
    orbits = sorted({min(c * 2**i % 127 for i in range(7)) for c in range(127)})
    for s, u, c in product(exponents, exponents, orbits):
        if s < u or (s == u and c > 0):
            yield s, u, c


@cache
def _elements() -> Any:
    """The galois array 0, 1, a, a^2, .., a^126."""
    import galois

    field = galois.GF(2**7, irreducible_poly=FIELD_POLY, primitive_element=2)
    return field([0, *(int(field.primitive_element**i) for i in range(127))])


@cache
def trace_monomial(monomial: Monomial) -> NDArray[np.uint8]:
    """uint8[128]: tr(a^c * x^s) at every position."""
    s, c = monomial
    x = _elements()
    return np.array((type(x).primitive_element ** c * x**s).field_trace(), dtype=np.uint8)


@cache
def characters() -> NDArray[np.float32]:
    """float32[128, 128]: (-1)^tr(bx) for every position x (first axis) and every b."""
    rows = [np.zeros(Q, dtype=np.uint8)] + [trace_monomial((1, c)) for c in range(127)]
    return (1 - 2 * np.array(rows, dtype=np.int8)).astype(np.float32).T


def systematic(columns: list[int], r: int) -> list[int]:
    """The columns of the message positions, in the basis in which the parity positions have unit vectors."""
    import galois

    parity = sorted(_independent_from_the_end(columns))
    assert len(parity) == r, "the check matrix has full rank"
    bits = galois.GF2([[c >> row & 1 for c in columns] for row in range(r)])
    reduced = np.linalg.inv(bits[:, parity]) @ bits
    message = [i for i in range(len(columns)) if i not in parity]
    return [sum(int(bit) << row for row, bit in enumerate(reduced[:, i])) for i in message]


def _independent_from_the_end(columns: list[int]) -> list[int]:
    """The positions, from the last on, whose columns do not depend on those already chosen."""
    basis: dict[int, int] = {}  # by the highest set bit
    chosen = []
    for position in range(len(columns) - 1, -1, -1):
        rest = columns[position]
        while rest and rest.bit_length() in basis:
            rest ^= basis[rest.bit_length()]
        if rest:
            basis[rest.bit_length()] = rest
            chosen.append(position)
    return chosen


def hamming_entry() -> dict[str, Any]:
    """The table of the extended Hamming code [128,120,4]."""

    def rotated(byte: int, by: int) -> int:
        return (byte << by | byte >> 8 - by) & 0xFF

    odd = [c for c in range(3, 256) if c.bit_count() % 2 and c.bit_count() >= 3]
    least = [c for c in odd if c == min(rotated(c, by) for by in range(8))]
    rows = [[rotated(c, b) for b in range(8)] for c in least]
    return {"family": EXTENDED_HAMMING, "m": 15, "p": 1, "d": 4, "spare": [], "columns": _hex(rows, 1)}


def bch_entry(p: int) -> dict[str, Any]:
    """The table of the extended BCH code with p parity bytes and its spare bits."""
    parent = ExtendedBCH(t=p)
    m = 16 - p
    columns = systematic(parent.columns(SPARE_BITS[p]), 8 * p)
    rows = [columns[8 * t : 8 * t + 8] for t in range(m)]
    return {
        "family": EXTENDED_BCH, "m": m, "p": p, "d": parent.d,
        "spare": [{"s": s, "c": c} for s, c in SPARE_BITS[p]], "columns": _hex(rows, p),
    }  # fmt: skip


def _hex(rows: list[list[int]], p: int) -> list[list[str]]:
    return [[f"{column:0{2 * p}x}" for column in row] for row in rows]


def frozen_text() -> str:
    """The contents of tables/inner.json: each code's columns, one message byte a line."""
    codes = [hamming_entry(), bch_entry(2), bch_entry(3)]
    parts = []
    for code in codes:
        head = json.dumps({key: value for key, value in code.items() if key != "columns"})
        body = ",\n".join("    " + json.dumps(row) for row in code["columns"])
        parts.append(f'  {head[:-1]}, "columns": [\n{body}\n  ]}}')
    note = json.dumps(FAMILY)
    return f'{{"spare check bits": {note},\n"codes": [\n' + ",\n".join(parts) + "\n]}\n"


def main() -> None:
    """Search the families again, then write the tables."""
    for p, spare in SPARE_BITS.items():
        found = ExtendedBCH(t=p).search()
        if found[1] != spare:
            raise RuntimeError(f"the search for p = {p} found {found}, not {spare}")
    Path(__file__).with_name("tables").joinpath("inner.json").write_text(frozen_text(), encoding="ascii")


if __name__ == "__main__":
    main()
