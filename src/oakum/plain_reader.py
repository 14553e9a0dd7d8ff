#!/usr/bin/env python3
"""A slow reader of oakum sidecars: the format page oakum-sidecar(5) as plain Python, in the page's order.

    python3 plain_reader.py SIDECAR [--root DIR] [--output DIR]

It needs this one file and the Python standard library, version 3.11 or later, and imports nothing else, so
that it can lie beside a sidecar for as long as somebody can run Python. It shares no code with the program
that writes sidecars. Lines that begin with "# >" quote the page.

It reads the members below --root (the sidecar's folder if not given), decodes what is damaged, and says of
each member what became of it; with --output it writes every member whose SHA-256 agrees below that folder,
which must not hold them yet. Everything is held in memory, and a megabyte of damage takes about a minute.

Exit status: 0 all is right or was written right; 10 there is damage and all of it can be put right; 20 some
of it cannot; 30 nothing could be said.
"""

from __future__ import annotations

import argparse
import hashlib
import math
import os
import struct
import sys
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property
from typing import NamedTuple


class Unreadable(Exception):
    """Nothing can be said about the set; the message is the reason."""


# == CONVENTIONS =========================================================================================
# > Numbers are unsigned, little endian and packed without gaps. Counting starts at 0. Lengths and offsets
# > are in bytes. Bit b of a byte is the bit of value 2^b.

VERSION = 1
CELL = 4096
TEXT = 4096
SMALL = 64 << 10
LARGE = 64 << 20
MANY = 128 << 20
LONGEST = 1 << 60


class Received(NamedTuple):
    """Bytes as they could be read; `missing` has a 1 for each byte that could not, which is 0 in `data`."""

    data: bytes
    missing: bytes

    def read(self, offset: int, length: int) -> Received:
        """`length` bytes from `offset`; what lies before the first or after the last byte is missing."""
        before = min(length, max(0, -offset))
        inside = slice(max(0, offset), max(0, offset + length))
        data, missing = self.data[inside], self.missing[inside]
        after = length - before - len(data)
        return Received(
            bytes(before) + data + bytes(after), b"\1" * before + missing + b"\1" * after
        )  # fmt: skip


NOTHING = Received(b"", b"")


def read_file(path: bytes) -> Received:
    """All bytes of a file, in pieces of a cell, so that a bad place costs no more than that."""
    data, missing = bytearray(), bytearray()
    with open(path, "rb", buffering=0) as file:
        size = os.fstat(file.fileno()).st_size
        while len(data) < size:
            want = min(CELL, size - len(data))
            try:
                piece, bad = os.pread(file.fileno(), want, len(data)), b"\0"
            except OSError:
                piece, bad = bytes(want), b"\1"
            if not piece:
                break
            data += piece
            missing += bad * len(piece)
    return Received(bytes(data), bytes(missing))


