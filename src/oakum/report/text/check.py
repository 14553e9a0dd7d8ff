"""What `verify` and `repair` found and did."""

import shlex
from collections.abc import Iterable, Sequence

from oakum.report.terminal import safe
from oakum.report.text.layout import Section, and_more, joined, pairs, paragraph, table
from oakum.report.units import counted, exact_size, percent, size, took
from oakum.results import BlockReport, CheckResult, MemberReport, MemberState, Outcome, SidecarReport

WEAKEST_SHOWN = 10
MEMBERS_SHOWN = 40
RANGES_SHOWN = 20


def check_text(result: CheckResult) -> str:
    """What `verify` or `repair` found and did, for a person to read."""
    sections: list[Section] = [paragraph(_verdict(result)), paragraph(_facts(result))]
    sections += [paragraph(safe(note)) for note in result.notes]
    sections += [_written(result), _advice(result)]
    if result.outcome is not Outcome.INTACT:
        sections += [_counts(result), _margins(result), _weakest(result.blocks)]
        sections += [_members(result.members), _lost(result.members)]
    return joined(sections)


def _verdict(result: CheckResult) -> str:
    """The one sentence that matters most."""
    repaired = result.command == "repair"
    match result.outcome:
        case Outcome.INTACT:
            number = len(result.members)
            if number == 1:
                return "Nothing is damaged: the one member is as it was protected."
            return f"Nothing is damaged: all {number:,} members are as they were protected."
        case Outcome.CORRECTABLE:
            done = "was put right" if repaired else "can be put right"
            return f"Every byte {done}; {_weakest_phrase(result)}."
        case Outcome.UNCORRECTABLE:
            could = "could" if repaired else "can"
            beyond = result.totals.blocks_uncorrectable
            if not beyond:
                return f"Not every byte {could} be put right."
            blocks = f"{beyond:,} of {counted(result.totals.blocks, 'block')}"
            return f"Not every byte {could} be put right: the damage in {blocks} is beyond the parity."
        case Outcome.UNCHECKED:
            return "Nothing could be checked."


def _weakest_phrase(result: CheckResult) -> str:
    weakest = result.weakest
    if not result.blocks:
        return "the inner code and the records were enough, and no block lost any margin"
    if weakest < 0:
        return "the weakest block had no margin left and was saved by further trials"
    return f"the weakest block keeps {percent(weakest)} of its margin"


def _facts(result: CheckResult) -> str:
    totals = result.totals
    sentences = []
    if totals.bits_flipped or result.outcome is Outcome.CORRECTABLE:
        least = "At least " if result.outcome is Outcome.UNCORRECTABLE else ""
        flips = counted(totals.bits_flipped, "flipped bit")
        sentences.append(f"{least}{flips} in {size(totals.bits_read / 8)} read.")
    if totals.bytes_erased:
        sentences.append(f"{exact_size(totals.bytes_erased)} could not be read, were cut off or were absent.")
    sentences.append(_sidecar_sentence(result.sidecar))
    sentences.append(took(totals.bits_read / 8, result.seconds))
    return " ".join(sentences)


def _sidecar_sentence(sidecar: SidecarReport) -> str:
    detail = f" ({safe(sidecar.detail)})" if sidecar.detail else ""
    if sidecar.state is Outcome.INTACT:
        return f"The sidecar itself is whole{detail}."
    flips = "" if sidecar.bits_flipped is None else f", {counted(sidecar.bits_flipped, 'flipped bit')}"
    match sidecar.state:
        case Outcome.CORRECTABLE:
            return f"The sidecar itself is damaged{flips}, and can be put right{detail}."
        case Outcome.UNCORRECTABLE:
            return f"The sidecar itself is damaged{flips}, and part of it is lost{detail}."
        case _:
            return f"The sidecar itself was not checked{detail}."


