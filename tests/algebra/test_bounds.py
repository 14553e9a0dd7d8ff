"""Bounds, against published values and against codes that are known to exist."""

import math

import pytest
from scipy.optimize import brentq

from oakum.algebra import NAMED, InnerCode, OuterCode, bounds

# Best known minimum distances, binary: Brouwer's tables (seen); of [128,104] it is 8 to 9.
BEST_KNOWN = [
    (9, 8, 2), (12, 8, 3), (13, 8, 4), (16, 8, 5), (24, 16, 4), (72, 64, 4), (80, 64, 6),
    (128, 120, 4), (128, 112, 6), (128, 104, 8),
]  # fmt: skip


@pytest.mark.parametrize(("n", "k", "d"), BEST_KNOWN)
def test_best_known_codes_lie_between_the_bounds(n: int, k: int, d: int) -> None:
    assert k <= bounds.sphere_packing_dimension(n, d)
    assert d <= bounds.sphere_packing_distance(n, k) <= bounds.singleton_distance(n, k)
    assert k <= bounds.plotkin_dimension(n, d)
    assert bounds.griesmer_length(k, d) <= n
    assert bounds.gilbert_varshamov_dimension(n, d) <= k
    # No better code is known, so the promise of Gilbert and Varshamov must not give one.
    assert bounds.gilbert_varshamov_dimension(n, d + 1) < k


