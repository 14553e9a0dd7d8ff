"""The inner codes: their matrices, true distances and weight distributions, and the frozen tables."""

import json
from importlib.resources import files
from itertools import combinations
from math import comb

import galois
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from oakum.algebra import InnerCode
from oakum.algebra.freeze import ExtendedBCH, Q, characters, frozen_text, trace_monomial
from oakum.algebra.inner import dual_weight_distribution, krawtchouk, macwilliams
from oakum.errors import UsageError

HAMMING = InnerCode("EH", 15, 1)
BCH_6 = InnerCode("EB", 14, 2)
BCH_8 = InnerCode("EB", 13, 3)
EVERY_CODE = [HAMMING, BCH_6, BCH_8]
named = pytest.mark.parametrize("code", EVERY_CODE, ids=lambda code: code.notation)


def cyclic_columns(generator: int, n: int, extended: bool) -> np.ndarray:
    """The check columns x^i mod g(x), i < n, of a cyclic code; `extended` adds an overall parity bit."""
    degree = generator.bit_length() - 1
    columns, remainder = [], 1
    for _ in range(n):
        columns.append(remainder)
        remainder <<= 1
        if remainder >> degree:
            remainder ^= generator
    if extended:
        columns = [column | 1 << degree for column in [*columns, 0]]
    return np.array(columns, dtype=np.uint32)


def distribution(octal: str, n: int, extended: bool = True) -> list[int]:
    """Of the cyclic code of length n with a generator polynomial in octal, or of its extension."""
    generator = int(octal, 8)
    checks = generator.bit_length() - 1 + extended
    return macwilliams(dual_weight_distribution(cyclic_columns(generator, n, extended), checks))


def nonzero(weights: list[int], *wanted: int) -> list[int]:
    return [weights[w] for w in wanted]


def first_weight(weights: list[int]) -> int:
    return next(w for w in range(1, len(weights)) if weights[w])


# ---- published binary codes, through the project's own weight enumeration

BCH_GENERATORS = {
    # In octal, t = 1..4: Lin and Costello; Peterson and Weldon (seen, computed).
    31: ["45", "3551", "107657", "5423325"],
    63: ["103", "12471", "1701317", "166623567"],
    127: ["211", "41567", "11554743", "3447023271"],
}


@pytest.mark.parametrize(
    ("n", "t"), [(n, t) for n in BCH_GENERATORS for t in range(1, 5) if (n, t) != (127, 4)]
)
def test_published_bch_generators_give_their_distance(n: int, t: int) -> None:
    """The designed distance 2t+1 is true here, but for (31, 11): its generator also serves t = 5."""
    weights = distribution(BCH_GENERATORS[n][t - 1], n, extended=False)
    assert first_weight(weights) == (11 if (n, t) == (31, 4) else 2 * t + 1)


@pytest.mark.parametrize("t", [1, 2, 3])
def test_builder_checks_the_published_codes(t: int) -> None:
    """The generator polynomial, a word at a, a^2, .. with its overall parity at 0, meets every check."""
    generator = int(BCH_GENERATORS[127][t - 1], 8)
    columns = ExtendedBCH(t).columns(())
    ones = [i for i in range(generator.bit_length()) if generator >> i & 1]
    syndrome = columns[0] if len(ones) % 2 else 0
    for i in ones:
        syndrome ^= columns[1 + i]
    assert syndrome == 0
    assert generator.bit_length() - 1 == 7 * t == ExtendedBCH(t).check_bits - 1


@pytest.mark.parametrize(
    ("octal", "n", "expected"),
    [
        # Computed by dual enumeration and MacWilliams elsewhere; [16,11,4] and [32,26,4] also seen in OEIS.
        ("13", 7, {4: 14, 8: 1}),
        ("23", 15, {4: 140, 6: 448, 8: 870, 10: 448, 12: 140}),
        ("45", 31, {4: 1240, 6: 27776, 8: 330460}),
        ("103", 63, {4: 10416, 6: 1166592}),
        ("211", 127, {4: 85344, 6: 42330624}),
        ("41567", 127, {6: 341376, 8: 87288624}),
        ("11554743", 127, {8: 774192, 10: 105598976}),
        ("12471", 63, {6: 20160, 8: 1067544}),
        # The binary Golay code, g = x^11 + x^9 + x^7 + x^6 + x^5 + x + 1 (MacWilliams and Sloane; memory).
        ("5343", 23, {8: 759, 12: 2576, 16: 759, 24: 1}),
    ],
)
def test_weight_distributions_of_extended_codes(octal: str, n: int, expected: dict[int, int]) -> None:
    weights = distribution(octal, n)
    assert nonzero(weights, *expected) == list(expected.values())
    assert first_weight(weights) == min(expected)
    assert not any(weights[1::2])


