"""Far ends for driver tests, written by hand: two protocols, every misbehaviour, three kinds of wire."""

from __future__ import annotations

import contextlib
import heapq
import math
import os
import random
import select
import socket
import struct
import threading
import time
import tty
from collections import defaultdict
from collections.abc import Callable, Collection, Iterable
from pathlib import Path

from drivers.checks import BEHAVIOURS
from drivers.lines import crc16_modbus
from drivers.scripted import ScriptedPort

Answers = list[tuple[float, bytes]]


class FaultyPeer:
    """A peer that numbers what it says. Subclasses ``compose`` the answer to one request."""

    can = frozenset(BEHAVIOURS)
    end = b"\r\n"
    sealed = False
    """Whether answers carry a checksum, so that any damage is visible."""
    listens = False

    def __init__(
        self, seed: int = 0, *, reply_s: float = 0.004, timeout_s: float = 0.08, longest_s: float = 0.16
    ) -> None:
        self.rng = random.Random(seed)
        self.reply_s, self.timeout_s, self.longest_s = reply_s, timeout_s, longest_s
        self.second_copy_s = (0.0, 0.0)
        """When the second of two equal answers comes, after the first."""
        self.how = "well"
        self.mood: Callable[[], str] | None = None
        """Chooses the behaviour anew for each request."""
        self.faults: list[str] = []
        """What the mood chose."""
        self.asked = 0
        self._n = 0
        self._owed: dict[str, list[float]] = defaultdict(list)
        self._held: bytes = b""
        self._pending = b""
        self.gone: Callable[[bool], None] = lambda gone: None
        self.say: Callable[[float, bytes], None] = lambda delay_s, data: None
        self.now_s: Callable[[], float] = time.monotonic

    # -- what check_driver asks of it
    def behave(self, how: str) -> None:
        if (how == "gone") != (self.how == "gone"):
            self.gone(how == "gone")
            self._pending = b""
        self.how = how

    def begin_poll(self) -> None:
        self._owed.clear()

    def owed(self, name: str) -> Collection[float]:
        return self._owed[name]

    # -- what it says
    def number(self, name: str, channel: int) -> str:
        """A number that was never said before, and is now owed."""
        self._n += 1
        text = f"{self.rng.choice('+-')}{self._n % 100000:05d}.{channel:02d}5"
        self._owed[name].append(float(text))
        return text

    def receive(self, data: bytes) -> Answers:
        """Take any slice of what the driver writes."""
        *requests, self._pending = (self._pending + data).split(self.end)
        answers: Answers = []
        for request in requests:
            answers += self._request(request.decode("latin-1"))
        return answers

    def _request(self, request: str) -> Answers:
        self.asked += 1
        if self.mood is not None:
            self.how = self.mood()
            self.faults.append(self.how)
        return self._misbehave(request)

    def compose(self, request: str) -> str | None:
        raise AssertionError("a subclass says how")

    def _misbehave(self, request: str) -> Answers:
        how, rng = self.how, self.rng
        soon = rng.uniform(0.2, 1.0) * self.reply_s
        held, self._held = self._held, b""
        text = self.compose(request)
        if how in ("silent", "gone") or text is None:
            return []
        answer = text.encode("latin-1") + self.end
        late_s = rng.uniform(1.05 * self.timeout_s, 0.95 * self.longest_s)
        if how == "late":
            return [(late_s, answer)]
        if how == "twice":
            return [(soon, answer), (soon + rng.uniform(*self.second_copy_s), answer)]
        if how == "reordered":
            if not held:
                self._held = answer
                return []
            kind = rng.randrange(3)
            if kind == 0:  # in order, the second after a while
                return [(soon, held), (soon + rng.uniform(0.0, 0.9 * self.longest_s), answer)]
            return [(soon, held + answer if kind == 1 else answer + held)]
        if how == "babbling":
            kind = rng.choice(
                [bytes(rng.randrange(256) for _ in range(64)), b"\xff" * 64, b"U" * 64, b"??\r\n"]
            )
            return [(i * self.timeout_s / 40, kind) for i in range(rng.randrange(1, 80))]
        if how == "garbled":
            return [(soon, self._damaged(answer))]
        if how == "cut":
            return [(soon, answer[: rng.randrange(len(answer) - max(0, len(self.end) - 1))])]
        if how == "drip":
            step_s = 1.2 * self.timeout_s / len(answer)
            return [(soon + i * step_s, answer[i : i + 1]) for i in range(len(answer))]
        if rng.random() < 0.3:  # a serial port may split an answer anywhere
            at = rng.randrange(1, len(answer))
            return [(soon, answer[:at]), (soon + 0.3 * self.reply_s, answer[at:])]
        return [(soon, answer)]

    def _damaged(self, answer: bytes) -> bytes:
        at = self.rng.randrange(len(answer) - len(self.end))
        bits = [0x80] if not self.sealed else [0x01, 0x02, 0x04, 0x08, 0x10, 0x40, 0x80]
        if self.sealed and at < len(answer) - len(self.end) - 4:
            bits.append(0x20)  # in the checksum it would only turn A into a, which is no damage
        bit = self.rng.choice(bits)
        return answer[:at] + bytes([answer[at] ^ bit]) + answer[at + 1 :]


