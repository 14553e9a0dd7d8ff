"""Encoding, against encoders that share no code with it."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
import xxhash
from support import content, plant

from oakum import UsageError, protect
from oakum.algebra.inner import InnerCode
from oakum.algebra.naming import resolve_code
from oakum.encoding import CHUNK, CHUNKS, RESERVE, RUN, CellCutter, ReadingPlan, plan_reading
from oakum.files import FileBytes
from oakum.geometry import CELL, Geometry, whole_depth
from oakum.jobs import DEFAULT_MEMORY
from oakum.sidecar.layout import Track
from oakum.sidecar.reading import Section, find_sections

CODES = ("shelf", "slim", "stout", "plain", "RS(60,40)+EB(128,104)", "RS(20,15)")


def window(tmp_path: Path, code: str, length: int, **options: int) -> tuple[Section, np.ndarray]:
    """The one section of a set of two files, and its data strips uint8[k, depth]."""
    data = content(length)
    plant(tmp_path / "set", {"a": data[: length // 3], "b": data[length // 3 :]})
    protect([tmp_path / "set"], code=code, overwrite=True, **options)  # type: ignore[arg-type]
    (section,) = find_sections(FileBytes(tmp_path / "set.oakum"))
    g = section.geometry
    strips = np.zeros(g.k * g.depth, np.uint8)
    strips[:length] = np.frombuffer(data, np.uint8)
    return section, strips.reshape(g.k, g.depth)


def parity_strips(section: Section) -> np.ndarray:
    g = section.geometry
    return section.body(0, g.r * g.depth)[0].reshape(g.r, g.depth)


@pytest.mark.parametrize("code", CODES)
@pytest.mark.parametrize("length", [1, 5000, 300_001])
def test_parity_strips_against_an_independent_encoder(tmp_path: Path, code: str, length: int) -> None:
    """reedsolo with 0x11D and first root alpha^0, at the first, the last and some other columns."""
    import reedsolo

    section, data = window(tmp_path, code, length)
    g = section.geometry
    codec = reedsolo.RSCodec(g.r, nsize=255, fcr=0, prim=0x11D, generator=2, c_exp=8)
    parity = parity_strips(section)
    columns = np.unique(np.linspace(0, g.depth - 1, 40).astype(int))
    for column in columns.tolist():
        assert bytes(codec.encode(data[:, column].tobytes()))[g.k :] == parity[:, column].tobytes()


def inner_parity(inner: InnerCode, cell: np.ndarray, strip: int) -> bytes:
    """Bit by bit from the check columns: the XOR of the columns of a word's ones."""
    m = inner.m
    turned = np.roll(cell, -(strip % m))
    out = b""
    for start in range(0, len(turned), m):
        value = 0
        for t, byte in enumerate(turned[start : start + m].tolist()):
            for b in range(8):
                if byte >> b & 1:
                    value ^= int(inner.check_columns[t, b])
        out += value.to_bytes(inner.p, "little")
    return out


