"""Distributions and intervals against printed values and `scipy`."""

from itertools import product
from math import comb, exp, inf, log

import numpy as np
import pytest
from scipy import stats

from oakum.algebra.inner import InnerCode
from oakum.algebra.outcomes import SymbolChances, symbol_chances
from oakum.probability import (
    ColumnChances,
    clopper_pearson,
    convolve,
    log_any,
    log_binomial,
    log_binomial_tail,
    log_complement,
    log_compound_poisson,
    log_power,
)

# ---- binomial tails (computed with the survival function of scipy)


@pytest.mark.parametrize(
    ("rate", "t16", "t8"),
    [
        (0.001, "1.06095081e-25", "8.72983413e-12"),
        (0.005, "3.29190230e-14", "7.06041402e-06"),
        (0.01, "1.40022869e-09", "1.21179161e-03"),
        (0.02, "1.93261283e-05", "7.27915184e-02"),
        (0.05, "1.41386038e-01", "8.94293826e-01"),
    ],
)
def test_more_wrong_symbols_than_can_be_corrected(rate: float, t16: str, t8: str) -> None:
    for t, printed in ((16, t16), (8, t8)):
        assert f"{exp(log_binomial_tail(255, log(rate), t + 1)):.8e}" == printed


@pytest.mark.parametrize(
    ("p", "printed", "g975"),
    [(1e-4, "5.400e-15", 5e-15), (1e-5, "6.336e-24", 6.3e-24), (1e-6, "6.438e-33", 6.4e-33)],
)
def test_output_error_rate_of_the_code_of_optical_transport(p: float, printed: str, g975: float) -> None:
    # Printed in ITU-T G.975 as 5e-15, 6.3e-24, 6.4e-33 (memory); computed from the sum over i > t of
    # (i/n) P(i) p/ps. That sum is (ps Q) p/ps with Q the chance of t or more among the other n - 1 symbols.
    symbol = symbol_chances(InnerCode.none(), p).wrong_as_received
    ratio = exp(log_binomial_tail(254, symbol, 8) + log(p))
    assert f"{ratio:.3e}" == printed
    assert ratio == pytest.approx(g975, rel=0.1)


def test_tails_far_below_the_smallest_float() -> None:
    # One term is all that counts: C(255, 60) p^60 (common practice).
    assert log_binomial_tail(255, log(1e-9), 60) == pytest.approx(
        log(comb(255, 60)) - 540 * log(10), abs=1e-6
    )


@pytest.mark.parametrize(("t", "exact"), [(8, "2.08533645e-05"), (16, "2.60888880e-14")])
def test_miscorrection_of_a_random_word_is_about_one_in_t_factorial(t: int, exact: str) -> None:
    # McEliece and Swanson, IEEE Trans. Inform. Theory 32, 1986 (computed). The share of all words within t of
    # a codeword is V(255, t) 256^-2t; V(255, t) 256^-255 is the chance of at most t symbols not zero.
    share = exp(log_binomial_tail(255, log(1 / 256), 255 - t) + (255 - 2 * t) * log(256))
    assert f"{share:.8e}" == exact


# ---- intervals


def test_clopper_pearson_as_printed() -> None:
    # scipy documentation, 7 of 50 at 95 % (seen, computed).
    low, high = clopper_pearson(7, 50)
    assert (f"{low:.8f}", f"{high:.8f}") == ("0.05819170", "0.26739600")


@pytest.mark.parametrize(("successes", "tries"), [(0, 1), (0, 20), (20, 20), (1, 3), (57, 60), (500, 1000)])
@pytest.mark.parametrize("level", [0.9, 0.99])
def test_clopper_pearson_against_scipy(successes: int, tries: int, level: float) -> None:
    expected = stats.binomtest(successes, tries).proportion_ci(level, "exact")
    assert clopper_pearson(successes, tries, level) == pytest.approx((expected.low, expected.high), abs=1e-12)


def test_nothing_of_many() -> None:
    # One-sided upper limit 2.995732/n (computed): -ln 0.05, for large n.
    assert clopper_pearson(0, 10**5, 0.9)[1] * 10**5 == pytest.approx(2.995732, abs=5e-5)


