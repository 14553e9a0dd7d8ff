"""The compiled digests of cells, against the reference implementation of XXH3-64."""

from __future__ import annotations

import numpy as np
import pytest
import xxhash
from guarded import guarded

from oakum.kernels.cells import cell_digests
from oakum.kernels.words import CELL


def expected(data: np.ndarray) -> list[int]:
    """By Collet's reference implementation, which the package `xxhash` wraps."""
    return [xxhash.xxh3_64_intdigest(data[i : i + CELL].tobytes()) for i in range(0, len(data), CELL)]


@pytest.mark.parametrize("length", [0, 1, 16, 240, 241, 4095, 4096, 4097, 3 * 4096, 50_001])
@pytest.mark.parametrize("offset", [0, 1, 7, 16, 63])
def test_digests_of_any_length_and_alignment(length: int, offset: int) -> None:
    data = np.random.default_rng(length).integers(0, 256, offset + length, dtype=np.uint8)[offset:]
    assert cell_digests(data).tolist() == expected(data)


@pytest.mark.parametrize("value", [0x00, 0x80, 0xFF])
def test_cells_of_one_value(value: int) -> None:
    """Every carry and none."""
    data = np.full(2 * CELL, value, np.uint8)
    assert cell_digests(data).tolist() == expected(data)


def test_every_bit_counts() -> None:
    """One flip anywhere in a cell changes its digest, in each stripe and each byte of it."""
    cells = np.zeros((CELL, CELL), np.uint8)
    cells[np.arange(CELL), np.arange(CELL)] = 1 << (np.arange(CELL) % 8)
    assert len(np.unique(cell_digests(cells.reshape(-1)))) == CELL


def test_nothing_is_read_beyond_the_end() -> None:
    for data in (guarded(2 * CELL), guarded(2 * CELL, before=True)):
        data[:] = np.arange(2 * CELL) % 251
        assert cell_digests(data).tolist() == expected(data)


def test_other_arrays_are_refused() -> None:
    for data in (np.zeros(CELL, np.int8), np.zeros((2, CELL), np.uint8), np.zeros(2 * CELL, np.uint8)[::2]):
        with pytest.raises(ValueError, match="contiguous"):
            cell_digests(data)  # type: ignore[arg-type]