def test_perfect_codes_meet_the_sphere_packing_bound() -> None:
    """The Hamming [7,4,3], [127,120,3] and Golay [23,12,7], ternary [11,6,5] codes (common practice)."""
    for n, k, d, q in ((7, 4, 3, 2), (127, 120, 3, 2), (23, 12, 7, 2), (11, 6, 5, 3)):
        assert bounds.ball_volume(n, (d - 1) // 2, q) * q**k == q**n
        assert bounds.sphere_packing_dimension(n, d, q) == k
        assert bounds.sphere_packing_distance(n, k, q) in (d, d + 1)
    assert bounds.sphere_packing_dimension(24, 8) == 12
    assert bounds.sphere_packing_dimension(128, 4) == 120


@pytest.mark.parametrize(
    ("n", "d", "size"),
    # MacWilliams and Sloane, chapter 2 (memory): simplex, Reed-Muller and Hadamard codes meet the bound.
    [(7, 4, 8), (8, 4, 16), (7, 3, 16), (15, 8, 16), (16, 8, 32), (11, 6, 12), (12, 6, 24), (20, 10, 40),
     (10, 6, 6), (9, 5, 6), (5, 5, 2)],
)  # fmt: skip
def test_plotkin(n: int, d: int, size: int) -> None:
    assert bounds.plotkin_size(n, d) == size
    assert bounds.plotkin_dimension(n, d) == int(math.log2(size))


def test_plotkin_beyond_its_range() -> None:
    """Silent for 2d < n; shortening then costs a dimension a bit. [9,8,2] lies on the bound."""
    assert bounds.plotkin_size(24, 8) is None
    assert bounds.plotkin_dimension(24, 8) == 8 + 5
    assert bounds.plotkin_dimension(9, 2) == 8


@pytest.mark.parametrize(
    ("k", "d", "length"),
    # Griesmer length at least (computed); first-order Reed-Muller [16,5,8] meets it (common practice).
    [(12, 8, 23), (64, 4, 68), (113, 6, 121), (5, 8, 16), (1, 9, 9)],
)
def test_griesmer(k: int, d: int, length: int) -> None:
    assert bounds.griesmer_length(k, d) == length


def test_griesmer_over_larger_alphabets_is_singleton_for_short_codes() -> None:
    """For d <= q every term but the first is 1: n >= d + k - 1, which Reed-Solomon codes meet."""
    code = OuterCode(255, 223)
    assert bounds.griesmer_length(code.k, code.distance, q=256) == code.n
    assert bounds.singleton_distance(code.n, code.k) == code.distance


def test_gilbert_varshamov_promises_no_more_than_exists() -> None:
    """Hamming codes: V(n-1, 1) = n < 2^r holds exactly up to n = 2^r - 1 (common practice)."""
    assert bounds.gilbert_varshamov_dimension(127, 3) == 120
    assert bounds.gilbert_varshamov_dimension(128, 3) == 120
    assert bounds.gilbert_varshamov_dimension(10, 1) == 10
    assert bounds.gilbert_varshamov_dimension(10, 2) == 9
    for code in InnerCode.known():
        assert bounds.gilbert_varshamov_dimension(code.n, code.d) < code.k


@pytest.mark.parametrize(
    ("rate", "gilbert_varshamov", "zyablov", "blokh_zyablov"),
    # Computed.
    [
        (0.5, 0.110028, 0.015396, 0.040615),
        (0.75, 0.041693, 0.002535, 0.012072),
        (0.9, 0.012987, 0.000299, 0.003046),
    ],
)
def test_relative_distances(
    rate: float, gilbert_varshamov: float, zyablov: float, blokh_zyablov: float
) -> None:
    assert bounds.gilbert_varshamov_relative_distance(rate) == pytest.approx(gilbert_varshamov, abs=5e-7)
    assert bounds.zyablov_relative_distance(rate).relative_distance == pytest.approx(zyablov, abs=5e-7)
    assert bounds.blokh_zyablov_relative_distance(rate) == pytest.approx(blokh_zyablov, abs=5e-7)


def test_relative_distances_at_rate_one_half() -> None:
    """Sphere packing 0.220056; Zyablov's best inner rate 0.675 (computed)."""
    assert bounds.sphere_packing_relative_distance(0.5) == pytest.approx(0.220056, abs=5e-7)
    assert bounds.zyablov_relative_distance(0.5).inner_rate == pytest.approx(0.675, abs=5e-4)


@pytest.mark.parametrize("rate", [0.01, 0.1, 0.3, 0.5, 0.7, 0.9, 0.99])
def test_order_of_the_asymptotic_bounds(rate: float) -> None:
    exists = bounds.gilbert_varshamov_relative_distance(rate)
    zyablov = bounds.zyablov_relative_distance(rate).relative_distance
    assert 0 < zyablov < bounds.blokh_zyablov_relative_distance(rate) < exists
    assert exists < min(bounds.sphere_packing_relative_distance(rate), bounds.plotkin_relative_distance(rate))
    assert bounds.plotkin_relative_distance(rate) < bounds.singleton_relative_distance(rate)


@pytest.mark.parametrize(
    ("code", "limit"),
    # The Shannon limit of the binary symmetric channel at 14, 22, 31 and 41 % overhead (computed, for the
    # rates of the codes of that overhead).
    [
        (NAMED["slim"].rate, 0.0165), (NAMED["shelf"].rate, 0.0272),
        (223 / 255 * 112 / 128, 0.0384), (NAMED["stout"].rate, 0.0508),
    ],
)  # fmt: skip
def test_shannon_limit(code: float, limit: float) -> None:
    assert abs(bounds.shannon_limit(code) - limit) <= 5e-5


@pytest.mark.parametrize("h", [1e-9, 0.01, 0.5, 0.9, 0.999999])
def test_inverse_entropy_against_scipy(h: float) -> None:
    expected = brentq(lambda p: bounds.entropy(p) - h, 1e-300, 0.5, xtol=1e-300, rtol=1e-14)
    assert bounds.inverse_entropy(h) == pytest.approx(expected, rel=1e-9)


def test_entropy_at_its_ends() -> None:
    assert bounds.entropy(0) == bounds.entropy(1) == 0
    assert bounds.entropy(0.5) == 1
    assert bounds.inverse_entropy(0) == pytest.approx(0, abs=1e-300)
    assert bounds.inverse_entropy(1) == pytest.approx(0.5)


@pytest.mark.parametrize(
    "call",
    [
        lambda: bounds.singleton_distance(5, 6), lambda: bounds.sphere_packing_dimension(5, 0),
        lambda: bounds.griesmer_length(0, 3), lambda: bounds.plotkin_dimension(5, 6),
        lambda: bounds.shannon_limit(1.0), lambda: bounds.zyablov_relative_distance(0),
        lambda: bounds.inverse_entropy(1.5), lambda: bounds.gilbert_varshamov_dimension(5, 6),
    ],
)  # fmt: skip
def test_nonsense_is_refused(call) -> None:
    with pytest.raises(ValueError, match=r"no (linear )?code|between 0 and 1|from 0 to 1"):
        call()
