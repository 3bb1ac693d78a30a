"""Polling: one supervised thread per bus, and the assembly of scans.

A *bus* is what instruments share and must take turns on (a serial port, one socket). Each has
a thread of its own, so a bus that hangs or backs off costs its neighbours nothing. All buses
poll on one grid of instants (multiples of the period since the boot clock's zero), and a frame's scan
is put together from the readings of one instant: complete when every instrument of the frame has
answered, and sent without the missing ones when its time is up.
"""

from __future__ import annotations

import contextlib
import math
import random
import threading
from collections import defaultdict
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from daq.clock import Clock
from daq.records import TICKS_PER_S, Quality, ScansTaken, Stamp
from drivers import base
from drivers.base import Driver, DriverError, IdentityError, LinkError, RawReading

BACKOFF_LEAST_S: Final = 0.1
BACKOFF_LINK_S: Final = 2.0
"""Longest pause before a dead link is tried again: a re-plugged adapter is to be back within 3 s."""
BACKOFF_IDENTITY_S: Final = 60.0
"""Longest pause before a wrong instrument is asked again: only a person can put that right."""
POLL_SHARE: Final = 0.9
"""Share of the period that one poll may take; the rest is room for the next instant to begin on time."""
POLL_LEAST_S: Final = 1.0
POLL_MOST_S: Final = 5.0
"""Bounds of the time one poll may take [real s]. A slow answer costs instants of its own bus, which are
then missing; it is not worth calling a link lost for."""
LOST_AFTER: Final = 2
"""Instants in a row without an answer after which a link counts as lost."""

_QUALITY: Final = {
    base.GOOD: Quality.GOOD,
    base.MISSING: Quality.BAD_MISSING,
    base.GARBLED: Quality.BAD_GARBLED,
    base.OVERLOAD: Quality.BAD_OVERLOAD,
    base.NOT_A_NUMBER: Quality.BAD_NOT_A_NUMBER,
    base.OPEN_CIRCUIT: Quality.BAD_OPEN_CIRCUIT,
}


@dataclass(frozen=True, slots=True)
class Polled:
    """What one instrument gave for one instant of the grid; ``readings`` None when the link failed."""

    instrument: str
    instant: int
    stamp: Stamp
    readings: Sequence[RawReading] | None
    why: Quality = Quality.BAD_LINK


@dataclass(frozen=True, slots=True)
class Layout:
    """How a frame's scan is put together: column by column, (instrument, reading).

    ``late_ticks``: how long beyond its instant a scan waits for an instrument. It must cover a whole turn of
    the slowest bus: what came later would be left out of every scan, with the link in perfect order.
    """

    frame: str
    columns: tuple[str, ...]
    sources: tuple[tuple[str, str], ...]
    period_ticks: int
    late_ticks: int = 0

    @property
    def instruments(self) -> frozenset[str]:
        return frozenset(instrument for instrument, _ in self.sources)


