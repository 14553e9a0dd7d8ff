"""What was received of the dirty blocks of a window, read in long pieces and by several threads."""

from __future__ import annotations

import threading
from collections.abc import Iterator, Sequence

import numpy as np
from numpy.typing import NDArray

from oakum.files import aligned
from oakum.geometry import CELL, Geometry
from oakum.jobs.checking import RECORD_RUN, Bytes, Finding, Mask, Range, WindowCheck
from oakum.sidecar.layout import Track

Strips = NDArray[np.intp]
Blocks = NDArray[np.intp]

RUNS_KEPT = 4


class Records:
    """Inner parity and digests of the cells of a window: runs of blocks, that groups and threads share."""

    def __init__(self, window: WindowCheck) -> None:
        self.window = window
        self._runs: dict[int, RecordRun] = {}
        self._lock = threading.Lock()
        self.unused: list[Bytes] = []
        """Memory of groups that are done with: to get new memory from the system takes as long as reading."""

        keep_freed_memory()

    def of(self, block: int) -> RecordRun:
        """The run that holds a block."""
        number = block // RECORD_RUN
        with self._lock:
            if number not in self._runs:
                self._runs[number] = RecordRun(self.window, number * RECORD_RUN)
                if len(self._runs) > RUNS_KEPT:
                    del self._runs[min(self._runs)]
            return self._runs[number]

    def lend(self, size: int) -> Bytes:
        """At least so many bytes of memory."""
        with self._lock:
            fit = [memory for memory in self.unused if len(memory) >= size]
            self.unused.clear()
            self.unused += fit[1:]
        return fit[0] if fit else aligned(size)


def keep_freed_memory() -> None:
    """Have glibc keep the memory of arrays when they are freed, also in threads, for the next ones.

    Its bounds for what goes back to the system rise when a large piece is freed (mallopt(3)).
    """
    np.empty(31 << 20, np.uint8)


class RecordRun:
    """Inner parity and digests of a run of blocks. What a strip has of them is read when first asked for.

    Arrays have one row a strip. Two threads may read the same at the same time, which does no harm.
    """

    def __init__(self, window: WindowCheck, first: int) -> None:
        g = window.g
        self._window, self._first = window, first
        last = min(first + RECORD_RUN, g.blocks) - 1
        count = last + 1 - first
        self._size = (count - 1) * g.full_group + g.group(last)
        self._inner = np.zeros((g.n, count, g.full_group), np.uint8)
        self._digests = np.zeros((g.n, count), np.uint64)
        self._known = np.zeros((g.n, count), bool)
        self._faults: dict[int, list[Range]] = {}
        self._have_digests = np.zeros(g.n, bool)
        self._have_inner = np.zeros((g.n, count), bool)

    def inner(self, strips: Strips, blocks: Blocks, size: int) -> tuple[Bytes, Mask | None]:
        """The inner parity of cells, `size` bytes each, and what of it could not be read.

        Virtual cells are zeros, and so is their inner parity.
        """
        g, places = self._window.g, blocks - self._first
        real = (strips >= g.k) | (strips * g.blocks + blocks < g.data_cells)
        missing = real & ~self._have_inner[strips, places]
        if missing.any():
            for strip in np.unique(strips[missing & (strips < g.k)]).tolist():
                self._read_data_inner(strip)
            for place in np.unique(places[missing & (strips >= g.k)]).tolist():
                self._read_parity_inner(place)
        out = self._inner[strips, places, :size]
        out[~real] = 0
        starts = np.where(real, places * g.full_group, self._inner[0].size)
        return out, _lost(self._faults, strips, starts, out.shape[1])

    def _read_data_inner(self, strip: int) -> None:
        """The inner parity of a data strip lies together for all blocks of the run."""
        g = self._window.g
        place = g.parity_bytes + g.inner_start(strip, self._first)
        row = self._inner[strip].reshape(-1)
        row[: self._size], faults = self._window.section.body(place, self._size)
        if faults:
            self._faults[strip] = faults
        self._have_inner[strip] = True

    def _read_parity_inner(self, place: int) -> None:
        """That of all parity strips lies together for one block."""
        g, block = self._window.g, self._first + place
        size, start = g.group(block), place * g.full_group
        data, faults = self._window.section.body(
            g.parity_bytes + g.data_inner + g.parity_inner_start(0, block), g.r * size
        )
        self._inner[g.k :, place, :size] = data.reshape(g.r, size)
        for j in range(g.r if faults else 0):
            here = [(max(a - j * size, 0), min(b - j * size, size)) for a, b in faults]
            mine = self._faults.setdefault(g.k + j, [])
            mine += [(start + a, start + b) for a, b in here if a < b]
        self._have_inner[g.k :, place] = True

    def digests(self, strips: Strips, blocks: Blocks) -> tuple[NDArray[np.uint64], Mask]:
        """Digests of cells and which of them are known."""
        missing = strips[~self._have_digests[strips]]
        if len(missing) and self._window.g.digested:
            for strip in np.unique(np.minimum(missing, self._window.g.k)).tolist():
                self._read_digests(strip)
        places = blocks - self._first
        return self._digests[strips, places], self._known[strips, places]

    def _read_digests(self, strip: int) -> None:
        """The digests of a data strip, or those of all parity strips, in all blocks of the run."""
        g, blocks = self._window.g, self._digests.shape[1]
        if strip < g.k:
            rows, first = slice(strip, strip + 1), g.cell_number(strip, self._first)
            count = max(0, min(blocks, g.data_cells - first))
            values, known = self._window.section.digests(Track.DATA, first, count)
        else:
            rows, count = slice(g.k, g.n), blocks
            values, known = self._window.section.digests(Track.PARITY, self._first * g.r, count * g.r)
        height = rows.stop - rows.start
        self._digests[rows, :count] = values.reshape(count, height).T
        self._known[rows, :count] = True if known is None else known.reshape(count, height).T
        self._have_digests[rows] = True


