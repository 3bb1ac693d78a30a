"""The queue in front of the engine: bounded, in order, and it tells how hard it was pressed."""

from __future__ import annotations

import threading

import pytest

from daq.store.committer import Gather, Pressure


def test_what_arrived_meanwhile_leaves_as_one_batch() -> None:
    """Everything that came during one fsync is committed by the next one."""
    queue: Gather[int] = Gather(10)
    assert all(queue.put(k) for k in range(5))
    assert queue.take(3) == [0, 1, 2]
    assert queue.take(100) == [3, 4]
    assert queue.take(100, timeout=0) == []
    assert queue.pressure() == Pressure(waiting=0, deepest=5, held_up=0, refused=0, taken=5, batches=2)


def test_a_full_queue_refuses_in_time_and_counts_it() -> None:
    """A disk that stalls must not fill the memory; the caller keeps the item and decides."""
    queue: Gather[int] = Gather(2)
    assert [queue.put(k, timeout=0) for k in range(3)] == [True, True, False]
    assert (queue.pressure().held_up, queue.pressure().refused) == (1, 1)
    assert queue.take(10) == [0, 1]


def test_a_put_that_waits_goes_on_when_there_is_room() -> None:
    """Back-pressure delays a poll loop, it does not lose its reading."""
    queue: Gather[int] = Gather(1)
    queue.put(0)
    thread = threading.Thread(target=queue.put, args=(1,))
    thread.start()
    got: list[int] = []
    while len(got) < 2:
        got += queue.take(10, timeout=5)
    thread.join()
    assert got == [0, 1]


def test_many_threads_lose_and_repeat_nothing() -> None:
    """Each bus puts in its own thread; the order within one bus is kept."""
    queue: Gather[tuple[int, int]] = Gather(7)
    threads = [
        threading.Thread(target=lambda bus=bus: [queue.put((bus, k)) for k in range(300)]) for bus in range(4)
    ]
    for thread in threads:
        thread.start()
    got: list[tuple[int, int]] = []
    while len(got) < 1200:
        batch = queue.take(5, timeout=5)
        assert 0 < len(batch) <= 5
        got += batch
    for thread in threads:
        thread.join()
    for bus in range(4):
        assert [k for b, k in got if b == bus] == list(range(300))
    assert queue.pressure().deepest <= 7


def test_closing_wakes_everybody_and_keeps_what_waits() -> None:
    """A clean stop commits what was taken in and takes in no more."""
    queue: Gather[int] = Gather(1)
    queue.put(0)
    answers: list[object] = []
    blocked = threading.Thread(target=lambda: answers.append(queue.put(1)))
    blocked.start()
    while not queue.pressure().held_up:
        pass
    queue.close()
    blocked.join(5)
    assert answers == [False]
    assert queue.take(10) == [0]
    assert queue.take(10) == []
    assert not queue.put(2)


def test_a_queue_holds_at_least_one() -> None:
    """A limit of nothing would hang the first poll for ever."""
    with pytest.raises(ValueError, match="got a limit of 0"):
        Gather(0)