@pytest.mark.parametrize("given", [(-1, 5, 0.9), (6, 5, 0.9), (1, 5, 1.0)])
def test_no_interval_for_nonsense(given: tuple[int, int, float]) -> None:
    with pytest.raises(ValueError, match="no interval"):
        clopper_pearson(*given)


# ---- columns


def test_loss_of_a_column_against_listing_all_outcomes() -> None:
    a, f_wrong, f_right = 0.05, 0.08, 0.11
    symbol = SymbolChances(log(a + f_wrong), log(a), log(f_wrong + f_right))
    n = 7
    for checks in range(n + 1):
        total = 0.0
        for fates in product(range(4), repeat=n):
            e, w, s = fates.count(1), fates.count(2), fates.count(3)
            as_received, erased = 2 * (e + w) > checks, 2 * e + w + s > checks
            if as_received and erased:
                total += a**e * f_wrong**w * f_right**s * (1 - a - f_wrong - f_right) ** (n - e - w - s)
        assert ColumnChances(n, symbol).log_loss(checks) == pytest.approx(log(total), rel=1e-9)
    assert ColumnChances(n, symbol).log_loss(-1) == 0.0


def test_leaving_out_what_cannot_matter_changes_nothing() -> None:
    columns = ColumnChances(255, symbol_chances(InnerCode.known()[0], 4e-3))
    for checks in (0, 7, 32, 95):
        assert columns.log_loss(checks) == pytest.approx(columns._sum(checks, columns._patterns), rel=1e-13)


# ---- small pieces


def test_complement_and_any() -> None:
    assert exp(log_complement(log(0.3))) == pytest.approx(0.7)
    assert log_complement(-1e-20) == pytest.approx(log(1e-20))
    assert log_complement(0.0) == -inf
    assert exp(log_any(log(0.01), 200)) == pytest.approx(1 - 0.99**200, rel=1e-12)
    assert log_any(log(1e-300), 1e6) == pytest.approx(log(1e-294), rel=1e-12)
    assert log_any(-inf, 10) == -inf
    assert log_any(0.0, 10) == 0.0


def test_binomials_against_scipy() -> None:
    assert np.exp(log_binomial(40, log(0.3))) == pytest.approx(stats.binom.pmf(range(41), 40, 0.3))
    assert log_binomial(5, -inf)[0] == 0.0


def test_compound_poisson_without_compounds_is_poisson() -> None:
    logs = log_compound_poisson({1: 2.5}, 12)
    assert np.exp(logs[:-1]) == pytest.approx(stats.poisson.pmf(range(11), 2.5))
    assert exp(logs[-1]) == pytest.approx(stats.poisson.sf(10, 2.5))


def test_compound_poisson_against_drawing_it() -> None:
    rng = np.random.default_rng(8)
    drawn = rng.poisson(1.2, 400_000) + 3 * rng.poisson(0.4, 400_000)
    logs = log_compound_poisson({1: 1.2, 3: 0.4}, 9)
    for x in range(8):
        assert np.mean(drawn == x) == pytest.approx(exp(logs[x]), abs=5 * (exp(logs[x]) / 400_000) ** 0.5)
    assert np.mean(drawn >= 8) == pytest.approx(exp(logs[8]), abs=5 * (exp(logs[8]) / 400_000) ** 0.5)


def test_compound_poisson_of_more_hits_than_places() -> None:
    assert log_compound_poisson({1: 1e9}, 5).tolist() == [-inf] * 4 + [0.0]
    assert log_compound_poisson({}, 3).tolist() == [0.0, -inf, -inf]


def test_powers_are_binomials_with_a_capped_tail() -> None:
    with np.errstate(divide="ignore"):
        single = np.log(np.array([0.7, 0.3, 0.0, 0.0]))
    cubed = np.exp(log_power(single, 5))
    assert cubed[:3] == pytest.approx(stats.binom.pmf(range(3), 5, 0.3))
    assert cubed[3] == pytest.approx(stats.binom.sf(2, 5, 0.3))
    assert np.exp(convolve(single, log_power(single, 4))) == pytest.approx(cubed)
