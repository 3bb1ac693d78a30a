r"""Scanners and meters that speak SCPI: one query, one value for each channel. Serial or TCP.

A scanner with two transducers and three thermocouples::

    driver: scpi
    port: socket://192.168.1.30:5025          # or /dev/serial/by-id/...
    identity: "ACME,SCAN-40,.*"               # what *IDN? must answer, as a regular expression
    setup:                                    # sent once after the identity was seen
      - "CONF:VOLT:DC (@101,102)"
      - "CONF:TEMP TC,S,(@111:113)"
      - "ROUT:SCAN (@101,102,111:113)"
    scan: "READ?"                             # or with a list in it: "MEAS:VOLT:DC? (@{channels})"
    timeout_s: 2.0                            # how long a scan may take
    error_query: "SYST:ERR?"                  # "" for an instrument without an error queue
    error_check_s: 0                          # how often that is asked; 0: after each scan
    ignore_errors: [-410]                     # error numbers that are of no consequence
    yields: {left: 101, right: 102, top: 111, mid: 112, low: 113}

Values are taken in the order of ``yields``; their number must be that of the channels. +-9.9E37 is an
overload and 9.91E37 not a number (IEEE 488.2 and SCPI). A scan after which the error queue is not empty
is not believed: InstrumentError names the errors.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from drivers.base import (
    GARBLED,
    GOOD,
    Identity,
    IdentityError,
    InstrumentError,
    RawReading,
    no_reading,
)
from drivers.conversation import (
    Conversation,
    NoAnswer,
    NotTheAnswer,
    Pace,
    Question,
    Stranger,
    always,
    read_pace,
)
from drivers.lines import Line, LineCodec, parse_number
from drivers.options import OptionReader, must_be_fit
from drivers.transport import Clock, Transport, read_port

CONNECT_S: Final = 2.0
QUEUE_MOST: Final = 32
"""Errors read from a queue at most: a queue that never empties must not hold the caller."""
ANSWER_MOST: Final = 16384
_ERROR = re.compile(r'\s*([+-]?[0-9]{1,6})\s*,\s*("?)(.*?)\2\s*')

Value = tuple[float, str]


# ------------------------------------------------------------------------------ codec, no I/O


def read_scan(text: str, names: Sequence[str]) -> dict[str, Value]:
    """Return name -> (value, quality) of an answer like ``+1.2E-03,9.91E37``; as many as names.

    Raises NotTheAnswer if the number of values differs or one of them is no IEEE 488.2 number.
    """
    fields = text.split(",")
    if len(fields) != len(names):
        raise NotTheAnswer(f"got {len(fields)} values ({_short(text)}), need {len(names)}")
    values: dict[str, Value] = {}
    for name, field in zip(names, fields, strict=True):
        value = parse_number(field)
        if value is None:
            raise NotTheAnswer(f"got {_short(field)} for {name}, need a number")
        values[name] = value
    return values


def read_error(text: str) -> tuple[int, str]:
    """Return (number, text) of an answer like ``-113,"Undefined header"``; 0 is "no error"."""
    found = _ERROR.fullmatch(text)
    if found is None:
        raise NotTheAnswer(f'got {_short(text)}, need an error like 0,"No error"')
    return int(found[1]), found[3]


# -------------------------------------------------------------------------------- the options


@dataclass(frozen=True, slots=True)
class _Options:
    make_port: Callable[[Clock | None], Transport]
    pace: Pace
    terminator: str
    identity: re.Pattern[str]
    setup: tuple[str, ...]
    scan: str
    error_query: str
    error_check_s: float
    ignore: frozenset[int]
    connect_timeout_s: float
    yields: tuple[str, ...]


def _read_options(options: object) -> tuple[_Options, list[tuple[str, str]]]:
    top = OptionReader(options)
    make_port = read_port(top)
    channels: dict[str, int] = {}
    for name, own in top.parts("yields", number="channel").items():
        channels[name] = own.whole("channel", None, least=0, most=99999)
        if list(channels.values()).count(channels[name]) > 1:
            own.wrong("channel", f"got {channels[name]} a second time, need each channel once")
        own.done()
    scan = top.text("scan").replace("{channels}", ",".join(map(str, channels.values())))
    if scan and "?" not in scan:
        top.wrong("scan", f"got {scan!r}, need a query (with a question mark)")
    ignore = top.raw("ignore_errors") or []
    if not isinstance(ignore, list) or not all(type(x) is int for x in ignore):
        top.wrong("ignore_errors", f"got {ignore!r}, need a list of error numbers like [-410]")
        ignore = []
    read = _Options(
        make_port, read_pace(top, 2.0, alike=False, nameless=False), top.text("terminator", "\n", most=4),
        top.pattern("identity"), tuple(top.texts("setup")), scan,
        top.text("error_query", "SYST:ERR?", empty=True),
        top.number("error_check_s", 0.0, most=86400.0), frozenset(ignore),
        top.number("connect_timeout_s", CONNECT_S, least=0.05, most=60.0), tuple(channels),
    )  # fmt: skip
    return read, top.found()


# --------------------------------------------------------------------------------- the driver


class Scpi:
    """A driver for SCPI instruments; options as at the head of this module."""

    listens = False

    def __init__(
        self, options: Mapping[str, Any], *, port: Transport | None = None, clock: Clock | None = None
    ) -> None:
        self._options, problems = _read_options(options)
        must_be_fit(problems)
        o = self._options
        self.yields: tuple[str, ...] = o.yields
        self._port = o.make_port(clock) if port is None else port
        codec = LineCodec(o.terminator.encode("latin-1", "replace"), most=ANSWER_MOST)
        self._talk = Conversation(self._port, codec, o.pace)
        self._scan: Question[Line, dict[str, Value]] = Question(
            self._line(o.scan), lambda line: read_scan(line.text, o.yields), "scan"
        )
        self._error: Question[Line, tuple[int, str]] = Question(
            self._line(o.error_query), lambda line: read_error(line.text), "error"
        )
        self._who: Question[Line, str] = Question(
            self._line("*IDN?"), self._read_identity, "identity", distinct=True
        )
        self._identified = False
        self._checked_s = 0.0
        self._in_doubt = False

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return _read_options(options)[1]

    def open(self) -> None:
        self._identified = False
        self._port.open(self._port.clock.now_s() + self._options.connect_timeout_s)
        self._talk.begin()

    def close(self) -> None:
        self._identified = False
        self._port.close()

    def identify(self) -> Identity:
        o, clock = self._options, self._port.clock
        answer = self._talk.introduce(always(self._who))
        patience_s = o.pace.timeout_s + o.pace.longest_reply_s
        self._errors(clock.now_s() + patience_s)  # what happened before is of no concern
        for command in o.setup:
            self._talk.tell(self._line(command), clock.now_s() + o.pace.timeout_s)
        if o.setup:
            errors = self._errors(clock.now_s() + patience_s)
            if errors is None or errors:
                said = f"{o.error_query} was not answered" if errors is None else _list(errors)
                raise InstrumentError(f"{self._port.name}: after the setup: {said}")
        self._checked_s = clock.now_s()
        self._in_doubt = False
        self._identified = True
        return Identity(answer)

    def _read_identity(self, line: Line) -> str:
        text, wanted = line.text.strip(), self._options.identity
        if not wanted.fullmatch(text):
            raise Stranger(f"got {_short(text)}, need an identity like {wanted.pattern!r}")
        return text

    def poll(self, deadline_s: float) -> list[RawReading]:
        o, clock = self._options, self._port.clock
        if not self._identified:
            raise IdentityError(f"{self._port.name}: got a poll, need identify() after open() first")
        until_s = clock.now_s() + deadline_s
        answer = self._talk.ask(self._scan, until_s)
        failed = isinstance(answer, NoAnswer)
        if failed or self._in_doubt or clock.now_s() - self._checked_s >= o.error_check_s:
            errors = self._errors(until_s)
            if errors:
                raise InstrumentError(f"{self._port.name}: the instrument reports {_list(errors)}")
            if errors is not None:
                self._checked_s = clock.now_s()
            elif not isinstance(answer, NoAnswer):
                answer = NoAnswer(GARBLED, f"{o.error_query} was not answered")
        self._in_doubt = isinstance(answer, NoAnswer)
        if isinstance(answer, NoAnswer):
            self._talk.end_of_poll(False)
            return [no_reading(name, answer.quality) for name in self.yields]
        self._talk.end_of_poll(True)
        return [
            RawReading(name, value) if quality == GOOD else no_reading(name, quality)
            for name, (value, quality) in answer.items()
        ]

    def _errors(self, until_s: float) -> list[tuple[int, str]] | None:
        """Empty the error queue; None if it could not be read."""
        found: list[tuple[int, str]] = []
        if not self._options.error_query:
            return found
        for _ in range(QUEUE_MOST):
            answer = self._talk.ask(self._error, until_s)
            if isinstance(answer, NoAnswer):
                return found or None
            if answer[0] == 0:
                break
            if answer[0] not in self._options.ignore:
                found.append(answer)
        return found

    def _line(self, text: str) -> bytes:
        return (text + self._options.terminator).encode("latin-1", "replace")


def _list(errors: Sequence[tuple[int, str]]) -> str:
    return ", ".join(f"{number} {text}" for number, text in errors)


def _short(text: str) -> str:
    return repr(text if len(text) <= 80 else text[:77] + "...")
