"""rehearse: damage a protected set in memory, and let the real decoder prove what its sidecar survives.

Target and sidecar are opened read-only. The noise of `oakum.channel` is laid over every byte that is read of
them; scanning and decoding are those of verify and repair. What repair would write is held against the
target's own bytes, byte for byte.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from contextlib import closing
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.channel import Channel, Damage, draw
from oakum.errors import CannotCheck, FormatError, UsageError
from oakum.files import FileBytes
from oakum.forecast import Shape, forecast
from oakum.geometry import CELL
from oakum.jobs.checking import Finding, Range
from oakum.jobs.common import announce_compiling, find_sidecar, summarise
from oakum.jobs.damage import Wishes
from oakum.jobs.opening import OpenBytes, ProtectedSet, assemble, look_at_members, open_set
from oakum.jobs.tally import Tally
from oakum.jobs.verify import SetCheck, result_of
from oakum.members import MemberHasher, MemberStream, OpenStream, Part, Span
from oakum.pools import Pools
from oakum.probability import clopper_pearson
from oakum.progress import Progress, Silent
from oakum.results import Limit, MemberState, Outcome, RehearsalResult, Trial
from oakum.sidecar.table import Kind

LEVEL = 0.95
FIRST_RATE = 1e-4
HIGHEST_RATE = 0.25
HALVINGS = 20
CLOSE = 1.02
"""The search for the limit ends when what was lost is so little above what was survived."""


def rehearse(
    target: Path,
    wishes: Wishes,
    *,
    trials: int = 20,
    seed: int = 1,
    find_limit: bool = False,
    sidecar: Path | None = None,
    root: Path | None = None,
    jobs: int | None = None,
    progress: Progress = Silent(),
) -> RehearsalResult:
    """Damage `target` in memory `trials` times as `wishes` say and count how often everything comes back.

    The same seed damages the same bytes. With `find_limit` the flip rate (or the length of a burst, where
    only that is told) is driven up until the first block is lost. Raises UsageError for wishes that make no
    sense, CannotCheck when there is nothing to rehearse with, or when the target is damaged already.
    """
    begin = time.monotonic()
    if trials < 1:
        raise UsageError(f"{trials} trials prove nothing; give at least 1")
    unset = find_limit and replace(wishes, spare_sidecar=False) == Wishes()  # The search begins from nothing.
    channel, assumptions = (
        wishes.channel() if not unset else (Channel(spare_sidecar=wishes.spare_sidecar), ())
    )
    path = find_sidecar(target, sidecar)
    stage = _Stage.prepare(target, path, root, jobs, progress)
    limit, ran, predicted = None, [], None
    if find_limit:
        limit = _find_limit(stage, channel, seed)
    else:
        predicted = forecast(stage.shape, channel)
        progress.phase("rehearsing", trials * stage.stream_bytes)
        for number in range(trials):
            ran.append(stage.trial(number, channel, (seed, number)))
            progress.advance(stage.stream_bytes)
    survived = sum(trial.survived for trial in ran)
    return RehearsalResult(
        target, summarise(stage.code), stage.stream_bytes, stage.shape.blocks, seed, assumptions, tuple(ran),
        LEVEL, clopper_pearson(survived, len(ran), LEVEL) if ran else None, predicted,
        channel.final_flip_rate, limit, time.monotonic() - begin,
    )  # fmt: skip


# -- bytes with noise over them


class DamagedBytes:
    """A sidecar's bytes with damage over them (a `ByteSource`)."""

    def __init__(self, source: FileBytes, damage: Damage) -> None:
        self._source = source
        self._damage = damage
        self.size = source.size

    def read(self, offset: int, length: int) -> tuple[NDArray[np.uint8], list[Range]]:
        """See `ByteSource`."""
        data, faults = self._source.read(offset, length)
        inside = slice(max(0, -offset), max(0, min(length, self.size - offset)))
        if inside.start >= inside.stop:
            return data, faults
        missing = self._damage.strike(offset + inside.start, data[inside])
        return data, _merged(faults, [(a + inside.start, b + inside.start) for a, b in missing])

    def close(self) -> None:
        """Close the file."""
        self._source.close()


