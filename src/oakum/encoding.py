"""From a window of the stream to a section of the sidecar.

Three ways lead there, and all use the same work units (a run of cells in, digests and inner parity out; a
range of columns in, parity out), which share no state and may run on any thread in any order:

- a window that fits into memory is read once and kept until its parity is known;
- a larger one is read once in batches of whole strips, while the parity of all its columns is held;
- the largest are read twice: in order for SHA-256, digests and inner parity, and piece by piece the columns
  of all strips for the parity. The digests of both reads must agree. The second one begins while the first
  has to wait for SHA-256, which only one thread can work on; it never does when the medium is slower than
  that, and then the second read begins after the first, so that a disk need not seek between them.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import CancelledError, Future, ThreadPoolExecutor
from contextvars import copy_context
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.errors import UsageError
from oakum.files import aligned
from oakum.geometry import CELL, Geometry, Run, round_up
from oakum.kernels import cells
from oakum.kernels.cells import cell_digests
from oakum.kernels.parity import ParityEncoder
from oakum.kernels.words import WordCodec
from oakum.members import MemberHasher, Stream
from oakum.pools import Lane, Meter, Pools, wait_all
from oakum.sidecar.layout import Track
from oakum.sidecar.writing import Kept, SectionWriter

Bytes = NDArray[np.uint8]

CHUNK = 8 << 20
"""Bytes read at a time where a window is read in order."""

CHUNKS = 3
"""Chunks that are in memory at a time."""

RUN = 2 << 20
"""Bytes that one work unit reads and looks at, while they are still in the CPU's cache."""

PIECE = 1 << 20
"""Columns taken at a time in the second of two reads, at least, where memory allows; also the length of a
single read."""

TOGETHER = 8
"""Pieces that one work unit of the second read takes."""

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
        cells.prepare()
        return kernels