class Assembler:
    """Puts readings of one instant together into scans. Owns no clock and no thread.

    ``deliver`` may be called from any bus thread; a finished scan leaves through ``emit``.
    An instant is closed when it is complete, or when every later word shows that it will
    not be: as soon as an instrument delivers for the next instant, or ``overdue`` says so.
    """

    def __init__(self, layouts: Sequence[Layout], emit: Callable[[ScansTaken], None]) -> None:
        self._layouts = layouts
        self._by_instrument: dict[str, list[Layout]] = defaultdict(list)
        for layout in layouts:
            for name in layout.instruments:
                self._by_instrument[name].append(layout)
        self._open: dict[str, dict[int, dict[str, Polled]]] = {layout.frame: {} for layout in layouts}
        self._closed: dict[str, int] = {layout.frame: -1 for layout in layouts}
        self._emit = emit
        self._lock = threading.Lock()

    def deliver(self, polled: Polled) -> None:
        """Take one instrument's answer for one instant."""
        with self._lock:
            for layout in self._by_instrument.get(polled.instrument, ()):
                if polled.instant % layout.period_ticks or polled.instant <= self._closed[layout.frame]:
                    continue  # polled more often than this frame wants, or too late for its scan
                waiting = self._open[layout.frame]
                waiting.setdefault(polled.instant, {})[polled.instrument] = polled
                if len(waiting[polled.instant]) == len(layout.instruments):
                    self._close(layout, polled.instant)

    def overdue(self, now: int, stamp: Stamp) -> None:
        """Close what has waited long enough at ``now`` [boot ticks]; what is not there is missing."""
        with self._lock:
            for layout in self._layouts:
                before = now - layout.late_ticks
                waiting = self._open[layout.frame]
                late = [instant for instant in sorted(waiting) if instant <= before]
                if late:
                    self._close(layout, late[-1])
                    continue
                due = before - before % layout.period_ticks
                if not waiting and due > self._closed[layout.frame] >= 0:
                    # no bus of this frame said a word for a whole period: that is a fact as well
                    at = Stamp(stamp.utc_tick - (stamp.boot_tick - due), due, stamp.boot_id)
                    waiting[due] = {"": Polled("", due, at, None)}
                    self._close(layout, due)

    def _close(self, layout: Layout, instant: int) -> None:
        waiting = self._open[layout.frame]
        for due in sorted(i for i in waiting if i <= instant):
            self._emit(_scan(layout, waiting.pop(due)))
        self._closed[layout.frame] = instant


def _scan(layout: Layout, polled: Mapping[str, Polled]) -> ScansTaken:
    values = np.full((1, len(layout.columns)), np.nan)
    quality = np.full((1, len(layout.columns)), int(Quality.BAD_LINK), np.uint8)
    found = {
        name: {r.name: r for r in p.readings} if p.readings is not None else p.why
        for name, p in polled.items()
    }
    for j, (instrument, reading) in enumerate(layout.sources):
        given = found.get(instrument)
        if isinstance(given, dict):
            r = given.get(reading)
            quality[0, j] = Quality.BAD_MISSING if r is None else _QUALITY[r.quality]
            values[0, j] = math.nan if r is None else r.value
        elif given is not None:
            quality[0, j] = given
    answered = [p.stamp for p in polled.values() if p.readings is not None] or [
        p.stamp for p in polled.values()
    ]
    utc = sum(s.utc_tick for s in answered) // len(answered)
    boot = sum(s.boot_tick for s in answered) // len(answered)
    return ScansTaken(
        layout.frame, layout.columns, answered[0].boot_id,
        np.array([utc], np.int64), np.array([boot], np.int64), values, quality,
    )  # fmt: skip


@dataclass
class Polling:
    """One instrument on a bus: how to make its driver, and how often to ask."""

    name: str
    make: Callable[[], Driver]
    period_ticks: int
    driver: Driver | None = None
    failures: int = 0
    missed: int = 0
    lost: bool = False
    retry_at: int = 0


LinkNews = Callable[[str, str, bool, str], None]
"""(instrument, condition, active, message): link_lost and identity_wrong."""


