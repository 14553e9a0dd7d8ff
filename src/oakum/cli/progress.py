"""Shows what a job is doing, on standard error: a bar on a terminal, a plain timed line otherwise."""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

from oakum.cli.output import tell
from oakum.progress import Progress, Silent
from oakum.report.terminal import safe
from oakum.report.units import duration, percent, size, speed

if TYPE_CHECKING:
    from rich.console import Console, RenderableType

LINE_EVERY_SECONDS = 5.0


@contextmanager
def reporting(quiet: bool) -> Iterator[Progress]:
    """A progress display that suits where standard error goes; it is gone when the block ends."""
    if quiet:
        yield Silent()
    elif _draws(sys.stderr):
        bar = Bar()
        try:
            yield bar
        finally:
            bar.close()
    else:
        yield TimedLine()


def _draws(stream: object) -> bool:
    """Whether `stream` is a terminal that can move its cursor."""
    isatty = getattr(stream, "isatty", None)
    return bool(isatty and isatty()) and os.environ.get("TERM", "dumb") not in ("dumb", "unknown", "")


class Pace:
    """How far one phase has come, and when it will be done if it goes on so."""

    def __init__(self, total: int | None) -> None:
        self.total = total
        self.done = 0
        self._started = time.monotonic()

    def words(self) -> str:
        """`41 %, 1.23 GB of 3.00 GB, 812 MB/s, 3 s left`, as far as known."""
        elapsed = time.monotonic() - self._started
        rate = speed(self.done, elapsed)
        if not self.total:
            return ", ".join(filter(None, (size(self.done), rate)))
        # Work that is done twice is counted twice by some jobs; a display that says 103 % helps nobody.
        done = min(self.done, self.total)
        parts = [percent(done / self.total), f"{size(done)} of {size(self.total)}", rate]
        if 0 < done < self.total:
            parts.append(f"{duration(elapsed * (self.total - done) / done)} left")
        return ", ".join(filter(None, parts))


class TimedLine:
    """A `Progress` that writes a line every few seconds, for logs; short runs write none."""

    def __init__(self) -> None:
        self._began = time.monotonic()
        self._next = self._began + LINE_EVERY_SECONDS
        self._name = ""
        self._pace = Pace(None)

    def phase(self, name: str, total: int | None) -> None:
        self._name, self._pace = safe(name), Pace(total)

    def advance(self, nbytes: int) -> None:
        self._pace.done += nbytes
        now = time.monotonic()
        if now >= self._next:
            self._next = now + LINE_EVERY_SECONDS
            tell(f"[{duration(now - self._began)}] {self._name}: {self._pace.words()}\n")

    def note(self, text: str) -> None:
        tell(f"oakum: {safe(text)}\n")


class Bar:
    """A `Progress` that draws one line with a bar in one hue, and rubs it out at the end."""

    def __init__(self, console: Console | None = None) -> None:
        from rich.console import Console
        from rich.live import Live

        self._console = console or Console(stderr=True, highlight=False)
        self._name = ""
        self._pace = Pace(None)
        self._live = Live(
            console=self._console, get_renderable=self._line, refresh_per_second=5, transient=True
        )
        self._live.start()

    def phase(self, name: str, total: int | None) -> None:
        self._name, self._pace = safe(name), Pace(total)

    def advance(self, nbytes: int) -> None:
        self._pace.done += nbytes

    def note(self, text: str) -> None:
        from rich.text import Text

        self._console.print(Text(f"oakum: {safe(text)}"))

    def close(self) -> None:
        self._live.stop()

    def _line(self) -> RenderableType:
        from rich.progress_bar import ProgressBar
        from rich.table import Table
        from rich.text import Text

        if not self._name:
            return Text()
        grid = Table.grid(padding=(0, 2))
        grid.add_row(
            Text(self._name),
            ProgressBar(
                total=self._pace.total or None,
                completed=self._pace.done,
                width=24,
                style="bright_black",
                complete_style="cyan",
                finished_style="cyan",
                pulse_style="cyan",
                pulse=not self._pace.total,
            ),
            Text(self._pace.words(), no_wrap=True, overflow="ellipsis"),
        )
        return grid
