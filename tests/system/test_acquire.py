"""Polling and the assembly of scans: what is missing is missing, what hangs harms no other."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import pytest

from daq.acquire import Assembler, Bus, Layout, Polled, Polling
from daq.records import TICKS_PER_S, Quality, ScansTaken, Stamp
from drivers.base import GOOD, OVERLOAD, Identity, IdentityError, LinkError, RawReading, no_reading

PERIOD = 10 * TICKS_PER_S
LAYOUT = Layout("H1", ("left", "mid"), (("gauge", "d1"), ("scanner", "101")), PERIOD)


def _polled(name: str, instant: int, *readings: RawReading) -> Polled:
    return Polled(name, instant, Stamp(instant + 50, instant + 7, "b"), readings)


@pytest.fixture
def scans() -> list[ScansTaken]:
    return []


@pytest.fixture
def assembler(scans: list[ScansTaken]) -> Assembler:
    return Assembler([LAYOUT], scans.append)


def test_a_scan_leaves_when_its_last_instrument_has_answered(
    assembler: Assembler, scans: list[ScansTaken]
) -> None:
    """No timer delays a complete scan."""
    assembler.deliver(_polled("gauge", PERIOD, RawReading("d1", 1.25)))
    assert scans == []
    assembler.deliver(_polled("scanner", PERIOD, no_reading("101", OVERLOAD)))
    (scan,) = scans
    assert scan.channels == ("left", "mid")
    assert scan.values[0, 0] == 1.25
    assert np.isnan(scan.values[0, 1])
    assert scan.quality.tolist() == [[Quality.GOOD, Quality.BAD_OVERLOAD]]


def test_what_does_not_answer_is_missing_and_never_carried_over(
    assembler: Assembler, scans: list[ScansTaken]
) -> None:
    """The last value of a dead instrument would look like a perfectly steady specimen."""
    for k in (1, 2):
        assembler.deliver(_polled("gauge", k * PERIOD, RawReading("d1", float(k))))
        if k == 1:
            assembler.deliver(_polled("scanner", PERIOD, RawReading("101", 980.0)))
    assembler.overdue(2 * PERIOD, Stamp(0, 2 * PERIOD, "b"))
    assert [s.values[0, 0] for s in scans] == [1.0, 2.0]
    assert scans[1].quality.tolist() == [[Quality.GOOD, Quality.BAD_LINK]]


def test_an_answer_after_its_scan_was_closed_is_not_put_into_the_next(
    assembler: Assembler, scans: list[ScansTaken]
) -> None:
    """A late number belongs to its own instant or to none."""
    assembler.deliver(_polled("gauge", PERIOD, RawReading("d1", 1.0)))
    assembler.overdue(PERIOD, Stamp(0, PERIOD, "b"))
    assembler.deliver(_polled("scanner", PERIOD, RawReading("101", 980.0)))
    assembler.deliver(_polled("gauge", 2 * PERIOD, RawReading("d1", 2.0)))
    assembler.overdue(2 * PERIOD, Stamp(0, 2 * PERIOD, "b"))
    assert [bool(np.isnan(s.values[0, 1])) for s in scans] == [True, True]


def test_a_frame_whose_buses_all_fell_silent_still_says_so(
    assembler: Assembler, scans: list[ScansTaken]
) -> None:
    """Scheduled = stored + explained: silence is a scan of missing readings."""
    assembler.deliver(_polled("gauge", PERIOD, RawReading("d1", 1.0)))
    assembler.deliver(_polled("scanner", PERIOD, RawReading("101", 980.0)))
    assembler.overdue(2 * PERIOD + 5, Stamp(9, 2 * PERIOD + 5, "b"))
    assert len(scans) == 2
    assert scans[1].quality.tolist() == [[Quality.BAD_LINK, Quality.BAD_LINK]]


def test_an_instrument_polled_oftener_than_the_frame_wants_gives_the_instants_wanted(
    assembler: Assembler, scans: list[ScansTaken]
) -> None:
    """A shared scanner may serve a faster neighbour too."""
    for instant in (PERIOD // 2, PERIOD):
        assembler.deliver(_polled("gauge", instant, RawReading("d1", instant / PERIOD)))
    assembler.deliver(_polled("scanner", PERIOD, RawReading("101", 980.0)))
    assert [s.values[0, 0] for s in scans] == [1.0]


class FastClock:
    """A clock that runs a thousand times real time."""

    speed = 1000.0

    def stamp(self) -> Stamp:
        tick = int(time.monotonic() * self.speed * TICKS_PER_S)
        return Stamp(tick, tick, "fast")

    def wait_until(self, boot_tick: int, stop: threading.Event) -> bool:
        left = (boot_tick - self.stamp().boot_tick) / TICKS_PER_S / self.speed
        return stop.wait(left) if left > 0 else stop.is_set()


class Gauge:
    """A driver whose mood is set by the test; counts what was opened and closed."""

    yields = ("d1",)
    listens = False
    open_now = 0

    def __init__(self, mood: Callable[[], str]) -> None:
        self._mood = mood

    def open(self) -> None:
        if self._mood() == "refuse":
            raise LinkError("gauge: port gone")
        Gauge.open_now += 1

    def identify(self) -> Identity:
        if self._mood() == "stranger":
            raise IdentityError("gauge: got B, wanted A")
        return Identity("A")

    def poll(self, deadline_s: float) -> list[RawReading]:
        if self._mood() != "well":
            raise LinkError(f"gauge: no answer in {deadline_s} s")
        return [RawReading("d1", 1.0, GOOD)]

    def close(self) -> None:
        Gauge.open_now = max(0, Gauge.open_now - 1)


def _run(moods: Mapping[int, str]) -> tuple[list[Polled], list[tuple[str, bool]]]:
    """Run a bus until it has delivered 60 instants, changing mood at the instants given."""
    got: list[Polled] = []
    news: list[tuple[str, bool]] = []
    stop = threading.Event()

    def mood() -> str:
        return moods[max(k for k in moods if k <= len(got))]

    def deliver(p: Polled) -> None:
        got.append(p)
        if len(got) >= 60:
            stop.set()

    def tell(name: str, condition: str, active: bool, message: str) -> None:
        assert message
        news.append((condition, active))

    def make() -> Any:
        return Gauge(mood)

    Bus("port", [Polling("gauge", make, PERIOD)], FastClock(), deliver, tell).run(stop)
    return got, news


def test_a_link_that_fails_and_returns_is_told_once_each_way() -> None:
    """Flapping news would be an alarm storm; silence would hide a dead extensometer."""
    got, news = _run({0: "well", 10: "silent", 14: "well"})
    assert [n for n in news if n[0] == "link_lost"] == [("link_lost", True), ("link_lost", False)]
    assert all(p.readings is None for p in got[10:14])
    assert got[-1].readings is not None
    assert Gauge.open_now == 0


def test_a_stranger_on_the_port_is_refused_and_named() -> None:
    """No reading of another instrument may enter the record."""
    got, news = _run({0: "stranger"})
    assert news[0] == ("identity_wrong", True)
    assert all(p.readings is None and p.why is Quality.BAD_IDENTITY for p in got[:1])
    assert all(p.readings is None for p in got)


def test_a_bug_of_a_driver_is_a_lost_link_not_the_end_of_its_bus() -> None:
    """The thread once died, and with it every instrument on the same line."""
    moods = {0: "well", 5: "bug", 9: "well"}
    real = Gauge.poll

    def poll(self: Gauge, deadline_s: float) -> list[RawReading]:
        if self._mood() == "bug":
            raise IndexError("list index out of range")
        return real(self, deadline_s)

    with pytest.MonkeyPatch.context() as patched:
        patched.setattr(Gauge, "poll", poll)
        got, news = _run(moods)
    assert len(got) == 60
    assert news[:2] == [("link_lost", True), ("link_lost", False)]
    assert got[-1].readings is not None


def test_a_link_that_was_lost_before_the_start_is_told_when_it_answers() -> None:
    """The alarm in the record would else stand for ever: the new thread never saw the link lost."""
    news: list[tuple[str, bool]] = []
    stop = threading.Event()
    polling = Polling("gauge", lambda: Gauge(lambda: "well"), PERIOD, lost=True)
    Bus(
        "port", [polling], FastClock(), lambda p: stop.set(), lambda n, c, active, m: news.append((c, active))
    ).run(stop)
    assert ("link_lost", False) in news


def test_what_a_hung_call_returns_after_its_bus_was_abandoned_is_not_taken() -> None:
    """A fresh thread polls the same instrument by then; one number must not enter twice."""
    got: list[Polled] = []
    hangs, goes_on = threading.Event(), threading.Event()

    class Hung(Gauge):
        def poll(self, deadline_s: float) -> list[RawReading]:
            hangs.set()
            goes_on.wait(5.0)
            return [RawReading("d1", 1.0, GOOD)]

    bus = Bus(
        "port", [Polling("gauge", lambda: Hung(lambda: "well"), PERIOD)], FastClock(), got.append,
        lambda *news: None,
    )  # fmt: skip
    thread = threading.Thread(target=bus.run, args=(threading.Event(),))
    thread.start()
    assert hangs.wait(5.0)
    bus.abandon()
    goes_on.set()
    thread.join(5.0)
    assert not thread.is_alive()
    assert got == []
    assert Gauge.open_now == 0


def test_a_scan_waits_for_the_last_instrument_of_a_slow_bus_and_no_longer(scans: list[ScansTaken]) -> None:
    """Three slow instruments on one line take longer than a period: the third was left out of every scan."""
    layout = Layout("H1", LAYOUT.columns, LAYOUT.sources, PERIOD, late_ticks=2 * PERIOD)
    slow = Assembler([layout], scans.append)
    slow.deliver(_polled("gauge", PERIOD, RawReading("d1", 1.0)))
    slow.overdue(3 * PERIOD - 1, Stamp(3 * PERIOD, 3 * PERIOD, "b"))
    assert scans == []
    slow.deliver(_polled("scanner", PERIOD, RawReading("101", 980.0)))
    assert scans[0].values.tolist() == [[1.0, 980.0]]
    slow.deliver(_polled("gauge", 2 * PERIOD, RawReading("d1", 2.0)))
    slow.overdue(4 * PERIOD, Stamp(4 * PERIOD, 4 * PERIOD, "b"))
    assert len(scans) == 2


def test_a_scan_of_silence_is_dated_by_its_instant(assembler: Assembler, scans: list[ScansTaken]) -> None:
    """Dated by when it was noticed it could come after the scan that follows it."""
    assembler.deliver(_polled("gauge", PERIOD, RawReading("d1", 1.0)))
    assembler.deliver(_polled("scanner", PERIOD, RawReading("101", 980.0)))
    assembler.overdue(2 * PERIOD + 777, Stamp(10**6 + 2 * PERIOD + 777, 2 * PERIOD + 777, "b"))
    assert scans[1].boot_tick.tolist() == [2 * PERIOD]
    assert scans[1].utc_tick.tolist() == [10**6 + 2 * PERIOD]
