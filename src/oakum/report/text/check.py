"""What `verify` and `repair` found and did."""

import shlex

from oakum.report.terminal import safe
from oakum.report.text import damage
from oakum.report.text.layout import FILES_SHOWN, Section, and_more, joined, notes, paragraph
from oakum.report.units import counted, exact_size, percent, size, took
from oakum.results import CheckResult, MemberState, Outcome, SidecarReport


def check_text(result: CheckResult) -> str:
    """What `verify` or `repair` found and did, for a person to read."""
    sections: list[Section] = [paragraph(_verdict(result)), paragraph(_facts(result))]
    sections += notes(result.notes)
    sections += [_written(result), _advice(result)]
    if result.outcome is not Outcome.INTACT:
        sections += [damage.counts(result), damage.margins(result), damage.weakest(result.blocks)]
        sections += [damage.members(result.members), damage.lost(result.members)]
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
    if totals.bits_read and result.outcome is not Outcome.INTACT:
        sentences.append(_flips_sentence(result))
    if totals.bytes_erased:
        sentences.append(f"{exact_size(totals.bytes_erased)} could not be read, were cut off or were absent.")
    sentences.append(_sidecar_sentence(result.sidecar))
    sentences.append(took(totals.bits_read / 8, result.seconds))
    return " ".join(sentences)


def _flips_sentence(result: CheckResult) -> str:
    read, flips = size(result.totals.bits_read / 8), counted(result.totals.bits_flipped, "flipped bit")
    if result.outcome is not Outcome.UNCORRECTABLE:
        return f"{flips} in {read} read."
    if result.totals.bits_flipped:
        return f"At least {flips} in {read} read."
    return f"How many bits are flipped in {read} read is not known."


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
            "Look for another copy of what is lost. To get what can be had, name members with --member, "
            "or take everything as far as it goes:"
        )
        lines.append(f"{command} --accept-loss")
    return lines


def _written(result: CheckResult) -> Section:
    """Where the corrected files are; whole members, which an output folder gets too, are only counted."""
    mended = [member for member in result.members if member.mended is not None]
    corrected = [member.mended for member in mended if member.state is not MemberState.INTACT]
    files = [*corrected, result.sidecar.mended] if result.sidecar.mended else corrected
    shown = [f"  {safe(str(path))}" for path in files[:FILES_SHOWN]]
    lines = ["Written", *shown, *and_more(len(files) - len(shown))]
    if len(mended) > len(corrected):
        others = counted(len(mended) - len(corrected), "whole member")
        lines.append(f"  and {others} copied with them" if files else f"  {others} copied")
    return lines if len(lines) > 1 else []
