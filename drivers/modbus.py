r"""Modbus RTU and TCP: registers and bits, several units on one bus.

A two-channel transmitter and a digital input module on one RS-485 pair::

    driver: modbus
    port: /dev/serial/by-id/usb-rs485-port0    # socket://192.168.1.40:502 speaks Modbus TCP
    baud: 19200
    frame: 8E1                # what the Modbus specification asks for
    unit: 1
    table: input              # holding, input (registers), coil, discrete (bits)
    type: float32             # int16, uint16, int32, uint32, float32, float64
    word_order: big           # big: the more significant register first; little: the less significant
    identity: {register: 0, type: uint16, equals: 4711}   # or {register: 8, registers: 6, text: "ACME.*"}
    yields:
      left:  {register: 100}
      right: {register: 102}
      oven:  {register: 7, type: int16, scale: 0.1, no_reading: {32767: open_circuit, -32768: overload}}
      break: {unit: 2, table: discrete, register: 3}      # 1 or 0

Every key of one of the ``yields`` may stand outside as the default of all. Registers are counted from 0
as on the wire: what a manual calls 40101 is register 100 of the holding table, 30008 register 7 of
the input table. ``framing: rtu`` with a socket port speaks RTU through a serial device server.
Registers of one unit that follow one another are read in one request. A float that is not finite is no
number or an overload.

Protocol after "MODBUS Application Protocol Specification V1.1b3" and "MODBUS over Serial Line V1.02".
RTU answers name neither register nor request: those to requests for equally many registers of one
unit's table could be taken for one another and are asked ``guard_s`` apart (default
``longest_reply_s``; less only on a wire that cannot repeat an answer, see conversation.py). TCP answers
carry a transaction number.
"""

from __future__ import annotations

import math
import re
import struct
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import count
from typing import Any, Final, TypeVar

from drivers.base import (
    GOOD,
    MISSING,
    NOT_A_NUMBER,
    OVERLOAD,
    QUALITIES,
    Identity,
    IdentityError,
    RawReading,
    no_reading,
)
from drivers.conversation import Conversation, NoAnswer, NotTheAnswer, Pace, Question, Stranger, read_pace
from drivers.lines import Garbled, crc16_modbus
from drivers.options import OptionReader, must_be_fit
from drivers.rota import Rota
from drivers.transport import Clock, Transport, read_port

CONNECT_S: Final = 2.0
TABLES: Final = {"coil": 1, "discrete": 2, "holding": 3, "input": 4}
"""Name of a table -> function code that reads it."""
TYPES: Final = {"int16": "h", "uint16": "H", "int32": "i", "uint32": "I", "float32": "f", "float64": "d"}
MOST_REGISTERS: Final = 125
EXCEPTIONS: Final = {
    1: "illegal function", 2: "illegal data address", 3: "illegal data value", 4: "server device failure",
    5: "acknowledge", 6: "server device busy", 8: "memory parity error", 10: "gateway path unavailable",
    11: "gateway target device failed to respond",
}  # fmt: skip

T = TypeVar("T")
Value = tuple[float, str]


# ------------------------------------------------------------------------------ codecs, no I/O


@dataclass(frozen=True, slots=True)
class Frame:
    """One answer: ``transaction`` is 0 in RTU; ``pdu`` begins with the function code."""

    transaction: int
    unit: int
    pdu: bytes


class _FrameCodec:
    """What both framings share. After garbage nothing is believed until ``reset``: frames have no marks."""

    blank = b""

    def __init__(self) -> None:
        self._pending = b""
        self._lost = False

    @property
    def midway(self) -> bool:
        return bool(self._pending) or self._lost

    def reset(self) -> None:
        self._pending, self._lost = b"", False

    def feed(self, data: bytes) -> list[Frame | Garbled]:
        """Take any slice of the stream; return the frames it completes, and at most one Garbled."""
        events: list[Frame | Garbled] = []
        if not self._lost:
            self._pending += data
        while self._pending and not self._lost:
            event = self._first(self._pending)
            if event is None:
                break
            events.append(event)
            self._lost = isinstance(event, Garbled)
        if self._lost:
            self._pending = b""
        return events

    def _first(self, data: bytes) -> Frame | Garbled | None:
        raise AssertionError("a subclass says how")


