"""Intervals against published values and their exact coverage; the regression against a general optimiser."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import optimize, special, stats

from oakum.statistics import (
    binomial_tail,
    fit_poisson,
    poisson_interval,
    poisson_tail,
    poisson_upper_limit,
    regularised_gamma,
)


def test_published_values() -> None:
    # Poisson, 10 events: 4.795389 to 18.390356; nothing seen: 2.995732 (one-sided). Computed with scipy.
    assert poisson_interval(10) == pytest.approx((4.795389, 18.390356), rel=1e-6)
    assert poisson_upper_limit(0) == pytest.approx(2.995732, rel=1e-6)
    assert poisson_upper_limit(0) == pytest.approx(-math.log(0.05), rel=1e-12)


@pytest.mark.parametrize("count", [0, 1, 2, 5, 37, 1000, 99_999, 100_001, 10**7])
def test_the_interval_is_that_of_chi_squared(count: int) -> None:
    """Garwood's limits are half the quantiles of chi-squared; `scipy` as the oracle."""
    low, high = poisson_interval(count)
    assert low == pytest.approx(stats.chi2.ppf(0.025, 2 * count) / 2 if count else 0, rel=2e-7)
    assert high == pytest.approx(stats.chi2.ppf(0.975, 2 * count + 2) / 2, rel=2e-7)


def test_coverage_computed_exactly() -> None:
    """The chance that the interval holds the true mean, by summing the Poisson probabilities."""
    limits = np.array([poisson_interval(count) for count in range(500)])
    for mean in np.concatenate([np.geomspace(0.01, 20, 300), np.linspace(20, 300, 1500)]):
        chance = stats.poisson.pmf(np.arange(500), mean)
        covered = chance[(limits[:, 0] <= mean) & (mean <= limits[:, 1])].sum()
        assert covered >= 0.95
        if mean >= 20:
            assert covered <= 0.975


@pytest.mark.parametrize("a", [0.5, 1, 3, 40, 5000])
@pytest.mark.parametrize("share", [0.01, 0.5, 0.9, 1.0, 1.1, 2.0, 5.0])
def test_the_incomplete_gamma_functions(a: float, share: float) -> None:
    lower, upper = regularised_gamma(a, a * share)
    assert lower == pytest.approx(special.gammainc(a, a * share), rel=1e-9, abs=1e-300)
    assert upper == pytest.approx(special.gammaincc(a, a * share), rel=1e-9, abs=1e-15)


def test_tails() -> None:
    for count, mean in [(0, 3.0), (1, 0.2), (66, 20.0), (66, 65.0), (5, 50.0)]:
        assert poisson_tail(count, mean) == pytest.approx(stats.poisson.sf(count - 1, mean), rel=1e-9)
    for count, trials, chance in [(0, 9, 0.5), (7, 50, 0.1), (8, 8, 1 / 64), (3, 50, 0.5), (9, 8, 0.5)]:
        expected = stats.binom.sf(count - 1, trials, chance)
        assert binomial_tail(count, trials, chance) == pytest.approx(expected, rel=1e-9)
    assert (binomial_tail(1, 5, 0.0), binomial_tail(5, 5, 1.0)) == (0.0, 1.0)


@pytest.mark.parametrize("seed", range(8))
def test_the_fit_is_that_of_greatest_likelihood(seed: int) -> None:
    """`scipy` maximises the likelihood without knowing of weights; its Hessian gives the covariance."""
    rng = np.random.default_rng([70, seed])
    times = np.sort(rng.uniform(0, 10, 7))
    exposures = rng.uniform(1e11, 1e13, 7)
    counts = rng.poisson(exposures * np.exp(-27.0 + 0.2 * times))
    fit = fit_poisson(times.tolist(), counts.tolist(), exposures.tolist())
    assert fit is not None

    def cost(beta: np.ndarray) -> float:
        log_mean = beta[0] - 27 + beta[1] * times + np.log(exposures)
        return float((np.exp(log_mean) - counts * log_mean).sum())

    best = optimize.minimize(cost, np.zeros(2), method="BFGS", options={"gtol": 1e-7})
    assert (fit.intercept + 27, fit.slope) == pytest.approx(tuple(best.x), abs=1e-5)
    mean = exposures * np.exp(fit.intercept + fit.slope * times)
    hessian = np.array([[mean.sum(), (mean * times).sum()], [(mean * times).sum(), (mean * times**2).sum()]])
    expected = np.linalg.inv(hessian) * max(1.0, fit.dispersion)
    assert fit.covariance == pytest.approx(expected, rel=1e-6)


def test_the_slope_interval_covers_as_it_says() -> None:
    rng = np.random.default_rng(71)
    times = np.arange(8.0)
    inside = 0
    for _ in range(400):
        counts = rng.poisson(50 * np.exp(0.1 * times))
        fit = fit_poisson(times.tolist(), counts.tolist(), [1.0] * 8)
        assert fit is not None
        low, high = fit.slope_interval
        inside += low <= 0.1 <= high
    assert inside >= 370  # 95 % of 400 is 380; fewer than 370 has a chance below 3 % for the nominal one


@pytest.mark.parametrize(
    ("times", "counts"), [([0, 1, 2], [0, 0, 0]), ([1, 1], [3, 4]), ([0, 1, 2], [0, 0, 5]), ([0, 1], [5, 0])]
)
def test_what_cannot_be_fitted(times: list[float], counts: list[float]) -> None:
    assert fit_poisson(times, counts, [1.0] * len(times)) is None
