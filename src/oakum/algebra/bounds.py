"""Bounds on what any code can do, and on what is known to exist.

Finite bounds are exact, in integers. Asymptotic ones are for binary codes and give the relative distance
delta = d/n that goes with a rate R as n grows. H is the binary entropy function. Sources: MacWilliams and
Sloane, The Theory of Error-Correcting Codes, chapters 1, 2 and 17; for the bounds on concatenated codes
Dumer, Concatenated codes and their multilevel generalizations (Handbook of Coding Theory, 1998).
"""

from __future__ import annotations

from collections.abc import Callable
from math import comb, log, log2
from typing import NamedTuple

import numpy as np

# ---- finite length


def singleton_distance(n: int, k: int) -> int:
    """The largest minimum distance that the Singleton bound allows: n - k + 1, over any alphabet."""
    _check_code(n, k)
    return n - k + 1


def ball_volume(n: int, radius: int, q: int = 2) -> int:
    """The words of length n over q letters within Hamming distance `radius` of one word."""
    return sum(comb(n, i) * (q - 1) ** i for i in range(min(radius, n) + 1))


def sphere_packing_dimension(n: int, d: int, q: int = 2) -> int:
    """The largest k that the sphere-packing (Hamming) bound allows: q^k * V(n, floor((d-1)/2)) <= q^n.

    An even d is punctured first, to [n-1, k, d-1], which makes the bound sharper.
    """
    _check_distance(n, d)
    if d % 2 == 0:
        n, d = n - 1, d - 1
    return _floor_log(q**n // ball_volume(n, (d - 1) // 2, q), q)


def sphere_packing_distance(n: int, k: int, q: int = 2) -> int:
    """The largest d for which the sphere-packing bound allows dimension k."""
    _check_code(n, k)
    return max(d for d in range(1, n + 1) if k <= sphere_packing_dimension(n, d, q))


def plotkin_size(n: int, d: int) -> int | None:
    """The most codewords of a binary code that the Plotkin bound allows; None where it says nothing, 2d < n.

    2 * floor(d / (2d - n)) for even d with 2d > n, and 4d for n = 2d; an odd d is lengthened by a parity bit
    first (MacWilliams and Sloane, chapter 2, theorem 11).
    """
    _check_distance(n, d)
    if d % 2:
        n, d = n + 1, d + 1
    if 2 * d > n:
        return 2 * (d // (2 * d - n))
    return 4 * d if 2 * d == n else None


def plotkin_dimension(n: int, d: int) -> int:
    """The largest k of a binary linear code that the Plotkin bound allows.

    Where 2d < n the code is shortened to length 2d first, which costs at most one dimension a bit.
    """
    _check_distance(n, d)
    even = d + d % 2
    kept = min(n + d % 2, 2 * even)
    size = plotkin_size(kept, even)
    assert size is not None, "the shortened length is at most 2d"
    return _floor_log(size, 2) + n + d % 2 - kept


def griesmer_length(k: int, d: int, q: int = 2) -> int:
    """The least length of a linear [n, k, d] code by the Griesmer bound: the sum of ceil(d / q^i), i < k."""
    if k < 1 or d < 1:
        raise ValueError(f"no linear code has dimension {k} and distance {d}")
    return sum(-(-d // q**i) for i in range(k))


def gilbert_varshamov_dimension(n: int, d: int, q: int = 2) -> int:
    """The largest k for which the bound of Gilbert and Varshamov promises a linear [n, k, d] code.

    Varshamov's form: one exists when V(n-1, d-2) < q^(n-k).
    """
    _check_distance(n, d)
    if d == 1:
        return n
    return n - 1 - _floor_log(ball_volume(n - 1, d - 2, q), q)


# ---- asymptotic, binary


class ConcatenationBound(NamedTuple):
    """A relative distance, and the rate of the inner code that reaches it."""

    relative_distance: float
    inner_rate: float


def entropy(p: float) -> float:
    """H(p) = -p log2 p - (1-p) log2 (1-p), for 0 <= p <= 1."""
    if p in (0, 1):
        return 0.0
    return -p * log2(p) - (1 - p) * log2(1 - p)


def inverse_entropy(h: float) -> float:
    """The p in [0, 1/2] with H(p) = h, for 0 <= h <= 1."""
    if not 0 <= h <= 1:
        raise ValueError(f"the entropy of a bit is from 0 to 1, not {h}")
    return _bisect(lambda p: entropy(p) - h, 0.0, 0.5)


def singleton_relative_distance(rate: float) -> float:
    """1 - R, over large alphabets."""
    return 1 - _rate(rate)


def plotkin_relative_distance(rate: float) -> float:
    """(1 - R) / 2."""
    return (1 - _rate(rate)) / 2


def sphere_packing_relative_distance(rate: float) -> float:
    """delta with H(delta / 2) = 1 - R: no binary codes do better."""
    return min(1.0, 2 * inverse_entropy(1 - _rate(rate)))


def gilbert_varshamov_relative_distance(rate: float) -> float:
    """delta with H(delta) = 1 - R: such binary codes exist."""
    return inverse_entropy(1 - _rate(rate))


def zyablov_relative_distance(rate: float) -> ConcatenationBound:
    """The maximum over inner rates r of (1 - R/r) * H^-1(1 - r).

    Reached by an outer code on the Singleton bound and an inner code on the Gilbert-Varshamov bound.
    """
    _rate(rate)

    def product(inner_rate: float) -> float:
        return (1 - rate / inner_rate) * inverse_entropy(1 - inner_rate)

    best = _maximise(product, rate, 1.0)
    return ConcatenationBound(product(best), best)


def blokh_zyablov_relative_distance(rate: float) -> float:
    """delta with R = 1 - H(delta) - delta * (integral of dx / H^-1(1 - x) from 0 to 1 - H(delta)).

    The limit of multilevel concatenation with ever more levels. With x = 1 - H(y), y = e^u the integral
    becomes that of log2((1-y)/y) du from ln(delta) to ln(1/2), which Gauss-Legendre quadrature takes with
    ease.
    """
    _rate(rate)
    nodes, weights = np.polynomial.legendre.leggauss(64)

    def reached(delta: float) -> float:
        low, high = log(delta), log(0.5)
        y = np.exp((high + low) / 2 + (high - low) / 2 * nodes)
        integral = (high - low) / 2 * float(weights @ np.log2((1 - y) / y))
        return 1 - entropy(delta) - delta * integral

    return _bisect(lambda delta: rate - reached(delta), 1e-12, 0.5)


def shannon_limit(rate: float) -> float:
    """The flip rate p of the binary symmetric channel whose capacity 1 - H(p) is `rate`.

    No code of that rate survives a higher one.
    """
    return inverse_entropy(1 - _rate(rate))


# ---- helpers


def _floor_log(value: int, base: int) -> int:
    """The largest e with base^e <= value, for value >= 1."""
    exponent, power = 0, base
    while power <= value:
        exponent, power = exponent + 1, power * base
    return exponent


def _bisect(rising: Callable[[float], float], low: float, high: float) -> float:
    """Where a rising function crosses 0, to the last bit of a float."""
    while low < (middle := (low + high) / 2) < high:
        if rising(middle) < 0:
            low = middle
        else:
            high = middle
    return high


def _maximise(unimodal: Callable[[float], float], low: float, high: float) -> float:
    """Where a function with one peak is largest, by golden-section search."""
    golden = (5**0.5 - 1) / 2
    for _ in range(60):
        left, right = high - golden * (high - low), low + golden * (high - low)
        if unimodal(left) < unimodal(right):
            low = left
        else:
            high = right
    return (low + high) / 2


def _rate(rate: float) -> float:
    if not 0 < rate < 1:
        raise ValueError(f"a rate lies between 0 and 1, not {rate}")
    return rate


def _check_code(n: int, k: int) -> None:
    if not 1 <= k <= n:
        raise ValueError(f"no code has length {n} and dimension {k}")


def _check_distance(n: int, d: int) -> None:
    if not 1 <= d <= n:
        raise ValueError(f"no code has length {n} and distance {d}")
