"""Limiting the rate of reading, on a clock of our own."""

from __future__ import annotations

import os
import time
from pathlib import Path

import pytest
from support import content

from oakum import protect, reading_at, verify
from oakum.encoding import RESERVE
from oakum.files import read_into
from oakum.pools import Pools
from oakum.results import Outcome
from oakum.throttle import BURST, Throttle, current, take


class Clock:
    """Time that passes only while somebody sleeps."""

    def __init__(self, patch: pytest.MonkeyPatch) -> None:
        self.now = 1000.0
        patch.setattr(time, "monotonic", lambda: self.now)
        patch.setattr(time, "sleep", self.sleep)

    def sleep(self, seconds: float) -> None:
        assert seconds > 0
        self.now += seconds


@pytest.fixture
def clock(monkeypatch: pytest.MonkeyPatch) -> Clock:
    return Clock(monkeypatch)


@pytest.mark.parametrize("portion", [1, 999, 100_000])
def test_a_bucket_gives_its_rate(clock: Clock, portion: int) -> None:
    """A token bucket: what is taken in a time is at most the rate times it, and what the bucket holds."""
    limit = Throttle(10_000)
    begin = clock.now
    for _ in range(50):
        limit.take(portion)
    assert clock.now - begin == pytest.approx(max(0, 50 * portion / 10_000 - BURST))


def test_a_pause_earns_no_more_than_the_bucket_holds(clock: Clock) -> None:
    limit = Throttle(10_000)
    limit.take(10_000)
    clock.now += 3600
    begin = clock.now
    limit.take(10_000)
    assert clock.now - begin == pytest.approx(1 - BURST)


def test_files_are_read_in_portions(clock: Clock, tmp_path: Path) -> None:
    file = tmp_path / "f"
    file.write_bytes(content(1_000_000))
    fd = os.open(file, os.O_RDONLY)
    buffer = bytearray(1_000_000)
    with reading_at(200_000):
        begin = clock.now
        assert not read_into(fd, 0, memoryview(buffer))
    os.close(fd)
    assert bytes(buffer) == content(1_000_000)
    assert clock.now - begin == pytest.approx(5 - BURST)


def test_no_rate_is_no_limit(clock: Clock) -> None:
    with reading_at(None):
        assert current.get() is None
        take(1 << 40)
    assert clock.now == 1000.0


def test_threads_share_the_limit_of_their_job() -> None:
    with reading_at(1 << 30), Pools(3) as pools:
        limits = {pools.work.submit(current.get).result() for _ in range(20)}
        assert limits == {current.get()}
    assert current.get() is None


@pytest.mark.parametrize("options", [{}, {"memory": RESERVE + (1 << 20)}, {"depth": 8192}])
def test_jobs_keep_to_the_rate(clock: Clock, tmp_path: Path, options: dict[str, int]) -> None:
    """Whatever way the file is read, all of it is counted; by verify the sidecar too."""
    file = tmp_path / "f"
    file.write_bytes(content(6_000_000))
    with reading_at(1_000_000):
        begin = clock.now
        result = protect([file], jobs=1, **options)  # type: ignore[arg-type]
        assert clock.now - begin == pytest.approx(6 * result.reads, abs=0.2)
        begin = clock.now
        assert verify(file, jobs=1).outcome is Outcome.INTACT
        assert clock.now - begin > 6 + result.sidecar_bytes / 1e6 - 0.2
