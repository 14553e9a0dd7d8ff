"""audit: verify in full, and say how bad it is, what may have done it, and enter it in the ledger."""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from oakum.audits import AuditResult, Distribution, Rate, Statistics, TargetAudit, Trend
from oakum.causes import find_causes
from oakum.conversions import undone
from oakum.errors import CannotCheck, OakumError, UsageError
from oakum.jobs import DEFAULT_MEMORY
from oakum.jobs.checking import CHUNK, GROUP, Finding, Range, WindowCheck
from oakum.jobs.common import find_sidecar
from oakum.jobs.history import history
from oakum.jobs.opening import KnownMember, open_set
from oakum.jobs.tally import Tally
from oakum.jobs.unreadable import read_unreadable
from oakum.jobs.verify import SetCheck, result_of
from oakum.ledger import Entry, Ledger, LedgerError, Row, target_key
from oakum.members import MemberHasher, MemberStream
from oakum.patterns import FileFacts, Pattern, PatternCollector
from oakum.pools import Pools
from oakum.progress import Progress, Silent
from oakum.results import CheckResult, Outcome
from oakum.statistics import poisson_interval

BINS = 240
"""Shares of the stream in which flips are counted for the picture of where they lie."""

MOST_CONVERTED = 1000
"""Files of changed length that are read once more to see whether their line ends were converted."""


@dataclass(frozen=True)
class AuditOptions:
    """How to audit. `share` is the part of each set that is read; `seed` chooses which."""

    sidecar: Path | None = None
    root: Path | None = None
    unreadable: Path | None = None
    share: float = 1.0
    seed: int | None = None
    medium: str = ""
    counters: tuple[tuple[str, float], ...] = ()
    ledger: Path | None = None
    resume: bool = False
    memory: int = DEFAULT_MEMORY
    jobs: int | None = None
    several: bool = False
    """Whether the list of what is unreadable is for other targets too; `audit` sees to it."""


def audit(
    targets: Sequence[Path], options: AuditOptions = AuditOptions(), *, progress: Progress = Silent()
) -> AuditResult:
    """Audit every target, and enter what was found in the ledger, target by target.

    A target that cannot be checked is reported as such and the others go on. Trouble with the ledger never
    ends an audit: the result says why there is no entry. Raises UsageError for a share that is none.
    """
    _check_options(targets, options)
    options = replace(options, several=len(targets) > 1)
    begin, begun = time.monotonic(), datetime.now(UTC)
    seed = options.seed if options.seed is not None else begun.toordinal()
    book = _Book.open(options, targets, begun, seed)
    done = book.done()
    results = []
    try:
        for target in targets:
            earlier = done.get(target_key(target))
            if earlier is not None:
                results.append(_taken_over(target, earlier))
                continue
            result = _audit_one(target, options, seed, progress)
            book.add(result)
            results.append(result)
        book.finish()
    finally:
        book.close()
    return AuditResult(
        begun, options.medium, tuple(results), time.monotonic() - begin, options.share,
        seed if options.share < 1 else None, options.counters, options.ledger if not book.note else None,
        book.note, _trend(options, book.note), overall(results),
    )  # fmt: skip


def _trend(options: AuditOptions, note: str) -> Trend | None:
    """The trend of a labelled medium, this audit included; None where the ledger has nothing to say."""
    if options.ledger is None or note or not options.medium:
        return None
    try:
        return history(options.ledger, options.medium)[0]
    except OakumError:
        return None


def _check_options(targets: Sequence[Path], options: AuditOptions) -> None:
    if not 0 < options.share <= 1:
        raise UsageError("the share to sample must be above 0 % and at most 100 %")
    if len(targets) > 1 and options.sidecar is not None:
        raise UsageError(
            "--sidecar names the sidecar of one target; give one, or name the sidecars themselves"
        )


