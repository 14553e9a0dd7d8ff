"""Chances that may be too small for a float, as people read them and as JSON holds them."""

from __future__ import annotations

from math import exp, floor, inf, log

from oakum.report.units import percent

_SURE = 0.01
"""From here on a chance is shown as a share of a hundred."""


def chance(log_chance: float) -> str:
    """`37 %`, `5.7e-34`, `3.1e-489` or `never` for a natural logarithm."""
    if log_chance == -inf:
        return "never"
    if log_chance >= log(_SURE):
        return percent(min(1.0, exp(log_chance)), 1 if log_chance < log(0.1) else 0)
    tens = log_chance / log(10)
    exponent = floor(tens)
    mantissa = f"{10 ** (tens - exponent):.1f}"
    if mantissa == "10.0":
        mantissa, exponent = "1.0", exponent + 1
    return f"{mantissa}e{exponent}"


def between(bounds: tuple[float, float]) -> str:
    """`2.1e-12 to 3.0e-11`, or one of them when they read the same."""
    low, high = map(chance, bounds)
    return low if low == high else f"{low} to {high}"


def log10(log_chance: float) -> float | None:
    """The decimal logarithm for JSON, which has no infinity: None where it cannot happen."""
    return None if log_chance == -inf else round(log_chance / log(10), 6)