class RtuCodec(_FrameCodec):
    """Frames of Modbus over Serial Line: unit, function code, data, CRC with its low byte first."""

    @staticmethod
    def request(unit: int, pdu: bytes) -> bytes:
        body = bytes([unit]) + pdu
        return body + crc16_modbus(body).to_bytes(2, "little")

    def _first(self, data: bytes) -> Frame | Garbled | None:
        if len(data) < 3:
            return None
        code = data[1]
        if code not in TABLES.values() and code - 0x80 not in TABLES.values():
            return Garbled(data[:3], f"function code 0x{code:02x}")
        size = 5 if code & 0x80 else 5 + data[2]
        if len(data) < size:
            return None
        body, crc = data[: size - 2], int.from_bytes(data[size - 2 : size], "little")
        if crc16_modbus(body) != crc:
            return Garbled(data[:size], "its checksum is wrong")
        self._pending = data[size:]
        return Frame(0, body[0], body[1:])


class TcpCodec(_FrameCodec):
    """Frames of Modbus TCP: transaction, protocol 0, length, unit, then the same as in RTU without CRC."""

    @staticmethod
    def request(transaction: int, unit: int, pdu: bytes) -> bytes:
        return struct.pack(">HHHB", transaction, 0, len(pdu) + 1, unit) + pdu

    def _first(self, data: bytes) -> Frame | Garbled | None:
        if len(data) < 7:
            return None
        transaction, protocol, length, unit = struct.unpack(">HHHB", data[:7])
        if protocol != 0 or not 3 <= length <= 254:
            return Garbled(data[:7], f"protocol {protocol}, length {length}")
        if len(data) < 6 + length:
            return None
        self._pending = data[6 + length :]
        return Frame(transaction, unit, data[7 : 6 + length])


def payload(frame: Frame, unit: int, code: int, size: int) -> bytes:
    """Return the data bytes of an answer; NotTheAnswer unless unit, function and size are as asked."""
    got = frame.pdu
    if frame.unit != unit:
        raise NotTheAnswer(f"got an answer of unit {frame.unit}, need unit {unit}")
    if got[0] == code | 0x80 and len(got) == 2:
        raise NotTheAnswer(
            f"unit {unit} answers with exception {got[1]} ({EXCEPTIONS.get(got[1], 'unknown')})"
        )
    if got[0] != code or len(got) < 2 or got[1] != size or len(got) != 2 + size:
        raise NotTheAnswer(f"got {got[:8].hex(' ')}, need function {code} with {size} bytes")
    return got[2:]


# -------------------------------------------------------------------------------- the options


@dataclass(frozen=True, slots=True)
class Register:
    """Where one reading stands and how it is read; ``size`` in registers or bits."""

    name: str
    unit: int
    table: str
    address: int
    kind: str
    little_words: bool
    little_bytes: bool
    scale: float
    no_reading: Mapping[int, str]

    @property
    def size(self) -> int:
        return struct.calcsize(TYPES[self.kind]) // 2 if self.table in ("holding", "input") else 1

    def read(self, data: bytes) -> Value:
        """Read the value from the bytes of exactly its registers, most significant byte first on the wire."""
        words = [data[i : i + 2] for i in range(0, len(data), 2)]
        if self.little_bytes:
            words = [word[::-1] for word in words]
        if self.little_words:
            words.reverse()
        number = struct.unpack(">" + TYPES[self.kind], b"".join(words))[0]
        if number in self.no_reading:
            return math.nan, self.no_reading[number]
        if math.isnan(number):
            return math.nan, NOT_A_NUMBER
        value = number * self.scale
        return (value, GOOD) if math.isfinite(value) else (math.nan, OVERLOAD)


