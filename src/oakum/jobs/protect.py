"""protect: write the sidecar of a set of files and folders."""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Iterator, Sequence
from concurrent.futures import Future
from contextlib import closing, suppress
from dataclasses import replace
from functools import partial
from itertools import islice
from pathlib import Path
from typing import Any

from oakum import __version__, pagecache
from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.naming import resolve_code
from oakum.encoding import Changed, Kernels, Leg, ReadingPlan, Unreadable, WindowEncoder, plan_reading
from oakum.errors import CannotCheck, UsageError
from oakum.files import Fault, NewFile, take_away_leftovers
from oakum.geometry import Geometry, Window, plan_windows
from oakum.jobs import DEFAULT_MEMORY, resuming
from oakum.jobs.bag import into_bag, refuse_in_bag
from oakum.jobs.common import (
    absolute,
    announce_compiling,
    members_root,
    sidecar_path,
    summarise,
)
from oakum.jobs.halfway import Halfway, Keeper
from oakum.jobs.replay import replacing
from oakum.jobs.resuming import State, beside, key_of
from oakum.members import Folder, MemberHasher, MemberStream, Part, bytes_of, collect
from oakum.pools import Pools
from oakum.progress import Progress, Silent
from oakum.results import ProtectResult
from oakum.sidecar.bootstrap import LAST_SECTION, Bootstrap, CodeParameters
from oakum.sidecar.layout import Layout, stretches_for
from oakum.sidecar.table import Kind, Piece, packed_length
from oakum.sidecar.writing import Data, SectionWriter

_NOT_BESIDE = "the sidecar does not lie beside what it protects; give --root when verifying"

_NAMED = 3
_AGAIN = "run protect again when nothing writes to it"


def protect(
    paths: Sequence[Path],
    *,
    output: Path | None = None,
    code: str = "shelf",
    depth: int | None = None,
    overwrite: bool = False,
    read_back: bool = False,
    bag: bool = False,
    memory: int = DEFAULT_MEMORY,
    jobs: int | None = None,
    fresh: bool = False,
    progress: Progress = Silent(),
) -> ProtectResult:
    """Protect files and folders with one sidecar.

    With `bag` the paths lie in a bag, and the sidecar becomes one of its tag files (see `oakum.jobs.bag`).

    `depth` in bytes cuts the stream into windows; None makes the whole stream one. `memory` bounds the
    buffers, in bytes. Raises UsageError for what cannot be meant and CannotCheck for what cannot be read or
    written; in both cases nothing is left behind and an older sidecar is untouched.

    A run over a large set that is interrupted (KeyboardInterrupt and the like, or a kill) leaves a state
    behind, and the next one goes on from there, unless it is to start `fresh`.
    """
    begin = time.monotonic()
    announce_compiling(progress)
    chosen = resolve_code(code)
    if not paths:
        raise UsageError("name at least one file or folder to protect")
    places = [absolute(path) for path in paths]
    holder = None
    if bag:
        holder, places, sidecar = into_bag(places, None if output is None else absolute(output))
    else:
        sidecar = sidecar_path(paths, output)
        refuse_in_bag(sidecar)
    _refuse_inside(sidecar, places)
    root = members_root(places, sidecar)
    members, notes = collect(places, root)
    if root != sidecar.parent:
        notes.append(_NOT_BESIDE)
    length = sum(m.size for m in members)
    windows = plan_windows(length, chosen.outer.k, depth)
    with closing(Folder(root)) as folder:
        state = _state(sidecar, folder, members, (chosen.name, CodeParameters.of(chosen), depth, memory))
        begun = None if fresh else state.load()
        run = state.key[:16]
        with (
            replacing(sidecar, overwrite),
            NewFile(sidecar, overwrite=overwrite, go_on=begun is not None, run=run) as file,
            Pools(jobs) as pools,
        ):
            job = _Job(chosen, members, windows, depth or 0, memory, pools, progress)
            halfway = _usable(begun, file, windows) if begun is not None else None
            if halfway is not None:
                file.keep = True
                notes.append(job.skipped(halfway))
                progress.note(notes[-1])
            elif run:
                notes += [state.of_no_use] if state.there and not fresh else []
                state.remove()  # Before anything is written that it does not speak of.
                take_away_leftovers(sidecar, but=run)
            with state.needed():
                size = job.write(folder, file, state, halfway or Halfway())
                progress.phase("bringing the sidecar to the medium", None)
                file.commit(size)
    if holder is not None:
        holder.enter(sidecar)
    if read_back:
        _read_back(sidecar, root, memory, jobs, progress)
    return ProtectResult(
        sidecar, summarise(chosen), len(members), length, size, windows[0].depth, len(windows), job.reads,
        job.burst, time.monotonic() - begin, tuple(notes),
    )  # fmt: skip


