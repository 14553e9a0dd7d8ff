"""The list of what must not be read: a CSV of `path,offset,length`, one range a line."""

from __future__ import annotations

import csv
import io
import os
from collections.abc import Container
from contextlib import suppress
from dataclasses import dataclass, field, replace
from pathlib import Path

from oakum.errors import CannotCheck, UsageError
from oakum.files import reason

MOST_BYTES = 64 << 20


@dataclass(frozen=True)
class UnreadableList:
    """What must not be read: ranges (start, stop) by member path, and the line that first names each."""

    path: Path | None = None
    ranges: dict[bytes, list[tuple[int, int]]] = field(default_factory=dict)
    lines: dict[bytes, int] = field(default_factory=dict)

    def of_several(self) -> UnreadableList:
        """The same for a set that is one of several: what names none of its members is for another one."""
        return replace(self, lines={})

    def refuse_others(self, members: Container[bytes]) -> None:
        """Raise UsageError for a path that is none of the members': the ranges meant would be read."""
        for name, line in self.lines.items():
            if name not in members:
                raise UsageError(
                    f"line {line} of {self.path} names {os.fsdecode(name)}, which the sidecar does not "
                    "protect; oakum describe lists what it protects"
                )


def read_unreadable(path: Path | None) -> UnreadableList:
    """Read such a list. Blank lines and lines that begin with # are passed over.

    Raises UsageError for a line that is not `path,offset,length` in bytes, CannotCheck for a file that
    cannot be read.
    """
    if path is None:
        return UnreadableList()
    try:
        if path.stat().st_size > MOST_BYTES:
            raise UsageError(f"{path} is too large for a list of unreadable ranges")
        text = path.read_bytes().decode("utf-8", "surrogateescape")
    except OSError as error:
        raise CannotCheck(f"{path} cannot be read: {reason(error)}") from None
    found = UnreadableList(path)
    try:
        lines = csv.reader(io.StringIO(text, newline=""))
        for row in lines:
            number = lines.line_num
            if not row or row[0].startswith("#") or (number == 1 and row == ["path", "offset", "length"]):
                continue
            name, start, stop = _range(row, number, path)
            found.ranges.setdefault(name, []).append((start, stop))
            found.lines.setdefault(name, number)
    except csv.Error as error:
        raise UsageError(f"{path} is not a list of path,offset,length: {error}") from None
    for ranges in found.ranges.values():
        ranges.sort()
    return found


def _range(row: list[str], number: int, path: Path) -> tuple[bytes, int, int]:
    with suppress(ValueError):
        name, offset, length = row
        start, size = int(offset), int(length)
        if name and start >= 0 and size > 0 and start + size < 1 << 62:
            return os.fsencode(name), start, start + size
    raise UsageError(f"line {number} of {path} is not path,offset,length with whole numbers of bytes")
