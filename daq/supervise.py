"""Readiness and watchdog: the service manager hears only what a supervisor saw for itself.

A ping that a loop sends proves only that loop. Here the supervisor looks at the turn counters of
every critical loop and pings only when each has moved within the time it is allowed.
"""

from __future__ import annotations

import contextlib
import os
import select
import signal
import socket
import time
from collections.abc import Callable
from dataclasses import dataclass
from types import FrameType, TracebackType
from typing import Any, Final, Self

NOTIFY_S: Final = 1.0
"""A manager that does not read must not hold up whoever tells it: its queue holds about ten messages."""


def notify(text: str) -> bool:
    """Send ``text`` to the service manager (the sd_notify protocol); False where there is none."""
    address = os.environ.get("NOTIFY_SOCKET", "")
    if not address:
        return False
    if address.startswith("@"):
        address = "\0" + address[1:]  # a socket of the abstract name space
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as s:
        s.settimeout(NOTIFY_S)
        try:
            s.connect(address)
            s.sendall(text.encode())
        except OSError:
            return False
    return True


EXTEND_S: Final = 120.0
"""How long the next step of a rebuild may take before the service manager may call the start failed [s]:
a block of 4096 scans takes a second or two, on a slow machine twenty."""
TOLD_EVERY_S: Final = 2.0


class Rebuilding:
    """Asks the service manager for more time while a start replays the record, and only while it moves.

    ``reached`` is called with each fact replayed, and never otherwise: a rebuild that hangs is ended by
    the service manager as any start that hangs.
    """

    def __init__(self, last_seq: int, clock: Callable[[], float] = time.monotonic) -> None:
        self._last_seq = last_seq
        self._clock = clock
        self._seq = 0
        self._told_at = clock()

    def reached(self, seq: int) -> None:
        """Say that facts up to number ``seq`` are replayed."""
        now = self._clock()
        if seq <= self._seq or now - self._told_at < TOLD_EVERY_S:
            return
        self._seq, self._told_at = seq, now
        share = 100.0 * seq / max(seq, self._last_seq)
        notify(
            f"EXTEND_TIMEOUT_USEC={EXTEND_S * 1e6:.0f}\n"
            f"STATUS=rebuilding from the record: fact {seq} of {self._last_seq} ({share:.0f} %)"
        )


@dataclass
class Loop:
    """One critical loop: how to read its turn counter, and how long a turn may take [s]."""

    name: str
    beat: Callable[[], int]
    longest_s: float
    vital: bool = True
    last: int = -1
    moved_at: float = 0.0
    stalled: bool = False


class Supervisor:
    """Watches loops; ``look`` is called about once a second from the main thread."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._loops: list[Loop] = []

    def watch(self, name: str, beat: Callable[[], int], longest_s: float, *, vital: bool = True) -> None:
        """Add a loop to those that must move. One that is not ``vital`` is told, but stops no ping."""
        self._loops.append(Loop(name, beat, longest_s, vital, moved_at=self._clock()))

    def look(self) -> list[tuple[str, bool]]:
        """Return news as (loop, stalled), and ping the watchdog when every vital loop has moved in time."""
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
        if not any(loop.stalled and loop.vital for loop in self._loops):
            notify("WATCHDOG=1")
        return news


class Signals:
    """SIGTERM and SIGINT as a flag that can be waited for; SIGHUP asks for a reload. For the main thread.

    The handler takes no lock: one that sets an event would block for ever when it interrupts the
    wait for that event, or itself, as happens when signals come in a storm.
    """

    def __init__(self) -> None:
        self.came = False
        self._reload = False

    def __enter__(self) -> Self:
        self._read, self._write = os.pipe()
        os.set_blocking(self._read, False)
        os.set_blocking(self._write, False)
        self._fd = signal.set_wakeup_fd(self._write, warn_on_full_buffer=False)
        self._before: dict[int, Any] = {}
        for number in (signal.SIGTERM, signal.SIGINT):
            self._before[number] = signal.signal(number, self._on)
        # a closed terminal sends it too: it must not end a six-month test
        self._before[signal.SIGHUP] = signal.signal(signal.SIGHUP, self._on_reload)
        return self

    def _on(self, number: int, frame: FrameType | None) -> None:
        self.came = True

    def _on_reload(self, number: int, frame: FrameType | None) -> None:
        self._reload = True

    def take_reload(self) -> bool:
        """Return whether a reload was asked for since the last call; however often is once."""
        asked, self._reload = self._reload, False
        return asked

    def wait(self, timeout_s: float) -> bool:
        """Wait for a signal for at most ``timeout_s``; return whether the end was ever asked for."""
        if not self.came:
            select.select([self._read], [], [], timeout_s)
            with contextlib.suppress(BlockingIOError):
                os.read(self._read, 4096)
        return self.came

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number, handler in self._before.items():
            # once the end was asked for, asking again must not cut it short
            signal.signal(number, signal.SIG_IGN if self.came else handler)
        signal.set_wakeup_fd(self._fd)
        os.close(self._read)
        os.close(self._write)
