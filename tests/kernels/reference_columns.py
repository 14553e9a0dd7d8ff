"""A slow decoder of one Reed-Solomon column, by another method than the kernel's.

Sugiyama, Kasahara, Hirasawa and Namekawa 1975: Euclid's algorithm for errors and erasures. Polynomials are
lists of ints, lowest power first; every result is checked by computing its syndromes again.
"""

from __future__ import annotations

from oakum.algebra.outer import OuterCode

Polynomial = list[int]


class ReferenceDecoder:
    def __init__(self, outer: OuterCode) -> None:
        self.outer = outer
        self.table = outer.field.multiplication_table.tolist()
        self.inverse = [0] + [row.index(1) for row in self.table[1:]]
        self.locators = outer.locators.tolist()
        self.checks = outer.check_matrix.tolist()

    def decode(self, syndromes: list[int], erased: list[int]) -> dict[int, int] | None:
        """Place to magnitude, without zeros; None if no codeword has 2 * errors + erasures <= r."""
        r = self.outer.r
        if len(erased) > r:
            return None
        erasure_locator = [1]
        for place in erased:
            erasure_locator = self.times(erasure_locator, [1, self.locators[place]])
        modified = self.trim(self.times(syndromes, erasure_locator)[:r])
        # 1. Euclid on x^r and the modified syndromes, until the degree is below (r + s) / 2
        old, new = [0] * r + [1], modified
        u, v = [0], [1]
        while 2 * (len(new) - 1) >= r + len(erased) and new != [0]:
            quotient, rest = self.divide(old, new)
            old, new = new, rest
            u, v = v, self.plus(u, self.times(quotient, v))
        locator = self.times(v, erasure_locator)
        # 2. roots among the places of the code
        places = [i for i, x in enumerate(self.locators) if self.value(locator, self.inverse[x]) == 0]
        if len(places) > r:
            return None
        # 3. magnitudes by solving the first equations, one for each place
        magnitudes = self.solve(places, syndromes)
        if magnitudes is None or self.syndromes(magnitudes) != list(syndromes):
            return None
        errors = sum(1 for place in magnitudes if place not in erased)
        return magnitudes if 2 * errors + len(erased) <= r else None

    def syndromes(self, magnitudes: dict[int, int]) -> list[int]:
        out = []
        for row in self.checks:
            total = 0
            for place, magnitude in magnitudes.items():
                total ^= self.table[row[place]][magnitude]
            out.append(total)
        return out

    def solve(self, places: list[int], syndromes: list[int]) -> dict[int, int] | None:
        rows = [[self.checks[j][i] for i in places] + [syndromes[j]] for j in range(len(places))]
        for pivot in range(len(places)):
            if rows[pivot][pivot] == 0:  # leading minors of such matrices are never zero
                return None
            scale = self.inverse[rows[pivot][pivot]]
            rows[pivot] = [self.table[scale][x] for x in rows[pivot]]
            for j, row in enumerate(rows):
                if j != pivot and row[pivot]:
                    factor = row[pivot]
                    rows[j] = [x ^ self.table[factor][y] for x, y in zip(row, rows[pivot], strict=True)]
        return {i: row[-1] for i, row in zip(places, rows, strict=True) if row[-1]}

    def times(self, a: Polynomial, b: Polynomial) -> Polynomial:
        out = [0] * (len(a) + len(b) - 1)
        for i, x in enumerate(a):
            for j, y in enumerate(b):
                out[i + j] ^= self.table[x][y]
        return self.trim(out)

    def plus(self, a: Polynomial, b: Polynomial) -> Polynomial:
        size = max(len(a), len(b))
        padded = (a + [0] * (size - len(a)), b + [0] * (size - len(b)))
        return self.trim([x ^ y for x, y in zip(*padded, strict=True)])

    def divide(self, a: Polynomial, b: Polynomial) -> tuple[Polynomial, Polynomial]:
        rest, quotient = list(a), [0] * max(1, len(a) - len(b) + 1)
        for shift in range(len(a) - len(b), -1, -1):
            factor = self.table[rest[shift + len(b) - 1]][self.inverse[b[-1]]]
            quotient[shift] = factor
            for i, y in enumerate(b):
                rest[shift + i] ^= self.table[factor][y]
        return self.trim(quotient), self.trim(rest)

    def value(self, a: Polynomial, x: int) -> int:
        total = 0
        for coefficient in reversed(a):
            total = self.table[total][x] ^ coefficient
        return total

    @staticmethod
    def trim(a: Polynomial) -> Polynomial:
        size = len(a)
        while size > 1 and a[size - 1] == 0:
            size -= 1
        return list(a[:size])
