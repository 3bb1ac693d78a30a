"""Readiness and watchdog: the service manager hears only what a supervisor saw for itself.

A ping that a loop sends proves only that loop. Here the supervisor looks at the turn counters of
every critical loop and pings only when each has moved within the time it is allowed.
"""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Callable
from dataclasses import dataclass


def notify(text: str) -> bool:
    """Send ``text`` to the service manager (the sd_notify protocol); False where there is none."""
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address:
        return False
    if address.startswith("@"):
        address = "\0" + address[1:]  # a socket of the abstract name space
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as s:
        try:
            s.connect(address)
            s.sendall(text.encode())
        except OSError:
            return False
    return True


@dataclass
class Loop:
    """One critical loop: how to read its turn counter, and how long a turn may take [s]."""

    name: str
    beat: Callable[[], int]
    longest_s: float
    last: int = -1
    moved_at: float = 0.0
    stalled: bool = False


class Supervisor:
    """Watches loops; ``look`` is called about once a second from the main thread."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._loops: list[Loop] = []

    def watch(self, name: str, beat: Callable[[], int], longest_s: float) -> None:
        """Add a loop to those that must move."""
        self._loops.append(Loop(name, beat, longest_s, moved_at=self._clock()))

    def look(self) -> list[tuple[str, bool]]:
        """Return news as (loop, stalled), and ping the watchdog when every loop has moved in time."""
        now = self._clock()
        news = []
        for loop in self._loops:
            beat = loop.beat()
            if beat != loop.last:
                loop.last, loop.moved_at = beat, now
            stalled = now - loop.moved_at > loop.longest_s
            if stalled != loop.stalled:
                loop.stalled = stalled
                news.append((loop.name, stalled))
        if not any(loop.stalled for loop in self._loops):
            notify("WATCHDOG=1")
        return news
