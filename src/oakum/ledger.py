"""The ledger: audits over the years in one SQLite file.

One row an audit, one a target, written in short transactions of their own, so that two audits at once lose
nothing and an audit that is stopped keeps what it has done. The journal is the plain rollback journal: a
ledger may lie on a medium that is later read-only, where a write-ahead log could not be read.
"""

from __future__ import annotations

import json
import os
import sqlite3
from collections.abc import Iterator, Sequence
from contextlib import closing, contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from urllib.parse import quote

from oakum.audits import TargetAudit
from oakum.errors import CannotCheck

APPLICATION_ID = 0x4F616B6D
"""Written into the header of the file: "Oakm"."""

PATIENCE_SECONDS = 10.0

MIGRATIONS = (
    """
    CREATE TABLE audits (
        id INTEGER PRIMARY KEY, begun TEXT NOT NULL, finished TEXT, medium TEXT NOT NULL,
        oakum TEXT NOT NULL, request TEXT NOT NULL, share REAL NOT NULL, seed INTEGER
    );
    CREATE TABLE targets (
        id INTEGER PRIMARY KEY, audit INTEGER NOT NULL REFERENCES audits (id), checked TEXT NOT NULL,
        path TEXT NOT NULL, identity TEXT NOT NULL, outcome TEXT NOT NULL, reason TEXT NOT NULL,
        code TEXT, coverage REAL, bits_read INTEGER, bits_flipped INTEGER, bits_flipped_scattered INTEGER,
        bits_flipped_burst INTEGER, symbols_wrong INTEGER, words_corrected INTEGER, words_flagged INTEGER,
        bytes_erased INTEGER, blocks INTEGER, blocks_correctable INTEGER, blocks_uncorrectable INTEGER,
        margin REAL, flip_exposure REAL, bursts INTEGER, burst_exposure REAL, burst_lengths TEXT,
        read_errors INTEGER, sidecar_outcome TEXT, sidecar_bits_flipped INTEGER, findings TEXT, seconds REAL
    );
    CREATE TABLE counters (
        audit INTEGER NOT NULL REFERENCES audits (id), name TEXT NOT NULL, value REAL NOT NULL,
        PRIMARY KEY (audit, name)
    );
    CREATE INDEX targets_by_audit ON targets (audit);
    CREATE INDEX audits_by_medium ON audits (medium, begun);
    """,
    """
    ALTER TABLE targets ADD COLUMN readings_differ INTEGER;
    ALTER TABLE targets ADD COLUMN stream_bytes INTEGER;
    ALTER TABLE targets ADD COLUMN depth INTEGER;
    ALTER TABLE targets ADD COLUMN windows INTEGER;
    """,
)
"""Each step leads from one schema version to the next; a new ledger goes through all of them."""

VERSION = len(MIGRATIONS)

Value = str | int | float | None
Row = dict[str, Value]


def default_path() -> Path:
    """In the user's state folder (XDG Base Directory Specification)."""
    state = os.environ.get("XDG_STATE_HOME", "")
    return (Path(state) if os.path.isabs(state) else Path.home() / ".local/state") / "oakum" / "ledger.sqlite"


class LedgerError(CannotCheck):
    """The ledger cannot be read or written; the sentence says why and what to do."""


@dataclass(frozen=True)
class Entry:
    """An audit as the ledger knows it: its own row, its targets in order, its counters."""

    audit: Row
    targets: tuple[Row, ...]
    counters: dict[str, float]

    @property
    def begun(self) -> datetime:
        """When it began (UTC)."""
        return datetime.fromisoformat(str(self.audit["begun"]))


