"""From a window of the stream to a section of the sidecar.

Two ways lead there, and both use the same work units (a run of cells in, digests and inner parity out; a
run of columns in, parity out), which share no state and may run on any thread in any order:

- one read: batches of whole strips in order, while the parity of the whole window is held in memory;
- two reads: first everything in order for SHA-256, digests and inner parity, then piece by piece the
  columns of all strips for the parity, with every digest of the first read checked again.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.digests import cell_digests
from oakum.errors import UsageError
from oakum.geometry import CELL, Geometry, Run, round_up
from oakum.kernels.stripmap import StripMap
from oakum.kernels.words import WordCodec
from oakum.members import MemberHasher, Stream
from oakum.pools import Pools, wait_all
from oakum.sidecar.layout import Track
from oakum.sidecar.writing import SectionWriter

Bytes = NDArray[np.uint8]

CHUNK = 8 << 20
"""Bytes read at a time where a window is read in order and not kept."""

PIECE = 1 << 20
"""Columns taken at a time in the second of two reads; also the length of each single read."""

BATCH = 64
"""Strips multiplied at a time, where memory allows; the parity is loaded and stored once a batch."""

RESERVE = 48 << 20
"""Memory set aside for all small buffers."""

_PAD = 64  # Keeps rows of a power-of-two length from falling on the same cache sets.


@dataclass(frozen=True)
class Kernels:
    """The compiled loops for one code: strip map of the parity and word codec."""

    parity: StripMap
    words: WordCodec

    @staticmethod
    def of(code: ConcatenatedCode) -> Kernels:
        """Prepare the kernels of a code."""
        return Kernels(
            StripMap(code.outer.parity_matrix, field_poly=code.outer.field_poly), WordCodec(code.inner)
        )


@dataclass(frozen=True)
class ReadingPlan:
    """How a window is read: once in batches of strips, or twice with pieces of columns."""

    reads: int
    strips: int
    columns: int


def plan_reading(geometry: Geometry, memory: int) -> ReadingPlan:
    """Choose one read or two so that all buffers fit into `memory` bytes.

    Raises UsageError when not even the smallest buffers fit.
    """
    depth = max(geometry.depth, 1)
    free = memory - RESERVE
    strips = (free - geometry.r * depth) // (2 * depth)
    if strips >= min(16, geometry.k):
        return ReadingPlan(1, min(strips, BATCH, geometry.k), depth)
    columns = min(PIECE, round_up(depth, CELL))
    while columns > CELL and (free - geometry.r * columns) // (2 * columns) < 16:
        columns = round_up(columns // 2, CELL)
    strips = (free - geometry.r * columns) // (2 * columns)
    if strips < 1:
        raise UsageError(f"--memory {memory} is too little for this code; give at least 64 MiB")
    return ReadingPlan(2, min(strips, BATCH, geometry.k), columns)


class CellCutter:
    """Cuts bytes that come in order into cells of 4,096 and passes on their digests."""

    def __init__(self, deliver: Callable[[NDArray[np.uint64]], None]) -> None:
        self._deliver = deliver
        self._rest = bytearray()

    def push(self, data: Bytes) -> None:
        """The next bytes."""
        self._rest += data.data
        whole = len(self._rest) // CELL * CELL
        if whole:
            self._deliver(cell_digests(np.frombuffer(bytes(self._rest[:whole]), np.uint8)))
            del self._rest[:whole]

    def flush(self) -> None:
        """The end: the last cell may be shorter."""
        if self._rest:
            self._deliver(cell_digests(np.frombuffer(bytes(self._rest), np.uint8)))
            self._rest.clear()


class WindowEncoder:
    """Encodes one window. `advance` is called with the number of bytes read, from the calling thread."""

    def __init__(
        self,
        geometry: Geometry,
        kernels: Kernels,
        writer: SectionWriter,
        stream: Stream,
        hasher: MemberHasher,
        pools: Pools,
        advance: Callable[[int], None],
    ) -> None:
        self._g = geometry
        self._kernels = kernels
        self._writer = writer
        self._stream = stream
        self._hasher = hasher
        self._pools = pools
        self._advance = advance
        self._inner_cells = CellCutter(lambda d: self._add_digests(Track.INNER, d))
        self._parity_inner_cells = CellCutter(lambda d: self._add_digests(Track.PARITY_INNER, d))

    def run(self, plan: ReadingPlan) -> None:
        """Read the window as planned and write its body and digests.

        Raises CannotCheck for bytes that cannot be read, or that changed between two reads.
        """
        g = self._g
        if not g.depth:
            return
        if plan.reads == 1:
            self._read_once(plan)
        else:
            self._survey_window()
            self._writer.lay_down(Track.DATA)
            buffers = [_rows(plan.strips, plan.columns) for _ in range(2)]
            parity = _rows(g.r, plan.columns)
            for first in range(0, g.depth, plan.columns):
                width = min(plan.columns, g.depth - first)
                self._encode_columns(first, [b[:, :width] for b in buffers], parity[:, :width])
        self._inner_cells.flush()
        self._parity_inner_cells.flush()

    # -- one read ---------------------------------------------------------------------------------

    def _read_once(self, plan: ReadingPlan) -> None:
        """Batches of whole strips in order; the next one is read while the last one is worked on."""
        g = self._g
        parity = _rows(g.r, g.depth)
        buffers = [np.empty((plan.strips, g.depth), np.uint8) for _ in range(2 if plan.strips < g.k else 1)]
        surveys: list[Survey | None] = [None] * len(buffers)
        products: list[Future[None]] = []
        for turn, first in enumerate(range(0, self._used_strips, plan.strips)):
            slot = turn % len(buffers)
            self._store(surveys[slot])
            strips = buffers[slot][: min(plan.strips, self._used_strips - first)]
            self._read(first * g.depth, strips.reshape(-1), g.length)
            surveys[slot] = self._survey(first * g.depth, strips.reshape(-1))
            wait_all(products)  # One batch must be added to the parity before the next one is.
            products = self._multiply(strips, first, parity, accumulate=first > 0)
        wait_all(products)
        for i in range(len(buffers)):  # The older one first: digests are stored in order.
            self._store(surveys[(turn + 1 + i) % len(buffers)])
        self._finish_columns(0, parity)

    @property
    def _used_strips(self) -> int:
        """Data strips that hold at least one byte of the stream."""
        return -(-self._g.length // self._g.depth)

    # -- two reads --------------------------------------------------------------------------------

    def _survey_window(self) -> None:
        """The first read: in order, a chunk at a time, nothing kept."""
        g = self._g
        size = min(CHUNK, self._used_strips * g.depth)
        buffers = [np.empty(size, np.uint8) for _ in range(3)]
        surveys: list[Survey | None] = [None] * len(buffers)
        for turn, (start, stop) in enumerate(g.chunks(size)):
            slot = turn % len(buffers)
            self._store(surveys[slot])
            data = buffers[slot][: stop - start]
            self._read(start, data, g.length)
            surveys[slot] = self._survey(start, data)
        for i in range(len(buffers)):
            self._store(surveys[(turn + 1 + i) % len(buffers)])

    def _encode_columns(self, first: int, buffers: list[Bytes], parity: Bytes) -> None:
        """The second read: as many columns from `first` on as the buffers hold, of all strips, batch by batch."""
        g = self._g
        strips = len(buffers[0])
        checks: list[list[Future[None]]] = [[], []]
        products: list[Future[None]] = []
        for turn, strip in enumerate(range(0, self._used_strips, strips)):
            slot = turn % 2
            wait_all(checks[slot])
            batch = buffers[slot][: min(strips, self._used_strips - strip)]
            for i, row in enumerate(batch):
                self._read((strip + i) * g.depth + first, row, g.length)
            checks[slot] = [
                self._pools.work.submit(self._check, strip + i, first, row) for i, row in enumerate(batch)
            ]
            wait_all(products)
            products = self._multiply(batch, strip, parity, accumulate=strip > 0)
        wait_all([*products, *checks[0], *checks[1]])
        self._finish_columns(first, parity)

    def _check(self, strip: int, first: int, row: Bytes) -> None:
        """Hold a piece of a strip against the digests of the first read."""
        g = self._g
        number = g.cell_number(strip, first // CELL)
        digests = cell_digests(row)[: max(0, g.data_cells - number)]  # What follows is virtual.
        if g.digested and not np.array_equal(digests, self._writer.laid(Track.DATA, number, len(digests))):
            raise Changed(strip * g.depth + first)

    # -- work units -------------------------------------------------------------------------------

    def _read(self, start: int, data: Bytes, length: int) -> None:
        faults = self._stream.read_into(start, data.data)
        if faults:
            raise Unreadable(start + faults[0][0])
        self._advance(max(0, min(len(data), length - start)))

    def _survey(self, start: int, data: Bytes) -> Survey:
        """Digests, inner parity and SHA-256 of the cells in `data`, which begins at byte `start`."""
        g = self._g
        real = max(0, min(len(data), g.length - start))
        survey = Survey(g, start, g.cell_at(start), start + real)
        for run in g.runs(start, survey.stop, 1 << 20):
            survey.futures.append(
                self._pools.work.submit(
                    survey.fill, self._kernels.words, run, data[run.start - start :][: run.length]
                )
            )
        survey.futures.append(self._pools.ordered.submit(self._hasher.update, data.data[:real]))
        return survey

    def _store(self, survey: Survey | None) -> None:
        """Wait for a survey and write what it gave."""
        if survey is None:
            return
        wait_all(survey.futures)
        survey.futures.clear()
        self._add_digests(Track.DATA, survey.digests)
        self._write_inner(self._g.parity_bytes + survey.inner_start, survey.inner, self._inner_cells)

    def _multiply(self, strips: Bytes, first: int, parity: Bytes, *, accumulate: bool) -> list[Future[None]]:
        """Add the product of some strips to the parity, in ranges of columns."""
        width = strips.shape[1]
        step = max(CELL, round_up(-(-width // (4 * self._pools.jobs)), CELL))

        def work(a: int, b: int) -> None:
            self._kernels.parity.apply(strips[:, a:b], parity[:, a:b], first=first, accumulate=accumulate)

        return [self._pools.work.submit(work, a, min(a + step, width)) for a in range(0, width, step)]

    def _finish_columns(self, first: int, parity: Bytes) -> None:
        """Write parity strips that are complete, with their digests and inner parity, block by block."""
        g = self._g
        width = parity.shape[1]
        begin = first // CELL
        blocks = -(-width // CELL)
        digests = np.empty((blocks, g.r), np.uint64)
        start = g.parity_inner_start(0, begin)
        inner = np.empty(
            g.parity_inner_start(0, begin + blocks - 1) + g.r * g.group(begin + blocks - 1) - start, np.uint8
        )

        def work(j: int) -> None:
            row = parity[j]
            digests[:, j] = cell_digests(row)
            full = width // CELL * CELL
            stagger, step = g.stagger(g.k + j), g.r * g.full_group
            if g.p and full:
                self._kernels.words.parity(row[:full], stagger, inner[j * g.full_group :], step=step)
            if g.p and full < width:
                place = g.parity_inner_start(j, begin + blocks - 1) - start
                self._kernels.words.parity(row[full:], stagger, inner[place:])

        wait_all([self._pools.work.submit(work, j) for j in range(g.r)])
        for j in range(g.r):
            self._writer.write_body(j * g.depth + first, parity[j])
        self._add_digests(Track.PARITY, digests.reshape(-1))
        self._write_inner(g.parity_bytes + g.data_inner + start, inner, self._parity_inner_cells)

    def _write_inner(self, place: int, inner: Bytes, cells: CellCutter) -> None:
        if len(inner):
            self._writer.write_body(place, inner)
            cells.push(inner)

    def _add_digests(self, track: Track, digests: NDArray[np.uint64]) -> None:
        if self._g.digested:
            self._writer.add_digests(track, digests)


class Survey:
    """What the first look at consecutive cells gives: digests and inner parity, filled by many threads."""

    def __init__(self, geometry: Geometry, start: int, first_cell: int, real_stop: int) -> None:
        g = self._g = geometry
        last = g.cell_at(real_stop - 1)
        strip, block = g.cell_place(last)
        self.stop = g.cell_start(last) + g.width(block)
        self.first_cell = first_cell
        self.digests = np.empty(last + 1 - first_cell, np.uint64)
        self.inner_start = g.inner_start(*g.cell_place(first_cell))
        self.inner = np.empty(g.inner_start(strip, block) + g.group(block) - self.inner_start, np.uint8)
        self.futures: list[Future[Any]] = []

    def fill(self, words: WordCodec, run: Run, data: Bytes) -> None:
        """The work unit: one run of cells of one strip."""
        g = self._g
        number = g.cell_number(run.strip, run.block) - self.first_cell
        digests = cell_digests(data)
        self.digests[number : number + len(digests)] = digests
        if g.p:
            place = g.inner_start(run.strip, run.block) - self.inner_start
            words.parity(data, g.stagger(run.strip), self.inner[place:])


class Unreadable(Exception):
    """A byte of the window, at `offset`, could not be read."""

    def __init__(self, offset: int) -> None:
        self.offset = offset


class Changed(Exception):
    """The window changed between two reads, somewhere after `offset`."""

    def __init__(self, offset: int) -> None:
        self.offset = offset


def _rows(count: int, width: int) -> Bytes:
    """uint8[count, width] whose rows do not begin at a power-of-two distance from each other."""
    return np.empty((count, width + _PAD), np.uint8)[:, :width]
