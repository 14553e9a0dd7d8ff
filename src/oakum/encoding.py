"""From a window of the stream to a section of the sidecar.

Three ways lead there, and all use the same work units (a run of cells in, digests and inner parity out; a
range of columns in, parity out), which share no state and may run on any thread in any order:

- a window that fits into memory is read once and kept until its parity is known;
- a larger one is read once in batches of whole strips, while the parity of all its columns is held;
- the largest are read twice: first in order for SHA-256, digests and inner parity, then piece by piece the
  columns of all strips for the parity, with every digest of the first read checked again.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.digests import cell_digests
from oakum.errors import UsageError
from oakum.geometry import CELL, Geometry, Run, round_up
from oakum.kernels.parity import ParityEncoder
from oakum.kernels.words import WordCodec
from oakum.members import MemberHasher, Stream
from oakum.pools import Pools, wait_all
from oakum.sidecar.layout import Track
from oakum.sidecar.writing import SectionWriter

Bytes = NDArray[np.uint8]

CHUNK = 8 << 20
"""Bytes read at a time where a window is read in order."""

RUN = 512 << 10
"""Bytes that one work unit reads and looks at, while they are still in the CPU's cache."""

PIECE = 1 << 20
"""Columns taken at a time in the second of two reads; also the length of each single read."""

BATCH = 128
"""Strips multiplied at a time, where memory allows; the parity is loaded and stored once a batch."""

LEAST_BATCH = 16
"""With fewer strips a batch, loading and storing the parity costs more than a second read."""

RESERVE = 32 << 20
"""Memory set aside for all small buffers."""

_PAD = 64  # Keeps rows of a power-of-two length from falling on the same cache sets.


@dataclass(frozen=True)
class Kernels:
    """The compiled loops for one code: parity of the columns, and of the words."""

    parity: ParityEncoder
    words: WordCodec

    @staticmethod
    def of(code: ConcatenatedCode) -> Kernels:
        """Prepare the kernels of a code."""
        kernels = Kernels(ParityEncoder(code.outer), WordCodec(code.inner))
        kernels.parity.prepare()
        kernels.words.prepare(correcting=False)
        return kernels


@dataclass(frozen=True)
class ReadingPlan:
    """How a window is read: how often, and how many strips of how many columns are in memory at a time."""

    reads: int
    strips: int
    columns: int


