"""The pages: plain sentences, then pictures and tables, in one hue, light or dark as the reader likes."""

from __future__ import annotations

import html
from collections.abc import Iterable, Sequence

from oakum.audits import AuditResult, CauseFinding, TargetAudit, Trend
from oakum.report.html import charts
from oakum.report.terminal import safe
from oakum.report.text.audit import TERA, chance_words, rate_words, summary_line
from oakum.report.units import counted, percent, size
from oakum.results import BlockReport, MemberReport, MemberState, Outcome

ROWS_SHOWN = 20

STYLE = """
:root { color-scheme: light dark; --paper: #fbf9f4; --ink: #23282b; --hue: #1d5c70; --soft: #dcd6c8; }
@media (prefers-color-scheme: dark) {
  :root { --paper: #16191a; --ink: #e4dfd3; --hue: #86bfce; --soft: #3b3f3f; }
}
* { box-sizing: border-box; }
body { margin: 0 auto; max-width: 72rem; padding: 1.5rem 1rem 3rem;
  background: var(--paper); color: var(--ink);
  font: 1rem/1.55 Georgia, "Times New Roman", serif; overflow-wrap: anywhere; }
h1, h2, h3 { font-weight: 600; line-height: 1.25; margin: 2.2rem 0 .6rem; }
h1 { font-size: 1.7rem; margin-top: 0; }
h2 { font-size: 1.3rem; border-top: 1px solid var(--soft); padding-top: 1.4rem; }
h3 { font-size: 1.05rem; } p { max-width: 44rem; margin: .5rem 0; }
.lead { font-size: 1.12rem; } ol { max-width: 44rem; padding-left: 1.4rem; } li { margin: .6rem 0; }
.pictures { display: grid; gap: 1rem 2.5rem;
  grid-template-columns: repeat(auto-fit, minmax(min(100%, 26rem), 1fr)); }
figure { margin: 0; min-width: 0; max-width: 36rem; break-inside: avoid; }
figcaption { margin-bottom: .3rem; }
svg { width: 100%; height: auto; display: block; } svg text { font-family: inherit !important; }
table { border-collapse: collapse; width: 100%; max-width: 52rem; font-variant-numeric: tabular-nums; }
th, td { text-align: left; vertical-align: top; padding: .25rem .9rem .25rem 0;
  border-bottom: 1px solid var(--soft); }
th { font-weight: 600; color: var(--hue); } td.n, th.n { text-align: right; }
th, td { overflow-wrap: normal; } td:first-child { overflow-wrap: anywhere; min-width: 4.5rem; }
td.n:first-child { min-width: 0; } th:last-child, td:last-child { padding-right: 0; }
footer { margin-top: 3rem; border-top: 1px solid var(--soft); padding-top: .8rem; font-size: .9rem; }
@media (max-width: 32rem) { table { font-size: .88rem; } th, td { padding-right: .5rem; } }
@media print {
  body { max-width: none; background: none; }
  :root { --paper: #fff; --ink: #000; --hue: #1d5c70; --soft: #ccc; }
}
"""

Row = Sequence[str]


def audit_page(result: AuditResult) -> str:
    """The page of one audit."""
    lead = f'<p class="lead">{_text(summary_line(result))}</p>'
    facts = [f"Begun {result.begun.strftime('%Y-%m-%d %H:%M')} UTC"]
    if result.medium:
        facts.append(f"medium {result.medium}")
    if result.share < 1:
        facts.append(f"a sample of {percent(result.share, 1)}, seed {result.seed}")
    facts += [f"{name} {value:g}" for name, value in result.counters]
    if result.ledger_note:
        facts.append(f"no entry in the ledger: {result.ledger_note}")
    parts = [lead, f"<p>{_text('; '.join(facts))}.</p>"]
    parts += [_target(number, target) for number, target in enumerate(result.targets)]
    if result.trend is not None:
        parts.append(_trend(0, result.trend))
    return _page("Audit" + (f" of {result.medium}" if result.medium else ""), parts)


def history_page(trends: Sequence[Trend]) -> str:
    """The page of the ledger's trends."""
    return _page("Audits over the years", [_trend(number, trend) for number, trend in enumerate(trends)])


