"""Loss against the flip rate as a line chart: the scales, and the chart in characters.

Both axes are logarithmic. What is below the lowest chance shown runs out of the bottom.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import ceil, floor, isfinite, log, log10
from textwrap import fill, indent

from oakum.results import Curve

WIDTH, HEIGHT = 60, 16
LOWEST = -30
"""The decimal logarithm at the bottom of a chart, or higher where nothing goes so far down."""

LETTERS = "abcdefgh"


@dataclass(frozen=True)
class Scales:
    """The ranges of both axes as decimal logarithms."""

    left: float
    right: float
    bottom: float

    @staticmethod
    def of(curves: Sequence[Curve]) -> Scales:
        """Ranges that hold the curves."""
        rates = [rate for curve in curves for rate in curve.rates]
        lows = [loss / log(10) for curve in curves for loss in curve.losses if isfinite(loss)]
        bottom = max(LOWEST, min(-3, floor(min(lows, default=-3) / 5) * 5))
        return Scales(log10(min(rates)), log10(max(rates)), bottom)

    def x(self, rate: float) -> float:
        """0 at the left to 1 at the right."""
        return (log10(rate) - self.left) / (self.right - self.left)

    def y(self, log_loss: float) -> float:
        """0 at the bottom to 1 at the top; below 0 for what is lower."""
        return 1 - log_loss / log(10) / self.bottom if isfinite(log_loss) else -1.0

    def rate_ticks(self) -> Iterator[tuple[float, str]]:
        """Places and labels of the decades of the flip rate."""
        for power in range(ceil(self.left), floor(self.right) + 1):
            yield (power - self.left) / (self.right - self.left), f"1e{power}"

    def loss_ticks(self) -> Iterator[tuple[float, str]]:
        """Places and labels on the axis of losses."""
        step = 5 if self.bottom <= -15 else 1 if self.bottom >= -5 else 2
        for power in range(0, int(self.bottom) - 1, -step):
            yield 1 - power / self.bottom, "1" if power == 0 else f"1e{power}"


def points(curve: Curve, scales: Scales) -> list[tuple[float, float]]:
    """The curve's points inside the chart, each axis from 0 to 1, with one where it leaves at the bottom."""
    found: list[tuple[float, float]] = []
    before: tuple[float, float] | None = None
    for rate, loss in zip(curve.rates, curve.losses, strict=True):
        here = scales.x(rate), scales.y(loss)
        if before is not None and before[1] < 0 <= here[1]:
            share = -before[1] / (here[1] - before[1])
            found.append((before[0] + share * (here[0] - before[0]), 0.0))
        if here[1] >= 0:
            found.append(here)
        before = here
    return found


def chart_lines(curves: Sequence[Curve], marked_rate: float) -> list[str]:
    """The chart in characters: a letter for each curve, and a dotted line at `marked_rate`."""
    scales = Scales.of(curves)
    grid = [[" "] * WIDTH for _ in range(HEIGHT)]
    if marked_rate > 0 and 0 <= scales.x(marked_rate) <= 1:
        for row in grid:
            row[round(scales.x(marked_rate) * (WIDTH - 1))] = ":"
    for letter, curve in zip(LETTERS, curves, strict=False):
        for column, level in _cells(points(curve, scales)):
            if grid[level][column] in " :":
                grid[level][column] = letter
    labels = {round((1 - y) * (HEIGHT - 1)): text for y, text in scales.loss_ticks()}
    lines = [f"  {labels.get(i, ''):>6} |{''.join(row).rstrip()}" for i, row in enumerate(grid)]
    axis, names = ["-"] * WIDTH, [" "] * (WIDTH + 8)
    for x, text in scales.rate_ticks():
        place = round(x * (WIDTH - 1))
        axis[place] = "+"
        names[place : place + len(text)] = text
    lines += [f"  {'':>6} +{''.join(axis)}", f"  {'':>6}  {''.join(names).rstrip()}"]
    named = ", ".join(f"{letter} {curve.label}" for letter, curve in zip(LETTERS, curves, strict=False))
    mark = f"; the dotted line is the planned rate, {marked_rate:.2g}" if marked_rate > 0 else ""
    return [*lines, *indent(fill(f"{named}{mark}", WIDTH + 12), "  ").splitlines()]


def _cells(line: list[tuple[float, float]]) -> Iterator[tuple[int, int]]:
    """The character cells that a line goes through, (column, row), one or more a column."""
    for (x0, y0), (x1, y1) in pairwise(line):
        steps = ceil(max(abs(x1 - x0) * (WIDTH - 1), abs(y1 - y0) * (HEIGHT - 1), 1))
        for i in range(steps + 1):
            x, y = x0 + (x1 - x0) * i / steps, y0 + (y1 - y0) * i / steps
            yield round(x * (WIDTH - 1)), round((1 - min(y, 1.0)) * (HEIGHT - 1))
