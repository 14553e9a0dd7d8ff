"""Carrying out a journal: forwards, to finish a repair in place, or backwards, to undo it.

Both ways may be begun again after any interruption. Members are patched where they are, so that hard links,
ownership and everything else about them stay; the sidecar is replaced as a whole.
"""

from __future__ import annotations

import errno
import hashlib
import os
import stat
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path

from oakum.errors import CannotCheck, UsageError
from oakum.files import Fault, FileBytes, Lock, NewFile, let_go, reason, temporary_name, write_all
from oakum.jobs.journal import Condition, Contents, Entry, Journal, Patch, Thing, journal_path
from oakum.members import open_folder
from oakum.sidecar.reading import find_sections

STEP = 4 << 20

_SOMETHING_ELSE = (errno.ENOENT, errno.ENOTDIR, errno.ELOOP, errno.EISDIR, errno.EINVAL)
"""Errors of a name behind which there is nothing, or no file, or no link."""


class Place:
    """Where a journal's entries are: members below `root`, the sidecar by its path."""

    def __init__(self, root: Path, sidecar: Path) -> None:
        """Raises CannotCheck when there is no such root."""
        self.root = root
        self.sidecar = sidecar
        try:
            self._fd = os.open(root, os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
        except OSError as error:
            raise CannotCheck(f"the folder {root} cannot be opened: {reason(error)}") from None

    def shown(self, entry: Entry) -> Path:
        """The path of an entry for people."""
        return self.sidecar if entry.thing is Thing.SIDECAR else self.root / os.fsdecode(entry.path)

    def parent(self, path: bytes) -> int:
        """A descriptor of the folder that a member is in; links on the way are not followed."""
        return open_folder(self._fd, os.path.dirname(path))

    def open(self, entry: Entry, flags: int) -> int:
        """Open the file of an entry. Raises OSError."""
        flags |= os.O_CLOEXEC | os.O_NOFOLLOW | os.O_NONBLOCK
        if entry.thing is Thing.SIDECAR:
            return os.open(self.sidecar, flags)
        folder = self.parent(entry.path)
        try:
            return os.open(os.path.basename(entry.path), flags, dir_fd=folder)
        finally:
            let_go(folder)

    def close(self) -> None:
        """Close the root."""
        let_go(self._fd)

    def __enter__(self) -> Place:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


# -- before anything is changed -------------------------------------------------------------------------


def refuse_unfit(contents: Contents, place: Place) -> None:
    """See that every file can be written to and is one that the journal may speak of. Raises CannotCheck."""
    for entry in contents.entries:
        if entry.thing in (Thing.FILE, Thing.SIDECAR) and entry.before is not None:
            sizes = sorted((entry.before.size, entry.after.size))
            try:
                fd = place.open(entry, os.O_RDWR)
            except OSError as error:
                raise CannotCheck(f"{place.shown(entry)} cannot be written to: {reason(error)}") from None
            found = os.fstat(fd)
            let_go(fd)
            if not stat.S_ISREG(found.st_mode) or not sizes[0] <= found.st_size <= sizes[1]:
                raise CannotCheck(
                    f"{place.shown(entry)} is not what the repair in place left there; nothing was changed"
                )


def first_wrong(contents: Contents, place: Place) -> Path | None:
    """The first entry that does not stand as after the repair; None when all do. Raises OSError."""
    for entry in contents.entries:
        if not _is_right(entry, place):
            return place.shown(entry)
    return None


def _is_right(entry: Entry, place: Place) -> bool:
    try:
        if entry.thing in (Thing.FILE, Thing.SIDECAR):
            return digest_of(place, entry) == entry.after.digest
        folder = place.parent(entry.path)
        try:
            name = os.path.basename(entry.path)
            if entry.thing is Thing.LINK:
                return os.readlink(name, dir_fd=folder) == entry.after.target
            return stat.S_ISDIR(os.stat(name, dir_fd=folder, follow_symlinks=False).st_mode)
        finally:
            let_go(folder)
    except OSError as error:
        if error.errno not in _SOMETHING_ELSE:
            raise
        return False


def digest_of(place: Place, entry: Entry) -> bytes:
    """SHA-256 of an entry's file. Raises OSError."""
    digest = hashlib.sha256()
    fd = place.open(entry, os.O_RDONLY)
    try:
        offset = 0
        while data := os.pread(fd, STEP, offset):
            digest.update(data)
            offset += len(data)
    finally:
        let_go(fd)
    return digest.digest()


# -- changing -------------------------------------------------------------------------------------------


def carry_out(journal: Journal, place: Place, *, forward: bool) -> None:
    """Put everything as it is to be (`forward`) or as it was. Raises OSError or CannotCheck."""
    numbers = range(len(journal.contents.entries))
    for number in numbers if forward else reversed(numbers):
        entry, patches = journal.contents.entries[number], journal.contents.patches[number]
        if entry.thing is Thing.SIDECAR:
            _replace_sidecar(journal, entry, patches, place, forward)
        elif entry.thing is Thing.FILE and entry.before is not None:
            _patch_file(journal, entry, patches, place, forward)
        elif forward:
            _make(journal, entry, patches, place)
        else:
            _unmake(entry, place)
    if forward:
        _restore_folders(journal.contents, place)


def _patch_file(journal: Journal, entry: Entry, patches: list[Patch], place: Place, forward: bool) -> None:
    goal = _goal(entry, forward)
    fd = place.open(entry, os.O_RDWR)
    try:
        _put(journal, patches, fd, forward)
        os.ftruncate(fd, goal.size)
        with suppress(PermissionError):  # Those who may write a file need not own it.
            os.fchmod(fd, goal.mode)  # Writing takes away the set-user-ID bits.
            os.utime(fd, ns=(os.fstat(fd).st_atime_ns, goal.modified_ns))
        os.fsync(fd)
    finally:
        let_go(fd)


def _goal(entry: Entry, forward: bool) -> Condition:
    assert entry.before is not None
    return entry.after if forward else entry.before


def _put(journal: Journal, patches: list[Patch], fd: int, forward: bool) -> None:
    for patch in patches:
        if forward:
            write_all(fd, patch.offset, journal.new_bytes(patch))
        elif not patch.blind:
            write_all(fd, patch.offset, journal.old_bytes(patch))


def _make(journal: Journal, entry: Entry, patches: list[Patch], place: Place) -> None:
    """Make a member that was not there (or, for a link, was another one)."""
    goal, name = entry.after, os.path.basename(entry.path)
    if entry.thing is Thing.FILE:
        with NewFile(
            place.shown(entry), overwrite=True, open_folder=lambda: place.parent(entry.path)
        ) as file:
            file.resize(goal.size)
            _put(journal, patches, file.fd, True)
            file.commit(goal.size, mode=goal.mode & 0o777, modified_ns=goal.modified_ns or None)
        return
    folder = place.parent(entry.path)
    try:
        if entry.thing is Thing.LINK:
            _set_link(name, goal.target, folder)
        else:
            with suppress(FileExistsError):
                os.mkdir(name, dir_fd=folder)
        os.fsync(folder)
    finally:
        let_go(folder)


def _set_link(name: bytes, target: bytes, folder: int) -> None:
    with suppress(FileNotFoundError):
        os.unlink(temporary_name(name), dir_fd=folder)
    os.symlink(target, temporary_name(name), dir_fd=folder)
    os.rename(temporary_name(name), name, src_dir_fd=folder, dst_dir_fd=folder)


def _unmake(entry: Entry, place: Place) -> None:
    """Take away what was not there, or point a link to where it pointed."""
    name = os.path.basename(entry.path)
    try:
        folder = place.parent(entry.path)
    except FileNotFoundError:
        return  # Its folder was never made.
    try:
        with suppress(FileNotFoundError):
            if entry.before is not None:
                _set_link(name, entry.before.target, folder)
            elif entry.thing is not Thing.FOLDER:
                os.unlink(name, dir_fd=folder)
            else:
                with suppress(OSError):  # Somebody put something into it.
                    os.rmdir(name, dir_fd=folder)
        os.fsync(folder)
    finally:
        let_go(folder)


def _restore_folders(contents: Contents, place: Place) -> None:
    """Permission bits and times of folders that were made, the innermost first, when all is in them."""
    made = [e for e in contents.entries if e.thing is Thing.FOLDER]
    for entry in sorted(made, key=lambda e: -e.path.count(b"/")):
        fd = place.open(entry, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fchmod(fd, entry.after.mode & 0o777)
            os.utime(fd, ns=(entry.after.modified_ns,) * 2)
        finally:
            let_go(fd)


def _replace_sidecar(
    journal: Journal, entry: Entry, patches: list[Patch], place: Place, forward: bool
) -> None:
    """Write the sidecar as it is to be, and give it its name; nothing is done where it is so already."""
    goal = _goal(entry, forward)
    with FileBytes(place.sidecar) as source:
        if _is_new(journal, entry, patches, source) == forward:
            return
        with NewFile(place.sidecar, overwrite=True) as file:
            missing: list[Fault] = []
            for offset in range(0, min(goal.size, source.size), STEP):
                data, faults = source.read(offset, min(STEP, min(goal.size, source.size) - offset))
                file.write(offset, data.data)
                missing += [(offset + a, offset + b) for a, b in faults]
            for patch in patches:
                if forward or not patch.blind:
                    size = patch.new if forward else patch.old
                    missing = without(missing, patch.offset, patch.offset + size)
            if missing:
                raise CannotCheck(f"{place.sidecar} cannot be read in full")
            _put(journal, patches, file.fd, forward)
            file.resize(goal.size)
            found = os.stat(place.sidecar)
            file.commit(
                goal.size, mode=goal.mode, modified_ns=goal.modified_ns, owner=(found.st_uid, found.st_gid)
            )


def _is_new(journal: Journal, entry: Entry, patches: list[Patch], source: FileBytes) -> bool | None:
    """Whether a sidecar is the new one, not the old one: what can be read where they differ tells.

    None where none of that can be read, though it could be when the journal was drafted: then it does no harm
    to patch it again.
    """
    if source.size != entry.after.size:
        return False
    doubtful = False
    for patch in patches:
        new = journal.new_bytes(patch)
        if not patch.blind and journal.old_bytes(patch) != new:
            found, faults = source.read(patch.offset, len(new))
            if not faults:
                return found.tobytes() == new
            doubtful = True
    if doubtful:
        return None
    return all(not source.read(patch.offset, patch.new)[1] for patch in patches if patch.blind)


# -- what a run does with a journal ---------------------------------------------------------------------


def finish(journal: Journal, place: Place) -> None:
    """Carry a journal out and see that everything is right. On failure everything is put back.

    Raises CannotCheck in any case of failure; the message says whether the journal is still needed.
    """
    try:
        carry_out(journal, place, forward=True)
        wrong = first_wrong(journal.contents, place)
        if wrong is not None:
            raise CannotCheck(f"{wrong} does not read back as it was written")
        journal.finish()
    except (OSError, CannotCheck) as error:
        why = reason(error) if isinstance(error, OSError) else str(error)
        raise CannotCheck(f"the repair in place failed: {why}; {_put_back(journal, place)}") from None


def without(faults: Sequence[Fault], start: int, stop: int) -> list[Fault]:
    """Ranges with the bytes start..stop-1 taken out of them."""
    left = []
    for a, b in faults:
        left += [(x, y) for x, y in ((a, min(b, start)), (max(a, stop), b)) if x < y]
    return left


def _put_back(journal: Journal, place: Place) -> str:
    try:
        carry_out(journal, place, forward=False)
        journal.remove()
    except (OSError, CannotCheck):
        return (
            f"not everything could be put back either; keep {journal.path}, and when the cause is gone "
            "finish with --in-place or undo with --roll-back"
        )
    return "everything was put back as it was"


def resume(sidecar: Path, root: Path | None) -> bool:
    """Finish a repair in place that was interrupted. False when there is none.

    Raises CannotCheck when it cannot be finished.
    """
    try:
        journal = Journal(sidecar)
    except FileNotFoundError:
        return False
    with journal:
        if journal.finished:
            return False
        with Place(sidecar.parent if root is None else root, sidecar) as place:
            _refuse_foreign(journal, sidecar)
            refuse_unfit(journal.contents, place)
            finish(journal, place)
    return True


def undo(sidecar: Path, root: Path | None) -> list[Entry]:
    """Bring back what stood before the last repair in place, and take the journal away.

    Returns what was put back. Raises CannotCheck when there is no journal, it belongs to another set, or the
    files cannot be written; UsageError when a file was changed after the repair.
    """
    try:
        journal = Journal(sidecar)
    except FileNotFoundError:
        raise CannotCheck(
            f"there is no journal {journal_path(sidecar).name} beside the sidecar: nothing to roll back"
        ) from None
    with journal, Place(sidecar.parent if root is None else root, sidecar) as place:
        _refuse_foreign(journal, sidecar)
        if journal.finished:
            try:
                changed = first_wrong(journal.contents, place)
            except OSError as error:
                why = f"what the repair wrote cannot be read: {reason(error)}; nothing was changed"
                raise CannotCheck(why) from None
            if changed is not None:
                raise UsageError(
                    f"{changed} was changed after the repair, and rolling back would undo that too; "
                    "nothing was changed"
                )
        refuse_unfit(journal.contents, place)
        try:
            if journal.finished:
                journal.begin_undoing()
            carry_out(journal, place, forward=False)
            journal.remove()
        except OSError as error:
            raise CannotCheck(
                f"not everything could be put back: {reason(error)}; try again when the cause is gone"
            ) from None
        return journal.contents.entries


def unfinished(sidecar: Path) -> bool:
    """Whether a repair in place of this sidecar was interrupted."""
    try:
        with Journal(sidecar, write=False) as journal:
            return not journal.finished
    except (FileNotFoundError, CannotCheck):
        return False


@contextmanager
def replacing(sidecar: Path, overwrite: bool) -> Iterator[None]:
    """Hold the lock of a sidecar that is to be replaced by one of other content.

    Raises CannotCheck while another run is at work on it, UsageError when a repair in place was interrupted:
    what half of it left behind must not be protected as if it were right.
    """
    if not overwrite or not sidecar.is_file():
        yield
        return
    with Lock(sidecar):
        if unfinished(sidecar):
            raise UsageError(
                f"a repair in place with {sidecar} was interrupted; first finish it with oakum repair "
                "--in-place or undo it with --roll-back"
            )
        yield


def _refuse_foreign(journal: Journal, sidecar: Path) -> None:
    with FileBytes(sidecar) as source:
        identity = find_sections(source)[0].bootstrap.set_identity
    if identity != journal.contents.identity:
        raise CannotCheck(
            f"{journal.path} belongs to other content than {sidecar.name}; nothing was changed. "
            "Move it away to go on without it"
        )
