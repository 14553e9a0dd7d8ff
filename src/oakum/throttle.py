"""At most so many bytes a second: what keeps a disk usable for those who share it."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar

BURST = 0.1
"""Seconds' worth of bytes that may come at once after a pause."""


class Throttle:
    """A token bucket: it fills at `rate` bytes a second, and whoever takes more than it holds has to wait."""

    def __init__(self, rate: int) -> None:
        self.rate = rate
        self._lock = threading.Lock()
        self._paid_until = 0.0

    def take(self, nbytes: int) -> None:
        """Wait until `nbytes` more may be read."""
        with self._lock:
            now = time.monotonic()
            begin = max(self._paid_until, now - BURST)
            self._paid_until = begin + nbytes / self.rate
            delay = self._paid_until - now
        if delay > 0:
            time.sleep(delay)

    @property
    def portion(self) -> int:
        """The bytes to take at a time, so that nobody waits long for one portion."""
        return max(4096, int(self.rate * BURST) // 4096 * 4096)


current: ContextVar[Throttle | None] = ContextVar("throttle", default=None)
"""What limits reading in a job and, since these inherit it, in its threads."""


def take(nbytes: int) -> None:
    """Wait until `nbytes` more may be read, where that is limited."""
    limit = current.get()
    if limit is not None:
        limit.take(nbytes)


@contextmanager
def reading_at(rate: int | None) -> Iterator[None]:
    """Limit what is read inside the block to `rate` bytes a second; None leaves things as they are."""
    if rate is None:
        yield
        return
    token = current.set(Throttle(rate))
    try:
        yield
    finally:
        current.reset(token)
