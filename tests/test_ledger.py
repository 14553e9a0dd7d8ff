"""The ledger: two at once lose nothing, old ones are brought up to date, foreign ones are left alone."""

from __future__ import annotations

import csv
import io
import json
import os
import sqlite3
import subprocess
import sys
from datetime import UTC, datetime
from pathlib import Path
from xml.etree import ElementTree

import pytest
from support import with_flips

from oakum import ledger as ledgers
from oakum.audits import TargetAudit
from oakum.jobs.export import PREMIS, XSI, export_entries
from oakum.ledger import APPLICATION_ID, MIGRATIONS, VERSION, Ledger, LedgerError, default_path
from oakum.results import Outcome

NOW = datetime(2031, 5, 4, 12, tzinfo=UTC)


def begin(ledger: Ledger, medium: str = "M", targets: tuple[str, ...] = ("x",)) -> int:
    return ledger.begin(NOW, medium, [Path(t) for t in targets], 1.0, None, [("reallocated", 12.0)])


def unchecked(target: str = "x", reason: str = "the medium is not there") -> TargetAudit:
    return TargetAudit(Path(target), Outcome.UNCHECKED, reason=reason)


def filled(path: Path) -> Path:
    """A ledger with one audit of one target, as it is read back by others."""
    with Ledger(path, write=True) as ledger:
        number = begin(ledger)
        ledger.add(number, unchecked())
        ledger.add(number, unchecked("=y\x07", "gone"))
        ledger.finish(number)
    return path


def test_an_entry_comes_back(tmp_path: Path) -> None:
    with Ledger(filled(tmp_path / "new/folder/l.sqlite"), write=False) as ledger:
        (entry,) = ledger.entries("M")
        assert ledger.entries("another") == []
    assert (entry.begun, entry.counters, entry.audit["medium"]) == (NOW, {"reallocated": 12.0}, "M")
    assert [row["outcome"] for row in entry.targets] == ["unchecked", "unchecked"]
    assert entry.targets[0]["path"] == os.path.abspath("x")
    assert entry.targets[0]["bits_read"] is None


def test_the_file_is_marked_and_keeps_no_write_ahead_log(tmp_path: Path) -> None:
    path = filled(tmp_path / "l")
    with sqlite3.connect(path) as db:
        assert db.execute("PRAGMA application_id").fetchone() == (APPLICATION_ID,)
        assert db.execute("PRAGMA user_version").fetchone() == (VERSION,)
        assert db.execute("PRAGMA journal_mode").fetchone() == ("delete",)
    assert os.listdir(tmp_path) == ["l"]


def test_two_at_once_lose_nothing(tmp_path: Path) -> None:
    program = f"""
        import sys
        sys.path.insert(0, {str(Path(__file__).parent)!r})
        from pathlib import Path
        from test_ledger import begin, unchecked
        from oakum.ledger import Ledger
        for _ in range(15):
            with Ledger(Path(sys.argv[1]), write=True) as ledger:
                number = begin(ledger, sys.argv[2])
                for target in "abc":
                    ledger.add(number, unchecked(target))
                ledger.finish(number)
    """
    lines = "\n".join(line[8:] for line in program.splitlines())
    runs = [
        subprocess.Popen([sys.executable, "-c", lines, str(tmp_path / "l"), name]) for name in ("A", "B", "C")
    ]
    assert [run.wait(120) for run in runs] == [0, 0, 0]
    with Ledger(tmp_path / "l", write=False) as ledger:
        for name in ("A", "B", "C"):
            entries = ledger.entries(name)
            assert len(entries) == 15
            assert all(len(e.targets) == 3 and e.audit["finished"] for e in entries)


def old_ledger(path: Path) -> Path:
    """As the first schema version wrote it."""
    with sqlite3.connect(path) as db:
        db.executescript(MIGRATIONS[0])
        db.execute(
            "INSERT INTO audits VALUES (1, '2030-01-02T03:04:05+00:00', NULL, 'M', '0.0', '[]', 1.0, NULL)"
        )
        db.execute(
            "INSERT INTO targets (audit, checked, path, identity, outcome, reason, bits_read) "
            "VALUES (1, '2030-01-02', '/x', 'ab', 'intact', '', 80)"
        )
        db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        db.execute("PRAGMA user_version = 1")
    db.close()
    return path


def test_an_old_ledger_is_brought_up_to_date(tmp_path: Path) -> None:
    path = old_ledger(tmp_path / "l")
    with Ledger(path, write=True) as ledger:
        (entry,) = ledger.entries()
        ledger.add(begin(ledger), unchecked())
    assert (entry.targets[0]["bits_read"], entry.targets[0]["readings_differ"]) == (80, None)
    with sqlite3.connect(path) as db:
        assert db.execute("PRAGMA user_version").fetchone() == (VERSION,)


