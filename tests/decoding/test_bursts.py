"""Bursts and scattered flips, against a classifier that looks at one byte after the other."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from oakum.decoding.bursts import BurstCounter, Flips, burst_bytes, cluster


def classify(flips: bytes) -> tuple[int, int, list[int]]:
    """(bits in bursts, scattered bits, lengths of bursts) as oakum(1) defines them.

    A burst is a stretch of at least 32 bytes, more than a quarter of them wrong, with no run of 16 right
    bytes inside; the stretches are the longest ones between wrong bytes that no such run divides.
    """
    stretches: list[list[int]] = []
    run = 16
    for place, value in enumerate(flips):
        if not value:
            run += 1
            continue
        if run >= 16:
            stretches.append([])
        stretches[-1].append(place)
        run = 0
    burst = scattered = 0
    lengths = []
    for places in stretches:
        length = places[-1] - places[0] + 1
        bits = sum(flips[p].bit_count() for p in places)
        if length >= 32 and len(places) / length > 1 / 4:
            burst += bits
            lengths.append(length)
        else:
            scattered += bits
    return burst, scattered, lengths


def counted(flips: bytes, cuts: list[int], order: int) -> tuple[int, int, list[int]]:
    """The same by the counter, the line cut into cells that come in some order."""
    data = np.frombuffer(flips, np.uint8)
    edges = sorted({0, len(flips), *(c for c in cuts if 0 < c < len(flips))})
    cells = list(pairwise(edges))
    counter = BurstCounter()
    for i in np.random.default_rng(order).permutation(len(cells)).tolist():
        start, stop = cells[i]
        places = start + np.flatnonzero(data[start:stop]).astype(np.int64)
        found = cluster(places, np.bitwise_count(data[places]).astype(np.int64))
        counter.add(found, np.array([start]), np.array([stop]))
    counter.finish()
    return counter.burst, counter.scattered, sorted(counter.lengths.tolist())


RUNS = st.lists(
    st.one_of(
        st.tuples(st.just("gap"), st.sampled_from([1, 3, 14, 15, 16, 17, 40])),
        st.tuples(st.just("wrong"), st.integers(1, 40)),
        st.tuples(st.just("every 4th"), st.integers(1, 12)),
        st.tuples(st.just("every 5th"), st.integers(1, 12)),
    ),
    max_size=12,
)


def line(runs: list[tuple[str, int]]) -> bytes:
    parts = {"gap": b"\0", "wrong": b"\x81", "every 4th": b"\x01\0\0\0", "every 5th": b"\0\0\x07\0\0"}
    return b"".join(parts[kind] * count for kind, count in runs)


@given(RUNS, st.lists(st.integers(0, 400), max_size=8), st.integers(0, 99))
def test_against_the_definition(runs: list[tuple[str, int]], cuts: list[int], order: int) -> None:
    flips = line(runs)
    burst, scattered, lengths = classify(flips)
    assert counted(flips, cuts, order) == (burst, scattered, sorted(lengths))


def test_limits_by_hand() -> None:
    assert classify(b"\1" * 31) == (0, 31, [])
    assert classify(b"\1" * 32) == (32, 0, [32])
    quarter = (b"\1\0\0\0" * 9)[:33]  # 9 of 33 are more than a quarter.
    assert counted(quarter, [], 0) == (9, 0, [33])
    exactly = b"\1" * 7 + b"\0" * 15 + b"\0" + b"\1"  # Two stretches, since 16 right bytes divide them.
    assert counted(exactly, [], 0) == (0, 8, [])
    thin = b"\1" * 8 + b"\0" * 12 + b"\0\0\0\1" * 3  # 11 of 32: more than a quarter.
    assert counted(thin, [5, 20], 0)[0] == 11
    sparse = (b"\1" + b"\0" * 3) * 7 + b"\0\0\0\1"  # 8 of 32 are a quarter and not more.
    assert counted(sparse, [], 0) == (0, 8, [])


def test_clusters_are_in_order_and_apart() -> None:
    places = np.array([3, 4, 20, 36, 53, 54], np.int64)
    found = cluster(places, np.ones(6, np.int64))
    assert found.start.tolist() == [3, 53]
    assert found.stop.tolist() == [37, 55]
    assert found.wrong.tolist() == [4, 2]
    assert len(cluster(places[:0], places[:0])) == 0


@given(st.lists(RUNS, min_size=1, max_size=4))
def test_burst_bytes_row_by_row(rows: list[list[tuple[str, int]]]) -> None:
    lines = [line(runs) for runs in rows]
    width = max(8, -8 * (-max(map(len, lines)) // 8))
    flips = np.stack([np.frombuffer(text.ljust(width, b"\0"), np.uint8) for text in lines])
    inside = burst_bytes(flips.shape, Flips.of(flips).clusters)
    for text, marked, row in zip(lines, inside, flips, strict=True):
        _, _, lengths = classify(text)
        assert int(np.bitwise_count(row[marked]).sum()) == classify(text)[0]
        assert int(marked.sum()) == sum(lengths)  # Right bytes inside a burst belong to it.


@given(st.lists(RUNS, min_size=1, max_size=4))
def test_flips_of_rows(rows: list[list[tuple[str, int]]]) -> None:
    """Places, bits and clusters are those of each row alone, wherever the rows begin."""
    lines = [line(runs) for runs in rows]
    width = max(8, -8 * (-max(map(len, lines)) // 8))
    flips = np.stack([np.frombuffer(text.ljust(width, b"\0"), np.uint8) for text in lines])
    starts = 1000 * np.arange(1, len(lines) + 1)
    found = Flips.of(flips).at(starts[:-1])
    expected = [
        (start + place, value.bit_count())
        for start, text in zip(starts[:-1].tolist(), lines, strict=False)
        for place, value in enumerate(text)
        if value
    ]
    assert list(zip(found.places.tolist(), found.bits.tolist(), strict=True)) == expected
    bounds = [places[[0, -1]] + start for start, places in stretches(lines[:-1], starts)]
    assert list(zip(found.clusters.start, found.clusters.stop - 1, strict=True)) == [tuple(b) for b in bounds]
    assert found.clusters.wrong.sum() == len(expected)
    assert found.clusters.bits.sum() == sum(bits for _, bits in expected)


def stretches(lines: list[bytes], starts: np.ndarray) -> list[tuple[int, np.ndarray]]:
    """The wrong places of each line, cut where 16 right bytes or more stand between two of them."""
    found = []
    for start, text in zip(starts.tolist(), lines, strict=False):
        places = np.flatnonzero(np.frombuffer(text, np.uint8))
        cuts = np.flatnonzero(np.diff(places) > 16) + 1
        found += [(start, part) for part in np.split(places, cuts) if len(part)]
    return found
