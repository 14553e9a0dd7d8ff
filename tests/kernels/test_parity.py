"""Parity and syndromes by moments: against published codewords, `galois`, `reedsolo` and the definition."""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from guarded import guarded
from hypothesis import given, settings
from hypothesis import strategies as st
from reference import strip_map
from tier_runs import ON_X86, gfni_environment, run_tests

from oakum.algebra.field import Field
from oakum.algebra.outer import OuterCode
from oakum.errors import UsageError
from oakum.kernels import parity, tiers
from oakum.kernels.arrays import Arrays
from oakum.kernels.parity import ParityEncoder

FORCED = os.environ.get(tiers.ENVIRONMENT_VARIABLE)
TIERS = [FORCED] if FORCED else list(tiers.available_tiers())

SHELF = OuterCode(255, 223)
DVB = OuterCode(204, 188)
OTHER_FIELD = OuterCode(251, 200, field_poly=0x187, root_spacing=11)
WIDE = OuterCode(255, 157)
BY_MOMENTS = [SHELF, OuterCode(255, 239), OuterCode(255, 207), DVB, OTHER_FIELD, WIDE]
CCSDS = OuterCode(255, 223, field_poly=0x187, first_root=112, root_spacing=11)
DENSE = [OuterCode(26, 16), CCSDS, OuterCode(255, 254), OuterCode(60, 28), OuterCode(255, 100)]

Bytes = np.ndarray


def random(seed: int, *shape: int) -> Bytes:
    return np.random.default_rng(seed).integers(0, 256, shape, dtype=np.uint8)


@cache
def encoder(outer: OuterCode, tier: str | None = None) -> ParityEncoder:
    made = ParityEncoder(outer, tier)
    made.prepare()
    return made


def parity_of(source: Bytes, outer: OuterCode, tier: str | None = None) -> Bytes:
    out = np.empty((outer.r, source.shape[1]), np.uint8)
    encoder(outer, tier).apply(source, out)
    return out


@cache
def sample(outer: OuterCode, columns: int = 700) -> tuple[Bytes, Bytes]:
    """Data symbols, and their parity from the definition."""
    data = random(1, outer.k, columns)
    return data, strip_map(outer.parity_matrix, data, outer.field_poly)


# ---- the polynomials


@pytest.mark.parametrize("field_poly", [0x11D, 0x187])
def test_subspace_polynomials(field_poly: int) -> None:
    """s_i is the product of x + w over all w of W_i (Lin, Chung and Han 2014; memory), scaled to 1 at 2^i."""
    field = Field(field_poly)
    for i, values in enumerate(parity.subspace_polynomials(field)):
        x = np.arange(256, dtype=np.uint8)
        factors = np.ones(256, np.uint8)
        for w in range(1 << i):
            factors = field.multiply(factors, x ^ np.uint8(w))
        np.testing.assert_array_equal(field.multiply(values, factors[1 << i]), factors)


def test_galois_finds_every_degree() -> None:
    """P_j has degree j: by interpolation, with another implementation of the field."""
    galois = pytest.importorskip("galois")
    field = galois.GF(2**8, irreducible_poly=0x11D)
    values = parity.basis_values(Field(0x11D), 40)
    for j in [*range(9), 31, 39]:
        x = np.arange(100, 142, dtype=np.uint8)
        assert galois.lagrange_poly(field(x), field(values[j, x])).degree == j


# ---- right answers


def test_which_codes_go_by_moments() -> None:
    """The tests below are about what they say, on CPUs that have the tiers."""
    for tier in TIERS:
        for outer in BY_MOMENTS:
            assert (encoder(outer, tier).transform is None) == (tier == "portable")
        for outer in DENSE:
            assert encoder(outer, tier).transform is None


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("outer", [*BY_MOMENTS, *DENSE], ids=str)
def test_parity_as_defined(outer: OuterCode, tier: str) -> None:
    data, parity_ = sample(outer)
    np.testing.assert_array_equal(parity_of(data, outer, tier), parity_)


@pytest.mark.parametrize("tier", TIERS)
def test_galois_agrees(tier: str) -> None:
    galois = pytest.importorskip("galois")
    data = random(2, 223, 40)
    code = galois.ReedSolomon(255, 223, c=0)
    theirs = code.encode(code.field(data.T.copy()), output="parity")
    np.testing.assert_array_equal(parity_of(data, SHELF, tier), np.asarray(theirs).T)


@pytest.mark.parametrize("tier", TIERS)
def test_dvb_code_of_reedsolo(tier: str) -> None:
    """RS(204,188), 0x11D, first root alpha^0: ETSI EN 300 421 (roots seen), by another library's encoder."""
    reedsolo = pytest.importorskip("reedsolo")
    data = random(3, 188, 33)
    codec = reedsolo.RSCodec(16, nsize=255, fcr=0, prim=0x11D)
    theirs = [bytes(codec.encode(bytes(column)))[188:] for column in data.T]
    assert [bytes(column) for column in parity_of(data, DVB, tier).T] == theirs


