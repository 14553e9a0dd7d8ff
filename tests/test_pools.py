"""The threads of a job: what goes first, what keeps its order, and what becomes of failures."""

from __future__ import annotations

import threading
from collections.abc import Callable
from contextvars import ContextVar

import pytest

from oakum.pools import Meter, Pools, wait_all


def blocked(pools: Pools) -> threading.Event:
    """Keep every thread busy until the event is set, so that what is submitted meanwhile has to queue."""
    go, all_there = threading.Event(), threading.Barrier(pools.jobs + 1)
    for _ in range(pools.jobs):
        pools.work.submit(lambda: (all_there.wait(), go.wait()))
    all_there.wait()
    return go


def test_results_and_failures_come_out_of_the_futures() -> None:
    with Pools(2) as pools:
        assert pools.work.submit(divmod, 17, 5).result() == (3, 2)
        failed = pools.later.submit(divmod, 1, 0)
        with pytest.raises(ZeroDivisionError):
            wait_all([pools.work.submit(int), failed])


def test_work_goes_before_what_can_be_done_later() -> None:
    order: list[str] = []
    with Pools(1) as pools:
        go = blocked(pools)
        units = [pools.later.submit(order.append, "later"), pools.work.submit(order.append, "work")]
        units.append(pools.ordered.submit(order.append, "ordered"))
        go.set()
        wait_all(units)
    assert order == ["ordered", "work", "later"]


@pytest.mark.parametrize("jobs", [1, 2, 5])
def test_ordered_units_keep_their_order_and_never_meet(jobs: int) -> None:
    order: list[int] = []
    inside = threading.Lock()

    def unit(number: int) -> None:
        assert inside.acquire(blocking=False)
        order.append(number)
        inside.release()

    with Pools(jobs) as pools:
        units = []
        for number in range(200):
            before = [pools.work.submit(sum, range(number % 7 * 500))]
            units.append(pools.ordered.submit_after(before, unit, number))
        wait_all(units)
    assert order == list(range(200))


def test_a_unit_waits_for_those_before_it() -> None:
    done: list[str] = []
    with Pools(3) as pools:
        go = threading.Event()

        def slowly() -> None:
            go.wait()
            done.append("first")

        second = pools.ordered.submit_after([pools.work.submit(slowly)], done.append, "second")
        assert pools.work.submit(len, done).result() == 0
        go.set()
        second.result()
    assert done == ["first", "second"]


def test_a_unit_fails_with_those_before_it() -> None:
    done: list[str] = []
    with Pools(1) as pools:
        after_failure = pools.ordered.submit_after([pools.work.submit(divmod, 1, 0)], done.append, "never")
        with pytest.raises(ZeroDivisionError):
            after_failure.result()
        assert pools.ordered.submit(divmod, 7, 7).result() == (1, 0)
    assert not done


def test_never_more_threads_than_jobs() -> None:
    running, most, lock = 0, 0, threading.Lock()

    def unit() -> None:
        nonlocal running, most
        with lock:
            running += 1
            most = max(most, running)
        sum(range(1000))
        with lock:
            running -= 1

    with Pools(3) as pools:
        wait_all([lane.submit(unit) for lane in (pools.ordered, pools.work, pools.later) for _ in range(100)])
    assert 1 <= most <= 3


def test_closing_drops_what_nobody_has_begun() -> None:
    pools = Pools(1)
    go = blocked(pools)
    left = [lane.submit(int) for lane in (pools.ordered, pools.work, pools.later)]
    threading.Timer(0.05, go.set).start()
    pools.close()
    assert all(unit.cancelled() for unit in left)
    with pytest.raises(RuntimeError):
        pools.work.submit(int)
    pools.close()


def test_units_see_the_context_of_who_submitted_them() -> None:
    value: ContextVar[str] = ContextVar("value", default="none")
    with Pools(2) as pools:
        token = value.set("here")
        unit = pools.work.submit(value.get)
        value.reset(token)
        assert (unit.result(), pools.work.submit(value.get).result()) == ("here", "none")


def test_waiting_is_told_now_and_then() -> None:
    told: list[int] = []
    go = threading.Event()

    def meanwhile() -> None:
        told.append(1)
        if len(told) == 2:
            go.set()

    with Pools(1) as pools:
        wait_all([pools.work.submit(go.wait)], meanwhile)
    assert len(told) >= 2


def test_a_meter_loses_nothing() -> None:
    meter = Meter()
    with Pools(4) as pools:
        adding: Callable[[int], None] = meter.add
        units = [pools.work.submit(adding, n) for n in range(1000)]
        taken = meter.take()
        wait_all(units)
    assert taken + meter.take() == sum(range(1000))
    assert meter.take() == 0
