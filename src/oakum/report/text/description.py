"""What a sidecar says about itself."""

from collections.abc import Sequence
from datetime import UTC, datetime

from oakum.report.terminal import safe
from oakum.report.text.layout import Section, joined, notes, pairs, paragraph, table
from oakum.report.text.strength import strength
from oakum.report.units import counted, exact_size, percent
from oakum.results import Description, MemberDescription


def description_text(description: Description) -> str:
    """What a sidecar says about itself."""
    d = description
    files = [member for member in d.members if member.sha256 is not None]
    lead = (
        f"{safe(str(d.sidecar))} protects {counted(len(files), 'file')}, {exact_size(d.stream_bytes)}. "
        f"{strength(d.code, d.guaranteed_burst, d.windows)}"
    )
    facts = pairs(
        [
            ("identity", safe(d.identity)),
            ("format version", str(d.format_version)),
            ("sidecar", exact_size(d.sidecar_bytes)),
            ("overhead of the code", percent(d.code.overhead, 1)),
            ("depth", exact_size(d.depth)),
            ("windows", f"{d.windows:,}"),
            ("blocks", f"{d.blocks:,}"),
        ]
    )
    return joined([paragraph(lead), *notes(d.notes), facts, _member_table(d.members)])


def _member_table(members: Sequence[MemberDescription]) -> Section:
    if not members:
        return []
    rows = [
        (
            f"{member.mode:04o}",
            f"{member.size:,}" if member.sha256 is not None else safe(member.kind),
            _time(member.modified_ns),
            safe(member.path) + ("" if member.link_target is None else f" -> {safe(member.link_target)}"),
        )
        for member in members
    ]
    return table(("mode", "bytes", "modified (UTC)", "member"), rows, left=(3,))


def _time(modified_ns: int) -> str:
    """Times before year 1 or past 9999, which a file system may hold, are shown in seconds."""
    seconds = modified_ns // 1_000_000_000
    try:
        return datetime.fromtimestamp(seconds, UTC).replace(tzinfo=None).isoformat(" ")
    except (OverflowError, ValueError, OSError):
        return f"{seconds} s"