class DamagedStream:
    """Members' bytes with damage over them; the first is byte `start` of the whole stream."""

    def __init__(self, stream: MemberStream, start: int, damage: Damage) -> None:
        self._stream = stream
        self._start = start
        self._damage = damage

    def read_into(self, offset: int, buffer: memoryview, hasher: MemberHasher | None = None) -> list[Range]:
        """See `MemberStream.read_into`. Nothing is hashed before the damage is done."""
        faults = self._stream.read_into(offset, buffer)
        real = min(len(buffer), self._stream.length - offset)  # What lies behind the end is virtual.
        if real <= 0:
            return faults
        data = np.frombuffer(buffer, np.uint8)[:real]
        return _merged(faults, self._damage.strike(self._start + offset, data))

    def close(self) -> None:
        """Close all members."""
        self._stream.close()


def _merged(a: Sequence[Range], b: Sequence[Range]) -> list[Range]:
    """Two lists of ranges as one, in order, joined where they touch."""
    joined: list[Range] = []
    for start, stop in sorted([*a, *b]):
        if joined and start <= joined[-1][1]:
            joined[-1] = (joined[-1][0], max(joined[-1][1], stop))
        else:
            joined.append((start, stop))
    return joined


@dataclass
class DamagedSet(ProtectedSet):
    """A protected set whose members are read through damage."""

    damage: Damage = field(default_factory=lambda: Damage(()))

    def stream(self, spans: Sequence[Part], start: int, known_bad: Sequence[Range] = ()) -> OpenStream:
        return DamagedStream(MemberStream(self.folder, spans, known_bad), start, self.damage)


# -- trials


@dataclass
class _Stage:
    """What all trials have in common."""

    target: Path
    path: Path
    root: Path | None
    jobs: int | None
    progress: Progress
    code: ConcatenatedCode
    shape: Shape
    stream_bytes: int
    sidecar_bytes: int
    spans: list[Span]

    @staticmethod
    def prepare(target: Path, path: Path, root: Path | None, jobs: int | None, progress: Progress) -> _Stage:
        """Look at the target as it is: a rehearsal on damaged files would tell about old damage."""
        opened = open_set(path, root, target=target)
        with closing(opened), Pools(jobs) as pools:
            check = SetCheck(opened, pools, progress)
            try:
                result = result_of("rehearse", target, check, check.run(hashing=True), 0.0)
            finally:
                check.close()
            if result.outcome is not Outcome.INTACT:
                raise CannotCheck(
                    f"{target} or its sidecar is damaged or changed already; see oakum verify, repair it, "
                    "and rehearse on what is whole"
                )
            announce_compiling(progress)
            geometries = [section.geometry for section in opened.sections]
            length = sum(g.length for g in geometries)
            files = [m for m in opened.members.values() if m.piece.kind is Kind.FILE and m.size]
            spans = [Span(m.piece.path, 0, m.size) for m in sorted(files, key=lambda m: m.stream_start)]
            depth = max(g.depth for g in geometries) if len(geometries) > 1 else None
            shape = Shape.of(check.code, length, depth)
            if not length:
                raise CannotCheck(f"{target} holds no bytes; there is nothing to rehearse on")
            return _Stage(
                target, path, root, jobs, progress, check.code, shape, length, opened.source.size, spans
            )

    def trial(
        self, number: int, channel: Channel, seed: tuple[int, ...], *, to_first_loss: bool = False
    ) -> Trial:
        """One history of the medium; with `to_first_loss` decoding ends at the first block that is lost."""
        on_data, on_sidecar = draw(channel, self.stream_bytes, self.sidecar_bytes, seed)
        source: OpenBytes = DamagedBytes(FileBytes(self.path), on_sidecar)
        try:
            opened = assemble(DamagedSet, self.path, source, self.root)
        except FormatError as error:
            return Trial(number, False, False, 0, 0, 0, self.shape.blocks, None, str(error))
        with closing(opened):
            opened.damage = on_data
            look_at_members(opened)
            truth = MemberStream(opened.folder, self.spans)
            with closing(truth), Pools(self.jobs) as pools:
                check = SetCheck(opened, pools, Silent())
                try:
                    return self._run(number, check, truth, to_first_loss)
                finally:
                    pools.close()
                    check.close()

    def _run(self, number: int, check: SetCheck, truth: MemberStream, to_first_loss: bool) -> Trial:
        check.scan(hashing=True)
        tally = Tally(check.opened)
        false = 0
        for window in check.windows:
            tally.add_window(window)
            for finding in window.findings(check.decoders, keep=True):
                tally.add(finding)
                false += _false_bytes(finding, truth)
                if to_first_loss and not finding.correctable:
                    return Trial(number, False, False, 0, 0, 0, 1, None, "a block was lost")
        result = result_of("rehearse", self.target, check, tally, 0.0)
        lost = [m for m in result.members if m.state is MemberState.UNCORRECTABLE]
        totals = result.totals
        survived = not (lost or false)
        return Trial(
            number, survived, result.sidecar.state is not Outcome.UNCORRECTABLE, totals.bits_flipped,
            totals.bytes_erased, len(result.blocks), totals.blocks_uncorrectable,
            result.weakest if survived else None, _reason(len(lost), false),
        )  # fmt: skip


