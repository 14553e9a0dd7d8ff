"""The column decoder against what was sent, `galois`, `reedsolo` and a slow decoder of another method."""

from __future__ import annotations

import os
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from math import comb
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reference_columns import ReferenceDecoder
from tier_runs import ON_X86, gfni_environment, run_tests

from oakum.algebra.field import Field
from oakum.algebra.outer import OuterCode
from oakum.kernels import lane_field, tiers
from oakum.kernels.columns import FAILED, ColumnDecoder
from oakum.kernels.lane_field import points

FORCED = os.environ.get(tiers.ENVIRONMENT_VARIABLE)
TIERS = [FORCED] if FORCED else tiers.available_tiers()

SHELF = OuterCode(255, 223)
QR = OuterCode(26, 16)
DATA_MATRIX = OuterCode(8, 3, 0x12D, 1)
DVB = OuterCode(204, 188)
CCSDS = OuterCode(255, 223, 0x187, 112, 11)
SMALL = [OuterCode(2, 1), OuterCode(255, 254), OuterCode(7, 4, 0x187, 5, 7), OuterCode(90, 60, 0x12D, 200, 2)]
CODES = [SHELF, OuterCode(255, 239), QR, DATA_MATRIX, DVB, CCSDS, *SMALL]

Bytes = np.ndarray


@cache
def decoder(outer: OuterCode, tier: str | None = None) -> ColumnDecoder:
    return ColumnDecoder(outer, tier)


def damage(outer: OuterCode, errors: Bytes, erasures: Bytes, seed: int) -> tuple[Bytes, Bytes]:
    """Error patterns and erasure marks, uint8[n, L], with so many errors and erasures in each column.

    Errors are outside the erased places and not zero; what stands at erased places is anything.
    """
    rng = np.random.default_rng(seed)
    pattern, erased = np.zeros((2, outer.n, len(errors)), dtype=np.uint8)
    for c, (e, s) in enumerate(zip(errors, erasures, strict=True)):
        places = rng.permutation(outer.n)
        pattern[places[:s], c] = rng.integers(0, 256, s)
        erased[places[:s], c] = rng.integers(1, 256, s)
        pattern[places[s : s + e], c] = rng.integers(1, 256, e)
    return pattern, erased


def codewords(outer: OuterCode, columns: int, seed: int) -> Bytes:
    data = np.random.default_rng(seed).integers(0, 256, (columns, outer.k), dtype=np.uint8)
    return np.concatenate([data, outer.encode(data)], axis=1).T.copy()


def plain_syndromes(outer: OuterCode, received: Bytes) -> Bytes:
    out = np.zeros((outer.r, received.shape[1]), dtype=np.uint8)
    for i in range(outer.n):
        out ^= outer.field.multiply(outer.check_matrix[:, i, None], received[i])
    return out


def assert_honest(
    outer: OuterCode, syndromes: Bytes, erased: Bytes, magnitudes: Bytes, status: Bytes
) -> None:
    """Accepted columns are codewords within the bound, and the others are left alone."""
    accepted = status != FAILED
    assert not magnitudes[:, ~accepted].any()
    np.testing.assert_array_equal(plain_syndromes(outer, magnitudes)[:, accepted], syndromes[:, accepted])
    errors = np.count_nonzero(magnitudes * (erased == 0), axis=0)
    np.testing.assert_array_equal(status[accepted], errors[accepted])
    assert (2 * errors + np.count_nonzero(erased, axis=0) <= outer.r)[accepted].all()


def assert_same_as_reference(
    outer: OuterCode, syndromes: Bytes, erased: Bytes, magnitudes: Bytes, status: Bytes
) -> None:
    slow = ReferenceDecoder(outer)
    for c, accepted in enumerate(status != FAILED):
        expected = slow.decode(syndromes[:, c].tolist(), np.flatnonzero(erased[:, c]).tolist())
        found = {int(i): int(magnitudes[i, c]) for i in np.flatnonzero(magnitudes[:, c])}
        assert (found if accepted else None) == expected