class GroupReader:
    """Reads the strips of a group of neighbouring blocks, each strip once and only when it is asked for.

    `strips` has one row a strip. Corrected cells are put back among the bytes that were read, so that what is
    right again leaves in long pieces.
    """

    def __init__(self, records: Records, blocks: list[int]) -> None:
        g = records.window.g
        self.window, self.records = records.window, records
        self._first = blocks[0]
        self._length = blocks[-1] * CELL + g.width(blocks[-1]) - self._first * CELL
        count = blocks[-1] + 1 - self._first
        self._memory = records.lend(g.n * count * CELL)
        self._strips = self._memory[: g.n * count * CELL].reshape(g.n, count * CELL)
        self._cells = self._strips.reshape(g.n, count, CELL)
        self._have = np.zeros(g.n, bool)
        self._faults: dict[int, list[Range]] = {}
        self._corrected = np.zeros((g.k, count), bool)

    def give_back(self) -> None:
        """Nothing that was read is needed any more: the next group may use the memory."""
        self.records.unused.append(self._memory)

    def rows(self, strips: Strips, blocks: Blocks, width: int) -> tuple[Bytes, Mask | None]:
        """Cells of so many bytes as received, and what could not be read."""
        for strip in np.unique(strips[~self._have[strips]]).tolist():
            self._read(strip)
        places = blocks - self._first
        out = self._cells[strips, places] if width == CELL else self._cells[strips, places, :width]
        return out, _lost(self._faults, strips, places * CELL, width)

    def _read(self, strip: int) -> None:
        g, start = self.window.g, self._first * CELL
        if strip < g.k:
            data = self._strips[strip, : self._length].data
            faults = self.window.stream.read_into(strip * g.depth + start, data)
        else:
            place = (strip - g.k) * g.depth + start
            self._strips[strip, : self._length], faults = self.window.section.body(place, self._length)
        if faults:
            self._faults[strip] = faults
        self._have[strip] = True

    def put(self, strips: Strips, block: int, cells: Bytes) -> None:
        """Corrected cells of data."""
        self._cells[strips, block - self._first, : cells.shape[1]] = cells
        self._corrected[strips, block - self._first] = True

    def pieces(self, findings: list[Finding]) -> Iterator[tuple[Finding, int, Bytes]]:
        """What was corrected, by place in the stream, with the finding of the block in which it begins.

        A piece goes on in the blocks that follow while they are like its first one, correctable or not.
        """
        by_place = {f.block - self._first: f for f in findings}
        kinds = np.zeros(self._corrected.shape, np.uint8)
        for place, finding in by_place.items():
            kinds[:, place] = self._corrected[:, place] * (1 + finding.correctable)
        strips, places = np.nonzero(kinds)
        kind = kinds[strips, places]
        opens = np.ones(len(strips), bool)
        opens[1:] = (np.diff(strips) != 0) | (np.diff(kind) != 0) | (np.diff(places) != 1)
        begins = np.flatnonzero(opens)
        counts = np.diff(begins, append=len(opens))
        columns = (strips[begins].tolist(), places[begins].tolist(), counts.tolist())
        for strip, first, count in zip(*columns, strict=True):
            yield by_place[first], *self._piece(strip, first * CELL, count * CELL)

    def all_bytes(self) -> Iterator[tuple[int, Bytes]]:
        """All bytes of the group by place in the stream, corrected or as they were received."""
        g = self.window.g
        real = np.arange(g.k) * g.depth + self._first * CELL < g.length
        for strip in np.flatnonzero(real).tolist():
            if not self._have[strip]:
                self._read(strip)
            yield self._piece(strip, 0, self._length)

    def _piece(self, strip: int, offset: int, length: int) -> tuple[int, Bytes]:
        """Bytes of a data strip from `offset` in the group, as far as they are there, and their place."""
        g = self.window.g
        start = strip * g.depth + self._first * CELL + offset
        length = min(length, self._length - offset, g.length - start)
        return self.window.start + start, self._strips[strip, offset:][:length]


