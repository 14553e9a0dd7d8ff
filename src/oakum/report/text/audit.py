"""What `audit` found and what `history` makes of it, for a person to read."""

from __future__ import annotations

from collections.abc import Sequence

from oakum.audits import AuditResult, CauseFinding, Growth, Point, Rate, Statistics, TargetAudit, Trend
from oakum.report.terminal import safe
from oakum.report.text.check import check_text
from oakum.report.text.layout import Section, joined, pairs, paragraph, table
from oakum.report.units import counted, percent, size
from oakum.results import Outcome

TERA = 1e12
AUDITS_SHOWN = 20


def audit_text(result: AuditResult) -> str:
    """All targets, one after the other, then what concerns all of them."""
    parts = [_target_text(target) for target in result.targets]
    last: list[Section] = []
    if len(result.targets) > 1:
        last.append(paragraph(summary_line(result)))
    if result.overall is not None:
        last.append(_rates(result.overall, "All targets together"))
    if result.ledger_note:
        last.append(paragraph(f"No entry in the ledger: {safe(result.ledger_note)}."))
    elif result.ledger is not None:
        last.append(paragraph(f"Entered in the ledger {safe(str(result.ledger))}."))
    if result.trend is not None:
        last.append(paragraph(_advice(result.trend)))
    return "\n".join(part for part in (*parts, joined(last) if last else "") if part)


def summary_line(result: AuditResult) -> str:
    """The whole audit on one line, as a mail from cron wants it."""
    words = {
        Outcome.INTACT: "whole", Outcome.CORRECTABLE: "damaged and correctable",
        Outcome.UNCORRECTABLE: "damaged beyond correction", Outcome.UNCHECKED: "not checked",
    }  # fmt: skip
    states = [
        f"{sum(t.outcome is outcome for t in result.targets):,} {word}"
        for outcome, word in words.items()
        if any(t.outcome is outcome for t in result.targets)
    ]
    checked = [t.statistics for t in result.targets if t.statistics is not None]
    read, flips = sum(s.bits_read for s in checked) / 8, sum(s.flip_rate.count for s in checked)
    bursts = sum(s.burst_rate.count for s in checked)
    margins = [s.lowest_margin for s in checked if s.lowest_margin is not None]
    parts = [f"{counted(len(result.targets), 'target')}: {', '.join(states)}"]
    if checked:
        parts.append(
            f"{counted(flips, 'scattered flip')} and {counted(bursts, 'burst')} in {size(read)} read"
        )
    if margins and min(margins) < 1:
        parts.append(f"lowest margin {percent(max(0.0, min(margins)))}")
    return "; ".join(parts) + "."


def _target_text(target: TargetAudit) -> str:
    if target.check is None or target.statistics is None:
        name = safe(str(target.target))
        if target.earlier:
            return joined([paragraph(f"{name}: {target.outcome}, {safe(target.reason)}.")])
        return joined([paragraph(f"{name} was not checked: {safe(target.reason)}.")])
    sections: list[Section] = [_rates(target.statistics)]
    if target.findings:
        sections.append(["What may have done it"])
        sections += [_finding(number, f) for number, f in enumerate(target.findings, 1)]
    return check_text(target.check) + "\n" + joined(sections)


def _finding(number: int, finding: CauseFinding) -> Section:
    likely = f"{number}. {str(finding.cause).capitalize()} ({finding.likelihood}): "
    lines = paragraph(likely + safe(finding.evidence) + ".") + paragraph(finding.advice)
    return ["  " + line for line in lines]


def _rates(s: Statistics, title: str = "What this says of the medium") -> Section:
    margin = "none, some is beyond correction" if s.lowest_margin is None else percent(s.lowest_margin)
    if s.margin_at is not None:
        margin += " (window {:,}, block {:,})".format(*s.margin_at)
    rows = [
        ("scattered flips a bit", rate_words(s.flip_rate)),
        ("bursts a terabyte", rate_words(s.burst_rate, TERA)),
    ]
    if s.burst_lengths:
        middle = s.burst_lengths[len(s.burst_lengths) // 2]
        rows.append(
            (
                "burst lengths in bytes",
                f"{s.burst_lengths[0]:,} to {s.burst_lengths[-1]:,}, median {middle:,}",
            )
        )
    rows += [
        ("lowest margin", margin),
        ("read errors", f"{s.read_errors:,}"),
        ("readings that differ", f"{s.readings_differ:,}"),
        ("sidecar read", size(s.sidecar_bits_read / 8)),
    ]
    if s.coverage < 1:
        rows.append(("share of the stream read", percent(s.coverage, 1)))
    return [f"{title} (with 95 % intervals)", *pairs(rows)]


def rate_words(rate: Rate, unit: float = 1.0) -> str:
    """`1.1e-09 (7.4e-10 to 1.6e-09)`; an upper limit where nothing was found."""
    if not rate.exposure:
        return "nothing was read"
    if not rate.count:
        return f"below {rate.high * unit:.2g}"
    return f"{rate.value * unit:.2g} ({rate.low * unit:.2g} to {rate.high * unit:.2g})"


# -- history -------------------------------------------------------------------------------------------


def history_text(trends: Sequence[Trend]) -> str:
    """Every medium: advice first, then the trend, then the audits."""
    return "\n".join(joined(_trend(trend)) for trend in trends)


def _trend(trend: Trend) -> list[Section]:
    sections: list[Section] = [paragraph(_advice(trend))]
    sections += [paragraph(f"{text[:1].upper()}{text[1:]}.") for text in trend.conclusions]
    facts = []
    if trend.flips is not None:
        facts.append(("scattered flips a bit", _growth(trend.flips, 1)))
    if trend.bursts is not None:
        facts.append(("bursts a terabyte", _growth(trend.bursts, TERA)))
    if trend.margin_a_year is not None:
        facts.append(("lowest margin, change a year", f"{trend.margin_a_year * 100:+.1f} % of r"))
    facts.append(("chance of loss now, at most", chance_words(trend.chance_now)))
    if trend.refresh_by is not None:
        facts.append(("limit passed, if this goes on", f"in {trend.refresh_by}"))
    sections.append(["The trend", *pairs(facts)])
    shown = trend.points[-AUDITS_SHOWN:]
    head = ("day", "read", "flips a bit", "bursts", "margin")
    sections.append(["The audits", *table(head, [_point(p) for p in shown], left=(0,))])
    return sections


def _advice(trend: Trend) -> str:
    name = f"{safe(trend.medium)}: " if trend.medium else ""
    return f"{name}{trend.advice}, for {trend.reason}"


def chance_words(chance: float) -> str:
    """A chance with two digits, as far down as it means anything."""
    return f"{chance:.2g}" if chance >= 1e-15 else "1e-15"


def _growth(growth: Growth, unit: float) -> str:
    change = f"times {growth.factor:.3g} a year ({growth.low:.3g} to {growth.high:.3g})"
    clumps = "; the counts vary by more than chance" if growth.dispersion > 2 else ""
    return f"{growth.now * unit:.2g} now, {change}{clumps}"


def _point(point: Point) -> Sequence[str]:
    return (
        point.when.date().isoformat(),
        percent(point.coverage),
        rate_words(point.flips),
        f"{point.bursts.count:,}",
        "none" if point.margin is None else percent(point.margin),
    )


__all__ = ["audit_text", "chance_words", "history_text", "rate_words", "summary_line"]
