"""Work waits in order, a worker that stops leaves nothing behind, and a flush waits for what is in hand."""

import threading
from concurrent.futures import ThreadPoolExecutor

import pytest

from edgewatch.station.backlog import Backlog


def put(backlog: Backlog[int], *items: int) -> None:
    """Add items as an owner does."""
    with backlog.change:
        backlog.items.extend(items)
        backlog.change.notify_all()


@pytest.mark.parametrize("take", [True, False])
def test_items_come_in_order_and_all_before_the_end(take: bool) -> None:
    """A stop does not lose what waits; taken items leave at once, others stay until the worker removes them."""
    backlog: Backlog[int] = Backlog()
    stop = threading.Event()
    put(backlog, 1, 2, 3)
    stop.set()
    found = []
    while (item := backlog.next(stop, take=take)) is not None:
        assert backlog.busy
        assert (item in backlog.items) == (not take)
        found.append(item)
        if not take:
            backlog.items.popleft()
        backlog.done()
    assert found == [1, 2, 3]
    assert not backlog.busy


def test_an_item_that_failed_is_the_next_again() -> None:
    """What was not removed comes again."""
    backlog: Backlog[int] = Backlog()
    put(backlog, 1, 2)
    for _ in range(2):
        assert backlog.next(threading.Event()) == 1
        backlog.done()


def test_a_waiting_worker_is_woken_by_work_and_by_a_stop() -> None:
    """Nothing waits: the worker sleeps until there is an item, or a stop."""
    backlog: Backlog[int] = Backlog()
    stop = threading.Event()
    with ThreadPoolExecutor() as pool:
        first = pool.submit(backlog.next, stop, take=True)
        put(backlog, 7)
        assert first.result(5.0) == 7
        backlog.done()
        second = pool.submit(backlog.next, stop, take=True)
        stop.set()
        assert second.result(5.0) is None


def test_flush_waits_for_what_is_in_hand() -> None:
    """An empty queue is not yet a finished one."""
    backlog: Backlog[int] = Backlog()
    assert backlog.flush(0.0)
    put(backlog, 1)
    assert not backlog.flush(0.0)
    backlog.next(threading.Event(), take=True)
    assert not backlog.items
    assert not backlog.flush(0.0)
    backlog.done()
    assert backlog.flush(0.0)