@pytest.mark.parametrize(
    ("t", "dropped", "weight", "count"),
    # Byte-aligned shortenings (computed): [127,112,6], [126,104,8].
    [(2, 1, 6, 325374), (3, 2, 8, 680085)],
)
def test_shortened_bch_codes(t: int, dropped: int, weight: int, count: int) -> None:
    parent = ExtendedBCH(t)
    columns = np.array(parent.columns(())[: Q - dropped], dtype=np.uint32)
    weights = macwilliams(dual_weight_distribution(columns, parent.check_bits))
    assert weights[weight] == count
    assert first_weight(weights) == weight


def test_shortened_bch_code_of_distance_10() -> None:
    """[125,96,10] has A10 = 622808 (computed): the shortened dual has 2^29 words, taken 2^22 at a time."""
    kept = np.array([1.0] * 125 + [0.0] * 3, dtype=np.float32)
    functions = [np.zeros(Q, dtype=np.uint8)] + [trace_monomial((7, c)) for c in range(127)]
    total = 0
    for function in functions:
        signs = (1 - 2 * function.astype(np.float32)) * kept * ExtendedBCH(3).higher_powers
        weights, counts = np.unique((125 - np.abs(signs @ characters())) / 2, return_counts=True)
        total += sum(int(c) * krawtchouk(125, int(w))[10] for w, c in zip(weights, counts, strict=True))
    assert total / 2**28 == 622808


@settings(max_examples=40, deadline=None, derandomize=True)
@given(st.integers(1, 8), st.integers(0, 8), st.integers(0, 2**32 - 1))
def test_macwilliams_against_enumeration(r: int, k: int, seed: int) -> None:
    """For random systematic codes small enough to write out, both the code and its dual."""
    parity = np.random.default_rng(seed).integers(0, 2, (k, r))
    code = np.concatenate([np.eye(k, dtype=int), parity], axis=1)
    checks = np.concatenate([parity.T, np.eye(r, dtype=int)], axis=1)
    columns = (checks * (1 << np.arange(r))[:, None]).sum(axis=0).astype(np.uint32)
    dual = dual_weight_distribution(columns, r)
    assert dual == enumerated(checks)
    assert macwilliams(dual) == enumerated(code)
    assert macwilliams(macwilliams(dual)) == dual


def enumerated(generator: np.ndarray) -> list[int]:
    k, n = generator.shape
    messages = np.arange(2**k)[:, None] >> np.arange(k) & 1
    return np.bincount((messages @ generator % 2).sum(axis=1), minlength=n + 1).tolist()


# ---- the project's codes


@named
def test_parameters(code: InnerCode) -> None:
    assert (code.n, code.k, code.d) == {
        1: (128, 120, 4), 2: (128, 112, 6), 3: (128, 104, 8)
    }[code.p]  # fmt: skip
    assert code.t == code.p
    assert code.rate == code.k / code.n
    assert code == InnerCode(code.family, code.m, code.p)
    assert hash(code) == hash(InnerCode(code.family, code.m, code.p))
    assert code in InnerCode.known()


@named
def test_parity_bits_have_unit_columns(code: InnerCode) -> None:
    assert code.check_columns.shape == (code.m + code.p, 8)
    assert code.check_columns.dtype == np.uint32
    parity = code.check_columns[code.m :].ravel().tolist()
    assert parity == [1 << i for i in range(8 * code.p)]
    assert int(code.check_columns.max()) < 1 << 8 * code.p


@named
def test_distance_by_counting_syndromes(code: InnerCode) -> None:
    """d = 2t + 2: patterns of up to t flips all differ in syndrome, and t+1 flips are told from them."""
    columns = code.check_columns.ravel()
    correctable = [np.zeros(1, dtype=np.uint32)]
    for flips in range(1, code.t + 1):
        chosen = np.array(list(combinations(range(code.n), flips)))
        correctable.append(np.bitwise_xor.reduce(columns[chosen], axis=1))
    syndromes = np.concatenate(correctable)
    assert len(np.unique(syndromes)) == len(syndromes) == sum(comb(128, i) for i in range(code.t + 1))
    rng = np.random.default_rng(4)
    more = np.array([rng.choice(code.n, code.t + 1, replace=False) for _ in range(3000)])
    assert not np.isin(np.bitwise_xor.reduce(columns[more], axis=1), syndromes).any()


@named
def test_weight_distribution(code: InnerCode) -> None:
    """[128,120,4] as published; [128,113,6] and [128,106,8] keep less than 1/2 and 1/4 of weight d."""
    weights = code.weight_distribution()
    assert first_weight(weights) == code.d
    assert sum(weights) == 2**code.k
    assert weights == weights[::-1], "the word of all ones is a codeword"
    before = {1: 85344, 2: 341376, 3: 774192}[code.p]
    after = {1: 85344, 2: 169344, 3: 188976}[code.p]
    assert weights[code.d] == after
    assert after * 2 ** (code.p - 1) <= before