def test_qr_code() -> None:
    """QR symbol 1-M of "01234567", ISO/IEC 18004 Annex I (seen, computed): too small for moments."""
    data = np.frombuffer(bytes.fromhex("10200C566180EC11EC11EC11EC11EC11"), np.uint8)[:, None]
    assert parity_of(data, OuterCode(26, 16)).tobytes().hex() == "a524d4c1ed36c7872c55"


@pytest.mark.parametrize("tier", TIERS)
def test_unit_columns(tier: str) -> None:
    """One symbol 1 in every column gives the parity matrix itself: every row of the transform is tried."""
    for outer in BY_MOMENTS:
        unit = np.eye(outer.k, dtype=np.uint8)
        np.testing.assert_array_equal(parity_of(unit, outer, tier), outer.parity_matrix)


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("outer", [SHELF, OuterCode(255, 239), OTHER_FIELD, CCSDS], ids=str)
def test_syndromes(outer: OuterCode, tier: str) -> None:
    """Those of codewords are zero, those of anything else as the check matrix has it."""
    data, parity_ = sample(outer)
    received = np.concatenate([data, parity_])
    out = np.full((outer.r, 700), 0xA5, np.uint8)
    encoder(outer, tier).syndromes(received, out)
    assert not out.any()
    received = random(4, outer.n, 90)
    out = np.empty((outer.r, 90), np.uint8)
    encoder(outer, tier).syndromes(received, out)
    np.testing.assert_array_equal(out, strip_map(outer.check_matrix, received, outer.field_poly))


# ---- any shape


@pytest.mark.parametrize("tier", TIERS)
def test_every_length(tier: str) -> None:
    """Lengths round the ends of vectors and tiles; the bytes beside the rows stay as they are."""
    data, parity_ = sample(SHELF)
    tile = 256
    for length in [*range(70), *range(tile - 2, tile + 35), 2 * tile - 1, 2 * tile, 2 * tile + 1, 700]:
        out = np.full((32, length + 64), 0xA5, np.uint8)
        encoder(SHELF, tier).apply(data[:, :length], out[:, 32 : 32 + length])
        np.testing.assert_array_equal(out[:, 32 : 32 + length], parity_[:, :length])
        assert (out[:, :32] == 0xA5).all() and (out[:, 32 + length :] == 0xA5).all()


@pytest.mark.parametrize("tier", TIERS)
def test_every_offset(tier: str) -> None:
    """Rows that begin at any of 64 offsets, at odd distances from each other."""
    data, parity_ = sample(SHELF)
    for offset in range(64):
        out = np.zeros((32, 333), np.uint8)[:, 63 - offset : 223 - offset]
        encoder(SHELF, tier).apply(data[:, offset : offset + 160], out)
        np.testing.assert_array_equal(out, parity_[:, offset : offset + 160])


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("before", [False, True])
@pytest.mark.parametrize("length", [1, 31, 32, 33, 255, 256, 257])
def test_touches_nothing_outside(tier: str, before: bool, length: int) -> None:
    """Source and result next to an unreadable page: a byte too far would end the process."""
    data, parity_ = sample(SHELF)
    source = guarded(223 * length, before=before).reshape(223, length)
    out = guarded(32 * length, before=before).reshape(32, length)
    source[...] = data[:, :length]
    encoder(SHELF, tier).apply(source, out)
    np.testing.assert_array_equal(out, parity_[:, :length])


@pytest.mark.parametrize("tier", TIERS)
@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    outer=st.sampled_from(BY_MOMENTS),
    given_=st.floats(0, 1),
    length=st.integers(0, 300),
    upwards=st.tuples(st.booleans(), st.booleans()),
)
def test_some_data_symbols(
    tier: str, outer: OuterCode, given_: float, length: int, upwards: tuple[bool, bool]
) -> None:
    """Any number of data symbols, the others zero, with rows in either order in memory."""
    data, _ = sample(outer)
    count = round(given_ * outer.k)
    source = data[:count, :length]
    out = np.zeros((outer.r, length), np.uint8)
    source = source if upwards[0] else source[::-1].copy()[::-1]
    out = out if upwards[1] else out[::-1].copy()[::-1]
    encoder(outer, tier).apply(source, out)
    expected = strip_map(outer.parity_matrix[:, :count], source, outer.field_poly)
    np.testing.assert_array_equal(out, expected)


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("outer", [SHELF, OTHER_FIELD, CCSDS], ids=str)
@pytest.mark.parametrize("batches", [[0, 64, 128, 192], [0, 150, 151], [0, 0, 7, 199]], ids=str)
def test_batches(outer: OuterCode, tier: str, batches: list[int]) -> None:
    """Symbols added some at a time, many (by the transform) and few (by the dense map)."""
    data, parity_ = sample(outer)
    sums = random(5, outer.r, 700)
    for turn, (first, stop) in enumerate(zip(batches, [*batches[1:], outer.k], strict=True)):
        encoder(outer, tier).add(data[first:stop], sums, first=first, accumulate=turn > 0)
    encoder(outer, tier).finish(sums)
    np.testing.assert_array_equal(sums, parity_)


