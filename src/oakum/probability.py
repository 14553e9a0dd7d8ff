"""Distributions in logarithms, and exact intervals for counts.

Sums here have positive terms only, and are made by `log_sum`, so that a chance of 1e-30 (or of 1e-300) has as
many right digits as one of a half. All logarithms are natural; -inf stands for what cannot happen.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache, cached_property
from math import lgamma

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.outcomes import Floats, SymbolChances, log_sum

Patterns = tuple[NDArray[np.int_], NDArray[np.int_], Floats]
"""Two numbers that go together, and a logarithm for each pair."""

IMPOSSIBLE = -np.inf

PRUNED = 96
"""Check symbols up to which patterns that cannot matter are left out of the sums."""

NEGLIGIBLE = 45.0
"""A term so many e-folds below a sum is below the precision of a float, however many there are of them."""


def log_factorials(n: int) -> Floats:
    """ln 0!, ln 1!, ..., ln n!."""
    return np.array([lgamma(i + 1) for i in range(n + 1)])


def log_complement(log_chance: float) -> float:
    """ln(1 - exp(x)) for x <= 0, right also next to 0 and far below it."""
    if log_chance >= 0:
        return IMPOSSIBLE
    if log_chance < -0.7:
        return float(np.log1p(-np.exp(log_chance)))
    return float(np.log(-np.expm1(log_chance)))


def log_any(log_chance: float, tries: float) -> float:
    """ln of the chance that something happens in at least one of so many independent tries."""
    if log_chance == IMPOSSIBLE or tries <= 0:
        return IMPOSSIBLE
    if log_chance + np.log(tries) < -36:  # The next term of the series is below the precision of a float.
        return float(log_chance + np.log(tries))
    return log_complement(tries * log_complement(log_chance)) if log_chance < 0 else 0.0


def log_binomial(n: int, log_chance: float) -> Floats:
    """ln P(X = i), i = 0..n, for X successes of n with the chance exp(`log_chance`) each."""
    i = np.arange(n + 1)
    factorials = log_factorials(n)
    choose = factorials[n] - factorials - factorials[::-1]
    return np.asarray(choose + _times(i, log_chance) + _times(n - i, log_complement(log_chance)))


def log_binomial_tail(n: int, log_chance: float, least: int) -> float:
    """ln P(X >= `least`) for the binomial distribution."""
    return log_sum(log_binomial(n, log_chance)[max(least, 0) :]) if least <= n else IMPOSSIBLE


def _times(counts: NDArray[np.int_], log_chance: float) -> Floats:
    """counts * log_chance, where no tries of an impossible thing are certain (0 * -inf = 0)."""
    if log_chance == IMPOSSIBLE:
        return np.where(counts > 0, IMPOSSIBLE, 0.0)
    return np.asarray(counts * log_chance)


# ---- one column of the outer code


@dataclass(frozen=True)
class ColumnChances:
    """The chance that one column is lost, in one pass, over symbols that meet their fates independently.

    A column is lost when both ways of decoding it fail: with the flagged symbols kept as received, when more
    than half as many symbols are wrong as there are check symbols left; with the flagged ones erased, when
    2 * errors + erasures is more than these. Later trials and feedback only save more.
    """

    n: int
    symbol: SymbolChances

    def log_loss(self, checks: int) -> float:
        """ln of the chance of loss with `checks` check symbols left by what was erased before.

        The sum over e unflagged errors and s flagged symbols of
        n!/(e! s! (n-e-s)!) a^e f^s (1-a-f)^(n-e-s) P(more than checks/2 - e of the s are wrong),
        for 2e + s > checks.
        """
        if checks < 0:
            return 0.0
        if self.symbol.flagged == IMPOSSIBLE:
            return log_binomial_tail(self.n, self.symbol.wrong_as_received, checks // 2 + 1)
        return self._sum(checks, self._patterns if checks > PRUNED else self._likely)

    def _sum(self, checks: int, patterns: Patterns) -> float:
        errors, flagged, weights = patterns
        far = 2 * errors + flagged > checks
        errors, flagged = errors[far], flagged[far]
        needed = np.maximum(checks // 2 + 1 - errors, 0)
        return log_sum(weights[far] + self._wrong_of_flagged[flagged, needed])

    @cached_property
    def _likely(self) -> Patterns:
        """The patterns that matter for up to PRUNED check symbols: fewer of these never make less loss."""
        errors, flagged, weights = self._patterns
        kept = weights > self._sum(PRUNED, self._patterns) - NEGLIGIBLE
        return errors[kept], flagged[kept], weights[kept]

    @cached_property
    def _patterns(self) -> Patterns:
        """All (e, s) with e + s <= n, and the logarithms of their chances."""
        a, f = self.symbol.wrong_unflagged, self.symbol.flagged
        errors, flagged, ways = _multinomials(self.n)
        weights = ways + _times(errors, a) + flagged * f
        weights += _times(self.n - errors - flagged, log_complement(float(np.logaddexp(a, f))))
        return errors, flagged, weights

    @cached_property
    def _wrong_of_flagged(self) -> Floats:
        """[s, i]: ln of the chance that at least i of s flagged symbols are wrong, float64[n+1, n+2]."""
        a, f = self.symbol.wrong_unflagged, self.symbol.flagged
        kept = self.symbol.wrong_as_received
        # Wrong as received is either unflagged or flagged, so that the difference is the flagged part.
        hit = min(kept + log_complement(a - kept) - f, 0.0)
        flagged, wrong, ways = _binomials(self.n)
        tails = np.full((self.n + 1, self.n + 2), IMPOSSIBLE)
        tails[flagged, wrong] = ways + wrong * hit + _times(flagged - wrong, log_complement(hit))
        tails = np.logaddexp.accumulate(tails[:, ::-1], axis=1)[:, ::-1]
        tails[:, 0] = 0.0
        return np.asarray(tails)


@cache
def _multinomials(n: int) -> Patterns:
    """e and s for all e + s <= n, and ln of n! / (e! s! (n-e-s)!)."""
    errors, flagged = np.nonzero(np.add.outer(np.arange(n + 1), np.arange(n + 1)) <= n)
    logs = log_factorials(n)
    return errors, flagged, logs[n] - logs[errors] - logs[flagged] - logs[n - errors - flagged]


@cache
def _binomials(n: int) -> Patterns:
    """s and i for all i <= s <= n, and ln of s! / (i! (s-i)!)."""
    of, chosen = np.tril_indices(n + 1)
    logs = log_factorials(n)
    return of, chosen, logs[of] - logs[chosen] - logs[of - chosen]


# ---- exact intervals


def clopper_pearson(successes: int, tries: int, level: float = 0.95) -> tuple[float, float]:
    """The exact two-sided interval of a rate (Clopper and Pearson, Biometrika 26, 1934).

    Its ends are the rates at which so many or more, and so few or fewer, have the chance (1 - level) / 2.
    Raises ValueError unless 0 <= successes <= tries and 0 < level < 1.
    """
    if not 0 <= successes <= tries or not 0 < level < 1:
        raise ValueError(f"no interval for {successes} of {tries} at {level}")
    half = float(np.log((1 - level) / 2))

    def rate_where(least: int) -> float:
        return _rising_root(lambda p: log_binomial_tail(tries, float(np.log(p)), least) - half)

    def rate_upper() -> float:
        # P(X <= successes) = P(failures >= tries - successes), with the chance 1 - p.
        least = tries - successes
        return 1 - _rising_root(lambda q: log_binomial_tail(tries, float(np.log(q)), least) - half)

    low = 0.0 if successes == 0 else rate_where(successes)
    high = 1.0 if successes == tries else rate_upper()
    return low, high


def _rising_root(rising: Callable[[float], float]) -> float:
    """Where a function that rises on (0, 1) crosses 0, to the last bits of a float."""
    low, high = 0.0, 1.0
    while low < (middle := (low + high) / 2) < high:
        if high - low < 1e-15 * high:
            break
        if rising(middle) < 0:
            low = middle
        else:
            high = middle
    return (low + high) / 2


# ---- hits of a column by runs of damage


def convolve(a: Floats, b: Floats) -> Floats:
    """The distribution of a sum; the last entry of each stands for its value and everything above."""
    size = len(a)
    out = np.full(size, IMPOSSIBLE)
    for i in np.flatnonzero(a > IMPOSSIBLE).tolist():
        shifted = np.full(size, IMPOSSIBLE)
        shifted[i:] = b[: size - i]
        shifted[-1] = log_sum(b[size - 1 - i :])
        out = np.logaddexp(out, a[i] + shifted)
    return out


def log_power(single: Floats, times: int) -> Floats:
    """The distribution of the sum of `times` independent copies, by repeated squaring."""
    total = np.full(len(single), IMPOSSIBLE)
    total[0] = 0.0
    while times:
        if times & 1:
            total = convolve(total, single)
        times >>= 1
        if times:
            single = convolve(single, single)
    return total


def log_occupancy(places: int, log_chance: float, times: int, size: int) -> Floats:
    """How many of `places` are hit when each of so many tries hits one of them, any, with the given chance.

    ln P(0), ..., P(size-2), P(size-1 or more); a place that is hit again counts once. One step a try:
    from d places hit to d + 1 with the chance p (places - d) / places.
    """
    hit = np.arange(size)
    with np.errstate(divide="ignore"):
        more = log_chance + np.log(np.maximum(places - hit, 0) / places)
    more[-1] = IMPOSSIBLE
    stay = np.array([log_complement(m) for m in more])
    logs = np.full(size, IMPOSSIBLE)
    logs[0] = 0.0
    for _ in range(times):
        moved = logs[:-1] + more[:-1]
        logs = logs + stay
        logs[1:] = np.logaddexp(logs[1:], moved)
    return logs


def log_compound_poisson(rates: dict[int, float], size: int) -> Floats:
    """ln P(X = 0), ..., P(X = size-2), P(X >= size-1) where j is added `rates[j]` times on average.

    Panjer's recursion: x P(x) = sum over j of j rate_j P(x - j), starting from P(0) = exp(-sum of the rates).
    The tail is summed over as many terms as matter.
    """
    rates = {j: rate for j, rate in rates.items() if j > 0 and rate > 0}
    if not rates:
        return np.array([0.0] + [IMPOSSIBLE] * (size - 1))
    mean = sum(j * rate for j, rate in rates.items())
    spread = sum(j * j * rate for j, rate in rates.items()) ** 0.5
    steps = list(rates)
    weights = np.log([j * rates[j] for j in steps])
    far = max(size + 20 * max(steps), int(mean + 12 * spread) + 2 * size)
    if far > 100_000:  # So many hits that less than all is out of the question.
        return np.array([IMPOSSIBLE] * (size - 1) + [0.0])
    logs = np.full(far, IMPOSSIBLE)
    logs[0] = -sum(rates.values())
    for x in range(1, far):
        before = np.array([logs[x - j] if j <= x else IMPOSSIBLE for j in steps])
        logs[x] = log_sum(weights + before) - np.log(x)
    return np.append(logs[: size - 1], log_sum(logs[size - 1 :]))