def _advice(result: CheckResult) -> Section:
    """What to do next, the command on a line of its own."""
    command = f"  oakum repair {safe(shlex.quote(str(result.target)))}"
    edited = [member for member in result.members if member.edited]
    lines: list[str] = []
    if edited:
        number = counted(len(edited), "altered member is", "altered members are")
        lines += paragraph(
            f"{number} newer than recorded, which looks edited rather than decayed. If the new content is "
            "wanted, protect it anew instead of repairing it."
        )
    if result.command == "verify" and result.outcome is Outcome.CORRECTABLE:
        lines += ["To write the corrected files beside the damaged ones:", command]
    if result.command == "verify" and result.outcome is Outcome.UNCORRECTABLE:
        lines += paragraph(
            "Look for another copy of what is lost. To get what can be had, name whole members with --member, "
            "or take the others as far as they go:"
        )
        lines.append(f"{command} --accept-loss")
    return lines


def _counts(result: CheckResult) -> Section:
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


def _margins(result: CheckResult) -> Section:
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


def _weakest(blocks: Sequence[BlockReport]) -> Section:
    if not blocks:
        return []
    # No margin at all sorts before any margin, however negative.
    by_margin = sorted(blocks, key=lambda b: (b.margin is not None, b.margin or 0.0, b.window, b.block))
    head = ("window", "block", "margin", "bits flipped", "symbols wrong", "bytes erased")
    shown = by_margin[:WEAKEST_SHOWN]
    title = "The weakest blocks" if len(blocks) > len(shown) else "The damaged blocks"
    return [f"{title}, weakest first", *table(head, [_block_row(block) for block in shown])]


def _block_row(block: BlockReport) -> Sequence[str]:
    # What could not be corrected is not known in full: its counts are what the steps before brought out.
    least = "at least " if block.margin is None else ""
    return (
        f"{block.window:,}",
        f"{block.block:,}",
        "none" if block.margin is None else f"{block.margin * 100:.0f} %",
        f"{least}{block.bits_flipped:,}",
        f"{least}{block.symbols_wrong:,}",
        f"{block.bytes_erased:,}",
    )


def _members(members: Sequence[MemberReport]) -> Section:
    damaged = [member for member in members if member.state is not MemberState.INTACT]
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
        for member in damaged[:MEMBERS_SHOWN]
    ]
    head = ("member", "size", "state", "bits flipped", "remark")
    lines = ["Members that differ from what was protected", *table(head, rows, left=(0, 2, 4))]
    return lines + and_more(len(damaged) - len(rows))


def _member_flips(member: MemberReport) -> str:
    if member.state is MemberState.ABSENT:  # nothing was read in which a bit could be flipped
        return "-"
    return "unknown" if member.bits_flipped is None else f"{member.bits_flipped:,}"


def _lost(members: Iterable[MemberReport]) -> Section:
    ranges = [(member.path, offset, length) for member in members for offset, length in member.lost]
    if not ranges:
        return []
    rows = [(safe(path), f"{offset:,}", f"{length:,}") for path, offset, length in ranges[:RANGES_SHOWN]]
    return [
        "Bytes that are lost",
        *table(("member", "from byte", "bytes"), rows, left=(0,)),
        *and_more(len(ranges) - len(rows)),
    ]


def _written(result: CheckResult) -> Section:
    """Where the corrected files are; whole members, which an output folder gets too, are only counted."""
    mended = [member for member in result.members if member.mended is not None]
    corrected = [member.mended for member in mended if member.state is not MemberState.INTACT]
    files = [*corrected, result.sidecar.mended] if result.sidecar.mended else corrected
    shown = [f"  {safe(str(path))}" for path in files[:MEMBERS_SHOWN]]
    lines = ["Written", *shown, *and_more(len(files) - len(shown))]
    if len(mended) > len(corrected):
        others = counted(len(mended) - len(corrected), "whole member")
        lines.append(f"  and {others} copied with them" if files else f"  {others} copied")
    return lines if len(lines) > 1 else []