@dataclass(frozen=True)
class ReadingPlan:
    """How a window is read: how often, and how many strips of how many columns are in memory at a time."""

    reads: int
    strips: int
    columns: int

    def pieces(self, geometry: Geometry) -> Iterator[tuple[int, int]]:
        """The columns as pieces of nearly the same width: (first column, width)."""
        g = geometry
        count = -(-g.depth // self.columns)
        for i in range(count):
            first, last = (g.blocks * j // count * CELL for j in (i, i + 1))
            yield first, min(last, g.depth) - first


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
        batches = -(-g.k // min(strips, BATCH))
        return ReadingPlan(1, -(-g.k // batches), depth)  # All nearly of the same size: none is in vain.
    most = free // (g.k + g.r) // CELL
    if most < 1:
        need = ((g.k + g.r) * CELL + RESERVE) / (1 << 20)
        raise UsageError(f"--memory {memory} is too little for this code; give at least {need:.0f}MiB")
    pieces = max(g.blocks * CELL // PIECE, -(-g.blocks // most))
    return ReadingPlan(2, g.k, -(-g.blocks // pieces) * CELL)


class Leg(NamedTuple):
    """How far one of two reads has come, and what a later run needs to go on from there."""

    at: int
    """The next byte of the window, or the next column."""

    sum: int
    """The weighted sum of the cells' digests so far."""

    kept: Kept
    rest: bytes
    """Inner parity that does not make up a cell yet."""


class CellCutter:
    """Cuts bytes that come in order into cells of 4,096 and passes on their digests."""

    def __init__(self, deliver: Callable[[NDArray[np.uint64]], None]) -> None:
        self._deliver = deliver
        self.rest = bytearray()
        """What does not make up a cell yet."""

    def push(self, data: Bytes) -> None:
        """The next bytes."""
        if self.rest:
            missing = CELL - len(self.rest)
            self.rest += data[:missing].data
            data = data[missing:]
            if len(self.rest) == CELL:
                self.flush()
        whole = len(data) // CELL * CELL
        if whole:
            self._deliver(cell_digests(data[:whole]))
        self.rest += data[whole:].data

    def flush(self) -> None:
        """The end: the last cell may be shorter."""
        if self.rest:
            self._deliver(cell_digests(np.frombuffer(bytes(self.rest), np.uint8)))
            self.rest.clear()


class WindowEncoder:
    """Encodes one window.

    `advance` is called with the number of bytes read, from the calling thread, also when there are none.
    """

    def __init__(
        self,
        geometry: Geometry,
        kernels: Kernels,
        writer: SectionWriter,
        stream: Stream,
        hasher: MemberHasher,
        pools: Pools,
        advance: Callable[[int], None],
        mark: Callable[[Leg, Leg], None] = lambda first, second: None,
    ) -> None:
        """With two reads, `mark` is told now and then how far both have come."""
        self._g = geometry
        self._kernels = kernels
        self._writer = writer
        self._stream = stream
        self._hasher = hasher
        self._pools = pools
        self._advance = advance
        self._inner_cells = CellCutter(lambda d: self._add_digests(Track.INNER, d))
        self._parity_inner_cells = CellCutter(lambda d: self._add_digests(Track.PARITY_INNER, d))
        self._mark = mark
        self._first, self._second = (Leg(0, 0, {}, b"") for _ in range(2))
        self._meter = Meter()
        self._abandoned = False

    def run(self, plan: ReadingPlan, begun: tuple[Leg, Leg] | None = None) -> None:
        """Read the window as planned and write its body and digests; with `begun` go on where a mark was set.

        Raises Unreadable for bytes that cannot be read, Changed for such as changed between two reads.
        """
        if not self._g.depth:
            return
        if plan.reads == 2:
            if begun is not None:
                self._go_on(*begun)
            self._read_twice(plan)
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
        window = aligned(self._used_strips * g.depth)
        strips = window.reshape(self._used_strips, g.depth)
        surveys = [self._survey(start, window[start:stop]) for start, stop in g.chunks(max(CHUNK, g.depth))]
        window[g.cells_end :] = 0
        for survey in surveys:
            wait_all(survey.filled, self._report)
        parity = _rows(g.r, g.depth)
        products = self._multiply(self._pools.work, strips, 0, parity, last=True)
        for survey in surveys:
            self._store(survey)
        wait_all(products)
        self._finish_columns(self._pools.work, 0, parity)

    def _read_batches(self, plan: ReadingPlan) -> None:
        """Batches of whole strips in order; the next one is read while the last one is worked on."""
        g = self._g
        parity = _rows(g.r, g.depth)
        buffers = [aligned(plan.strips * g.depth).reshape(plan.strips, g.depth) for _ in range(2)]
        surveys: list[Survey | None] = [None, None]
        products: list[Future[None]] = []
        for turn, first in enumerate(range(0, self._used_strips, plan.strips)):
            slot = turn % 2
            self._store(surveys[slot])
            strips = buffers[slot][: min(plan.strips, self._used_strips - first)]
            surveys[slot] = survey = self._survey(first * g.depth, strips.reshape(-1), surveys[slot])
            # The parity of one batch is stored before the next one.
            wait_all([*survey.filled, *products], self._report)
            last = first + len(strips) == self._used_strips
            products = self._multiply(self._pools.work, strips, first, parity, last=last)
        wait_all(products)
        for i in (1, 0):  # The older one first: digests are stored in order.
            self._store(surveys[slot - i])
        self._finish_columns(self._pools.work, 0, parity)

    # -- two reads --------------------------------------------------------------------------------

    def _read_twice(self, plan: ReadingPlan) -> None:
        """Both reads at a time; the second is driven by a thread of its own."""
        with ThreadPoolExecutor(1, "oakum-second") as aside:
            columns = aside.submit(copy_context().run, self._read_columns, plan)
            try:
                self._survey_window()
                wait_all([columns], self._report_and_mark)
            except BaseException:
                self._abandoned = True
                raise
        if (self._first.sum - self._second.sum) % (1 << 64):
            self._find_change()

    def _survey_window(self) -> None:
        """The first read: in order, a chunk at a time, nothing kept."""
        g = self._g
        buffers = [aligned(CHUNK) for _ in range(CHUNKS)]
        surveys: list[Survey | None] = [None] * CHUNKS
        turn = 0
        for start, stop in g.chunks(CHUNK, self._first.at):
            slot = turn % CHUNKS
            self._store_and_mark(surveys[slot])
            surveys[slot] = self._survey(start, buffers[slot][: stop - start], surveys[slot])
            turn += 1
        for i in range(CHUNKS):
            self._store_and_mark(surveys[(turn + i) % CHUNKS])

    def _read_columns(self, plan: ReadingPlan) -> None:
        """The second read: piece after piece of all strips.

        All threads read, then all multiply. The system is asked to fetch the next piece meanwhile, which
        costs no memory of ours.
        """
        g, lane = self._g, self._pools.later
        parity = _rows(g.r, plan.columns)
        buffer = _rows(self._used_strips, plan.columns)
        for begin, width in plan.pieces(g):
            first = max(begin, self._second.at)
            width -= first - begin
            if width <= 0:
                continue
            total = self._second.sum
            strips = buffer[:, :width]
            for future in [
                lane.submit(self._reread, i, first, strips[i : i + TOGETHER])
                for i in range(0, self._used_strips, TOGETHER)
            ]:
                total += future.result()
            wait_all(self._multiply(lane, strips, 0, parity[:, :width], last=True))
            self._finish_columns(lane, first, parity[:, :width])
            kept = self._writer.kept(Track.PARITY, Track.PARITY_INNER)
            self._second = Leg(first + width, total, kept, bytes(self._parity_inner_cells.rest))

    def _go_on(self, first: Leg, second: Leg) -> None:
        """Begin where both reads had come to."""
        self._first, self._second = first, second
        self._writer.go_on(first.kept | second.kept)
        self._inner_cells.rest[:] = first.rest
        self._parity_inner_cells.rest[:] = second.rest

    def _store_and_mark(self, survey: Survey | None) -> None:
        """Store what the first read gave, and say how far it has come."""
        if survey is None:
            return
        self._store(survey)
        total = self._first.sum + weighted(survey.digests, survey.first_cell)
        kept = self._writer.kept(Track.DATA, Track.INNER)
        self._first = Leg(survey.stop, total, kept, bytes(self._inner_cells.rest))
        self._mark(self._first, self._second)

    def _report_and_mark(self) -> None:
        self._report()
        self._mark(self._first, self._second)

    def _reread(self, strip: int, first: int, rows: Bytes) -> int:
        """The work unit of the second read: the same piece of neighbouring strips.

        Returns the weighted sum of the digests.
        """
        g, width = self._g, rows.shape[1]
        total = 0
        for i, row in enumerate(rows, strip):
            if self._abandoned:
                raise CancelledError
            start, number = i * g.depth + first, g.cell_number(i, first // CELL)
            self._read(start, row)
            self._stream.fetch(start + width, width)
            real = max(0, g.data_cells - number)  # Others are virtual.
            total += weighted(cell_digests(row)[:real], number)
        return total

    def _find_change(self) -> None:
        """Look for the cell that no longer has the digest that it had in the first read; raises Changed."""
        g = self._g
        self._writer.lay_down(Track.DATA)
        buffer = aligned(CHUNK)
        for start, stop in g.chunks(CHUNK) if g.digested else ():
            for run in g.runs(start, stop, CHUNK):
                data = buffer[: run.length]
                self._read(run.start, data)
                number, count = g.cell_number(run.strip, run.block), -(-run.length // CELL)
                changed = np.flatnonzero(cell_digests(data) != self._writer.laid(Track.DATA, number, count))
                if len(changed):
                    place = run.start + int(changed[0]) * CELL
                    raise Changed(place, min(place + CELL, g.length))
        raise Changed(0, g.length)

    # -- work units -------------------------------------------------------------------------------

    def _read(self, start: int, data: Bytes, hasher: MemberHasher | None = None) -> None:
        faults = self._stream.read_into(start, data.data, hasher)
        if faults:
            raise Unreadable(start + faults[0][0])
        self._meter.add(max(0, min(len(data), self._g.length - start)))

    def _report(self) -> None:
        """Tell how much has been read."""
        self._advance(self._meter.take())

    def _survey(self, start: int, data: Bytes, old: Survey | None = None) -> Survey:
        """Read the cells of `data`, which begins at byte `start`; digests, inner parity and SHA-256.

        The memory of an `old` survey, which has been stored, is used again.
        """
        g = self._g
        real = max(0, min(len(data), g.length - start))
        survey = Survey(g, start, start + real, None if old is None else old.room)
        for a, b in g.chunks(RUN, start, survey.stop):
            survey.filled.append(self._pools.work.submit(self._fill, survey, a, data[a - start : b - start]))
        data[survey.stop - start :] = 0
        survey.hashed = self._pools.ordered.submit_after(survey.filled, self._hasher.update, data.data[:real])
        return survey

    def _fill(self, survey: Survey, start: int, data: Bytes) -> None:
        """The work unit of the first read: consecutive cells, of one strip or more."""
        self._read(start, data, self._hasher)
        for run in self._g.runs(start, start + len(data), RUN):
            survey.fill(self._kernels.words, run, data[run.start - start :][: run.length])

    def _store(self, survey: Survey | None) -> None:
        """Wait for a survey and write what it gave."""
        if survey is None:
            return
        wait_all([*survey.filled, survey.hashed], self._report)
        self._add_digests(Track.DATA, survey.digests)
        self._write_inner(self._g.parity_bytes + survey.inner_start, survey.inner, self._inner_cells)

    def _multiply(
        self, lane: Lane, strips: Bytes, first: int, parity: Bytes, *, last: bool
    ) -> list[Future[None]]:
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

        return [lane.submit(work, a, min(a + step, width)) for a in range(0, width, step)]

    def _finish_columns(self, lane: Lane, first: int, parity: Bytes) -> None:
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

        wait_all([lane.submit(work, j) for j in range(g.r)])
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

    def __init__(self, geometry: Geometry, start: int, real_stop: int, room: Bytes | None) -> None:
        g = self._g = geometry
        self.first_cell = g.cell_at(start)
        last = g.cell_at(real_stop - 1)
        strip, block = g.cell_place(last)
        self.stop = g.cell_start(last) + g.width(block)
        self.real = real_stop - start
        self.digests = np.empty(last + 1 - self.first_cell, np.uint64)
        self.inner_start = g.inner_start(*g.cell_place(self.first_cell))
        size = g.inner_start(strip, block) + g.group(block) - self.inner_start
        self.room = np.empty(size, np.uint8) if room is None or len(room) < size else room
        self.inner = self.room[:size]
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
    """The window changed between two reads, somewhere in the bytes start..stop-1."""

    def __init__(self, start: int, stop: int) -> None:
        self.start = start
        self.stop = stop


def weighted(digests: NDArray[np.uint64], first: int) -> int:
    """The sum of the digests of cells first, first + 1 ..., each times an odd number of its own.

    Taken modulo 2^64 over all cells, in any order, it tells as much as the digests one by one: a change
    goes unnoticed once in 2^64.
    """
    numbers = np.arange(first, first + len(digests), dtype=np.uint64)
    return int((digests * (2 * numbers + 1)).sum())


def _rows(count: int, width: int) -> Bytes:
    """uint8[count, width] whose rows do not begin at a power-of-two distance from each other."""
    return aligned(count * (width + _PAD)).reshape(count, width + _PAD)[:, :width]
