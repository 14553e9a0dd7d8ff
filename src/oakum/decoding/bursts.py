"""Which flips are part of a burst and which are scattered, by the final error pattern.

A cluster is a stretch from one wrong byte to another with no run of 16 right bytes inside and such runs
(or the end) outside. A cluster of at least 32 bytes, more than a quarter of them wrong, is a burst; the
flips of all others are scattered.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from oakum.kernels.flips import FIND_FLIPS

GAP = 16
LEAST_LENGTH = 32
DENSITY = 4
"""More than one byte in this many must be wrong."""

Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Clusters:
    """Clusters as arrays: first byte, end (exclusive), wrong bytes and flipped bits of each."""

    start: Integers
    stop: Integers
    wrong: Integers
    bits: Integers

    @property
    def burst(self) -> NDArray[np.bool_]:
        """Which of them are bursts."""
        length = self.stop - self.start
        return (length >= LEAST_LENGTH) & (DENSITY * self.wrong > length)

    def __getitem__(self, chosen: NDArray[np.bool_] | Integers | slice) -> Clusters:
        return Clusters(self.start[chosen], self.stop[chosen], self.wrong[chosen], self.bits[chosen])

    def __len__(self) -> int:
        return len(self.start)


@dataclass(frozen=True)
class Flips:
    """Flips in rows of `width` bytes, by number of the byte, row after row.

    `places` are those of all wrong bytes, ascending, `bits` how many are flipped in each; no cluster goes on
    from one row to the next.
    """

    width: int
    places: Integers
    bits: NDArray[np.uint8]
    clusters: Clusters

    @staticmethod
    def of(flips: NDArray[np.uint8]) -> Flips:
        """What is not zero in uint8[R, W], with W a multiple of 8."""
        count = np.count_nonzero(flips)
        places, bits = np.empty(count, np.int64), np.empty(count, np.uint8)
        clusters = np.empty((4, count), np.int64)
        used = FIND_FLIPS(flips, flips.view(np.uint64), GAP, places, bits, clusters)
        return Flips(flips.shape[1], places, bits, Clusters(*clusters[:, :used].copy()))

    def counts(self, rows: int) -> NDArray[np.intp]:
        """How many bytes are wrong in each of the first `rows` rows."""
        return np.diff(np.searchsorted(self.places, self.width * np.arange(rows + 1)))

    def at(self, starts: Integers) -> Flips:
        """Those of the first rows, numbered anew: row i begins at starts[i], in rising order."""
        rows = np.arange(len(starts))
        end = self.width * len(starts)
        shift = starts - self.width * rows
        clusters = self.clusters[: int(np.searchsorted(self.clusters.start, end))]
        moved = shift[clusters.start // max(self.width, 1)]
        counts = self.counts(len(starts))
        used = int(counts.sum())
        return Flips(
            self.width,
            self.places[:used] + np.repeat(shift, counts),
            self.bits[:used],
            Clusters(clusters.start + moved, clusters.stop + moved, clusters.wrong, clusters.bits),
        )


def cluster(places: Integers, bits: Integers) -> Clusters:
    """Clusters of wrong bytes at ascending `places`, with `bits` flipped in each."""
    if not len(places):
        empty = np.empty(0, np.int64)
        return Clusters(empty, empty, empty, empty)
    return _join(Clusters(places, places + 1, np.ones_like(places), bits))


def _join(parts: Clusters) -> Clusters:
    """Join ascending parts that have fewer than 16 right bytes between them."""
    opens = np.ones(len(parts), bool)
    opens[1:] = parts.start[1:] - parts.stop[:-1] >= GAP
    first = np.flatnonzero(opens)
    last = np.append(first[1:], len(parts)) - 1
    return Clusters(
        parts.start[first],
        parts.stop[last],
        np.add.reduceat(parts.wrong, first),
        np.add.reduceat(parts.bits, first),
    )


def burst_bytes(shape: tuple[int, int], clusters: Clusters) -> NDArray[np.bool_]:
    """Which bytes of rows, bool[shape], lie inside a burst, right ones too (seen within the row alone)."""
    inside = np.zeros(shape, bool)
    line = inside.reshape(-1)
    bursts = clusters[clusters.burst]
    for start, stop in zip(bursts.start.tolist(), bursts.stop.tolist(), strict=True):
        line[start:stop] = True
    return inside


class BurstCounter:
    """Adds up flips in bursts and scattered ones over cells that come in any order.

    A cluster that comes near an end of its cell may go on in the next one: those are kept and joined
    at the end, all others are counted at once.
    """

    def __init__(self) -> None:
        self.scattered = 0
        self.burst = 0
        self._edges: list[Clusters] = []
        self._lengths: list[Integers] = []

    def add(self, found: Clusters, starts: Integers, stops: Integers) -> None:
        """Clusters of some cells by place in the stream, ascending.

        The cells take up starts[i]..stops[i]-1, in rising order; a cluster may go on in a neighbour.
        """
        first = starts[np.searchsorted(starts, found.start, side="right") - 1]
        last = stops[np.searchsorted(starts, found.stop - 1, side="right") - 1]
        inside = (found.start - first >= GAP) & (last - found.stop >= GAP)
        self._count(found[inside])
        if not inside.all():
            self._edges.append(found[~inside])

    def _count(self, clusters: Clusters) -> None:
        burst = clusters.burst
        self.burst += int(clusters.bits[burst].sum())
        self.scattered += int(clusters.bits[~burst].sum())
        if burst.any():
            self._lengths.append((clusters.stop - clusters.start)[burst])

    def finish(self) -> None:
        """Join what was kept. Nothing may be added afterwards."""
        if self._edges:
            parts = [
                np.concatenate([getattr(e, name) for e in self._edges])
                for name in ("start", "stop", "wrong", "bits")
            ]
            order = np.argsort(parts[0], kind="stable")
            self._count(_join(Clusters(*(part[order] for part in parts))))
            self._edges.clear()

    @property
    def lengths(self) -> Integers:
        """Lengths in bytes of all bursts found."""
        return np.concatenate(self._lengths) if self._lengths else np.empty(0, np.int64)
