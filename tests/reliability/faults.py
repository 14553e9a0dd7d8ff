"""The seam between oakum and the system: every call in `os` that touches files below one folder is counted
and may fail, be cut short, or be recorded.

Nothing in the package knows of it: it calls the functions of `os` through the module, and here they are
replaced.
"""

from __future__ import annotations

import errno
import os
import signal
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

BY_DESCRIPTOR = (
    "preadv", "pread", "pwrite", "ftruncate", "fsync", "close", "fstat", "fchmod", "utime", "dup",
)  # fmt: skip
BY_NAME = (
    "open", "link", "rename", "unlink", "stat", "mkdir", "symlink", "readlink", "rmdir", "lstat", "listdir",
)  # fmt: skip
CHANGING = (
    "pwrite", "ftruncate", "open", "link", "rename", "unlink", "mkdir", "symlink", "rmdir", "fsync", "fchmod",
    "utime",
)  # fmt: skip
"""The calls that can change what is on the medium: between two of them a kill finds the same state."""

CALLS = (*BY_DESCRIPTOR, *BY_NAME)

ERRORS = {
    "pwrite": errno.ENOSPC, "ftruncate": errno.ENOSPC, "mkdir": errno.ENOSPC, "symlink": errno.ENOSPC,
    "fchmod": errno.EPERM, "dup": errno.EMFILE, "open": errno.EMFILE,
}  # fmt: skip
"""The error that a call gives, one that it can have on Linux; EIO where none stands here."""


@dataclass
class Faults:
    """Counts the calls below `folder` and lets some fail.

    `at`: the number (from 1) of the call that fails, `for_good`: and so do all later ones of the same name.
    `short`: reads and writes are cut to one byte instead of failing. `kill`: the process ends there and then.
    """

    folder: Path
    names: Iterable[str] = CALLS
    at: int = 0
    for_good: bool = False
    short: bool = False
    kill: bool = False
    count: int = 0
    failed: list[str] = field(default_factory=list)

    def install(self, patch: pytest.MonkeyPatch) -> Faults:
        """Put it in place until the patch is undone."""
        for name in self.names:
            patch.setattr(os, name, self._stand_in(name, getattr(os, name)))
        return self

    def _stand_in(self, name: str, true: Callable[..., Any]) -> Callable[..., Any]:
        def call(*args: Any, **options: Any) -> Any:
            if not self._concerns(name, args, options):
                return true(*args, **options)
            self.count += 1
            if self.at and (self.count == self.at or (self.for_good and name in self.failed)):
                self.failed.append(name)
                if self.kill:
                    os.kill(os.getpid(), signal.SIGKILL)
                if not self.short:
                    if name == "close":
                        true(*args)
                    code = ERRORS.get(name, errno.EIO)
                    raise OSError(code, os.strerror(code))
                args = _cut(name, args)
            return true(*args, **options)

        return call

    def _concerns(self, name: str, args: tuple[Any, ...], options: dict[str, Any]) -> bool:
        if name in BY_DESCRIPTOR or (name == "stat" and isinstance(args[0], int)):
            return self._below(args[0])
        folder = options.get("dir_fd", options.get("src_dir_fd"))
        if folder is not None:
            return self._below(folder)
        return os.fsdecode(args[0]).startswith(str(self.folder))

    def _below(self, fd: int) -> bool:
        try:
            return _readlink(f"/proc/self/fd/{fd}").startswith(str(self.folder))
        except OSError:
            return False


_readlink = os.readlink


def _cut(name: str, args: tuple[Any, ...]) -> tuple[Any, ...]:
    """The arguments of a read or write, for one byte only."""
    if name == "preadv":
        return args[0], [args[1][0][:1]], args[2]
    if name == "pwrite":
        return args[0], args[1][:1], args[2]
    return args[0], 1, args[2]
