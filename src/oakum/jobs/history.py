"""history: what the ledger says about a medium over the years, and until when it can be trusted."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from oakum.algebra.naming import resolve_code
from oakum.audits import Advice, Growth, Point, Rate, Trend
from oakum.channel import TB, Channel, Runs
from oakum.errors import CannotCheck
from oakum.forecast import Shape, forecast
from oakum.ledger import Entry, Ledger, Row
from oakum.results import Outcome
from oakum.statistics import PoissonFit, fit_poisson, poisson_interval, poisson_upper_limit

YEAR = 365.25 * 86_400
THRESHOLD = 0.001
"""The chance of losing something from which on a medium is to be refreshed."""

LEAST_AUDITS = 3
LEAST_SPAN = 30 / 365.25
"""Years that audits must span before a trend is drawn through them."""

MOST_BURSTS = 1e-3
"""Bursts a byte beyond which a rate means nothing any more."""

HORIZON = 50
"""Years beyond which no trend is drawn out."""

ONE_SIDED = 1.6449
"""Standard errors to the 95 % one-sided limit."""

THIN, LOW, NONE_LEFT = 0.75, 0.5, 0.2
"""Margins below which to audit sooner, to refresh within a year, to refresh now."""


def history(
    ledger: Path, medium: str | None = None, *, threshold: float = THRESHOLD, now: datetime | None = None
) -> tuple[Trend, ...]:
    """The trend of every medium in the ledger, or of one. Raises CannotCheck where there is nothing of it.

    Audits without a label are told apart by the path of their target.
    """
    with Ledger(ledger, write=False) as book:
        entries = book.entries(medium)
    series = _series(entries)
    if not series:
        named = "" if medium is None else f" of the medium {medium}"
        raise CannotCheck(f"the ledger {ledger} holds no finished check{named}; oakum audit makes one")
    when = now or datetime.now(UTC)
    return tuple(_Medium(name, rows, threshold, when).trend() for name, rows in series.items())


def _series(entries: Sequence[Entry]) -> dict[str, list[tuple[datetime, list[Row]]]]:
    """By medium, the targets that each audit has checked."""
    series: dict[str, list[tuple[datetime, list[Row]]]] = {}
    for entry in entries:
        checked = [row for row in entry.targets if row["bits_read"] is not None]
        label = str(entry.audit["medium"])
        for name in {label or str(row["path"]): None for row in checked}:
            rows = [row for row in checked if label or row["path"] == name]
            series.setdefault(name, []).append((entry.begun, rows))
    return series


def point_of(when: datetime, rows: Sequence[Row]) -> Point:
    """One audit: counts added up, the lowest margin. What was not read is no exposure."""
    margins = [_number(row["margin"]) for row in rows if row["margin"] is not None]
    sizes = [_number(row["stream_bytes"]) for row in rows]
    read = sum(_number(row["coverage"]) * size for row, size in zip(rows, sizes, strict=True))
    return Point(
        when, _rate(rows, "bits_flipped_scattered", "flip_exposure"), _rate(rows, "bursts", "burst_exposure"),
        min(margins, default=None), read / sum(sizes) if sum(sizes) else 1.0,
        any(row["outcome"] == Outcome.UNCORRECTABLE for row in rows),
    )  # fmt: skip


def _number(value: object) -> float:
    return float(value) if isinstance(value, int | float) else 0.0


def _rate(rows: Iterable[Row], count: str, exposure: str) -> Rate:
    rows = list(rows)
    events, over = int(sum(_number(r[count]) for r in rows)), sum(_number(r[exposure]) for r in rows)
    low, high = poisson_interval(events)
    return Rate(events, over, low / over if over else 0.0, high / over if over else 0.0)


@dataclass
class _Medium:
    """One medium's audits on their way to a trend."""

    name: str
    audits: list[tuple[datetime, list[Row]]]
    threshold: float
    now: datetime

    def __post_init__(self) -> None:
        self.points = [point_of(when, rows) for when, rows in self.audits]
        self.times = [(p.when - self.points[0].when).total_seconds() / YEAR for p in self.points]
        self.today = (self.now - self.points[0].when).total_seconds() / YEAR
        self.flips = self._fit([p.flips for p in self.points])
        self.bursts = self._fit([p.bursts for p in self.points])

    @property
    def enough(self) -> bool:
        """Whether a trend can be drawn at all."""
        return len(self.points) >= LEAST_AUDITS and self.times[-1] - self.times[0] >= LEAST_SPAN

    def _fit(self, rates: list[Rate]) -> PoissonFit | None:
        if not self.enough or not all(r.exposure for r in rates):
            return None
        return fit_poisson(self.times, [r.count for r in rates], [r.exposure for r in rates])

    def trend(self) -> Trend:
        """Everything put together."""
        slope = self._margin_slope()
        refresh = self._year_of_loss(slope)
        chance = self._chance(self.today)
        advice, reason = self._advise(refresh, chance)
        return Trend(
            self.name, tuple(self.points), self._growth(self.flips), self._growth(self.bursts), slope,
            self.threshold, chance, refresh, advice, reason, tuple(self._conclusions()),
        )  # fmt: skip

    def _growth(self, fit: PoissonFit | None) -> Growth | None:
        if fit is None:
            return None
        low, high = (math.exp(max(-700.0, min(700.0, s))) for s in fit.slope_interval)
        factor = math.exp(max(-700.0, min(700.0, fit.slope)))
        return Growth(fit.rate(self.today), factor, low, high, fit.dispersion)

    def _margin_slope(self) -> float | None:
        """The straight line through the lowest margins, as change a year."""
        known = [(t, p.margin) for t, p in zip(self.times, self.points, strict=True) if p.margin is not None]
        if not self.enough or len(known) < LEAST_AUDITS:
            return None
        times, margins = np.array(known).T
        return float(np.polyfit(times, margins, 1)[0])

    # -- the chance of loss --------------------------------------------------------------------------

    def _rates(self, time: float) -> tuple[float, float]:
        """Flips a bit and bursts a byte at a time, at the upper end of what the audits allow."""
        pairs = ((self.flips, [p.flips for p in self.points]), (self.bursts, [p.bursts for p in self.points]))
        flips, bursts = (
            rates[-1].high if fit is None else fit.rate(max(time, self.times[-1]), ONE_SIDED)
            for fit, rates in pairs
        )
        return min(0.5, flips), min(MOST_BURSTS, bursts)

    def _chance(self, time: float) -> float:
        """The chance that some target cannot be read in full at a time; an upper bound."""
        flips, bursts = self._rates(time)
        seen = any(p.bursts.count for p in self.points)
        log_kept = 0.0
        for row in self.audits[-1][1]:
            if not row["stream_bytes"]:
                continue
            shape = Shape(
                resolve_code(str(row["code"])), int(_number(row["stream_bytes"])), int(_number(row["depth"])),
                int(_number(row["windows"])),
            )  # fmt: skip
            runs = (Runs(((self._burst_length(), 1.0),), per_tb_year=bursts * TB),) if seen else ()
            loss = forecast(shape, Channel(flip_rate=flips, runs=runs))
            log_kept += math.log1p(-min(1 - 1e-16, math.exp(min(0.0, loss.at_most))))
        return -math.expm1(log_kept)

    def _burst_length(self) -> int:
        """The mean length of the bursts of the last audits, in bytes."""
        lengths = [
            n
            for _, rows in self.audits
            for row in rows
            for n in json.loads(str(row["burst_lengths"] or "[]"))
        ]
        return max(1, round(sum(lengths) / len(lengths))) if lengths else 4096

    def _year_of_loss(self, slope: float | None) -> int | None:
        """The first year in which the chance passes the threshold or the margin ends; None: not in sight."""
        if not self.enough:
            return None
        years = []
        if slope is not None and slope < 0 and self.points[-1].margin is not None:
            years.append(self.times[-1] + self.points[-1].margin / -slope)
        if (self.flips or self.bursts) and self._chance(self.today + HORIZON) >= self.threshold:
            low, high = 0, HORIZON
            while low < high:
                middle = (low + high) // 2
                passed = self._chance(self.today + middle) >= self.threshold
                low, high = (low, middle) if passed else (middle + 1, high)
            years.append(self.today + low)
        first = min(years, default=math.inf)
        if first > self.today + HORIZON:
            return None
        return (self.now + timedelta(seconds=max(0.0, first - self.today) * YEAR)).year

    # -- what to do ------------------------------------------------------------------------------------

    def _advise(self, refresh: int | None, chance: float) -> tuple[Advice, str]:
        last = self.points[-1]
        margin = 1.0 if last.margin is None else last.margin
        ahead = math.inf if refresh is None else refresh - self.now.year
        if last.lost:
            return Advice.REFRESH_NOW, "part of the content was beyond correction at the last audit."
        if chance >= self.threshold:
            return Advice.REFRESH_NOW, (
                f"the chance of loss may already be {chance:.2g}, and {self.threshold:g} is the limit."
            )
        if margin < NONE_LEFT:
            return (
                Advice.REFRESH_NOW,
                f"the weakest block has kept only {100 * max(0.0, margin):.0f} % of its margin.",
            )
        if ahead <= 1:
            return Advice.REFRESH_SOON, f"the trend passes the limit in {refresh}."
        if margin < LOW:
            return (
                Advice.REFRESH_SOON,
                f"the weakest block has lost more than half of its margin ({100 * margin:.0f} % left).",
            )
        if ahead <= 5:
            return Advice.AUDIT_SOONER, f"the trend passes the limit in {refresh}."
        for fit, what in ((self.flips, "flip rate"), (self.bursts, "rate of bursts")):
            if fit is not None and fit.slope_interval[0] > 0:
                return Advice.AUDIT_SOONER, (
                    f"the {what} grows by {100 * math.expm1(fit.slope):.0f} % a year, "
                    "more than chance explains."
                )
        if margin < THIN:
            return Advice.AUDIT_SOONER, f"the weakest block keeps {100 * margin:.0f} % of its margin."
        if not self.enough:
            return (
                Advice.KEEP,
                "nothing found so far speaks against it; there are too few audits for a trend.",
            )
        return Advice.KEEP, "neither the rates nor the margin come near the limit."

    def _conclusions(self) -> Iterable[str]:
        count = len(self.points)
        if count < LEAST_AUDITS:
            have = "one audit says" if count == 1 else "two audits say"
            yield (
                f"{have} how the medium is, not where it is going: no trend and no date can be given before "
                f"{LEAST_AUDITS} audits"
            )
        elif not self.enough:
            yield f"all {count} audits lie within a month, too close together to tell where it is going"
        exposure = sum(p.flips.exposure for p in self.points)
        if exposure and not any(p.flips.count for p in self.points):
            limit = poisson_upper_limit(0) / exposure
            yield f"no scattered flip was found at all: the rate is below {limit:.2g} a bit (95 % confidence)"
        elif self.enough and self.flips is None:
            yield "the flips fell on the first or the last audit only, which fixes no trend"
        if any(p.coverage < 0.999 for p in self.points):
            least = min(p.coverage for p in self.points)
            yield (
                f"some audits were samples, of {100 * least:.0f} % of the content at the least: rates are of "
                "what was read, and the lowest margin of all may be lower"
            )
