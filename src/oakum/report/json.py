"""Results as JSON documents. Keys may be added in later releases; those that stand here stay.

Paths are text. Where a name is not UTF-8, `path` shows the odd bytes as escapes and `path_base64`
beside it holds the bytes themselves.
"""

from __future__ import annotations

import base64
import json
from typing import Any

from oakum.results import (
    BlockReport,
    CheckResult,
    CodeSummary,
    Description,
    MemberDescription,
    MemberReport,
    Outcome,
    ProtectResult,
    SidecarReport,
    Totals,
)

SCHEMA = "oakum/1"

Document = dict[str, Any]


def dump(document: Document) -> str:
    """The document as text. Pure ASCII, so that no name in it can reach a terminal unescaped."""
    return json.dumps(document, indent=2, ensure_ascii=True, allow_nan=False)


def check_document(result: CheckResult) -> Document:
    """What `verify` and `repair` found."""
    return {
        "schema": SCHEMA,
        "command": result.command,
        "outcome": str(result.outcome),
        "target": shown(str(result.target)),
        "code": code_document(result.code),
        "totals": _totals(result.totals),
        "blocks": [_block(block) for block in result.blocks],
        "members": [_member(member) for member in result.members],
        "sidecar": _sidecar(result.sidecar),
        "seconds": round(result.seconds, 3),
        "notes": list(result.notes),
    }


def unchecked_document(command: str, target: str, reason: str) -> Document:
    """The document of a `verify` or `repair` that could not check: every count is null, none is zero."""
    return {
        "schema": SCHEMA,
        "command": command,
        "outcome": str(Outcome.UNCHECKED),
        "target": shown(target),
        "code": None,
        "totals": None,
        "blocks": [],
        "members": [],
        "sidecar": None,
        "error": shown(reason),
    }


def protect_document(result: ProtectResult) -> Document:
    """What `protect` wrote."""
    return {
        "schema": SCHEMA,
        "command": "protect",
        "sidecar": named(str(result.sidecar)),
        "code": code_document(result.code),
        "members": result.members,
        "stream_bytes": result.stream_bytes,
        "sidecar_bytes": result.sidecar_bytes,
        "depth": result.depth,
        "windows": result.windows,
        "reads": result.reads,
        "guaranteed_burst": result.guaranteed_burst,
        "seconds": round(result.seconds, 3),
        "notes": list(result.notes),
    }


def description_document(description: Description) -> Document:
    """What a sidecar says about itself."""
    return {
        "schema": SCHEMA,
        "command": "describe",
        "sidecar": named(str(description.sidecar)),
        "format_version": description.format_version,
        "identity": description.identity,
        "code": code_document(description.code),
        "stream_bytes": description.stream_bytes,
        "sidecar_bytes": description.sidecar_bytes,
        "depth": description.depth,
        "windows": description.windows,
        "blocks": description.blocks,
        "guaranteed_burst": description.guaranteed_burst,
        "members": [_member_description(member) for member in description.members],
        "notes": list(description.notes),
    }


def code_document(code: CodeSummary) -> Document:
    return {
        "name": code.name,
        "outer": list(code.outer),
        "inner": None if code.inner is None else list(code.inner),
        "overhead": round(code.overhead, 6),
        "guaranteed_flips": code.guaranteed_flips,
    }


def _totals(totals: Totals) -> Document:
    return {
        "bits_read": totals.bits_read,
        "bits_flipped": totals.bits_flipped,
        "bits_flipped_scattered": totals.bits_flipped_scattered,
        "bits_flipped_burst": totals.bits_flipped_burst,
        "symbols_wrong": totals.symbols_wrong,
        "words_corrected": totals.words_corrected,
        "words_flagged": totals.words_flagged,
        "bytes_erased": totals.bytes_erased,
        "blocks": totals.blocks,
        "blocks_clean": totals.blocks_clean,
        "blocks_correctable": totals.blocks_correctable,
        "blocks_uncorrectable": totals.blocks_uncorrectable,
    }


def _block(block: BlockReport) -> Document:
    return {
        "window": block.window,
        "block": block.block,
        "state": str(block.state),
        "bits_flipped": block.bits_flipped,
        "symbols_wrong": block.symbols_wrong,
        "bytes_erased": block.bytes_erased,
        "margin": None if block.margin is None else round(block.margin, 6),
    }


def _member(member: MemberReport) -> Document:
    return {
        **named(member.path),
        "kind": member.kind,
        "size": member.size,
        "state": str(member.state),
        "bits_flipped": member.bits_flipped,
        "edited": member.edited,
        "lost": [{"offset": offset, "length": length} for offset, length in member.lost],
        "mended": None if member.mended is None else shown(str(member.mended)),
        "detail": shown(member.detail),
    }


def _sidecar(sidecar: SidecarReport) -> Document:
    return {
        **named(str(sidecar.path)),
        "state": str(sidecar.state),
        "bits_flipped": sidecar.bits_flipped,
        "symbols_wrong": sidecar.symbols_wrong,
        "mended": None if sidecar.mended is None else shown(str(sidecar.mended)),
        "detail": shown(sidecar.detail),
    }


def _member_description(member: MemberDescription) -> Document:
    return {
        **named(member.path),
        "kind": member.kind,
        "size": member.size,
        "sha256": None if member.sha256 is None else member.sha256.hex(),
        "modified_ns": member.modified_ns,
        "mode": f"{member.mode:04o}",
        "link_target": None if member.link_target is None else shown(member.link_target),
    }


def named(name: str) -> Document:
    text = shown(name)
    if text == name:
        return {"path": name}
    return {"path": text, "path_base64": base64.b64encode(name.encode("utf-8", "surrogateescape")).decode()}


def shown(text: str) -> str:
    """`text` without lone surrogates (RFC 8259, section 8.2, warns of them); undecodable bytes as `\\xff`."""
    raw = text.encode("utf-8", "surrogateescape")
    return raw.decode("utf-8", "backslashreplace")
