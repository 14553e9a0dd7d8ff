"""How likely a code is to lose something to a channel: one pass exactly, bounds, and measurements.

The chance of one column is exact for the model: what the inner decoder makes of its symbols
(`oakum.algebra.outcomes`), how many of them runs of damage have taken (a compound Poisson distribution), and
whether both ways of decoding fail (`oakum.probability.ColumnChances`). Two things are left out, both of
which make the figures a little too high for plan's purpose: the last word of a cell is shorter, and a symbol
that a run has taken can no longer be wrong in another way.

Columns are not independent. Columns a word's length (m bytes) or more apart share no word, so that under
flips alone every m-th column is; the others tend to be lost together with them. So a block of w columns is
lost with a chance of at least 1 - (1 - P)^floor(w/m) and at most w P. Runs strike whole neighbourhoods: the
stream is lost to them when somewhere the number of runs over one column passes r, which can only begin at the
start of a run; the bound is the expected number of such starts (the up-crossings of a shot noise).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property, lru_cache

import numpy as np

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.inner import InnerCode
from oakum.algebra.outcomes import Floats, log_sum, symbol_chances
from oakum.channel import Channel, Runs
from oakum.geometry import CELL, whole_depth, window_depth
from oakum.measured import measured_curve
from oakum.probability import (
    IMPOSSIBLE,
    ColumnChances,
    convolve,
    log_any,
    log_binomial,
    log_compound_poisson,
    log_occupancy,
    log_power,
)
from oakum.results import Loss

_NEGLIGIBLE = 20.0
"""Numbers of hits whose chance is so many e-folds below the total that matters are not worked out."""


MANY = 5000
"""Runs of a known number up to which those that overlap are told apart."""


@dataclass(frozen=True)
class Shape:
    """A stream as a code cuts it: its length, the depth of its windows, how many there are.

    The last window may be shorter than the others, and then its depth is less too.
    """

    code: ConcatenatedCode
    length: int
    depth: int
    windows: int

    @staticmethod
    def of(code: ConcatenatedCode, length: int, depth: int | None = None) -> Shape:
        """The shape of a stream of `length` bytes, as one window or in windows of `depth`."""
        whole = whole_depth(max(length, 1), code.outer.k)
        if depth is None or depth >= whole:
            return Shape(code, length, whole, 1)
        return Shape(code, length, depth, -(-length // (code.outer.k * depth)))

    @property
    def alike(self) -> list[Windows]:
        """The windows in groups of one depth."""
        k = self.code.outer.k
        rest = self.length - (self.windows - 1) * k * self.depth
        last = Windows(self.code, window_depth(rest, k, self.depth), 1)
        if last.depth == self.depth:
            return [Windows(self.code, self.depth, self.windows)]
        return [Windows(self.code, self.depth, self.windows - 1), last] if self.windows > 1 else [last]

    @property
    def blocks(self) -> int:
        """Blocks of all windows."""
        return sum(windows.blocks for windows in self.alike)

    @property
    def guaranteed_burst(self) -> int:
        """The longest lost piece, in bytes, that is put right wherever it lies: r S less two cells."""
        least = min(windows.depth for windows in self.alike)
        return max(0, self.code.outer.r * least - 2 * CELL)


@dataclass(frozen=True)
class Windows:
    """Some windows of one depth."""

    code: ConcatenatedCode
    depth: int
    number: int

    @property
    def columns(self) -> int:
        """Columns of all of them."""
        return self.number * self.depth

    @property
    def blocks(self) -> int:
        """Blocks of all of them."""
        return self.number * -(-self.depth // CELL)

    @property
    def width(self) -> int:
        """Columns of a full block."""
        return min(CELL, self.depth)


def forecast(shape: Shape, channel: Channel) -> Loss:
    """The chances of loss when a stream of this shape is read after the channel's years.

    `column` and `block` are those of the likeliest to be lost where windows differ.
    """
    exposed = shape.code.outer.k if channel.spare_sidecar else shape.code.outer.n
    total = sum(exposed * windows.columns for windows in shape.alike)
    parts = [_Forecast(windows, channel, shape.length, exposed, total).loss() for windows in shape.alike]
    measured = [part.measured for part in parts if part.measured is not None]
    expected = [part.expected for part in parts if part.expected is not None]
    worst = max(parts, key=lambda part: part.column)
    return Loss(
        worst.column,
        (max(p.block[0] for p in parts), max(p.block[1] for p in parts)),
        (max(p.stream[0] for p in parts), _capped(*(p.stream[1] for p in parts))),
        _capped(*measured) if len(measured) == len(parts) else None,
        _capped(*expected) if len(expected) == len(parts) else None,
    )


@dataclass(frozen=True, eq=False)
class _Family:
    """Runs of one kind as one window sees them; `number` of them fall on everything, exactly so if `fixed`.

    `single`: the chances of one run to take so many symbols of one column. `crossing`: the chances that one
    concerns the window, by the symbols that it takes of every column.
    """

    number: float
    fixed: bool
    single: dict[int, float]
    crossing: dict[int, float]

    def distribution(self, size: int) -> Floats:
        """ln of the chances of one run to take 0, 1, ..., size-2, or more symbols."""
        chances = np.zeros(size)
        for strips, part in self.single.items():
            chances[min(strips, size - 1)] += part
        chances[0] += max(0.0, 1 - chances.sum())
        with np.errstate(divide="ignore"):
            return np.asarray(np.log(chances))


@dataclass(frozen=True)
class _Forecast:
    """The forecast for windows of one depth; `exposed` strips of them and `total` bytes in all are struck."""

    windows: Windows
    channel: Channel
    length: int
    exposed: int
    total: int

    def loss(self) -> Loss:
        s, r = self.windows, self.windows.code.outer.r
        hits = self._hits
        by_flips, in_block = IMPOSSIBLE, IMPOSSIBLE
        for taken in np.flatnonzero(hits[: r + 1] > hits.max() - 800).tolist():
            if taken and hits[taken] + self._ceiling < by_flips - _NEGLIGIBLE:
                break
            one = self._columns.log_loss(r - taken)
            by_flips = float(np.logaddexp(by_flips, hits[taken] + one))
            in_block = float(np.logaddexp(in_block, hits[taken] + min(0.0, one + np.log(s.width))))
        swamped = log_sum(hits[r + 1 :])
        column = min(0.0, float(np.logaddexp(by_flips, swamped)))
        flips_alone = self._columns.log_loss(r) if self._families else by_flips
        block = (
            max(log_any(flips_alone, s.width // self._apart), swamped),
            _capped(in_block, swamped, self._crossings + np.log(s.width / s.depth)),
        )
        stream = (
            max(log_any(flips_alone, s.columns // self._apart), swamped, block[0]),
            _capped(
                in_block + np.log(s.blocks), swamped + np.log(s.number), self._crossings + np.log(s.number)
            ),
        )
        return Loss(column, _ordered(column, block), _ordered(column, stream), *self._with_feedback())

    @cached_property
    def _columns(self) -> ColumnChances:
        return _column_chances(self.exposed, self.windows.code.inner, self.channel.final_flip_rate)

    @property
    def _apart(self) -> int:
        """Columns so far apart share no word."""
        return max(1, self.windows.code.inner.m)

    @cached_property
    def _ceiling(self) -> float:
        """The log chance of a column to be lost when all check symbols but one or none are gone."""
        return self._columns.log_loss(0)

    # -- runs of damage

    @cached_property
    def _families(self) -> list[_Family]:
        lost = self.channel.lost_run(self.length)
        all_runs = (*self.channel.runs, *([lost] if lost else []))
        return [self._family(runs) for runs in all_runs if runs.count or runs.per_tb_year]

    def _family(self, runs: Runs) -> _Family:
        """How runs of one kind fall on a window: one of a S + b bytes takes a symbols of every column and one
        more of b columns in S; it concerns a window when it starts in it or runs into it."""
        window = self.exposed * self.windows.depth
        single: dict[int, float] = {}
        crossing: dict[int, float] = {}
        for length, share in runs.shares:
            more, rest = divmod(length, self.windows.depth)
            reach = share * min(1.0, (window + (length if self.total > window else 0)) / self.total)
            if not rest:  # Whole strips: the last of them is the one that is added.
                more, rest = more - 1, self.windows.depth
            for strips, part in (
                (more, 1 - rest / self.windows.depth),
                (more + 1, rest / self.windows.depth),
            ):
                single[strips] = single.get(strips, 0.0) + reach * part
            crossing[more] = crossing.get(more, 0.0) + reach
        number = runs.expected(self.total, self.channel.years)
        return _Family(number, bool(runs.count), single, crossing)

    @cached_property
    def _hits(self) -> Floats:
        """ln P(so many symbols of a column are taken by runs), 0..r and "more" as the last entry."""
        return self._hits_without(None)

    def _hits_without(self, one: _Family | None) -> Floats:
        """The same, but for one run of the family `one`: what its other runs and the rest do."""
        size = self.windows.code.outer.r + 2
        fixed = [
            self._counted_hits(family, round(family.number) - (family is one), size)
            for family in self._families
            if family.fixed
        ]
        hits = self._poisson_hits(size)
        for distribution in fixed:
            hits = convolve(hits, distribution)
        return hits

    def _counted_hits(self, family: _Family, number: int, size: int) -> Floats:
        """What a known number of runs takes: at most one symbol of a column each, where they are short."""
        if number <= MANY and not any(more > 0 for more in family.crossing):
            chance = family.single.get(1, 0.0)
            return log_occupancy(self.exposed, float(np.log(chance)) if chance else IMPOSSIBLE, number, size)
        return log_power(family.distribution(size), number)

    def _poisson_hits(self, size: int) -> Floats:
        """What the runs take whose number is not fixed.

        Runs no longer than a strip take the symbols of a column independently, each with the chance
        1 - exp(-rate). Of longer ones every run is counted, also where two overlap: a little too much.
        """
        families = [family for family in self._families if not family.fixed]
        rates: dict[int, float] = {}
        for family in families:
            for strips, part in family.single.items():
                kept = min(strips, size)
                rates[kept] = rates.get(kept, 0.0) + family.number * part
        if not any(more for family in families for more in family.crossing if more > 0):
            rate = rates.get(1, 0.0) / self.exposed
            taken = log_binomial(self.exposed, float(np.log(-np.expm1(-rate))) if rate else IMPOSSIBLE)
            return np.append(taken[: size - 1], log_sum(taken[size - 1 :]))
        return log_compound_poisson(rates, size)

    @cached_property
    def _crossings(self) -> float:
        """ln of the expected number of runs in one window whose start takes a column beyond r.

        Runs of a Poisson process find the others as if they were not there (Slivnyak's theorem).
        """
        r = self.windows.code.outer.r
        terms = []
        for family in self._families:
            others = self._hits_without(family) if family.fixed else self._hits
            for more, reach in family.crossing.items():
                if more <= r and reach > 0:
                    terms.append(float(np.log(family.number * reach) + others[r - more]))
        return log_sum(np.array(terms)) if terms else IMPOSSIBLE

    # -- feedback

    def _with_feedback(self) -> tuple[float | None, float | None]:
        """ln of the stream's chance by the measured curve of the code: the most it can be, and what it is.

        Blocks share neither words nor columns: they are lost independently.
        """
        rate, blocks = self.channel.final_flip_rate, self.windows.blocks
        curve = measured_curve(self.windows.code, self.windows.width)
        if curve is None or not rate or self._families or self.channel.spare_sidecar:
            return None, None
        most = log_any(float(np.log(min(1.0, curve.at_most(rate)))), blocks)
        estimate = curve.estimate(rate) if curve.width == self.windows.width else None
        return most, None if estimate is None else log_any(float(np.log(estimate)), blocks)


@lru_cache(64)
def _column_chances(n: int, inner: InnerCode, rate: float) -> ColumnChances:
    """Shared by all outer codes of one length: the chances of the symbols are the same."""
    return ColumnChances(n, symbol_chances(inner, rate))


def _capped(*terms: float) -> float:
    """The union bound: the log of the sum, at most 0."""
    return min(0.0, log_sum(np.array(terms)))


def _ordered(column: float, bounds: tuple[float, float]) -> tuple[float, float]:
    """Bounds that hold the chance of one column, the lower below the upper."""
    low = min(0.0, max(bounds[0], column))
    return low, max(low, bounds[1])
