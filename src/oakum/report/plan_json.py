"""Documents of `plan` and `rehearse`. A chance is {"log10", "value"}; log10 is null for never."""

from __future__ import annotations

from collections.abc import Sequence
from math import exp

from oakum.report.chances import log10
from oakum.report.json import SCHEMA, Document, code_document, named, shown
from oakum.results import Assumption, Candidate, Loss, PlanResult, RehearsalResult, Trial


def plan_document(result: PlanResult) -> Document:
    """What `plan` found."""
    return {
        "schema": SCHEMA,
        "command": "plan",
        **({"path": None} if result.path is None else named(str(result.path))),
        "size": result.size,
        "years": result.years,
        "target": result.target,
        "budget": result.budget,
        "flip_rate": result.flip_rate,
        "reached": result.reached,
        "recommended": result.recommended.notation,
        "protect": shown(result.command),
        "frontier": [_candidate(candidate) for candidate in result.frontier],
        "curves": [
            {"code": c.label, "points": [[r, log10(p)] for r, p in zip(c.rates, c.losses, strict=True)]}
            for c in result.curves
        ],
        "assumptions": _assumptions(result.assumptions),
        "seconds": round(result.seconds, 3),
        "notes": list(result.notes),
    }


def rehearsal_document(result: RehearsalResult) -> Document:
    """What `rehearse` proved."""
    limit = result.limit
    return {
        "schema": SCHEMA,
        "command": "rehearse",
        "target": shown(str(result.target)),
        "code": code_document(result.code),
        "stream_bytes": result.stream_bytes,
        "blocks": result.blocks,
        "flip_rate": result.flip_rate,
        "seed": result.seed,
        "survived": result.survived,
        "interval": None
        if result.interval is None
        else {"level": result.level, "low": result.interval[0], "high": result.interval[1]},
        "predicted": None if result.predicted is None else _loss(result.predicted),
        "limit": None
        if limit is None
        else {
            "quantity": limit.quantity,
            "survived": limit.survived,
            "lost": limit.lost,
            "steps": limit.steps,
        },
        "trials": [_trial(trial) for trial in result.trials],
        "assumptions": _assumptions(result.assumptions),
        "seconds": round(result.seconds, 3),
        "notes": list(result.notes),
    }


def _candidate(candidate: Candidate) -> Document:
    return {
        "code": code_document(candidate.code),
        "notation": candidate.notation,
        "depth": candidate.depth,
        "guaranteed_burst": candidate.guaranteed_burst,
        "year": _loss(candidate.year),
        "period": _loss(candidate.period),
        "mended_yearly": _chance(candidate.renewed),
    }


def _loss(loss: Loss) -> Document:
    return {
        "column": _chance(loss.column),
        "block": {"at_least": _chance(loss.block[0]), "at_most": _chance(loss.block[1])},
        "stream": {"at_least": _chance(loss.stream[0]), "at_most": _chance(loss.stream[1])},
        "measured_at_most": None if loss.measured is None else _chance(loss.measured),
        "measured": None if loss.expected is None else _chance(loss.expected),
    }


def _chance(log_chance: float) -> Document:
    return {"log10": log10(log_chance), "value": exp(log_chance)}


def _assumptions(figures: Sequence[Assumption]) -> list[Document]:
    return [{"text": f.text, "source": f.source, "mark": f.mark} for f in figures]


def _trial(trial: Trial) -> Document:
    return {
        "trial": trial.number,
        "survived": trial.survived,
        "sidecar_survived": trial.sidecar_survived,
        "bits_corrected": trial.bits_corrected,
        "bytes_erased": trial.bytes_erased,
        "blocks_damaged": trial.blocks_damaged,
        "blocks_lost": trial.blocks_lost,
        "margin": None if trial.margin is None else round(trial.margin, 6),
        "reason": shown(trial.reason),
    }