class GaugePeer(FaultyPeer):
    """Two sides in one answer: ``D`` -> ``+00001.015,-00002.025``; ``ID`` -> who it is."""

    def compose(self, request: str) -> str | None:
        if request == "ID":
            return "OTHER 9" if self.how == "stranger" else "GAUGE 7 no. 4711"
        if request != "D":
            return "?"
        if self.how == "no_number":
            return self.rng.choice(["OL,OL", "-OL,+9.9E37", "9.91E37,NAN"])
        return f"{self.number('left', 1)},{self.number('right', 2)}"

    options = {  # noqa: RUF012 - a constant
        "ask": "D",
        "identity": {"ask": "ID", "reply": "GAUGE 7.*"},
        "yields": {"left": 1, "right": 2},
    }


class BusPeer(FaultyPeer):
    """Three units that repeat their number, with a checksum: ``#02`` -> ``02:+00001.025*9F3C``."""

    sealed = True
    dead = ""

    def compose(self, request: str) -> str | None:
        unit = request[1:3]
        if request[:1] != "#" or unit not in ("01", "02", "03") or unit == self.dead:
            return None
        word = "BURNOUT" if self.how == "no_number" else self.number(f"t{int(unit)}", int(unit))
        body = f"{unit}:{word}"
        return f"{body}*{crc16_modbus(body.encode()):04X}"

    can = frozenset(BEHAVIOURS) - {"stranger"}
    options = {  # noqa: RUF012
        "ask": "#{unit}",
        "reply": r"(?P<echo>\d\d):(?P<value>.+)",
        "echo": "{unit}",
        "checksum": {"kind": "crc16_modbus", "mark": "*"},
        "identity": {"declared": "three indicators that cannot say who they are"},
        "yields": {"t1": {"unit": "01"}, "t2": {"unit": "02"}, "t3": {"unit": "03"}},
    }


class MutePeer(FaultyPeer):
    """Three units whose answers name no channel: ``#02`` -> ``+00001.025``."""

    can = frozenset(BEHAVIOURS) - {"stranger"}

    def compose(self, request: str) -> str | None:
        unit = request[1:3]
        if request[:1] != "#" or unit not in ("01", "02", "03"):
            return None
        return "----" if self.how == "no_number" else self.number(f"t{int(unit)}", int(unit))

    options = {  # noqa: RUF012
        "ask": "#{unit}",
        "words": {"----": "open_circuit"},
        "identity": {"declared": "three indicators that cannot say who they are"},
        "yields": {"t1": {"unit": "01"}, "t2": {"unit": "02"}, "t3": {"unit": "03"}},
    }


