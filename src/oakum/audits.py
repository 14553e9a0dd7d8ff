"""What audits and their history return: plain frozen records, shown by `oakum.report`."""

from __future__ import annotations

from dataclasses import dataclass, field
from datetime import datetime
from enum import StrEnum
from pathlib import Path

from oakum.results import CheckResult, Outcome


class Cause(StrEnum):
    """What may have made the errors."""

    CUT_SHORT = "a file cut short"
    LINE_ENDS = "line ends converted"
    REWRITTEN = "a whole file rewritten or encrypted"
    FILLED_END = "the end filled with one byte value"
    FILLED_INSIDE = "a stretch filled with one byte value"
    PAST_OFFSET = "everything wrong past one place"
    ALIGNED = "whole sectors or blocks replaced"
    UNREADABLE = "places that cannot be read"
    UNSTEADY = "readings that differ"
    HIGH_BIT = "the high bit cleared"
    STUCK_BIT = "one bit position that fails"
    DIRECTION = "flips in one direction"
    PERIOD = "errors at a fixed distance"
    RUNS = "overwritten stretches"
    SCATTERED = "scattered random flips"


class Likelihood(StrEnum):
    """How well the evidence fits the cause and nothing else that is known here."""

    ALMOST_CERTAIN = "almost certain"
    VERY_LIKELY = "very likely"
    LIKELY = "likely"
    POSSIBLE = "possible"


@dataclass(frozen=True)
class CauseFinding:
    """A possible cause with its evidence and what to do next. `wrong_bytes` is how much it accounts for."""

    cause: Cause
    likelihood: Likelihood
    evidence: str
    advice: str
    wrong_bytes: int
    members: tuple[str, ...] = ()


@dataclass(frozen=True)
class Rate:
    """Events over an exposure with the exact 95 % interval of the rate, per unit of exposure."""

    count: int
    exposure: float
    low: float
    high: float

    @property
    def value(self) -> float:
        """The rate itself; where nothing was found only `high` says something."""
        return self.count / self.exposure if self.exposure else 0.0


@dataclass(frozen=True)
class Statistics:
    """Counts of one target, or of all, and what they say about the medium.

    `flip_rate` is that of scattered flips per bit, `burst_rate` that of bursts per byte; both leave out what
    could not be read or not be corrected. `margin_at` is (window, block) of the lowest margin.
    """

    bits_read: int
    sidecar_bits_read: int
    flip_rate: Rate
    burst_rate: Rate
    burst_lengths: tuple[int, ...]
    read_errors: int
    readings_differ: int
    lowest_margin: float | None
    margin_at: tuple[int, int] | None
    coverage: float = 1.0
    stream_bytes: int = 0
    depth: int = 0
    windows: int = 1


@dataclass(frozen=True)
class Distribution:
    """Where the flips are: bits wrong in equal shares of the stream, and by bit position.

    `positions` are two rows of 64 counts, flips from 0 to 1 and from 1 to 0 (see `oakum.patterns`).
    """

    along: tuple[int, ...] = ()
    positions: tuple[tuple[int, ...], tuple[int, ...]] = ((), ())


@dataclass(frozen=True)
class TargetAudit:
    """The audit of one target. Without `check` nothing could be said, and `reason` tells why."""

    target: Path
    outcome: Outcome
    identity: str = ""
    check: CheckResult | None = None
    statistics: Statistics | None = None
    findings: tuple[CauseFinding, ...] = ()
    distribution: Distribution = field(default_factory=Distribution)
    reason: str = ""
    earlier: bool = False
    """Taken over from an interrupted audit that was resumed; only the counts are known."""


@dataclass(frozen=True)
class AuditResult:
    """The result of `audit`. `ledger_note` says why no entry was written, where none was."""

    begun: datetime
    medium: str
    targets: tuple[TargetAudit, ...]
    seconds: float
    share: float = 1.0
    seed: int | None = None
    counters: tuple[tuple[str, float], ...] = ()
    ledger: Path | None = None
    ledger_note: str = ""
    trend: Trend | None = None
    overall: Statistics | None = None
    """All targets together, where there are several."""

    @property
    def outcome(self) -> Outcome:
        """The gravest of the targets'; what could not be checked weighs more than what can be corrected."""
        order = (Outcome.UNCORRECTABLE, Outcome.UNCHECKED, Outcome.CORRECTABLE)
        found = {t.outcome for t in self.targets}
        return next((o for o in order if o in found), Outcome.INTACT)


class Advice(StrEnum):
    """What to do with a medium."""

    KEEP = "keep"
    AUDIT_SOONER = "audit sooner"
    REFRESH_SOON = "refresh within a year"
    REFRESH_NOW = "refresh now"


@dataclass(frozen=True)
class Point:
    """One audit of one medium: its day, and the counts over all targets that were checked."""

    when: datetime
    flips: Rate
    bursts: Rate
    margin: float | None
    coverage: float
    lost: bool = False


@dataclass(frozen=True)
class Growth:
    """A fitted rate: now, its growth a year with the 95 % interval (factors), and over-dispersion."""

    now: float
    factor: float
    low: float
    high: float
    dispersion: float


@dataclass(frozen=True)
class Trend:
    """What the ledger says about one medium. `refresh_by` is the year in which `threshold` is passed."""

    medium: str
    points: tuple[Point, ...]
    flips: Growth | None
    bursts: Growth | None
    margin_a_year: float | None
    threshold: float
    chance_now: float
    refresh_by: int | None
    advice: Advice
    reason: str
    conclusions: tuple[str, ...] = ()
