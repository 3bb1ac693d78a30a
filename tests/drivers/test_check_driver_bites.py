"""The conformance suite against drivers that break one promise each: it must find out."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Mapping
from typing import Any, ClassVar

import pytest
from driver_peers import GaugePeer, scripted

from drivers.base import GOOD, Identity, IdentityError, LinkError, RawReading, no_reading
from drivers.checks import ConformanceError, check_driver
from drivers.scripted import ScriptedPort
from drivers.textline import TextLine

PACE = {"port": "/dev/none", "timeout_s": 0.08, "longest_reply_s": 0.16}


class Sound(TextLine):
    """The real driver; the classes below break it in one place."""


class CarriesOver(Sound):
    last: list[RawReading] | None = None

    def poll(self, deadline_s: float) -> list[RawReading]:
        readings = super().poll(deadline_s)
        if all(r.quality != GOOD for r in readings) and self.last is not None:
            return self.last
        self.last = readings
        return readings


class SwapsSides(Sound):
    def poll(self, deadline_s: float) -> list[RawReading]:
        left, right = super().poll(deadline_s)
        return [
            RawReading("left", right.value, right.quality),
            RawReading("right", left.value, left.quality),
        ]


class WrongOrder(Sound):
    def poll(self, deadline_s: float) -> list[RawReading]:
        return super().poll(deadline_s)[::-1]


class Dawdles(Sound):
    def poll(self, deadline_s: float) -> list[RawReading]:
        readings = super().poll(deadline_s)
        if readings[0].quality != GOOD:
            self._port.clock.sleep(2.0 * deadline_s)
        return readings


class BelievesAnybody(Sound):
    def identify(self) -> Any:
        try:
            return super().identify()
        except IdentityError:
            self._identified = True
            return type("Identity", (), {})


class Invents(Sound):
    def poll(self, deadline_s: float) -> list[RawReading]:
        return [r if r.quality == GOOD else RawReading(r.name, 0.0) for r in super().poll(deadline_s)]


class ReadsWhenClosed(Sound):
    def poll(self, deadline_s: float) -> list[RawReading]:
        try:
            return super().poll(deadline_s)
        except (LinkError, IdentityError):
            return [no_reading(name, "missing") for name in self.yields]


class ClosesOnce(Sound):
    def close(self) -> None:
        if not self._identified:
            raise RuntimeError("closed already")
        super().close()


class Leaks(Sound):
    lost: ClassVar[list[int]] = []

    def open(self) -> None:
        super().open()
        self.lost.append(os.dup(2))


class NeverComesBack(Sound):
    failed = False

    def poll(self, deadline_s: float) -> list[RawReading]:
        readings = super().poll(deadline_s)
        self.failed |= any(math.isnan(r.value) for r in readings)
        return [no_reading(r.name, "missing") for r in readings] if self.failed else readings


class TakesLateAnswers:
    """The first thing that comes to mind: send, read a line, no thought for what is still on its way."""

    listens = False
    yields = ("left", "right")

    def __init__(self, options: Mapping[str, Any], port: ScriptedPort) -> None:
        self._port, self._identified = port, False

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return []

    def open(self) -> None:
        self._port.open(0.0)

    def close(self) -> None:
        self._identified = False
        self._port.close()

    def identify(self) -> Any:
        self._identified = True
        return Identity("the gauge", declared=True)

    def poll(self, deadline_s: float) -> list[RawReading]:
        if not self._identified:
            raise LinkError("not identified")
        now_s = self._port.clock.now_s()
        self._port.write(b"D\r\n", now_s + 0.08)
        line = b""
        while not line.endswith(b"\n"):
            data = self._port.read(100, now_s + 0.08)
            if not data:
                return [no_reading(name, "missing") for name in self.yields]
            line += data
        try:
            left, right = (float(x) for x in line.split(b","))
        except ValueError:
            return [no_reading(name, "garbled") for name in self.yields]
        return [RawReading("left", left), RawReading("right", right)]


@pytest.mark.parametrize(
    ("driver", "promise"),
    [
        (CarriesOver, "a value is the answer to this question"),
        (SwapsSides, "a value is the answer to this question"),
        (WrongOrder, "exactly the yields"),
        (Dawdles, "keeps its deadline"),
        (BelievesAnybody, "another instrument is refused|returns an Identity"),
        (Invents, "no value out of nothing|a value is the answer"),
        (ReadsWhenClosed, "before open is refused"),
        (Leaks, "no descriptor is left open"),
        (NeverComesBack, "readings come back"),
        (TakesLateAnswers, "a value is the answer to this question"),
    ],
)
def test_a_broken_promise_is_found_out(driver: Callable[..., Any], promise: str) -> None:
    """A suite that passes a bad driver is worse than none."""
    peer = GaugePeer(seed=5)
    port = scripted(peer)
    make = lambda: driver({**PACE, **GaugePeer.options}, port=port)  # noqa: E731
    with pytest.raises(ConformanceError, match=promise):
        check_driver(make, peer, clock=port.clock, polls=10, slack_s=0.01)
    while Leaks.lost:
        os.close(Leaks.lost.pop())


def test_the_sound_driver_passes_the_very_same_trial() -> None:
    """Otherwise the trials above would prove nothing."""
    peer = GaugePeer(seed=5)
    port = scripted(peer)
    check_driver(
        lambda: Sound({**PACE, **GaugePeer.options}, port=port),
        peer,
        clock=port.clock,
        polls=10,
        slack_s=0.01,
    )


def test_an_error_outside_the_contract_is_not_swallowed() -> None:
    """Only DriverError may come out of a driver."""
    peer = GaugePeer(seed=5)
    port = scripted(peer)
    with pytest.raises(RuntimeError):
        check_driver(
            lambda: ClosesOnce({**PACE, **GaugePeer.options}, port=port), peer, clock=port.clock, polls=2
        )


def test_a_peer_must_be_able_to_be_silent() -> None:
    """Without silence the deadlines are not tried at all."""
    peer = GaugePeer()
    peer.can = frozenset({"well"})
    with pytest.raises(ValueError, match="silent"):
        check_driver(lambda: pytest.fail("not needed"), peer)