class ScannerPeer(FaultyPeer):
    """A scanner that speaks SCPI with three channels and an error queue."""

    end = b"\n"

    def __init__(self, seed: int = 0, **times: float) -> None:
        super().__init__(seed, **times)
        self.errors: list[str] = []
        self.commands: list[str] = []

    def compose(self, request: str) -> str | None:
        if request == "*IDN?":
            return "ACME,SCAN-9,1,1" if self.how == "stranger" else "ACME,SCAN-40,4711,1.02"
        if request == "SYST:ERR?":
            return self.errors.pop(0) if self.errors else '+0,"No error"'
        if request == "READ?":
            if self.how == "no_number":
                return self.rng.choice(["+9.9E37,-9.90000000E+37,9.91E37", "9.91e37,+9.91000000E+37,INF"])
            return ",".join(self.number(name, i) for i, name in enumerate(("left", "right", "mid")))
        self.commands.append(request)
        if not request.startswith("CONF"):
            self.errors.append('-113,"Undefined header"')
        return None

    options = {  # noqa: RUF012
        "identity": "ACME,SCAN-40,.*",
        "setup": ["CONF:VOLT:DC (@101,102)"],
        "scan": "READ?",
        "yields": {"left": 101, "right": 102, "mid": 111},
    }


class RtuPeer(FaultyPeer):
    """Modbus RTU: unit 1 with two floats and an oven's temperature in tenths, unit 2 with a break switch."""

    sealed = True
    end = b""

    def receive(self, data: bytes) -> Answers:
        self._pending += data
        answers: Answers = []
        while len(self._pending) >= 8:
            request, self._pending = self._pending[:8], self._pending[8:]
            answers += self._request(request.decode("latin-1"))
        return answers

    def compose(self, request: str) -> str | None:
        frame = request.encode("latin-1")
        if bitwise_crc(frame) != b"\0\0":
            return None
        pdu = self.answer(*struct.unpack(">BBHH", frame[:6]))
        return None if pdu is None else (pdu + bitwise_crc(pdu)).decode("latin-1")

    def answer(self, unit: int, code: int, address: int, count: int) -> bytes | None:
        """Unit, function code and data of the answer."""
        strange, nothing = self.how == "stranger", self.how == "no_number"
        if (unit, code, address, count) == (1, 4, 0, 1):
            return struct.pack(">BBBH", 1, 4, 2, 4712 if strange else 4711)
        if (unit, code, address, count) == (1, 4, 100, 4):
            sides = [self._float("left"), self._float("right")]
            if nothing:
                sides = self.rng.sample([math.nan, math.inf, -math.inf], 2)
            return struct.pack(">BBBff", 1, 4, 8, *sides)
        if (unit, code, address, count) == (1, 3, 7, 1):
            raw = int(self._float("oven", 0.1) * 10.0 + 0.5)
            return struct.pack(">BBBh", 1, 3, 2, 32767 if nothing else raw)
        if (unit, code, address, count) == (1, 3, 17, 1):
            raw = int(self._float("room", 0.1) * 10.0 + 0.5)
            return struct.pack(">BBBh", 1, 3, 2, -32768 if nothing else raw)
        return bytes([unit, code | 0x80, 2]) if unit == 1 else None

    def _float(self, name: str, scale: float = 1.0) -> float:
        self._n = self._n % 30000 + 1
        number = self._n * scale if scale != 1.0 else self._n + 0.25
        self._owed[name].append(number)
        return number

    options = {  # noqa: RUF012
        "unit": 1,
        "identity": {"table": "input", "register": 0, "equals": 4711},
        "no_reading": {32767: "open_circuit", -32768: "overload"},
        "yields": {
            "left": {"table": "input", "register": 100, "type": "float32"},
            "right": {"table": "input", "register": 102, "type": "float32"},
            "oven": {"register": 7, "scale": 0.1},
            "room": {"register": 17, "scale": 0.1},
        },
    }


class ModbusTcpPeer(RtuPeer):
    """The same over Modbus TCP, where damage can only be seen in the header."""

    def receive(self, data: bytes) -> Answers:
        self._pending += data
        answers: Answers = []
        while len(self._pending) >= 12:
            request, self._pending = self._pending[:12], self._pending[12:]
            answers += self._request(request.decode("latin-1"))
        return answers

    def compose(self, request: str) -> str | None:
        frame = request.encode("latin-1")
        body = self.answer(*struct.unpack(">BBHH", frame[6:12]))
        return None if body is None else (frame[:4] + struct.pack(">H", len(body)) + body).decode("latin-1")

    def _damaged(self, answer: bytes) -> bytes:
        at = self.rng.randrange(8)
        return answer[:at] + bytes([answer[at] ^ 1 << self.rng.randrange(8)]) + answer[at + 1 :]

    options = {**RtuPeer.options, "framing": "tcp"}  # noqa: RUF012