class Ledger:
    """An opened ledger. Raises LedgerError wherever the file says no."""

    def __init__(self, path: Path, *, write: bool) -> None:
        """Open the ledger at `path`; to `write`, it is made where there is none, and brought up to date."""
        self.path = path
        if write:
            with _explained(path):
                path.parent.mkdir(parents=True, exist_ok=True)
        elif not path.is_file():
            raise LedgerError(f"there is no ledger {path}; oakum audit writes one, or name it with --ledger")
        _refuse_other_files(path)
        uri = f"file:{quote(str(path.absolute()))}?mode={'rwc' if write else 'ro'}"
        with _explained(path):
            self._db = sqlite3.connect(uri, uri=True, timeout=PATIENCE_SECONDS, isolation_level=None)
        self._db.row_factory = sqlite3.Row
        try:
            self._prepare(write)
        except BaseException:
            self._db.close()
            raise

    def _prepare(self, write: bool) -> None:
        with _explained(self.path):
            self._db.execute("BEGIN")  # So that what is read belongs together.
            ours, schema = self._pragma("application_id"), self._pragma("user_version")
            tables = self._has_tables()
            self._db.execute("COMMIT")
            if ours != APPLICATION_ID and (schema or tables or not write):
                raise LedgerError(f"{self.path} is not a ledger of oakum; name another file with --ledger")
            if schema > VERSION:
                raise LedgerError(
                    f"{self.path} was written by a newer oakum (schema {schema}, this one knows {VERSION}); "
                    "install that one"
                )
            if schema < VERSION:
                self._migrate(write)
            if _columns(self._db) != _expected_columns():
                raise LedgerError(
                    f"the ledger {self.path} is damaged: its tables are not what they should be; "
                    "restore the ledger from a copy"
                )

    def _pragma(self, name: str) -> int:
        return int(self._db.execute(f"PRAGMA {name}").fetchone()[0])

    def _has_tables(self) -> bool:
        return self._db.execute("SELECT 1 FROM sqlite_master LIMIT 1").fetchone() is not None

    def _migrate(self, write: bool) -> None:
        """Bring the schema up to date; one that may only be read is brought up to date in memory."""
        if not write:
            copy = sqlite3.connect(":memory:", isolation_level=None)
            self._db.backup(copy)
            self._db.close()
            self._db = copy
            self._db.row_factory = sqlite3.Row
        with self._transaction():
            _apply(self._db, self._pragma("user_version"))  # Another run may have done it meanwhile.
            self._db.execute(f"PRAGMA application_id = {APPLICATION_ID}")
            self._db.execute(f"PRAGMA user_version = {VERSION}")

    @contextmanager
    def _transaction(self) -> Iterator[None]:
        with _explained(self.path):
            self._db.execute("BEGIN IMMEDIATE")
            try:
                yield
            except BaseException:
                self._db.execute("ROLLBACK")
                raise
            self._db.execute("COMMIT")

    # -- writing -----------------------------------------------------------------------------------

    def begin(
        self,
        begun: datetime,
        medium: str,
        targets: Sequence[Path],
        share: float,
        seed: int | None,
        counters: Sequence[tuple[str, float]],
    ) -> int:
        """Enter an audit that begins; returns its number."""
        row: Row = {
            "begun": begun.astimezone(UTC).isoformat(timespec="seconds"),
            "medium": medium, "oakum": version("oakum"), "request": _request(targets), "share": share,
            "seed": seed,
        }  # fmt: skip
        with self._transaction():
            number = self._insert("audits", row)
            for name, value in counters:
                self._insert("counters", {"audit": number, "name": name, "value": value})
        return number

    def add(self, audit: int, target: TargetAudit) -> None:
        """Enter what became of one target."""
        now = datetime.now(UTC).isoformat(timespec="seconds")
        with self._transaction():
            self._insert("targets", {"audit": audit, "checked": now, **target_row(target)})

    def finish(self, audit: int) -> None:
        """Note that an audit has come to its end."""
        now = datetime.now(UTC).isoformat(timespec="seconds")
        with self._transaction():
            self._db.execute("UPDATE audits SET finished = ? WHERE id = ?", (now, audit))

    def _insert(self, table: str, row: Row) -> int:
        columns, places = ", ".join(row), ", ".join("?" * len(row))
        cursor = self._db.execute(f"INSERT INTO {table} ({columns}) VALUES ({places})", tuple(row.values()))
        return int(cursor.lastrowid or 0)

    # -- reading -----------------------------------------------------------------------------------

    def interrupted(self, medium: str, targets: Sequence[Path], share: float) -> Entry | None:
        """The latest audit of the same share of the same targets, where it did not come to its end."""
        for entry in reversed(self.entries(medium)):
            if (entry.audit["request"], entry.audit["share"]) == (_request(targets), share):
                return None if entry.audit["finished"] else entry
        return None

    def entries(self, medium: str | None = None) -> list[Entry]:
        """Audits in the order in which they began, of one medium or of all."""
        with _explained(self.path):
            chosen = "" if medium is None else "WHERE medium = ?"
            audits = self._db.execute(
                f"SELECT * FROM audits {chosen} ORDER BY begun, id", () if medium is None else (medium,)
            ).fetchall()
            entries = []
            for audit in audits:
                rows = self._db.execute("SELECT * FROM targets WHERE audit = ? ORDER BY id", (audit["id"],))
                counters = self._db.execute("SELECT * FROM counters WHERE audit = ?", (audit["id"],))
                entries.append(
                    Entry(
                        dict(audit), tuple(dict(r) for r in rows), {c["name"]: c["value"] for c in counters}
                    )
                )
        for entry in entries:
            if not _understood(entry):
                raise LedgerError(
                    f"the ledger {self.path} is damaged: its audit {entry.audit['id']} makes no sense; "
                    "restore the ledger from a copy"
                )
        return entries

    def close(self) -> None:
        """Close the file."""
        self._db.close()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


