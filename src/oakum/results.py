"""What the jobs return: plain frozen records, turned into text or JSON by `oakum.report`."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum
from math import log
from pathlib import Path
from typing import NamedTuple


class Outcome(StrEnum):
    """What one run found out about the protected set as a whole."""

    INTACT = "intact"
    CORRECTABLE = "correctable"
    UNCORRECTABLE = "uncorrectable"
    UNCHECKED = "unchecked"


class MemberState(StrEnum):
    """How a member stands against what was protected."""

    INTACT = "intact"
    ALTERED = "altered"
    ABSENT = "absent"
    UNCORRECTABLE = "uncorrectable"


@dataclass(frozen=True)
class CodeSummary:
    """The code of a sidecar: outer (n, k) in symbols, inner (n, k, d) in bits, overhead as a fraction."""

    name: str
    outer: tuple[int, int]
    inner: tuple[int, int, int] | None
    overhead: float
    guaranteed_flips: int


@dataclass(frozen=True)
class Totals:
    """Counts over the members' bytes (the sidecar's own damage is counted apart)."""

    bits_read: int = 0
    bits_flipped: int = 0
    bits_flipped_scattered: int = 0
    bits_flipped_burst: int = 0
    symbols_wrong: int = 0
    words_corrected: int = 0
    words_flagged: int = 0
    bytes_erased: int = 0
    blocks: int = 0
    blocks_clean: int = 0
    blocks_correctable: int = 0
    blocks_uncorrectable: int = 0


@dataclass(frozen=True)
class BlockReport:
    """One damaged block. `margin` is a fraction of r; it and the counts are None when it is uncorrectable."""

    window: int
    block: int
    state: Outcome
    bits_flipped: int | None
    symbols_wrong: int | None
    bytes_erased: int
    margin: float | None


class MemberReport(NamedTuple):
    """One member. `bits_flipped` is None where what was flipped is unknown.

    `lost` lists byte ranges (offset, length) of the member that could not be corrected.
    `edited`: the member is newer than recorded and its content differs.
    `mended`: where the corrected bytes were written, after a repair.
    """

    path: str
    size: int
    state: MemberState
    bits_flipped: int | None
    kind: str = "file"
    detail: str = ""
    edited: bool = False
    lost: tuple[tuple[int, int], ...] = ()
    mended: Path | None = None


@dataclass(frozen=True)
class SidecarReport:
    """The sidecar's own condition. Counts are None where they could not be found out."""

    path: Path
    state: Outcome
    bits_flipped: int | None
    symbols_wrong: int | None
    detail: str = ""
    mended: Path | None = None


@dataclass(frozen=True)
class CheckResult:
    """The result of `verify` or `repair`: the record that text and JSON are made from."""

    command: str
    target: Path
    outcome: Outcome
    code: CodeSummary
    totals: Totals
    blocks: tuple[BlockReport, ...]
    members: tuple[MemberReport, ...]
    sidecar: SidecarReport
    seconds: float = 0.0
    notes: tuple[str, ...] = ()

    @property
    def weakest(self) -> float:
        """The lowest margin over all blocks; clean blocks have 1."""
        return min((b.margin for b in self.blocks if b.margin is not None), default=1.0)


@dataclass(frozen=True)
class ProtectResult:
    """The result of `protect`."""

    sidecar: Path
    code: CodeSummary
    members: int
    stream_bytes: int
    sidecar_bytes: int
    depth: int
    windows: int
    reads: int
    guaranteed_burst: int
    seconds: float
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class MemberDescription:
    """One line of a sidecar's member table. `sha256` is None for folders and links."""

    path: str
    raw_path: bytes
    kind: str
    size: int
    sha256: bytes | None
    modified_ns: int
    mode: int
    link_target: str | None = None


@dataclass(frozen=True)
class Description:
    """The result of `describe`: what a sidecar says about itself."""

    sidecar: Path
    format_version: int
    identity: str
    code: CodeSummary
    stream_bytes: int
    sidecar_bytes: int
    depth: int
    windows: int
    blocks: int
    guaranteed_burst: int
    members: tuple[MemberDescription, ...] = field(default=())
    notes: tuple[str, ...] = ()


# -- plan and rehearse

_SURE = 0.9999


@dataclass(frozen=True)
class Loss:
    """The chance of loss at one reading, as natural logarithms (-inf: it cannot happen).

    `column` is that of one outer codeword in one pass of the decoder. Columns that share words are lost
    together rather than one by one; `block` and `stream` are therefore bounds, (at least, at most), in one
    pass. `measured` is the most that the stream's chance can be with feedback, by the decoder's measured
    curve, and `expected` what it is by that; None where there is none, or it does not go so far.
    """

    column: float
    block: tuple[float, float]
    stream: tuple[float, float]
    measured: float | None = None
    expected: float | None = None

    @property
    def at_most(self) -> float:
        """The best upper bound known for the stream."""
        return self.stream[1] if self.measured is None else min(self.stream[1], self.measured)


@dataclass(frozen=True)
class Candidate:
    """A code against a medium. `year` is the loss after one year, `period` that after all of them.

    `renewed` is the log chance of loss within the period when damage is looked for and repaired every year.
    """

    code: CodeSummary
    notation: str
    depth: int
    guaranteed_burst: int
    year: Loss
    period: Loss
    renewed: float


@dataclass(frozen=True)
class Curve:
    """Log chance of loss of the stream (at most, one pass) against the flip rate, for one code."""

    label: str
    rates: tuple[float, ...]
    losses: tuple[float, ...]


@dataclass(frozen=True)
class Assumption:
    """One figure that a plan rests on, its source, and how well it is known."""

    text: str
    source: str
    mark: str


@dataclass(frozen=True)
class PlanResult:
    """The result of `plan`. The frontier runs from the least overhead to the least loss."""

    path: Path | None
    size: int
    years: float
    target: float
    budget: float | None
    assumptions: tuple[Assumption, ...]
    frontier: tuple[Candidate, ...]
    recommended: Candidate
    reached: bool
    """Whether the recommended code keeps the chance of loss below the target."""

    command: str
    curves: tuple[Curve, ...]
    flip_rate: float
    """The chance of a bit to differ at the end of the period."""

    seconds: float = 0.0
    notes: tuple[str, ...] = ()

    @property
    def hopeless(self) -> bool:
        """Whether loss is as good as certain even with the recommended code."""
        return self.recommended.period.at_most > log(_SURE)


@dataclass(frozen=True)
class Trial:
    """One rehearsed history. `margin` is the weakest block's; it is None when something was lost."""

    number: int
    survived: bool
    sidecar_survived: bool
    bits_corrected: int
    bytes_erased: int
    blocks_damaged: int
    blocks_lost: int
    margin: float | None
    reason: str = ""


@dataclass(frozen=True)
class Limit:
    """How far damage was driven: the most that was survived and the least at which a block was lost."""

    quantity: str
    survived: float | None
    lost: float | None
    steps: int


@dataclass(frozen=True)
class RehearsalResult:
    """The result of `rehearse`. `interval` is the exact one of the survival rate at `level`."""

    target: Path
    code: CodeSummary
    stream_bytes: int
    blocks: int
    seed: int
    assumptions: tuple[Assumption, ...]
    trials: tuple[Trial, ...]
    level: float
    interval: tuple[float, float] | None
    predicted: Loss | None
    flip_rate: float = 0.0
    """The chance of a bit to differ at the time of reading."""

    limit: Limit | None = None
    seconds: float = 0.0
    notes: tuple[str, ...] = ()

    @property
    def survived(self) -> int:
        """How many trials came back in full."""
        return sum(trial.survived for trial in self.trials)
