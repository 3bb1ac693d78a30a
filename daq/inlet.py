"""What reaches the writer: scans in a bounded queue, news beside them that never waits and is never dropped.

A poll loop must not wait for the disk, and neither may the supervisor or the publisher: with a full
queue a scan finds no room and is counted, while news (a link lost, an acknowledgement) is put behind.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Iterable
from dataclasses import dataclass

from daq.records import Fact, ScansTaken
from daq.store.committer import Gather


class Acked(tuple[int, ...]):
    """Outbox rows that the broker has acknowledged; they travel through the same queue as facts."""

    __slots__ = ()


@dataclass(frozen=True, slots=True)
class Aside:
    """An outbox row that is not what was committed: to be set aside, so that those behind it get through."""

    seq: int
    why: str


Item = Fact | Acked | Aside


class Inlet:
    """A queue for many putting threads and one taking thread. ``lost`` counts scans without room."""

    def __init__(self, most: int) -> None:
        self._queue: Gather[Item] = Gather(most)
        self._behind: deque[Item] = deque()
        self._lock = threading.Lock()
        self.lost = 0

    def scan(self, scan: ScansTaken) -> None:
        """Put a scan, or count it as lost. Never waits."""
        if not self._queue.put(scan, 0.0):
            with self._lock:
                self.lost += 1

    def news(self, item: Item) -> None:
        """Put anything that is not a scan. Never waits; it cannot come ahead of the scans before it."""
        with self._lock:
            if self._behind or not self._queue.put(item, 0.0):
                self._behind.append(item)

    def take(self, most: int, timeout_s: float) -> list[Item]:
        """Return what waits, in order, about ``most`` at a time; an empty list where nothing came."""
        items = self._queue.take(most, timeout_s)
        if len(items) < most:
            with self._lock:
                items += self._behind
                self._behind.clear()
        return items

    def news_all(self, items: Iterable[Item]) -> None:
        for item in items:
            self.news(item)
