"""The bounded queue in front of the engine: what arrives during one fsync is committed by the next.

Nothing is tuned: under light load a batch is one item and leaves at once; under heavy load the time that
one commit takes fills the next batch. The engine calls :meth:`Gather.take` in its thread, the poll
loops call :meth:`Gather.put` in theirs.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from dataclasses import dataclass
from typing import Generic, TypeVar

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class Pressure:
    """How hard the queue was pressed since it was made.

    ``waiting`` items now; ``deepest`` ever; ``held_up`` puts that had to wait; ``refused`` puts that
    found no room in time; ``taken`` items in ``batches`` batches.
    """

    waiting: int
    deepest: int
    held_up: int
    refused: int
    taken: int
    batches: int


class Gather(Generic[T]):
    """A queue of at most ``limit`` items for many putting threads and one taking thread."""

    def __init__(self, limit: int) -> None:
        if limit < 1:
            raise ValueError(f"queue: got a limit of {limit}, wanted at least 1")
        self._limit = limit
        self._items: deque[T] = deque()
        self._changed = threading.Condition()
        self._closed = False
        self._deepest = self._held_up = self._refused = self._taken = self._batches = 0

    def put(self, item: T, timeout: float | None = None) -> bool:
        """Add an item, waiting up to ``timeout`` seconds for room (None: as long as it takes).

        Returns:
            False where there was no room in time, or the queue is closed: the item is still the caller's.
        """
        with self._changed:
            if len(self._items) >= self._limit and not self._closed:
                self._held_up += 1
                self._changed.wait_for(lambda: len(self._items) < self._limit or self._closed, timeout)
            if self._closed or len(self._items) >= self._limit:
                self._refused += 1
                return False
            self._items.append(item)
            self._deepest = max(self._deepest, len(self._items))
            self._changed.notify_all()
            return True

    def take(self, limit: int, timeout: float | None = None) -> list[T]:
        """Return everything that is waiting, at most ``limit``, in order; wait for the first one.

        Returns:
            An empty list where nothing came within ``timeout`` seconds, or the queue is closed and empty.
        """
        deadline = None if timeout is None else time.monotonic() + timeout
        with self._changed:
            while not self._items and not self._closed:
                left = None if deadline is None else deadline - time.monotonic()
                if left is not None and left <= 0:
                    return []
                self._changed.wait(left)
            items = [self._items.popleft() for _ in range(min(limit, len(self._items)))]
            if items:
                self._taken += len(items)
                self._batches += 1
                self._changed.notify_all()
            return items

    def close(self) -> None:
        """Refuse further items and wake everybody; what is waiting can still be taken."""
        with self._changed:
            self._closed = True
            self._changed.notify_all()

    def pressure(self) -> Pressure:
        """Return the counters."""
        with self._changed:
            return Pressure(
                len(self._items), self._deepest, self._held_up, self._refused, self._taken, self._batches
            )
