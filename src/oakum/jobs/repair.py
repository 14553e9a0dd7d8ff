"""repair: write the corrected files, beside the altered ones or to a folder of their own.

Nothing gets its final name before everything is decoded and every member's SHA-256 agrees; what was there
before stays as it was.
"""

from __future__ import annotations

import hashlib
import os
import threading
import time
from collections import OrderedDict
from collections.abc import Iterable, Sequence
from concurrent.futures import Future
from contextlib import nullcontext, suppress
from dataclasses import dataclass, replace
from pathlib import Path

from oakum.errors import CannotCheck, UsageError
from oakum.files import Lock, NewFile, aligned, reason
from oakum.jobs import DEFAULT_MEMORY
from oakum.jobs.checking import Bytes, WindowCheck
from oakum.jobs.common import find_sidecar
from oakum.jobs.inplace import InPlace
from oakum.jobs.lost import recover_sections
from oakum.jobs.opening import KnownMember, ProtectedSet, open_set
from oakum.jobs.rebuild import rebuild_sidecar
from oakum.jobs.replay import resume, undo
from oakum.jobs.tally import Tally
from oakum.jobs.unreadable import read_unreadable
from oakum.jobs.verify import SetCheck, result_of, verify
from oakum.members import Folder, MemberStream, open_folder
from oakum.pools import Meter, Pools, wait_all
from oakum.progress import Progress, Silent
from oakum.results import CheckResult, MemberState, Outcome
from oakum.sidecar.table import Kind

COPY_STEP = 4 << 20
OPEN_AT_A_TIME = 64
ADVICE = "move it away, or say with --output where to write"


def repair(
    target: Path,
    *,
    sidecar: Path | None = None,
    root: Path | None = None,
    output: Path | None = None,
    in_place: bool = False,
    even_newer: bool = False,
    members: Sequence[str] = (),
    accept_loss: bool = False,
    unreadable: Path | None = None,
    memory: int = DEFAULT_MEMORY,
    jobs: int | None = None,
    progress: Progress = Silent(),
) -> CheckResult:
    """Correct a protected set and its sidecar.

    Altered members are written beside themselves (`x.mended.tar`), absent ones to their own place; with
    `output` every member (or those named by `members`) is written below that folder. With `in_place` the
    damaged bytes themselves are put right, under a journal; members that look edited are refused unless
    `even_newer`. When something cannot be corrected nothing is written, unless `accept_loss`. Raises
    CannotCheck where nothing can be done at all, UsageError for members that the sidecar does not have.
    """
    begin = time.monotonic()
    path = find_sidecar(target, sidecar)
    with Lock(path) as lock:
        if in_place and resume(path, root):
            lock.renew()
            progress.note("a repair in place that had been interrupted was finished first")
        opened = open_set(path, root, read_unreadable(unreadable), target, progress)
        try:
            wanted = _chosen(opened, members)
            writing = (
                InPlace(opened, even_newer=even_newer) if in_place else Mending(opened, output, accept_loss)
            )
            with Pools(jobs) as pools, writing:
                check = SetCheck(opened, pools, progress)
                try:
                    check.scan(hashing=True)
                    tally = writing.run(check, wanted)
                finally:
                    check.close()
                result = writing.finish(result_of("repair", target, check, tally, 0.0), check, memory)
        finally:
            opened.close()
    return replace(result, seconds=time.monotonic() - begin)


def roll_back(
    target: Path,
    *,
    sidecar: Path | None = None,
    root: Path | None = None,
    memory: int = DEFAULT_MEMORY,
    jobs: int | None = None,
    progress: Progress = Silent(),
) -> CheckResult:
    """Bring back what stood before the last repair in place, and say how the set now stands.

    Raises CannotCheck without a journal, UsageError when a file was changed after the repair.
    """
    path = find_sidecar(target, sidecar)
    with Lock(path):
        back = undo(path, root)
    result = verify(target, sidecar=sidecar, root=root, memory=memory, jobs=jobs, progress=progress)
    note = f"{len(back):,} files were put back as they were before the repair in place"
    return replace(result, notes=(note, *result.notes))


