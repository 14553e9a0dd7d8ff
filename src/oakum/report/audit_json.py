"""Audits and trends as JSON documents: those of `verify`, with keys added."""

from __future__ import annotations

from oakum.audits import AuditResult, CauseFinding, Growth, Point, Rate, Statistics, TargetAudit, Trend
from oakum.report.json import SCHEMA, Document, check_document, shown, unchecked_document


def audit_document(result: AuditResult) -> Document:
    """All targets, each a document as `verify` makes it, and what concerns all of them."""
    return {
        "schema": SCHEMA,
        "command": "audit",
        "outcome": str(result.outcome),
        "begun": result.begun.isoformat(timespec="seconds"),
        "medium_id": result.medium,
        "share": result.share,
        "seed": result.seed,
        "counters": dict(result.counters),
        "targets": [_target(target) for target in result.targets],
        "overall": None if result.overall is None else _statistics(result.overall),
        "ledger": None if result.ledger is None else shown(str(result.ledger)),
        "ledger_error": shown(result.ledger_note) or None,
        "trend": None if result.trend is None else _trend(result.trend),
        "seconds": round(result.seconds, 3),
    }


def history_document(trends: tuple[Trend, ...]) -> Document:
    """The trends of media."""
    return {"schema": SCHEMA, "command": "history", "media": [_trend(trend) for trend in trends]}


def _target(target: TargetAudit) -> Document:
    if target.check is None or target.statistics is None:
        document = unchecked_document("audit", str(target.target), target.reason)
        return document | {"outcome": str(target.outcome), "identity": target.identity}
    return check_document(target.check) | {
        "identity": target.identity,
        "statistics": _statistics(target.statistics),
        "findings": [_finding(finding) for finding in target.findings],
        "flips_along_stream": list(target.distribution.along),
        "flips_by_position": {
            "up": list(target.distribution.positions[0]),
            "down": list(target.distribution.positions[1]),
        },
    }


def _statistics(s: Statistics) -> Document:
    return {
        "bits_read": s.bits_read,
        "sidecar_bits_read": s.sidecar_bits_read,
        "flip_rate": _rate(s.flip_rate),
        "burst_rate": _rate(s.burst_rate),
        "burst_lengths": list(s.burst_lengths),
        "read_errors": s.read_errors,
        "readings_differ": s.readings_differ,
        "lowest_margin": None if s.lowest_margin is None else round(s.lowest_margin, 6),
        "margin_at": None if s.margin_at is None else {"window": s.margin_at[0], "block": s.margin_at[1]},
        "coverage": round(s.coverage, 6),
    }


def _rate(rate: Rate) -> Document:
    """Where nothing was found the rate itself is null: the upper limit is all that is known."""
    return {
        "count": rate.count,
        "exposure": rate.exposure,
        "rate": rate.value if rate.count else None,
        "low": rate.low,
        "high": rate.high if rate.exposure else None,
    }


def _finding(finding: CauseFinding) -> Document:
    return {
        "cause": str(finding.cause),
        "likelihood": str(finding.likelihood),
        "evidence": shown(finding.evidence),
        "advice": finding.advice,
        "wrong_bytes": finding.wrong_bytes,
        "members": [shown(path) for path in finding.members],
    }


def _trend(trend: Trend) -> Document:
    return {
        "medium_id": shown(trend.medium),
        "advice": str(trend.advice),
        "reason": trend.reason,
        "refresh_by": trend.refresh_by,
        "threshold": trend.threshold,
        "chance_now": trend.chance_now,
        "flip_rate": _growth(trend.flips),
        "burst_rate": _growth(trend.bursts),
        "margin_a_year": trend.margin_a_year,
        "conclusions": list(trend.conclusions),
        "audits": [_point(point) for point in trend.points],
    }


def _growth(growth: Growth | None) -> Document | None:
    if growth is None:
        return None
    return {
        "now": growth.now,
        "factor_a_year": growth.factor,
        "low": growth.low,
        "high": growth.high,
        "dispersion": growth.dispersion,
    }


def _point(point: Point) -> Document:
    return {
        "begun": point.when.isoformat(timespec="seconds"),
        "flip_rate": _rate(point.flips),
        "burst_rate": _rate(point.bursts),
        "margin": point.margin,
        "coverage": round(point.coverage, 6),
    }
