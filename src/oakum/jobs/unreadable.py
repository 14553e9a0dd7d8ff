"""The list of what must not be read: a CSV of `path,offset,length`, one range a line."""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path

from oakum.errors import CannotCheck, UsageError
from oakum.files import reason

MOST_BYTES = 64 << 20


def read_unreadable(path: Path | None) -> dict[bytes, list[tuple[int, int]]]:
    """Ranges (start, stop) by member path. Blank lines and lines that begin with # are passed over.

    Raises UsageError for a line that is not `path,offset,length` in bytes, CannotCheck for a file that
    cannot be read.
    """
    if path is None:
        return {}
    try:
        if path.stat().st_size > MOST_BYTES:
            raise UsageError(f"{path} is too large for a list of unreadable ranges")
        text = path.read_bytes().decode("utf-8", "surrogateescape")
    except OSError as error:
        raise CannotCheck(f"{path} cannot be read: {reason(error)}") from None
    ranges: dict[bytes, list[tuple[int, int]]] = {}
    try:
        lines = csv.reader(io.StringIO(text, newline=""))
        for row in lines:
            number = lines.line_num
            if not row or row[0].startswith("#") or (number == 1 and row == ["path", "offset", "length"]):
                continue
            name, start, stop = _range(row, number, path)
            ranges.setdefault(name, []).append((start, stop))
    except csv.Error as error:
        raise UsageError(f"{path} is not a list of path,offset,length: {error}") from None
    return {name: sorted(found) for name, found in ranges.items()}


def _range(row: list[str], number: int, path: Path) -> tuple[bytes, int, int]:
    try:
        name, offset, length = row
        start, size = int(offset), int(length)
    except ValueError:
        start, size, name = -1, -1, ""
    if start < 0 or size <= 0 or not name or start + size >= 1 << 62:
        raise UsageError(f"line {number} of {path} is not path,offset,length with whole numbers of bytes")
    return os.fsencode(name), start, start + size