def test_an_old_ledger_that_may_only_be_read_stays_as_it_is(tmp_path: Path) -> None:
    path = old_ledger(tmp_path / "l")
    before = path.read_bytes()
    with Ledger(path, write=False) as ledger:
        assert ledger.entries()[0].targets[0]["windows"] is None
    assert path.read_bytes() == before


def test_a_step_that_fails_leaves_the_old_ledger(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = old_ledger(tmp_path / "l")
    before = path.read_bytes()
    monkeypatch.setattr(ledgers, "MIGRATIONS", (MIGRATIONS[0], MIGRATIONS[1] + "; no such statement;"))
    with pytest.raises(LedgerError, match="cannot be used"):
        Ledger(path, write=True)
    assert path.read_bytes() == before


@pytest.mark.parametrize("content", [b"a sentence, not a database " * 200, b"x"])
@pytest.mark.parametrize("write", [True, False])
def test_a_file_that_is_no_database(tmp_path: Path, content: bytes, write: bool) -> None:
    (tmp_path / "l").write_bytes(content)
    with pytest.raises(LedgerError, match="not a ledger of oakum"):
        Ledger(tmp_path / "l", write=write)
    assert (tmp_path / "l").read_bytes() == content


@pytest.mark.parametrize("write", [True, False])
def test_a_database_of_something_else(tmp_path: Path, write: bool) -> None:
    with sqlite3.connect(tmp_path / "l") as db:
        db.execute("CREATE TABLE audits (id)")
    db.close()
    before = (tmp_path / "l").read_bytes()
    with pytest.raises(LedgerError, match="not a ledger of oakum"):
        Ledger(tmp_path / "l", write=write)
    assert (tmp_path / "l").read_bytes() == before


def test_a_newer_ledger(tmp_path: Path) -> None:
    path = filled(tmp_path / "l")
    with sqlite3.connect(path) as db:
        db.execute(f"PRAGMA user_version = {VERSION + 1}")
    db.close()
    with pytest.raises(LedgerError, match="newer oakum"):
        Ledger(path, write=True)


def test_a_locked_ledger(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(ledgers, "PATIENCE_SECONDS", 0.1)
    path = filled(tmp_path / "l")
    holder = sqlite3.connect(path, isolation_level=None)
    holder.execute("BEGIN EXCLUSIVE")
    with pytest.raises(LedgerError, match="locked"):
        Ledger(path, write=True)
    holder.execute("ROLLBACK")
    holder.close()


@pytest.mark.skipif(sys.platform != "linux", reason="limits the size of files")
def test_a_disk_that_takes_no_more(tmp_path: Path) -> None:
    """A limit on the size of files stands in for the disk; the entry is not half there afterwards."""
    path = filled(tmp_path / "l")
    program = """
        import resource, sys
        from pathlib import Path
        from oakum.ledger import Ledger, LedgerError
        sys.path.insert(0, sys.argv[2])
        from test_ledger import begin, unchecked
        ledger = Ledger(Path(sys.argv[1]), write=True)
        resource.setrlimit(resource.RLIMIT_FSIZE, (24 << 10, 24 << 10))
        try:
            for i in range(1000):
                ledger.add(begin(ledger), unchecked("x" * 500))
        except LedgerError as error:
            print(error)
    """
    lines = "\n".join(line[8:] for line in program.splitlines())
    run = [sys.executable, "-c", lines, str(path), str(Path(__file__).parent)]
    done = subprocess.run(run, capture_output=True, text=True, check=True)
    assert "the ledger" in done.stdout and ("full" in done.stdout or "cannot be used" in done.stdout)
    with sqlite3.connect(path) as db:
        assert db.execute("PRAGMA integrity_check").fetchone() == ("ok",)


@pytest.mark.parametrize(
    "change",
    [
        "UPDATE audits SET begun = 'long ago'",
        "UPDATE audits SET begun = '2031-05-04T12:00:00'",
        "UPDATE targets SET findings = '[{'",
        "UPDATE targets SET findings = '[1]'",
        "UPDATE targets SET burst_lengths = '[-1]'",
        "UPDATE targets SET burst_lengths = '7'",
    ],
)
def test_entries_that_make_no_sense(tmp_path: Path, change: str) -> None:
    path = filled(tmp_path / "l")
    with sqlite3.connect(path) as db:
        db.execute(change)
    db.close()
    with Ledger(path, write=False) as ledger, pytest.raises(LedgerError, match="makes no sense"):
        ledger.entries()


def test_a_ledger_with_flipped_bits_is_refused_in_a_sentence(tmp_path: Path) -> None:
    """Whatever the flips do, the answer is entries or a `LedgerError`, never another exception."""
    good = filled(tmp_path / "l").read_bytes()
    outcomes = set()
    for seed in range(60):
        (tmp_path / "l").write_bytes(with_flips(good, 200, seed))
        try:
            with Ledger(tmp_path / "l", write=False) as ledger:
                ledger.entries()
            outcomes.add("read")
        except LedgerError:
            outcomes.add("refused")
    assert "refused" in outcomes


def test_no_ledger_to_read(tmp_path: Path) -> None:
    with pytest.raises(LedgerError, match="there is no ledger"):
        Ledger(tmp_path / "l", write=False)
    assert os.listdir(tmp_path) == []


def test_the_state_folder(monkeypatch: pytest.MonkeyPatch) -> None:
    """XDG Base Directory Specification (common practice): relative paths are to be ignored."""
    monkeypatch.setenv("XDG_STATE_HOME", "/s")
    assert default_path() == Path("/s/oakum/ledger.sqlite")
    for value in ("", "relative"):
        monkeypatch.setenv("XDG_STATE_HOME", value)
        monkeypatch.setenv("HOME", "/h")
        assert default_path() == Path("/h/.local/state/oakum/ledger.sqlite")


def test_only_the_latest_audit_of_the_same_targets_is_taken_up_again(tmp_path: Path) -> None:
    with Ledger(tmp_path / "l", write=True) as ledger:
        number = begin(ledger, targets=("x", "y"))
        ledger.add(number, unchecked("x"))
        entry = ledger.interrupted("M", [Path("x"), Path("y")], 1.0)
        assert entry is not None and entry.audit["id"] == number
        assert ledger.interrupted("M", [Path("x")], 1.0) is None
        assert ledger.interrupted("M", [Path("x"), Path("y")], 0.5) is None
        assert ledger.interrupted("N", [Path("x"), Path("y")], 1.0) is None
        ledger.finish(number)
        assert ledger.interrupted("M", [Path("x"), Path("y")], 1.0) is None


# -- exports -------------------------------------------------------------------------------------------


def test_json_lines(tmp_path: Path) -> None:
    text = export_entries(filled(tmp_path / "l"), None, "jsonl")
    first, second = (json.loads(line) for line in text.splitlines())
    assert (first["medium"], first["outcome"], first["counters"]) == ("M", "unchecked", {"reallocated": 12.0})
    assert second["reason"] == "gone"
    assert text.isascii()


def test_csv(tmp_path: Path) -> None:
    """RFC 4180: CR LF, quotes doubled; a spreadsheet must not take a name for a formula."""
    with Ledger(tmp_path / "l", write=True) as ledger:
        number = begin(ledger, '=1+"2"')
        ledger.add(number, unchecked())
    text = export_entries(tmp_path / "l", None, "csv")
    assert text.count("\r\n") == 2
    (row,) = csv.DictReader(io.StringIO(text))
    assert (row["medium"], row["counter reallocated"]) == ('\'=1+"2"', "12.0")


def test_premis_events(tmp_path: Path) -> None:
    """PREMIS 3.0 schema (Library of Congress): names, order and what is mandatory, all from memory."""
    root = ElementTree.fromstring(export_entries(filled(tmp_path / "l"), "M", "premis"))

    def name(element: ElementTree.Element) -> str:
        assert element.tag.startswith(f"{{{PREMIS}}}")
        return element.tag.removeprefix(f"{{{PREMIS}}}")

    assert (name(root), root.get("version")) == ("premis", "3.0")
    assert [name(child) for child in root] == ["object", "object", "event", "event", "agent"]
    thing, event, agent = root[0], root[2], root[4]
    assert thing.get(f"{{{XSI}}}type") == "premis:representation"
    assert [name(e) for e in thing] == ["objectIdentifier"]
    assert [name(e) for e in event] == [
        "eventIdentifier", "eventType", "eventDateTime", "eventOutcomeInformation",
        "linkingAgentIdentifier", "linkingObjectIdentifier",
    ]  # fmt: skip
    assert event[1].text == "fixity check"
    assert datetime.fromisoformat(event[2].text or "").tzinfo is not None
    assert [name(e) for e in event[3]] == ["eventOutcome", "eventOutcomeDetail"]
    assert [name(e) for e in event[3][1]] == ["eventOutcomeDetailNote"]
    assert event[3][1][0].text == "the medium is not there"
    assert [name(e) for e in agent] == ["agentIdentifier", "agentName", "agentType", "agentVersion"]
    for element in root.iter():
        if name(element).endswith("Identifier"):
            assert [name(e) for e in element] == [f"{name(element)}Type", f"{name(element)}Value"]
            assert all(e.text for e in element)
    objects = {thing[0][1].text for thing in root if name(thing) == "object"}
    assert {e[-1][1].text for e in root if name(e) == "event"} == objects
    assert {e[-2][1].text for e in root if name(e) == "event"} == {agent[0][1].text}