def _chosen(opened: ProtectedSet, names: Sequence[str]) -> list[KnownMember]:
    """The members named, folders standing for what is in them; all when none are named."""
    if not names:
        return list(opened.members.values())
    chosen: dict[bytes, KnownMember] = {}
    for name in names:
        path = os.fsencode(name.rstrip("/"))
        found = {p: m for p, m in opened.members.items() if p == path or p.startswith(path + b"/")}
        if not found:
            raise UsageError(f"the sidecar has no member {name}; oakum describe lists them")
        chosen |= found
    return list(chosen.values())


@dataclass
class Copy:
    """A member that is being written: where to, and the file in the making."""

    member: KnownMember
    path: bytes
    shown: Path
    file: NewFile | None = None
    right: bool = False


class Mending:
    """All files that a repair writes. As a context manager it leaves no temporary file behind."""

    def __init__(self, opened: ProtectedSet, output: Path | None, accept_loss: bool) -> None:
        self._opened = opened
        self._accept_loss = accept_loss
        files = [m for m in opened.members.values() if m.piece.kind is Kind.FILE]
        one = len(opened.members) == 1 and len(files) == 1
        self._as_file = output if output is not None and one and not output.is_dir() else None
        self.output = output if self._as_file is None else None
        base = output if self.output is not None else self._as_file.parent if self._as_file else opened.root
        self._base = Path(os.path.abspath(base)) if base is not None else opened.root
        self._base_fd = -1
        self._made_above: list[Path] = []
        self._made: list[bytes] = []
        """Folders made on the way, above the base and below it; they go again unless something is written."""
        self._copies: dict[bytes, Copy] = {}
        self._awake: OrderedDict[bytes, Copy] = OrderedDict()
        self._files = threading.Lock()
        """Held while a file is written to that might be put aside meanwhile."""

        self._meter = Meter()

    # -- decoding and writing -------------------------------------------------------------------------

    def run(self, check: SetCheck, wanted: Sequence[KnownMember]) -> Tally:
        """Copy what was received, correct it, and count."""
        self._open_base()
        for member in wanted:
            if self.output is not None or self._as_file is not None or not member.right or member.fault:
                self._begin(member)
        check.progress.phase("writing", sum(c.member.size for c in self._copies.values()))
        if self._opened.incomplete:
            self._copy_whole(self._copies.values())
        tally = Tally(self._opened)
        for window in check.windows:
            self._copy_received(check, window)
            tally.add_window(window)
            for finding in window.findings(check.decoders, sink=self._put):
                tally.add(finding)
                check.progress.advance(self._meter.take())
        if self._opened.incomplete and self._all_at_hand:  # Corrected data may tell what they said.
            before = set(self._opened.members)
            recover_sections(self._opened, lambda spans: MemberStream(self, spans), check.progress)
            new = [m for path, m in self._opened.members.items() if path not in before]
            if self.output is not None and len(wanted) == len(before):
                self._copy_whole([self._begin(member) for member in new])
        return tally

    @property
    def _all_at_hand(self) -> bool:
        """Whether every member is right in its place or among the copies."""
        return all(m.right or path in self._copies for path, m in self._opened.members.items())

    def open(self, path: bytes) -> int:
        """A descriptor for reading the member at `path` as it will be. Raises OSError."""
        copy = self._copies.get(path)
        if copy is None or copy.file is None:
            return self._opened.folder.open(path)
        return os.dup(self._wake(copy).fd)

    def _open_base(self) -> None:
        try:
            self._made_above = [p for p in (self._base, *self._base.parents) if not os.path.lexists(p)]
            self._base.mkdir(parents=True, exist_ok=True)
            self._base_fd = os.open(self._base, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        except OSError as error:
            raise CannotCheck(
                f"{self._base} cannot be used as the place to write to: {reason(error)}"
            ) from None

    def _begin(self, member: KnownMember) -> Copy:
        path = member.piece.path
        if self._as_file is not None:
            path = os.fsencode(self._as_file.name)
        elif self.output is None and (not member.absent or member.in_the_way):
            path = mended_name(path)
        copy = Copy(member, path, self._base / os.fsdecode(path))
        if member.piece.kind is Kind.FILE:
            copy.file = NewFile(copy.shown, open_folder=lambda: self._parent_of(path), advice=ADVICE)
        self._copies[member.piece.path] = copy
        if copy.file is not None:
            copy.file.resize(member.size)
            self._wake(copy)
        return copy

    def _parent_of(self, path: bytes) -> int:
        return open_folder(self._base_fd, os.path.dirname(path), made=self._made)

    def _wake(self, copy: Copy) -> NewFile:
        """The copy's file, ready for use; the one that was not used for longest is put aside."""
        assert copy.file is not None
        self._awake[copy.path] = copy
        self._awake.move_to_end(copy.path)
        if len(self._awake) > OPEN_AT_A_TIME:
            _, oldest = self._awake.popitem(last=False)
            if oldest.file is not None:
                oldest.file.park()
        return copy.file

    def _copy_whole(self, copies: Iterable[Copy]) -> None:
        """Write what there is of members that lie in windows whose sections are lost."""
        for copy in copies:
            if copy.file is not None and not copy.member.absent:
                for start, data, _ in self._opened.read(copy.member):
                    self._wake(copy).write(start, data.data)

    def _copy_received(self, check: SetCheck, window: WindowCheck) -> None:
        """Write the members' bytes as they were received, but for those that come with the findings."""
        for start, stop in window.outside_dense_groups():
            for copy, inside, part in self._owners(window.start + start, stop - start):
                self._copy_part(
                    check, window, start + part.start, self._wake(copy), inside, part.stop - part.start
                )

    @staticmethod
    def _copy_part(
        check: SetCheck, window: WindowCheck, place: int, file: NewFile, inside: int, length: int
    ) -> None:
        """Write bytes of the window from `place` on to a file, from `inside` on, as they were received."""

        def work(done: int) -> int:
            data = aligned(min(COPY_STEP, length - done))
            window.stream.read_into(place + done, data.data)
            file.write(inside + done, data.data)
            return len(data)

        for count in check.pools.in_turn(work, range(0, length, COPY_STEP)):
            check.progress.advance(count)

    def _put(self, start: int, data: Bytes) -> None:
        """Put bytes by their place in the stream into the copies that they belong to, in any thread."""
        for copy, inside, part in self._owners(start, len(data)):
            with self._files if len(self._copies) > OPEN_AT_A_TIME else nullcontext():
                self._wake(copy).write(inside, data[part].data)
            self._meter.add(part.stop - part.start)

    def _owners(self, start: int, length: int) -> list[tuple[Copy, int, slice]]:
        """Copies that hold bytes of a range of the stream: (copy, offset in it, which of the bytes)."""
        owners = []
        for member in self._opened.members_at(start, length):
            copy = self._copies.get(member.piece.path)
            a = max(start, member.stream_start)
            b = min(start + length, member.stream_start + member.size)
            if copy is not None and a < b:
                owners.append((copy, a - member.stream_start, slice(a - start, b - start)))
        return owners

    # -- judging and naming -----------------------------------------------------------------------------

    def finish(self, result: CheckResult, check: SetCheck, memory: int) -> CheckResult:
        """Ask the SHA-256 of every copy, then name them all or none, then mend the sidecar."""
        check.progress.phase("checking what was written", sum(c.member.size for c in self._copies.values()))
        for copy in self._copies.values():
            copy.right = self._is_right(copy, check)
        wrong = [c for c in self._copies.values() if not c.right]
        reports = {m.path: m for m in result.members}
        for copy in self._copies.values():
            report = reports[os.fsdecode(copy.member.piece.path)]
            if not copy.right:
                report = report._replace(state=MemberState.UNCORRECTABLE, bits_flipped=None)
            elif report.state is MemberState.UNCORRECTABLE:  # Lost cells that it shares had nothing of it.
                report = report._replace(state=MemberState.ALTERED, lost=())
            reports[report.path] = report
        if wrong and not self._accept_loss:
            notes = (
                "nothing was written, since not everything can be corrected; "
                "--accept-loss writes what can be had",
            )
            return replace(
                result,
                outcome=Outcome.UNCORRECTABLE,
                members=tuple(reports.values()),
                notes=result.notes + notes,
            )
        self._made, self._made_above = [], []
        for copy in self._copies.values():
            self._name(copy)
            report = reports[os.fsdecode(copy.member.piece.path)]
            reports[report.path] = report._replace(mended=copy.shown)
        self._restore_folders()
        result = replace(result, members=tuple(reports.values()))
        if wrong:
            notes = ("what was written holds bytes as they were received where they could not be corrected",)
            return replace(result, outcome=Outcome.UNCORRECTABLE, notes=result.notes + notes)
        return self._mend_sidecar(result, check, memory)

    def _is_right(self, copy: Copy, check: SetCheck) -> bool:
        if copy.file is None:
            return True
        if copy.member.sha256 is None or copy.member.hopeless:
            return False
        digest = hashlib.sha256()
        hashing: list[Future[None]] = []
        buffers = [aligned(min(COPY_STEP, copy.member.size)).data for _ in range(2)]
        for start in range(0, copy.member.size, COPY_STEP):
            data = buffers[0][: copy.member.size - start]
            self._wake(copy).read_into(start, data)
            wait_all(hashing)
            hashing = [check.pools.ordered.submit(digest.update, data)]
            check.progress.advance(len(data))
            buffers.reverse()
        wait_all(hashing)
        return digest.digest() == copy.member.sha256

    def _name(self, copy: Copy) -> None:
        piece = copy.member.piece
        if copy.file is not None:
            modified = piece.modified_ns if piece.modified_ns > 0 else None
            self._wake(copy).commit(copy.member.size, mode=piece.mode & 0o777, modified_ns=modified)
            self._awake.pop(copy.path, None)
            return
        parent = self._parent_of(copy.path)
        try:
            name = os.path.basename(copy.path)
            if piece.kind is Kind.LINK:
                os.symlink(piece.target, name, dir_fd=parent)
            else:
                os.mkdir(name, dir_fd=parent)
        except FileExistsError:
            pass
        except OSError as error:
            raise CannotCheck(f"{copy.shown} could not be made: {reason(error)}") from None
        finally:
            os.close(parent)

    def _restore_folders(self) -> None:
        """Permission bits and times of folders, the innermost first, when everything is in them."""
        folders = [c for c in self._copies.values() if c.member.piece.kind is Kind.FOLDER]
        for copy in sorted(folders, key=lambda c: -c.path.count(b"/")):
            fd = open_folder(self._base_fd, copy.path)
            try:
                os.fchmod(fd, copy.member.piece.mode & 0o777)
                os.utime(fd, ns=(copy.member.piece.modified_ns,) * 2)
            finally:
                os.close(fd)

    def _mend_sidecar(self, result: CheckResult, check: SetCheck, memory: int) -> CheckResult:
        """Write the sidecar anew when it is damaged and every member is at hand as it was."""
        state = result.sidecar.state
        mended = {path: copy.shown for path, copy in self._copies.items() if copy.file is not None}
        if state is Outcome.INTACT or not self._all_at_hand:
            return result
        name = os.fsencode(self._opened.path.name)
        if self.output is None:
            name = mended_name(name)
        path = (self._base if self.output is not None else self._opened.path.parent) / os.fsdecode(name)
        reader = MendedFolder(self._opened.folder, mended)
        if not rebuild_sidecar(self._opened, check, reader, path, memory):
            return result
        return replace(result, sidecar=replace(result.sidecar, mended=path))

    def __enter__(self) -> Mending:
        return self

    def __exit__(self, *_: object) -> None:
        for copy in self._copies.values():
            if copy.file is not None:
                copy.file.discard()
        if self._base_fd >= 0:
            for path in reversed(self._made):
                with suppress(OSError):
                    os.rmdir(path, dir_fd=self._base_fd)
            os.close(self._base_fd)
        for above in self._made_above:
            with suppress(OSError):
                above.rmdir()


class MendedFolder:
    """Opens members where they now are: the mended ones where they were written, others in their place."""

    def __init__(self, folder: Folder, mended: dict[bytes, Path]) -> None:
        self._folder = folder
        self._mended = mended

    def open(self, path: bytes) -> int:
        """A descriptor for reading the member at `path`. Raises OSError."""
        if path in self._mended:
            return os.open(self._mended[path], os.O_RDONLY | os.O_CLOEXEC | os.O_NOFOLLOW)
        return self._folder.open(path)


def mended_name(path: bytes) -> bytes:
    """The name for a corrected copy beside the altered file: `x.tar` gives `x.mended.tar`."""
    stem, suffix = os.path.splitext(path)
    return stem + b".mended" + suffix