def _false_bytes(finding: Finding, truth: MemberStream) -> int:
    """Bytes that a repair would write for whole blocks and that are not the target's own."""
    if not finding.correctable:
        return 0
    false = 0
    for start, data in finding.corrected:
        own = np.empty(len(data), np.uint8)
        truth.read_into(start, own.data)
        false += int(np.count_nonzero(own != data))
    return false


def _reason(lost: int, false: int) -> str:
    if false:
        return f"{false} bytes would have been written wrongly, and the SHA-256 would have refused them"
    return f"{lost} of the files could not be put right" if lost else ""


# -- how far it goes


def _find_limit(stage: _Stage, channel: Channel, seed: int) -> Limit:
    """Drive the damage up until a block is lost, then close in on the edge."""
    by_burst = any(run.readable and run.count for run in channel.runs) and not channel.flip_rate
    quantity, first, highest = "flip rate", channel.final_flip_rate or FIRST_RATE, HIGHEST_RATE
    if by_burst:
        quantity, first, highest = "burst length", float(CELL), float(stage.stream_bytes)
    steps = 0

    def lost_at(value: float) -> bool:
        nonlocal steps
        steps += 1
        stage.progress.phase(f"trying a {quantity} of {_shown(value)}", None)
        trial = stage.trial(steps, _with_quantity(channel, by_burst, value), (seed, 0), to_first_loss=True)
        return not trial.survived

    survived, lost = _bracket(lost_at, first, highest)
    while survived is not None and lost is not None and lost > CLOSE * survived:
        middle = (survived * lost) ** 0.5
        if by_burst and round(middle) in (round(survived), round(lost)):
            break
        survived, lost = (survived, middle) if lost_at(middle) else (middle, lost)
    return Limit(quantity, survived, lost, steps)


def _shown(value: float) -> str:
    return f"{round(value):,} bytes" if value >= 1 else f"{value:.3g}"


def _bracket(
    lost_at: Callable[[float], bool], value: float, highest: float
) -> tuple[float | None, float | None]:
    """A value that was survived and the next that was not, in steps of 2; None where there is none."""
    if lost_at(value):
        for _ in range(HALVINGS):
            if not lost_at(value / 2):
                return value / 2, value
            value /= 2
        return None, value
    while value < highest:
        following = min(2 * value, highest)
        if lost_at(following):
            return value, following
        value = following
    return value, None


def _with_quantity(channel: Channel, by_burst: bool, value: float) -> Channel:
    """The channel with another burst length, or another flip rate at the time of reading."""
    if not by_burst:
        return channel.with_final_flip_rate(value)
    runs = tuple(
        replace(run, lengths=((max(1, round(value)), 1.0),)) if run.readable and run.count else run
        for run in channel.runs
    )
    return replace(channel, runs=runs)