class Bus:
    """The poll loop of one bus. ``run`` is the body of its thread; ``beat`` counts its turns."""

    def __init__(
        self,
        name: str,
        polled: Sequence[Polling],
        clock: Clock,
        deliver: Callable[[Polled], None],
        news: LinkNews,
        seed: int = 0,
    ) -> None:
        self.name = name
        self.beat = 0
        self.abandoned = False
        self.worst_late_s = 0.0
        self.polled = list(polled)
        self._clock = clock
        self._deliver = deliver
        self._news = news
        self._jitter = random.Random(f"{name}/{seed}")

    @property
    def longest_turn_s(self) -> float:
        """Real seconds after which a turn of this loop is overdue beyond doubt."""
        period = max(p.period_ticks for p in self.polled) / TICKS_PER_S / self._clock.speed
        return period + len(self.polled) * (POLL_MOST_S + 1.0) + 5.0

    @property
    def polls_s(self) -> float:
        """Real seconds that a turn may take while every link is in order."""
        return sum(self._most_s(p) for p in self.polled)

    def _most_s(self, p: Polling) -> float:
        return max(
            POLL_LEAST_S, min(POLL_MOST_S, POLL_SHARE * p.period_ticks / TICKS_PER_S / self._clock.speed)
        )

    def abandon(self) -> None:
        """Say no more, whatever a call that hangs may yet return; the thread ends when it does."""
        self.abandoned = True

    def run(self, stop: threading.Event) -> None:
        """Poll until ``stop`` is set; drivers are closed on the way out, whatever happens."""
        try:
            while not (stop.is_set() or self.abandoned):
                now = self._clock.stamp().boot_tick
                instant = min(now - now % p.period_ticks + p.period_ticks for p in self.polled)
                if self._clock.wait_until(instant, stop):
                    break
                self.worst_late_s = max(self.worst_late_s, self._late_s(instant))
                for p in self.polled:
                    if instant % p.period_ticks == 0 and not (stop.is_set() or self.abandoned):
                        self._turn(p, instant)
                self.beat += 1
        finally:
            for p in self.polled:
                _close(p)

    def _late_s(self, instant: int) -> float:
        return (self._clock.stamp().boot_tick - instant) / TICKS_PER_S / self._clock.speed

    def _turn(self, p: Polling, instant: int) -> None:
        if instant < p.retry_at:
            self._missed(p, instant, Quality.BAD_LINK, "not tried again yet")
            return
        try:
            if p.driver is None:
                p.driver = p.make()
                p.driver.open()
                p.driver.identify()
            before = self._clock.stamp()
            readings = p.driver.poll(self._most_s(p))
        except DriverError as error:
            self._failed(p, instant, error)
            return
        except Exception as error:  # a driver's bug must not end the thread of all that share its bus
            self._failed(p, instant, LinkError(f"fault of the driver: {type(error).__name__}: {error}"))
            return
        if self.abandoned:
            return
        after = self._clock.stamp()
        if p.lost:
            self._news(p.name, "link_lost", False, "answers again")
            self._news(p.name, "identity_wrong", False, "the configured instrument answers")
        p.failures, p.missed, p.lost, p.retry_at = 0, 0, False, 0
        # the reading belongs to the middle of the exchange, to within half its length
        middle = (after.boot_tick + before.boot_tick) // 2
        stamp = Stamp(after.utc_tick - (after.boot_tick - middle), middle, after.boot_id)
        self._deliver(Polled(p.name, instant, stamp, readings))

    def _failed(self, p: Polling, instant: int, error: DriverError) -> None:
        if self.abandoned:
            return
        p.failures += 1
        wrong = isinstance(error, IdentityError)
        if wrong or isinstance(error, LinkError) or p.failures >= LOST_AFTER:
            _close(p)
        if wrong or p.failures >= LOST_AFTER:
            most = BACKOFF_IDENTITY_S if wrong else BACKOFF_LINK_S
            pause = min(most, BACKOFF_LEAST_S * 2.0 ** min(p.failures, 16)) * self._jitter.uniform(0.5, 1.0)
            p.retry_at = instant + int(pause * TICKS_PER_S * self._clock.speed)
        if wrong and not p.lost:
            p.lost = True
            self._news(p.name, "identity_wrong", True, str(error))
        self._missed(p, instant, Quality.BAD_IDENTITY if wrong else Quality.BAD_LINK, str(error))

    def _missed(self, p: Polling, instant: int, why: Quality, message: str) -> None:
        """Say that there is no reading for this instant; the second in a row makes the link lost."""
        p.missed += 1
        if p.missed >= LOST_AFTER and not p.lost:
            p.lost = True
            self._news(p.name, "link_lost", True, message)
        self._deliver(Polled(p.name, instant, self._clock.stamp(), None, why))


def _close(p: Polling) -> None:
    if p.driver is not None:
        with contextlib.suppress(Exception):  # a port that cannot be closed is gone; the next open says so
            p.driver.close()
        p.driver = None
