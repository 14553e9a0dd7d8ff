"""The tables of damage: what is wrong, where, and how much margin is left."""

from collections.abc import Iterable, Sequence

from oakum.report.terminal import safe
from oakum.report.text.layout import FILES_SHOWN, Section, and_more, pairs, table
from oakum.report.units import percent, size
from oakum.results import BlockReport, CheckResult, MemberReport, MemberState

WEAKEST_SHOWN = 10
RANGES_SHOWN = 20


def counts(result: CheckResult) -> Section:
    """The counts over all members."""
    totals = result.totals
    damaged = totals.blocks_correctable + totals.blocks_uncorrectable
    return [
        "Damage to the members",
        *pairs(
            [
                ("bits flipped, scattered", f"{totals.bits_flipped_scattered:,}"),
                ("bits flipped, in bursts", f"{totals.bits_flipped_burst:,}"),
                ("symbols wrong", f"{totals.symbols_wrong:,}"),
                ("words corrected", f"{totals.words_corrected:,}"),
                ("words flagged", f"{totals.words_flagged:,}"),
                ("bytes erased", f"{totals.bytes_erased:,}"),
                ("blocks damaged", f"{damaged:,} of {totals.blocks:,}"),
            ]
        ),
    ]


def margins(result: CheckResult) -> Section:
    """The margins of all blocks as a cumulative distribution; steps where nothing changes are left out."""
    totals = result.totals
    if not result.blocks or totals.blocks < 2:
        return []
    margins = [block.margin for block in result.blocks if block.margin is not None]
    beyond = sum(block.margin is None for block in result.blocks)
    steps = [("none, beyond correction", beyond), ("below 0 %", beyond + sum(m < 0 for m in margins))]
    steps += [
        (f"at most {tenth * 10} %", beyond + sum(m <= tenth / 10 for m in margins)) for tenth in range(10)
    ]
    steps.append(("at most 100 %", totals.blocks))
    rows, before = [], 0
    for name, count in steps:
        if count != before:
            rows.append((name, f"{count:,}", percent(count / totals.blocks, 1)))
        before = count
    return ["Margin left, cumulative", *table(("margin", "blocks", "share"), rows, left=(0,))]


def weakest(blocks: Sequence[BlockReport]) -> Section:
    """The damaged blocks with the least margin."""
    if not blocks:
        return []
    # No margin at all sorts before any margin, however negative.
    by_margin = sorted(blocks, key=lambda b: (b.margin is not None, b.margin or 0.0, b.window, b.block))
    head = ("window", "block", "margin", "bits flipped", "symbols wrong", "bytes erased")
    shown = by_margin[:WEAKEST_SHOWN]
    title = "The weakest blocks" if len(blocks) > len(shown) else "The damaged blocks, weakest first"
    return [title, *table(head, [_block_row(block) for block in shown])]


def _block_row(block: BlockReport) -> Sequence[str]:
    return (
        f"{block.window:,}",
        f"{block.block:,}",
        "none" if block.margin is None else percent(block.margin),
        _known(block.bits_flipped),
        _known(block.symbols_wrong),
        f"{block.bytes_erased:,}",
    )


def _known(count: int | None) -> str:
    """A count, where there is one."""
    return "unknown" if count is None else f"{count:,}"


def members(all_members: Sequence[MemberReport]) -> Section:
    """The members that are not as they were protected."""
    damaged = [member for member in all_members if member.state is not MemberState.INTACT]
    if not damaged:
        return []
    rows = [
        (
            safe(member.path),
            size(member.size) if member.kind == "file" else safe(member.kind),
            str(member.state),
            _member_flips(member),
            safe(member.detail),
        )
        for member in damaged[:FILES_SHOWN]
    ]
    head = ("member", "size", "state", "bits flipped", "remark")
    columns = 5 if any(row[4] for row in rows) else 4
    lines = [
        "Members that differ from what was protected",
        *table(head[:columns], [row[:columns] for row in rows], left=(0, 2, 4)),
    ]
    return lines + and_more(len(damaged) - len(rows))


def _member_flips(member: MemberReport) -> str:
    if member.state is MemberState.ABSENT:  # nothing was read in which a bit could be flipped
        return "-"
    return "unknown" if member.bits_flipped is None else f"{member.bits_flipped:,}"


def lost(all_members: Iterable[MemberReport]) -> Section:
    """The byte ranges that could not be put right."""
    ranges = [(member.path, offset, length) for member in all_members for offset, length in member.lost]
    if not ranges:
        return []
    rows = [(safe(path), f"{offset:,}", f"{length:,}") for path, offset, length in ranges[:RANGES_SHOWN]]
    return [
        "Bytes that are lost",
        *table(("member", "from byte", "bytes"), rows, left=(0,)),
        *and_more(len(ranges) - len(rows)),
    ]
