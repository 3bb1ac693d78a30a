r"""Instruments that send lines of text: asked, or talking by themselves. Serial or TCP.

A dial gauge that answers ``D`` with ``+01.2345,-00.3210``::

    driver: textline
    port: /dev/serial/by-id/usb-gauge-port0    # or socket://192.168.1.20:4001
    baud: 9600
    frame: 7E1                # data bits, parity, stop bits; default 8N1
    ask: "D"                  # sent with the terminator behind it
    terminator: "\r\n"        # ends each line; ask_terminator where the question ends differently
    timeout_s: 0.5            # how long to wait for an answer
    longest_reply_s: 1.0      # after this time no late answer comes any more; default timeout_s,
                              # or twice that where the identity is declared
    identity: {ask: "*IDN?", reply: "GAUGE 7.*"}     # or {declared: "gauge 1234, cannot say"}
    yields:
      left: 1                 # the first number between commas
      right: 2

Six indicators on one two-wire bus, each asked by its unit number::

    ask: "#{unit}"
    reply: '>(?P<echo>\d\d)(?P<value>.+)'    # a regular expression for the entire line
    echo: "{unit}"            # what the group named echo must be: the answer names its channel
    yields:
      t1: {unit: "01"}
      t2: {unit: "02"}

An instrument that talks by itself, fixed columns, decimal comma, checksum::

    listen: true
    decimal_comma: true
    length: 16                # characters in a line (without checksum)
    checksum: {kind: xor8, mark: "*", skip: 1}
    silence_s: 10             # nothing heard for so long: the link is lost
    yields:
      left:  {columns: [3, 10]}      # from character 3 to character 10, counted from 1
      break: {columns: [12, 15], states: {OPEN: 1, SHUT: 0}}

Every key of one of the ``yields`` may stand outside as the default of all. Where from: ``group`` (of
``reply``; without any key the group named ``value``), ``field`` (between ``separator``; default a comma, a
semicolon with ``decimal_comma``; ``fields`` says how many a line has if that is more than are used),
``columns``. ``words`` adds to what instruments write instead of a number:
``words: {"------": overload, "EEEE": open_circuit}``. Readings with the same question share one.

A digit that the wire changed into another digit is seen only by parity (``frame``) or a checksum. Where the
answers do not name their channel, questions are sent ``guard_s`` apart, by default ``longest_reply_s``:
an answer that comes twice is then never taken for another's. On a wire that cannot repeat an answer it may
be less. A poll too short for all questions takes turns.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any, Final

from drivers.base import (
    GARBLED,
    GOOD,
    MISSING,
    Identity,
    IdentityError,
    LinkError,
    RawReading,
    no_reading,
)
from drivers.conversation import Conversation, NoAnswer, NotTheAnswer, Question, Stranger, always
from drivers.lines import Line, LineCodec
from drivers.options import must_be_fit
from drivers.rota import Rota
from drivers.textform import Message, Value, read_line, read_options, short
from drivers.transport import CHUNK, Clock, Transport

OVERHEAR_S: Final = 5.0
"""How long to wait for a talker that names itself."""
TTY_BUFFER: Final = 4000
"""Bytes waiting from which on a serial port's buffer (4096 in Linux) may have overflowed."""