def _audit_one(target: Path, options: AuditOptions, seed: int, progress: Progress) -> TargetAudit:
    try:
        return audit_target(target, options, seed, progress)
    except CannotCheck as error:
        return TargetAudit(target, Outcome.UNCHECKED, reason=str(error))
    except OSError as error:
        reason = (error.strerror or str(error)).lower()
        return TargetAudit(target, Outcome.UNCHECKED, reason=f"{target} could not be read: {reason}")


def audit_target(target: Path, options: AuditOptions, seed: int, progress: Progress) -> TargetAudit:
    """Audit one target. Raises CannotCheck where nothing can be said at all."""
    begin = time.monotonic()
    path = find_sidecar(target, options.sidecar)
    listed = read_unreadable(options.unreadable)
    opened = open_set(
        path, options.root, listed.of_several() if options.several else listed, target, progress
    )
    opened.once = True
    try:
        with Pools(options.jobs) as pools:
            check = AuditCheck(opened, pools, progress, options.share, seed)
            try:
                tally = check.run(hashing=options.share == 1)
                pattern = check.pattern(tally)
            finally:
                check.close()
        result = result_of("audit", target, check, tally, time.monotonic() - begin)
        if options.share < 1:
            note = (
                f"{100 * check.coverage:.2f} % of the stream was read (seed {seed}); SHA-256 was not compared"
            )
            result = replace(result, notes=(*result.notes, note))
        return TargetAudit(
            target, result.outcome, opened.sections[0].bootstrap.set_identity.hex(), result,
            check.statistics(result, tally), find_causes(pattern), check.distribution(pattern),
        )  # fmt: skip
    finally:
        opened.close()


