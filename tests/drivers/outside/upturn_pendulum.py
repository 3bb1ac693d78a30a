r"""A worked example: the driver for an (invented) two-channel gauge, written from its manual's protocol page.

The manual says: 9600 baud, 8N1. Send ``<STX> unit command <CR>``; the answer is ``<STX> unit command
sign digits <CR>`` with six digits, the last four behind the point, in millimetres. Commands: ``A`` and
``B`` read the two channels, ``V`` answers with the type and version, ``PEN2.1``. A channel without a
probe answers ``------``.

    driver: pendulum
    port: /dev/serial/by-id/usb-pendulum-port0
    unit: 3
    yields: {left: A, right: B}
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from drivers.base import GOOD, OPEN_CIRCUIT, Identity, IdentityError, RawReading, no_reading
from drivers.conversation import Conversation, NoAnswer, NotTheAnswer, Question, Stranger, always, read_pace
from drivers.lines import Line, LineCodec, parse_number
from drivers.options import OptionReader, must_be_fit
from drivers.transport import Transport, read_port

STX = "\x02"


def read_answer(line: str, unit: int, command: str) -> str:
    """Return what stands behind unit and command. No I/O: this is what the unit tests of the codec call."""
    start = f"{STX}{unit}{command}"
    if not line.startswith(start):
        raise NotTheAnswer(f"got {line!r}, need an answer that begins with {start!r}")
    return line.removeprefix(start)


def read_length(line: str, unit: int, command: str) -> tuple[float, str]:
    """Return (length [mm], quality)."""
    digits = read_answer(line, unit, command)
    if digits == "------":
        return float("nan"), OPEN_CIRCUIT
    number = parse_number(digits) if re.fullmatch(r"[+-][0-9]{6}", digits) else None
    if number is None:
        raise NotTheAnswer(f"got {digits!r}, need a sign and six digits")
    return number[0] / 10_000.0, number[1]


class StxLines(LineCodec):
    """Lines whose first byte is the control character STX, which ordinary lines must not contain."""

    def _judge(self, raw: bytes) -> list[Any]:
        if not raw.startswith(STX.encode()):
            return super()._judge(raw)
        return [
            Line(STX + event.text) if isinstance(event, Line) else event for event in super()._judge(raw[1:])
        ]


class Pendulum:
    """The driver; its options stand at the head of this module."""

    listens = False

    def __init__(self, options: Mapping[str, Any], *, port: Transport | None = None) -> None:
        reader, make_port, pace, unit, channels = self._read(options)
        must_be_fit(reader.found())
        self.yields = tuple(channels)
        self._port = make_port(None) if port is None else port
        self._talk: Conversation[Line] = Conversation(self._port, StxLines(b"\r"), pace)
        self._unit = unit
        self._channels = channels
        self._identified = False

    @staticmethod
    def _read(options: Mapping[str, Any]) -> tuple[OptionReader, Any, Any, int, dict[str, str]]:
        top = OptionReader(options)
        make_port = read_port(top)
        pace = read_pace(top, 0.3, alike=False, nameless=False)
        unit = top.whole("unit", 1, least=0, most=9)
        channels = {}
        for name, own in top.parts("yields", text="channel").items():
            channels[name] = own.choice("channel", ("A", "B"))
            own.done()
        return top, make_port, pace, unit, channels

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return cls._read(options)[0].found()

    def open(self) -> None:
        self._identified = False
        self._port.open(self._port.clock.now_s() + 2.0)
        self._talk.begin()

    def identify(self) -> Identity:
        def read(line: Line) -> str:
            text = read_answer(line.text, self._unit, "V")
            if not text.startswith("PEN2"):
                raise Stranger(f"got {text!r}, need PEN2...")
            return text

        # the answer names its command, so no reading can be mistaken for it: distinct
        found = self._talk.introduce(always(Question(self._ask("V"), read, "V", distinct=True)))
        self._identified = True
        return Identity(found)

    def poll(self, deadline_s: float) -> list[RawReading]:
        if not self._identified:
            raise IdentityError("got a poll, need identify() after open() first")
        until_s = self._port.clock.now_s() + deadline_s
        readings, answered = [], False
        for name, command in self._channels.items():
            question = Question(self._ask(command), self._reading(command), voice=command)
            answer = self._talk.ask(question, until_s)
            if isinstance(answer, NoAnswer):
                readings.append(no_reading(name, answer.quality))
                continue
            answered = True
            value, quality = answer
            readings.append(RawReading(name, value) if quality == GOOD else no_reading(name, quality))
        self._talk.end_of_poll(answered)
        return readings

    def close(self) -> None:
        self._identified = False
        self._port.close()

    def _ask(self, command: str) -> bytes:
        return f"{STX}{self._unit}{command}\r".encode()

    def _reading(self, command: str) -> Any:
        return lambda line: read_length(line.text, self._unit, command)
