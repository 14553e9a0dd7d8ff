"""What `plan` advises and what `rehearse` proved."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from math import exp, inf, log

from oakum.report.chances import between, chance
from oakum.report.chart import chart_lines
from oakum.report.terminal import safe
from oakum.report.text.layout import Section, and_more, joined, notes, paragraph, table
from oakum.report.text.strength import code_phrase
from oakum.report.units import counted, duration, exact_size, percent, size
from oakum.results import Assumption, Candidate, Limit, Loss, PlanResult, RehearsalResult, Trial

TRIALS_SHOWN = 40


def plan_text(result: PlanResult) -> str:
    """The recommendation and its reason, the line to run, the frontier, what all of it rests on."""
    return joined(
        [
            paragraph(recommendation(result)),
            [] if result.hopeless else [f"  {safe(result.command)}"],
            *notes(result.notes),
            _frontier(result),
            _guarantees(result.frontier),
            _chart(result),
            assumptions(result.assumptions),
            paragraph("A sidecar is not a second copy: keep at least one copy elsewhere."),
        ]
    )


def recommendation(result: PlanResult) -> str:
    """One sentence: which code, and why."""
    best = result.recommended
    data, period = size(result.size), f"within {_years(result.years)}"
    loss = f"at most {chance(best.period.at_most)}"
    code = f"{code_phrase(best.code)}, overhead {percent(best.code.overhead, 1)}"
    target = chance(log(result.target))
    if result.reached:
        return (
            f"Take {code}: of the codes that keep the chance to lose anything of {data} {period} below "
            f"{target} it needs the least space ({loss})."
        )
    budget = "" if result.budget is None else f" within an overhead of {percent(result.budget, 1)}"
    if result.hopeless:
        return (
            f"No code tried{budget} keeps {data} from loss {period}; {code}, comes nearest ({loss}). "
            "It takes less damage, or a further copy."
        )
    return (
        f"No code tried{budget} keeps the chance to lose anything of {data} {period} below {target}; "
        f"{code}, comes nearest ({loss})."
    )


def _years(years: float) -> str:
    return "1 year" if years == 1 else f"{years:g} years"


def _frontier(result: PlanResult) -> Section:
    head = ["code", "overhead", "codeword", "at least", "at most"]
    if result.years > 1:
        head.append("mended yearly")
    rows = []
    for c in result.frontier:
        row = [
            safe(c.code.name),
            percent(c.code.overhead, 1),
            chance(c.period.column),
            chance(min(c.period.stream[0], c.period.at_most)),
            chance(c.period.at_most),
        ]
        rows.append([*row, chance(c.renewed)] if result.years > 1 else row)
    title = f"Chance to lose one codeword, and anything at all, within {_years(result.years)}"
    return [title, *table(head, rows, left=(0,))]


def _guarantees(frontier: Sequence[Candidate]) -> Section:
    rows = [
        (safe(c.code.name), f"{c.code.guaranteed_flips:,}", size(c.guaranteed_burst), size(c.depth))
        for c in frontier
    ]
    head = ("code", "flips in a codeword", "one lost stretch", "depth")
    return ["Put right in any case, wherever it is", *table(head, rows, left=(0,))]


def _chart(result: PlanResult) -> Section:
    if not result.curves:
        return []
    return [
        "Chance of loss, at most, against the chance of a bit to differ",
        *chart_lines(result.curves, result.flip_rate),
    ]


def assumptions(figures: Sequence[Assumption]) -> Section:
    """What the figures rest on: each with its source and how well it is known."""
    if not figures:
        return []
    lines = ["What this rests on"]
    for figure in figures:
        lines += paragraph(f"{safe(figure.text)} ({safe(figure.source)}; {figure.mark})", "  - ")
    return lines


def rehearsal_text(result: RehearsalResult) -> str:
    """How many trials came back, beside what was predicted, then the trials."""
    sections: list[Section] = []
    if result.limit is not None:
        sections.append(paragraph(_limit(result.limit)))
    if result.trials:
        sections.append(paragraph(_survival(result)))
    sections += notes(result.notes)
    sections += [_trials(result.trials), _reasons(result.trials), assumptions(result.assumptions)]
    sections.append(
        paragraph(
            f"The code is {code_phrase(result.code)}; {exact_size(result.stream_bytes)} in "
            f"{counted(result.blocks, 'block')}. Nothing was written. "
            f"Seed {result.seed} repeats this run exactly. It took {duration(result.seconds)}."
        )
    )
    return joined(sections)


def _survival(result: RehearsalResult) -> str:
    tries, survived = len(result.trials), result.survived
    lead = f"Everything came back whole in {survived:,} of {counted(tries, 'trial')}."
    margins = [t.margin for t in result.trials if t.margin is not None]
    if margins:
        kept = f"kept {percent(min(margins))} of its margin" if min(margins) > 0 else "had no margin left"
        lead += f" The weakest block of those {kept}."
    if result.interval is not None:
        low, high = result.interval
        lead += (
            f" The rate of survival lies between {percent(low, 1)} and {percent(high, 1)} "
            f"(exact {percent(result.level)} interval)."
        )
    if result.predicted is not None:
        low_loss, high_loss, words = _prediction(result.predicted, result.flip_rate)
        lead += f" Predicted chance of loss: {words}."
        if result.interval is not None and not (
            exp(low_loss) <= 1 - result.interval[0] and exp(high_loss) >= 1 - result.interval[1]
        ):
            lead += " That lies outside the interval of what was seen."
    return lead


def _prediction(loss: Loss, flip_rate: float) -> tuple[float, float, str]:
    """Bounds of the chance of loss as natural logarithms, and both in words.

    Under flips feedback saves more than one pass, and nothing tells how much at the least.
    """
    high = loss.at_most
    if not flip_rate:
        low = min(loss.stream[0], high)
        return low, high, between((low, high))
    if loss.measured is not None and loss.measured <= loss.stream[1]:
        most = f"at most {chance(high)}"
        shown = most if loss.expected is None else f"about {chance(loss.expected)}, {most}"
        return -inf, high, f"{shown}, as far as the decoder was measured"
    return -inf, high, f"at most {chance(high)} in one pass of the decoder; feedback saves more"


def _limit(limit: Limit) -> str:
    def shown(value: float) -> str:
        return exact_size(round(value)) if limit.quantity == "burst length" else f"{value:.3g}"

    if limit.lost is None:
        assert limit.survived is not None
        return f"No block was lost up to a {limit.quantity} of {shown(limit.survived)}."
    first = f"The first block was lost at a {limit.quantity} of {shown(limit.lost)}"
    if limit.survived is None:
        return f"{first}, and nothing below it was survived."
    return f"{first}; {shown(limit.survived)} was survived ({counted(limit.steps, 'trial')})."


def _trials(trials: Sequence[Trial]) -> Section:
    if not trials:
        return []
    rows = [
        (
            f"{t.number + 1}",
            "whole" if t.survived else "not whole",
            "none" if t.margin is None else percent(t.margin) if t.margin >= 0 else "below 0 %",
            f"{t.bits_corrected:,}",
            f"{t.bytes_erased:,}",
            f"{t.blocks_damaged:,}",
            f"{t.blocks_lost:,}",
            "whole" if t.sidecar_survived else "not whole",
        )
        for t in trials[:TRIALS_SHOWN]
    ]
    head = ("trial", "files", "margin", "bits corrected", "bytes erased", "blocks hit", "lost", "sidecar")
    return ["The trials", *table(head, rows, left=(1, 7)), *and_more(len(trials) - len(rows))]


def _reasons(trials: Sequence[Trial]) -> Section:
    """Why something was lost, the commonest first."""
    counts = Counter(t.reason for t in trials if t.reason)
    lines: list[str] = []
    for reason, count in counts.most_common():
        lines += paragraph(f"In {counted(count, 'trial')}: {safe(reason)}.")
    return lines
