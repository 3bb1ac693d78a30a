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
answers do not name their channel, questions are sent ``guard_s`` apart (see conversation.py).
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

from drivers.base import (
    GARBLED,
    GOOD,
    MISSING,
    QUALITIES,
    Identity,
    IdentityError,
    LinkError,
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
from drivers.lines import CHECKSUMS, MAX_LINE, WORDS, Checksum, Line, LineCodec, parse_number
from drivers.options import NEVER, OptionReader, must_be_fit
from drivers.rota import Rota
from drivers.transport import CHUNK, Clock, Transport, read_port

CONNECT_S: Final = 2.0
OVERHEAR_S: Final = 5.0
"""How long to wait for a talker that names itself."""
TTY_BUFFER: Final = 4000
"""Bytes waiting from which on a serial port's buffer (4096 in Linux) may have overflowed."""

Value = tuple[float, str]


# ------------------------------------------------------------------------------ codec, no I/O


@dataclass(frozen=True, slots=True)
class Pick:
    """Where one reading stands in a line, and how it is read."""

    name: str
    group: str = ""
    field: int = 0
    columns: tuple[int, int] | None = None
    states: Mapping[str, float] | None = None


@dataclass(frozen=True, slots=True)
class Message:
    """One line and the readings in it; ``ask`` empty where the instrument talks by itself.

    ``fields`` and ``length`` are the numbers of fields and characters that the line must have; 0 where
    nobody counts them.
    """

    ask: str
    reply: re.Pattern[str] | None
    separator: str
    fields: int
    length: int
    echo: str
    picks: tuple[Pick, ...]


@dataclass(frozen=True, slots=True)
class Manner:
    """How this instrument writes."""

    decimal_comma: bool
    words: Mapping[str, str]
    checksum: Checksum | None


def read_line(text: str, message: Message, manner: Manner) -> dict[str, Value]:
    """Return name -> (value, quality) of all readings in the line.

    Raises NotTheAnswer if the line is not as ``message`` says in every part. One unreadable field
    condemns the line: where a separator was lost, the fields behind it belong to other channels.
    """
    if manner.checksum is not None:
        body = manner.checksum.unseal(text)
        if body is None:
            raise NotTheAnswer(f"got {_short(text)}, its checksum is wrong")
        text = body
    if message.length and len(text) != message.length:
        raise NotTheAnswer(f"got {len(text)} characters ({_short(text)}), need {message.length}")
    found = None
    if message.reply is not None:
        found = message.reply.fullmatch(text)
        if found is None:
            raise NotTheAnswer(f"got {_short(text)}, need a line like {message.reply.pattern!r}")
        if message.echo and found["echo"] != message.echo:
            raise NotTheAnswer(f"got {_short(text)}, the answer of {found['echo']!r}, need {message.echo!r}")
    fields = text.split(message.separator)
    if message.fields and len(fields) != message.fields:
        raise NotTheAnswer(f"got {len(fields)} fields ({_short(text)}), need {message.fields}")
    values: dict[str, Value] = {}
    for pick in message.picks:
        if pick.columns is not None:
            if len(text) < pick.columns[1]:
                raise NotTheAnswer(f"got {_short(text)}, need at least {pick.columns[1]} characters")
            piece: str | None = text[pick.columns[0] - 1 : pick.columns[1]]
        elif pick.field:
            piece = fields[pick.field - 1]
        else:
            piece = found[pick.group] if found is not None else text
        values[pick.name] = (float("nan"), MISSING) if piece is None else _read(piece, pick, manner)
    return values


def _read(piece: str, pick: Pick, manner: Manner) -> Value:
    if pick.states is not None:
        state = pick.states.get(piece.strip())
        if state is None:
            raise NotTheAnswer(f"got {_short(piece)} for {pick.name}, need one of {', '.join(pick.states)}")
        return state, GOOD
    value = parse_number(piece, decimal_comma=manner.decimal_comma, words=manner.words)
    if value is None:
        raise NotTheAnswer(f"got {_short(piece)} for {pick.name}, need a number or one of the words")
    return value


# -------------------------------------------------------------------------------- the options


@dataclass(frozen=True, slots=True)
class _Options:
    make_port: Callable[[Clock | None], Transport]
    serial: bool
    yields: tuple[str, ...]
    messages: tuple[Message, ...]
    manner: Manner
    pace: Pace
    terminator: bytes
    ask_terminator: str
    encoding: str
    seal_requests: bool
    command_echo: bool
    identity_ask: str
    identity_reply: re.Pattern[str] | None
    declared: str
    listen: bool
    silence_s: float
    connect_timeout_s: float


_PICK_KEYS: Final = (
    "ask", "unit", "reply", "separator", "fields", "length", "echo", "group", "field", "columns", "states"
)  # fmt: skip


def _read_options(options: object) -> tuple[_Options, list[tuple[str, str]]]:
    top = OptionReader(options)
    make_port = read_port(top)
    listen = top.flag("listen", False)
    comma = top.flag("decimal_comma", False)
    encoding = top.choice("encoding", ("ascii", "latin-1"), "ascii")
    terminator = top.text("terminator", "\r\n", most=4)
    ask_terminator = top.text("ask_terminator", terminator, most=4, empty=True)
    for key in _PICK_KEYS:
        top.has(key)  # may stand outside as the default of all
    readings = top.parts("yields", number="field", text="group")
    messages = _messages(top, readings, listen, ";" if comma else ",")
    voices = {m.echo or "" for m in messages}
    guard_s = 0.0 if len(messages) == len(voices) else 0.1
    manner = Manner(comma, _words(top), _checksum(top))
    ask, reply, declared = _identity(top, listen)
    pace = read_pace(top, 0.5, guard_s, bool(declared))
    read = _Options(
        make_port, not top.text("port", "/").startswith("socket:"), tuple(readings), messages, manner, pace,
        terminator.encode("latin-1", "replace"), ask_terminator, encoding,
        top.flag("request_checksum", False), top.flag("command_echo", False), ask, reply, declared, listen,
        top.number("silence_s", 10.0, least=0.1, most=1e6),
        top.number("connect_timeout_s", CONNECT_S, least=0.05, most=60.0),
    )  # fmt: skip
    if read.seal_requests and manner.checksum is None:
        top.wrong("request_checksum", "got true, need a checksum as well")
    return read, top.found()


def _messages(
    top: OptionReader, readings: Mapping[str, OptionReader], listen: bool, separator: str
) -> tuple[Message, ...]:
    grouped: dict[tuple[str, str, str, int, int, str], tuple[re.Pattern[str] | None, list[Pick]]] = {}
    for name, own in readings.items():
        source = {key: own if own.has(key) else top for key in _PICK_KEYS}
        unit = source["unit"].text("unit", "", most=20, empty=True)
        fill = _filler(unit)
        ask = fill(source["ask"].text("ask") if source["ask"].has("ask") else "")
        if listen and ask:
            own.wrong("ask", "must not be there with listen: true")
        elif not listen and not source["ask"].has("ask"):
            own.wrong("ask", "is missing, need what to send")
        reply = None
        if source["reply"].has("reply"):
            reply = source["reply"].pattern("reply", None, _filler(re.escape(unit)))
        echo = fill(source["echo"].text("echo", "", empty=True))
        if echo and (reply is None or "echo" not in reply.groupindex):
            own.wrong("echo", f"got {echo!r}, need a reply with a group (?P<echo>...)")
            reply = None
        split = source["separator"].text("separator", separator, most=8)
        count = source["fields"].whole("fields", 0, least=1, most=200)
        length = source["length"].whole("length", 0, least=1, most=MAX_LINE)
        pick = _pick(name, own, source, reply)
        key = (ask, reply.pattern if reply is not None else "", split, count, length, echo)
        grouped.setdefault(key, (reply, []))[1].append(pick)
        own.done()
    return tuple(
        Message(
            ask,
            reply,
            split,
            count or max(p.field for p in picks),
            length,
            echo if reply is not None else "",
            tuple(picks),
        )
        for (ask, _, split, count, length, echo), (reply, picks) in grouped.items()
    )  # fmt: skip    )


def _filler(unit: str) -> Callable[[str], str]:
    return lambda text: text.replace("{unit}", unit)


def _pick(
    name: str, own: OptionReader, source: Mapping[str, OptionReader], reply: re.Pattern[str] | None
) -> Pick:
    where = [key for key in ("group", "field", "columns") if own.has(key)]
    if not where:
        where = [key for key in ("group", "field", "columns") if source[key].has(key)]
    if len(where) > 1:
        own.wrong("", f"got {' and '.join(where)}, need one of them")
    group, number, columns = "", 0, None
    if where[:1] == ["field"]:
        number = source["field"].whole("field", None, least=1, most=200)
    elif where[:1] == ["columns"]:
        columns = _columns(source["columns"])
    elif reply is not None:
        group = source["group"].text("group", "value")
        if group not in reply.groupindex and reply.pattern != NEVER:
            have = ", ".join(reply.groupindex) or "none"
            own.wrong("group", f"got {group!r}, need a group of the reply (it has {have})")
    elif where:
        own.wrong("group", "got a group, need a reply with that group")
    return Pick(name, group, number, columns, _states(source["states"]))


def _columns(options: OptionReader) -> tuple[int, int]:
    got = options.raw("columns")
    fits = isinstance(got, list) and len(got) == 2 and all(type(x) is int for x in got)
    if not fits or not 1 <= got[0] <= got[1] <= MAX_LINE:
        options.wrong("columns", f"got {got!r}, need [first, last], counted from 1")
        return 1, 1
    return got[0], got[1]


def _states(options: OptionReader) -> dict[str, float] | None:
    if not options.has("states"):
        return None
    inside = options.part("states")
    assert inside is not None
    return {word: inside.number(word, None, least=-1e9, most=1e9) for word in inside.keys}


def _words(top: OptionReader) -> dict[str, str]:
    words = dict(WORDS)
    inside = top.part("words")
    if inside is not None:
        for word in inside.keys:
            words[word.strip().upper()] = inside.choice(word, sorted(QUALITIES - {GOOD}), GARBLED)
    return words


def _checksum(top: OptionReader) -> Checksum | None:
    inside = top.part("checksum")
    if inside is None:
        return None
    checksum = Checksum(
        inside.choice("kind", CHECKSUMS), inside.text("mark", "", most=4, empty=True),
        inside.whole("skip", 0, least=0, most=16),
    )  # fmt: skip
    inside.done()
    return checksum


def _identity(top: OptionReader, listen: bool) -> tuple[str, re.Pattern[str] | None, str]:
    inside = top.part("identity")
    if inside is None:
        top.wrong(
            "identity", 'is missing, need {ask: ..., reply: ...}, or {declared: "..."} where it cannot say'
        )
        return "", None, ""
    if inside.has("declared"):
        declared = inside.text("declared")
        inside.done()
        return "", None, declared
    ask = "" if listen else inside.text("ask")
    reply = inside.pattern("reply")
    inside.done()
    return ask, reply, ""


# --------------------------------------------------------------------------------- the driver


class TextLine:
    """A driver for instruments that send lines of text; options as at the head of this module."""

    def __init__(
        self, options: Mapping[str, Any], *, port: Transport | None = None, clock: Clock | None = None
    ) -> None:
        self._options, problems = _read_options(options)
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
        return _read_options(options)[1]

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
            raise Stranger(f"got {_short(text)}, need an identity like {wanted.pattern!r}")
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
                f"{self._port.name}: got {_short(heard)}, need an identity like {wanted.pattern!r}"
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

        return Question(self._request(message.ask), read, message.echo, echoed=self._echoed(message.ask))

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


def _short(text: str) -> str:
    return repr(text if len(text) <= 80 else text[:77] + "...")