def _page(title: str, parts: Iterable[str]) -> str:
    body = "\n".join(parts)
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{_text(title)}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n<h1>{_text(title)}</h1>\n"
        f"{body}\n<footer>Intervals are exact 95 % intervals of counts. Likely causes are hints with their "
        "evidence, not findings of fact.</footer>\n</body>\n</html>\n"
    )


def _text(text: str) -> str:
    """Text from anywhere, harmless in a page."""
    return html.escape(safe(text))


def _target(number: int, target: TargetAudit) -> str:
    parts = [f"<h2>{_text(str(target.target))}</h2>"]
    check, s = target.check, target.statistics
    if check is None or s is None:
        word = "Not checked" if target.outcome is Outcome.UNCHECKED else str(target.outcome).capitalize()
        return "\n".join([*parts, f"<p>{word}: {_text(target.reason)}.</p>"])
    parts.append(f"<p>{_text(_state(target))}</p>")
    totals = check.totals
    rows = [
        ("Read", f"{size(s.bits_read / 8)} and {size(s.sidecar_bits_read / 8)} of the sidecar"),
        ("Scattered flips a bit", rate_words(s.flip_rate)),
        ("Bursts a terabyte", rate_words(s.burst_rate, TERA)),
        (
            "Bits flipped",
            f"{totals.bits_flipped_scattered:,} scattered, {totals.bits_flipped_burst:,} in bursts",
        ),
        ("Symbols wrong", f"{check.totals.symbols_wrong:,}"),
        ("Words corrected, flagged", f"{check.totals.words_corrected:,}, {check.totals.words_flagged:,}"),
        ("Bytes unreadable", f"{check.totals.bytes_erased:,}"),
        ("Read errors, readings that differ", f"{s.read_errors:,}, {s.readings_differ:,}"),
    ]
    if s.coverage < 1:
        rows.append(("Share of the stream read", percent(s.coverage, 1)))
    parts.append(_table(("", "with 95 % intervals"), rows, numbers=()))
    if target.findings:
        parts.append("<h3>What may have done it</h3>\n<ol>")
        parts += [_finding(finding) for finding in target.findings]
        parts.append("</ol>")
    parts += [_pictures(number, target), _weakest(check.blocks), _members(check.members)]
    return "\n".join(part for part in parts if part)


def _state(target: TargetAudit) -> str:
    s = target.statistics
    margin = None if s is None else s.lowest_margin
    match target.outcome:
        case Outcome.INTACT:
            return "Nothing is damaged."
        case Outcome.CORRECTABLE if margin is not None and margin < 1:
            kept = percent(max(0.0, margin))
            return f"Every byte can be put right; the weakest block keeps {kept} of its margin."
        case Outcome.CORRECTABLE:
            return "Every byte can be put right, and no block lost any margin."
        case _:
            return "Not every byte can be put right."


def _finding(finding: CauseFinding) -> str:
    cause, evidence = str(finding.cause), _text(finding.evidence)
    return (
        f"<li><strong>{cause[:1].upper()}{cause[1:]}</strong>, {finding.likelihood}: {evidence}. "
        f"{_text(finding.advice)}</li>"
    )


def _pictures(number: int, target: TargetAudit) -> str:
    check, s, where = target.check, target.statistics, target.distribution
    if check is None or s is None:
        return ""
    figures = []
    margins = [b.margin if b.margin is not None else 0.0 for b in check.blocks]
    if margins:
        svg = charts.margins(f"m{number}", margins, check.totals.blocks - len(margins))
        figures.append(("Blocks by the margin that they keep, cumulative", svg))
    if any(where.along):
        figures.append(("Where flips lie along the stream", charts.along(f"a{number}", where.along)))
    if s.burst_lengths:
        figures.append(("How long the bursts are", charts.burst_lengths(f"b{number}", s.burst_lengths)))
    if any(map(any, where.positions)):
        svg = charts.positions(f"p{number}", where)
        figures.append(("Flips by bit position, up those from 0 to 1", svg))
    return _figures(figures)


