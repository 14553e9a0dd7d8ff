"""Parameters of concatenated codes, and the names and notations that lead to them."""

from itertools import product

import galois
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from oakum.algebra import NAMED, ConcatenatedCode, InnerCode, OuterCode, name_of, resolve_code
from oakum.algebra.bounds import griesmer_length, sphere_packing_dimension
from oakum.algebra.inner import macwilliams
from oakum.errors import UsageError


@pytest.mark.parametrize(
    ("name", "notation", "distance", "flips", "overhead"),
    [
        ("slim", "RS(255,239)+EH(128,120)", 17 * 4, 33, 0.138),
        ("shelf", "RS(255,223)+EH(128,120)", 33 * 4, 65, 0.220),
        ("stout", "RS(255,207)+EB(128,112)", 49 * 6, 146, 0.408),
        ("plain", "RS(255,223)", 33, 16, 0.143),
    ],
)
def test_named_codes(name: str, notation: str, distance: int, flips: int, overhead: float) -> None:
    """Guaranteed distance D*d (Forney 1966; common practice), of the bit expansion only D."""
    code = NAMED[name]
    assert code.notation == notation
    assert code.guaranteed_distance == distance
    assert code.guaranteed_flips == flips
    assert code.overhead == pytest.approx(overhead, abs=5e-4)
    assert code.rate == pytest.approx(code.outer.rate * code.inner.rate)
    assert code.parameters.rate == code.rate == code.k_bits / code.n_bits


def test_shelf_beside_its_bit_expansion() -> None:
    """n log2 q, k log2 q, the rate unchanged, the distance n - k + 1 (common practice)."""
    shelf = NAMED["shelf"]
    one = shelf.bit_expansion
    assert (one.n, one.k, one.d) == (255 * 8, 223 * 8, 33)
    assert one.rate == shelf.outer.rate
    assert one.relative_distance == pytest.approx(33 / 255 / 8)
    assert one.guaranteed_flips == 16
    same_data = shelf.same_data_expanded
    assert (same_data.n, same_data.k, same_data.d) == (15 * 2040, shelf.k_bits, 33)
    assert (shelf.n_bits, shelf.k_bits) == (255 * 128, 223 * 120)
    assert shelf.relative_distance / same_data.relative_distance == pytest.approx(4 * 15 / 16)


def test_without_inner_code_the_bit_expansion_is_all() -> None:
    plain = NAMED["plain"]
    assert plain.parameters == plain.bit_expansion == plain.same_data_expanded


@pytest.mark.parametrize("name", NAMED)
def test_parameters_keep_to_the_bounds(name: str) -> None:
    code = NAMED[name].parameters
    assert code.k <= sphere_packing_dimension(code.n, code.d)
    assert code.n >= griesmer_length(code.k, code.d)


def test_toy_code() -> None:
    """RS(6,2,5) over GF(16), 0x13, roots alpha^1..alpha^4, and [8,4,4]: a [48,8] code, d = 5 * 4.

    Weights 20:64 24:131 28:51 32:8 36:1 (computed).
    """
    field = galois.GF(2**4, irreducible_poly=0x13, primitive_element=2)
    outer = galois.ReedSolomon(15, 11, field=field, c=1)
    parity = np.array([[0, 1, 1, 1], [1, 0, 1, 1], [1, 1, 0, 1], [1, 1, 1, 0]])
    inner = np.concatenate([np.eye(4, dtype=int), parity], axis=1)
    messages = np.array(list(product(range(16), repeat=2)))
    padded = np.concatenate([np.zeros((256, 9), dtype=int), messages], axis=1)
    symbols = np.asarray(outer.encode(field(padded)))[:, 9:]
    words = (symbols[:, :, None] >> np.arange(4) & 1) @ inner % 2
    weights = np.bincount(words.sum(axis=(1, 2)), minlength=49).tolist()
    counts = {w: count for w, count in enumerate(weights) if count}
    assert counts == {0: 1, 20: 64, 24: 131, 28: 51, 32: 8, 36: 1}
    dual = macwilliams(weights)
    assert sum(dual) == 2**40
    assert macwilliams(dual) == weights


# ---- names and notation


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("shelf", "shelf"), ("  Slim ", "slim"), ("STOUT", "stout"), ("plain", "plain"),
        ("RS(255,223)+EH(128,120)", "shelf"), ("RS(255,223)+[128,120,4]", "shelf"),
        ("rs [ 255 , 223 , 33 ] + eh [128, 120]", "shelf"), ("RS(255,223)", "plain"),
        ("RS(255,239)+EB(128,112)", "RS(255,239)+EB(128,112)"), ("rs(20,10)", "RS(20,10)"),
        ("RS(255,239,17)+(128,104,8)", "RS(255,239)+EB(128,104)"),
    ],
)  # fmt: skip
def test_texts_that_name_a_code(text: str, name: str) -> None:
    code = resolve_code(text)
    assert code.name == name_of(code) == name
    assert resolve_code(code.notation) == resolve_code(code.name) == code


@pytest.mark.parametrize(
    ("text", "advice"),
    [
        ("", "slim, shelf, stout or plain"), ("shelv", "slim, shelf, stout or plain"),
        ("RS(255,223)+", r"RS\(255,223\)\+EH\(128,120\)"), ("RS(255)", r"RS\(255,223\)"),
        ("RS(300,200)", "255"), ("RS(10,10)", "0 < k < n"), ("RS(99999,3)", "slim"),
        ("RS(255,223,30)", "33"), ("RS(255,223)+EH(128,112)", r"EB\(128,112\)"),
        ("RS(255,223)+EB(64,51)", r"EB\(128,104\)"), ("RS(255,223)+[128,120,6]", "4"),
        ("RS(٢٥٥,٢٢٣)", "slim"), ("shelf\x00", "slim"), ("RS(255,223)\x1b[31m", "slim"),
    ],
)  # fmt: skip
def test_texts_that_do_not(text: str, advice: str) -> None:
    with pytest.raises(UsageError, match=advice) as caught:
        resolve_code(text)
    message = str(caught.value)
    assert message.isprintable(), "one line, no control characters"


@settings(max_examples=300, deadline=None, derandomize=True)
@given(st.text(alphabet="RSEHBrs0125839,+()[] \t", max_size=30) | st.text(max_size=20))
def test_any_text_gives_a_code_or_a_usage_error(text: str) -> None:
    try:
        code = resolve_code(text)
    except UsageError as error:
        assert str(error).isprintable()
    else:
        assert resolve_code(code.notation) == code


@settings(max_examples=100, deadline=None, derandomize=True)
@given(st.integers(2, 255), st.floats(0, 1), st.sampled_from([*InnerCode.known(), InnerCode.none()]))
def test_notation_leads_back(n: int, share: float, inner: InnerCode) -> None:
    code = ConcatenatedCode("made up", OuterCode(n, 1 + int(share * (n - 2))), inner)
    found = resolve_code(code.notation)
    assert (found.outer, found.inner) == (code.outer, code.inner)


def test_other_conventions_have_no_name() -> None:
    """A code over another field is not the named one."""
    other = ConcatenatedCode("", OuterCode(255, 223, field_poly=0x187), NAMED["shelf"].inner)
    assert name_of(other) != "shelf"
