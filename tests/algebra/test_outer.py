"""Reed-Solomon codes against published examples, galois and reedsolo."""

import galois
import numpy as np
import pytest
import reedsolo
from hypothesis import given, settings
from hypothesis import strategies as st

from oakum.algebra import OuterCode
from oakum.errors import UsageError

CCSDS_16 = OuterCode(255, 223, field_poly=0x187, first_root=112, root_spacing=11)
CCSDS_8 = OuterCode(255, 239, field_poly=0x187, first_root=120, root_spacing=11)


def symbols(text: str) -> np.ndarray:
    return np.frombuffer(bytes.fromhex(text), dtype=np.uint8)


def test_qr_symbol() -> None:
    """ISO/IEC 18004 Annex I: symbol 1-M, "01234567" (seen, computed)."""
    code = OuterCode(26, 16)
    data = symbols("10 20 0C 56 61 80 EC 11 EC 11 EC 11 EC 11 EC 11")
    assert bytes(code.encode(data)) == bytes(symbols("A5 24 D4 C1 ED 36 C7 87 2C 55"))


def test_qr_generator() -> None:
    """ISO/IEC 18004: the generator polynomial of degree 10 (seen, computed)."""
    assert OuterCode(26, 16).generator.tolist() == [1, 216, 194, 159, 111, 199, 94, 95, 113, 157, 193]


def test_data_matrix_symbol() -> None:
    """ISO/IEC 16022, ECC 200: "123456" with five check symbols (seen, computed)."""
    code = OuterCode(8, 3, field_poly=0x12D, first_root=1)
    assert code.generator.tolist() == [1, 62, 111, 15, 48, 228]
    assert code.encode([142, 164, 186]).tolist() == [114, 25, 5, 88, 102]


@pytest.mark.parametrize(
    ("code", "half"),
    [
        # CCSDS 131.0-B-5 Annex G (seen, computed).
        (CCSDS_16, [0, 249, 59, 66, 4, 43, 126, 251, 97, 30, 3, 213, 50, 66, 170, 5, 24]),
        # The same construction for E = 8 (computed).
        (CCSDS_8, [0, 30, 230, 49, 235, 129, 81, 76, 173]),
    ],
)
def test_ccsds_generator(code: OuterCode, half: list[int]) -> None:
    """Coefficients as powers of alpha; the polynomial is a palindrome."""
    assert code.field.log[code.generator].tolist() == half + half[-2::-1]


def test_ccsds_codeword() -> None:
    """The conventional basis, data 00..DE: the output of a general FEC library (computed)."""
    parity = CCSDS_16.encode(np.arange(223))
    assert bytes(parity).hex().upper() == "2FBD4FB4748494B9ACD554627212EEB3EBED41191DE1D36320EA49290B25ABCF"


def test_ccsds_roots() -> None:
    """CCSDS 131.0-B: roots alpha^(11 j), j = 128-E .. 127+E (seen)."""
    for code, e in ((CCSDS_16, 16), (CCSDS_8, 8)):
        expected = [11 * j % 255 for j in range(128 - e, 128 + e)]
        assert code.field.log[code.roots].tolist() == expected


def test_ccsds_code_is_that_of_galois() -> None:
    field = galois.GF(2**8, irreducible_poly=0x187, primitive_element=2)
    oracle = galois.ReedSolomon(255, 223, field=field, alpha=field(2) ** 11, c=112)
    data = np.random.default_rng(1).integers(0, 256, (20, 223), dtype=np.uint8)
    np.testing.assert_array_equal(CCSDS_16.encode(data), np.asarray(oracle.encode(field(data)))[:, 223:])


def test_dvb_generator() -> None:
    """RS(204,188), ETSI EN 300 421 (roots seen, generator computed)."""
    expected = [1, 59, 13, 104, 189, 68, 209, 30, 8, 163, 65, 41, 229, 98, 50, 36, 59]
    assert OuterCode(204, 188).generator.tolist() == expected


def test_dvd_product_code() -> None:
    """ECMA-267 (seen): RS(208,192,17) x RS(182,172,11), 33,024 of 37,856 bytes, product distance 187."""
    rows, columns = OuterCode(182, 172), OuterCode(208, 192)
    assert (columns.distance, rows.distance) == (17, 11)
    assert (rows.n * columns.n, rows.k * columns.k) == (37856, 33024)
    assert rows.distance * columns.distance == 187


def test_cd_distances() -> None:
    """ECMA-130 (seen): (32,28) then (28,24), both of distance 5."""
    assert OuterCode(32, 28).distance == OuterCode(28, 24).distance == 5


