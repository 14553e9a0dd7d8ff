"""Counting statistics: exact intervals for rare events, and the trend of a rate over time.

Flips and bursts are counts over an exposure (bits or bytes read), so everything here is Poisson: the
interval of Garwood ("Fiducial limits for the Poisson distribution", Biometrika 28, 1936), which is exact in
that it never covers less than it says, and log-linear regression by iteratively reweighted least squares
(McCullagh and Nelder, "Generalized Linear Models", chapter 2).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

CONFIDENCE = 0.95
_LARGE = 100_000
"""Counts above which the cube-root approximation is good to one part in 10^7, and the exact one slow."""

_ROUNDS = 200


def regularised_gamma(a: float, x: float) -> tuple[float, float]:
    """P(a, x) and Q(a, x), the regularised incomplete gamma functions (a > 0, x >= 0); P + Q = 1.

    The power series below a + 1 and Lentz's continued fraction above (Abramowitz and Stegun 6.5.29, 6.5.31),
    each where it converges fast, so that the smaller of the two keeps its relative precision.
    """
    if x <= 0:
        return 0.0, 1.0
    scale = math.exp(a * math.log(x) - x - math.lgamma(a))
    if x < a + 1:
        lower = min(1.0, scale * _series(a, x))
        return lower, 1 - lower
    upper = min(1.0, scale * _continued_fraction(a, x))
    return 1 - upper, upper


def _series(a: float, x: float) -> float:
    term = total = 1 / a
    while term > total * 1e-17:
        a += 1
        term *= x / a
        total += term
    return total


def _continued_fraction(a: float, x: float) -> float:
    tiny = 1e-300
    b = x + 1 - a
    c, d = 1 / tiny, 1 / b
    value = d
    step, i = 0.0, 0
    while abs(step - 1) > 1e-16 and i < 100_000:
        i += 1
        numerator = -i * (i - a)
        b += 2
        d = 1 / (numerator * d + b or tiny)
        c = b + numerator / c or tiny
        step = c * d
        value *= step
    return value


def poisson_tail(count: int, mean: float) -> float:
    """The chance of `count` or more events where `mean` are expected."""
    return 1.0 if count <= 0 else regularised_gamma(count, mean)[0]


def poisson_interval(count: int, confidence: float = CONFIDENCE) -> tuple[float, float]:
    """Garwood's two-sided interval for the mean of a Poisson variable of which `count` events were seen."""
    tail = (1 - confidence) / 2
    low = 0.0 if count == 0 else _mean_with_tail(count, tail)
    return low, _mean_with_tail(count + 1, 1 - tail)


def poisson_upper_limit(count: int, confidence: float = CONFIDENCE) -> float:
    """The one-sided upper limit of the mean: 2.9957 where nothing was seen and `confidence` is 95 %."""
    return _mean_with_tail(count + 1, confidence)


def _mean_with_tail(count: int, tail: float) -> float:
    """The mean for which `count` or more events have the chance `tail` (half a chi-squared quantile)."""
    z = NormalDist().inv_cdf(tail)
    about = count * max(1e-9, 1 - 1 / (9 * count) + z / (3 * math.sqrt(count))) ** 3  # Wilson and Hilferty
    if count > _LARGE:
        return about
    low, high = 0.0, 2 * about + 10
    for _ in range(_ROUNDS):
        middle = (low + high) / 2
        if middle in (low, high):
            break
        low, high = (middle, high) if poisson_tail(count, middle) < tail else (low, middle)
    return (low + high) / 2


def binomial_tail(count: int, trials: int, chance: float) -> float:
    """The chance of `count` or more successes in `trials`, summed from its largest term on."""
    if count <= 0:
        return 1.0
    if count > trials or chance <= 0:
        return 0.0
    if chance >= 1:
        return 1.0
    if count <= trials * chance:  # The other tail is the short one.
        return 1 - binomial_tail(trials - count + 1, trials, 1 - chance)
    log_term = (
        math.lgamma(trials + 1) - math.lgamma(count + 1) - math.lgamma(trials - count + 1)
        + count * math.log(chance) + (trials - count) * math.log1p(-chance)
    )  # fmt: skip
    ratio, total, term = chance / (1 - chance), 0.0, 1.0
    while term > total * 1e-17:
        total += term
        term *= ratio * (trials - count) / (count + 1)
        count += 1
    return min(1.0, math.exp(log_term + math.log(total)))


@dataclass(frozen=True)
class PoissonFit:
    """log(rate) = intercept + slope * time, with the covariance of the two.

    `dispersion` is Pearson's chi-squared over its degrees of freedom; where it is above 1 the covariance has
    been multiplied by it, as counts that come in clumps vary by more than Poisson.
    """

    intercept: float
    slope: float
    covariance: NDArray[np.float64]
    dispersion: float

    def rate(self, time: float, sigmas: float = 0.0) -> float:
        """The rate at `time`, or its limit so many standard errors above."""
        spread = math.sqrt(max(0.0, float(self._row(time) @ self.covariance @ self._row(time))))
        return math.exp(min(700.0, self.intercept + self.slope * time + sigmas * spread))

    @property
    def slope_interval(self) -> tuple[float, float]:
        """The slope's 95 % interval (Wald)."""
        spread = NormalDist().inv_cdf((1 + CONFIDENCE) / 2) * math.sqrt(float(self.covariance[1, 1]))
        return self.slope - spread, self.slope + spread

    @staticmethod
    def _row(time: float) -> NDArray[np.float64]:
        return np.array([1.0, time])


def fit_poisson(
    times: Sequence[float], counts: Sequence[float], exposures: Sequence[float]
) -> PoissonFit | None:
    """Fit a log-linear rate to counts over exposures; None where the data cannot fix it.

    That is so without any event, with fewer than two different times, and where all events fell on the
    first or the last time (the slope of greatest likelihood is then infinite).
    """
    t, y, e = (np.asarray(v, np.float64) for v in (times, counts, exposures))
    seen = t[y > 0]
    if not len(seen) or t.min() == t.max() or (seen == t.min()).all() or (seen == t.max()).all():
        return None
    centre = float(t.mean())
    design = np.column_stack([np.ones_like(t), t - centre])
    beta = np.array([math.log(y.sum() / e.sum()), 0.0])
    mean = e * np.exp(design @ beta)
    for _ in range(_ROUNDS):
        # 1. Working response; 2. weighted least squares with the means as weights; 3. again until it stands.
        response = design @ beta + (y - mean) / mean
        information = design.T @ (mean[:, None] * design)
        new = np.linalg.solve(information, design.T @ (mean * response))
        step = np.clip(new - beta, -2.0, 2.0)  # A full step can overflow when the first guess is far off.
        beta = beta + step
        mean = np.maximum(e * np.exp(np.clip(design @ beta, -700, 700)), 1e-300)
        if float(np.abs(step).max()) < 1e-12:
            break
    covariance = np.linalg.inv(design.T @ (mean[:, None] * design))
    freedom = len(t) - 2
    dispersion = float(((y - mean) ** 2 / mean).sum()) / freedom if freedom > 0 else 1.0
    shift = np.array([[1.0, -centre], [0.0, 1.0]])
    return PoissonFit(
        float(beta[0] - beta[1] * centre), float(beta[1]),
        max(1.0, dispersion) * (shift @ covariance @ shift.T), dispersion,
    )  # fmt: skip
