"""check_driver(): what every driver, ours or not, must hold to.

It needs nothing but this package, so that it can be called from any test of any driver::

    from drivers.checks import check_driver
    check_driver(lambda: MyGauge(OPTIONS), my_peer)

``my_peer`` plays the far end and can misbehave on demand (class ``Peer``). It numbers what it says, so
that a reading can be traced to the very answer it came from: an answer that belongs to another channel,
or to an earlier poll, is found out. Raises ConformanceError (an AssertionError) that names the broken
promise; returns the list of promises that were tried.
"""

from __future__ import annotations

import math
import os
import random
import time
from collections.abc import Callable, Collection, Sequence
from dataclasses import dataclass, field
from typing import Final, Protocol

from drivers.base import (
    GOOD,
    QUALITIES,
    Driver,
    DriverError,
    Identity,
    IdentityError,
    LinkError,
    RawReading,
)
from drivers.transport import Clock, SystemClock

BEHAVIOURS: Final = {
    "well": "answers as it should",
    "silent": "says nothing",
    "late": "answers after the driver's time-out but within its longest reply time",
    "twice": "answers twice, the second time before the next question",
    "reordered": "keeps an answer back and sends it with the next one, before or behind that",
    "babbling": "sends bytes without end that are no answer",
    "garbled": "answers with damage that the protocol can see",
    "cut": "stops in the middle of an answer",
    "drip": "sends its answer a byte at a time, slower than the time-out allows",
    "no_number": "answers with what stands for overload or not-a-number",
    "stranger": "answers well, but is another instrument",
    "gone": "the port vanishes, or the connection breaks and is refused",
}
"""What a peer may be told to do; ``well`` and ``silent`` it must be able to do."""
NO_VALUE: Final = frozenset({"silent", "babbling", "garbled", "cut", "drip", "no_number", "gone"})
"""Behaviours after which no reading of that poll can be good (in a driver that asks)."""


class Peer(Protocol):
    """The far end of the wire, for check_driver."""

    can: frozenset[str]
    """Which of BEHAVIOURS it can show."""

    def behave(self, how: str) -> None:
        """From now on behave like this."""
        ...

    def begin_poll(self) -> None:
        """A poll begins: forget what was owed (a talker: what was said before the poll before this one)."""
        ...

    def owed(self, name: str) -> Collection[float]:
        """Numbers that a good reading of ``name`` may have in the poll that was begun last."""
        ...


class ConformanceError(AssertionError):
    """A driver broke a promise of the contract."""


@dataclass
class _Trial:
    make: Callable[[], Driver]
    peer: Peer
    deadline_s: float
    pause_s: float
    slack_s: float
    patience_s: float
    clock: Clock
    tried: list[str] = field(default_factory=list)

    def promise(self, kept: bool, what: str, detail: object = "") -> None:
        if not kept:
            raise ConformanceError(f"{what}: {detail}" if detail != "" else what)
        if what not in self.tried:
            self.tried.append(what)

    def timed(self, call: Callable[[], object], most_s: float, what: str) -> object:
        started_s = self.clock.now_s()
        try:
            return call()
        finally:
            took_s = self.clock.now_s() - started_s
            self.promise(took_s <= most_s + self.slack_s, what, f"took {took_s:.3f} s, allowed {most_s:g} s")

    def start(self, driver: Driver) -> Identity:
        self.timed(driver.open, self.patience_s, "open returns in bounded time")
        found = self.timed(driver.identify, self.patience_s, "identify returns in bounded time")
        self.promise(isinstance(found, Identity) and bool(found.text), "identify returns an Identity", found)
        assert isinstance(found, Identity)
        return found

    def poll(self, driver: Driver) -> list[RawReading]:
        self.peer.begin_poll()
        call = lambda: driver.poll(self.deadline_s)  # noqa: E731
        readings = self.timed(call, self.deadline_s, "poll keeps its deadline")
        fits = isinstance(readings, list) and all(isinstance(r, RawReading) for r in readings)
        self.promise(fits, "poll returns a list of RawReading", readings)
        assert isinstance(readings, list)
        names = tuple(r.name for r in readings)
        self.promise(
            names == driver.yields, "poll returns exactly the yields, in order", (names, driver.yields)
        )
        for r in readings:
            self.promise(r.quality in QUALITIES, "a quality is one of the agreed words", r)
            self.promise(
                (r.quality == GOOD) == math.isfinite(r.value), "NaN is never good, bad is always NaN", r
            )
            if r.quality == GOOD:
                owed = list(self.peer.owed(r.name))
                near = any(math.isclose(r.value, x, rel_tol=1e-6, abs_tol=1e-9) for x in owed)
                self.promise(near, "a value is the answer to this question of this poll", (r, owed))
        return readings

    def polls(self, driver: Driver, how: str, times: int) -> list[list[RawReading]]:
        """Poll under a behaviour, doing what the daemon does after an error."""
        done = []
        for _ in range(times):
            try:
                done.append(self.poll(driver))
            except DriverError:
                driver.close()
                try:
                    self.start(driver)
                except DriverError:
                    driver.close()
            self.clock.sleep(self.pause_s)
        good = [r for readings in done for r in readings if r.quality == GOOD]
        if how in NO_VALUE and not driver.listens:
            self.promise(not good, f"no value out of nothing ({how})", good)
        return done

    def recovers(self, driver: Driver, how: str, within: int) -> None:
        self.peer.behave("well")
        readings: list[RawReading] = []
        for _ in range(within):
            readings = (self.polls(driver, "well", 1) or [[]])[0]
            if readings and all(r.quality == GOOD for r in readings):
                break
        good = bool(readings) and all(r.quality == GOOD for r in readings)
        self.promise(good, f"readings come back after {how}", readings)


