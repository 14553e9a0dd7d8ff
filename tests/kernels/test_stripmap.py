"""The strip map in every tier that the CPU has, against the definition, `galois` and published code words."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
from guarded import guarded
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import multiply, strip_map

from oakum.algebra.outer import OuterCode
from oakum.errors import UsageError
from oakum.kernels import tiers
from oakum.kernels.stripmap import StripMap

FORCED = os.environ.get(tiers.ENVIRONMENT_VARIABLE)
TIERS = [FORCED] if FORCED else tiers.available_tiers()

QR_DATA = bytes.fromhex("10200C566180EC11EC11EC11EC11EC11")
QR_PARITY = bytes.fromhex("A524D4C1ED36C7872C55")
CCSDS_PARITY = bytes.fromhex("2FBD4FB4748494B9ACD554627212EEB3EBED41191DE1D36320EA49290B25ABCF")


def random(seed: int, *shape: int) -> np.ndarray:
    return np.random.default_rng(seed).integers(0, 256, shape, dtype=np.uint8)


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("field_poly", [0x11D, 0x12D, 0x187])
def test_all_products(tier: str, field_poly: int) -> None:
    """Every byte times every byte, in the fields of QR codes, Data Matrix and CCSDS."""
    everything = np.arange(256, dtype=np.uint8)
    out = np.empty((256, 256), np.uint8)
    StripMap(everything[:, None], field_poly=field_poly, tier=tier).apply(everything[None], out)
    np.testing.assert_array_equal(out, multiply(everything[:, None], everything[None], field_poly))


def test_reference_agrees_with_galois() -> None:
    """The reference that the kernels are held to is itself held to another implementation."""
    galois = pytest.importorskip("galois")
    a, b = random(1, 4, 7), random(2, 7, 50)
    for poly in (0x11D, 0x187):
        field = galois.GF(2**8, irreducible_poly=poly)
        np.testing.assert_array_equal(strip_map(a, b, poly), np.asarray(field(a) @ field(b)))


@pytest.mark.parametrize("tier", TIERS)
def test_qr_code(tier: str) -> None:
    """QR symbol 1-M of "01234567", ISO/IEC 18004 Annex I (seen, computed)."""
    encode = StripMap(OuterCode(26, 16).parity_matrix, tier=tier)
    data = np.frombuffer(QR_DATA, np.uint8)[:, None]
    out = np.empty((10, 1), np.uint8)
    encode.apply(data, out)
    assert out.tobytes() == QR_PARITY


@pytest.mark.parametrize("tier", TIERS)
def test_ccsds_code(tier: str) -> None:
    """RS(255,223) of CCSDS 131.0-B, conventional basis, data 00..DE (a FEC library's output; computed)."""
    code = OuterCode(255, 223, field_poly=0x187, first_root=112, root_spacing=11)
    out = np.empty((32, 1), np.uint8)
    StripMap(code.parity_matrix, field_poly=0x187, tier=tier).apply(
        np.arange(223, dtype=np.uint8)[:, None], out
    )
    assert out.tobytes() == CCSDS_PARITY


@pytest.mark.parametrize("tier", TIERS)
def test_every_length(tier: str) -> None:
    """Lengths 0 to 1024 and round the ends of strips; the bytes beside the rows stay as they are."""
    matrix, source = random(3, 5, 3), random(4, 3, 3200)
    want = strip_map(matrix, source)
    map_ = StripMap(matrix, tier=tier)
    for length in [*range(1025), *range(1085, 1091), 2047, 2048, 2049, 3200]:
        out = np.full((5, length + 64), 0xA5, np.uint8)
        map_.apply(source[:, :length], out[:, 32 : 32 + length])
        np.testing.assert_array_equal(out[:, 32 : 32 + length], want[:, :length])
        assert (out[:, :32] == 0xA5).all() and (out[:, 32 + length :] == 0xA5).all()


@pytest.mark.parametrize("tier", TIERS)
def test_every_offset(tier: str) -> None:
    """Rows that begin at any of 64 offsets, at odd distances from each other."""
    matrix, source = random(5, 2, 4), random(6, 4, 301)
    map_ = StripMap(matrix, tier=tier)
    for offset in range(64):
        part = source[:, offset : offset + 200]
        out = np.zeros((2, 333), np.uint8)[:, 63 - offset : 263 - offset]
        map_.apply(part, out)
        np.testing.assert_array_equal(out, strip_map(matrix, part))


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("before", [False, True])
@pytest.mark.parametrize("length", [1, 15, 16, 31, 63, 64, 65, 100, 1023, 1024, 1025])
def test_touches_nothing_outside(tier: str, before: bool, length: int) -> None:
    """Source and result next to an unreadable page: a byte too far would end the process."""
    source = guarded(3 * length, before=before).reshape(3, length)
    out = guarded(6 * length, before=before).reshape(6, length)
    source[...] = random(7, 3, length)
    matrix = random(8, 6, 3)
    StripMap(matrix, tier=tier).apply(source, out)
    np.testing.assert_array_equal(out, strip_map(matrix, source))


@pytest.mark.parametrize("tier", TIERS)
@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    rows=st.integers(0, 13),
    inputs=st.integers(1, 21),
    length=st.integers(0, 1300),
    cut=st.tuples(st.floats(0, 1), st.floats(0, 1)),
    accumulate=st.booleans(),
    reverse=st.booleans(),
)
def test_any_shape(
    tier: str, rows: int, inputs: int, length: int, cut: tuple[float, float], accumulate: bool, reverse: bool
) -> None:
    """Any matrix, any run of its inputs, added to what is there or not, rows in either order in memory."""
    first, last = sorted(int(c * inputs) for c in cut)
    matrix, source = random(9, rows, inputs), random(10, last - first, length)
    out = before = random(11, rows, length)
    out = before[::-1].copy()[::-1] if reverse else before.copy()
    StripMap(matrix, tier=tier).apply(source, out, first=first, accumulate=accumulate)
    want = strip_map(matrix[:, first:last], source)
    np.testing.assert_array_equal(out, want ^ before if accumulate else want)


