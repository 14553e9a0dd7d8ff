"""protect, for what comes through a pipe: section after section, without ever seeking in the output."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from oakum import throttle
from oakum.algebra.concatenated import ConcatenatedCode
from oakum.algebra.naming import resolve_code
from oakum.encoding import RESERVE, Kernels, WindowEncoder, plan_reading
from oakum.errors import OakumError, UsageError
from oakum.files import Fault, NewFile, aligned
from oakum.geometry import Window, check_depth, window_depth
from oakum.jobs import DEFAULT_MEMORY
from oakum.jobs.common import absolute, announce_compiling, summarise
from oakum.jobs.protect import geometry_of, make_bootstrap, pack_table
from oakum.members import MemberHasher, Span
from oakum.pools import Pools
from oakum.progress import Progress, Silent
from oakum.results import ProtectResult
from oakum.sidecar.bootstrap import FROM_PIPE, LAST_SECTION, UNKNOWN_LENGTH, Bootstrap
from oakum.sidecar.layout import Layout
from oakum.sidecar.table import Kind, Piece, check_path, packed_length
from oakum.sidecar.writing import Data, SectionWriter

PIPE_DEPTH = 1 << 20


def protect_pipe(
    stream: BinaryIO,
    *,
    name: str,
    output: Path | BinaryIO,
    code: str = "shelf",
    depth: int = PIPE_DEPTH,
    overwrite: bool = False,
    memory: int = DEFAULT_MEMORY,
    jobs: int | None = None,
    progress: Progress = Silent(),
) -> ProtectResult:
    """Protect what comes through a pipe, window by window, never seeking in `output`.

    `name` is what the stream will be called when it is verified, relative to the sidecar's folder.
    Errors as in `protect`.
    """
    begin = time.monotonic()
    announce_compiling(progress)
    chosen = resolve_code(code)
    path = _pipe_member(name)
    job = _PipeJob(chosen, path, check_depth(depth), memory, progress)
    with Pools(jobs) as pools:
        progress.phase("reading", None)
        if isinstance(output, Path):
            target = absolute(output)
            with NewFile(target, overwrite=overwrite) as file:
                place = 0
                for section in job.sections(stream, pools):
                    file.write(place, section)
                    place += len(section)
                file.commit(place)
        else:
            target, place = Path("-"), 0
            for section in job.sections(stream, pools):
                output.write(section)
                place += len(section)
            output.flush()
    return ProtectResult(
        target, summarise(chosen), 1, job.length, place, job.last_depth if job.windows == 1 else depth,
        job.windows, 1, job.burst, time.monotonic() - begin,
    )  # fmt: skip


def _pipe_member(name: str) -> bytes:
    """The name of a pipe's stream as a member path. Raises UsageError for one that no file can have."""
    path = os.fsencode(name)
    try:
        check_path(path)
    except OakumError:
        raise UsageError(f"{name!r} cannot be the name of a file; give --name another one") from None
    return path


class _PipeJob:
    """Makes the sections of a stream of unknown length, each from a window that is held in memory."""

    def __init__(
        self, code: ConcatenatedCode, path: bytes, depth: int, memory: int, progress: Progress
    ) -> None:
        self._code = code
        self._path = path
        self._depth = depth
        self._progress = progress
        step = code.outer.k * depth
        section = Layout(geometry_of(code, Window(0, 0, step, depth)), packed_length(path)).size
        self._memory = memory - step - section
        self.length = self.windows = self.burst = self.last_depth = 0
        try:
            plan_reading(geometry_of(code, Window(0, 0, step, depth)), self._memory)
        except UsageError:
            need = (memory - self._memory + (code.outer.r + 32) * depth + RESERVE) >> 20
            raise UsageError(
                f"windows of a depth of {depth} bytes need --memory {need}MiB or more; "
                "give that, or a smaller --depth"
            ) from None
        self._buffer = aligned(step)

    def sections(self, stream: BinaryIO, pools: Pools) -> Iterator[bytearray]:
        """The sections of the sidecar in order."""
        kernels, hasher = Kernels.of(self._code), MemberHasher()
        parent = first = bytes(16)
        place = 0
        filled = self._fill(stream, 0)
        while True:
            ahead = stream.read(1) if filled == len(self._buffer) else b""
            window = Window(
                self.windows, self.length, filled, window_depth(filled, self._code.outer.k, self._depth)
            )
            section, done = self._section(window, not ahead, place, parent, first, kernels, hasher, pools)
            parent, first = done.identity, done.set_identity
            place += len(section)
            self.length += filled
            self.windows += 1
            self.last_depth = window.depth
            yield section
            if not ahead:
                return
            self._buffer[0] = ahead[0]
            filled = self._fill(stream, 1)

    def _fill(self, stream: BinaryIO, filled: int) -> int:
        view = self._buffer.data
        while filled < len(view):
            size = min(len(view) - filled, 1 << 20)
            throttle.take(size)
            data = stream.read(size)
            if not data:
                break
            view[filled : filled + len(data)] = data
            filled += len(data)
            self._progress.advance(len(data))
        return filled

    def _section(
        self,
        window: Window,
        last: bool,
        place: int,
        parent: bytes,
        first: bytes,
        kernels: Kernels,
        hasher: MemberHasher,
        pools: Pools,
    ) -> tuple[bytearray, Bootstrap]:
        geometry = geometry_of(self._code, window)
        layout = Layout(geometry, packed_length(self._path))
        end = window.start + window.length
        bootstrap = make_bootstrap(
            self._code, layout, window, self._depth, end if last else UNKNOWN_LENGTH, place, 1,
            FROM_PIPE | (LAST_SECTION if last else 0), parent, first,
        )  # fmt: skip
        sink = InMemory(layout.size)
        writer = SectionWriter(bootstrap, layout, sink)
        piece = Piece(Kind.FILE, self._path, 0o644, 0, end, window.start, window.length, last)
        hasher.expect([Span(self._path, window.start, window.length)])
        stream = HeldStream(self._buffer[: window.length])
        encoder = WindowEncoder(geometry, kernels, writer, stream, hasher, pools, lambda _: None)
        encoder.run(plan_reading(geometry, self._memory))
        self.burst = max(self.burst, geometry.guaranteed_burst)
        return sink.data, writer.finish(pack_table([piece], hasher.digests))


class HeldStream:
    """A window that is in memory already."""

    def __init__(self, data: NDArray[np.uint8]) -> None:
        self._data = data.data

    def read_into(self, offset: int, buffer: memoryview, hasher: MemberHasher | None = None) -> list[Fault]:
        """See `oakum.members.Stream`; what lies past the end is virtual zeros."""
        part = self._data[offset : offset + len(buffer)]
        buffer[: len(part)] = part
        buffer[len(part) :] = bytes(len(buffer) - len(part))
        return []

    def fetch(self, offset: int, length: int) -> None:
        """It is all here."""


class InMemory:
    """A sink in memory."""

    def __init__(self, size: int) -> None:
        self.data = bytearray(size)

    def write(self, offset: int, data: Data) -> None:
        self.data[offset : offset + len(data)] = data

    def read(self, offset: int, length: int) -> bytes:
        return bytes(self.data[offset : offset + length])
