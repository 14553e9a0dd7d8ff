"""The pattern of errors: the same from cells in any order, over ends of cells and members, in bounds."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator

import numpy as np
import pytest
from support import content, with_flips

from oakum import conversions, patterns
from oakum.causes import find_causes
from oakum.patterns import FileFacts, Pattern, PatternCollector

Cell = tuple[str, int, int, int, np.ndarray, np.ndarray | None]


def cells(files: dict[str, tuple[bytes, bytes]], *, lost: bool = False) -> Iterator[Cell]:
    """The wrong cells of a stream of files: cells are cut from the stream, and pieces from the members."""
    start = 0
    for name, (before, after) in files.items():
        right, received = np.frombuffer(before, np.uint8), np.frombuffer(after, np.uint8)
        at = 0
        while at < len(right):
            stop = min(len(right), at + 4096 - (start + at) % 4096)
            if not np.array_equal(right[at:stop], received[at:stop]):
                yield name, len(right), start, at, received[at:stop], None if lost else right[at:stop]
            at = stop
        start += len(right)


def collect(pieces: list[Cell]) -> Pattern:
    collector = PatternCollector()
    for piece in pieces:
        collector.add(*piece)
    return collector.finish(10**6)


def damaged_set() -> dict[str, tuple[bytes, bytes]]:
    """Three files; the second one is overwritten from its first byte to its last, the others near it."""
    a, b, c = content(10_001), content(9_000, 2), content(20_000, 3)
    wrong_a = with_flips(a, 40)[:-500] + content(500, 8)
    return {
        "a": (a, wrong_a),
        "b": (b, content(9_000, 9)),
        "c": (c, content(700, 7) + with_flips(c, 30)[700:]),
    }


def assert_same(one: Pattern, other: Pattern) -> None:
    for name in ("owner", "offset", "received", "right", "positions"):
        assert np.array_equal(getattr(one, name), getattr(other, name)), name
    for name in ("owner", "start", "stop", "wrong", "bits", "zeros", "ones", "high", "unknown", "positions"):
        assert np.array_equal(getattr(one.runs, name), getattr(other.runs, name)), name


def test_runs_end_where_a_member_ends() -> None:
    pattern = collect(list(cells(damaged_set())))
    found = zip(pattern.runs.owner, pattern.runs.start, pattern.runs.stop, strict=True)
    runs = [(int(owner), int(start), int(stop)) for owner, start, stop in found]
    assert [m.path for m in pattern.members] == ["a", "b", "c"]
    assert [o for o, _, _ in runs] == [0, 1, 2]
    assert runs[1] == (1, 0, 9000)
    assert runs[0][2] == 10_001 and runs[2][1] == 0


@pytest.mark.parametrize("seed", range(5))
def test_cells_may_come_in_any_order(seed: int) -> None:
    pieces = list(cells(damaged_set()))
    shuffled = [pieces[i] for i in np.random.default_rng(seed).permutation(len(pieces))]
    assert_same(collect(pieces), collect(shuffled))


def test_joining_early_changes_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    pieces = list(cells(damaged_set()))
    expected = collect(pieces)
    monkeypatch.setattr(patterns, "MOST_PIECES", 1)
    for order in (pieces, pieces[::-1], pieces[::2] + pieces[1::2]):
        assert_same(expected, collect(order))


def test_single_bytes_are_bounded_and_the_rest_is_counted(monkeypatch: pytest.MonkeyPatch) -> None:
    data = content(100_000)
    damaged = with_flips(data, 500)
    monkeypatch.setattr(patterns, "MOST_PLACES", 100)
    pattern = collect(list(cells({"a": (data, damaged)})))
    wrong = sum(x != y for x, y in zip(data, damaged, strict=True))
    assert (len(pattern.offset), pattern.omitted) == (100, wrong - 100)
    assert int(pattern.positions.sum()) == 500
    assert find_causes(pattern)


def test_what_could_not_be_corrected_is_unknown() -> None:
    data = content(50_000)
    pattern = collect(list(cells({"a": (data, with_flips(data, 300))}, lost=True)))
    assert len(pattern.offset) == 0 and int(pattern.positions.sum()) == 0
    assert int(pattern.runs.unknown.sum()) == int((pattern.runs.stop - pattern.runs.start).sum()) > 0


def test_files_in_which_no_byte_is_wrong_are_added() -> None:
    pattern = collect([]).with_files([FileFacts("x", 100, 60)])
    (found,) = find_causes(pattern)
    assert "byte 60 of 100" in found.evidence and found.members == ("x",)


# -- line ends -----------------------------------------------------------------------------------------

TEXT = b"one\ntwo\n\nthree\rfour\n"
PAIRS = TEXT.replace(b"\n", b"\r\n")


@pytest.mark.parametrize("size", [1, 2, 3, 100])
def test_conversions_are_undone_whatever_the_chunks(size: int) -> None:
    def chunks(data: bytes) -> list[bytes]:
        return [data[i : i + size] for i in range(0, len(data), size)]

    said = conversions.undone(chunks(PAIRS), len(TEXT), hashlib.sha256(TEXT).digest())
    assert "SHA-256" in said and "4 pairs" in said
    pairs_only = PAIRS.replace(b"three\r", b"three")
    feeds_only = pairs_only.replace(b"\r\n", b"\n")
    said = conversions.undone(chunks(feeds_only), len(pairs_only), hashlib.sha256(pairs_only).digest())
    assert "SHA-256" in said and "4 LF" in said
    assert conversions.undone(chunks(TEXT), len(TEXT), hashlib.sha256(TEXT).digest()) == ""
    assert conversions.undone(chunks(TEXT), len(TEXT) + 1, bytes(32)) == ""


def test_counts_alone_are_weaker_evidence() -> None:
    """One more byte is wrong, so that no digest agrees; the lengths still fit."""
    text = TEXT.replace(b"\r", b"")
    pairs = text.replace(b"\n", b"\r\n")
    for after, before in ((pairs, text), (text, pairs)):
        said = conversions.undone(
            [after.replace(b"two", b"tvo")], len(before), hashlib.sha256(before).digest()
        )
        assert "as many line ends" in said
