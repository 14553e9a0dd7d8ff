"""The pattern of errors: what was received against what is right, reduced to what tells causes apart.

Cells come in as they are decoded, in any order. Bytes that are wrong among right ones are kept one by one, up
to a bound; dense stretches of them become *runs*, in the sense of the bursts of oakum(1). Offsets
are those in the file: memory, sectors and buffers are aligned to files and not to the protected stream.
"""

from __future__ import annotations

from bisect import insort
from collections.abc import Iterable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from oakum.decoding.bursts import DENSITY, GAP, LEAST_LENGTH, cluster

Bytes = NDArray[np.uint8]
Integers = NDArray[np.int64]

MOST_PLACES = 1 << 21
"""Single wrong bytes kept; of more the rest is only counted."""

MOST_PIECES = 1 << 15
"""Pieces of runs kept before they are joined."""

SPARSE = 400
"""Wrong bytes in a cell below which they are looked at one by one."""

POSITIONS = 64
"""Bit positions told apart: bit b (0 the lowest) of the byte at offset o in the file is 8 * (o % 8) + b."""

_WRONG, _BITS, _ZEROS, _ONES, _HIGH, _UNKNOWN, _FIRST = range(7)


@dataclass(frozen=True)
class MemberPattern:
    """What a damaged member looks like as a whole. `found` is its length now, None where it is absent.

    `histogram` counts the received bytes of its wrong cells; `ones` of `bits` bits that are right there
    are 1. `unreadable` are ranges (start, stop).
    """

    path: str
    size: int
    found: int | None
    wrong_cells: int
    wrong_bytes: int
    histogram: Integers
    ones: int
    bits: int
    unreadable: tuple[tuple[int, int], ...] = ()
    converted: str = ""
    """The conversion of line ends that was undone and gave the recorded SHA-256 (see `causes`)."""


@dataclass(frozen=True)
class FileFacts:
    """What is known of a file apart from its bytes; the fields are those of `MemberPattern`."""

    path: str
    size: int
    found: int | None
    converted: str = ""
    unreadable: tuple[tuple[int, int], ...] = ()


@dataclass(frozen=True)
class Runs:
    """Dense stretches of wrong bytes, one row each; `unknown` bytes of them could not be corrected.

    `zeros` and `ones` count wrong bytes received as 0x00 and 0xFF, `high` those that differ by 0x80 alone.
    `positions` is int64[R, 64]: flips by bit position.
    """

    owner: Integers
    start: Integers
    stop: Integers
    wrong: Integers
    bits: Integers
    zeros: Integers
    ones: Integers
    high: Integers
    unknown: Integers
    positions: Integers

    def __len__(self) -> int:
        return len(self.owner)


@dataclass(frozen=True)
class Pattern:
    """Everything that is wrong in one target. The single wrong bytes are in the order of the stream."""

    members: tuple[MemberPattern, ...]
    bytes_read: int
    owner: Integers
    offset: Integers
    received: Bytes
    right: Bytes
    runs: Runs
    positions: Integers
    """int64[2, 64]: all known flips by bit position, those from 0 to 1 and those from 1 to 0."""

    omitted: int = 0
    unsteady: int = 0
    """Cells that gave other bytes when they were read again."""

    @property
    def flips(self) -> Bytes:
        """received XOR right of the single wrong bytes."""
        return self.received ^ self.right

    def with_files(self, files: Iterable[FileFacts]) -> Pattern:
        """The same with what else is known of files; those in which no byte is wrong are added."""
        members = {member.path: member for member in self.members}
        for file in files:
            nothing = MemberPattern(file.path, file.size, file.size, 0, 0, np.zeros(256, np.int64), 0, 0)
            members[file.path] = replace(
                members.get(file.path, nothing),
                found=file.found, converted=file.converted, unreadable=file.unreadable,
            )  # fmt: skip
        return replace(self, members=tuple(members.values()))


@dataclass
class _Gathered:
    """What is gathered of one member."""

    path: str
    size: int
    start: int
    wrong_cells: int = 0
    wrong_bytes: int = 0
    ones: int = 0
    bits: int = 0
    histogram: Integers = field(default_factory=lambda: np.zeros(256, np.int64))