def round_up(value: int, unit: int) -> int:
    return -(-value // unit) * unit


def xor(a: bytes, b: bytes) -> bytes:
    """Byte by byte, of equal lengths."""
    return (int.from_bytes(a, "little") ^ int.from_bytes(b, "little")).to_bytes(len(a), "little")


# == GEOMETRY ============================================================================================


class Geometry(NamedTuple):
    """One window: n strips of `depth` bytes, k of them data; words of m + p bytes."""

    n: int
    k: int
    m: int
    p: int
    length: int
    depth: int

    @property
    def r(self) -> int:
        return self.n - self.k

    # > Strips are cut into cells of 4096 bytes from their start; the last may be shorter.
    @property
    def blocks(self) -> int:
        return -(-self.depth // CELL)

    def width(self, block: int) -> int:
        return min(CELL, self.depth - block * CELL)

    # > Cells of a window of fewer than 65536 bytes have no digests.
    @property
    def digested(self) -> bool:
        return self.length >= SMALL

    # > A data cell counts, and is digested, when it holds at least one byte of the stream; the cells that
    # > do are numbered strip by strip: cell b of strip i has the number i * B + b.
    @property
    def data_cells(self) -> int:
        if not self.depth:
            return 0
        full, rest = divmod(self.length, self.depth)
        return full * self.blocks + -(-rest // CELL)

    # > The inner parity of a cell, its group, is that of its words in order: p * ceil(width / m) bytes.
    def group(self, block: int) -> int:
        return self.p * -(-self.width(block) // self.m) if self.p else 0

    @property
    def strip_group(self) -> int:
        """Bytes of inner parity of all cells of one strip."""
        if not self.depth:
            return 0
        return (self.blocks - 1) * self.group(0) + self.group(self.blocks - 1)

    def group_place(self, strip: int, block: int) -> int:
        """Where a cell's group begins in the body (see THE BODY)."""
        if strip < self.k:
            return self.r * self.depth + strip * self.strip_group + block * self.group(0)
        parity_row = strip - self.k
        inside = block * self.r * self.group(0) + parity_row * self.group(block)
        return self.r * self.depth + self.data_groups + inside

    @property
    def data_groups(self) -> int:
        """Bytes of inner parity of all data cells that count."""
        if not self.data_cells:
            return 0
        strip, block = divmod(self.data_cells - 1, self.blocks)
        return strip * self.strip_group + block * self.group(0) + self.group(block)

    # > The body is the r parity strips one after the other, then the groups of the data cells in the order
    # > of their numbers, then the groups of the parity cells, block by block and in each block strip by
    # > strip.
    @property
    def body(self) -> int:
        return self.r * self.depth + self.data_groups + self.r * self.strip_group

    # > S = ceil(length / k), rounded up to a multiple of the unit.
    @property
    def sound(self) -> bool:
        """Whether the numbers fit each other (see LIMITS)."""
        return (
            0 < self.k < self.n <= 255
            and self.length <= LONGEST
            and self.depth % 64 == 0
            and self.length <= self.k * self.depth
            and self.depth <= round_up(-(-self.length // self.k), unit(self.length))
        )


# > The unit is 4096 for windows of at least 67108864 bytes and 64 for shorter ones.
def unit(length: int) -> int:
    return CELL if length >= LARGE else 64


# == THE OUTER CODE ======================================================================================


class Field:
    """GF(256). `times[a]` is the table of the products with a: `strip.translate(times[a])` is a * strip."""

    def __init__(self, polynomial: int) -> None:
        self.exp = [1]
        while len(self.exp) < 255:
            doubled = self.exp[-1] << 1
            self.exp.append(doubled ^ polynomial if doubled & 256 else doubled)
        if not 256 <= polynomial < 512 or len(set(self.exp)) < 255:
            raise Unreadable(f"{polynomial:#x} is no field polynomial for which x generates the field")
        self.log = {value: power for power, value in enumerate(self.exp)}
        self.times = [bytes(256)]
        for a in range(1, 256):
            products = (self.power(self.log[a] + self.log[b]) for b in range(1, 256))
            self.times.append(bytes([0, *products]))

    def power(self, exponent: int) -> int:
        """alpha to the `exponent`, which may be negative."""
        return self.exp[exponent % 255]

    def inverse(self, a: int) -> int:
        return self.power(-self.log[a])

    def product(self, a: list[int], b: list[int]) -> list[int]:
        """Of two polynomials, coefficients from the lowest on."""
        total = [0] * (len(a) + len(b) - 1)
        for i, x in enumerate(a):
            for j, y in enumerate(b):
                total[i + j] ^= self.times[x][y]
        return total

    def value(self, polynomial: list[int], x: int) -> int:
        total = 0
        for coefficient in reversed(polynomial):
            total = self.times[total][x] ^ coefficient
        return total


class ReedSolomon:
    """RS(n, k). Symbols are given as strips: symbol i of all columns in one byte string."""

    # > The roots of the generator polynomial are beta^(f + j) for j = 0 .. r - 1, with beta = alpha^s. A
    # > codeword c_0 .. c_(n-1), data first, stands for the polynomial sum of c_i x^(n-1-i). Symbol i thus
    # > has the locator X_i = beta^(n-1-i), and for every codeword sum of c_i X_i^(f+j) = 0 for all j.
    def __init__(self, n: int, k: int, polynomial: int = 0x11D, first: int = 0, spacing: int = 1) -> None:
        if not 0 < k < n <= 255 or math.gcd(spacing, 255) != 1:
            raise Unreadable(f"there is no RS({n},{k}) with the root spacing {spacing}")
        self.n, self.k, self.r, self.first = n, k, n - k, first
        self.field = Field(polynomial)
        self.roots = [self.field.power(spacing * (first + j)) for j in range(n - k)]
        self.locators = [self.field.power(spacing * (n - 1 - i)) for i in range(n)]

    def syndromes(self, strips: list[bytes]) -> list[bytes]:
        """S_j = sum of c_i X_i^(f+j), one strip for each j, by Horner's rule over i."""
        syndromes = []
        for root in self.roots:
            total = bytes(len(strips[0]))
            for strip in strips:
                total = xor(total.translate(self.field.times[root]), strip)
            syndromes.append(total)
        return syndromes

    def magnitudes(self, syndromes: list[bytes], places: list[int]) -> list[bytes] | None:
        """What to add to the symbols at `places`, when all that is wrong lies there; None when it does not.

        With Lambda(x) = product of (1 - X_l x) over the places, the evaluator Omega = S * Lambda mod x^r has
        no terms from x^(number of places) on, and Y_l = X_l^(-f) Omega(1/X_l) / product of (1 - X_m/X_l) over
        the other places m (Forney 1965; Lin and Costello, Error Control Coding, chapter 7).
        """
        f, times = self.field, self.field.times
        locator = self.locator(places)
        evaluator = []
        for i in range(self.r):
            total = bytes(len(syndromes[0]))
            for j, coefficient in enumerate(locator[: i + 1]):
                total = xor(total, syndromes[i - j].translate(times[coefficient]))
            evaluator.append(total)
        if any(any(term) for term in evaluator[len(places) :]):
            return None
        values = []
        for place in places:
            x = self.locators[place]
            value = bytes(len(syndromes[0]))
            for term in reversed(evaluator[: len(places)]):
                value = xor(value.translate(times[f.inverse(x)]), term)
            divisor = f.power(f.log[x] * self.first)
            for other in places:
                if other != place:
                    divisor = times[divisor][1 ^ times[self.locators[other]][f.inverse(x)]]
            values.append(value.translate(times[f.inverse(divisor)]))
        return values

    def locator(self, places: list[int]) -> list[int]:
        polynomial = [1]
        for place in places:
            polynomial = self.field.product(polynomial, [1, self.locators[place]])
        return polynomial

    def decode(self, syndromes: bytes, erasures: list[int]) -> dict[int, int] | None:
        """One column: what to add at which places, or None where no codeword is near enough.

        Any s erasures and e errors with 2e + s <= r are found:
        1. Gamma(x), the locator of the erasures; T = the terms x^s .. x^(r-1) of S * Gamma.
        2. sigma(x), the shortest linear recurrence of T; its degree is e.
        3. The errors are at the places with sigma(1/X_i) = 0; there must be e of them.
        4. The magnitudes of all places together.
        """
        f = self.field
        if len(erasures) > self.r:
            return None
        modified = f.product(list(syndromes), self.locator(erasures))[len(erasures) : self.r]
        sigma, e = self.shortest_recurrence(modified)
        if 2 * e > len(modified):
            return None
        errors = []
        if e:
            erased = set(erasures)
            errors = [
                i for i, x in enumerate(self.locators)
                if i not in erased and f.value(sigma, f.inverse(x)) == 0
            ]  # fmt: skip
        if len(errors) != e:
            return None
        places = [*erasures, *errors]
        values = self.magnitudes([bytes([s]) for s in syndromes], places)
        if values is None:
            return None
        return {place: value[0] for place, value in zip(places, values, strict=True) if value[0]}

    def shortest_recurrence(self, sequence: list[int]) -> tuple[list[int], int]:
        """The connection polynomial and its length (Massey, IEEE Trans. Inform. Theory 15, 1969)."""
        times = self.field.times
        current, before = [1], [1]
        length, shift, last = 0, 1, 1
        for i, term in enumerate(sequence):
            discrepancy = term
            for j in range(1, min(length, len(current) - 1) + 1):
                discrepancy ^= times[current[j]][sequence[i - j]]
            if discrepancy:
                factor = times[discrepancy][self.field.inverse(last)]
                adjusted = current + [0] * (len(before) + shift - len(current))
                for j, coefficient in enumerate(before):
                    adjusted[j + shift] ^= times[factor][coefficient]
                if 2 * length <= i:
                    before, last, length, shift = current, discrepancy, i + 1 - length, 0
                current = adjusted
            shift += 1
        return current, length


# == THE INNER CODES =====================================================================================

COLUMNS = {
    (1, 15, 1): """
        07 0e 1c 38 70 e0 c1 83  0b 16 2c 58 b0 61 c2 85  0d 1a 34 68 d0 a1 43 86
        13 26 4c 98 31 62 c4 89  15 2a 54 a8 51 a2 45 8a  19 32 64 c8 91 23 46 8c
        1f 3e 7c f8 f1 e3 c7 8f  25 4a 94 29 52 a4 49 92  2f 5e bc 79 f2 e5 cb 97
        37 6e dc b9 73 e6 cd 9b  3b 76 ec d9 b3 67 ce 9d  3d 7a f4 e9 d3 a7 4f 9e
        57 ae 5d ba 75 ea d5 ab  5b b6 6d da b5 6b d6 ad  7f fe fd fb f7 ef df bf""",
    (2, 14, 2): """
        86ee 8b32 ff9b d353 8ac3 5b2e b65c e78a  4426 884c 9baa bc66 f3fe 6cce bb51 5ac7
        7014 e028 29af f409 a6ba a48b 07be 0f7c  1ef8 5f3d 192d 950d 64b2 aba9 7b37 5139
        0525 cfd0 1492 4be9 3085 a490 c212 6ddb  7ce1 5e95 78b0 f160 69f2 b129 2cfa 59f4
        b3e8 ece2 52f6 a5ec a227 682b 15cc 2b98  5730 ccad d7f2 24d6 2b61 f195 cf4f b2fb
        4993 56bc cfb5 b30f 4a7b 33a1 c015 ce82  74fb 2c6c 3a15 d37d 8a9f 395b d5e1 e56a
        41e6 83cc 8caa f0ab cd33 b603 22ae 455c  8ab8 fc8f b7b6 8693 2143 871c e7c7 8126
        ebb3 99ce da63 98a3 1d23 9d11 1647 e914  591a b234 8d97 5586 ab0c bfe7 3166 c598""",
    (2, 13, 3): """
        4db3c6 1016fb f6f9bc 968fa6 80b7d8 c7ad01 22f296 2e8f09
        367437 07824b d9d0dc c8dd66 81ac37 c59adf 269d2a 265071
        9a74a8 f22be1 49ff56 f89489 37eba3 6fd746 dfae8c 12f58c
        4e813d 4bd630 41782a e99a71 15f653 2beca6 ea6723 c4d8bd
        4f73cb 2359f9 fb0d9d 5bb3ae dc0d79 c3662c 96daa3 eb77f7
        c6f915 4b309b 2bdf59 57beb2 af7d64 4eec33 f6b243 2ba637
        574c6e 1326b3 264d66 4c9acc 993598 9fc3a4 44fb96 89f72c
        be46cc ba4f29 6488a9 a27b77 3f8a30 c2aa0f 9542e5 51f914
        1e4c47 8126e1 afe556 99081d 2206c1 92d9c8 e37121 d6f4b9
        d695ac bd3da3 010798 020f30 041e60 083cc0 adc7ef f6274a
        97324a 3e726f aa3094 92a399 88efa6 d71dfd 03936e d1f296
        65279d ca4f3a 84888f cfd3af 320fca b2cbde 1eeb62 8068ab
        ad79c2 218f5a fea0db 50e922 77060e 38d856 1ada89 e36158""",
    (0, 0, 0): "",
}
"""The check columns of the message bits by family, m and p, as in the page."""

DISTANCES = {(1, 15, 1): 4, (2, 14, 2): 6, (2, 13, 3): 8, (0, 0, 0): 1}


class InnerCode:
    """A binary code of m message bytes and p parity bytes, or none (m = p = 0)."""

    # > Bit b of message byte t has the check column in line t and place b of its table; bit b of parity
    # > byte j has the check column 2^(8j+b). The syndrome of a word is the exclusive or of the check
    # > columns of its ones, and codewords are the words whose syndrome is 0.
    def __init__(self, family: int, m: int, p: int) -> None:
        if (family, m, p) not in COLUMNS:
            raise Unreadable(f"this reader has no inner code of family {family} with m = {m}, p = {p}")
        self.m, self.p, self.d = m, p, DISTANCES[family, m, p]
        self.t = (self.d - 1) // 2
        self.columns = [int(c, 16) for c in COLUMNS[family, m, p].split()] + [1 << b for b in range(8 * p)]
        self.tables = [self.byte_table(t) for t in range(m + p)]
        self.leaders: dict[int, tuple[int, ...]] = {0: ()}
        self.leaders |= {column: (bit,) for bit, column in enumerate(self.columns)}
        if self.t > 1:
            for b, second in enumerate(self.columns):
                self.leaders |= {first ^ second: (a, b) for a, first in enumerate(self.columns[:b])}

    def byte_table(self, t: int) -> list[int]:
        """The exclusive or of the columns of the ones of every value of byte t."""
        table = [0]
        for column in self.columns[8 * t : 8 * t + 8]:
            table += [entry ^ column for entry in table]
        return table

    def flips(self, word: bytes) -> tuple[int, ...] | None:
        """The bits of a word of m + p bytes to be flipped, at most t; None where no codeword is so near."""
        syndrome = 0
        for table, value in zip(self.tables, word, strict=True):
            syndrome ^= table[value]
        found = self.leaders.get(syndrome)
        if found is None and self.t > 2:
            for bit, column in enumerate(self.columns):
                found = self.leaders.get(syndrome ^ column)
                if found is not None:
                    return (bit, *found)
        return found


# == DIGESTS =============================================================================================
# > Digests of cells are XXH3 of 64 bits with seed 0 and the default secret.
# The steps and names are those of the published description of xxHash (XXH3_64bits).

MASK64 = (1 << 64) - 1
P32_1, P32_2, P32_3 = 0x9E3779B1, 0x85EBCA77, 0xC2B2AE3D
P64_1, P64_2, P64_3 = 0x9E3779B185EBCA87, 0xC2B2AE3D27D4EB4F, 0x165667B19E3779F9
P64_4, P64_5 = 0x85EBCA77C2B2AE63, 0x27D4EB2F165667C5
MX1, MX2 = 0x165667919E3779F9, 0x9FB21C651E98DF25
SECRET = bytes.fromhex("""
    b8fe6c3923a44bbe7c01812cf721ad1cded46de9839097db7240a4a4b7b3671fcb79e64eccc0e578825ad07dccff7221
    b8084674f743248ee03590e6813a264c3c2852bb91c300cb88d0658b1b532ea371644897a20df94e3819ef46a9deacd8
    a8fa763fe39c343ff9dcbbc7c70b4f1d8a51e04bcdb45931c89f7ec9d9787364eac5ac8334d3ebc3c581a0fffa1363eb
    170ddd51b7f0da49d316552629d4689e2b16be587d47a1fc8ff8b8d17ad031ce45cb3a8f95160428afd7fbcabb4b407e""")


def u32(data: bytes, at: int) -> int:
    return int.from_bytes(data[at : at + 4], "little")


def u64(data: bytes, at: int) -> int:
    return int.from_bytes(data[at : at + 8], "little")


def fold(a: int, b: int) -> int:
    """The two halves of the 128-bit product, added without carry."""
    product = a * b
    return (product & MASK64) ^ (product >> 64)


def avalanche(h: int) -> int:
    h ^= h >> 37
    h = h * MX1 & MASK64
    return h ^ (h >> 32)


def avalanche64(h: int) -> int:
    h ^= h >> 33
    h = h * P64_2 & MASK64
    h ^= h >> 29
    h = h * P64_3 & MASK64
    return h ^ (h >> 32)


def xxh3(data: bytes) -> int:
    """XXH3_64bits of `data`."""
    if len(data) <= 16:
        return xxh3_short(data)
    return xxh3_medium(data) if len(data) <= 240 else xxh3_long(data)


def xxh3_short(data: bytes) -> int:
    size = len(data)
    if size > 8:
        low = u64(data, 0) ^ u64(SECRET, 24) ^ u64(SECRET, 32)
        high = u64(data, size - 8) ^ u64(SECRET, 40) ^ u64(SECRET, 48)
        swapped = int.from_bytes(low.to_bytes(8, "little"), "big")
        return avalanche((size + swapped + high + fold(low, high)) & MASK64)
    if size >= 4:
        h = (u32(data, size - 4) + (u32(data, 0) << 32)) ^ u64(SECRET, 8) ^ u64(SECRET, 16)
        h ^= (h << 49 | h >> 15) & MASK64 ^ (h << 24 | h >> 40) & MASK64
        h = h * MX2 & MASK64
        h ^= (h >> 35) + size
        h = h * MX2 & MASK64
        return h ^ h >> 28
    if size:
        combined = data[0] << 16 | data[size >> 1] << 24 | data[-1] | size << 8
        return avalanche64(combined ^ u32(SECRET, 0) ^ u32(SECRET, 4))
    return avalanche64(u64(SECRET, 56) ^ u64(SECRET, 64))


def mix16(data: bytes, at: int, secret: int) -> int:
    return fold(u64(data, at) ^ u64(SECRET, secret), u64(data, at + 8) ^ u64(SECRET, secret + 8))


def xxh3_medium(data: bytes) -> int:
    size = len(data)
    total = size * P64_1
    if size <= 128:
        for i in range((size - 1) // 32 + 1):
            total += mix16(data, 16 * i, 32 * i) + mix16(data, size - 16 * (i + 1), 32 * i + 16)
        return avalanche(total & MASK64)
    for i in range(8):
        total += mix16(data, 16 * i, 16 * i)
    total = avalanche(total & MASK64)
    for i in range(8, size // 16):
        total += mix16(data, 16 * i, 16 * (i - 8) + 3)
    return avalanche((total + mix16(data, size - 16, 136 - 17)) & MASK64)


STRIPE_SECRETS = [struct.unpack_from("<8Q", SECRET, 8 * i) for i in range(16)]


def accumulate(sums: list[int], stripe: tuple[int, ...], secret: tuple[int, ...]) -> None:
    for i in range(8):
        key = stripe[i] ^ secret[i]
        sums[i ^ 1] += stripe[i]
        sums[i] = (sums[i] + (key & 0xFFFFFFFF) * (key >> 32)) & MASK64


def xxh3_long(data: bytes) -> int:
    sums = [P32_3, P64_1, P64_2, P64_3, P64_4, P32_2, P64_5, P32_1]
    stripes = (len(data) - 1) // 64
    scramble = struct.unpack_from("<8Q", SECRET, 192 - 64)
    for number in range(stripes):
        accumulate(sums, struct.unpack_from("<8Q", data, 64 * number), STRIPE_SECRETS[number % 16])
        if number % 16 == 15:
            for i in range(8):
                total = sums[i] & MASK64
                sums[i] = (total ^ total >> 47 ^ scramble[i]) * P32_1 & MASK64
    accumulate(
        sums, struct.unpack_from("<8Q", data, len(data) - 64), struct.unpack_from("<8Q", SECRET, 192 - 64 - 7)
    )
    total = len(data) * P64_1
    for i in range(4):
        left, right = (sums[2 * i + j] & MASK64 ^ u64(SECRET, 11 + 16 * i + 8 * j) for j in range(2))
        total += fold(left, right)
    return avalanche(total & MASK64)


# == SECTIONS AND STRETCHES ==============================================================================
# > A stretch begins with its head: the marker and one coded copy of the bootstrap record, 518 bytes.

MARKER = bytes.fromhex("b9770c24f6058d06")
MARKER_ERRORS = 10
HEAD = 8 + 510
ROWS = 240
PAYLOAD_ROWS = 120
FULL_WIDTH = 4096
FRAME_HEADER = 32
FULL_CONTENT = PAYLOAD_ROWS * FULL_WIDTH - FRAME_HEADER
TABLE, DATA, INNER, PARITY, PARITY_INNER, SEALS = range(1, 7)


# > A section has 4 stretches when its window is shorter than 65536 bytes, 48 when it has at least 134217728,
# > and 16 otherwise.
def stretches_of(length: int) -> int:
    return 4 if length < SMALL else 16 if length < MANY else 48


class Layout:
    """Where everything stands in a section; offsets are from the section's first byte."""

    def __init__(self, geometry: Geometry, table_length: int) -> None:
        g = geometry
        self.geometry = g
        self.stretches = stretches_of(g.length)
        self.rows = ROWS // self.stretches
        self.content = dict.fromkeys(range(1, 7), 0) | {TABLE: table_length}
        if g.digested:
            self.content[DATA] = 8 * g.data_cells
            self.content[INNER] = 8 * -(-g.data_groups // CELL)
            self.content[PARITY] = 8 * g.r * g.blocks
            self.content[PARITY_INNER] = 8 * -(-g.r * g.strip_group // CELL)
        self.content[SEALS] = 8 * sum(-(-size // FULL_CONTENT) for size in self.content.values())
        self.places = [0]
        for track in range(1, 7):
            full, rest = divmod(self.content[track], FULL_CONTENT)
            widths = full * FULL_WIDTH + (self.width(rest) if rest else 0)
            self.places.append(self.places[-1] + self.rows * widths)
        # > prefix = 518 + slice, rounded up to the unit; piece = ceil(body / stretches), rounded up to the
        # > unit.
        self.prefix = round_up(HEAD + self.places[-1], unit(g.length))
        self.piece = round_up(-(-g.body // self.stretches), unit(g.length))
        ends = [
            self.stretch(t) + self.prefix + max(0, min(self.piece, g.body - t * self.piece))
            for t in range(self.stretches)
        ]
        # > The section ends where its last stretch or an earlier one ends, whichever is later, rounded up
        # > to the unit.
        self.size = round_up(max(ends), unit(g.length))

    # > Stretch t begins at byte 4096 + t * (prefix + piece) of the section.
    def stretch(self, t: int) -> int:
        return TEXT + t * (self.prefix + self.piece)

    # > Its width is 4096 when it is full, else ceil((content + 32) / 120).
    @staticmethod
    def width(content: int) -> int:
        return -(-(content + FRAME_HEADER) // PAYLOAD_ROWS)

    def frames(self, track: int) -> Iterator[Frame]:
        for number in range(-(-self.content[track] // FULL_CONTENT)):
            content = min(FULL_CONTENT, self.content[track] - number * FULL_CONTENT)
            place = self.places[track - 1] + number * self.rows * FULL_WIDTH
            yield Frame(track, number, content, self.width(content), place)


class Frame(NamedTuple):
    """One frame; `place` is where its rows begin in the slice of every stretch."""

    track: int
    number: int
    content: int
    width: int
    place: int


# == THE BOOTSTRAP RECORD ================================================================================

RECORD = struct.Struct("<6sHHHBBHBBBBBBHQ32sQQQQQQQQQII16s16s16sQ")
BOOTSTRAP_CODE = ReedSolomon(255, 100)
LAST_SECTION = 1


class Bootstrap(NamedTuple):
    """The fields of the record, in its order."""

    magic: bytes
    version: int
    stretch: int
    stretches: int
    n: int
    k: int
    field_polynomial: int
    first_root: int
    root_spacing: int
    family: int
    m: int
    p: int
    d: int
    cell: int
    matrix_digest: int
    name: bytes
    window: int
    start: int
    length: int
    depth: int
    set_depth: int
    stream_length: int
    section_offset: int
    table_length: int
    body_digest: int
    entries: int
    flags: int
    parent: bytes
    set_identity: bytes
    identity: bytes
    checksum: int

    @property
    def geometry(self) -> Geometry:
        return Geometry(self.n, self.k, self.m, self.p, self.length, self.depth)

    # > The identity of a section is the first 16 bytes of the SHA-256 of three things end to end: the 14
    # > bytes "oakum section" and a zero byte; the first 160 bytes of the bootstrap record with its stretch
    # > set to 0; the member table.
    def identity_with(self, table: bytes) -> bytes:
        record = RECORD.pack(*self._replace(stretch=0))
        return hashlib.sha256(b"oakum section\0" + record[:160] + table).digest()[:16]


# > A copy is 510 bytes: the 200 bytes of the record and 310 check bytes. They are two codewords of
# > RS(255,100) in turn: bytes 0, 2, 4 and so on are the first, bytes 1, 3, 5 and so on the second.
def decode_head(coded: bytes) -> Bootstrap | None:
    """The record, corrected if need be; None when there is none."""
    found = parse_record(coded[: RECORD.size])
    if found is not None:
        return found
    code, record = BOOTSTRAP_CODE, bytearray(coded[: RECORD.size])
    for turn in range(2):
        codeword = [bytes([symbol]) for symbol in coded[turn::2]]
        added = code.decode(b"".join(code.syndromes(codeword)), [])
        if added is None:
            return None
        for place, value in added.items():
            if place < code.k:
                record[2 * place + turn] ^= value
    return parse_record(bytes(record))


def parse_record(record: bytes) -> Bootstrap | None:
    found = Bootstrap._make(RECORD.unpack(record))
    if found.magic != b"OAKUM\0" or found.checksum != xxh3(record[:192]):
        return None
    if found.version > VERSION:
        raise Unreadable(f"the sidecar has format version {found.version}, this reader reads {VERSION}")
    return found


# == RECORDS ==============================================================================================


class Section:
    """One section that was found, at `base` of the sidecar."""

    def __init__(self, sidecar: Received, base: int, bootstrap: Bootstrap, layout: Layout) -> None:
        self.sidecar, self.base, self.layout = sidecar, base, layout
        self.bootstrap = bootstrap._replace(stretch=0)
        self.geometry = layout.geometry
        self.code = concatenated_code(bootstrap)
        self.pieces = self.read_table()

    def read(self, offset: int, length: int) -> Received:
        return self.sidecar.read(self.base + offset, length)

    # > Stretch t holds rows t * 240 / stretches up to (t + 1) * 240 / stretches of every frame, row after
    # > row.
    def rows(self, frame: Frame) -> tuple[list[bytes], list[bytes]]:
        """The 240 rows of a frame, and for each where it is missing."""
        rows, missing = [], []
        for t in range(self.layout.stretches):
            place = self.layout.stretch(t) + HEAD + frame.place
            for row in range(self.layout.rows):
                received = self.read(place + row * frame.width, frame.width)
                rows.append(received.data)
                missing.append(received.missing)
        return rows, missing

    # > When the checksum, the identity, the number and the track agree, the content is right as it stands,
    # > and nothing needs to be decoded. Otherwise every column is decoded, with missing bytes as erasures.
    # > Where that is not enough, it is tried once more with all rows of torn stretches as erasures.
    def frame(self, frame: Frame) -> tuple[bytes, bytes]:
        """The content of a frame, and for each byte whether it is known (1)."""
        rows, missing = self.rows(frame)
        payload, known = b"".join(rows[:PAYLOAD_ROWS]), bytes(PAYLOAD_ROWS * frame.width)
        if self.agrees(frame, payload):
            known = b"\1" * len(payload)
        if not all(known):
            payload, known = self.corrected(frame, rows, missing)
        if not all(known) and any(self.torn):
            wiped = b"\1" * frame.width
            torn = [wiped if self.torn[i // self.layout.rows] else row for i, row in enumerate(missing)]
            payload, known = max((payload, known), self.corrected(frame, rows, torn), key=lambda x: sum(x[1]))
        content = slice(FRAME_HEADER, FRAME_HEADER + frame.content)
        return payload[content], known[content]

    # > A torn stretch is one whose head cannot be read: what follows it is likely to be lost too.
    @cached_property
    def torn(self) -> list[bool]:
        starts = [self.base + self.layout.stretch(t) for t in range(self.layout.stretches)]
        return [read_head(self.sidecar, start) is None for start in starts]

    # > When the checksum still disagrees, a column is known only if at least 4 check symbols were left
    # > over: 2e + s <= 116 for e errors and s erasures. Nothing is known if the identity, the number or the
    # > track in the header is another.
    def corrected(self, frame: Frame, rows: list[bytes], missing: list[bytes]) -> tuple[bytes, bytes]:
        """The corrected payload, and for each byte whether it is known (1)."""
        corrected, known = [bytearray(row) for row in rows], bytearray(frame.width)
        syndromes = FRAME_CODE.syndromes(rows)
        for column in range(frame.width):
            erasures = [i for i in range(ROWS) if missing[i][column]]
            added = FRAME_CODE.decode(bytes(s[column] for s in syndromes), erasures)
            if added is not None:
                errors = len(added.keys() - set(erasures))
                known[column] = 2 * errors + len(erasures) <= FRAME_CODE.r - 4
                for i, value in added.items():
                    corrected[i][column] ^= value
        payload = b"".join(corrected[:PAYLOAD_ROWS])
        if self.agrees(frame, payload):
            return payload, b"\1" * len(payload)
        mask = bytes(known) * PAYLOAD_ROWS
        place = self.bootstrap.identity + struct.pack("<IHH", frame.number, frame.track, 0)
        if all(mask[8:32]) and payload[8:32] != place:
            mask = bytes(len(mask))
        return payload, mask

    def agrees(self, frame: Frame, payload: bytes) -> bool:
        checksum, identity, number, track, _ = struct.unpack_from("<Q16sIHH", payload)
        owner = (identity, number, track) == (self.bootstrap.identity, frame.number, frame.track)
        return owner and checksum == xxh3(payload[8:])

    def track(self, track: int) -> tuple[bytes, bytes]:
        """The content of all frames of a track, and for each byte whether it is known."""
        parts = [self.frame(frame) for frame in self.layout.frames(track)]
        return b"".join(data for data, _ in parts), b"".join(known for _, known in parts)

    def digests(self, track: int) -> list[int | None]:
        """The digests of a track; None for one that is lost."""
        data, known = self.track(track)
        return [u64(data, i) if all(known[i : i + 8]) else None for i in range(0, len(data), 8)]

    def read_table(self) -> list[Piece]:
        table, known = self.track(TABLE)
        if not all(known) or self.bootstrap.identity_with(table) != self.bootstrap.identity:
            raise Unreadable("the member table is lost, and without it nothing can be checked")
        return parse_table(table, self.bootstrap.entries, self.bootstrap.length)

    # == THE BODY ==
    # > Stretch t holds bytes t * piece up to (t + 1) * piece of the body, at byte prefix of the stretch.
    def body(self, offset: int, length: int) -> Received:
        data, missing = b"", b""
        while len(data) < length:
            t, inside = divmod(offset + len(data), self.layout.piece)
            size = min(length - len(data), self.layout.piece - inside)
            part = self.read(self.layout.stretch(t) + self.layout.prefix + inside, size)
            data, missing = data + part.data, missing + part.missing
        return Received(data, missing)


FRAME_CODE = ReedSolomon(ROWS, PAYLOAD_ROWS)


# == THE MEMBER TABLE ====================================================================================

ENTRY = struct.Struct("<HBBIqQQQ32sHH")
FILE, FOLDER, LINK = 1, 2, 3
PIECE_ENDS = 1


class Piece(NamedTuple):
    """One entry: a member, and the piece of it that lies in the window. The fields, in their order."""

    total: int
    kind: int
    flags: int
    mode: int
    modified_ns: int
    size: int
    offset: int
    length: int
    digest: bytes
    path_length: int
    target_length: int
    path: bytes
    target: bytes


def parse_table(table: bytes, entries: int, window_length: int) -> list[Piece]:
    """Every entry, checked against the limits of the page."""
    pieces: list[Piece] = []
    while table and len(pieces) < entries:
        fields = ENTRY.unpack(table[:76].ljust(76, b"\0"))
        path_end = 76 + fields[9]
        piece = Piece._make([*fields, table[76:path_end], table[path_end : fields[0]]])
        parts, ends = piece.path.split(b"/"), piece.offset + piece.length
        sound = (
            76 + len(piece.path) + len(piece.target) == piece.total == 76 + fields[9] + fields[10]
            and piece.kind in (FILE, FOLDER, LINK)
            and ends <= piece.size <= LONGEST
            and (ends == piece.size or not piece.flags & PIECE_ENDS)
            and (piece.kind == FILE or (piece.length == 0 and piece.flags & PIECE_ENDS))
            and b"\0" not in piece.path
            and len(piece.path) <= 32768
            and not any(part in (b"", b".", b"..") or len(part) > 255 for part in parts)
        )
        if not sound:
            raise Unreadable("the member table holds an entry that no writer would have written")
        pieces.append(piece)
        table = table[piece.total :]
    # > Only the first member of a window may have begun in an earlier one, only the last may go on in the
    # > next.
    in_order = not any(p.offset for p in pieces[1:]) and all(p.flags & PIECE_ENDS for p in pieces[:-1])
    once = len({p.path for p in pieces}) == len(pieces) == entries
    if table or not in_order or not once or sum(p.length for p in pieces) != window_length:
        raise Unreadable("the member table does not fit its window")
    return pieces


# == FINDING SECTIONS ====================================================================================


def find_sections(sidecar: Received) -> list[Section]:
    """All sections, in the order of their windows."""
    found: dict[int, Section] = {}
    place = 0
    # > The first section begins at byte 0, every other where the one before it ends. Where no head can be
    # > read in its place, the sidecar is searched from there on for markers with at most 10 wrong bits.
    while place < len(sidecar.data):
        section = head_at(sidecar, place + TEXT) or scan(sidecar, place)
        if section is None:
            break
        found.setdefault(section.bootstrap.window, section)
        place = max(place + 1, section.base + section.layout.size)
        if section.bootstrap.flags & LAST_SECTION:
            break
    if not found:
        raise Unreadable("this is no oakum sidecar, or nothing of it can be recognised any more")
    # > Sections of another set identity than most are no part of the set.
    sets = Counter(section.bootstrap.set_identity for section in found.values())
    owner = sets.most_common(1)[0][0]
    return [s for _, s in sorted(found.items()) if s.bootstrap.set_identity == owner]


def scan(sidecar: Received, start: int) -> Section | None:
    marker = int.from_bytes(MARKER, "big")
    window = 0
    for end, value in enumerate(sidecar.data[start:], start + 1):
        window = (window << 8 | value) & MASK64
        if end - 8 >= start and (window ^ marker).bit_count() <= MARKER_ERRORS:
            section = head_at(sidecar, end - 8)
            if section is not None:
                return section
    return None


def read_head(sidecar: Received, place: int) -> Bootstrap | None:
    """The bootstrap record of the stretch that begins at `place`; None when none does."""
    head = sidecar.read(place, HEAD).data
    if (int.from_bytes(head[:8], "big") ^ int.from_bytes(MARKER, "big")).bit_count() > MARKER_ERRORS:
        return None
    return decode_head(head[8:])


def head_at(sidecar: Received, place: int) -> Section | None:
    """The section one of whose stretches begins at `place`; None when none does."""
    b = read_head(sidecar, place)
    if b is None:
        return None
    if not b.geometry.sound or b.cell != CELL or not b.stretch < b.stretches == stretches_of(b.length):
        raise Unreadable("the bootstrap record contradicts itself")
    layout = Layout(b.geometry, b.table_length)
    plausible = (
        # > No section is longer than 4 times the bytes at hand and 1048576.
        layout.size <= 4 * len(sidecar.data) + (1 << 20)
        and ENTRY.size * b.entries <= b.table_length
        and b.start + b.length <= b.stream_length
        and max(b.start, b.section_offset) <= LONGEST
    )
    if not plausible:
        raise Unreadable("the bootstrap record promises more than the sidecar can hold")
    return Section(sidecar, place - layout.stretch(b.stretch), b, layout)


# == DECODING ============================================================================================


class ConcatenatedCode(NamedTuple):
    outer: ReedSolomon
    inner: InnerCode


def concatenated_code(b: Bootstrap) -> ConcatenatedCode:
    """The code of a section."""
    inner = InnerCode(b.family, b.m, b.p)
    # > The matrix digest is that of the 8 * (m + p) check columns, each in 4 bytes.
    columns = b"".join(column.to_bytes(4, "little") for column in inner.columns)
    if inner.d != b.d or xxh3(columns) != b.matrix_digest:
        raise Unreadable("the sidecar uses an inner code of another matrix than this reader's")
    return ConcatenatedCode(ReedSolomon(b.n, b.k, b.field_polynomial, b.first_root, b.root_spacing), inner)


@dataclass
class Cell:
    """One cell of a block, while it is decoded; masks have a 1 for each byte that they mean.

    `value` is what is taken for right at the time, `known` where that is sure. `flips` counts, for each byte,
    the flips corrected in its word; t + 1 where the word is flagged.
    """

    strip: int
    received: bytes
    missing: bytes
    known: bytearray
    digest: int | None = None
    group: Received = NOTHING
    value: bytearray = field(default_factory=bytearray)
    flips: bytearray = field(default_factory=bytearray)

    def __post_init__(self) -> None:
        self.value = bytearray(self.received)
        self.flips = bytearray(len(self.received))

    @property
    def finished(self) -> bool:
        return all(self.known)

    @property
    def contradicted(self) -> bool:
        """Whether all bytes seem to be known and the digest says no."""
        return self.finished and self.digest is not None and xxh3(bytes(self.value)) != self.digest

    def ask_digest(self, value: bytes) -> bool:
        """Finish the cell with `value` when the digest agrees."""
        if self.digest is None or xxh3(value) != self.digest:
            return False
        self.finish(value)
        return True

    def finish(self, value: bytes) -> None:
        self.value, self.known = bytearray(value), bytearray(b"\1" * len(value))


def decode_block(code: ConcatenatedCode, cells: list[Cell]) -> None:
    """Decode the n cells of a block in place, as far as it goes."""
    # > 1. A cell whose digest agrees, and of which nothing is missing, is right.
    for cell in cells:
        if not cell.finished and not any(cell.missing):
            cell.ask_digest(cell.received)
    open_columns = set(range(len(cells[0].received)))
    while not all(cell.finished for cell in cells):
        # > 2. In every other cell each word is corrected in up to (d-1)/2 bits, rounded down, or flagged. A
        # > cell whose digest now agrees is right.
        for cell in cells:
            if not cell.finished:
                decode_words(code.inner, cell)
                cell.ask_digest(bytes(cell.value))
        # > 3. When at most r cells of the block are not right, all of them are erased and solved for.
        # > 4. Otherwise every column is decoded by itself, and the bytes of a solved column are known from
        # > now on.
        # > 5. Steps 2 to 4 are repeated, with what has become known, until nothing changes.
        if not erase_cells(code, cells) and not solve_columns(code, cells, open_columns):
            break
    for cell in cells:
        if cell.contradicted:
            cell.known = bytearray(len(cell.value))


# > In strip i the words of a cell begin at byte i mod m of the cell and wrap round inside it. A word that
# > has fewer than m bytes, the last one of a cell, is filled with zeros, which are not stored.
def decode_words(inner: InnerCode, cell: Cell) -> None:
    """Correct or flag every word of a cell. Known bytes are taken as they are, and never altered."""
    if not inner.p:
        return
    m, p, width = inner.m, inner.p, len(cell.received)
    places = [(i + cell.strip % m) % width for i in range(width)]
    for number in range(-(-width // m)):
        word = places[number * m : (number + 1) * m]
        parity = slice(number * p, (number + 1) * p)
        start = [cell.value[i] if cell.known[i] else cell.received[i] for i in word]
        corrected = bytearray(start).ljust(m, b"\0") + cell.group.data[parity]
        flips: tuple[int, ...] | None = ()
        # > A word whose inner parity is missing is neither corrected nor flagged.
        if not any(cell.group.missing[parity]):
            flips = inner.flips(bytes(corrected))
            if flips is not None and any(touches_known(bit // 8, word, cell, m) for bit in flips):
                flips = None
        for bit in flips or ():
            corrected[bit // 8] ^= 1 << bit % 8
        for i, value in zip(word, corrected, strict=False):
            cell.value[i] = value
            cell.flips[i] = inner.t + 1 if flips is None else len(flips)


def touches_known(byte: int, word: list[int], cell: Cell, m: int) -> bool:
    """Whether a byte of a word is known, be it as one of the zeros that fill the last word."""
    return byte < m and (byte >= len(word) or bool(cell.known[word[byte]]))


def erase_cells(code: ConcatenatedCode, cells: list[Cell]) -> bool:
    """Step 3, for all columns at once."""
    wrong = [cell for cell in cells if not cell.finished]
    if len(wrong) > code.outer.r:
        return False
    syndromes = code.outer.syndromes([bytes(cell.value) for cell in cells])
    magnitudes = code.outer.magnitudes(syndromes, [cell.strip for cell in wrong])
    if magnitudes is None:
        return False
    values = [xor(bytes(cell.value), added) for cell, added in zip(wrong, magnitudes, strict=True)]
    for cell, value, added in zip(wrong, values, magnitudes, strict=True):
        altered = any(a and k for a, k in zip(added, cell.known, strict=True))
        if altered or (cell.digest is not None and xxh3(value) != cell.digest):
            return False
    for cell, value in zip(wrong, values, strict=True):
        cell.finish(value)
    return True


def solve_columns(code: ConcatenatedCode, cells: list[Cell], open_columns: set[int]) -> bool:
    """Step 4. Whether a column was solved."""
    syndromes = code.outer.syndromes([bytes(cell.value) for cell in cells])
    solved = set()
    for column in sorted(open_columns):
        added = solve_column(code, cells, column, bytes(s[column] for s in syndromes))
        if added is None:
            continue
        solved.add(column)
        for strip, value in added.items():
            cells[strip].value[column] ^= value
        for cell in cells:
            cell.known[column] = 1
    open_columns -= solved
    return bool(solved)


def solve_column(
    code: ConcatenatedCode, cells: list[Cell], column: int, syndromes: bytes
) -> dict[int, int] | None:
    """Generalised minimum distance decoding (Forney, IEEE Trans. Inform. Theory 12, 1966) of one column."""
    t = code.inner.t
    unknown = [cell for cell in cells if not cell.known[column]]
    missing = {cell.strip for cell in unknown if cell.missing[column]}
    flips = {cell.strip: cell.flips[column] for cell in unknown}
    tried = set()
    # > The trials erase the missing symbols; those and the symbols of flagged words; those and the symbols
    # > of words in which (d-1)/2 flips were corrected; and so on down to one flip.
    for least in range(t + 2, 0, -1):
        erasures = tuple(sorted(missing | {i for i, count in flips.items() if count >= least}))
        if erasures in tried:
            continue
        tried.add(erasures)
        added = code.outer.decode(syndromes, list(erasures))
        if added is None or any(strip not in flips for strip in added):  # a known symbol would be altered
            continue
        if believed(code, flips, missing, added, len(erasures)):
            return added
    return None


def believed(
    code: ConcatenatedCode, flips: dict[int, int], missing: set[int], added: dict[int, int], erased: int
) -> bool:
    """Whether a solution may be taken for right, by either of the rules of the page."""
    # > A symbol has the weight 0 when it is missing or its word is flagged, else d - 2e, with e the flips
    # > corrected in its word. A solution is taken when the sum over the symbols that are not known, of d
    # > less the weight for those that it leaves and d plus the weight for those that it alters, is below D
    # > * d.
    d, t, r = code.inner.d, code.inner.t, code.outer.r
    distance = 0
    for strip, count in flips.items():
        weight = 0 if strip in missing or count > t else d - 2 * count
        distance += d + weight if strip in added else d - weight
    if distance < (r + 1) * d:
        return True
    # > It is also taken when a random word would have passed for one with a chance below 10^-9: C(u - s, e)
    # > (255/256)^e 256^(e - (r - s)), with u symbols not known, s erasures and e errors outside them.
    errors = sum(1 for strip in added if strip not in missing and flips[strip] <= t)
    errors = min(errors, len(flips) - erased)
    chance = math.comb(len(flips) - erased, errors) * (255 / 256) ** errors * 256.0 ** (errors - r + erased)
    return chance < 1e-9


# == THE MEMBERS =========================================================================================


class Member:
    """A member as received and as corrected so far."""

    def __init__(self, piece: Piece, root: bytes) -> None:
        self.piece = piece
        self.at = os.path.join(root, piece.path)
        self.there = False
        self.received = NOTHING
        if os.path.realpath(self.at) == self.at or piece.kind == LINK:
            self.there = os.path.lexists(self.at)
            if piece.kind == FILE and os.path.isfile(self.at):
                self.received = read_file(self.at)
        self.corrected = bytearray(self.received.data)
        self.digest: bytes | None = None
        self.size = 0
        self.whole = True

    # > The SHA-256 of an entry is that of the member from its first byte to the end of the piece.
    def agrees(self, piece: Piece) -> bool:
        """Whether the member is right as received, up to the end of a piece."""
        end = piece.offset + piece.length
        if len(self.received.data) < end or any(self.received.missing[:end]):
            return False
        return hashlib.sha256(self.received.data[:end]).digest() == piece.digest

    def put(self, piece: Piece, data: bytes) -> None:
        """The corrected bytes of a piece."""
        self.whole &= piece.offset <= len(self.corrected)
        if self.whole:
            self.corrected[piece.offset : piece.offset + piece.length] = data
        if piece.flags & PIECE_ENDS:
            self.digest, self.size = piece.digest, piece.size

    def state(self) -> str:
        """In a word: intact, altered (and put right), absent (and put right), or lost."""
        if self.piece.kind == FOLDER:
            return "intact" if os.path.isdir(self.at) else "absent"
        if self.piece.kind == LINK:
            same = os.path.islink(self.at) and os.readlink(self.at) == self.piece.target
            return "intact" if same else "absent"
        del self.corrected[self.size :]
        if not self.whole or hashlib.sha256(self.corrected).digest() != self.digest:
            return "lost"
        if not self.there:
            return "absent"
        same = self.corrected == self.received.data and not any(self.received.missing)
        return "intact" if same else "altered"


def correct_window(section: Section, members: dict[bytes, Member]) -> None:
    """Decode the damaged blocks of one window and give the members their bytes."""
    g = section.geometry
    stream = bytearray(g.k * g.depth)
    missing = bytearray(g.k * g.depth)
    known = bytearray(b"\1" * (g.k * g.depth))  # Virtual bytes are known to be zero.
    place = 0
    for piece in section.pieces:
        here = slice(place, place + piece.length)
        if piece.length:
            member = members[piece.path]
            stream[here], missing[here] = member.received.read(piece.offset, piece.length)
            # > The bytes of a member whose SHA-256 agrees are known.
            known[here] = (b"\1" if member.agrees(piece) else b"\0") * piece.length
        place += piece.length
    if not all(known):
        blocks = BlockReader(section, stream, missing, known)
        for block in range(g.blocks):
            cells = blocks.cells(block)
            if any(not cell.finished for cell in cells[: g.k]):
                decode_block(section.code, cells)
            for cell in cells[: g.k]:
                start = cell.strip * g.depth + block * CELL
                stream[start : start + len(cell.value)] = best(cell)
    place = 0
    for piece in section.pieces:
        if piece.kind == FILE:
            members[piece.path].put(piece, bytes(stream[place : place + piece.length]))
        place += piece.length


def best(cell: Cell) -> bytes:
    """What is known to be right, and as received elsewhere."""
    return bytes(v if k else r for v, k, r in zip(cell.value, cell.known, cell.received, strict=True))


class BlockReader:
    """Puts together the cells of the blocks of one window."""

    def __init__(self, section: Section, stream: bytearray, missing: bytearray, known: bytearray) -> None:
        self.section, self.stream, self.missing, self.known = section, stream, missing, known
        self.data_digests = section.digests(DATA)
        self.parity_digests = section.digests(PARITY)
        g = section.geometry
        # > Where cells have no digests, the bootstrap record has one of the whole body.
        body = section.body(0, g.body) if not g.digested else Received(b"", b"\1")
        self.body_right = not any(body.missing) and xxh3(body.data) == section.bootstrap.body_digest

    def cells(self, block: int) -> list[Cell]:
        g = self.section.geometry
        return [self.data_cell(i, block) for i in range(g.k)] + [
            self.parity_cell(g.k + j, block) for j in range(g.r)
        ]

    def data_cell(self, strip: int, block: int) -> Cell:
        g = self.section.geometry
        start, number = strip * g.depth + block * CELL, strip * g.blocks + block
        here = slice(start, start + g.width(block))
        cell = Cell(strip, bytes(self.stream[here]), bytes(self.missing[here]), self.known[here])
        if number < g.data_cells:
            cell.digest = self.data_digests[number] if g.digested else None
            cell.group = self.section.body(g.group_place(strip, block), g.group(block))
        return cell

    # > The digests of parity cells are in the order of the blocks, and in each block of the strips.
    def parity_cell(self, strip: int, block: int) -> Cell:
        g = self.section.geometry
        row, width = strip - g.k, g.width(block)
        received = self.section.body(row * g.depth + block * CELL, width)
        cell = Cell(strip, *received, bytearray((b"\1" if self.body_right else b"\0") * width))
        cell.digest = self.parity_digests[block * g.r + row] if g.digested else None
        cell.group = self.section.body(g.group_place(strip, block), g.group(block))
        return cell


# == THE COMMAND =========================================================================================


def read_set(sidecar: bytes, root: bytes) -> dict[bytes, Member]:
    """All members of a set, corrected as far as it goes."""
    members: dict[bytes, Member] = {}
    sections = find_sections(read_file(sidecar))
    for section in sections:
        for piece in section.pieces:
            if piece.path not in members:
                members[piece.path] = Member(piece, root)
    for section in sections:
        correct_window(section, members)
    return members


def write_members(members: dict[bytes, Member], states: dict[bytes, str], output: bytes) -> None:
    """Write what is right below `output`; links last, so that nothing is written through one of them."""
    for path, member in members.items():
        place = os.path.join(output, path)
        if member.piece.kind == FOLDER:
            os.makedirs(place, exist_ok=True)
        elif member.piece.kind == FILE and states[path] != "lost":
            os.makedirs(os.path.dirname(place), exist_ok=True)
            with open(place, "xb") as file:
                file.write(member.corrected)
            restore(place, member.piece)
    for path, member in members.items():
        if member.piece.kind == LINK:
            os.makedirs(os.path.dirname(os.path.join(output, path)), exist_ok=True)
            os.symlink(member.piece.target, os.path.join(output, path))
    for path, member in sorted(members.items(), reverse=True):  # inner folders before outer ones
        if member.piece.kind == FOLDER:
            restore(os.path.join(output, path), member.piece)


def restore(place: bytes, piece: Piece) -> None:
    """Permission bits and modification time; a pipe had none."""
    os.chmod(place, piece.mode & 0o777)
    if piece.modified_ns > 0:
        os.utime(place, ns=(piece.modified_ns, piece.modified_ns))


def shown(path: bytes) -> str:
    """A path without anything that could work on a terminal."""
    text = path.decode("utf-8", "backslashreplace")
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(
        description="Reads an oakum sidecar and corrects its members, with the standard library alone."
    )
    parser.add_argument("sidecar")
    parser.add_argument("--root", help="the folder that the members' paths start from")
    parser.add_argument("--output", help="write the members, as they should be, below this folder")
    given = parser.parse_args(arguments)
    sidecar = os.path.realpath(os.fsencode(given.sidecar))
    root = os.path.realpath(os.fsencode(given.root)) if given.root else os.path.dirname(sidecar)
    try:
        members = read_set(sidecar, root)
        states = {path: member.state() for path, member in members.items()}
        if given.output:
            write_members(members, states, os.path.realpath(os.fsencode(given.output)))
    except (Unreadable, OSError) as error:
        sys.stderr.write(f"{error}\n")
        return 30
    for path, state in states.items():
        sys.stdout.write(f"{state:8}{shown(path)}\n")
    if "lost" in states.values():
        return 20
    return 0 if given.output or set(states.values()) == {"intact"} else 10


if __name__ == "__main__":
    sys.exit(main())
