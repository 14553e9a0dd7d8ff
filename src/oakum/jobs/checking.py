"""What verify, repair and audit have in common: read everything, find the damage, decode what is damaged.

`WindowCheck.scan` reads a window in order and says which cells are not right; `WindowCheck.findings` decodes
the blocks that hold them, a group of neighbouring blocks a work unit.
"""

from __future__ import annotations

from bisect import bisect_right
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from contextvars import copy_context
from dataclasses import dataclass, field
from functools import partial
from itertools import chain, islice
from typing import TYPE_CHECKING

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.digests import cell_digests
from oakum.files import aligned
from oakum.geometry import CELL, Geometry
from oakum.jobs.common import announce_compiling
from oakum.jobs.opening import ProtectedSet
from oakum.members import MemberHasher, Part, bytes_of
from oakum.pools import Meter, Pools, wait_all
from oakum.progress import Progress
from oakum.sidecar.layout import Track
from oakum.sidecar.reading import Wear, examine_records
from oakum.sidecar.table import Kind

if TYPE_CHECKING:
    from oakum.decoding.block import Decoders
    from oakum.decoding.bursts import Clusters

Bytes = NDArray[np.uint8]
Mask = NDArray[np.bool_]
Range = tuple[int, int]
Sink = Callable[[int, Bytes], None]
"""Takes bytes by their place in the stream."""

RIGHT, WRONG, UNKNOWN = 0, 1, 2
"""As in `oakum.decoding.block`, which is not imported where nothing is damaged."""

CHUNK = 8 << 20
CHUNKS = 3
"""Chunks of the members that are in memory at a time, read in runs by all threads."""

READERS = 2
"""Threads that read the sidecar while others work: they mostly wait for the medium."""

RUN = 2 << 20
"""Bytes that one work unit reads and looks at, while they are still in the CPU's cache."""

MUCH = 128 << 20
"""Bytes of a set for whose digests loading the kernel pays."""

MOST_SEEN = 1 << 18
GROUP = 8
"""Neighbouring blocks that one work unit takes, so that strips are read in longer pieces."""

RECORD_RUN = 64
"""Blocks whose inner parity and digests are kept together, about 5 MB; no group is in two such runs."""

MOST_BLOCKS = 64
"""Blocks that all groups under work hold together where there are few threads, about 64 MB."""

DENSE = 20
"""A group is dense when one in so many of its cells is not right."""


@dataclass
class Finding:
    """What was found out about one block, in numbers and sparse arrays (places are in the stream)."""

    window: int
    block: int
    correctable: bool
    places: NDArray[np.int64]
    bits: NDArray[np.uint8]
    clusters: Clusters
    starts: NDArray[np.int64]
    stops: NDArray[np.int64]
    """Ranges in the stream of the data cells that were not right, ascending."""

    lost: list[Range]
    """Ranges of the stream that could not be put right."""

    erased: int
    words_corrected: int
    words_flagged: int
    margin: float
    sidecar_bits: int
    sidecar_symbols: int
    sidecar_lost: bool
    rounds: int
    false_pins: int
    corrected: list[tuple[int, Bytes]] = field(default_factory=list)
    """Corrected bytes by place in the stream, where asked for; a piece may go on in later blocks."""

    evidence: list[tuple[int, Bytes, Bytes | None]] = field(default_factory=list)
    """For audits, cells that are not right: place in the stream, as received, as it should be where known."""

    unsteady: int = 0
    """For audits: cells of data that gave other bytes when they were read again."""


def digests_for(opened: ProtectedSet, progress: Progress) -> Callable[[Bytes], NDArray[np.uint64]]:
    """The digests of cells by the library; where there is much to do, without the interpreter."""
    if opened.length < MUCH:
        return cell_digests
    from oakum.kernels import cells

    announce_compiling(progress)
    cells.prepare()
    return cells.cell_digests