def _lost(faults: dict[int, list[Range]], strips: Strips, starts: Strips, width: int) -> Mask | None:
    """Which bytes of rows could not be read, bool[R, width]; None: all could.

    Row i are the bytes of strip strips[i] from starts[i] on, as the `faults` of the strip number them.
    """
    lost: Mask | None = None
    for row, strip in enumerate(strips.tolist()) if faults else ():
        for begin, end in faults.get(strip, ()):
            a, b = max(begin - int(starts[row]), 0), min(end - int(starts[row]), width)
            if a < b:
                lost = np.zeros((len(strips), width), bool) if lost is None else lost
                lost[row, a:b] = True
    return lost


class Received:
    """Blocks of the same width as the decoder asks for them (see `oakum.decoding.source.BlockSource`).

    The strips of block i have the numbers from i * n on.
    """

    def __init__(self, reader: GroupReader, blocks: Sequence[int]) -> None:
        self.reader = reader
        self._records = reader.records.of(blocks[0])
        self._blocks = np.array(blocks)
        self.geometry: Geometry = reader.window.g
        self.number = blocks[0]
        self._width = self.geometry.width(self.number)
        self.states = np.concatenate([reader.window.states(block) for block in blocks])

    def _cells(self, numbers: Strips) -> tuple[Strips, Blocks]:
        """Strips and blocks of cells."""
        places, strips = np.divmod(numbers, self.geometry.n)
        return strips, self._blocks[places]

    def rows(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        return self.reader.rows(*self._cells(strips), self._width)

    def inner(self, strips: Strips) -> tuple[Bytes, Mask | None]:
        return self._records.inner(*self._cells(strips), self.geometry.group(self.number))

    def digests(self, strips: Strips) -> tuple[NDArray[np.uint64], Mask]:
        return self._records.digests(*self._cells(strips))

    def pinned(self, strips: Strips) -> Mask | None:
        return self.reader.window.pinned(*self._cells(strips), self._width)