@pytest.mark.parametrize("tier", TIERS)
def test_syndromes_of_code_words_are_zero(tier: str) -> None:
    """H times (data, parity): the whole (255,223) code, in two parts by accumulation."""
    code = OuterCode(255, 223)
    data, parity, syndromes = (
        random(12, 223, 130),
        np.empty((32, 130), np.uint8),
        np.empty((32, 130), np.uint8),
    )
    StripMap(code.parity_matrix, tier=tier).apply(data, parity)
    check = StripMap(code.check_matrix, tier=tier)
    check.apply(data, syndromes)
    assert syndromes.any()
    check.apply(parity, syndromes, first=223, accumulate=True)
    assert not syndromes.any()


def test_threads_on_disjoint_columns() -> None:
    matrix, source = random(13, 8, 20), random(14, 20, 20_000)
    map_, out = StripMap(matrix), np.zeros((8, 20_000), np.uint8)

    def work(start: int) -> None:
        map_.apply(source[:, start : start + 777], out[:, start : start + 777])

    with ThreadPoolExecutor(4) as pool:
        list(pool.map(work, range(0, 20_000, 777)))
    np.testing.assert_array_equal(out, strip_map(matrix, source))


def test_refuses_what_a_kernel_could_not_bear() -> None:
    map_ = StripMap(random(15, 2, 3))
    good, out = np.zeros((3, 8), np.uint8), np.zeros((2, 8), np.uint8)
    frozen = out.copy()
    frozen.flags.writeable = False
    for source, target, first in [
        (good[:, ::2], out[:, :4], 0),
        (good.astype(np.int8), out, 0),
        (good, out[:1], 0),
        (good, out[:, :7], 0),
        (good, frozen, 0),
        (good, out, 1),
        (good, out, -1),
        (good[0], out, 0),
        (np.asfortranarray(good), out, 0),
    ]:
        with pytest.raises(ValueError):
            map_.apply(source, target, first=first)
    with pytest.raises(ValueError):
        StripMap(random(16, 4))
    with pytest.raises(ValueError):
        StripMap(np.zeros((2, 2)))


def test_unknown_tier() -> None:
    with pytest.raises(UsageError, match="shuffle|portable"):
        StripMap(random(17, 2, 2), tier="abacus")