class WindowCheck:
    """The state of one window while it is checked."""

    def __init__(self, opened: ProtectedSet, number: int, progress: Progress, pools: Pools) -> None:
        self.section = opened.sections[number]
        self.pieces = [p for p in opened.tables[number] if p.kind is Kind.FILE]
        self.g: Geometry = self.section.geometry
        self.start = self.section.bootstrap.start
        self._opened = opened
        self._members = opened.members
        self._progress = progress
        self._pools = pools
        self.stream = opened.stream(self.pieces, self.start, opened.known_bad(self.pieces))
        self._digests_of = digests_for(opened, progress)
        self.faulty: list[Range] = []
        """Ranges of the window that could not be read."""

        g, start_state = self.g, RIGHT if self.g.digested else UNKNOWN
        self.data = np.full(g.data_cells, start_state, np.uint8)
        self.parity = np.full(g.r * g.blocks, start_state, np.uint8).reshape(g.blocks, g.r)
        self.inner_suspects: dict[int, set[int]] = {}
        self.wear = Wear()
        self.body_unreadable: dict[int, int] = {}
        """Ranges of the body that could not be read: from where, and how many bytes."""

        self.looked_to = self.body_done = 0
        """The byte of the window up to which everything has been looked at, and work units of the body."""

        self.digests: list[bytes] = []
        """SHA-256 of the pieces, as far as they are known."""

        self.resumed = False
        """Whether an earlier run has looked at a part, and its last member is to be hashed again."""

        self.mark: Callable[[], None] = lambda: None
        """Called when the scan has come further."""

        self._meter = Meter()
        self.right_spans: list[Range] = []
        self.auditing = False
        """Whether findings come with evidence, and what digests wrong cells had is kept in `seen`."""

        self.seen: dict[int, int] = {}
        self.sampled: tuple[int, int] | None = None
        """Bytes and blocks looked at, where that is not all of the window."""

    @property
    def extent(self) -> tuple[int, int]:
        """Bytes of the stream and blocks that were looked at."""
        return self.sampled or (self.g.length, self.g.blocks)

    # -- scanning ----------------------------------------------------------------------------------

    def scan(self, hasher: MemberHasher | None) -> None:
        """Read the window and its section in order and note every cell that is not right.

        With a `hasher` (whose state goes on from window to window) the members' SHA-256 are compared too.
        """
        body = islice(self._looks_at_body(), self.body_done, None) if self.g.digested else iter(())
        looking: deque[Future[None]] = deque()
        with ThreadPoolExecutor(READERS, "oakum-body") as self._beside:
            self._scan_data(hasher, body, looking)
            if hasher is not None:
                self.digests = hasher.digests
                self._compare_members()
            self._settle_right_members()
            while self._go_on(body, looking):
                wait_all([looking[0]], self._report)
            self.mark()
        self._report()
        if not self.g.digested:
            self._scan_whole_body()
        self.wear = examine_records(self.section)
        self.wear.unreadable += sum(self.body_unreadable.values())

    def _scan_data(
        self, hasher: MemberHasher | None, body: Iterator[Callable[[], None]], looking: deque[Future[None]]
    ) -> None:
        """The members' bytes, chunk by chunk; `body` is what can be done while SHA-256 takes its time."""
        g = self.g
        if hasher is not None and self.resumed:
            hasher.go_on(self.pieces, self.digests, self.looked_to, self._again)
        elif hasher is not None:
            hasher.expect(self.pieces)
        buffers = [aligned(min(CHUNK, g.cells_end)) for _ in range(CHUNKS)]
        running: list[list[Future[None]]] = [[] for _ in buffers]
        stops = [self.looked_to] * CHUNKS
        for turn, (start, stop) in enumerate(g.chunks(CHUNK, self.looked_to) if g.depth else ()):
            slot = turn % CHUNKS
            wait_all(running[slot], self._report)
            self.looked_to, stops[slot] = stops[slot], stop
            self.mark()
            data = buffers[slot][: stop - start]
            running[slot] = [
                self._pools.work.submit(self._look, a, data[a - start : b - start], hasher)
                for a, b in g.chunks(RUN, start, stop)
            ]
            real = min(stop, g.length) - start
            if hasher is not None:
                running[slot].append(
                    self._pools.ordered.submit_after(running[slot][:], hasher.update, data.data[:real])
                )
            self._go_on(body, looking)
            self._report()
        for futures in running:
            wait_all(futures, self._report)
        self.looked_to = g.cells_end
        self.faulty.sort()

    def _again(self, span: Part) -> Iterator[tuple[memoryview, list[Range]]]:
        """The bytes of a member from its first one on."""
        start = self._members[span.path].stream_start
        stream = self._opened.stream([span], start, self._opened.known_bad([span]))
        return bytes_of(stream, span.length)

    def _look(self, start: int, cells: Bytes, hasher: MemberHasher | None = None) -> None:
        """Read the cells from byte `start` of the window on, and hold them against their digests."""
        g = self.g
        faults = self.stream.read_into(start, cells.data, hasher)
        for run in g.runs(start, start + len(cells), RUN) if g.digested else ():
            part = cells[run.start - start :][: run.length]
            number = g.cell_number(run.strip, run.block)
            self._compare_run(number, part, *self.section.digests(Track.DATA, number, -(-len(part) // CELL)))
        for a, b in faults:
            self.data[g.cell_at(start + a) : g.cell_at(start + b - 1) + 1] = WRONG
            self.faulty.append((start + a, start + b))
        self._meter.add(min(len(cells), g.length - start))

    def _report(self) -> None:
        """Tell how much has been read."""
        self._progress.advance(self._meter.take())

    def _go_on(self, body: Iterator[Callable[[], None]], looking: deque[Future[None]]) -> bool:
        """Have more of the body looked at beside the members; False when there is no more."""
        while looking and looking[0].done():
            looking.popleft().result()
            self.body_done += 1
        for look in islice(body, 4 * self._pools.jobs - len(looking)):
            looking.append(self._beside.submit(copy_context().run, look))
        return bool(looking)

    def _compare_run(
        self, number: int, cells: Bytes, expected: NDArray[np.uint64], known: Mask | None
    ) -> None:
        """Consecutive cells of one strip from `number` on against their digests."""
        digests = self._digests_of(cells)
        state = np.where(digests == expected, np.uint8(RIGHT), np.uint8(WRONG))
        if known is not None:
            state[~known] = UNKNOWN
        self.data[number : number + len(digests)] = state
        if self.auditing and len(self.seen) < MOST_SEEN:
            wrong = np.flatnonzero(state == WRONG)
            self.seen.update(zip((number + wrong).tolist(), digests[wrong].tolist(), strict=True))

    def skip(self) -> None:
        """Leave the window out: nothing of it is read, and nothing said of it."""
        self.sampled = 0, 0
        self.data[:] = RIGHT
        self.parity[:] = RIGHT

    def scan_sample(self, groups: Sequence[Range]) -> None:
        """Read only the blocks first..end-1 of each of `groups`, of all strips; no SHA-256 is compared."""
        g, nbytes = self.g, 0
        for first, end in groups:
            start, width = first * CELL, min(end * CELL, g.depth) - first * CELL
            for strip in range(g.k):
                real = min(width, g.strip_length(strip) - start)
                if real <= 0:
                    break
                self._look(strip * g.depth + start, aligned(min(-(-real // CELL) * CELL, width)))
                nbytes += real
            for j in range(g.r):
                self._look_at_parity(first, end - first, j)
            self._report()
        self.sampled = nbytes, sum(end - first for first, end in groups)
        self.faulty.sort()
        self.wear = examine_records(self.section)

    def _compare_members(self) -> None:
        """Which members are right, and which parts of the window belong to them."""
        start = 0
        for piece, digest in zip(self.pieces, self.digests, strict=True):
            stop = start + piece.length
            sound = digest == piece.digest and not (self.faulty and self._has_fault(start, stop))
            member = self._members[piece.path]
            if piece.ends and not member.absent:
                member.right = sound
            if sound and piece.length:
                touching = self.right_spans and self.right_spans[-1][1] == start
                first = self.right_spans.pop()[0] if touching else start
                self.right_spans.append((first, stop))
            start = stop

    def _has_fault(self, start: int, stop: int) -> bool:
        at = bisect_right(self.faulty, (start, -1))
        before = at and self.faulty[at - 1][1] > start
        return bool(before or (at < len(self.faulty) and self.faulty[at][0] < stop))

    def _settle_right_members(self) -> None:
        """Cells that lie wholly in right members are right, whatever their digests say."""
        g = self.g
        if not self.right_spans:
            return
        for number in np.flatnonzero(self.data != RIGHT).tolist():
            start = g.cell_start(number)
            stop = min(start + g.width(g.cell_place(number)[1]), g.length)
            if not self._unpinned(start, stop):
                self.data[number] = RIGHT

    def _unpinned(self, start: int, stop: int) -> list[Range]:
        """The parts of a range of the window that right members do not vouch for."""
        ranges = []
        at = max(0, bisect_right(self.right_spans, (start, 1 << 62)) - 1)
        for a, b in self.right_spans[at:]:
            if a >= stop:
                break
            if b <= start:
                continue
            if a > start:
                ranges.append((start, a))
            start = max(start, b)
        if start < stop:
            ranges.append((start, stop))
        return ranges

    def _read_body(self, offset: int, length: int) -> tuple[Bytes, list[Range]]:
        """Bytes of the section's body, those that cannot be read counted."""
        data, faults = self.section.body(offset, length)
        self.body_unreadable.update((offset + start, stop - start) for start, stop in faults)
        self._meter.add(length)
        return data, faults

    def _looks_at_body(self) -> Iterator[Callable[[], None]]:
        """Work units for the parity strips, in the order of their digests, and both areas of inner parity."""
        g = self.g
        step = RUN // CELL
        for first in range(0, g.blocks, step):
            for j in range(g.r):
                yield partial(self._look_at_parity, first, min(step, g.blocks - first), j)
        for track, start, length, suspect in (
            (Track.INNER, g.parity_bytes, g.data_inner, self._suspect_data_inner),
            (
                Track.PARITY_INNER,
                g.parity_bytes + g.data_inner,
                g.parity_inner,
                self._suspect_parity_inner,
            ),
        ):
            for offset in range(0, length, RUN):
                yield partial(self._look_at_inner, track, start, offset, min(RUN, length - offset), suspect)

    def _look_at_parity(self, first: int, count: int, j: int) -> None:
        """The cells of parity strip j in blocks first..first+count-1."""
        g = self.g
        start = first * CELL
        length = min((first + count) * CELL, g.depth) - start
        cells, faults = self._read_body(j * g.depth + start, length)
        expected, known = self.section.digests(Track.PARITY, first * g.r, count * g.r)
        state = np.where(self._digests_of(cells) == expected[j :: g.r], np.uint8(RIGHT), np.uint8(WRONG))
        if known is not None:
            state[~known[j :: g.r]] = UNKNOWN
        for a, b in faults:
            state[a // CELL : -(-b // CELL)] = WRONG
        self.parity[first : first + count, j] = state

    def _look_at_inner(
        self, track: Track, start: int, offset: int, length: int, suspect: Callable[[int, int], None]
    ) -> None:
        """Part of an area of inner parity: cells that disagree with their digest are examined later."""
        data, faults = self._read_body(start + offset, length)
        digests = self._digests_of(data)
        expected, known = self.section.digests(track, offset // CELL, len(digests))
        bad = digests != expected
        if known is not None:
            bad |= ~known
        for a, b in faults:
            bad[a // CELL : -(-b // CELL)] = True
        for cell in np.flatnonzero(bad).tolist():
            suspect(offset + cell * CELL, offset + min((cell + 1) * CELL, length))

    def _suspect_data_inner(self, start: int, stop: int) -> None:
        g = self.g
        place = start
        while place < stop:
            strip, inside = divmod(place, g.strip_inner)
            block = min(inside // g.full_group, g.blocks - 1)
            self.inner_suspects.setdefault(block, set()).add(strip)
            place = g.inner_start(strip, block) + g.group(block)

    def _suspect_parity_inner(self, start: int, stop: int) -> None:
        g = self.g
        place = start
        while place < stop:
            block = min(place // (g.r * g.full_group), g.blocks - 1)
            row = (place - g.parity_inner_start(0, block)) // g.group(block)
            self.inner_suspects.setdefault(block, set()).add(g.k + row)
            place = g.parity_inner_start(row, block) + g.group(block)

    def _scan_whole_body(self) -> None:
        """A small window: one digest speaks for the whole body."""
        g = self.g
        body, faults = self._read_body(0, g.body)
        if not faults and xxhash.xxh3_64_intdigest(body.data) == self.section.bootstrap.body_digest:
            self.parity[:] = RIGHT
        else:
            self.inner_suspects = {b: set(range(g.n)) for b in range(g.blocks)}
        self._progress.advance(g.body)

    # -- decoding ----------------------------------------------------------------------------------

    @property
    def block_bytes(self) -> int:
        """Bytes of a whole block, for the progress of decoding."""
        return self.g.n * self.g.width(0) if self.g.blocks else 0

    def burst_left(self) -> int:
        """The contiguous loss in bytes that the parity that is left can repair anywhere in the window.

        Parity cells that are not right are counted as lost, although flips in them may be corrected.
        """
        worst = int((self.parity != RIGHT).sum(axis=1).max()) if self.parity.size else 0
        return max(0, (self.g.r - worst) * self.g.depth - 2 * CELL)

    def has_damage(self, start: int, stop: int, *, unknown: bool) -> bool:
        """Whether a cell that holds any of the window's bytes start..stop-1 is wrong (or `unknown`)."""
        cells = self.data[self.g.cell_at(start) : self.g.cell_at(stop - 1) + 1]
        return bool((cells != RIGHT).any() if unknown else (cells == WRONG).any())

    def dirty_blocks(self) -> list[int]:
        """Blocks with a cell that is not right, or with inner parity to be looked at."""
        if not self.g.blocks:
            return []
        dirty: Mask = (self.parity != RIGHT).any(axis=1)
        dirty[np.flatnonzero(self.data != RIGHT) % self.g.blocks] = True
        dirty[list(self.inner_suspects)] = True
        return np.flatnonzero(dirty).tolist()

    @property
    def groups(self) -> list[list[int]]:
        """The dirty blocks in groups, each of which is read together; larger ones where there is room."""
        dirty, jobs = self.dirty_blocks(), self._pools.jobs
        return _grouped(dirty, max(GROUP, min(MOST_BLOCKS // jobs, len(dirty) // (4 * jobs))))

    def is_dense(self, blocks: list[int]) -> bool:
        """Whether so many cells of a group are not right that decoding it will read most of it anyway."""
        first, end = blocks[0], blocks[-1] + 1
        whole = len(self.data) // self.g.blocks * self.g.blocks
        rows = self.data[:whole].reshape(-1, self.g.blocks)[:, first:end]
        count = np.count_nonzero(rows) + np.count_nonzero(self.data[whole:][first:end])
        return bool(count * DENSE >= self.g.k * (end - first))

    def outside_dense_groups(self) -> Iterator[Range]:
        """The ranges of the window, in order, that no dense group holds."""
        g = self.g
        held = [(b[0] * CELL, (b[-1] + 1) * CELL) for b in self.groups if self.is_dense(b)]
        if not held:
            yield 0, g.length
            return
        starts, stops = [0, *(stop for _, stop in held)], [*(start for start, _ in held), g.depth]
        for strip in range(g.k):
            for a, b in zip(starts, stops, strict=True):
                first, end = strip * g.depth + a, min(strip * g.depth + b, g.length)
                if first < end:
                    yield first, end

    def findings(
        self, decoders: Callable[[], Decoders], *, keep: bool = False, sink: Sink | None = None
    ) -> Iterator[Finding]:
        """Decode all dirty blocks, in order. `keep` and `sink` as in `blocks.examine`.

        The sink is called in several threads. What it is given need not be read by whoever writes all bytes.
        """
        groups = self.groups
        if not groups:
            return
        from oakum.jobs.blocks import examine
        from oakum.jobs.groups import Records

        work = partial(examine, Records(self), decoders(), keep=keep, sink=sink, evidence=self.auditing)
        yield from chain.from_iterable(self._pools.in_turn(work, groups))

    def states(self, block: int) -> NDArray[np.uint8]:
        """RIGHT, WRONG or UNKNOWN for the cells of a block, uint8[n]; virtual cells are right."""
        g = self.g
        states = np.zeros(g.n, np.uint8)
        numbers = np.arange(g.k) * g.blocks + block
        real = numbers < g.data_cells
        states[: g.k][real] = self.data[numbers[real]]
        states[g.k :] = self.parity[block]
        return states

    def pinned(self, strips: NDArray[np.intp], blocks: NDArray[np.intp], width: int) -> Mask | None:
        """Bytes of cells of so many bytes that belong to right members, bool[R, width]."""
        if not self.right_spans:
            return None
        g = self.g
        pinned = np.zeros((len(strips), width), bool)
        for row, (strip, block) in enumerate(zip(strips.tolist(), blocks.tolist(), strict=True)):
            if strip < g.k:
                start = strip * g.depth + block * CELL
                pinned[row] = True
                for a, b in self._unpinned(start, min(start + width, g.length)):
                    pinned[row, a - start : b - start] = False
        return pinned

    def close(self) -> None:
        """Close the members."""
        self.stream.close()


def _grouped(blocks: list[int], most: int) -> list[list[int]]:
    """Runs of at most so many blocks that lie within so many of each other."""
    groups: list[list[int]] = []
    for block in blocks:
        if groups and block - groups[-1][0] < most and block // RECORD_RUN == groups[-1][0] // RECORD_RUN:
            groups[-1].append(block)
        else:
            groups.append([block])
    return groups