def _state(sidecar: Path, folder: Folder, members: Sequence[Piece], facts: tuple[object, ...]) -> State:
    """The state file of this run; small sets have none, but one that is there is taken away in the end."""
    place = beside(sidecar)
    if sum(m.size for m in members) < resuming.LEAST and not os.path.lexists(place):
        return State([], "")
    return State([place], key_of(folder, (m.path for m in members), __version__, *facts))


def _usable(begun: dict[str, Any], file: NewFile, windows: Sequence[Window]) -> Halfway | None:
    """The state of an earlier run if it belongs to the unfinished sidecar; otherwise that is emptied."""
    with suppress(KeyError, TypeError, ValueError):
        halfway = Halfway.unpack(begun)
        if file.found and 0 <= halfway.window < len(windows):
            return halfway
    file.resize(0)
    return None


def _refuse_inside(sidecar: Path, places: Sequence[Path]) -> None:
    for place in places:
        if place.is_dir() and not place.is_symlink() and sidecar.is_relative_to(place):
            raise UsageError(
                f"the sidecar {sidecar.name} would lie inside {place}, which it protects; put it elsewhere"
            )
        if sidecar == place:
            raise UsageError(f"{sidecar} cannot be both what is protected and the sidecar")


def _one_of(paths: Sequence[bytes]) -> str:
    names = [os.fsdecode(path) for path in paths[:_NAMED]]
    if len(paths) > _NAMED:
        names.append(f"one of {len(paths) - _NAMED:,} others")
    return " or ".join(names)


def _refuse_changed(folder: Folder, members: Sequence[Piece]) -> None:
    """End the run when a file is not what it was at the start."""
    for member in members:
        try:
            now = folder.stat(member.path)
        except OSError:
            raise CannotCheck(
                f"{os.fsdecode(member.path)} went away while it was read; "
                "run protect again when nothing changes"
            ) from None
        if member.kind is Kind.FILE and (now.st_size, now.st_mtime_ns) != (member.size, member.modified_ns):
            raise CannotCheck(f"{os.fsdecode(member.path)} changed while it was read; {_AGAIN}")


def _read_back(sidecar: Path, root: Path, memory: int, jobs: int | None, progress: Progress) -> None:
    from oakum.jobs.verify import verify
    from oakum.results import Outcome

    result = verify(sidecar, root=root, memory=memory, jobs=jobs, progress=progress)
    if result.outcome is not Outcome.INTACT:
        raise CannotCheck(
            f"what was read back from {sidecar} is not what was written; do not trust this medium"
        )