class PatternCollector:
    """Takes the cells that are not right and makes a `Pattern` of them."""

    def __init__(self) -> None:
        self._members: dict[str, _Gathered] = {}
        self._order: list[_Gathered] = []
        self._places: list[Integers] = []
        self._values: list[Bytes] = []
        self._kept = self._omitted = 0
        self._runs: list[Integers] = []
        self._sums: list[Integers] = []
        self._pieces = 0
        self._positions = np.zeros((2, POSITIONS), np.int64)

    def add(
        self, path: str, size: int, start: int, offset: int, received: Bytes, right: Bytes | None
    ) -> None:
        """A piece of a wrong cell that belongs to one member.

        The member is `size` bytes long and begins at `start` of the stream; the piece begins at `offset` of
        the member. `right` is None where the piece could not be corrected.
        """
        member = self._members.get(path)
        if member is None:
            member = self._members[path] = _Gathered(path, size, start)
            insort(self._order, member, key=lambda m: m.start)
        member.wrong_cells += 1
        member.histogram += np.bincount(received, minlength=256)
        if right is None:
            self._add_run(np.array([[start + offset, start + offset + len(received)]]), _lost(received))
            return
        flips = received ^ right
        wrong = np.flatnonzero(flips)
        member.wrong_bytes += len(wrong)
        member.ones += int(np.bitwise_count(right).sum())
        member.bits += 8 * len(right)
        up = _by_position(offset, flips & received)
        self._positions += [up, _by_position(offset, flips) - up]
        wrong = wrong[self._take_runs(start + offset, offset, received, flips, wrong)]
        if len(wrong):
            self._add_single(start + offset + wrong, np.stack([received[wrong], right[wrong]]))

    def _take_runs(
        self, place: int, offset: int, received: Bytes, flips: Bytes, wrong: Integers
    ) -> NDArray[np.bool_]:
        """Keep the dense stretches of a piece at `place` of the stream; which wrong bytes are in none."""
        single = np.ones(len(wrong), bool)
        if DENSITY * len(wrong) <= LEAST_LENGTH:
            return single
        clusters = cluster(wrong.astype(np.int64), np.bitwise_count(flips[wrong]).astype(np.int64))
        clusters = clusters[clusters.burst]
        for begin, stop in zip(clusters.start.tolist(), clusters.stop.tolist(), strict=True):
            single &= (wrong < begin) | (wrong >= stop)
            sums = _sums(offset + begin, received[begin:stop], flips[begin:stop])
            self._add_run(np.array([[begin, stop]]) + place, sums)
        return single

    def _add_single(self, places: Integers, values: Bytes) -> None:
        room = max(0, MOST_PLACES - self._kept)
        self._omitted += max(0, len(places) - room)
        self._kept += min(room, len(places))
        self._places.append(places[:room])
        self._values.append(values[:, :room])

    def _add_run(self, bounds: Integers, sums: Integers) -> None:
        self._runs.append(bounds)
        self._sums.append(sums)
        self._pieces += len(bounds)
        if self._pieces > MOST_PIECES:
            self._join_runs()

    def _join_runs(self) -> None:
        bounds, sums = np.concatenate(self._runs), np.concatenate(self._sums)
        order = np.argsort(bounds[:, 0], kind="stable")
        first = self._first_of(bounds[order])
        self._runs, self._sums = [_spans(bounds[order], first)], [np.add.reduceat(sums[order], first)]
        self._pieces = len(first)

    def _first_of(self, bounds: Integers) -> Integers:
        """Where new stretches begin: 16 right bytes before them, or another member."""
        opens = np.ones(len(bounds), bool)
        opens[1:] = bounds[1:, 0] - bounds[:-1, 1] >= GAP
        owner = self._owner(bounds[:, 0])
        opens[1:] |= owner[1:] != owner[:-1]
        return np.flatnonzero(opens)

    def _owner(self, places: Integers) -> Integers:
        starts = np.array([m.start for m in self._order], np.int64)
        return np.asarray(np.searchsorted(starts, places, side="right") - 1, np.int64)

    def finish(self, bytes_read: int) -> Pattern:
        """The pattern, when everything was added; see `Pattern.with_files` for what it does not know."""
        starts = np.array([m.start for m in self._order], np.int64)
        places = np.concatenate([np.empty(0, np.int64), *self._places])
        values = np.concatenate([np.empty((2, 0), np.uint8), *self._values], axis=1)
        order = np.argsort(places, kind="stable")
        places, values = places[order], values[:, order]
        bounds, sums, single = self._settle(places, values, starts)
        places, values = places[single], values[:, single]
        owner, of_run = self._owner(places), self._owner(bounds[:, 0])
        if len(starts):
            places, bounds = places - starts[owner], bounds - starts[of_run][:, None]
        runs = Runs(
            of_run, bounds[:, 0], bounds[:, 1], sums[:, _WRONG], sums[:, _BITS], sums[:, _ZEROS],
            sums[:, _ONES], sums[:, _HIGH], sums[:, _UNKNOWN], sums[:, _FIRST:],
        )  # fmt: skip
        members = tuple(
            MemberPattern(m.path, m.size, m.size, m.wrong_cells, m.wrong_bytes, m.histogram, m.ones, m.bits)
            for m in self._order
        )
        return Pattern(
            members, bytes_read, owner, places, values[0], values[1], runs, self._positions, self._omitted
        )  # fmt: skip

    def _settle(
        self, places: Integers, values: Bytes, starts: Integers
    ) -> tuple[Integers, Integers, NDArray[np.bool_]]:
        """Join pieces of runs over the ends of cells, with the single bytes that touch them.

        Returns bounds and sums of the runs, and which bytes stay single. A stretch that is not dense as a
        whole is left as it was: its pieces are runs of their own.
        """
        pieces = np.concatenate([np.empty((0, 2), np.int64), *self._runs])
        sums = np.concatenate([np.empty((0, _FIRST + POSITIONS), np.int64), *self._sums])
        bounds = np.concatenate([np.column_stack([places, places + 1]), pieces])
        order = np.argsort(bounds[:, 0], kind="stable")
        first = self._first_of(bounds[order])
        spans = _spans(bounds[order], first)
        number = np.empty(len(bounds), np.int64)
        number[order] = np.repeat(np.arange(len(first)), np.diff(np.append(first, len(bounds))))
        of_place, of_piece = number[: len(places)], number[len(places) :]
        wrong = np.bincount(of_place, minlength=len(first))
        np.add.at(wrong, of_piece, sums[:, _WRONG])
        length = spans[:, 1] - spans[:, 0]
        dense = (length >= LEAST_LENGTH) & (DENSITY * wrong > length)

        index = np.cumsum(dense) - 1
        total = np.zeros((int(dense.sum()), _FIRST + POSITIONS), np.int64)
        np.add.at(total, index[of_piece[dense[of_piece]]], sums[dense[of_piece]])
        absorbed = np.flatnonzero(dense[of_place])
        for some in np.array_split(absorbed, len(absorbed) // 65536 + 1):
            offset = places[some] - starts[self._owner(places[some])] if len(some) else some
            np.add.at(total, index[of_place[some]], _rows(offset, values[0, some], values[1, some]))
        bounds = np.concatenate([spans[dense], pieces[~dense[of_piece]]])
        total = np.concatenate([total, sums[~dense[of_piece]]])
        order = np.argsort(bounds[:, 0], kind="stable")
        return bounds[order], total[order], ~dense[of_place]


def _spans(bounds: Integers, first: Integers) -> Integers:
    """The stretches that begin at rows `first` of ascending bounds."""
    if not len(first):
        return np.zeros((0, 2), np.int64)
    return np.column_stack([bounds[first, 0], np.maximum.reduceat(bounds[:, 1], first)])


def _rows(offset: Integers, received: Bytes, right: Bytes) -> Integers:
    """One row of sums for each wrong byte."""
    flips = received ^ right
    rows = np.zeros((len(flips), _FIRST + POSITIONS), np.int64)
    rows[:, _WRONG] = 1
    rows[:, _BITS] = np.bitwise_count(flips)
    rows[:, _ZEROS] = received == 0
    rows[:, _ONES] = received == 0xFF
    rows[:, _HIGH] = flips == 0x80
    bits = np.unpackbits(flips[:, None], axis=1, bitorder="little")
    columns = _FIRST + 8 * (offset[:, None] % 8) + np.arange(8)
    np.put_along_axis(rows, columns, bits.astype(np.int64), axis=1)
    return rows


def _sums(offset: int, received: Bytes, flips: Bytes) -> Integers:
    """The row of sums of a run that begins at `offset` of its file."""
    row = np.zeros((1, _FIRST + POSITIONS), np.int64)
    wrong = flips != 0
    row[0, _WRONG] = np.count_nonzero(wrong)
    row[0, _BITS] = np.bitwise_count(flips).sum()
    row[0, _ZEROS] = np.count_nonzero(wrong & (received == 0))
    row[0, _ONES] = np.count_nonzero(wrong & (received == 0xFF))
    row[0, _HIGH] = np.count_nonzero(flips == 0x80)
    row[0, _FIRST:] = _by_position(offset, flips)
    return row


def _by_position(offset: int, flips: Bytes) -> Integers:
    """int64[64]: set bits by position, of bytes from `offset` of the file on (a cell at the most)."""
    places = np.flatnonzero(flips)
    if len(places) < SPARSE:
        bits = np.unpackbits(flips[places, None], axis=1, bitorder="little")
        columns = 8 * ((offset + places[:, None]) % 8) + np.arange(8)
        return np.bincount(columns.ravel()[bits.ravel() > 0], minlength=POSITIONS)
    whole = np.zeros(-(-(offset % 8 + len(flips)) // 8) * 8, np.uint8)
    whole[offset % 8 :][: len(flips)] = flips
    bits = np.unpackbits(whole, bitorder="little").reshape(-1, POSITIONS)
    # A product of matrices is the fastest sum, and exact for so few.
    return np.asarray(np.ones(len(bits), np.float32) @ bits.astype(np.float32), np.int64)


def _lost(received: Bytes) -> Integers:
    """The row of a piece whose right bytes are not known: wrong throughout, as far as one can tell."""
    row = np.zeros((1, _FIRST + POSITIONS), np.int64)
    row[0, [_WRONG, _UNKNOWN]] = len(received)
    row[0, _ZEROS] = np.count_nonzero(received == 0)
    row[0, _ONES] = np.count_nonzero(received == 0xFF)
    return row
