"""What the jobs return: plain frozen records, turned into text or JSON by `oakum.report`."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import StrEnum
from pathlib import Path


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


@dataclass(frozen=True)
class MemberReport:
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