def bitwise_crc(data: bytes) -> bytes:
    """CRC of Modbus over Serial Line by polynomial division, bit by bit, over the bits as they are sent."""
    register = 0xFFFF
    for bit in (byte >> i & 1 for byte in data for i in range(8)):
        feedback = (register & 1) ^ bit
        register >>= 1
        if feedback:
            register ^= 0xA001
    return struct.pack("<H", register)


class TalkerPeer(FaultyPeer):
    """Talks by itself: ``$L +00001.015 R +00002.025*5A`` with fixed columns."""

    sealed = True
    listens = True
    can = frozenset(BEHAVIOURS) - {"stranger", "late", "reordered", "drip"}

    def __init__(self, seed: int = 0, **times: float) -> None:
        super().__init__(seed, **times)
        self._said: list[tuple[float, dict[str, list[float]]]] = []
        self._began_s = [0.0, 0.0]

    def begin_poll(self) -> None:
        """Say four lines within 15 ms."""
        now_s = self.now_s()
        self._began_s = [self._began_s[1], now_s]
        for i in range(4 if self.how != "gone" else 0):
            self._owed = defaultdict(list)
            arrives_s = 0.0
            for delay_s, data in self._misbehave(""):
                self.say(i * 0.004 + delay_s, data)
                arrives_s = max(arrives_s, i * 0.004 + delay_s)
            self._said.append((now_s + arrives_s, self._owed))

    def owed(self, name: str) -> Collection[float]:
        """What arrived since the poll before the last one began."""
        return [number for when_s, said in self._said if when_s >= self._began_s[0] for number in said[name]]

    def receive(self, data: bytes) -> Answers:
        return []

    def compose(self, request: str) -> str | None:
        nothing = self.how == "no_number"
        left = "OVER      " if nothing else self.number("left", 1)
        right = "OVER      " if nothing else self.number("right", 2)
        body = f"L {left} R {right}"
        value = 0
        for byte in body.encode():
            value ^= byte
        return f"${body}*{value:02X}"

    options = {  # noqa: RUF012
        "listen": True,
        "length": 26,
        "checksum": {"kind": "xor8", "mark": "*", "skip": 1},
        "silence_s": 0.5,
        "identity": {"declared": "a gauge that talks by itself"},
        "yields": {"left": {"columns": [4, 13]}, "right": {"columns": [17, 26]}},
    }


# ------------------------------------------------------------------------------------- wires


def scripted(peer: FaultyPeer) -> ScriptedPort:
    """A scripted port with this peer at its far end."""
    port = ScriptedPort(peer.receive)

    def gone(gone: bool) -> None:
        port.plugged = not gone

    peer.gone, peer.say, peer.now_s = gone, port.say, port.clock.now_s
    return port


