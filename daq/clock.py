"""The clocks of the house, behind one small interface so that tests and the bench can turn them.

``boot_tick`` counts through suspend and knows no summer time: all waiting and all
intervals use it. UTC is stamped beside it, for people.
"""

from __future__ import annotations

import json
import os
import threading
import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Protocol

from daq.records import TICKS_PER_S, Stamp

NS_PER_TICK = 1_000_000_000 // TICKS_PER_S
PAUSE_NS = 5_000_000_000
"""From this real time on a bench that was away counts as switched off, not as restarted."""
_BOOT_CLOCK = getattr(time, "CLOCK_BOOTTIME", time.CLOCK_MONOTONIC)


class Clock(Protocol):
    """What the live house asks of time. ``speed`` is lab seconds per real second."""

    speed: float

    def stamp(self) -> Stamp: ...
    def wait_until(self, boot_tick: int, stop: threading.Event) -> bool: ...


def boot_id() -> str:
    """Return the kernel's name for this boot, or one of our own where there is none.

    Without a name from the kernel a restart of the program counts as a reboot: lab time is
    then bridged by UTC, which is right whenever UTC is.
    """
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return f"process-{os.getpid()}-{time.time_ns()}"


class RealClock:
    """The machine's own clocks."""

    speed = 1.0

    def __init__(self) -> None:
        self._boot_id = boot_id()

    def stamp(self) -> Stamp:
        return Stamp(
            time.time_ns() // NS_PER_TICK, time.clock_gettime_ns(_BOOT_CLOCK) // NS_PER_TICK, self._boot_id
        )

    def wait_until(self, boot_tick: int, stop: threading.Event) -> bool:
        """Sleep until ``boot_tick``; return True if ``stop`` was set meanwhile."""
        left = boot_tick - time.clock_gettime_ns(_BOOT_CLOCK) // NS_PER_TICK
        return stop.wait(left / TICKS_PER_S) if left > 0 else stop.is_set()


@dataclass(frozen=True)
class Origin:
    """Where a bench's time began: real boot time, the UTC it pretends, and how fast it runs."""

    boot_id: str
    boot_ns: int
    utc_ns: int
    speed: float

    @classmethod
    def keep(cls, path: Path, speed: float) -> Origin:
        """Return the origin kept at ``path``, or begin one now; a restart goes on in the same time.

        While a bench is switched off its specimens rest: after a pause (the file's own time says when it
        was last marked) lab time goes on where it stood, later by the pause itself and no more.
        """
        now, new = boot_id(), None
        try:
            old = cls(**json.loads(path.read_text(encoding="utf-8")))
            if old.boot_id == now and old.speed == speed:
                away_ns = time.time_ns() - path.stat().st_mtime_ns
                if away_ns < PAUSE_NS:
                    return old
                new = replace(old, boot_ns=old.boot_ns + int(away_ns * (1.0 - 1.0 / speed)))
        except (OSError, ValueError, TypeError):
            pass
        new = new or cls(now, time.clock_gettime_ns(_BOOT_CLOCK), time.time_ns(), speed)
        path.write_text(json.dumps(new.__dict__), encoding="utf-8")
        return new


class BenchClock:
    """Lab time that runs ``speed`` times as fast as real time; only for emulated instruments."""

    def __init__(self, origin: Origin) -> None:
        self._origin = origin
        self.speed = origin.speed

    def _lab_ns(self) -> int:
        """Lab nanoseconds since the origin, as whole ticks of the boot clock."""
        return int((time.clock_gettime_ns(_BOOT_CLOCK) - self._origin.boot_ns) * self.speed)

    def stamp(self) -> Stamp:
        lab = self._lab_ns()
        # another origin is another boot: its count begins at zero again
        boot = f"bench-{self._origin.boot_id}-{self._origin.boot_ns}"
        return Stamp((self._origin.utc_ns + lab) // NS_PER_TICK, lab // NS_PER_TICK, boot)

    def wait_until(self, boot_tick: int, stop: threading.Event) -> bool:
        """Sleep (in real time) until lab time is ``boot_tick``; return True if ``stop`` was set."""
        left = (boot_tick - self._lab_ns() // NS_PER_TICK) / TICKS_PER_S / self.speed
        return stop.wait(left) if left > 0 else stop.is_set()