def test_optical_transport_burst() -> None:
    """ITU-T G.709 (seen): RS(255,239), 16-byte interleaving corrects a burst of 128 bytes."""
    assert 16 * (OuterCode(255, 239).r // 2) == 128


@pytest.mark.parametrize("n_k", [(255, 223), (255, 239), (255, 207), (15, 11), (40, 39), (30, 1)])
def test_matrices_are_those_of_galois(n_k: tuple[int, int]) -> None:
    n, k = n_k
    code = OuterCode(n, k)
    field = galois.GF(2**8, irreducible_poly=0x11D, primitive_element=2)
    oracle = galois.ReedSolomon(255, 255 - (n - k), field=field, c=0)
    assert code.generator.tolist() == oracle.generator_poly.coeffs.tolist()
    np.testing.assert_array_equal(code.parity_matrix, np.asarray(oracle.G)[-k:, -(n - k) :].T)
    np.testing.assert_array_equal(code.check_matrix, np.asarray(oracle.H)[:, -n:])
    np.testing.assert_array_equal(code.locators, np.asarray(field(2) ** np.arange(n - 1, -1, -1)))


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    n=st.integers(2, 255), share=st.floats(0, 1), first_root=st.integers(0, 254),
    poly=st.sampled_from([0x11D, 0x12D, 0x187]), seed=st.integers(0, 2**32 - 1),
)  # fmt: skip
def test_shortened_codes_are_those_of_reedsolo(
    n: int, share: float, first_root: int, poly: int, seed: int
) -> None:
    k = 1 + int(share * (n - 2))
    code = OuterCode(n, k, field_poly=poly, first_root=first_root)
    data = np.random.default_rng(seed).integers(0, 256, k, dtype=np.uint8)
    oracle = reedsolo.RSCodec(n - k, nsize=255, fcr=first_root, prim=poly)
    assert bytes(code.encode(data)) == bytes(oracle.encode(bytes(data)))[k:]


@settings(max_examples=60, deadline=None, derandomize=True)
@given(
    n=st.integers(2, 255), share=st.floats(0, 1), first_root=st.integers(0, 254),
    spacing=st.sampled_from([1, 2, 7, 11, 254]), seed=st.integers(0, 2**32 - 1),
)  # fmt: skip
def test_codewords_meet_every_check(n: int, share: float, first_root: int, spacing: int, seed: int) -> None:
    k = 1 + int(share * (n - 2))
    code = OuterCode(n, k, first_root=first_root, root_spacing=spacing)
    data = np.random.default_rng(seed).integers(0, 256, (3, k), dtype=np.uint8)
    words = np.concatenate([data, code.encode(data)], axis=1)
    assert not syndromes(code, words).any()
    np.testing.assert_array_equal(code.parity_matrix[:, -1], code.generator[1:])
    words[np.arange(3), [0, n // 2, n - 1]] ^= 1
    assert syndromes(code, words).any(axis=1).all()


def syndromes(code: OuterCode, words: np.ndarray) -> np.ndarray:
    return np.bitwise_xor.reduce(code.field.multiply(code.check_matrix, words[:, None, :]), axis=2)


def test_every_choice_of_r_check_columns_is_independent() -> None:
    """The Singleton bound d = n - k + 1 is met (common practice): no r columns of the check matrix depend."""
    code = OuterCode(60, 50, first_root=112, field_poly=0x187, root_spacing=11)
    field = galois.GF(2**8, irreducible_poly=0x187, primitive_element=2)
    rng = np.random.default_rng(2)
    for _ in range(200):
        chosen = rng.choice(code.n, code.r, replace=False)
        assert np.linalg.det(field(code.check_matrix[:, chosen])) != 0
    assert code.distance == code.D == code.n - code.k + 1


def test_shapes_of_encode() -> None:
    code = OuterCode(12, 8)
    data = np.random.default_rng(3).integers(0, 256, (2, 5, 8), dtype=np.uint8)
    parity = code.encode(data)
    assert parity.shape == (2, 5, 4)
    assert parity.dtype == np.uint8
    np.testing.assert_array_equal(parity[1, 3], code.encode(data[1, 3]))
    for wrong in (np.zeros(7), np.uint8(0)):
        with pytest.raises(ValueError, match="8 symbols"):
            code.encode(wrong)


@pytest.mark.parametrize(
    "parameters",
    [
        {"n": 256, "k": 223}, {"n": 10, "k": 10}, {"n": 10, "k": 0}, {"n": 10, "k": 11},
        {"n": 10, "k": 5, "field_poly": 0x11B}, {"n": 10, "k": 5, "first_root": 255},
        {"n": 10, "k": 5, "first_root": -1}, {"n": 10, "k": 5, "root_spacing": 3},
        {"n": 10, "k": 5, "root_spacing": 0}, {"n": 10, "k": 5, "root_spacing": 255},
    ],
)  # fmt: skip
def test_impossible_codes_are_refused(parameters: dict[str, int]) -> None:
    with pytest.raises(UsageError):
        OuterCode(**parameters)