class Wire:
    """A thread that carries bytes between a real descriptor and a peer."""

    def __init__(self, peer: FaultyPeer) -> None:
        self._peer = peer
        self._lock = threading.Lock()
        self._due: list[tuple[float, int, bytes]] = []
        self._count = 0
        self._wake_r, self._wake_w = os.pipe()
        self._stopping = False
        self.fd: int | None = None
        peer.gone, peer.say = self._gone, self.say
        self._thread = threading.Thread(target=self._run, daemon=True)

    def __enter__(self) -> Wire:
        self._thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self._stopping = True
        os.write(self._wake_w, b"x")
        self._thread.join(5.0)
        with self._lock:
            self._unplug()
        os.close(self._wake_r)
        os.close(self._wake_w)

    @property
    def port(self) -> str:
        raise AssertionError("a subclass says how")

    def say(self, delay_s: float, data: bytes) -> None:
        with self._lock:
            self._schedule([(delay_s, data)])
        os.write(self._wake_w, b"x")

    def _schedule(self, answers: Iterable[tuple[float, bytes]]) -> None:
        now_s = time.monotonic()
        for delay_s, data in answers:
            self._count += 1
            heapq.heappush(self._due, (now_s + delay_s, self._count, data))

    def _gone(self, gone: bool) -> None:
        with self._lock:
            self._due.clear()
            if gone:
                self._unplug()
            else:
                self._plug()
        os.write(self._wake_w, b"x")

    def _plug(self) -> None: ...
    def _unplug(self) -> None: ...
    def _waiting(self) -> list[int]:
        return [] if self.fd is None else [self.fd]

    def _ready(self, fd: int) -> None:
        try:
            data = os.read(fd, 4096)
        except OSError:
            data = b""
        if data:
            self._schedule(self._peer.receive(data))
        else:
            self._hung_up()

    def _hung_up(self) -> None:
        time.sleep(0.001)  # a pseudo-terminal whose other end is closed reads as an error until it is opened

    def _run(self) -> None:
        while not self._stopping:
            with self._lock:
                fds = self._waiting()
                wait_s = min(self._due[0][0] - time.monotonic(), 0.5) if self._due else 0.5
            try:
                ready, _, _ = select.select([self._wake_r, *fds], [], [], max(0.0, wait_s))
            except OSError:
                continue  # unplugged between the two lines above
            with self._lock:
                if self._wake_r in ready:
                    os.read(self._wake_r, 4096)
                for fd in ready:
                    if fd != self._wake_r and fd in self._waiting():
                        self._ready(fd)
                while self._due and self._due[0][0] <= time.monotonic():
                    data = heapq.heappop(self._due)[2]
                    if self.fd is not None:
                        with contextlib.suppress(OSError):
                            os.write(self.fd, data)


class PtyWire(Wire):
    """A pseudo-terminal behind a stable name, as udev's by-id links give; unplugging changes its number."""

    def __init__(self, peer: FaultyPeer, folder: Path) -> None:
        super().__init__(peer)
        self._link = folder / "by-id-gauge"
        self._plug()

    @property
    def port(self) -> str:
        return str(self._link)

    def _plug(self) -> None:
        master, slave = os.openpty()
        tty.setraw(slave)
        os.set_blocking(master, False)
        self._link.unlink(missing_ok=True)
        self._link.symlink_to(os.ttyname(slave))
        self._slave: int | None = (
            slave  # kept open: an unplugged reader must not look like a plugged-out adapter
        )
        self.fd = master

    def _unplug(self) -> None:
        self._link.unlink(missing_ok=True)
        for fd in (self._slave, self.fd):
            if fd is not None:
                os.close(fd)
        self._slave = self.fd = None


class TcpWire(Wire):
    """A listening socket on loopback that serves one connection at a time; gone means reset and refused."""

    def __init__(self, peer: FaultyPeer) -> None:
        super().__init__(peer)
        self._number = 0
        self._listener: socket.socket | None = None
        self._conn: socket.socket | None = None
        self._plug()

    @property
    def port(self) -> str:
        return f"socket://127.0.0.1:{self._number}"

    def _plug(self) -> None:
        listener = socket.socket()
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind(("127.0.0.1", self._number))
        listener.listen(4)
        self._listener, self._number = listener, listener.getsockname()[1]

    def _unplug(self) -> None:
        self._hung_up(reset=True)
        if self._listener is not None:
            self._listener.close()
        self._listener = None

    def _hung_up(self, reset: bool = False) -> None:
        if self._conn is not None:
            if reset:
                self._conn.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
            self._conn.close()
        self._conn = self.fd = None

    def _waiting(self) -> list[int]:
        return super()._waiting() + ([] if self._listener is None else [self._listener.fileno()])

    def _ready(self, fd: int) -> None:
        if self._listener is not None and fd == self._listener.fileno():
            conn, _ = self._listener.accept()
            self._hung_up()
            conn.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self._conn, self.fd = conn, conn.fileno()
        else:
            super()._ready(fd)