class _Job:
    """Writes all windows of a set of known size, section after section."""

    def __init__(
        self,
        code: ConcatenatedCode,
        members: Sequence[Piece],
        windows: Sequence[Window],
        set_depth: int,
        memory: int,
        pools: Pools,
        progress: Progress,
    ) -> None:
        self._code = code
        self._windows = windows
        self._set_depth = set_depth
        self._memory = memory
        self._pools = pools
        self._progress = progress
        self._hasher = MemberHasher()
        self._hashing = False
        self._kernels = Kernels.of(code)
        self._members = members
        self._left = 0
        """Bytes still to be read."""

        self._unchanged: Future[None] | None = None
        """A last look at the members, taken when all is read, while there is more to compute and write."""

        self._total = sum(m.size for m in members)
        geometries = [geometry_of(code, w) for w in windows]
        self._plans = [plan_reading(g, memory) for g in geometries]
        self._geometries = geometries
        self.reads = max(plan.reads for plan in self._plans)
        self.burst = min((g.guaranteed_burst for g in geometries[:-1] or geometries), default=0)

    @property
    def _to_read(self) -> int:
        """Bytes to be read in all."""
        return sum(w.length * p.reads for w, p in zip(self._windows, self._plans, strict=True))

    def _read_before(self, halfway: Halfway) -> int:
        """Those of them that were read when a run had come so far."""
        number = halfway.window
        done = sum(w.length * p.reads for w, p in zip(self._windows[:number], self._plans, strict=False))
        if halfway.legs is not None:
            g, (first, second) = self._geometries[number], halfway.legs
            done += min(first.at, g.length) + g.length * second.at // g.depth
        return done

    def skipped(self, halfway: Halfway) -> str:
        """A sentence on what need not be done again."""
        return (
            f"an earlier run was interrupted; {self._read_before(halfway):,} of "
            f"{self._to_read:,} bytes need not be read again"
        )

    def write(self, folder: Folder, file: NewFile, state: State, halfway: Halfway) -> int:
        """Write the sidecar into `file`, from `halfway` on; returns its length in bytes."""
        self._left = self._to_read - self._read_before(halfway)
        self._progress.phase("reading" if self.reads == 1 else "reading twice", self._left)
        self._refuse_full(file)
        begin, keeper = halfway.window, Keeper(file, state)
        place, first, parent = halfway.place, halfway.first, halfway.parent
        tables = pieces_of(self._members, self._windows)
        rows = zip(self._windows, self._geometries, self._plans, tables, strict=True)
        for window, geometry, plan, pieces in islice(rows, begin, None):
            layout = Layout(geometry, table_length(pieces))
            bootstrap = make_bootstrap(
                self._code, layout, window, self._set_depth, self._total, place, len(pieces),
                LAST_SECTION if window is self._windows[-1] else 0, parent, first,
            )  # fmt: skip
            writer = SectionWriter(bootstrap, layout, Placed(file, place))
            if window.index > halfway.window:
                halfway = Halfway(window.index, place, first, parent)
                keeper.keep(partial(replace, halfway))
            done = self._encode(folder, writer, geometry, plan, pieces, halfway, keeper)
            parent = done.identity
            first = first if window.index else done.identity
            place += layout.size
        if self._unchanged is None:
            _refuse_changed(folder, self._members)
        else:
            self._unchanged.result()
        return place

    def _encode(
        self,
        folder: Folder,
        writer: SectionWriter,
        geometry: Geometry,
        plan: ReadingPlan,
        pieces: Sequence[Piece],
        halfway: Halfway,
        keeper: Keeper,
    ) -> Bootstrap:
        spans = [piece for piece in pieces if piece.kind is Kind.FILE]
        once = plan.reads == 1 or not pagecache.holds(geometry.length)
        stream = MemberStream(folder, spans, once=once)

        def advance(nbytes: int) -> None:
            self._progress.advance(nbytes)
            self._left -= nbytes
            if nbytes and not self._left:
                self._unchanged = self._pools.work.submit(_refuse_changed, folder, self._members)

        def mark(first: Leg, second: Leg) -> None:
            digests = partial(self._hasher.digests_before, first.at)
            keeper.keep(lambda: replace(halfway, digests=digests(), legs=(first, second)))

        try:
            self._expect(folder, spans, halfway)
            encoder = WindowEncoder(
                geometry, self._kernels, writer, stream, self._hasher, self._pools, advance, mark,
            )  # fmt: skip
            encoder.run(plan, halfway.legs)
        except Unreadable as error:
            name = os.fsdecode(stream.path_at(error.offset))
            raise CannotCheck(f"{name} could not be read to its end; {_AGAIN}") from None
        except Changed as error:
            _refuse_changed(folder, self._members)
            raise CannotCheck(
                f"{_one_of(stream.paths(error.start, error.stop))} changed while it was read; {_AGAIN}"
            ) from None
        finally:
            stream.close()
        return writer.finish(pack_table(pieces, self._hasher.digests))

    def _expect(self, folder: Folder, spans: Sequence[Part], halfway: Halfway) -> None:
        """Tell the hasher what comes; at the beginning of a run it has to catch up with an earlier one."""
        if self._hashing:
            self._hasher.expect(spans)
            return
        self._hashing = True
        done = halfway.legs[0].at if halfway.legs else 0

        def again(span: Part) -> Iterator[tuple[memoryview, list[Fault]]]:
            return bytes_of(MemberStream(folder, [span]), span.length)

        if not self._hasher.go_on(spans, halfway.digests, done, again):
            raise Unreadable(done)

    def _refuse_full(self, file: NewFile) -> None:
        """Say before the work that there is no room, not after it."""
        need = sum(g.body for g in self._geometries)
        free = shutil.disk_usage(file.path.parent).free + os.fstat(file.fd).st_blocks * 512
        if need > free:
            raise CannotCheck(
                f"{file.path.parent} has room for {free:,} bytes and the sidecar "
                f"needs about {need:,}; free some, or choose another --output"
            )