def _refuse_other_files(path: Path) -> None:
    """SQLite would take a very short file for an empty database, and write over it."""
    with _explained(path):
        if not path.exists():
            return
        with path.open("rb") as file:
            head = file.read(16)
    if head and head != b"SQLite format 3\0":
        raise LedgerError(f"{path} is not a ledger of oakum; name another file with --ledger")


def _apply(db: sqlite3.Connection, version: int) -> None:
    """The steps that lead on from a schema version."""
    for step in MIGRATIONS[version:]:
        for statement in filter(str.strip, step.split(";")):
            db.execute(statement)


def _columns(db: sqlite3.Connection) -> set[tuple[str, str]]:
    """Names of all columns with their tables."""
    return {
        (table, str(row[1]))
        for table in ("audits", "targets", "counters")
        for row in db.execute(f"PRAGMA table_info({table})")
    }


def _expected_columns() -> set[tuple[str, str]]:
    with closing(sqlite3.connect(":memory:")) as db:
        _apply(db, 0)
        return _columns(db)


@contextmanager
def _explained(path: Path) -> Iterator[None]:
    """SQLite's and the system's refusals as one sentence."""
    try:
        yield
    except (sqlite3.Error, UnicodeError, OverflowError, IndexError) as error:
        text = str(error)
        if "locked" in text or "busy" in text:
            text = f"the ledger {path} is locked by another program; try again when that has ended"
        elif "not a database" in text:
            text = f"{path} is not a ledger of oakum; name another file with --ledger"
        elif "full" in text:
            text = f"the disk that holds the ledger {path} is full"
        elif "readonly" in text or "unable to open" in text:
            text = f"the ledger {path} cannot be written or opened; name another file with --ledger"
        else:
            text = f"the ledger {path} cannot be used: {text}"
        raise LedgerError(text) from None
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        raise LedgerError(f"the ledger {path} cannot be used: {reason}") from None


def _understood(entry: Entry) -> bool:
    """Whether what is kept as text can be read back; everybody may have written to the file."""
    try:
        sound = entry.begun.tzinfo is not None
        for row in entry.targets:
            findings, lengths = (json.loads(str(row[n] or "[]")) for n in ("findings", "burst_lengths"))
            sound &= all(isinstance(n, int) and n > 0 for n in lengths)
            sound &= all(isinstance(f[n], str) for f in findings for n in ("cause", "likelihood", "evidence"))
    except (ValueError, TypeError, KeyError, RecursionError):
        return False
    return sound


def _request(targets: Sequence[Path]) -> str:
    return json.dumps([target_key(t) for t in targets])


def _text(path: str) -> str:
    """A path as text that a database takes; bytes that are not UTF-8 as escapes."""
    return path.encode("utf-8", "surrogateescape").decode("utf-8", "backslashreplace")


def target_key(target: Path) -> str:
    """How the ledger names a target: its path from the root on."""
    return _text(os.path.abspath(target))


def target_row(target: TargetAudit) -> Row:
    """What the ledger keeps of a target; None where it is not known."""
    row: Row = {
        "path": target_key(target.target), "identity": target.identity,
        "outcome": str(target.outcome), "reason": _text(target.reason),
    }  # fmt: skip
    check, s = target.check, target.statistics
    if check is None or s is None:
        return row
    t = check.totals
    findings = [
        {"cause": f.cause, "likelihood": f.likelihood, "evidence": f.evidence} for f in target.findings
    ]
    return row | {
        "code": check.code.name, "coverage": s.coverage, "bits_read": t.bits_read,
        "bits_flipped": t.bits_flipped, "bits_flipped_scattered": t.bits_flipped_scattered,
        "bits_flipped_burst": t.bits_flipped_burst, "symbols_wrong": t.symbols_wrong,
        "words_corrected": t.words_corrected, "words_flagged": t.words_flagged,
        "bytes_erased": t.bytes_erased, "blocks": t.blocks, "blocks_correctable": t.blocks_correctable,
        "blocks_uncorrectable": t.blocks_uncorrectable, "margin": s.lowest_margin,
        "flip_exposure": s.flip_rate.exposure, "bursts": s.burst_rate.count,
        "burst_exposure": s.burst_rate.exposure, "burst_lengths": json.dumps(s.burst_lengths[:1000]),
        "read_errors": s.read_errors, "sidecar_outcome": str(check.sidecar.state),
        "sidecar_bits_flipped": check.sidecar.bits_flipped, "findings": json.dumps(findings),
        "seconds": round(check.seconds, 3), "readings_differ": s.readings_differ,
        "stream_bytes": s.stream_bytes, "depth": s.depth, "windows": s.windows,
    }  # fmt: skip
