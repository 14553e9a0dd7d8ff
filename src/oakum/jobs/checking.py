"""What verify, repair and audit have in common: read everything, find the damage, decode what is damaged.

`WindowCheck.scan` reads a window in order and says which cells are not right; `WindowCheck.findings` decodes
the blocks that hold them, a group of neighbouring blocks a work unit.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import xxhash
from numpy.typing import NDArray

from oakum.digests import cell_digests
from oakum.geometry import CELL, Geometry
from oakum.jobs.opening import ProtectedSet
from oakum.members import MemberHasher, Span
from oakum.pools import Pools, wait_all
from oakum.progress import Progress
from oakum.sidecar.layout import Track
from oakum.sidecar.reading import Wear, examine_records
from oakum.sidecar.table import Kind

if TYPE_CHECKING:
    from oakum.decoding.block import Decoders

Bytes = NDArray[np.uint8]
Mask = NDArray[np.bool_]
Range = tuple[int, int]

RIGHT, WRONG, UNKNOWN = 0, 1, 2
"""As in `oakum.decoding.block`, which is not imported where nothing is damaged."""

CHUNK = 8 << 20
MOST_SEEN = 1 << 18
GROUP = 8
"""Neighbouring blocks that one work unit takes, so that strips are read in longer pieces."""


@dataclass
class Finding:
    """What was found out about one block, in numbers and sparse arrays (places are in the stream)."""

    window: int
    block: int
    correctable: bool
    places: NDArray[np.int64]
    bits: NDArray[np.int64]
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
    """Corrected bytes by place in the stream, where they are asked for."""

    evidence: list[tuple[int, Bytes, Bytes | None]] = field(default_factory=list)
    """For audits, cells that are not right: place in the stream, as received, as it should be where known."""

    unsteady: int = 0
    """For audits: cells of data that gave other bytes when they were read again."""


class WindowCheck:
    """The state of one window while it is checked."""

    def __init__(self, opened: ProtectedSet, number: int, progress: Progress, pools: Pools) -> None:
        self.section = opened.sections[number]
        self.pieces = [p for p in opened.tables[number] if p.kind is Kind.FILE]
        self.g: Geometry = self.section.geometry
        self.start = self.section.bootstrap.start
        self._members = opened.members
        self._progress = progress
        self._pools = pools
        spans = [Span(p.path, p.offset, p.length) for p in self.pieces]
        self.spans = spans
        self.stream = opened.stream(spans, self.start, self._known_bad(opened.unreadable))
        self.faulty: list[Range] = []
        """Ranges of the window that could not be read."""

        g, start_state = self.g, RIGHT if self.g.digested else UNKNOWN
        self.data = np.full(g.data_cells, start_state, np.uint8)
        self.parity = np.full(g.r * g.blocks, start_state, np.uint8).reshape(g.blocks, g.r)
        self.inner_suspects: dict[int, set[int]] = {}
        self.wear = Wear()
        self._body_unreadable = 0
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

    def _known_bad(self, unreadable: dict[bytes, list[Range]]) -> list[Range]:
        """What the user says cannot be read, as ranges of the window."""
        ranges, place = [], 0
        for piece in self.pieces:
            for start, stop in unreadable.get(piece.path, ()):
                a, b = max(start, piece.offset), min(stop, piece.offset + piece.length)
                if a < b:
                    ranges.append((place + a - piece.offset, place + b - piece.offset))
            place += piece.length
        return ranges

    # -- scanning ----------------------------------------------------------------------------------

    def scan(self, hasher: MemberHasher | None) -> None:
        """Read the window and its section in order and note every cell that is not right.

        With a `hasher` (whose state goes on from window to window) the members' SHA-256 are compared too.
        """
        self._scan_data(hasher)
        if hasher is not None:
            self._compare_members(hasher)
        self._settle_right_members()
        if self.g.digested:
            self._scan_parity()
            self._scan_inner(Track.INNER, self.g.parity_bytes, self.g.data_inner, self._suspect_data_inner)
            self._scan_inner(
                Track.PARITY_INNER,
                self.g.parity_bytes + self.g.data_inner,
                self.g.parity_inner,
                self._suspect_parity_inner,
            )
        else:
            self._scan_whole_body()
        self.wear = examine_records(self.section)
        self.wear.unreadable += self._body_unreadable

    def _scan_data(self, hasher: MemberHasher | None) -> None:
        g = self.g
        if hasher is not None:
            hasher.expect(self.spans)
        chunks = (
            list(g.chunks(min(CHUNK, max(1, -(-g.length // max(g.depth, 1))) * g.depth))) if g.depth else []
        )
        buffers = [np.empty(max((b - a for a, b in chunks), default=0), np.uint8) for _ in range(3)]
        running: list[list[Future[None]]] = [[], [], []]
        for turn, (start, stop) in enumerate(chunks):
            slot = turn % 3
            wait_all(running[slot])
            data = buffers[slot][: stop - start]
            faults = self.stream.read_into(start, data.data)
            real = min(stop, g.length) - start
            self.faulty += [(start + a, start + b) for a, b in faults]
            if hasher is not None:
                running[slot] = [self._pools.ordered.submit(hasher.update, data.data[:real])]
            if g.digested:
                running[slot] += self._compare_cells(start, stop, data)
            self._progress.advance(real)
        for futures in running:
            wait_all(futures)
        for start, stop in self.faulty:
            self.data[g.cell_at(start) : g.cell_at(stop - 1) + 1] = WRONG

    def _compare_cells(self, start: int, stop: int, data: Bytes) -> list[Future[None]]:
        first = self.g.cell_at(start)
        expected, known = self.section.digests(Track.DATA, first, self.g.cell_at(stop - 1) + 1 - first)

        def work(number: int, cells: Bytes) -> None:
            here = slice(number - first, number - first - (-len(cells) // CELL))
            self._compare_run(number, cells, expected[here], None if known is None else known[here])

        return [
            self._pools.work.submit(
                work, self.g.cell_number(run.strip, run.block), data[run.start - start :][: run.length]
            )
            for run in self.g.runs(start, stop, 1 << 20)
        ]

    def _compare_run(
        self, number: int, cells: Bytes, expected: NDArray[np.uint64], known: Mask | None
    ) -> None:
        """Consecutive cells of one strip from `number` on against their digests."""
        digests = cell_digests(cells)
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
                cells = np.empty(min(-(-real // CELL) * CELL, width), np.uint8)
                faults = self.stream.read_into(strip * g.depth + start, cells.data)
                number, count = g.cell_number(strip, first), -(-len(cells) // CELL)
                self._compare_run(number, cells, *self.section.digests(Track.DATA, number, count))
                for a, b in faults:
                    self.data[number + a // CELL : number - (-b // CELL)] = WRONG
                    self.faulty.append((strip * g.depth + start + a, strip * g.depth + start + b))
                nbytes += real
                self._progress.advance(real)
            expected, known = self.section.digests(Track.PARITY, first * g.r, (end - first) * g.r)
            for j in range(g.r):
                cells, faults = self.section.body(j * g.depth + start, width)
                self._compare_parity(first, j, cells, faults, expected[j :: g.r], known)
            self._progress.advance(g.r * width)
        self.sampled = nbytes, sum(end - first for first, end in groups)
        self.faulty.sort()
        self.wear = examine_records(self.section)

    def _compare_members(self, hasher: MemberHasher) -> None:
        """Which members are right, and which parts of the window belong to them."""
        place = 0
        for piece, digest in zip(self.pieces, hasher.digests, strict=True):
            member = self._members[piece.path]
            if piece.ends and not member.absent:
                member.right = digest == piece.digest and not self._has_fault(place, place + piece.length)
            if piece.length and digest == piece.digest and not self._has_fault(place, place + piece.length):
                self.right_spans.append((place, place + piece.length))
            place += piece.length

    def _has_fault(self, start: int, stop: int) -> bool:
        at = bisect_right(self.faulty, (start, -1))
        before = at and self.faulty[at - 1][1] > start
        return bool(before or (at < len(self.faulty) and self.faulty[at][0] < stop))

    def _settle_right_members(self) -> None:
        """Cells that lie wholly in right members are right, whatever their digests say."""
        g = self.g
        if not (self.data != RIGHT).any():
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
        self._body_unreadable += sum(stop - start for start, stop in faults)
        return data, faults

    def _scan_parity(self) -> None:
        """The parity strips, in pieces of columns as they are digested block by block."""
        g = self.g
        step = max(1, (1 << 20) // CELL)
        for first in range(0, g.blocks, step):
            count = min(step, g.blocks - first)
            expected, known = self.section.digests(Track.PARITY, first * g.r, count * g.r)
            width = (
                sum(g.width(b) for b in (first, first + count - 1)[: min(count, 2)])
                + max(0, count - 2) * CELL
            )
            futures = []
            for j in range(g.r):
                cells, faults = self._read_body(j * g.depth + first * CELL, width)
                futures.append(
                    self._pools.work.submit(
                        self._compare_parity, first, j, cells, faults, expected[j :: g.r], known
                    )
                )
            wait_all(futures)
            self._progress.advance(g.r * width)

    def _compare_parity(
        self,
        first: int,
        j: int,
        cells: Bytes,
        faults: list[Range],
        expected: NDArray[np.uint64],
        known: Mask | None,
    ) -> None:
        state = np.where(cell_digests(cells) == expected, np.uint8(RIGHT), np.uint8(WRONG))
        if known is not None:
            state[~known[j :: self.g.r]] = UNKNOWN
        for start, stop in faults:
            state[start // CELL : -(-stop // CELL)] = WRONG
        self.parity[first : first + len(state), j] = state

    def _scan_inner(self, track: Track, start: int, length: int, suspect: Callable[[int, int], None]) -> None:
        """One of the two areas of inner parity: cells that disagree with their digest are looked at later."""
        for offset in range(0, length, CHUNK):
            size = min(CHUNK, length - offset)
            data, faults = self._read_body(start + offset, size)
            digests = cell_digests(data)
            expected, known = self.section.digests(track, offset // CELL, len(digests))
            bad = digests != expected
            if known is not None:
                bad |= ~known
            for a, b in faults:
                bad[a // CELL : -(-b // CELL)] = True
            for cell in np.flatnonzero(bad).tolist():
                suspect(offset + cell * CELL, min(offset + (cell + 1) * CELL, length))
            self._progress.advance(size)

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
        dirty = set(np.unique(np.flatnonzero(self.data != RIGHT) % self.g.blocks).tolist()) | set(
            np.flatnonzero((self.parity != RIGHT).any(axis=1)).tolist()
        )
        return sorted(dirty | set(self.inner_suspects))

    def findings(self, decoders: Callable[[], Decoders], *, keep: bool) -> Iterator[Finding]:
        """Decode all dirty blocks, in order. With `keep` the corrected bytes come along."""
        groups = _grouped(self.dirty_blocks())
        if not groups:
            return
        ready = decoders()
        waiting: list[Future[list[Finding]]] = []
        for group in groups:
            waiting.append(self._pools.work.submit(self._work, group, ready, keep))
            if len(waiting) > self._pools.jobs:
                yield from waiting.pop(0).result()
        for future in waiting:
            yield from future.result()

    def _work(self, blocks: list[int], decoders: Decoders, keep: bool) -> list[Finding]:
        """The work unit: neighbouring blocks, decoded one after the other from strips read together."""
        from oakum.jobs.blocks import GroupReader, examine

        reader = GroupReader(self, blocks)
        return [examine(self, reader.block(b), decoders, keep=keep, evidence=self.auditing) for b in blocks]

    def states(self, block: int) -> NDArray[np.uint8]:
        """RIGHT, WRONG or UNKNOWN for the cells of a block, uint8[n]; virtual cells are right."""
        g = self.g
        states = np.zeros(g.n, np.uint8)
        numbers = np.arange(g.k) * g.blocks + block
        real = numbers < g.data_cells
        states[: g.k][real] = self.data[numbers[real]]
        states[g.k :] = self.parity[block]
        return states

    def digests_of(self, block: int, strips: NDArray[np.intp]) -> tuple[NDArray[np.uint64], Mask]:
        """Digests of some cells of a block and whether they are known."""
        g = self.g
        values, known = np.zeros(len(strips), np.uint64), np.zeros(len(strips), bool)
        if not g.digested:
            return values, known
        for i, strip in enumerate(strips.tolist()):
            track, number = (Track.DATA, g.cell_number(strip, block)) if strip < g.k else (
                Track.PARITY, block * g.r + strip - g.k)  # fmt: skip
            value, sure = self.section.digests(track, number, 1)
            values[i], known[i] = value[0], sure is None or sure[0]
        return values, known

    def pinned(self, block: int, strips: NDArray[np.intp]) -> Mask | None:
        """Bytes of some cells that belong to right members, bool[R, width]."""
        if not self.right_spans:
            return None
        g = self.g
        width = g.width(block)
        pinned = np.zeros((len(strips), width), bool)
        for row, strip in enumerate(strips.tolist()):
            if strip < g.k:
                start = strip * g.depth + block * CELL
                pinned[row] = True
                for a, b in self._unpinned(start, min(start + width, g.length)):
                    pinned[row, a - start : b - start] = False
        return pinned

    def close(self) -> None:
        """Close the members."""
        self.stream.close()


def _grouped(blocks: list[int]) -> list[list[int]]:
    """Runs of at most GROUP blocks that lie within GROUP of each other."""
    groups: list[list[int]] = []
    for block in blocks:
        if groups and block - groups[-1][0] < GROUP:
            groups[-1].append(block)
        else:
            groups.append([block])
    return groups
