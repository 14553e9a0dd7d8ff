"""Result records built by hand."""

from dataclasses import replace
from pathlib import Path

import pytest

from oakum.results import (
    BlockReport,
    CheckResult,
    CodeSummary,
    Description,
    MemberDescription,
    MemberReport,
    MemberState,
    Outcome,
    ProtectResult,
    SidecarReport,
    Totals,
)

SHELF = CodeSummary("shelf", (255, 223), (128, 120, 4), 0.219731, 65)


@pytest.fixture
def intact() -> CheckResult:
    """Two members, nothing wrong."""
    return CheckResult(
        command="verify",
        target=Path("plates"),
        outcome=Outcome.INTACT,
        code=SHELF,
        totals=Totals(bits_read=8 * 5_000_000, blocks=5, blocks_clean=5),
        blocks=(),
        members=(
            MemberReport("plates/a.tif", 3_000_000, MemberState.INTACT, 0),
            MemberReport("plates/b.tif", 2_000_000, MemberState.INTACT, 0),
        ),
        sidecar=SidecarReport(Path("plates.oakum"), Outcome.INTACT, 0, 0),
        seconds=0.5,
    )


@pytest.fixture
def correctable(intact: CheckResult) -> CheckResult:
    """Flips in one member, the other one absent."""
    return replace(
        intact,
        outcome=Outcome.CORRECTABLE,
        totals=Totals(
            bits_read=8 * 3_000_000,
            bits_flipped=1_234,
            bits_flipped_scattered=234,
            bits_flipped_burst=1_000,
            symbols_wrong=480,
            words_corrected=200,
            words_flagged=17,
            bytes_erased=2_000_000,
            blocks=5,
            blocks_clean=2,
            blocks_correctable=3,
        ),
        blocks=(
            BlockReport(0, 1, Outcome.CORRECTABLE, 1_000, 300, 700_000, 0.61),
            BlockReport(0, 2, Outcome.CORRECTABLE, 234, 180, 0, 0.9375),
            BlockReport(0, 4, Outcome.CORRECTABLE, 0, 0, 1_300_000, 0.125 + 0.5),
        ),
        members=(
            MemberReport("plates/a.tif", 3_000_000, MemberState.ALTERED, 1_234),
            MemberReport("plates/b.tif", 2_000_000, MemberState.ABSENT, None, detail="not there"),
        ),
    )


@pytest.fixture
def uncorrectable(correctable: CheckResult) -> CheckResult:
    """One block beyond the parity, one saved below margin 0, a sidecar with flips."""
    return replace(
        correctable,
        outcome=Outcome.UNCORRECTABLE,
        totals=replace(correctable.totals, blocks_correctable=2, blocks_uncorrectable=1),
        blocks=(
            BlockReport(0, 1, Outcome.UNCORRECTABLE, None, None, 700_000, None),
            BlockReport(0, 2, Outcome.CORRECTABLE, 234, 180, 0, -0.03),
            BlockReport(0, 4, Outcome.CORRECTABLE, 0, 0, 1_300_000, 0.625),
        ),
        members=(
            MemberReport(
                "plates/a.tif", 3_000_000, MemberState.UNCORRECTABLE, None, lost=((4096, 512), (9000, 1))
            ),
            MemberReport("plates/b.tif", 2_000_000, MemberState.ALTERED, 7, edited=True),
        ),
        sidecar=SidecarReport(Path("plates.oakum"), Outcome.CORRECTABLE, 12, 11),
    )


@pytest.fixture
def protected() -> ProtectResult:
    """A set that took two readings."""
    return ProtectResult(
        sidecar=Path("plates.oakum"),
        code=SHELF,
        members=2,
        stream_bytes=5_000_000,
        sidecar_bytes=1_150_000,
        depth=22_464,
        windows=1,
        reads=2,
        guaranteed_burst=710_656,
        seconds=0.5,
    )


@pytest.fixture
def described() -> Description:
    """A folder with names that checksum tools escape, an empty folder and a link."""
    names = (b"plates/a.tif", b"plates/back\\slash", b"plates/line\nbreak", b"plates/odd\xff")
    files = tuple(
        MemberDescription(
            path=name.decode(errors="surrogateescape"),
            raw_path=name,
            kind="file",
            size=10 + i,
            sha256=bytes([i] * 32),
            modified_ns=86_400 * 10**9,
            mode=0o640,
        )
        for i, name in enumerate(names)
    )
    folder = MemberDescription("plates/empty", b"plates/empty", "folder", 0, None, 0, 0o755)
    link = MemberDescription("plates/to", b"plates/to", "link", 0, None, 0, 0o777, link_target="a.tif")
    return Description(
        sidecar=Path("plates.oakum"),
        format_version=1,
        identity="00ff" * 8,
        code=SHELF,
        stream_bytes=46,
        sidecar_bytes=4_096,
        depth=64,
        windows=1,
        blocks=1,
        guaranteed_burst=0,
        members=(*files, folder, link),
    )