def test_more_columns_than_are_held_at_a_time() -> None:
    """Chunks of columns are independent: the same 700 columns again and again give the same parity."""
    data, parity_ = sample(SHELF)
    times = 2 * parity.CHUNK // 700 + 2
    long = np.tile(data, times)
    np.testing.assert_array_equal(parity_of(long, SHELF), np.tile(parity_, times))
    sums, received = np.empty((32, long.shape[1]), np.uint8), np.tile(np.concatenate([data, parity_]), times)
    encoder(SHELF).add(long, sums)
    encoder(SHELF).finish(sums)
    np.testing.assert_array_equal(sums, np.tile(parity_, times))
    encoder(SHELF).syndromes(received, sums)
    assert not sums.any()


def test_threads_on_disjoint_columns() -> None:
    data, parity_ = sample(SHELF)
    data, parity_ = np.tile(data, 20), np.tile(parity_, 20)
    out = np.zeros_like(parity_)

    def work(start: int) -> None:
        encoder(SHELF).apply(data[:, start : start + 777], out[:, start : start + 777])

    with ThreadPoolExecutor(4) as pool:
        list(pool.map(work, range(0, 14_000, 777)))
    np.testing.assert_array_equal(out, parity_)


# ---- refusals


@pytest.mark.parametrize("outer", [SHELF, CCSDS], ids=str)
def test_refuses_what_a_kernel_could_not_bear(outer: OuterCode) -> None:
    good, out = np.zeros((223, 8), np.uint8), np.zeros((32, 8), np.uint8)
    frozen = out.copy()
    frozen.flags.writeable = False
    made = encoder(outer)
    calls: list[Callable[[], None]] = [
        lambda: made.apply(good[:, ::2], out[:, :4]),
        lambda: made.apply(good.astype(np.int8), out),
        lambda: made.apply(good, out[:31]),
        lambda: made.apply(good, out[:, :7]),
        lambda: made.apply(good, frozen),
        lambda: made.apply(np.zeros((224, 8), np.uint8), out),
        lambda: made.add(good, out, first=1),
        lambda: made.add(good[:1], out, first=-1),
        lambda: made.finish(frozen),
        lambda: made.finish(out[:31]),
        lambda: made.syndromes(np.zeros((256, 8), np.uint8), out),
        lambda: made.syndromes(good, out[:, :7]),
    ]
    for call in calls:
        with pytest.raises(ValueError):
            call()


def test_unknown_tier() -> None:
    with pytest.raises(UsageError, match="shuffle|portable"):
        ParityEncoder(SHELF, tier="abacus")


@pytest.mark.skipif(TIERS == ["portable"], reason="the portable tier has no kernel of its own")
def test_self_test_notices_wrong_kernels() -> None:
    tier = next(tier for tier in TIERS if tier != "portable")
    kernel = parity.KERNELS[tier].prepare()
    assert parity.gives_known_answer(kernel, tier)
    assert not parity.gives_known_answer(lambda *arguments: None, tier)

    def without_accumulating(arrays: Arrays, *arguments: int) -> None:
        kernel(arrays._replace(accumulate=0), *arguments)

    assert not parity.gives_known_answer(without_accumulating, tier)


# ---- other CPUs


@pytest.mark.skipif(not ON_X86, reason="names features of x86-64")
@pytest.mark.parametrize("features", ["+sse2", "+sse2,+sse3,+ssse3"], ids=["SSE2", "SSSE3"])
def test_on_older_CPUs(features: str) -> None:
    """Without any kernel of moments, and with 16-byte shuffles."""
    environment = {**os.environ, "NUMBA_CPU_NAME": "generic", "NUMBA_CPU_FEATURES": features}
    run_tests(environment, "test_parity.py", keyword="not galois and not reedsolo and not CPU")


def test_on_a_CPU_with_gfni(tmp_path: Path) -> None:
    """Emulated where the CPU lacks the instruction, and then only what does not take minutes."""
    keyword = "unit_columns or (syndromes and 239) or outside or notices"
    run_tests(gfni_environment(tmp_path), "test_parity.py", keyword=keyword)