@pytest.mark.parametrize(
    ("code", "message_bytes", "best_known"),
    # Brouwer's tables of best known distances (seen).
    [
        (HAMMING, 15, 4), (BCH_6, 14, 6), (BCH_8, 13, 8),
        (HAMMING, 2, 4), (HAMMING, 8, 4), (BCH_6, 8, 6),
    ],
)  # fmt: skip
def test_distances_are_the_best_known(code: InnerCode, message_bytes: int, best_known: int) -> None:
    """[128,120] 4, [128,112] 6, [128,104] 8 (to 9), and the shortened [24,16] 4, [72,64] 4, [80,64] 6."""
    assert first_weight(code.weight_distribution(message_bytes)) == best_known


@pytest.mark.parametrize("message_bytes", [0, 1, 2])
def test_shortened_weights_by_writing_all_words_out(message_bytes: int) -> None:
    for code in (HAMMING, BCH_6):
        values = np.arange(256**message_bytes)
        parity = np.zeros(len(values), dtype=np.uint32)
        for t in range(message_bytes):
            parity ^= code.parity_tables[t, values >> 8 * t & 255]
        weights = np.bitwise_count(values) + np.bitwise_count(parity)
        length = 8 * (message_bytes + code.p)
        expected = np.bincount(weights, minlength=length + 1).tolist()
        assert code.weight_distribution(message_bytes) == expected


def test_shortening_needs_bytes_to_take() -> None:
    for wrong in (-1, 16):
        with pytest.raises(ValueError, match="message bytes"):
            HAMMING.weight_distribution(wrong)


@named
def test_parity_tables_agree_with_galois(code: InnerCode) -> None:
    """Words encoded by the tables lie in the null space of the check matrix, and it has full rank."""
    rng = np.random.default_rng(5)
    message = rng.integers(0, 256, (50, code.m), dtype=np.uint8)
    parity = np.bitwise_xor.reduce(code.parity_tables[np.arange(code.m), message], axis=1)
    parity_bytes = (parity[:, None] >> (8 * np.arange(code.p, dtype=np.uint32)) & 255).astype(np.uint8)
    words = np.concatenate([message, parity_bytes], axis=1)
    bits = np.unpackbits(words, axis=1, bitorder="little")
    checks = code.check_columns.ravel()[None, :] >> np.arange(8 * code.p, dtype=np.uint32)[:, None] & 1
    matrix = galois.GF2(checks.astype(np.uint8))
    assert np.linalg.matrix_rank(matrix) == 8 * code.p
    assert not np.any(matrix @ galois.GF2(bits.T))


def test_hamming_columns_are_the_odd_bytes_in_rotations() -> None:
    columns = HAMMING.check_columns.astype(np.uint8)
    assert sorted(columns.ravel()) == [c for c in range(256) if c.bit_count() % 2]
    np.testing.assert_array_equal(columns[:, 1:], columns[:, :-1] << 1 | columns[:, :-1] >> 7)
    assert columns[:15, 0].tolist() == sorted(columns[:15].min(axis=1))


# ---- the tables


def test_frozen_tables_are_what_galois_builds() -> None:
    frozen = files("oakum.algebra").joinpath("tables", "inner.json").read_text(encoding="ascii")
    assert frozen == frozen_text()
    assert [entry["d"] for entry in json.loads(frozen)["codes"]] == [code.d for code in InnerCode.known()]


def test_search_for_the_spare_bit_of_the_code_of_distance_6() -> None:
    """The whole family; 341,376 words of weight 6 without the spare bit."""
    assert ExtendedBCH(2).codewords_of_weight_d == 341376
    assert ExtendedBCH(2).search() == (169344, ((5, 0),))


def test_search_for_the_spare_bits_of_the_code_of_distance_8() -> None:
    """A part of the family (the whole takes the builder half a minute): cosets of 7, 19 and 63."""
    assert ExtendedBCH(3).codewords_of_weight_d == 774192
    assert ExtendedBCH(3).search([7, 19, 63]) == (188976, ((7, 0), (7, 1)))


# ---- no inner code, and impossible ones


def test_no_inner_code() -> None:
    code = InnerCode.none()
    assert code == InnerCode("none", 0, 0)
    assert (code.n, code.k, code.d, code.t, code.rate) == (0, 0, 1, 0, 1.0)
    assert code.check_columns.shape == (0, 8)
    assert code.parity_tables.shape == (0, 256)
    assert code.weight_distribution() == [1]


@pytest.mark.parametrize(
    "parameters", [("EH", 14, 2), ("EB", 15, 1), ("none", 1, 0), ("EH", 7, 1), ("", 0, 0)]
)
def test_other_inner_codes_are_refused(parameters: tuple[str, int, int]) -> None:
    with pytest.raises(UsageError, match=r"EH\(128,120\)"):
        InnerCode(*parameters)
