"""Which flips are part of a burst and which are scattered, by the final error pattern.

A cluster is a stretch from one wrong byte to another with no run of 16 right bytes inside and such runs
(or the end) outside. A cluster of at least 32 bytes, more than a quarter of them wrong, is a burst; the
flips of all others are scattered.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

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


def burst_bytes(
    shape: tuple[int, int], rows: NDArray[np.intp], places: NDArray[np.intp]
) -> NDArray[np.bool_]:
    """Which bytes of cells, bool[shape], lie inside a burst, right ones too (seen within the cell alone).

    `rows` and `places` are those of the wrong bytes, row after row.
    """
    height, width = shape
    # One long line, with a gap between the rows that no cluster can bridge.
    stride = width + 64
    line = rows.astype(np.int64) * stride + places
    found = cluster(line, np.zeros_like(line))
    bursts = found[found.burst]
    if not len(bursts):
        return np.zeros(shape, bool)
    edges = np.zeros(height * stride + 1, np.int8)
    edges[bursts.start] += 1
    edges[bursts.stop] -= 1
    inside = np.cumsum(edges[:-1], dtype=np.int8).reshape(height, stride)
    return np.asarray(inside[:, :width] > 0)


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

    def add(self, places: Integers, bits: Integers, starts: Integers, stops: Integers) -> None:
        """The wrong bytes of some cells: ascending `places` in the stream, and `bits` flipped in each.

        The cells take up starts[i]..stops[i]-1, in rising order.
        """
        found = cluster(places, bits)
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