@pytest.mark.parametrize("code", ["shelf", "stout", "RS(60,40)+EB(128,104)"])
@pytest.mark.parametrize("length", [3000, 200_000, 2_000_000])
def test_inner_parity_against_the_algebra(tmp_path: Path, code: str, length: int) -> None:
    section, data = window(tmp_path, code, length)
    g, inner = section.geometry, resolve_code(code).inner
    parity = parity_strips(section)
    rng = np.random.default_rng(1)
    numbers = {0, g.data_cells - 1, *rng.integers(0, g.data_cells, 6).tolist()}
    for number in sorted(numbers):
        strip, block = g.cell_place(number)
        cell = data[strip, block * CELL : block * CELL + g.width(block)]
        got, _ = section.body(g.parity_bytes + g.inner_start(strip, block), g.group(block))
        assert got.tobytes() == inner_parity(inner, cell, strip)
    for row, block in {(0, 0), (g.r - 1, g.blocks - 1), (g.r // 2, g.blocks // 2)}:
        cell = parity[row, block * CELL : block * CELL + g.width(block)]
        place = g.parity_bytes + g.data_inner + g.parity_inner_start(row, block)
        assert section.body(place, g.group(block))[0].tobytes() == inner_parity(inner, cell, g.k + row)


@pytest.mark.parametrize("code", ["shelf", "plain"])
@pytest.mark.parametrize("memory", [512 << 20, RESERVE + (1 << 20)])
def test_every_digest_is_that_of_its_cell(tmp_path: Path, code: str, memory: int) -> None:
    section, data = window(tmp_path, code, 5_000_000, memory=memory)
    g = section.geometry

    def digests(track: Track) -> list[int]:
        values, known = section.digests(track, 0, section.layout.content(track) // 8)
        assert known is None
        return [int(v) for v in values]

    def expected(*strips: np.ndarray) -> list[int]:
        return [
            xxhash.xxh3_64_intdigest(s[i : i + CELL].tobytes())
            for s in strips
            for i in range(0, len(s), CELL)
        ]

    assert digests(Track.DATA) == expected(*data)[: g.data_cells]
    parity = parity_strips(section)
    assert digests(Track.PARITY) == [
        xxhash.xxh3_64_intdigest(row[b * CELL : (b + 1) * CELL].tobytes())
        for b in range(g.blocks)
        for row in parity
    ]
    assert digests(Track.INNER) == expected(section.body(g.parity_bytes, g.data_inner)[0])
    assert digests(Track.PARITY_INNER) == expected(
        section.body(g.parity_bytes + g.data_inner, g.parity_inner)[0]
    )


def test_small_windows_have_one_digest_of_the_whole_body(tmp_path: Path) -> None:
    section, _ = window(tmp_path, "shelf", 60_000)
    g = section.geometry
    body = section.body(0, g.body)[0].tobytes()
    assert section.bootstrap.body_digest == xxhash.xxh3_64_intdigest(body)
    assert not any(section.layout.content(t) for t in (Track.DATA, Track.INNER, Track.PARITY))
    section, _ = window(tmp_path, "shelf", 70_000)
    assert section.bootstrap.body_digest == 0


# -- how a window is read --------------------------------------------------------------------------


@pytest.mark.parametrize("code", CODES)
@pytest.mark.parametrize("length", [0, 1, 1 << 20, 1 << 30, 1 << 36, 1 << 44])
@pytest.mark.parametrize("memory", [64 << 20, 128 << 20, 512 << 20, 4 << 30])
def test_buffers_fit_the_memory(code: str, length: int, memory: int) -> None:
    """Parity of what is worked on, and the strips, on top of what is set aside."""
    c = resolve_code(code)
    g = Geometry(c.outer.n, c.outer.k, c.inner.m, c.inner.p, length, whole_depth(length, c.outer.k))
    plan = plan_reading(g, memory)
    buffers = 1 if plan.strips == g.k else 2
    assert RESERVE + (g.r + buffers * plan.strips) * plan.columns <= memory
    assert 1 <= plan.strips <= g.k
    batches = -(-g.k // plan.strips)
    assert batches * plan.strips < g.k + batches  # Of nearly the same size.
    assert plan.reads == 2 or plan.columns >= g.depth
    assert plan.reads == 1 or plan.columns % CELL == 0
    if RESERVE + (g.r + 2 * 16) * g.depth <= memory:
        assert plan.reads == 1


def plan_of(length: int, memory: int = DEFAULT_MEMORY, code: str = "shelf") -> tuple[Geometry, ReadingPlan]:
    c = resolve_code(code)
    g = Geometry(c.outer.n, c.outer.k, c.inner.m, c.inner.p, length, whole_depth(length, c.outer.k))
    return g, plan_reading(g, memory)


@pytest.mark.parametrize("length", [8 << 30, 100 << 30, (1 << 40) + 12345])
@pytest.mark.parametrize("code", ["slim", "shelf", "plain"])
def test_large_files_are_read_twice_in_long_pieces(length: int, code: str) -> None:
    """At least 1 MiB at a time, but for the end of the file, and every column of the window once."""
    g, plan = plan_of(length, code=code)
    assert plan.reads == 2
    pieces = list(plan.pieces(g))
    assert [first for first, _ in pieces] == [0, *(first + width for first, width in pieces[:-1])]
    assert sum(pieces[-1]) == g.depth
    assert 1 << 20 <= min(width for _, width in pieces) <= max(width for _, width in pieces) <= plan.columns
    assert all(first % CELL == 0 for first, _ in pieces)
    first_read = g.chunks(RUN, 5 * CHUNK, 5 * CHUNK + 64 * CHUNK)
    assert min(stop - start for start, stop in first_read) >= 1 << 20


def test_memory_is_the_same_for_every_large_file() -> None:
    """What is held at a time: strips and parity of some columns, and the chunks of the first read."""
    held = []
    for length in (4 << 30, 8 << 30, 100 << 30, 1 << 40):
        g, plan = plan_of(length)
        held.append((g.k + g.r) * plan.columns + CHUNKS * CHUNK)
    assert max(held) < 300 << 20
    assert max(held) - min(held) < 16 << 20


class Reads:
    """Counts what `os.preadv` reads of one file."""

    def __init__(self, file: Path, patch: pytest.MonkeyPatch) -> None:
        self.file, self.sizes, self.true = file.stat(), list[int](), os.preadv
        patch.setattr(os, "preadv", self)

    def __call__(self, fd: int, buffers: list[memoryview], offset: int) -> int:
        got = self.true(fd, buffers, offset)
        if os.path.samestat(os.fstat(fd), self.file):
            self.sizes.append(got)
        return got


@pytest.mark.parametrize(
    "options, times", [({}, 1), ({"depth": 8192}, 1), ({"memory": RESERVE + (1 << 20)}, 2)]
)
def test_bytes_are_read_once_or_twice_and_never_more(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, options: dict[str, int], times: int
) -> None:
    file = tmp_path / "f"
    file.write_bytes(content(5_000_000))
    reads = Reads(file, monkeypatch)
    result = protect([file], **options)  # type: ignore[arg-type]
    assert sum(reads.sizes) == times * 5_000_000
    assert result.reads == times


def test_too_little_memory_is_said() -> None:
    with pytest.raises(UsageError, match="at least 33MiB"):
        plan_reading(Geometry(255, 223, 15, 1, 1 << 30, whole_depth(1 << 30, 223)), RESERVE)


@pytest.mark.parametrize("sizes", [[1, 4095], [4096], [4097, 1, 5000], [10_000, 10_000], []])
def test_cells_are_cut_from_bytes_that_come_in_pieces(sizes: list[int]) -> None:
    got: list[int] = []
    cutter = CellCutter(lambda digests: got.extend(digests.tolist()))
    data = b"".join(content(size, i) for i, size in enumerate(sizes))
    for i, size in enumerate(sizes):
        cutter.push(np.frombuffer(content(size, i), np.uint8))
    cutter.flush()
    assert got == [xxhash.xxh3_64_intdigest(data[i : i + CELL]) for i in range(0, len(data), CELL)]