@dataclass(frozen=True, slots=True)
class Block:
    """One request: neighbouring registers of one unit's table."""

    unit: int
    table: str
    address: int
    size: int
    registers: tuple[Register, ...]

    @property
    def pdu(self) -> bytes:
        return struct.pack(">BHH", TABLES[self.table], self.address, self.size)

    @property
    def voice(self) -> str:
        return f"unit {self.unit} {self.table} {self.answer_size}"

    @property
    def answer_size(self) -> int:
        return 2 * self.size if self.table in ("holding", "input") else (self.size + 7) // 8

    def read(self, data: bytes) -> dict[str, Value]:
        """Return name -> (value, quality) of all readings in the answer's data bytes."""
        values: dict[str, Value] = {}
        for register in self.registers:
            at = register.address - self.address
            if self.table in ("holding", "input"):
                values[register.name] = register.read(data[2 * at : 2 * (at + register.size)])
            else:
                values[register.name] = (float(data[at // 8] >> at % 8 & 1), GOOD)
        return values


def blocks(registers: Sequence[Register]) -> list[Block]:
    """Group registers that follow one another without a gap; a gap may be forbidden to read."""
    found: list[Block] = []
    for r in sorted(registers, key=lambda r: (r.unit, r.table, r.address)):
        last = found[-1] if found else None
        if last is not None and (last.unit, last.table) == (r.unit, r.table):
            end = max(last.address + last.size, r.address + r.size)
            if r.address <= last.address + last.size and end - last.address <= MOST_REGISTERS:
                found[-1] = Block(r.unit, r.table, last.address, end - last.address, (*last.registers, r))
                continue
        found.append(Block(r.unit, r.table, r.address, r.size, (r,)))
    return found


@dataclass(frozen=True, slots=True)
class _Options:
    make_port: Callable[[Clock | None], Transport]
    tcp: bool
    pace: Pace
    yields: tuple[str, ...]
    blocks: tuple[Block, ...]
    who: Block | None
    text: re.Pattern[str] | None
    equals: float
    declared: str
    connect_timeout_s: float


_KEYS: Final = (
    "unit", "table", "register", "type", "word_order", "byte_order", "scale", "no_reading"
)  # fmt: skip


def _read_options(options: object) -> tuple[_Options, list[tuple[str, str]]]:
    top = OptionReader(options)
    make_port = read_port(top)
    over_socket = str(top.raw("port")).startswith("socket:")
    tcp = top.choice("framing", ("rtu", "tcp"), "tcp" if over_socket else "rtu") == "tcp"
    if tcp and not over_socket:
        top.wrong("framing", "got tcp, need a port like socket://host:502")
    for key in _KEYS:
        top.has(key)
    registers = [_register(name, own, top) for name, own in top.parts("yields").items()]
    asked = blocks(registers)
    voices = {block.voice for block in asked}
    who, text, equals, declared = _identity(top)
    alike = not tcp and len(voices) < len(asked)
    pace = read_pace(top, 0.5, alike, nameless=who is None)
    read = _Options(
        make_port, tcp, pace, tuple(r.name for r in registers), tuple(asked), who, text, equals, declared,
        top.number("connect_timeout_s", CONNECT_S, least=0.05, most=60.0),
    )  # fmt: skip
    return read, top.found()


def _register(name: str, own: OptionReader, top: OptionReader) -> Register:
    source = {key: own if own.has(key) else top for key in _KEYS}
    table = source["table"].choice("table", TABLES, "holding")
    register = Register(
        name,
        source["unit"].whole("unit", 1, least=0, most=255),
        table,
        own.whole("register", None, least=0, most=65535),
        source["type"].choice("type", TYPES, "int16"),
        source["word_order"].choice("word_order", ("big", "little"), "big") == "little",
        source["byte_order"].choice("byte_order", ("big", "little"), "big") == "little",
        source["scale"].number("scale", 1.0, least=-1e12, most=1e12),
        _no_reading(source["no_reading"]),
    )
    if register.address + register.size > 65536:
        own.wrong("register", f"got {register.address}, need one that leaves room for {register.kind}")
    own.done()
    return register


def _no_reading(options: OptionReader) -> dict[int, str]:
    got = options.raw("no_reading")
    if got is None:
        return {}
    words = QUALITIES - {GOOD}
    if not isinstance(got, dict) or not all(type(k) is int and v in words for k, v in got.items()):
        options.wrong("no_reading", f"got {got!r}, need numbers with one of {', '.join(sorted(words))}")
        return {}
    return dict(got)


def _identity(top: OptionReader) -> tuple[Block | None, re.Pattern[str] | None, float, str]:
    inside = top.part("identity")
    if inside is None:
        top.wrong(
            "identity",
            "is missing, need {register: ..., equals: ...}, {register: ..., registers: ..., text: ...}, "
            'or {declared: "..."} where it cannot say',
        )
        return None, None, 0.0, ""
    if inside.has("declared"):
        declared = inside.text("declared")
        inside.done()
        return None, None, 0.0, declared
    unit = (inside if inside.has("unit") else top).whole("unit", 1, least=0, most=255)
    table = inside.choice("table", ("holding", "input"), "holding")
    address = inside.whole("register", None, least=0, most=65535)
    if inside.has("text"):
        size = inside.whole("registers", None, least=1, most=MOST_REGISTERS)
        text = inside.pattern("text")
        inside.done()
        return Block(unit, table, address, size, ()), text, 0.0, ""
    kind = inside.choice("type", TYPES, "uint16")
    little = inside.choice("word_order", ("big", "little"), "big") == "little"
    register = Register("identity", unit, table, address, kind, little, False, 1.0, {})
    equals = inside.number("equals", None, least=-1e18, most=1e18)
    inside.done()
    return Block(unit, table, address, register.size, (register,)), None, equals, ""


# --------------------------------------------------------------------------------- the driver


class Modbus:
    """A driver for Modbus RTU and TCP; options as at the head of this module."""

    listens = False

    def __init__(
        self, options: Mapping[str, Any], *, port: Transport | None = None, clock: Clock | None = None
    ) -> None:
        self._options, problems = _read_options(options)
        must_be_fit(problems)
        o = self._options
        self.yields: tuple[str, ...] = o.yields
        self._port = o.make_port(clock) if port is None else port
        self._talk: Conversation[Frame] = Conversation(
            self._port, TcpCodec() if o.tcp else RtuCodec(), o.pace
        )
        self._rota = Rota(len(o.blocks))
        self._transactions = count(1)
        self._identified = False

    @classmethod
    def check_options(cls, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return _read_options(options)[1]

    def open(self) -> None:
        self._identified = False
        self._port.open(self._port.clock.now_s() + self._options.connect_timeout_s)
        self._talk.begin()
        self._rota = Rota(len(self._options.blocks))

    def close(self) -> None:
        self._identified = False
        self._port.close()

    def identify(self) -> Identity:
        o = self._options
        if o.who is None:
            self._talk.canaries = [self._asking(block) for block in o.blocks]
            self._talk.warm_up()
            self._identified = True
            return Identity(o.declared, declared=True)
        who = o.who
        distinct = o.tcp or who.voice not in {block.voice for block in o.blocks}
        text = self._talk.introduce(lambda: self._question(who, self._read_identity, distinct))
        self._identified = True
        return Identity(text)

    def _read_identity(self, data: bytes) -> str:
        o = self._options
        assert o.who is not None
        if o.text is not None:
            text = data.decode("latin-1").strip("\0 ")
            if not o.text.fullmatch(text):
                raise Stranger(f"got the identity {text!r}, need one like {o.text.pattern!r}")
            return text
        value, _ = o.who.read(data)["identity"]
        if value != o.equals:
            raise Stranger(f"got the identity {value:g}, need {o.equals:g}")
        return f"unit {o.who.unit} register {o.who.address} = {value:g}"

    def poll(self, deadline_s: float) -> list[RawReading]:
        if not self._identified:
            raise IdentityError(f"{self._port.name}: got a poll, need identify() after open() first")
        until_s = self._port.clock.now_s() + deadline_s
        values: dict[str, Value] = dict.fromkeys(self.yields, (math.nan, MISSING))
        answered = False
        for i in self._rota.turn():
            block = self._options.blocks[i]
            answer = self._talk.ask(self._question(block, block.read, self._options.tcp), until_s)
            self._rota.note(i, answer)
            if not isinstance(answer, NoAnswer):
                answered = True
                values |= answer
            else:
                values |= {r.name: (math.nan, answer.quality) for r in block.registers}
        self._talk.end_of_poll(answered)
        return [
            RawReading(name, value) if quality == GOOD else no_reading(name, quality)
            for name, (value, quality) in ((name, values[name]) for name in self.yields)
        ]

    def _asking(self, block: Block) -> Callable[[], Question[Frame, object]]:
        return lambda: self._question(block, block.read, self._options.tcp)

    def _question(self, block: Block, read: Callable[[bytes], T], distinct: bool) -> Question[Frame, T]:
        """Ask for a block; over TCP each question has a transaction number of its own."""
        transaction = next(self._transactions) % 65536 if self._options.tcp else 0

        def answer(frame: Frame) -> T:
            if frame.transaction != transaction:
                raise NotTheAnswer(f"got an answer to transaction {frame.transaction}, need {transaction}")
            return read(payload(frame, block.unit, TABLES[block.table], block.answer_size))

        if self._options.tcp:
            request = TcpCodec.request(transaction, block.unit, block.pdu)
        else:
            request = RtuCodec.request(block.unit, block.pdu)
        return Question(request, answer, block.voice, distinct)