# -- inside and at capacity ---------------------------------------------------------------------------------


@pytest.mark.parametrize("outer", CODES, ids=str)
def test_every_pattern_inside_capacity_is_put_right(outer: OuterCode) -> None:
    """All pairs (errors, erasures) with 2e + s <= r, those with equality several times; mixed in one call."""
    r = outer.r
    pairs = [(e, s) for e in range(r // 2 + 1) for s in range(r - 2 * e + 1) if e + s <= outer.n]
    at_the_edge = [(e, s) for e, s in pairs if 2 * e + s == r]
    chosen = (pairs * 3 if len(pairs) < 200 else pairs) + at_the_edge * 3
    errors, erasures = np.random.default_rng(1).permutation(chosen).T
    pattern, erased = damage(outer, errors, erasures, seed=2)
    sent = codewords(outer, len(errors), seed=3)
    received = sent ^ pattern
    magnitudes, status = decoder(outer).decode(decoder(outer).syndromes(received), erased)
    np.testing.assert_array_equal(received ^ magnitudes, sent)
    np.testing.assert_array_equal(status, errors)


def test_erased_places_may_be_right() -> None:
    """Erasures on a codeword: nothing to change, no errors; one more than r of them is too many."""
    erased = np.zeros((255, 3), dtype=np.uint8)
    erased[:32, 0] = erased[:33, 1] = erased[100, 2] = 1
    magnitudes, status = decoder(SHELF).decode(np.zeros((32, 3), dtype=np.uint8), erased)
    assert not magnitudes.any()
    assert status.tolist() == [0, FAILED, 0]


def test_all_r_erasures_and_one_more() -> None:
    for outer in CODES:
        s = np.array([outer.r, min(outer.r + 1, outer.n), outer.n])
        pattern, erased = damage(outer, 0 * s, s, seed=4)
        magnitudes, status = decoder(outer).decode(plain_syndromes(outer, pattern), erased)
        np.testing.assert_array_equal(magnitudes[:, 0], pattern[:, 0])
        assert status.tolist() == [0, FAILED, FAILED]


@pytest.mark.parametrize(
    ("zeros", "single"),
    [(1, False), (7, False), (14, False), (15, False), (1, True), (7, True), (14, True)],
)
def test_syndromes_that_begin_with_zeros_in_all_columns(zeros: int, single: bool) -> None:
    """Multiples of x^i g(x) have deg g zeros first; with one more error, discrepancies of zero instead."""
    outer = OuterCode(100, 68)
    generator = OuterCode(100, 100 - zeros).generator
    pattern = np.zeros((100, 40), dtype=np.uint8)
    for c in range(40):
        pattern[c : c + zeros + 1, c] = outer.field.multiply(generator, c + 1)
        pattern[99 - c // 10, c] ^= 3 * single
    syndromes = plain_syndromes(outer, pattern)
    assert single or not syndromes[:zeros].any()
    magnitudes, status = decoder(outer).decode(syndromes)
    np.testing.assert_array_equal(magnitudes, pattern)
    assert (status == zeros + 1 + single).all()


@pytest.mark.parametrize("columns", [0, 1, 2, 63, 64, 65, 255, 256, 257, 511, 1000, 4096])
def test_any_number_of_columns(columns: int) -> None:
    """Full and partial groups; right columns between wrong ones; every column its own pattern."""
    rng = np.random.default_rng(columns)
    errors = rng.integers(0, 6, columns) * (rng.random(columns) < 0.7)
    erasures = rng.integers(0, 7, columns) * (rng.random(columns) < 0.5)
    pattern, erased = damage(OuterCode(60, 44), errors, erasures, seed=5)
    syndromes = plain_syndromes(OuterCode(60, 44), pattern)
    magnitudes, status = decoder(OuterCode(60, 44)).decode(syndromes, erased)
    np.testing.assert_array_equal(magnitudes, pattern)
    np.testing.assert_array_equal(status, errors)


def test_rows_at_any_distance() -> None:
    """Syndromes and marks that are views into wider arrays, or read-only, are taken as they are."""
    pattern, erased = damage(QR, np.full(300, 2), np.full(300, 3), seed=6)
    wide = np.repeat(plain_syndromes(QR, pattern), 2, axis=1)
    marks = np.repeat(erased, 2, axis=1)
    marks.flags.writeable = wide.flags.writeable = False
    magnitudes, status = decoder(QR).decode(wide[:, ::2], marks[:, ::2])
    np.testing.assert_array_equal(magnitudes, pattern)
    assert (status == 2).all()


def test_wrong_arguments() -> None:
    syndromes = np.zeros((10, 4), dtype=np.uint8)
    with pytest.raises(ValueError, match="syndromes is uint8"):
        decoder(QR).decode(syndromes[:9])
    with pytest.raises(ValueError, match="syndromes is int64"):
        decoder(QR).decode(syndromes.astype(np.int64))
    with pytest.raises(ValueError, match="erased has 3 columns"):
        decoder(QR).decode(syndromes, np.zeros((26, 3), dtype=np.uint8))
    with pytest.raises(ValueError, match="received is"):
        decoder(QR).syndromes(syndromes)


# -- beyond capacity ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("outer", CODES, ids=str)
def test_same_as_the_reference_around_capacity(outer: OuterCode) -> None:
    """Up to three beyond what can be corrected: same corrections and same refusals, by Euclid's algorithm."""
    rng = np.random.default_rng(7)
    columns = 120
    erasures = rng.integers(0, min(outer.r + 1, outer.n) + 1, columns) * rng.integers(0, 2, columns)
    errors = np.maximum(outer.r - erasures, 0) // 2 + rng.integers(-1, 4, columns)
    errors = np.clip(errors, 0, outer.n - erasures)
    pattern, erased = damage(outer, errors, erasures, seed=8)
    syndromes = plain_syndromes(outer, pattern)
    magnitudes, status = decoder(outer).decode(syndromes, erased)
    assert_honest(outer, syndromes, erased, magnitudes, status)
    assert (status == FAILED).any() and (status != FAILED).any()
    assert_same_as_reference(outer, syndromes, erased, magnitudes, status)


@settings(max_examples=60, deadline=None)
@given(st.data())
def test_same_as_the_reference_for_any_code(data: st.DataObject) -> None:
    """Shortened codes of any size, with any first root, spacing and field."""
    k = data.draw(st.integers(1, 30))
    r = data.draw(st.integers(1, 12))
    spacing = data.draw(st.sampled_from([1, 2, 7, 11, 254]))
    poly = data.draw(st.sampled_from([0x11D, 0x12D, 0x187]))
    outer = OuterCode(k + r, k, poly, data.draw(st.integers(0, 254)), spacing)
    erasures = np.array(data.draw(st.lists(st.integers(0, min(r + 1, outer.n)), min_size=1, max_size=5)))
    errors = np.array([data.draw(st.integers(0, min(outer.n - s, max(r - s, 0) // 2 + 2))) for s in erasures])
    pattern, erased = damage(outer, errors, erasures, seed=data.draw(st.integers(0, 2**32 - 1)))
    syndromes = plain_syndromes(outer, pattern)
    magnitudes, status = ColumnDecoder(outer).decode(syndromes, erased)
    assert_same_as_reference(outer, syndromes, erased, magnitudes, status)


def test_one_error_too_many_is_noticed() -> None:
    """With t = 16, a miscorrection of 17 errors would be seen once in 10^13 columns; all are refused."""
    pattern, erased = damage(SHELF, np.full(2000, 17), np.zeros(2000, dtype=int), seed=9)
    magnitudes, status = decoder(SHELF).decode(plain_syndromes(SHELF, pattern), erased)
    assert (status == FAILED).all() and not magnitudes.any()


def test_r_plus_1_of_errors_and_erasures_is_noticed() -> None:
    """2e + s = r + 1 with 1 to 16 errors: what is accepted is a codeword within the bound, and rare."""
    errors = np.repeat(np.arange(1, 17), 200)
    pattern, erased = damage(SHELF, errors, 33 - 2 * errors, seed=10)
    syndromes = plain_syndromes(SHELF, pattern)
    magnitudes, status = decoder(SHELF).decode(syndromes, erased)
    assert_honest(SHELF, syndromes, erased, magnitudes, status)
    # about one word in (e - 1)! is within e - 1 errors and these erasures of another codeword
    assert (status[errors >= 9] == FAILED).all()


def test_the_longest_redundancy() -> None:
    """RS(255,1): 254 checks, all that there can be; at and beyond capacity, with and without erasures."""
    outer = OuterCode(255, 1)
    errors = np.array([0, 1, 126, 127, 128, 140, 126, 127, 100, 0, 0])
    erasures = np.array([0, 1, 1, 0, 0, 0, 2, 1, 53, 254, 253])
    pattern, erased = damage(outer, errors, erasures, seed=21)
    syndromes = plain_syndromes(outer, pattern)
    magnitudes, status = decoder(outer).decode(syndromes, erased)
    inside = 2 * errors + erasures <= 254
    np.testing.assert_array_equal(status, np.where(inside, errors, FAILED))
    np.testing.assert_array_equal(magnitudes, pattern * inside)


def miscorrection_rate(outer: OuterCode, t: int) -> float:
    """The share of all words within t of a codeword (McEliece and Swanson 1986; a count of spheres)."""
    words = sum(comb(outer.n, e) * 255**e for e in range(t + 1))
    return words / 256**outer.r


def test_rate_of_spheres_is_the_published_one() -> None:
    """2.08533645e-5 for t = 8, 2.60888880e-14 for t = 16 (McEliece and Swanson; computed)."""
    assert miscorrection_rate(OuterCode(255, 239), 8) == pytest.approx(2.08533645e-5, rel=1e-8)
    assert miscorrection_rate(SHELF, 16) == pytest.approx(2.60888880e-14, rel=1e-8)


@pytest.mark.parametrize(("k", "columns"), [(251, 20_000), (249, 60_000), (239, 6_000_000)])
def test_miscorrection_rate_of_random_words(k: int, columns: int) -> None:
    """As many random words are accepted as lie within t of a codeword: 120 or more, to 4 sigma."""
    outer = OuterCode(255, k)
    rng = np.random.default_rng(11)
    accepted = done = 0
    while done < columns:
        count = min(200_000, columns - done)
        syndromes = rng.integers(0, 256, (outer.r, count), dtype=np.uint8)
        magnitudes, status = decoder(outer).decode(syndromes)
        chosen = np.flatnonzero(status != FAILED)
        nothing = np.zeros((outer.n, chosen.size), dtype=np.uint8)
        assert_honest(outer, syndromes[:, chosen], nothing, magnitudes[:, chosen], status[chosen])
        accepted += chosen.size
        done += count
    expected = columns * miscorrection_rate(outer, outer.r // 2)
    assert expected > 120
    assert abs(accepted - expected) < 4 * expected**0.5


# -- other implementations and published codes --------------------------------------------------------------


@pytest.mark.parametrize("outer", [QR, DATA_MATRIX, DVB, CCSDS, OuterCode(40, 20)], ids=str)
def test_same_as_reedsolo(outer: OuterCode) -> None:
    """Errors and erasures within capacity, in the conventions of QR, Data Matrix, DVB and CCSDS."""
    reedsolo = pytest.importorskip("reedsolo")
    generator = int(outer.field.exp[outer.root_spacing])
    codec = reedsolo.RSCodec(
        outer.r, nsize=outer.n, fcr=outer.first_root, prim=outer.field_poly, generator=generator
    )
    rng = np.random.default_rng(12)
    erasures = rng.integers(0, outer.r + 1, 25)
    errors = (outer.r - erasures) // 2
    pattern, erased = damage(outer, errors, erasures, seed=13)
    received = codewords(outer, 25, seed=14) ^ pattern
    magnitudes, status = decoder(outer).decode(decoder(outer).syndromes(received), erased)
    assert (status == errors).all()
    for c in range(25):
        places = np.flatnonzero(erased[:, c]).tolist()
        _, whole, _ = codec.decode(bytearray(received[:, c]), erase_pos=places)
        assert bytes(whole) == (received ^ magnitudes)[:, c].tobytes()


@pytest.mark.parametrize("outer", [SHELF, OuterCode(100, 84)], ids=str)
def test_same_as_galois(outer: OuterCode) -> None:
    """Up to t errors the same words; with t + 1 both refuse. Its counts are not looked at."""
    galois = pytest.importorskip("galois")
    field = galois.GF(2**8, irreducible_poly=outer.field_poly)
    alpha = field(2) ** outer.root_spacing
    code = galois.ReedSolomon(255, 255 - outer.r, field=field, alpha=alpha, c=outer.first_root)
    t = outer.r // 2
    errors = np.array([0, 1, t - 1, t, t + 1])
    pattern, _ = damage(outer, errors, 0 * errors, seed=15)
    received = codewords(outer, len(errors), seed=16) ^ pattern
    magnitudes, status = decoder(outer).decode(decoder(outer).syndromes(received))
    shortened = code.k - outer.k
    words = field(np.pad(received.T, ((0, 0), (shortened, 0))))
    theirs, counts = code.decode(words, output="codeword", errors=True)
    inside = errors <= t
    ours = (received ^ magnitudes).T
    np.testing.assert_array_equal(np.asarray(theirs)[inside, shortened:], ours[inside])
    assert (status[inside] == errors[inside]).all()
    assert (status[~inside] == FAILED).all() and (np.asarray(counts)[~inside] == -1).all()


@pytest.mark.parametrize(
    ("outer", "word"),
    [
        (QR, "10200C566180EC11EC11EC11EC11EC11 A524D4C1ED36C7872C55"),
        (DATA_MATRIX, "8EA4BA 7219055866"),
        (
            CCSDS,
            bytes(range(223)).hex() + "2FBD4FB4748494B9ACD554627212EEB3EBED41191DE1D36320EA49290B25ABCF",
        ),
    ],
    ids=["QR", "Data Matrix", "CCSDS"],
)
def test_published_words_are_restored(outer: OuterCode, word: str) -> None:
    """QR 1-M, ISO/IEC 18004 Annex I (seen, computed); Data Matrix 3+5, ISO/IEC 16022 (seen, computed);
    CCSDS 131.0-B, data 00..DE, from a general FEC library's output (computed)."""
    sent = np.frombuffer(bytes.fromhex(word), dtype=np.uint8)[:, None]
    assert not decoder(outer).syndromes(sent).any()
    errors = np.repeat(outer.r // 2, 50)
    pattern, _ = damage(outer, errors, 0 * errors, seed=17)
    magnitudes, status = decoder(outer).decode(decoder(outer).syndromes(sent ^ pattern))
    np.testing.assert_array_equal(magnitudes, pattern)
    assert (status == outer.r // 2).all()


# -- tiers, threads, the matrix path ------------------------------------------------------------------------


@pytest.mark.parametrize("tier", TIERS)
@pytest.mark.parametrize("outer", [SHELF, CCSDS], ids=str)
def test_every_tier(outer: OuterCode, tier: str) -> None:
    errors, erasures = np.arange(300) % 14, np.arange(300) % 7
    pattern, erased = damage(outer, errors, erasures, seed=18)
    codec = decoder(outer, tier)
    syndromes = codec.syndromes(codewords(outer, 300, seed=19) ^ pattern)
    np.testing.assert_array_equal(syndromes, plain_syndromes(outer, pattern))
    magnitudes, status = codec.decode(syndromes, erased)
    np.testing.assert_array_equal(magnitudes, pattern)
    assert (status == errors).all()
    rows = [3, 0, 200]
    alone = np.zeros_like(pattern)
    alone[rows] = pattern[[1, 2, 4]]
    found, agree = codec.erasure_solver(rows).solve(plain_syndromes(outer, alone))
    np.testing.assert_array_equal(found, alone[rows])
    assert agree.all()


@pytest.mark.parametrize("outer", CODES, ids=str)
def test_erasure_solver(outer: OuterCode) -> None:
    """Any number of erased rows; with checks to spare, an error elsewhere does not go unnoticed."""
    rng = np.random.default_rng(20)
    for s in {0, 1, outer.r // 2, outer.r - 1, outer.r}:
        rows = rng.permutation(outer.n)[:s]
        pattern = np.zeros((outer.n, 100), dtype=np.uint8)
        pattern[rows] = rng.integers(0, 256, (s, 100))
        solver = decoder(outer).erasure_solver(rows)
        magnitudes, agree = solver.solve(plain_syndromes(outer, pattern))
        np.testing.assert_array_equal(magnitudes, pattern[rows])
        assert agree.shape == (100,) and agree.all()
        pattern[np.setdiff1d(np.arange(outer.n), rows)[0], ::2] ^= 77
        _, agree = solver.solve(plain_syndromes(outer, pattern))
        assert (agree == (np.arange(100) % 2 == 1) if s < outer.r else agree).all()


def test_erasure_solver_refuses_what_it_cannot_solve() -> None:
    for rows in (range(11), [1, 1], [26], [-1]):
        with pytest.raises(ValueError, match="erased rows"):
            decoder(QR).erasure_solver(list(rows))
    with pytest.raises(ValueError, match="syndromes is"):
        decoder(QR).erasure_solver([1]).solve(np.zeros((9, 3), dtype=np.uint8))


def test_threads_share_a_decoder() -> None:
    jobs = []
    for seed in range(12):
        errors = np.random.default_rng(seed).integers(0, 5, 700)
        jobs.append(damage(OuterCode(60, 44), errors, errors, seed))
    codec = decoder(OuterCode(60, 44))

    def work(job: tuple[Bytes, Bytes]) -> bool:
        pattern, erased = job
        magnitudes, _ = codec.decode(codec.syndromes(pattern), erased)
        return np.array_equal(magnitudes, pattern)

    with ThreadPoolExecutor(4) as pool:
        assert all(pool.map(work, jobs * 2))


# -- the parts ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("poly", [0x11D, 0x12D, 0x187, 0x14D])
def test_fields_are_mapped_by_an_isomorphism(poly: int) -> None:
    image, field, everything = lane_field.field_map(poly), Field(poly), np.arange(256)
    a, b = everything[:, None], everything[None, :]
    assert sorted(image) == list(range(256)) and image[1] == 1
    np.testing.assert_array_equal(image[a ^ b], image[a] ^ image[b])
    np.testing.assert_array_equal(image[field.multiply(a, b)], lane_field.FIELD.multiply(image[a], image[b]))


def test_points_of_the_transform() -> None:
    """A Cantor basis: x^2 + x of points 2q and 2q + 1 is point q, for the first 128 q."""
    x = points()
    assert sorted(x) == list(range(256))
    np.testing.assert_array_equal(lane_field.FIELD.multiply(x, x) ^ x, x[np.arange(256) // 2])


# -- other CPUs ---------------------------------------------------------------------------------------------

HERE_ONLY = "not galois and not reedsolo and not random_words and not any_code and not CPU"
"""What does not depend on the CPU, and what would take minutes with emulated instructions."""


@pytest.mark.skipif(not ON_X86, reason="names features of x86-64")
def test_on_a_CPU_with_128_bit_vectors() -> None:
    environment = {**os.environ, "NUMBA_CPU_NAME": "generic", "NUMBA_CPU_FEATURES": "+sse2"}
    run_tests(environment, "test_columns.py", keyword=HERE_ONLY)


def test_on_a_CPU_with_gfni(tmp_path: Path) -> None:
    """Only syndromes differ there."""
    keyword = f"{HERE_ONLY} and not every_pattern and not threads"
    run_tests(gfni_environment(tmp_path), "test_columns.py", keyword=keyword)
