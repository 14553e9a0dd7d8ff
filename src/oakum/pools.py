"""The threads of one job."""

from __future__ import annotations

import os
import threading
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import Future, wait
from contextvars import copy_context
from dataclasses import dataclass
from typing import Any, ParamSpec, TypeVar

PATIENCE = 0.2
"""Seconds between two calls while waiting."""

P = ParamSpec("P")
S = TypeVar("S")
T = TypeVar("T")


class Pools:
    """`jobs` threads that take work units from three lanes, the first of these that has one.

    `ordered` is for SHA-256: its units are done one by one in the order in which they came. `work` takes
    units without an order. Those of `later` begin only when there is nothing else to do.
    """

    def __init__(self, jobs: int | None = None) -> None:
        self.jobs = jobs or os.cpu_count() or 1
        self._changed = threading.Condition()
        self.ordered = Lane(self._begin)
        self.work = Lane(self._begin)
        self.later = Lane(self._begin)
        self._threads: list[threading.Thread] = []
        self._in_order = self._closed = False

    def _begin(self, lane: Lane, unit: Unit) -> None:
        """Take a unit; a thread more is started as long as there are fewer than `jobs`."""
        with self._changed:
            if self._closed:
                raise RuntimeError("the threads of this job have ended")
            lane.waiting.append(unit)
            if len(self._threads) < self.jobs:
                thread = threading.Thread(target=self._run, name=f"oakum-{len(self._threads)}")
                self._threads.append(thread)
                thread.start()
            self._changed.notify()

    def _run(self) -> None:
        while True:
            with self._changed:
                unit = self._next()
                while unit is None and not self._closed:
                    self._changed.wait()
                    unit = self._next()
            if unit is None:
                return
            unit.do()
            if unit.in_order:
                with self._changed:
                    self._in_order = False

    def _next(self) -> Unit | None:
        """The unit to be done next. Whoever finishes one looks again, so that nobody need be told."""
        ordered = self.ordered.waiting
        if ordered and not self._in_order and all(unit.done() for unit in ordered[0].after):
            self._in_order = ordered[0].in_order = True
            return ordered.popleft()
        for lane in (self.work, self.later):
            if lane.waiting:
                return lane.waiting.popleft()
        return None

    def in_turn(self, work: Callable[[S], T], items: Iterable[S]) -> Iterator[T]:
        """What comes of `work` on each of the items, in their order, not many of them begun ahead."""
        waiting: deque[Future[T]] = deque()
        for item in items:
            waiting.append(self.work.submit(work, item))
            if len(waiting) > self.jobs:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()

    def close(self) -> None:
        """Drop what nobody has begun, and wait for what somebody has."""
        with self._changed:
            self._closed = True
            for lane in (self.ordered, self.work, self.later):
                while lane.waiting:
                    lane.waiting.popleft().future.cancel()
            self._changed.notify_all()
        for thread in self._threads:
            thread.join()

    def __enter__(self) -> Pools:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


@dataclass
class Unit:
    """Something to do, when the units `after` have been done."""

    work: Callable[[], Any]
    after: Sequence[Future[Any]]
    future: Future[Any]
    in_order: bool = False

    def do(self) -> None:
        """Do it; what comes of it goes to the future."""
        if not self.future.set_running_or_notify_cancel():
            return
        try:
            wait_all(self.after)  # For their failures: they are done.
            result = self.work()
        except BaseException as error:
            self.future.set_exception(error)
        else:
            self.future.set_result(result)


class Lane:
    """Units that wait to be done."""

    def __init__(self, begin: Callable[[Lane, Unit], None]) -> None:
        self._begin = begin
        self.waiting: deque[Unit] = deque()

    def submit(self, work: Callable[P, T], /, *args: P.args, **options: P.kwargs) -> Future[T]:
        """Have it done by some thread."""
        return self.submit_after((), work, *args, **options)

    def submit_after(
        self, after: Sequence[Future[Any]], work: Callable[P, T], /, *args: P.args, **options: P.kwargs
    ) -> Future[T]:
        """Have it done when other units have been done; it fails where one of them failed."""
        future: Future[T] = Future()
        context = copy_context()  # What limits reading holds for the threads as well.
        self._begin(self, Unit(lambda: context.run(work, *args, **options), after, future))
        return future


class Meter:
    """What many threads add up and one of them tells of."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._sum = 0

    def add(self, count: int) -> None:
        """So much more, from any thread."""
        with self._lock:
            self._sum += count

    def take(self) -> int:
        """What was added since the last time."""
        with self._lock:
            count, self._sum = self._sum, 0
        return count


def wait_all(futures: Iterable[Future[Any]], meanwhile: Callable[[], None] | None = None) -> None:
    """Wait for all and pass on the first failure; `meanwhile` is called now and then, and at the end."""
    for future in futures:
        while meanwhile is not None and not future.done():
            wait([future], PATIENCE)
            meanwhile()
        future.result()
    if meanwhile is not None:
        meanwhile()
