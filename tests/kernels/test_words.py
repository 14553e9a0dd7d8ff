"""The word codec in every tier that the CPU has, against the definitions and brute force."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from itertools import combinations

import numpy as np
import pytest
from guarded import guarded
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import FLAGGED, cell_parity, correct_cell, word_places

from oakum.algebra.inner import InnerCode
from oakum.kernels import tiers
from oakum.kernels.words import WordCodec

FORCED = os.environ.get(tiers.ENVIRONMENT_VARIABLE)
TIERS = [FORCED] if FORCED else tiers.available_tiers()
CODES = InnerCode.known()
BY_NAME = pytest.mark.parametrize("inner", CODES, ids=lambda inner: inner.notation)
ALL_TIERS = pytest.mark.parametrize("tier", TIERS)


def random(seed: int, *shape: int) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 256, shape, dtype=np.uint8)


def single_words(
    inner: InnerCode, tier: str, flipped: list[tuple[int, ...]]
) -> tuple[np.ndarray, np.ndarray]:
    """Decode one word for each set of flips in the zero word: what is left of it, and its status."""
    bits = np.zeros((len(flipped), inner.n), np.uint8)
    for row, places in zip(bits, flipped, strict=True):
        row[list(places)] = 1
    received = np.packbits(bits, axis=1, bitorder="little")
    cells, parity = received[:, : inner.m].copy(), received[:, inner.m :].copy()
    status = np.empty((len(flipped), 1), np.uint8)
    WordCodec(inner, tier).correct(cells, parity, np.zeros(len(flipped), np.int64), status)
    return np.hstack([cells, parity]), status[:, 0]


@ALL_TIERS
@BY_NAME
def test_parity_of_every_cell_length(inner: InnerCode, tier: str) -> None:
    """One cell of 1 to 150 bytes and of some lengths round 4096, with any stagger."""
    codec = WordCodec(inner, tier)
    data = random(1, 4096)
    for length in [*range(1, 150), 512, 1000, 4095, 4096]:
        stagger = length * 7 % 255
        out = np.full(codec.group_size(length) + 8, 0xA5, np.uint8)
        codec.parity(data[:length], stagger, out)
        np.testing.assert_array_equal(out[:-8], cell_parity(inner, data[:length], stagger))
        assert (out[-8:] == 0xA5).all()


@ALL_TIERS
@BY_NAME
def test_cells_of_a_strip(inner: InnerCode, tier: str) -> None:
    """Many cells, the last one short, each group of parity at a multiple of `step`."""
    codec = WordCodec(inner, tier)
    data = random(2, 5 * 128 + 77)
    for step in (None, 40):
        distance = codec.group_size(128) if step is None else step
        out = np.full(5 * distance + codec.group_size(77), 0xA5, np.uint8)
        codec.parity(data, 200, out, cell=128, step=step)
        want = np.full_like(out, 0xA5)
        for cell in range(6):
            group = cell_parity(inner, data[cell * 128 : (cell + 1) * 128], 200)
            want[cell * distance : cell * distance + len(group)] = group
        np.testing.assert_array_equal(out, want)


@ALL_TIERS
@BY_NAME
@pytest.mark.parametrize("before", [False, True])
def test_touches_nothing_outside(inner: InnerCode, tier: str, before: bool) -> None:
    codec = WordCodec(inner, tier)
    for length in (1, 13, 29, 30, 31, 480, 1000, 4096):
        data = guarded(length, before=before)
        data[...] = random(3, length)
        out = guarded(codec.group_size(length), before=before)
        codec.parity(data, 11, out)
        np.testing.assert_array_equal(out, cell_parity(inner, data, 11))


@ALL_TIERS
def test_every_offset(tier: str) -> None:
    codec = WordCodec(CODES[0], tier)
    data, want = random(4, 200 + 63), np.empty(codec.group_size(200), np.uint8)
    for offset in range(64):
        out = np.empty(len(want) + 64, np.uint8)[63 - offset : 63 - offset + len(want)]
        codec.parity(data[offset : offset + 200], 3, out)
        np.testing.assert_array_equal(out, cell_parity(CODES[0], data[offset : offset + 200], 3))


@ALL_TIERS
@BY_NAME
def test_up_to_t_flips_anywhere_are_corrected(inner: InnerCode, tier: str) -> None:
    """Every set of one or two flips in a whole word, and a seeded choice of sets of three."""
    for count in range(inner.t + 1):
        flipped = list(combinations(range(inner.n), count))
        chosen = np.random.default_rng(5).permutation(len(flipped))[:9_000]
        left, status = single_words(inner, tier, [flipped[i] for i in chosen])
        assert not left.any()
        assert (status == count).all()


@ALL_TIERS
@BY_NAME
def test_half_the_distance_is_flagged(inner: InnerCode, tier: str) -> None:
    """t + 1 = d / 2 flips are never nearer to another code word: always flagged, bytes as received."""
    rng = np.random.default_rng(6)
    flipped = [tuple(rng.choice(inner.n, inner.t + 1, replace=False)) for _ in range(5_000)]
    left, status = single_words(inner, tier, flipped)
    assert (status == FLAGGED).all()
    assert (np.bitwise_count(left).sum(axis=1) == inner.t + 1).all()


@pytest.mark.parametrize(("inner", "share"), [(CODES[0], 0.504), (CODES[1], 0.126)], ids=["EH", "EB"])
def test_share_of_random_words_that_are_accepted(inner: InnerCode, share: float) -> None:
    """[128,120,4] 50.4 %, [128,112,6] with 16 check bits 12.6 % (computed).

    That is the sum of C(128, e) for e <= t over 2^(8p).
    """
    rows = 200_000
    status = np.empty((rows, 1), np.uint8)
    cells, parity = random(7, rows, inner.m), random(8, rows, inner.p)
    WordCodec(inner).correct(cells, parity, np.zeros(rows, np.int64), status)
    accepted = np.mean(status != FLAGGED)
    assert abs(accepted - share) < 5e-4 + 4 * np.sqrt(share * (1 - share) / rows)


@ALL_TIERS
@BY_NAME
@settings(max_examples=25, deadline=None, derandomize=True)
@given(
    width=st.one_of(st.integers(1, 64), st.integers(65, 400)),
    rate=st.sampled_from([0.0, 0.005, 0.02, 0.06]),
    pinned_share=st.sampled_from([None, 0.0, 0.1, 0.9]),
    seed=st.integers(0, 2**32 - 1),
)
def test_any_cells(
    inner: InnerCode, tier: str, width: int, rate: float, pinned_share: float | None, seed: int
) -> None:
    """Cells of any width (shortened words, no stagger below 2m), random flips, pinned bytes or none."""
    rng = np.random.default_rng(seed)
    codec = WordCodec(inner, tier)
    rows, size = 3, codec.group_size(width)
    staggers = rng.integers(0, 255, rows)
    right = rng.integers(0, 256, (rows, width), dtype=np.uint8)
    right_parity = np.stack([cell_parity(inner, row, s) for row, s in zip(right, staggers, strict=True)])
    noise = np.packbits(rng.random((rows, 8 * (width + size))) < rate, axis=1)
    cells, parity = right ^ noise[:, :width], right_parity ^ noise[:, width:]
    pinned = None
    if pinned_share is not None:
        pinned = (rng.random((rows, width)) < pinned_share).astype(np.uint8) * np.uint8(3)
    want, want_parity = cells.copy(), parity.copy()
    want_status = [
        correct_cell(inner, want[r], want_parity[r], int(staggers[r]), None if pinned is None else pinned[r])
        for r in range(rows)
    ]
    status = np.empty((rows, codec.words(width)), np.uint8)
    codec.correct(cells, parity, staggers, status, pinned=pinned)
    np.testing.assert_array_equal(status, want_status)
    np.testing.assert_array_equal(cells, want)
    np.testing.assert_array_equal(parity, want_parity)


def test_rows_apart_in_memory() -> None:
    """Cells and parity as slices of larger arrays, pinned bytes in an array that cannot be written."""
    inner = CODES[1]
    codec = WordCodec(inner)
    right = random(9, 4, 300)
    parity = np.stack([cell_parity(inner, row, i) for i, row in enumerate(right)])
    around = np.zeros((4, 400), np.uint8)
    cells = around[:, 50:350]
    cells[...] = right
    cells[2, 17] ^= 0x21
    status = np.zeros((4, 100), np.uint8)[:, 3 : 3 + codec.words(300)]
    pinned = np.zeros((4, 300), np.uint8)
    pinned.flags.writeable = False
    codec.correct(cells, parity, range(4), status, pinned=pinned)
    np.testing.assert_array_equal(cells, right)
    assert status.sum() == 2 and not around[:, :50].any() and not around[:, 350:].any()


@BY_NAME
@pytest.mark.parametrize("width", [1, 20, 31, 100, 4096])
def test_spread(inner: InnerCode, width: int) -> None:
    codec = WordCodec(inner)
    staggers = [0, 1, 14, 200]
    status = random(10, 4, codec.words(width))
    spread = codec.spread(status, staggers, width)
    for row, stagger in enumerate(staggers):
        for word, places in enumerate(word_places(width, inner.m, stagger)):
            assert (spread[row, places] == status[row, word]).all()


def test_without_an_inner_code() -> None:
    codec = WordCodec(InnerCode.none())
    cells = random(11, 3, 50)
    before, status, nothing = cells.copy(), np.empty((3, 0), np.uint8), np.empty((3, 0), np.uint8)
    assert codec.group_size(4096) == 0 and codec.words(4096) == 0
    codec.parity(cells[0], 5, nothing[0])
    codec.correct(cells, nothing, range(3), status)
    np.testing.assert_array_equal(cells, before)
    assert not codec.spread(status, range(3), 50).any()


def test_threads() -> None:
    codec = WordCodec(CODES[0])
    data = random(12, 40, 8192)
    size = codec.group_size(4096)
    out = np.zeros((40, 2 * size), np.uint8)
    with ThreadPoolExecutor(4) as pool:
        list(pool.map(lambda i: codec.parity(data[i], i, out[i]), range(40)))
    for i in (0, 17, 39):
        np.testing.assert_array_equal(out[i, size:], cell_parity(CODES[0], data[i, 4096:], i))


def test_refuses_what_a_kernel_could_not_bear() -> None:
    codec = WordCodec(CODES[0])
    data, out = np.zeros(100, np.uint8), np.zeros(7, np.uint8)
    for arguments in [
        (data, 0, out[:6]),
        (data, -1, out),
        (data[::2], 0, out),
        (data.astype(np.int16), 0, out),
        (data[None], 0, out),
    ]:
        with pytest.raises(ValueError):
            codec.parity(*arguments)
    for options in ({"cell": 30, "step": 1}, {"cell": 0}):
        with pytest.raises(ValueError):
            codec.parity(data, 0, np.zeros(100, np.uint8), **options)
    cells, parity, status = (
        np.zeros((2, 100), np.uint8),
        np.zeros((2, 7), np.uint8),
        np.zeros((2, 7), np.uint8),
    )
    for broken in [
        (cells, parity[:, :6], range(2), status),
        (cells, parity, range(3), status),
        (cells, parity, range(2), status[:1]),
        (cells[0], parity, range(2), status),
        (cells.astype(np.int8), parity, range(2), status),
    ]:
        with pytest.raises(ValueError):
            codec.correct(*broken)