def plan_reading(geometry: Geometry, memory: int) -> ReadingPlan:
    """Choose one read or two so that all buffers fit into `memory` bytes.

    Raises UsageError when not even the smallest buffers fit.
    """
    g = geometry
    depth = max(g.depth, 1)
    free = memory - RESERVE
    if (g.k + g.r) * depth <= free:
        return ReadingPlan(1, g.k, depth)
    strips = (free - g.r * depth) // (2 * depth)
    if strips >= LEAST_BATCH:
        return ReadingPlan(1, min(strips, BATCH), depth)
    columns = min(PIECE, free // (g.k + g.r)) // CELL * CELL
    if columns < CELL:
        need = ((g.k + g.r) * CELL + RESERVE) / (1 << 20)
        raise UsageError(f"--memory {memory} is too little for this code; give at least {need:.0f}MiB")
    return ReadingPlan(2, g.k, columns)


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

        Raises Unreadable for bytes that cannot be read, Changed for such as changed between two reads.
        """
        if not self._g.depth:
            return
        if plan.reads == 2:
            self._survey_window()
            self._read_columns(plan)
        elif plan.strips == self._g.k:
            self._read_whole()
        else:
            self._read_batches(plan)
        self._inner_cells.flush()
        self._parity_inner_cells.flush()

    @property
    def _used_strips(self) -> int:
        """Data strips that hold at least one byte of the stream."""
        return -(-self._g.length // self._g.depth)

    # -- one read ---------------------------------------------------------------------------------

    def _read_whole(self) -> None:
        """Keep the whole window: chunks are surveyed as they come, the parity follows when all are there."""
        g = self._g
        strips = np.empty((self._used_strips, g.depth), np.uint8)
        window = strips.reshape(-1)
        surveys = [self._survey(start, window[start:stop]) for start, stop in g.chunks(max(CHUNK, g.depth))]
        window[g.cells_end :] = 0
        for survey in surveys:
            wait_all(survey.filled)
        parity = _rows(g.r, g.depth)
        products = self._multiply(strips, 0, parity, last=True)
        for survey in surveys:
            self._store(survey)
        wait_all(products)
        self._finish_columns(0, parity)

    def _read_batches(self, plan: ReadingPlan) -> None:
        """Batches of whole strips in order; the next one is read while the last one is worked on."""
        g = self._g
        parity = _rows(g.r, g.depth)
        buffers = [np.empty((plan.strips, g.depth), np.uint8) for _ in range(2)]
        surveys: list[Survey | None] = [None, None]
        products: list[Future[None]] = []
        for turn, first in enumerate(range(0, self._used_strips, plan.strips)):
            slot = turn % 2
            self._store(surveys[slot])
            strips = buffers[slot][: min(plan.strips, self._used_strips - first)]
            surveys[slot] = survey = self._survey(first * g.depth, strips.reshape(-1))
            wait_all([*survey.filled, *products])  # The parity of one batch is stored before the next one.
            last = first + len(strips) == self._used_strips
            products = self._multiply(strips, first, parity, last=last)
        wait_all(products)
        for i in (1, 0):  # The older one first: digests are stored in order.
            self._store(surveys[slot - i])
        self._finish_columns(0, parity)

    # -- two reads --------------------------------------------------------------------------------

    def _survey_window(self) -> None:
        """The first read: in order, a chunk at a time, nothing kept."""
        g = self._g
        buffers = [np.empty(CHUNK, np.uint8) for _ in range(3)]
        surveys: list[Survey | None] = [None] * len(buffers)
        for turn, (start, stop) in enumerate(g.chunks(CHUNK)):
            slot = turn % len(buffers)
            self._store(surveys[slot])
            surveys[slot] = self._survey(start, buffers[slot][: stop - start])
        for i in range(len(buffers)):
            self._store(surveys[(turn + 1 + i) % len(buffers)])
        self._writer.lay_down(Track.DATA)

    def _read_columns(self, plan: ReadingPlan) -> None:
        """The second read: piece after piece of all strips.

        All threads read, then all multiply. The system is asked to fetch the next piece meanwhile, which
        costs no memory of ours.
        """
        g = self._g
        parity = _rows(g.r, plan.columns)
        buffer = _rows(self._used_strips, plan.columns)
        for first in range(0, g.depth, plan.columns):
            width = min(plan.columns, g.depth - first)
            strips = buffer[:, :width]
            reads = [self._pools.work.submit(self._reread, i, first, row) for i, row in enumerate(strips)]
            for i, future in enumerate(reads):
                future.result()
                self._advance(max(0, min(width, g.length - i * g.depth - first)))
                self._stream.fetch(i * g.depth + first + width, width)
            wait_all(self._multiply(strips, 0, parity[:, :width], last=True))
            self._finish_columns(first, parity[:, :width])

    def _reread(self, strip: int, first: int, row: Bytes) -> None:
        """The work unit of the second read: a piece of a strip, held against the digests of the first."""
        g = self._g
        start = strip * g.depth + first
        self._read(start, row)
        if not g.digested:
            return
        number = g.cell_number(strip, first // CELL)
        digests = cell_digests(row)[: max(0, g.data_cells - number)]  # What follows is virtual.
        if not np.array_equal(digests, self._writer.laid(Track.DATA, number, len(digests))):
            raise Changed(start)

    # -- work units -------------------------------------------------------------------------------

    def _read(self, start: int, data: Bytes) -> None:
        faults = self._stream.read_into(start, data.data)
        if faults:
            raise Unreadable(start + faults[0][0])

    def _survey(self, start: int, data: Bytes) -> Survey:
        """Read the cells of `data`, which begins at byte `start`; digests, inner parity and SHA-256."""
        g = self._g
        real = max(0, min(len(data), g.length - start))
        survey = Survey(g, start, start + real)
        for run in g.runs(start, survey.stop, RUN):
            part = data[run.start - start :][: run.length]
            survey.filled.append(self._pools.work.submit(self._fill, survey, run, part))
        data[survey.stop - start :] = 0
        survey.hashed = self._pools.ordered.submit(self._hash, survey, data.data[:real])
        return survey

    def _fill(self, survey: Survey, run: Run, data: Bytes) -> None:
        """The work unit of the first read: one run of cells of one strip."""
        self._read(run.start, data)
        survey.fill(self._kernels.words, run, data)

    def _hash(self, survey: Survey, data: memoryview) -> None:
        wait_all(survey.filled)
        self._hasher.update(data)

    def _store(self, survey: Survey | None) -> None:
        """Wait for a survey and write what it gave."""
        if survey is None:
            return
        wait_all(survey.filled)
        survey.hashed.result()
        self._advance(survey.real)
        self._add_digests(Track.DATA, survey.digests)
        self._write_inner(self._g.parity_bytes + survey.inner_start, survey.inner, self._inner_cells)

    def _multiply(self, strips: Bytes, first: int, parity: Bytes, *, last: bool) -> list[Future[None]]:
        """Add the product of strips first, first + 1 ... to the parity (set it for the first ones)."""
        width = strips.shape[1]
        step = max(CELL, round_up(-(-width // (4 * self._pools.jobs)), CELL))

        def work(a: int, b: int) -> None:
            if last and not first:
                self._kernels.parity.apply(strips[:, a:b], parity[:, a:b])
                return
            self._kernels.parity.add(strips[:, a:b], parity[:, a:b], first=first, accumulate=first > 0)
            if last:
                self._kernels.parity.finish(parity[:, a:b])

        return [self._pools.work.submit(work, a, min(a + step, width)) for a in range(0, width, step)]

    def _finish_columns(self, first: int, parity: Bytes) -> None:
        """Write parity strips that are complete, with their digests and inner parity, block by block."""
        g = self._g
        width = parity.shape[1]
        begin, blocks = first // CELL, -(-width // CELL)
        last = begin + blocks - 1
        start = g.parity_inner_start(0, begin)
        digests = np.empty((blocks, g.r), np.uint64)
        inner = np.empty(g.parity_inner_start(0, last) + g.r * g.group(last) - start, np.uint8)

        def work(j: int) -> None:
            row = parity[j]
            digests[:, j] = cell_digests(row)
            full = width // CELL * CELL
            stagger, step = g.stagger(g.k + j), g.r * g.full_group
            if g.p and full:
                self._kernels.words.parity(row[:full], stagger, inner[j * g.full_group :], step=step)
            if g.p and full < width:
                self._kernels.words.parity(
                    row[full:], stagger, inner[g.parity_inner_start(j, last) - start :]
                )
            self._writer.write_body(j * g.depth + first, row)

        wait_all([self._pools.work.submit(work, j) for j in range(g.r)])
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

    def __init__(self, geometry: Geometry, start: int, real_stop: int) -> None:
        g = self._g = geometry
        self.first_cell = g.cell_at(start)
        last = g.cell_at(real_stop - 1)
        strip, block = g.cell_place(last)
        self.stop = g.cell_start(last) + g.width(block)
        self.real = real_stop - start
        self.digests = np.empty(last + 1 - self.first_cell, np.uint64)
        self.inner_start = g.inner_start(*g.cell_place(self.first_cell))
        self.inner = np.empty(g.inner_start(strip, block) + g.group(block) - self.inner_start, np.uint8)
        self.filled: list[Future[None]] = []
        self.hashed: Future[None]

    def fill(self, words: WordCodec, run: Run, data: Bytes) -> None:
        """Digests and inner parity of one run of cells of one strip."""
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
