"""The ledger's entries in forms that other programs read: JSON lines, CSV, PREMIS 3 events."""

from __future__ import annotations

import csv
import io
import json
from pathlib import Path
from xml.etree import ElementTree as Xml

from oakum.ledger import Entry, Ledger, Row
from oakum.results import Outcome

PREMIS = "http://www.loc.gov/premis/v3"
"""The namespace of version 3 of the PREMIS schema (Library of Congress; from memory)."""

XSI = "http://www.w3.org/2001/XMLSchema-instance"


def export_entries(ledger: Path, medium: str | None, form: str) -> str:
    """All entries, or those of one medium, as `jsonl`, `csv` or `premis`. Raises CannotCheck."""
    with Ledger(ledger, write=False) as book:
        entries = book.entries(medium)
    return {"jsonl": as_json_lines, "csv": as_csv, "premis": as_premis}[form](entries)


def _flat(entry: Entry) -> list[Row]:
    """One row a target, with what is known of its audit before it."""
    kept = ("begun", "finished", "medium", "oakum", "share", "seed")
    return [{k: entry.audit[k] for k in kept} | row for row in entry.targets]


def as_json_lines(entries: list[Entry]) -> str:
    """One JSON object a target, on a line of its own."""
    rows = [
        row
        | {
            "findings": json.loads(str(row["findings"] or "[]")),
            "burst_lengths": json.loads(str(row["burst_lengths"] or "[]")),
            "counters": entry.counters,
        }
        for entry in entries
        for row in _flat(entry)
    ]
    return "".join(json.dumps(row, ensure_ascii=True, allow_nan=False) + "\n" for row in rows)


def as_csv(entries: list[Entry]) -> str:
    """A table (RFC 4180) with one line a target; counters have columns of their own."""
    counters = sorted({name for entry in entries for name in entry.counters})
    rows = [
        row | {f"counter {name}": entry.counters.get(name) for name in counters}
        for entry in entries
        for row in _flat(entry)
    ]
    out = io.StringIO()
    if rows:
        writer = csv.DictWriter(out, list(rows[0]), lineterminator="\r\n")
        writer.writeheader()
        writer.writerows({name: _harmless(value) for name, value in row.items()} for row in rows)
    return out.getvalue()


def _harmless(value: object) -> object:
    """Text that a spreadsheet would take for a formula is put behind an apostrophe."""
    return "'" + value if isinstance(value, str) and value[:1] in ("=", "+", "-", "@", "\t", "\r") else value


def as_premis(entries: list[Entry]) -> str:
    """One PREMIS 3 document: an object a target, a "fixity check" event a check, this program as the agent.

    The order of elements is that of the schema, from memory: objects, events, agents.
    """
    for prefix, space in (("premis", PREMIS), ("xsi", XSI)):
        Xml.register_namespace(prefix, space)
    root = Xml.Element(f"{{{PREMIS}}}premis", {"version": "3.0"})
    rows = [(entry, row) for entry in entries for row in entry.targets]
    for path in dict.fromkeys(str(row["path"]) for _, row in rows):
        thing = _add(root, "object")
        thing.set(f"{{{XSI}}}type", "premis:representation")
        _identifier(thing, "objectIdentifier", "path", path)
    for entry, row in rows:
        _event(root, entry, row)
    for release in dict.fromkeys(str(entry.audit["oakum"]) for entry, _ in rows):
        agent = _add(root, "agent")
        _identifier(agent, "agentIdentifier", "software", f"oakum {release}")
        _add(agent, "agentName", "oakum")
        _add(agent, "agentType", "software")
        _add(agent, "agentVersion", release)
    Xml.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + Xml.tostring(root, encoding="unicode") + "\n"


def _event(root: Xml.Element, entry: Entry, row: Row) -> None:
    event = _add(root, "event")
    _identifier(event, "eventIdentifier", "oakum ledger", f"{entry.audit['id']}/{row['id']}")
    _add(event, "eventType", "fixity check")
    _add(event, "eventDateTime", str(row["checked"]))
    coverage = row["coverage"]
    if isinstance(coverage, float):
        detail = f"comparison with the sidecar, {100 * coverage:.2f} % of the content"
        _add(_add(event, "eventDetailInformation"), "eventDetail", detail)
    information = _add(event, "eventOutcomeInformation")
    _add(information, "eventOutcome", "pass" if row["outcome"] == Outcome.INTACT else "fail"
         if row["bits_read"] is not None else "not checked")  # fmt: skip
    _add(_add(information, "eventOutcomeDetail"), "eventOutcomeDetailNote", _note(row))
    _identifier(event, "linkingAgentIdentifier", "software", f"oakum {entry.audit['oakum']}")
    _identifier(event, "linkingObjectIdentifier", "path", str(row["path"]))


def _note(row: Row) -> str:
    if row["bits_read"] is None:
        return str(row["reason"])
    findings = json.loads(str(row["findings"] or "[]"))
    causes = "; ".join(f"{f['cause']} ({f['likelihood']})" for f in findings)
    note = (
        f"{row['outcome']}; {row['bits_flipped']} bits flipped in {row['bits_read']} read; "
        f"{row['bytes_erased']} bytes unreadable"
    )
    return note + (f"; {causes}" if causes else "")


def _add(parent: Xml.Element, name: str, text: str | None = None) -> Xml.Element:
    element = Xml.SubElement(parent, f"{{{PREMIS}}}{name}")
    element.text = None if text is None else "".join(c if c.isprintable() else "\ufffd" for c in text)
    return element


def _identifier(parent: Xml.Element, name: str, kind: str, value: str) -> None:
    """An identifier with its two mandatory parts, type and value."""
    element = _add(parent, name)
    _add(element, f"{name}Type", kind)
    _add(element, f"{name}Value", value)