@dataclass
class AuditCheck(SetCheck):
    """The check of a set that also gathers the pattern of errors, and may look at a share of it only."""

    share: float = 1.0
    seed: int = 0
    collector: PatternCollector = field(default_factory=PatternCollector)
    unsteady: int = 0
    uncorrected: int = 0

    def __post_init__(self) -> None:
        super().__post_init__()
        self._along: NDArray[np.int64] = np.zeros(BINS, np.int64)
        self._dice = np.random.default_rng([self.seed, len(self.opened.sections)])
        self._chosen = self._choose_windows()

    # -- what to read ------------------------------------------------------------------------------

    def _choose_windows(self) -> set[int]:
        """Of a set cut into windows, which ones are looked at; at least one."""
        count = len(self.opened.sections)
        if self.share == 1 or count == 1:
            return set(range(count))
        return set(self._dice.permutation(count)[: max(1, round(self.share * count))].tolist())

    def scan_window(self, window: WindowCheck, hasher: MemberHasher | None) -> None:
        """All of it, or nothing, or some groups of blocks where the set is one window."""
        window.auditing = True
        if len(self.windows) - 1 not in self._chosen:
            window.skip()
        elif self.share == 1 or len(self.opened.sections) > 1 or not window.g.digested:
            window.scan(hasher)
        else:
            window.scan_sample(self._choose_groups(window.g.blocks))
        if window.dirty_blocks() and isinstance(window.stream, MemberStream):
            window.stream.forget()  # So that decoding reads the medium again.

    def _choose_groups(self, blocks: int) -> list[Range]:
        groups = [(first, min(first + GROUP, blocks)) for first in range(0, blocks, GROUP)]
        count = max(1, round(self.share * len(groups)))
        return [groups[i] for i in sorted(self._dice.permutation(len(groups))[:count].tolist())]

    @property
    def coverage(self) -> float:
        """The share of the stream that was read."""
        return sum(w.extent[0] for w in self.windows) / self.opened.length if self.opened.length else 1.0

    # -- what was found ----------------------------------------------------------------------------

    def take(self, finding: Finding) -> None:
        """Gather what a block says about its errors."""
        self.unsteady += finding.unsteady
        self.uncorrected += sum(b - a for a, b in finding.lost)
        bins = finding.places * BINS // max(1, self.opened.length)
        np.add.at(self._along, bins, finding.bits)
        for start, received, right in finding.evidence:
            for member in self.opened.members_at(start, len(received)):
                a = max(start, member.stream_start)
                b = min(start + len(received), member.stream_start + member.size)
                part = slice(a - start, b - start)
                known = None if right is None else right[part]
                if a < b and (known is None or (received[part] != known).any()):
                    self.collector.add(
                        _name(member), member.size, member.stream_start, a - member.stream_start,
                        received[part], known,
                    )  # fmt: skip

    def pattern(self, tally: Tally) -> Pattern:
        """Everything gathered, with what the files' lengths say. Call it when all blocks were taken."""
        unreadable = self._unreadable()
        pattern = self.collector.finish(tally.totals.bits_read // 8)
        pattern = replace(pattern, unsteady=self.unsteady)
        named = {m.path for m in pattern.members} | set(unreadable)
        files, looked = [], 0
        for member in self.opened.members.values():
            name = _name(member)
            if name not in named and not member.longer:
                continue
            found = self._length_now(member)
            converted = ""
            if found is not None and found != member.size and looked < MOST_CONVERTED:
                looked += 1
                converted = undone(self._whole(member), member.size, member.sha256)
            files.append(FileFacts(name, member.size, found, converted, tuple(unreadable.get(name, ()))))
        return pattern.with_files(files)

    def _unreadable(self) -> dict[str, list[Range]]:
        """What could not be read, by member."""
        found: dict[str, list[Range]] = {}
        for window in self.windows:
            for start, stop in window.faulty:
                start, stop = start + window.start, stop + window.start
                for member in self.opened.members_at(start, stop - start):
                    a = max(start, member.stream_start) - member.stream_start
                    b = min(stop, member.stream_start + member.size) - member.stream_start
                    if a < b:
                        found.setdefault(_name(member), []).append((a, b))
        return found

    def _length_now(self, member: KnownMember) -> int | None:
        try:
            return None if member.absent else self.opened.folder.stat(member.piece.path).st_size
        except OSError:
            return None

    def _whole(self, member: KnownMember) -> Iterator[bytes]:
        """A file as it is now, to its end; what cannot be read ends it."""
        try:
            fd = self.opened.folder.open(member.piece.path)
        except OSError:
            return
        with open(fd, "rb") as file:
            while True:
                try:
                    chunk = file.read(CHUNK)
                except OSError:
                    return
                if not chunk:
                    return
                yield chunk

    def statistics(self, result: CheckResult, tally: Tally) -> Statistics:
        """Rates with their intervals, and the lowest margin."""
        totals, lengths = result.totals, tally.burst_lengths
        readable = max(0, totals.bits_read - 8 * self.uncorrected)
        weakest = min(
            (b for b in result.blocks if b.margin is not None), key=lambda b: b.margin or 0.0, default=None
        )
        lost = any(b.margin is None for b in result.blocks)
        return Statistics(
            bits_read=totals.bits_read,
            sidecar_bits_read=8 * self.opened.source.size,
            flip_rate=rate(totals.bits_flipped_scattered, readable),
            burst_rate=rate(len(lengths), readable // 8),
            burst_lengths=tuple(lengths),
            read_errors=sum(1 for _ in self._read_errors()),
            readings_differ=self.unsteady,
            lowest_margin=None if lost else 1.0 if weakest is None else weakest.margin,
            margin_at=None if lost or weakest is None else (weakest.window, weakest.block),
            coverage=self.coverage,
            stream_bytes=self.opened.length,
            depth=self.opened.sections[0].geometry.depth,
            windows=len(self.opened.sections),
        )

    def _read_errors(self) -> Iterator[Range]:
        """Ranges that the medium did not give, in files that go on past them."""
        members = {_name(m): m for m in self.opened.members.values()}
        for name, ranges in self._unreadable().items():
            found = self._length_now(members[name])
            yield from (r for r in ranges if found is not None and r[0] < found)

    def distribution(self, pattern: Pattern) -> Distribution:
        """Where the flips are."""
        up, down = (tuple(row) for row in pattern.positions.tolist())
        return Distribution(tuple(self._along.tolist()), (up, down))


def overall(targets: Sequence[TargetAudit]) -> Statistics | None:
    """The counts of all targets that were checked, added up; None where there are fewer than two."""
    known = [t.statistics for t in targets if t.statistics is not None]
    if len(known) < 2:
        return None
    flips, bursts = [s.flip_rate for s in known], [s.burst_rate for s in known]
    margins = [s.lowest_margin for s in known]
    size = sum(s.stream_bytes for s in known)
    return Statistics(
        bits_read=sum(s.bits_read for s in known),
        sidecar_bits_read=sum(s.sidecar_bits_read for s in known),
        flip_rate=rate(sum(r.count for r in flips), sum(r.exposure for r in flips)),
        burst_rate=rate(sum(r.count for r in bursts), sum(r.exposure for r in bursts)),
        burst_lengths=tuple(sorted(n for s in known for n in s.burst_lengths)),
        read_errors=sum(s.read_errors for s in known),
        readings_differ=sum(s.readings_differ for s in known),
        lowest_margin=None if None in margins else min(m for m in margins if m is not None),
        margin_at=None,
        coverage=sum(s.coverage * s.stream_bytes for s in known) / size if size else 1.0,
        stream_bytes=size,
    )


def rate(count: int, exposure: float) -> Rate:
    """A rate with its exact interval."""
    low, high = poisson_interval(count)
    return Rate(count, exposure, low / exposure if exposure else 0.0, high / exposure if exposure else 0.0)


def _name(member: KnownMember) -> str:
    return os.fsdecode(member.piece.path)


# -- the ledger ----------------------------------------------------------------------------------------


@dataclass
class _Book:
    """The ledger as an audit uses it: whatever goes wrong becomes `note`, and nothing is written any more."""

    ledger: Ledger | None = None
    number: int = 0
    entry: Entry | None = None
    note: str = ""

    @staticmethod
    def open(options: AuditOptions, targets: Sequence[Path], begun: datetime, seed: int) -> _Book:
        """The opened ledger with an entry for this audit, or that of the one that is resumed."""
        book = _Book()
        if options.ledger is None:
            return book
        try:
            book.ledger = Ledger(options.ledger, write=True)
            if options.resume:
                book.entry = book.ledger.interrupted(options.medium, targets, options.share)
            if book.entry is not None:
                book.number = int(book.entry.audit["id"] or 0)
            else:
                chosen = seed if options.share < 1 else None
                book.number = book.ledger.begin(
                    begun, options.medium, targets, options.share, chosen, options.counters
                )
        except LedgerError as error:
            book.fail(error)
        return book

    def fail(self, error: LedgerError) -> None:
        """Go on without."""
        self.note = str(error)
        self.close()

    def done(self) -> dict[str, Row]:
        """The targets that the resumed audit has checked already."""
        rows = self.entry.targets if self.entry is not None else ()
        return {str(row["path"]): row for row in rows if row["outcome"] != Outcome.UNCHECKED}

    def add(self, target: TargetAudit) -> None:
        """Enter a target."""
        self._try(lambda ledger: ledger.add(self.number, target))

    def finish(self) -> None:
        """The audit has come to its end."""
        self._try(lambda ledger: ledger.finish(self.number))

    def _try(self, action: Callable[[Ledger], None]) -> None:
        if self.ledger is not None:
            try:
                action(self.ledger)
            except LedgerError as error:
                self.fail(error)

    def close(self) -> None:
        """Close the ledger."""
        if self.ledger is not None:
            self.ledger.close()
            self.ledger = None


def _taken_over(target: Path, row: Row) -> TargetAudit:
    """A target as an interrupted audit has entered it."""
    return TargetAudit(
        target, Outcome(str(row["outcome"])), str(row["identity"]), earlier=True,
        reason=f"checked by the interrupted audit on {str(row['checked'])[:10]}",
    )  # fmt: skip