def _figures(figures: Sequence[tuple[str, str]]) -> str:
    shown = "".join(
        f"<figure><figcaption>{_text(title)}</figcaption>{svg}</figure>" for title, svg in figures
    )
    return f'<div class="pictures">{shown}</div>' if shown else ""


def _weakest(blocks: Sequence[BlockReport]) -> str:
    ordered = sorted(blocks, key=lambda b: (b.margin is not None, b.margin or 0.0, b.window, b.block))
    rows = [
        (
            f"{b.window:,}, {b.block:,}", "none" if b.margin is None else percent(max(0.0, b.margin)),
            "unknown" if b.bits_flipped is None else f"{b.bits_flipped:,}", f"{b.bytes_erased:,}",
        )
        for b in ordered[:ROWS_SHOWN]
    ]  # fmt: skip
    if not rows:
        return ""
    head = ("Window, block", "Margin", "Bits flipped", "Bytes erased")
    return "<h3>The weakest blocks</h3>\n" + _table(head, rows, numbers=range(1, 4))


def _members(members: Sequence[MemberReport]) -> str:
    damaged = [m for m in members if m.state is not MemberState.INTACT]
    rows = [
        (m.path, size(m.size), str(m.state), "unknown" if m.bits_flipped is None else f"{m.bits_flipped:,}")
        for m in damaged[:ROWS_SHOWN]
    ]
    if not rows:
        return ""
    more = len(damaged) - len(rows)
    rest = f"<p>and {more:,} more</p>" if more else ""
    head = ("Member", "Size", "State", "Bits flipped")
    return (
        "<h3>Members that differ from what was protected</h3>\n" + _table(head, rows, numbers=(1, 3)) + rest
    )


def _trend(number: int, trend: Trend) -> str:
    title = f"Medium {trend.medium}" if trend.medium else "The medium"
    advice = str(trend.advice)
    parts = [
        f"<h2>{_text(title)}</h2>",
        f'<p class="lead">{advice[:1].upper()}{advice[1:]}, for {_text(trend.reason)}</p>',
        *(f"<p>{_text(text[:1].upper() + text[1:])}.</p>" for text in trend.conclusions),
    ]
    if trend.flips is not None:
        g = trend.flips
        parts.append(
            f"<p>The flip rate changes {g.factor:.3g} times a year ({g.low:.3g} to {g.high:.3g}); "
            f"the chance of loss now is at most {chance_words(trend.chance_now)}.</p>"
        )
    if trend.refresh_by is not None:
        parts.append(f"<p>If this goes on, the limit is passed in {trend.refresh_by}.</p>")
    figures = []
    if any(p.flips.exposure for p in trend.points):
        figures.append(("Scattered flips a bit, audit by audit", charts.trend(f"t{number}", trend.points)))
    if sum(p.margin is not None for p in trend.points) > 1:
        figures.append(("Lowest margin, audit by audit", charts.margin_trend(f"w{number}", trend.points)))
    parts.append(_figures(figures))
    rows = [
        (
            p.when.date().isoformat(), percent(p.coverage), rate_words(p.flips), f"{p.bursts.count:,}",
            "none" if p.margin is None else percent(max(0.0, p.margin)),
        )
        for p in trend.points
    ]  # fmt: skip
    head = ("Day", "Read", "Flips a bit", "Bursts", "Lowest margin")
    parts.append(
        f"<h3>{counted(len(rows), 'audit').capitalize()}</h3>\n" + _table(head, rows, numbers=(3, 4))
    )
    return "\n".join(parts)


def _table(head: Row, rows: Sequence[Row], *, numbers: Iterable[int]) -> str:
    """A table; the columns `numbers` are aligned to the right."""
    right = set(numbers)

    def cells(row: Row, tag: str) -> str:
        return "".join(
            f"<{tag}{' class=n' if i in right else ''}>{_text(cell)}</{tag}>" for i, cell in enumerate(row)
        )

    body = "".join(f"<tr>{cells(row, 'td')}</tr>" for row in rows)
    top = f"<thead><tr>{cells(head, 'th')}</tr></thead>" if any(head) else ""
    return f"<table>{top}<tbody>{body}</tbody></table>"
