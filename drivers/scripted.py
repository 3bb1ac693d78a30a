"""A byte stream without a wire: the far end is a function, and time passes only when somebody waits.

For tests of drivers, ours and others': a hundred thousand faulted requests take seconds, and each failure
can be had again from its seed. ``Driver(options, port=ScriptedPort(far_end, clock))`` puts it in place of
the real port.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable, Iterable
from typing import Final

from drivers.base import LinkError
from drivers.transport import Clock

FarEnd = Callable[[bytes], Iterable[tuple[float, bytes]]]
"""Takes what was written; returns (delay [s], bytes) for all that comes back because of it."""
CALL_S: Final = 1e-5
"""Time that a call takes: without it a far end that never stops would stop time."""


class ScriptedClock:
    """A monotonic clock that moves only when told."""

    def __init__(self, now_s: float = 1000.0) -> None:
        self._now_s = now_s

    def now_s(self) -> float:
        return self._now_s

    def sleep(self, duration_s: float) -> None:
        self._now_s += max(0.0, duration_s)


class ScriptedPort:
    """A transport over a far end. ``say`` lets that speak unasked; ``plugged`` False pulls the plug."""

    fresh = False

    def __init__(self, far_end: FarEnd, clock: ScriptedClock | None = None, name: str = "scripted") -> None:
        self.name = name
        self.clock: Clock = ScriptedClock() if clock is None else clock
        self.plugged = True
        self.opened = 0
        self._far_end = far_end
        self._is_open = False
        self._coming: list[tuple[float, int, bytes]] = []
        self._count = 0

    def say(self, delay_s: float, data: bytes) -> None:
        """Let ``data`` arrive ``delay_s`` from now."""
        self._count += 1
        heapq.heappush(self._coming, (self.clock.now_s() + delay_s, self._count, data))

    def open(self, until_s: float) -> None:
        if not self.plugged:
            raise LinkError(f"{self.name}: cannot be opened: no such port")
        self._is_open = True
        self.opened += 1
        self.flush_input()

    def close(self) -> None:
        self._is_open = False

    def _need_open(self) -> None:
        self.clock.sleep(CALL_S)
        if not self._is_open:
            raise LinkError(f"{self.name}: got a call while closed, need open() first")
        if not self.plugged:
            raise LinkError(f"{self.name}: the port has gone (adapter unplugged?)")

    def write(self, data: bytes, until_s: float) -> None:
        self._need_open()
        for delay_s, answer in self._far_end(data):
            self.say(delay_s, answer)

    def read(self, most: int, until_s: float) -> bytes:
        self._need_open()
        now_s = self.clock.now_s()
        if not self._coming or self._coming[0][0] > max(now_s, until_s):
            self.clock.sleep(until_s - now_s)
            return b""
        self.clock.sleep(self._coming[0][0] - now_s)
        return self._take(most)

    def flush_input(self) -> int:
        self._need_open()
        return len(self._take(1 << 20))

    def _take(self, most: int) -> bytes:
        now_s = self.clock.now_s()
        data = b""
        while self._coming and self._coming[0][0] <= now_s and len(data) < most:
            when_s, _, arrived = heapq.heappop(self._coming)
            room = most - len(data)
            if len(arrived) > room:
                heapq.heappush(self._coming, (when_s, -1, arrived[room:]))
            data += arrived[:room]
        return data
