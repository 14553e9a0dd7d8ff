"""protect: write the sidecar of a set of files and folders."""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.naming import resolve_code
from oakum.encoding import Changed, Kernels, ReadingPlan, Unreadable, WindowEncoder, plan_reading
from oakum.errors import CannotCheck, UsageError
from oakum.files import NewFile
from oakum.geometry import Geometry, Window, plan_windows
from oakum.jobs.bag import into_bag, refuse_in_bag
from oakum.jobs.common import (
    DEFAULT_MEMORY,
    absolute,
    announce_compiling,
    members_root,
    sidecar_path,
    summarise,
)
from oakum.jobs.replay import replacing
from oakum.members import Folder, Member, MemberHasher, MemberStream, Span, collect
from oakum.pools import Pools
from oakum.progress import Progress, Silent
from oakum.results import ProtectResult
from oakum.sidecar.bootstrap import LAST_SECTION, Bootstrap, CodeParameters
from oakum.sidecar.layout import Layout, stretches_for
from oakum.sidecar.table import Kind, Piece, packed_length
from oakum.sidecar.writing import Data, SectionWriter

_NOT_BESIDE = "the sidecar does not lie beside what it protects; give --root when verifying"


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
    progress: Progress = Silent(),
) -> ProtectResult:
    """Protect files and folders with one sidecar.

    With `bag` the paths lie in a bag, and the sidecar becomes one of its tag files (see `oakum.jobs.bag`).

    `depth` in bytes cuts the stream into windows; None makes the whole stream one. `memory` bounds the
    buffers, in bytes. Raises UsageError for what cannot be meant and CannotCheck for what cannot be read or
    written; in both cases nothing is left behind and an older sidecar is untouched.
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
    with replacing(sidecar, overwrite), NewFile(sidecar, overwrite=overwrite) as file, Pools(jobs) as pools:
        folder = Folder(root)
        try:
            job = _Job(chosen, members, windows, depth or 0, memory, pools, progress)
            size = job.write(folder, file)
            _refuse_changed(folder, members)
        finally:
            folder.close()
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


def _refuse_inside(sidecar: Path, places: Sequence[Path]) -> None:
    for place in places:
        if place.is_dir() and not place.is_symlink() and sidecar.is_relative_to(place):
            raise UsageError(
                f"the sidecar {sidecar.name} would lie inside {place}, which it protects; put it elsewhere"
            )
        if sidecar == place:
            raise UsageError(f"{sidecar} cannot be both what is protected and the sidecar")


def _refuse_changed(folder: Folder, members: Sequence[Member]) -> None:
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
            raise CannotCheck(
                f"{os.fsdecode(member.path)} changed while it was read; "
                "run protect again when nothing writes to it"
            )


def _read_back(sidecar: Path, root: Path, memory: int, jobs: int | None, progress: Progress) -> None:
    from oakum.jobs.verify import verify
    from oakum.results import Outcome

    result = verify(sidecar, root=root, memory=memory, jobs=jobs, progress=progress)
    if result.outcome is not Outcome.INTACT:
        raise CannotCheck(
            f"what was read back from {sidecar} is not what was written; do not trust this medium"
        )


@dataclass
class _Extent:
    """A member and where it begins in the stream."""

    member: Member
    start: int


class _Job:
    """Writes all windows of a set of known size, section after section."""

    def __init__(
        self,
        code: ConcatenatedCode,
        members: Sequence[Member],
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
        self._kernels = Kernels.of(code)
        starts = np.cumsum([0] + [m.size for m in members]).tolist()
        self._extents = [_Extent(m, start) for m, start in zip(members, starts, strict=False)]
        self._total = starts[-1]
        geometries = [geometry_of(code, w) for w in windows]
        self._plans = [plan_reading(g, memory) for g in geometries]
        self._geometries = geometries
        self.reads = max(plan.reads for plan in self._plans)
        self.burst = min((g.guaranteed_burst for g in geometries[:-1] or geometries), default=0)

    def write(self, folder: Folder, file: NewFile) -> int:
        """Write the sidecar into `file`; returns its length in bytes."""
        self._progress.phase(
            "reading" if self.reads == 1 else "reading twice", sum(
                w.length * p.reads for w, p in zip(self._windows, self._plans, strict=True)
            )
        )  # fmt: skip
        self._refuse_full(file)
        place, first, parent = 0, bytes(16), bytes(16)
        at = 0
        for window, geometry, plan in zip(self._windows, self._geometries, self._plans, strict=True):
            pieces, at = self._pieces(window, at)
            layout = Layout(geometry, sum(packed_length(p.path, p.target) for p in pieces))
            bootstrap = make_bootstrap(
                self._code, layout, window, self._set_depth, self._total, place, len(pieces),
                LAST_SECTION if window is self._windows[-1] else 0, parent, first,
            )  # fmt: skip
            writer = SectionWriter(bootstrap, layout, Placed(file, place))
            done = self._encode(folder, writer, geometry, plan, pieces)
            parent = done.identity
            first = first if window.index else done.identity
            place += layout.size
        return place

    def _encode(
        self,
        folder: Folder,
        writer: SectionWriter,
        geometry: Geometry,
        plan: ReadingPlan,
        pieces: Sequence[Piece],
    ) -> Bootstrap:
        spans = [Span(p.path, p.offset, p.length) for p in pieces if p.kind is Kind.FILE]
        stream = MemberStream(folder, spans)
        try:
            self._hasher.expect(spans)
            encoder = WindowEncoder(
                geometry, self._kernels, writer, stream, self._hasher, self._pools, self._progress.advance
            )
            encoder.run(plan)
        except (Unreadable, Changed) as error:
            name = os.fsdecode(stream.path_at(error.offset))
            what = (
                "could not be read to its end"
                if isinstance(error, Unreadable)
                else "changed while it was read"
            )
            raise CannotCheck(f"{name} {what}; run protect again when nothing writes to it") from None
        finally:
            stream.close()
        return writer.finish(pack_table(pieces, self._hasher.digests))

    def _pieces(self, window: Window, at: int) -> tuple[list[Piece], int]:
        """The entries of one window, from extent `at` on; returns where the next window begins."""
        end = window.start + window.length
        last = window is self._windows[-1]
        pieces = []
        while at < len(self._extents):
            extent = self._extents[at]
            m, stop = extent.member, extent.start + extent.member.size
            if extent.start >= end and not last:
                break
            offset = max(0, window.start - extent.start)
            length = max(0, min(stop, end) - extent.start - offset)
            pieces.append(
                Piece(
                    m.kind,
                    m.path,
                    m.mode,
                    m.modified_ns,
                    m.size,
                    offset,
                    length,
                    stop <= end,
                    target=m.target,
                )
            )
            if stop > end:
                break
            at += 1
        return pieces, at

    def _refuse_full(self, file: NewFile) -> None:
        """Say before the work that there is no room, not after it."""
        need = sum(g.body for g in self._geometries)
        free = shutil.disk_usage(file.path.parent).free
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


def pack_table(pieces: Sequence[Piece], digests: Sequence[bytes]) -> bytes:
    """The member table, with one digest for every file among the pieces."""
    remaining = iter(digests)
    return b"".join(p.pack(next(remaining) if p.kind is Kind.FILE else None) for p in pieces)