class TextLine:
    """A driver for instruments that send lines of text; options as at the head of this module."""

    def __init__(
        self, options: Mapping[str, Any], *, port: Transport | None = None, clock: Clock | None = None
    ) -> None:
        self._options, problems = read_options(options)
        must_be_fit(problems)
        o = self._options
        self.yields: tuple[str, ...] = o.yields
        self.listens: bool = o.listen
        self._port = o.make_port(clock) if port is None else port
        self._codec = LineCodec(o.terminator, encoding=o.encoding)
        self._talk = Conversation(self._port, self._codec, o.pace)
        self._questions = [(m, self._question(m)) for m in o.messages]
        self._rota = Rota(len(self._questions))
        self._identified = False
        self._heard_s = 0.0

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return read_options(options)[1]

    def open(self) -> None:
        self._identified = False
        self._port.open(self._port.clock.now_s() + self._options.connect_timeout_s)
        self._talk.begin()
        self._rota = Rota(len(self._questions))
        self._codec.reset(synced=not self.listens)
        self._heard_s = self._port.clock.now_s()

    def close(self) -> None:
        self._identified = False
        self._port.close()

    def identify(self) -> Identity:
        o = self._options
        if o.declared:
            if not self.listens:
                self._talk.canaries = [always(question) for _, question in self._questions]
                self._talk.warm_up()
            self._identified = True
            return Identity(o.declared, declared=True)
        assert o.identity_reply is not None
        if self.listens:
            text = self._overhear(o.identity_reply)
        else:
            question = Question(
                self._request(o.identity_ask), self._read_identity, distinct=True, voice="identity",
                echoed=self._echoed(o.identity_ask),
            )  # fmt: skip
            text = self._talk.introduce(always(question))
        self._identified = True
        return Identity(text)

    def _read_identity(self, line: Line) -> str:
        wanted = self._options.identity_reply
        text = self._unsealed(line.text).strip()
        if wanted is not None and not wanted.fullmatch(text):
            raise Stranger(f"got {short(text)}, need an identity like {wanted.pattern!r}")
        return text

    def _overhear(self, wanted: re.Pattern[str]) -> str:
        until_s = self._port.clock.now_s() + min(self._options.silence_s, OVERHEAR_S)
        heard = ""
        while data := self._port.read(CHUNK, until_s):
            for event in self._codec.feed(data):
                if isinstance(event, Line):
                    heard = event.text.strip()
                    if wanted.fullmatch(heard):
                        return heard
        if heard:
            raise IdentityError(
                f"{self._port.name}: got {short(heard)}, need an identity like {wanted.pattern!r}"
            )
        raise LinkError(f"{self._port.name}: nothing was heard")

    def poll(self, deadline_s: float) -> list[RawReading]:
        if not self._identified:
            raise IdentityError(f"{self._port.name}: got a poll, need identify() after open() first")
        until_s = self._port.clock.now_s() + deadline_s
        values = self._listen(until_s) if self.listens else self._ask_all(until_s)
        return [
            no_reading(name, quality) if quality != GOOD else RawReading(name, value)
            for name, (value, quality) in ((name, values[name]) for name in self.yields)
        ]

    def _ask_all(self, until_s: float) -> dict[str, Value]:
        values: dict[str, Value] = dict.fromkeys(self.yields, (float("nan"), MISSING))
        answered = False
        for i in self._rota.turn():
            message, question = self._questions[i]
            answer = self._talk.ask(question, until_s)
            self._rota.note(i, answer)
            if isinstance(answer, NoAnswer):
                values |= {pick.name: (float("nan"), answer.quality) for pick in message.picks}
            else:
                answered = True
                values |= answer
        self._talk.end_of_poll(answered)
        return values

    def _listen(self, until_s: float) -> dict[str, Value]:
        """Take the last line of each kind that was heard since the last poll, or wait for one."""
        clock = self._port.clock
        values: dict[str, Value] = {}
        garbled = False
        waiting = 0
        while True:
            data = self._port.read(CHUNK, -1.0)
            if not data:
                if len(values) == len(self.yields):
                    break
                data = self._port.read(CHUNK, until_s)
                if not data:
                    break
                waiting = -1
            elif waiting >= 0:
                waiting += len(data)
                if self._options.serial and waiting >= TTY_BUFFER:
                    self._start_afresh(until_s)
                    values.clear()
                    waiting = -1
                    continue
            for event in self._codec.feed(data):
                heard = self._understand(event.text) if isinstance(event, Line) else None
                garbled |= heard is None
                values |= heard or {}
            if clock.now_s() >= until_s:
                break
        if values:
            self._heard_s = clock.now_s()
        elif clock.now_s() - self._heard_s >= self._options.silence_s:
            silent_s = clock.now_s() - self._heard_s
            raise LinkError(f"{self._port.name}: no line as configured was heard for {silent_s:.1f} s")
        gone = (float("nan"), GARBLED if garbled else MISSING)
        return {name: values.get(name, gone) for name in self.yields}

    def _start_afresh(self, until_s: float) -> None:
        """The port's buffer was full: what is in it is old and may have a hole in a line's middle."""
        end_s = min(until_s, self._port.clock.now_s() + 0.1)
        while self._port.read(CHUNK, end_s):
            pass
        self._codec.reset(synced=False)

    def _understand(self, text: str) -> dict[str, Value] | None:
        for message in self._options.messages:
            try:
                return read_line(text, message, self._options.manner)
            except NotTheAnswer:
                continue
        return None

    def _question(self, message: Message) -> Question[Line, dict[str, Value]]:
        def read(line: Line) -> dict[str, Value]:
            return read_line(line.text, message, self._options.manner)

        voice = message.voice(self._options.messages)
        return Question(self._request(message.ask), read, voice, echoed=self._echoed(message.ask))

    def _request(self, ask: str) -> bytes:
        o = self._options
        sealed = o.manner.checksum.seal(ask) if o.seal_requests and o.manner.checksum else ask
        return (sealed + o.ask_terminator).encode("latin-1", "replace")

    def _echoed(self, ask: str) -> Line | None:
        sent = self._request(ask).decode("latin-1").removesuffix(self._options.ask_terminator)
        return Line(sent) if self._options.command_echo else None

    def _unsealed(self, line: str) -> str:
        checksum = self._options.manner.checksum
        return line if checksum is None else checksum.unseal(line) or line
