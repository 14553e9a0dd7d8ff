"""A recorder of everything that changes below a folder, and the states that a power loss could leave there.

What was synced stands. Of the rest, each write may or may not have reached the medium, in any order; a file
whose name is on the medium may still be empty. A rename is one step: either both names or neither.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

Event = tuple[Any, ...]


class Recorder:
    """Keeps the row of events; files go by their inode numbers, folders by their paths.

    ("write", file, offset, data), ("cut", file, length), ("sync", file or folder), ("name", {path: file}),
    with None for a name that goes and -1 for a folder.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.events: list[Event] = []
        self.start: dict[str, tuple[int, bytes | None]] = {}
        for path in sorted(folder.rglob("*")):
            name = str(path.relative_to(folder))
            self.start[name] = (path.lstat().st_ino, path.read_bytes() if path.is_file() else None)

    def install(self, patch: pytest.MonkeyPatch) -> None:
        """Record until the patch is undone."""
        for name in ("pwrite", "ftruncate", "fsync", "open", "link", "rename", "unlink", "mkdir", "rmdir"):
            patch.setattr(os, name, self._stand_in(name, getattr(os, name)))

    def _stand_in(self, name: str, true: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any, **options: Any) -> Any:
            gone = self._number_of(args[0], options) if name in ("rename", "link") else 0
            result = true(*args, **options)
            self._note(name, args, options, result, gone)
            return result

        return call

    def _note(
        self, name: str, args: tuple[Any, ...], options: dict[str, Any], result: Any, moved: int
    ) -> None:
        if name == "pwrite" and self._place(args[0]):
            self.events.append(("write", os.fstat(args[0]).st_ino, args[2], bytes(args[1][:result])))
        elif name == "ftruncate" and self._place(args[0]):
            self.events.append(("cut", os.fstat(args[0]).st_ino, args[1]))
        elif name == "fsync" and (place := self._place(args[0])) is not None:
            self.events.append(
                ("sync", place if os.path.isdir(self.folder / place) else os.fstat(args[0]).st_ino)
            )
        elif name == "open" and len(args) > 1 and args[1] & os.O_CREAT:
            self._names({self._path(args[0], options): os.fstat(result).st_ino})
        elif name in ("link", "rename"):
            options = {"dir_fd": options.get("src_dir_fd")}
            old, new = (self._path(a, options) for a in args[:2])
            self._names({new: moved} | ({old: None} if name == "rename" else {}))
        elif name in ("unlink", "rmdir"):
            self._names({self._path(args[0], options): None})
        elif name == "mkdir":
            self._names({self._path(args[0], options): -1})

    def _names(self, change: dict[str | None, int | None]) -> None:
        if None not in change:
            self.events.append(("name", change))

    def _number_of(self, name: Any, options: dict[str, Any]) -> int:
        try:
            return os.stat(name, dir_fd=options.get("src_dir_fd"), follow_symlinks=False).st_ino
        except OSError:
            return 0

    def _path(self, name: Any, options: dict[str, Any]) -> str | None:
        folder = options.get("dir_fd")
        base = str(self.folder) if folder is None else os.readlink(f"/proc/self/fd/{folder}")
        whole = os.path.join(base, os.fsdecode(name))
        return os.path.relpath(whole, self.folder) if whole.startswith(str(self.folder)) else None

    def _place(self, fd: int) -> str | None:
        path = os.readlink(f"/proc/self/fd/{fd}")
        return os.path.relpath(path, self.folder) if path.startswith(str(self.folder)) else None

    def after_loss(self, upto: int, luck: np.random.Generator, kept: float, target: Path) -> None:
        """Build below `target` what could be there when power fails after `upto` events.

        `kept`: the chance of each unsynced change to have reached the medium.
        """
        files = {number: bytearray(data) for number, data in self.start.values() if data is not None}
        names: dict[str, int] = {n: -1 if d is None else number for n, (number, d) in self.start.items()}
        events = self.events[:upto]
        for at, event in enumerate(events):
            if event[0] == "sync" or not (_synced(event, events[at:]) or luck.random() < kept):
                continue
            if event[0] == "write":
                _, number, offset, data = event
                content = files.setdefault(number, bytearray())
                content.extend(bytes(max(0, offset + len(data) - len(content))))
                content[offset : offset + len(data)] = data
            elif event[0] == "cut":
                content = files.setdefault(event[1], bytearray())
                content.extend(bytes(max(0, event[2] - len(content))))
                del content[event[2] :]
            else:
                for path, number in event[1].items():
                    if number is None:
                        names.pop(path, None)
                    else:
                        names[path] = number
        for path, number in sorted(names.items()):
            place = target / path
            place.parent.mkdir(parents=True, exist_ok=True)
            if number == -1:
                place.mkdir(exist_ok=True)
            else:
                place.write_bytes(files.get(number, b""))


def _synced(event: Event, later: list[Event]) -> bool:
    """Whether one of the later events brings a change to the medium."""
    if event[0] == "name":
        folders = {os.path.dirname(path) or "." for path in event[1]}
        return any(e[0] == "sync" and e[1] in folders for e in later)
    return any(e[0] == "sync" and e[1] == event[1] for e in later)
