"""What lines of text hold and how they are read: the codec of the text-line family, and its options."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

from drivers.base import GARBLED, GOOD, MISSING, QUALITIES
from drivers.conversation import NotTheAnswer, Pace, read_pace
from drivers.lines import CHECKSUMS, MAX_LINE, WORDS, Checksum, parse_number
from drivers.options import NEVER, OptionReader
from drivers.transport import Clock, Transport, read_port

CONNECT_S: Final = 2.0

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

    def voice(self, among: Sequence[Message]) -> str:
        """What its answer can be told apart by: the echo, but only if all the messages have one."""
        return self.echo if all(message.echo for message in among) else ""


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
            raise NotTheAnswer(f"got {short(text)}, its checksum is wrong")
        text = body
    if message.length and len(text) != message.length:
        raise NotTheAnswer(f"got {len(text)} characters ({short(text)}), need {message.length}")
    found = None
    if message.reply is not None:
        found = message.reply.fullmatch(text)
        if found is None:
            raise NotTheAnswer(f"got {short(text)}, need a line like {message.reply.pattern!r}")
        if message.echo and found["echo"] != message.echo:
            raise NotTheAnswer(f"got {short(text)}, the answer of {found['echo']!r}, need {message.echo!r}")
    fields = text.split(message.separator)
    if message.fields and len(fields) != message.fields:
        raise NotTheAnswer(f"got {len(fields)} fields ({short(text)}), need {message.fields}")
    values: dict[str, Value] = {}
    for pick in message.picks:
        if pick.columns is not None:
            if len(text) < pick.columns[1]:
                raise NotTheAnswer(f"got {short(text)}, need at least {pick.columns[1]} characters")
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
            raise NotTheAnswer(f"got {short(piece)} for {pick.name}, need one of {', '.join(pick.states)}")
        return state, GOOD
    value = parse_number(piece, decimal_comma=manner.decimal_comma, words=manner.words)
    if value is None:
        raise NotTheAnswer(f"got {short(piece)} for {pick.name}, need a number or one of the words")
    return value


# -------------------------------------------------------------------------------- the options


@dataclass(frozen=True, slots=True)
class TextOptions:
    """All options of a text-line driver, checked."""

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


def read_options(options: object) -> tuple[TextOptions, list[tuple[str, str]]]:
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
    echoes = {m.echo for m in messages}
    alike = len(messages) > 1 and ("" in echoes or len(echoes) < len(messages))
    manner = Manner(comma, _words(top), _checksum(top))
    ask, reply, declared = _identity(top, listen)
    pace = read_pace(top, 0.5, alike, nameless=bool(declared))
    read = TextOptions(
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


def short(text: str) -> str:
    """Show text in a message, cut where it is long."""
    return repr(text if len(text) <= 80 else text[:77] + "...")
