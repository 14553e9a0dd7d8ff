"""GF(2^8) against galois and against published tables of binary BCH codes."""

import galois
import numpy as np
import pytest

from oakum.algebra import Field
from oakum.errors import UsageError

PRIMITIVE = [0x11D, 0x12D, 0x187]
EVERY_BYTE = np.arange(256, dtype=np.uint8)


@pytest.mark.parametrize("poly", PRIMITIVE)
def test_products_are_those_of_galois(poly: int) -> None:
    oracle = galois.GF(2**8, irreducible_poly=poly, primitive_element=2)(EVERY_BYTE)
    expected = np.asarray(oracle[:, None] * oracle[None, :], dtype=np.uint8)
    field = Field(poly)
    np.testing.assert_array_equal(field.multiplication_table, expected)
    np.testing.assert_array_equal(field.multiply(EVERY_BYTE[:, None], EVERY_BYTE), expected)


@pytest.mark.parametrize("poly", PRIMITIVE)
def test_inverses_and_powers_are_those_of_galois(poly: int) -> None:
    nonzero = galois.GF(2**8, irreducible_poly=poly, primitive_element=2)(EVERY_BYTE[1:])
    field = Field(poly)
    np.testing.assert_array_equal(field.inverse(EVERY_BYTE[1:]), np.asarray(nonzero**-1))
    for exponent in (-300, -2, 0, 1, 2, 3, 254, 255, 1000):
        np.testing.assert_array_equal(field.power(EVERY_BYTE[1:], exponent), np.asarray(nonzero**exponent))


def test_powers_of_zero() -> None:
    field = Field()
    assert field.power(0, 0) == 1
    assert field.power(0, 5) == 0
    for undefined in (-1, [1, -1]):
        with pytest.raises(ZeroDivisionError):
            field.power([0, 0], undefined)
    with pytest.raises(ZeroDivisionError):
        field.inverse([1, 0])


def test_logarithms_undo_powers() -> None:
    field = Field()
    assert field.exp.shape == (510,)
    assert field.exp.dtype == np.uint8
    assert field.log.shape == (256,)
    assert field.log.dtype == np.int16
    np.testing.assert_array_equal(field.exp[field.log[1:]], EVERY_BYTE[1:])
    np.testing.assert_array_equal(field.exp[:255], field.exp[255:])
    assert field.log[0] == -1


def test_shared_tables_cannot_be_written() -> None:
    for table in (Field().exp, Field().log, Field().multiplication_table):
        with pytest.raises(ValueError, match="read-only"):
            table[0] = 1


@pytest.mark.parametrize(
    ("octal", "t"),
    # Generators of the binary BCH codes of length 255, t = 1..4: Lin and Costello; Peterson and Weldon
    # (seen, computed).
    [("435", 1), ("267543", 2), ("156720665", 3), ("75626641375", 4)],
)
def test_published_bch_generators_vanish_at_powers_of_alpha(octal: str, t: int) -> None:
    field = Field(0x11D)
    generator = int(octal, 8)
    ones = np.flatnonzero([generator >> i & 1 for i in range(generator.bit_length())])
    values = [int(np.bitwise_xor.reduce(field.power(field.exp[j], ones))) for j in range(1, 2 * t + 2)]
    assert values[: 2 * t] == [0] * (2 * t)
    assert values[2 * t] != 0, "the next root does not belong to the code"


@pytest.mark.parametrize("poly", [0, 0x1D, 0x11B, 0x100, 0x21D, -1])
def test_other_polynomials_are_refused(poly: int) -> None:
    """0x11B (FIPS 197) is irreducible, but x generates only 51 elements (memory)."""
    with pytest.raises(UsageError, match="0x11d"):
        Field(poly)
