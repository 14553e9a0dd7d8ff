"""The member table: round trip, and nothing that a writer would not have written gets through."""

from __future__ import annotations

import struct

import pytest
from hypothesis import given
from hypothesis import strategies as st

from oakum.errors import FormatError
from oakum.sidecar.table import MAX_PATH, Kind, Piece, check_path, packed_length, unpack_table

NAMES = st.lists(
    st.binary(min_size=1, max_size=40).filter(lambda b: b not in (b".", b"..") and not {0, 47} & set(b)),
    min_size=1,
    max_size=4,
).map(b"/".join)


def file(path: bytes, length: int = 0, **changes: object) -> Piece:
    made = Piece(Kind.FILE, path, 0o644, 10**18, length, 0, length, True, b"d" * 32)
    return made._replace(**changes)  # type: ignore[arg-type]


def packed(*pieces: Piece) -> bytes:
    return b"".join(p.pack() for p in pieces)


@given(st.lists(st.tuples(NAMES, st.integers(0, 1 << 40), st.integers(-(10**18), 10**19 // 2)),
                unique_by=lambda t: t[0], max_size=8))  # fmt: skip
def test_round_trip(members: list[tuple[bytes, int, int]]) -> None:
    pieces = []
    for number, (path, length, modified) in enumerate(members):
        if number % 3 == 2:
            pieces.append(Piece(Kind.LINK, path, 0o777, modified, 0, 0, 0, True, bytes(32), b"to/\xff\n"))
        elif number % 3 == 1:
            pieces.append(Piece(Kind.FOLDER, path, 0o2750, modified, 0, 0, 0, True))
        else:
            pieces.append(file(path, length, modified_ns=modified))
    assert unpack_table(packed(*pieces), len(pieces), sum(p.length for p in pieces)) == tuple(pieces)


def test_lengths_of_entries() -> None:
    """76 bytes, the path and the target of a link."""
    link = Piece(Kind.LINK, b"here", 0o777, 0, 0, 0, 0, True, bytes(32), b"there/")
    assert packed_length(link.path, link.target) == len(link.pack()) == 76 + 4 + 6
    assert packed_length(b"abc") == len(file(b"abc").pack()) == 79


def test_the_digest_may_be_given_when_packing() -> None:
    assert file(b"a").pack(b"e" * 32) == file(b"a", digest=b"e" * 32).pack()


def test_an_entry_of_an_unknown_kind_or_length() -> None:
    table = packed(file(b"a", 5))
    for place, value in ((2, 0), (2, 4), (0, 78), (0, 76)):
        wrong = bytearray(table + b"x")
        wrong[place] = value
        with pytest.raises(FormatError, match="contradicts itself"):
            unpack_table(bytes(wrong), 1, 5)


def test_the_largest_member() -> None:
    piece = file(b"a", 5, offset=(1 << 60) - 5, size=1 << 60)
    assert unpack_table(packed(piece), 1, 5) == (piece,)


def test_bits_beyond_the_permissions_are_dropped() -> None:
    (piece,) = unpack_table(packed(file(b"a", 5, mode=0o100644)), 1, 5)
    assert piece.mode == 0o644


def test_pieces_of_members_that_go_over_windows() -> None:
    pieces = (file(b"a", 10, offset=90, size=100), file(b"b", 5), file(b"c", 7, size=50, ends=False))
    assert unpack_table(packed(*pieces), 3, 22) == pieces


@pytest.mark.parametrize(
    "path",
    [b"", b"/", b"/etc/passwd", b"..", b"../x", b"a/../../x", b"a/..", b".", b"./a", b"a/./b", b"a//b", b"a/",
     b"a\0b", b"x" * 256, b"/".join([b"y" * 255] * 129)],
)  # fmt: skip
def test_paths_that_lead_elsewhere_are_refused(path: bytes) -> None:
    with pytest.raises(FormatError, match="names a member in a way"):
        check_path(path)
    with pytest.raises(FormatError):
        unpack_table(packed(file(path[:40_000])), 1, 0)


def test_longest_path() -> None:
    check_path(b"/".join([b"y" * 255] * 128))
    assert len(b"/".join([b"y" * 255] * 128)) <= MAX_PATH


@pytest.mark.parametrize(
    "pieces",
    [
        (file(b"a", 5, size=4),),
        (file(b"a", 5, offset=1, size=5),),
        (file(b"a", 5, size=1 << 61),),
        (file(b"a", 5, size=(1 << 60) + 1, ends=False),),
        (file(b"a", 5, size=4, ends=False),),
        (file(b"a", 5, offset=3, size=7, ends=False),),
        (file(b"a", 5, size=9),),  # It is said to end here, and does not.
        (file(b"a", 5), file(b"a", 0)),
        (file(b"a", 2, size=9, ends=False), file(b"b", 3)),
        (file(b"a", 2), file(b"b", 3, offset=3, size=6)),
        (Piece(Kind.FOLDER, b"a", 0o755, 0, 5, 0, 5, True),),
        (Piece(Kind.FOLDER, b"a", 0o755, 0, 5, 0, 0, False), file(b"b", 5)),
        (Piece(Kind.LINK, b"a", 0o755, 0, 1, 0, 0, False), file(b"b", 5)),
        (file(b"a", 4),),
        (file(b"a", 6),),
        (),
    ],
)
def test_impossible_members_are_refused(pieces: tuple[Piece, ...]) -> None:
    with pytest.raises(FormatError):
        unpack_table(packed(*pieces), len(pieces), 5)


def test_lengths_that_do_not_fit_are_refused() -> None:
    table = packed(file(b"a", 5))
    for entries, data in [
        (0, table),
        (2, table),
        (1, table[:-1]),
        (1, table + b"x"),
        (1, table[:10]),
        (1, b""),
    ]:
        with pytest.raises(FormatError):
            unpack_table(data, entries, 5)


def test_huge_lengths_do_not_wrap_round() -> None:
    table = bytearray(packed(file(b"a", 5)))
    struct.pack_into("<QQQ", table, 16, 5, (1 << 64) - 1, 6)
    with pytest.raises(FormatError, match="impossible size"):
        unpack_table(bytes(table), 1, 5)


@given(st.integers(0, 75), st.integers(1, 255))
def test_every_wrong_byte_is_read_or_refused(place: int, change: int) -> None:
    """Nothing but FormatError ever comes out, and what is let through keeps the rules."""
    table = bytearray(packed(file(b"ab/c", 5), file(b"d", 3)))
    table[place] ^= change
    try:
        pieces = unpack_table(bytes(table), 2, 8)
    except FormatError:
        return
    assert sum(p.length for p in pieces) == 8
    for piece in pieces:
        assert 0 <= piece.mode <= 0o7777
        assert piece.offset + piece.length <= piece.size
