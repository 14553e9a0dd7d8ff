"""What `protect` wrote and what it is good for."""

from oakum.report.terminal import safe
from oakum.report.text.layout import joined, notes, paragraph
from oakum.report.text.strength import strength
from oakum.report.units import counted, exact_size, percent, took
from oakum.results import ProtectResult


def protect_text(result: ProtectResult) -> str:
    """What `protect` wrote and what it is good for."""
    name = "The sidecar on standard output" if str(result.sidecar) == "-" else safe(str(result.sidecar))
    cost = exact_size(result.sidecar_bytes)
    if result.sidecar_bytes < result.stream_bytes:  # of a few bytes a share says nothing
        cost += f", {percent(result.sidecar_bytes / result.stream_bytes, 1)} of what it protects"
    times = {1: "once", 2: "twice"}.get(result.reads, f"{result.reads} times")
    written = (
        f"{name} now protects {counted(result.members, 'member')}, "
        f"{exact_size(result.stream_bytes)}. It takes {cost}."
    )
    done = f"The source was read {times}. {took(result.stream_bytes, result.seconds)}"
    strength_sentences = strength(result.code, result.guaranteed_burst, result.windows)
    sections = [paragraph(written), paragraph(strength_sentences)]
    sections += notes(result.notes)
    sections.append(paragraph(done))
    sections.append(paragraph("A sidecar is not a second copy: keep at least one copy elsewhere."))
    return joined(sections)
