"""The strip map: a matrix over GF(2^8) applied to strips, Y[j, :] (=|^=) xor over i of A[j, i] * X[i, :].

Encoding (A the parity matrix), syndromes (A the check matrix), evaluating polynomials at all places
(A a Vandermonde matrix) and solving for erasures (A a small inverse) are all this one map.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache, cached_property, partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.field import Field
from oakum.kernels import tiers
from oakum.kernels.arrays import Arrays, check_rows
from oakum.kernels.compiling import Kernel
from oakum.kernels.scratch import scratch

Bytes = NDArray[np.uint8]

STRIP = 1024
"""Columns worked on at a time: all inputs of a (255, 223) code fit the second-level cache."""

STRIDE = STRIP + 64
"""Distance of the rows in scratch memory; not a power of two, or all would share a few cache lines."""

TILE_ROWS = 4
TILE_COLUMNS = 64

NIBBLES_SIZE = 2 * TILE_COLUMNS
NIBBLES_BLOCK = 128
"""Inputs that the shuffle kernel holds at a time, split into nibbles: 16 KiB of the first-level cache."""

MULTIPLES_SIZE = 32 * TILE_COLUMNS
MULTIPLES_BLOCK = 8
"""Inputs whose multiples the portable kernel holds at a time: 16 KiB of the first-level cache."""


def scratch_size(rows: int, inputs: int) -> int:
    """Bytes of scratch memory that any of the kernels needs for `rows` outputs and `inputs` inputs."""
    packed = inputs + -(-rows // TILE_ROWS) * TILE_ROWS
    return packed * STRIDE + max(NIBBLES_BLOCK * NIBBLES_SIZE, MULTIPLES_BLOCK * MULTIPLES_SIZE)


class StripMap:
    """One matrix, made ready for the instructions of one tier.

    `matrix` is uint8[R, K] over the field GF(2^8) of `field_poly`. `tier` as in `oakum.tiers`; None
    takes the current one. Raises UsageError for a tier that cannot be used here, ValueError for a `matrix`
    that is not as described. Making the first map of a tier compiles its kernel, or loads it.
    """

    def __init__(self, matrix: Bytes, *, field_poly: int = 0x11D, tier: str | None = None) -> None:
        if matrix.dtype != np.uint8 or matrix.ndim != 2:
            raise ValueError("the matrix of a strip map is a two-dimensional array of uint8")
        self.tier = tiers.current_tier() if tier is None else tiers.check_tier(tier)
        self.rows, self.inputs = matrix.shape
        self._prepared = prepared(matrix, field_poly, self.tier)
        self._kernel = KERNELS[self.tier].prepare()

    def apply(self, source: Bytes, out: Bytes, *, first: int = 0, accumulate: bool = False) -> None:
        """Set `out` (or XOR onto it, with `accumulate`) to the matrix times `source`.

        `source` is uint8[K', L] and stands for inputs first..first+K'-1 of the matrix, as if all others were
        zero; `out` is uint8[R, L]. Rows may be at any distance from each other and at any address; the bytes
        of a row are contiguous. L may be 0. The two must not overlap. Bytes outside the rows are neither read
        nor written. Releases the GIL; may be called from several threads at once.

        Raises ValueError for arrays that are not as described.
        """
        check_rows(source, "source")
        check_rows(out, "out")
        count, length = source.shape
        if not out.flags.writeable:
            raise ValueError("out cannot be written")
        if out.shape != (self.rows, length):
            raise ValueError(f"out is {out.shape} and should be {(self.rows, length)}")
        if first < 0 or first + count > self.inputs:
            raise ValueError(
                f"inputs {first} to {first + count - 1} are not all among 0 to {self.inputs - 1}"
            )
        run(self._kernel, self._prepared, source, out, first, accumulate)


@dataclass(frozen=True)
class Prepared:
    """A matrix as a kernel takes it.

    `coefficients` is [group of outputs, input, ...]; `constant` is the kernel's last argument, and
    `held` keeps alive what that is the address of.
    """

    coefficients: NDArray[Any]
    constant: int
    held: Bytes | None = None

    @cached_property
    def address(self) -> int:
        return int(self.coefficients.ctypes.data)


def prepared(matrix: Bytes, field_poly: int, tier: str) -> Prepared:
    """`matrix` in the form of the tier's kernel.

    gfni: for each coefficient the 8 x 8 bit matrix of multiplying by it.
    shuffle: for each coefficient where its two nibble tables begin in the table of all products.
    portable: for each coefficient where the multiples for its two nibbles begin in a table of 32 x 64 bytes.
    """
    if tier == "portable":
        low, high = matrix & 15, matrix >> 4
        entries = np.stack([low, high + np.uint8(16)], axis=-1)
        return Prepared(entries.astype(np.uint16) * np.uint16(TILE_COLUMNS), field_poly & 0xFF)
    if tier == "gfni":
        return Prepared(grouped(affine_matrices(field_poly)[matrix]), 0)
    tables = nibble_tables(field_poly)
    return Prepared(grouped(matrix.astype(np.uint16) * np.uint16(32)), tables.ctypes.data, tables)


def grouped(coefficients: NDArray[Any]) -> NDArray[Any]:
    """[R, K] as [ceil(R/4), K, 4]: what one register tile reads is together; absent outputs have 0."""
    rows, inputs = coefficients.shape
    groups = -(-rows // TILE_ROWS)
    padded = np.zeros((groups * TILE_ROWS, inputs), coefficients.dtype)
    padded[:rows] = coefficients
    return np.ascontiguousarray(padded.reshape(groups, TILE_ROWS, inputs).transpose(0, 2, 1))


@cache
def nibble_tables(field_poly: int) -> Bytes:
    """uint8[256, 2, 16]: c * v and c * 16 v for v = 0..15."""
    nibbles = np.arange(16, dtype=np.uint8)
    both = np.stack([nibbles, nibbles << 4])
    return Field(field_poly).multiply(np.arange(256, dtype=np.uint8)[:, None, None], both[None])


@cache
def affine_matrices(field_poly: int) -> NDArray[np.uint64]:
    """uint64[256]: multiplication by c as the affine instruction takes it.

    Bit i of the product is the parity of byte 7 - i of the matrix AND the factor; so bit k of that byte is
    bit i of c * 2^k.
    """
    powers = np.uint8(1) << np.arange(8, dtype=np.uint8)
    products = Field(field_poly).multiply(np.arange(256, dtype=np.uint8)[:, None], powers[None])
    bits = (products[:, None, :] >> np.arange(7, -1, -1, dtype=np.uint8)[None, :, None]) & np.uint8(1)
    return (
        np.packbits(bits, axis=-1, bitorder="little")
        .reshape(256, 8)
        .view("<u8")
        .reshape(256)
        .astype(np.uint64)
    )


def run(
    compiled: Callable[..., Any], prepared: Prepared, source: Bytes, out: Bytes, first: int, accumulate: bool
) -> None:
    """Call a kernel on arrays that have been checked."""
    if not out.size:
        return
    group_size, entry_size = prepared.coefficients.strides[:2]
    compiled(
        Arrays.of(source, out, accumulate),
        prepared.address + first * entry_size,
        group_size,
        scratch(scratch_size(len(out), len(source))),
        prepared.constant,
    )


def gives_known_answer(compiled: Callable[..., Any], tier: str) -> bool:
    """Whether a kernel multiplies every byte by every byte as the field does, whole vectors and a tail."""
    field = Field()
    everything = np.arange(256, dtype=np.uint8)
    source = np.tile(everything, (2, 5))[:, : STRIP + 77]
    source[1] = source[1, ::-1]
    matrix = np.stack([everything, everything[::-1]], axis=1)
    products = [field.multiply(matrix[:, i, None], source[i, None]) for i in range(2)]
    out = np.empty((256, source.shape[1]), np.uint8)
    run(compiled, prepared(matrix, field.poly, tier), source, out, 0, False)
    if not np.array_equal(out, products[0] ^ products[1]):
        return False
    run(compiled, prepared(matrix[:, :1], field.poly, tier), source[:1], out, 0, True)
    return np.array_equal(out, products[1])


KERNELS = {
    tier: Kernel(f".stripmap_kernels.map_{tier}", partial(gives_known_answer, tier=tier), "the strip map")
    for tier in tiers.TIERS
}
