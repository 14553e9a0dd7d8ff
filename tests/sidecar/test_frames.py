"""Frames: read as they are when whole, corrected up to the Singleton bound, honest beyond it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from support import content

from oakum.sidecar.frames import check_rows, correct, frame_code, payload, read_plain, seal
from oakum.sidecar.layout import FRAME_CONTENT, FRAME_WIDTH, Frame, Track

IDENTITY = b"i" * 16
WIDTHS = (1, 3, 16, 17, 40)


def coded(width: int, track: Track = Track.DATA) -> tuple[Frame, bytes, np.ndarray]:
    """A frame full to the last byte, its content, and its rows uint8[240, width]."""
    size = 120 * width - 32
    frame = Frame(track, 4, size, width, 0)
    data = content(size)
    rows = payload(frame, data, IDENTITY)
    return frame, data, np.concatenate([rows, check_rows(rows)])


def noise(rows: np.ndarray, chosen: np.ndarray, seed: int) -> np.ndarray:
    """The rows with every byte of the chosen ones wrong."""
    hurt = rows.copy()
    hurt[chosen] ^= np.random.default_rng(seed).integers(1, 256, hurt[chosen].shape, np.uint8)
    return hurt


def test_the_code_is_mds() -> None:
    """Singleton: RS(240,120) has distance 121, so 120 erasures or 60 errors."""
    assert (frame_code().n, frame_code().k, frame_code().distance) == (240, 120, 121)
    assert FRAME_CONTENT == 120 * FRAME_WIDTH - 32


@pytest.mark.parametrize("width", WIDTHS)
def test_check_rows_are_those_of_an_independent_encoder(width: int) -> None:
    import reedsolo

    _, _, rows = coded(width)
    codec = reedsolo.RSCodec(120, nsize=255, fcr=0, prim=0x11D, generator=2, c_exp=8)
    for column in range(width):
        assert bytes(codec.encode(rows[:120, column].tobytes())) == rows[:, column].tobytes()


@pytest.mark.parametrize("width", WIDTHS)
def test_a_whole_frame_is_read_without_decoding(width: int) -> None:
    frame, data, rows = coded(width)
    found = read_plain(frame, rows[:120], IDENTITY)
    assert found is not None
    assert (found.data, found.known) == (data, None)
    for place in range(0, 120 * width, 7):
        hurt = rows[:120].copy()
        hurt.reshape(-1)[place] ^= 1
        assert read_plain(frame, hurt, IDENTITY) is None


def test_a_frame_of_another_place_or_sidecar_is_not_taken() -> None:
    frame, _, rows = coded(5)
    assert read_plain(frame, rows[:120], b"j" * 16) is None
    assert read_plain(Frame(Track.DATA, 5, frame.content, 5, 0), rows[:120], IDENTITY) is None
    assert read_plain(Frame(Track.INNER, 4, frame.content, 5, 0), rows[:120], IDENTITY) is None
    for here, identity in ((frame, b"j" * 16), (replace(frame, number=5), IDENTITY),
                           (replace(frame, track=Track.INNER), IDENTITY)):  # fmt: skip
        other = correct(here, rows, None, identity)
        assert other.known is not None
        assert not other.known.any()


@pytest.mark.parametrize("seed", range(3))
def test_60_wrong_rows_or_120_lost_ones(seed: int) -> None:
    frame, data, rows = coded(17)
    rng = np.random.default_rng(seed)
    wrong = rng.choice(240, 60, replace=False)
    found = correct(frame, noise(rows, wrong, seed), None, IDENTITY)
    assert (found.data, found.known) == (data, None)
    for lost_rows, wrong_rows in ((120, 0), (80, 20), (118, 1)):
        chosen = rng.choice(240, lost_rows + wrong_rows, replace=False)
        hurt = noise(rows, chosen, seed)
        erased = np.zeros_like(rows)
        erased[chosen[:lost_rows]] = 1
        found = correct(frame, hurt, erased, IDENTITY)
        assert (found.data, found.known) == (data, None)


@pytest.mark.parametrize(("lost", "wrong"), [(0, 61), (121, 0), (80, 21), (120, 1), (116, 3), (119, 1)])
def test_beyond_that_nothing_wrong_is_called_known(lost: int, wrong: int) -> None:
    frame, data, rows = coded(40)
    chosen = np.random.default_rng(lost + wrong).choice(240, lost + wrong, replace=False)
    hurt = noise(rows, chosen, 9)
    erased = np.zeros_like(rows)
    erased[chosen[:lost]] = 1
    found = correct(frame, hurt, erased if lost else None, IDENTITY)
    assert found.known is not None
    difference = np.frombuffer(found.data, np.uint8) != np.frombuffer(data, np.uint8)
    assert not (difference & found.known).any()


@pytest.mark.parametrize("first", [20, 32])
def test_columns_are_solved_one_by_one(first: int) -> None:
    """61 wrong rows in half of the columns: the other half is still known.

    Bytes 8 to 31 say whose frame it is, and which. Where all of them can be read, and are others, nothing is
    known.
    """
    frame, data, rows = coded(40)
    hurt = rows.copy()
    hurt[100:161, first:] ^= 0x5A
    found = correct(frame, hurt, None, IDENTITY)
    assert found.known is not None
    known = np.concatenate([np.zeros(32, bool), found.known]).reshape(120, 40)
    assert known[1:, :first].all()
    assert not known[:, first:].any()
    assert found.data[8 : first - 32 + 40] == data[8 : first - 32 + 40]
    foreign = correct(frame, hurt, None, b"j" * 16)
    assert foreign.known is not None
    assert foreign.known.any() == (first == 20)


def test_what_is_lost_and_what_is_wrong_are_weighed_against_the_spare_symbols() -> None:
    """120 check symbols, 4 of them to spare: 2 * wrong + lost may be 116 where the checksum disagrees."""
    frame, _, rows = coded(40)
    for lost, wrong, expected in ((116, 0, True), (117, 0, False), (0, 58, True), (0, 59, False),
                                  (76, 20, True), (77, 20, False)):  # fmt: skip
        hurt, erased = rows.copy(), np.zeros_like(rows)
        hurt[60 : 60 + lost + wrong, 25:30] ^= 0x5A
        erased[60 : 60 + lost, 25:30] = 1
        hurt[100:170, 35:] ^= 0x5A
        found = correct(frame, hurt, erased if lost else None, IDENTITY)
        assert found.known is not None
        known = np.concatenate([np.zeros(32, bool), found.known]).reshape(120, 40)
        assert known[1:, :25].all()
        assert known[1:, 25:30].all() == known[1:, 25:30].any() == expected, (lost, wrong)


def test_a_seal_sees_every_check_byte() -> None:
    _, _, rows = coded(3)
    expected = seal(rows[120:])
    for place in range(360):
        hurt = rows[120:].copy()
        hurt.reshape(-1)[place] ^= 0x80
        assert seal(hurt) != expected
