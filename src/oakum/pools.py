"""The threads of one job."""

from __future__ import annotations

import os
from collections.abc import Iterable
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Any


class Pools:
    """One thread that keeps the order which SHA-256 needs, and `jobs` that take work units as they come."""

    def __init__(self, jobs: int | None = None) -> None:
        self.jobs = jobs or os.cpu_count() or 1
        self.ordered = ThreadPoolExecutor(1, "oakum-order")
        self.work = ThreadPoolExecutor(self.jobs, "oakum-work")

    def __enter__(self) -> Pools:
        return self

    def __exit__(self, *_: object) -> None:
        for pool in (self.ordered, self.work):
            pool.shutdown(wait=True, cancel_futures=True)


def wait_all(futures: Iterable[Future[Any]]) -> None:
    """Wait for all and pass on the first failure."""
    for future in futures:
        future.result()