class Placed:
    """A file as the sink of a section that begins at `base`."""

    def __init__(self, file: NewFile, base: int) -> None:
        self._file = file
        self._base = base

    def write(self, offset: int, data: Data) -> None:
        self._file.write(self._base + offset, data)

    def read(self, offset: int, length: int) -> bytes:
        return self._file.read(self._base + offset, length)


def geometry_of(code: ConcatenatedCode, window: Window) -> Geometry:
    return Geometry(code.outer.n, code.outer.k, code.inner.m, code.inner.p, window.length, window.depth)


def make_bootstrap(
    code: ConcatenatedCode,
    layout: Layout,
    window: Window,
    set_depth: int,
    total: int,
    place: int,
    entries: int,
    flags: int,
    parent: bytes,
    first: bytes,
) -> Bootstrap:
    """The bootstrap record of a window's section, without its identity."""
    return Bootstrap(
        CodeParameters.of(code), stretches_for(window.length), window.index, window.start, window.length,
        window.depth, set_depth, total, place, layout.table_length, 0, entries, flags,
        parent, first,
    )  # fmt: skip


def pieces_of(members: Sequence[Piece], windows: Sequence[Window]) -> Iterator[list[Piece]]:
    """The entries of the member tables of one window after the other, from those of whole members.

    A member that is empty, or no file, belongs to the window in which the next byte lies.
    """
    at = start = 0
    for window in windows:
        end, last = window.start + window.length, window is windows[-1]
        pieces = []
        while at < len(members) and (start < end or last):
            piece = members[at]
            stop = start + piece.size
            if start < window.start or stop > end:
                offset = max(0, window.start - start)
                length = min(stop, end) - start - offset
                piece = piece._replace(offset=offset, length=length, ends=stop <= end)
            pieces.append(piece)
            if stop > end:
                break
            at, start = at + 1, stop
        yield pieces


def table_length(pieces: Sequence[Piece]) -> int:
    """Bytes of the member table of some entries."""
    return sum(packed_length(p.path, p.target) for p in pieces)


def pack_table(pieces: Sequence[Piece], digests: Sequence[bytes]) -> bytes:
    """The member table, with one digest for every file among the pieces."""
    remaining = iter(digests)
    return b"".join(p.pack(next(remaining) if p.kind is Kind.FILE else None) for p in pieces)