def check_driver(
    make_driver: Callable[[], Driver],
    peer: Peer,
    *,
    deadline_s: float = 1.0,
    pause_s: float = 0.02,
    polls: int = 4,
    recovery_polls: int = 20,
    slack_s: float = 0.25,
    patience_s: float = 10.0,
    clock: Clock | None = None,
    count_descriptors: bool = True,
    seed: int = 1,
) -> list[str]:
    """Try every promise of the contract on a driver; return those that were tried.

    Args:
        make_driver: Makes a driver for the peer; called several times. Give it short time-outs.
        deadline_s: What each poll is allowed [s]; ``pause_s`` is waited between polls.
        polls: Polls under each misbehaviour; ``recovery_polls`` are allowed until all is well again.
        slack_s: What a busy machine may add to a deadline [s].
        patience_s: Longest time for ``open`` and for ``identify`` [s].
        clock: The clock that the driver lives by; the machine's unless the port is scripted.
        count_descriptors: False where other threads open and close descriptors meanwhile.
        seed: Order of the misbehaviours in the mixed run.

    Raises:
        ConformanceError: A promise was broken; the message says which and shows what came.
        ValueError: The peer cannot behave well or be silent.
    """
    if not {"well", "silent"} <= peer.can <= BEHAVIOURS.keys():
        raise ValueError(
            f"got a peer that can {sorted(peer.can)}, need well, silent, of {sorted(BEHAVIOURS)}"
        )
    t = _Trial(
        make_driver, peer, deadline_s, pause_s, slack_s, patience_s, SystemClock() if clock is None else clock
    )
    descriptors = _descriptors()
    driver = make_driver()
    try:
        _yields(t, driver)
        _order_of_calls(t, driver, recovery_polls)
        for how in [h for h in BEHAVIOURS if h in peer.can and h not in ("well", "stranger")]:
            peer.behave(how)
            t.polls(driver, how, polls)
            t.recovers(driver, how, recovery_polls)
        _mixture(t, driver, random.Random(seed), 3 * polls, recovery_polls)
        _closing(t, driver, recovery_polls)
        if "stranger" in peer.can:
            _stranger(t, driver)
    finally:
        driver.close()
        peer.behave("well")
    if count_descriptors:
        for _ in range(100):  # a peer in this process may need a moment to see that we have gone
            if _descriptors() <= descriptors:
                break
            time.sleep(0.01)
        t.promise(_descriptors() <= descriptors, "no descriptor is left open", (descriptors, _descriptors()))
    return t.tried


def _yields(t: _Trial, driver: Driver) -> None:
    names = driver.yields
    fits = isinstance(names, tuple) and bool(names) and all(isinstance(n, str) and n for n in names)
    t.promise(fits and len(set(names)) == len(names), "yields is a tuple of different names", names)
    t.promise(t.make().yields == names, "yields is known before the port is opened, and stable", names)
    t.promise(isinstance(driver.listens, bool), "listens is true or false", driver.listens)


def _order_of_calls(t: _Trial, driver: Driver, recovery_polls: int) -> None:
    t.peer.behave("well")
    _refused(t, driver, DriverError, "poll before open is refused")
    driver.open()
    _refused(t, driver, DriverError, "poll before identify is refused")
    driver.close()
    t.start(driver)
    names = driver.yields
    good = 0
    readings: Sequence[RawReading] = ()
    for _ in range(recovery_polls):
        t.clock.sleep(t.pause_s)
        readings = t.poll(driver)
        good += all(r.quality == GOOD for r in readings)
        if good == 3:
            break
    t.promise(good == 3, "all readings are good when all is well", readings)
    t.promise(driver.yields == names, "yields does not change by polling", driver.yields)


def _refused(t: _Trial, driver: Driver, error: type[DriverError], what: str) -> None:
    try:
        readings = driver.poll(t.deadline_s)
    except error:
        t.promise(True, what)
    else:
        t.promise(False, what, readings)


def _mixture(t: _Trial, driver: Driver, rng: random.Random, times: int, within: int) -> None:
    moods = sorted(t.peer.can - {"stranger"})
    for _ in range(times):
        how = rng.choice(moods)
        t.peer.behave(how)
        t.polls(driver, "mixture", 1)
    t.recovers(driver, "a mixture of everything", within)


def _closing(t: _Trial, driver: Driver, within: int) -> None:
    driver.close()
    driver.close()
    t.promise(True, "close may be called twice")
    _refused(t, driver, DriverError, "poll after close is refused")
    t.start(driver)
    t.recovers(driver, "closing and opening again", within)
    driver.close()


def _stranger(t: _Trial, driver: Driver) -> None:
    t.peer.behave("stranger")
    try:
        found = t.start(driver)
    except IdentityError:
        t.promise(True, "another instrument is refused")
    except LinkError as error:
        t.promise(False, "another instrument is refused with IdentityError", repr(error))
    else:
        t.promise(found.declared, "another instrument is refused", found)
        driver.close()
        return
    if not driver.listens:
        try:
            readings = driver.poll(t.deadline_s)
        except DriverError:
            t.promise(True, "no reading from another instrument")
        else:
            t.promise(False, "no reading from another instrument", readings)
    driver.close()


def _descriptors() -> int:
    try:
        return len(os.listdir("/proc/self/fd"))
    except OSError:
        return 0
