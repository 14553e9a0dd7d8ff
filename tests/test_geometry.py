"""Geometry: every byte has one place, every place one byte, and what contradicts itself is refused."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.naming import NAMED, resolve_code
from oakum.errors import FormatError, UsageError
from oakum.geometry import (
    CELL,
    LARGE,
    MAX_LENGTH,
    SMALL,
    Geometry,
    plan_windows,
    whole_depth,
    window_depth,
)

CODES = [
    *NAMED.values(),
    *map(resolve_code, ("RS(20,15)", "RS(12,5)+EB(128,104)", "RS(255,254)", "RS(2,1)+EH(128,120)")),
]

LENGTHS = st.one_of(
    st.integers(1, 300),
    st.integers(1, 3 * SMALL),
    st.integers(1, 3_000_000),
    st.integers(LARGE - 5, LARGE + 5_000_000),
)


def geometry(code: ConcatenatedCode, length: int, depth: int | None = None) -> Geometry:
    depth = window_depth(length, code.outer.k, depth or MAX_LENGTH)
    return Geometry(code.outer.n, code.outer.k, code.inner.m, code.inner.p, length, depth)


GEOMETRIES = st.builds(
    lambda code, length, depth: geometry(code, min(length, code.outer.k * (depth or MAX_LENGTH)), depth),
    st.sampled_from(CODES),
    LENGTHS,
    st.one_of(st.none(), st.integers(1, 40).map(lambda cells: cells * CELL)),
)

SMALL_GEOMETRIES = st.builds(geometry, st.sampled_from(CODES), st.integers(1, 400_000))


@given(GEOMETRIES, st.data())
def test_a_byte_is_in_one_cell(g: Geometry, data: st.DataObject) -> None:
    offset = data.draw(st.integers(0, g.length - 1))
    number = g.cell_at(offset)
    strip, block = g.cell_place(number)
    start = g.cell_start(number)
    assert g.cell_number(strip, block) == number < g.data_cells
    assert g.cell_at(start) == number
    assert start <= offset < start + g.width(block)
    # By the definitions themselves: strips of `depth` bytes, cells of 4,096 from the strip's start.
    assert (strip, block) == (offset // g.depth, offset % g.depth // CELL)


@given(GEOMETRIES)
def test_cells_tile_the_window(g: Geometry) -> None:
    step = max(1, g.data_cells // 500)
    for number in range(0, g.data_cells, step):
        _, block = g.cell_place(number)
        after = g.cell_start(number) + g.width(block)
        assert after == (g.cell_start(number + 1) if number + 1 < g.data_cells else g.cells_end)
    last = g.data_cells - 1
    assert g.cell_start(last) < g.length <= g.cells_end
    assert sum(g.width(b) for b in range(g.blocks)) == g.depth
    assert sum(g.strip_length(i) for i in range(g.k)) == g.length
    assert all(64 <= g.width(b) <= CELL for b in {0, g.blocks - 1})


@given(GEOMETRIES, st.integers(1, 1 << 22))
def test_chunks_and_runs_partition_the_cells(g: Geometry, size: int) -> None:
    size = max(size, CELL, g.cells_end // 50)
    place = 0
    for start, stop in g.chunks(size):
        assert start == place
        assert start < stop <= start + size
        run_place = start
        for run in g.runs(start, stop, 1 << 20):
            assert run.start == run_place
            assert run.start == run.strip * g.depth + run.block * CELL
            assert 0 < run.length <= 1 << 20
            assert run.block * CELL + run.length <= g.depth
            run_place += run.length
        assert run_place == stop
        place = stop
    assert place == g.cells_end


@given(SMALL_GEOMETRIES)
def test_inner_parity_of_data_cells_is_laid_end_to_end(g: Geometry) -> None:
    place = 0
    for number in range(g.data_cells):
        strip, block = g.cell_place(number)
        assert g.inner_start(strip, block) == place
        words = -(-g.width(block) // g.m) if g.p else 0
        assert g.group(block) == words * g.p
        place += g.group(block)
    assert g.data_inner == place


@given(SMALL_GEOMETRIES)
def test_inner_parity_of_parity_cells_is_laid_block_by_block(g: Geometry) -> None:
    place = 0
    for block in range(g.blocks):
        for row in range(g.r):
            assert g.parity_inner_start(row, block) == place
            place += g.group(block)
    assert g.parity_inner == place == g.r * g.strip_inner
    assert g.body == g.r * g.depth + g.data_inner + g.parity_inner


@given(SMALL_GEOMETRIES, st.integers(0, 254))
def test_stagger(g: Geometry, strip: int) -> None:
    assert g.stagger(strip) == (strip % g.m if g.p else 0)


@given(st.integers(0, 10_000_000), st.integers(1, 254), st.one_of(st.none(), st.integers(1, 30)))
def test_windows_partition_the_stream(length: int, k: int, cells: int | None) -> None:
    depth = None if cells is None else cells * CELL
    windows = plan_windows(length, k, depth)
    assert [w.index for w in windows] == list(range(len(windows)))
    place = 0
    for w in windows:
        assert w.start == place
        assert Geometry(255 if k < 255 else k + 1, k, 0, 0, w.length, w.depth).length == w.length
        place += w.length
    assert place == length
    if depth is not None:
        assert all((w.length, w.depth) == (k * depth, depth) for w in windows[:-1])
    assert len(windows) == (1 if depth is None else max(1, -(-length // (k * depth))))


@pytest.mark.parametrize("depth", [0, -4096, 1, 4095, 4097])
def test_a_depth_that_no_window_can_have(depth: int) -> None:
    with pytest.raises(UsageError, match="cannot be used"):
        plan_windows(1000, 223, depth)


@pytest.mark.parametrize(
    ("length", "k", "depth"),
    [(0, 223, 0), (1, 223, 64), (64 * 223, 223, 64), (64 * 223 + 1, 223, 128), (LARGE - 1, 223, 300_992),
     (LARGE, 223, 303_104)],
)  # fmt: skip
def test_whole_depth_is_rounded_up(length: int, k: int, depth: int) -> None:
    """S = ceil(F / k), rounded up to 4,096 from 64 MiB of stream and to 64 below."""
    assert whole_depth(length, k) == depth


@given(GEOMETRIES, st.data())
def test_a_contiguous_loss_of_the_guaranteed_length_erases_no_more_than_r_symbols(
    g: Geometry, data: st.DataObject
) -> None:
    assert g.guaranteed_burst == max(0, g.r * g.depth - 2 * CELL)
    start = data.draw(st.integers(0, max(0, g.length - g.guaranteed_burst)))
    stop = min(g.length, start + g.guaranteed_burst)
    if start == stop:
        return
    # Even when every cell that it touches is given up whole, each column loses at most r symbols.
    first, last = g.cell_at(start), g.cell_at(stop - 1)
    blocks = g.blocks
    most = -(-(last + 1 - first) // blocks)
    assert most <= g.r


def test_an_empty_window_has_nothing() -> None:
    g = Geometry(255, 223, 15, 1, 0, 0)
    assert (g.blocks, g.data_cells, g.data_inner, g.body, g.cells_end) == (0, 0, 0, 0, 0)
    assert list(g.chunks(CELL)) == []
    assert g.guaranteed_burst == 0


SOUND = {"n": 255, "k": 223, "m": 15, "p": 1, "length": 1_000_000, "depth": 4544}


@pytest.mark.parametrize(
    "change",
    [
        {"n": 256}, {"n": 223}, {"n": 0}, {"k": 0}, {"k": 255}, {"k": -1}, {"m": 0}, {"m": 33}, {"p": 5},
        {"p": -1}, {"length": -1}, {"length": MAX_LENGTH + 1}, {"length": 1_013_313}, {"length": 0},
        {"depth": 0}, {"depth": 4543}, {"depth": 4480}, {"depth": 4608}, {"depth": 1 << 62}, {"depth": -64},
    ],
)  # fmt: skip
def test_contradictions_are_refused(change: dict[str, int]) -> None:
    assert Geometry(**SOUND).body > 0
    with pytest.raises(FormatError, match="contradicts itself"):
        Geometry(**SOUND | change)
