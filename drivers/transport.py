"""Byte streams to instruments: serial ports, pseudo-terminals and TCP, each call with a deadline.

Deadlines are instants on the transport's own monotonic clock (``until_s``), so that one deadline
can be handed down through several calls. Everything that goes wrong on the wire becomes a LinkError.

What was found out about the parts and is taken care of here:

* pyserial's ``is_open`` stays true after an adapter was pulled out. A descriptor that reports
  readiness and then reads nothing is gone; that is what ``read`` looks for.
* pyserial sets up a port well, but its ``read`` re-configures the port whenever the time-out changes,
  its ``write`` may block for ever, and its TCP class sleeps in ``close`` and leaks the socket when the
  peer went first. So pyserial opens and configures; bytes move by ``poll(2)`` and non-blocking reads
  and writes, the same for both kinds.
* pyserial clears INPCK: a byte with a wrong parity bit would pass as good. It is set again where the
  frame has parity; the kernel then hands over NUL for such a byte and the codec calls the line garbled.
* closing a serial port can wait for unsent bytes (30 s in Linux): they are thrown away first.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import select
import socket
import termios
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final, Protocol, runtime_checkable

import serial

from drivers.base import LinkError
from drivers.options import OptionReader

CHUNK: Final = 4096
FLUSH_MOST: Final = 1 << 20
"""Bytes thrown away in one ``flush_input`` at most: a babbling peer must not hold the caller."""
BAUDS: Final = (300, 600, 1200, 2400, 4800, 9600, 19200, 38400, 57600, 115200, 230400, 460800, 921600)
PORT_HELP: Final = "/dev/serial/by-id/..., another absolute path, or socket://host:port"
_SOCKET = re.compile(r"socket://(?P<host>\[[0-9A-Fa-f:.%]+\]|[A-Za-z0-9._-]+):(?P<port>[0-9]{1,5})")


class Clock(Protocol):
    """Where time comes from; replaced in tests."""

    def now_s(self) -> float: ...
    def sleep(self, duration_s: float) -> None: ...


class SystemClock:
    """The machine's monotonic clock."""

    def now_s(self) -> float:
        return time.monotonic()

    def sleep(self, duration_s: float) -> None:
        time.sleep(max(0.0, duration_s))


@runtime_checkable
class Transport(Protocol):
    """One byte stream. ``open`` after ``close`` is allowed any number of times; ``close`` twice too."""

    name: str
    clock: Clock
    fresh: bool
    """Whether ``open`` begins a stream of its own, on which no answer to an earlier one can arrive."""

    def open(self, until_s: float) -> None: ...
    def close(self) -> None: ...
    def write(self, data: bytes, until_s: float) -> None:
        """Hand over all of ``data`` or raise LinkError."""
        ...

    def read(self, most: int, until_s: float) -> bytes:
        """Return 1 to ``most`` bytes as soon as there are any; b"" when the time is up."""
        ...

    def flush_input(self) -> int:
        """Throw away what has arrived, without waiting; return how many bytes that were."""
        ...


@dataclass(frozen=True, slots=True)
class LineSettings:
    """How a serial line is set up; ignored by TCP."""

    baud: int = 9600
    frame: str = "8N1"
    xonxoff: bool = False
    rtscts: bool = False
    dtr: bool | None = None
    rts: bool | None = None


class _Descriptor:
    """What serial and TCP share: a non-blocking file descriptor and poll(2)."""

    fresh = False

    def __init__(self, name: str, clock: Clock | None) -> None:
        self.name = name
        self.clock: Clock = SystemClock() if clock is None else clock
        self._fd: int | None = None

    def _use(self, fd: int) -> None:
        self._fd = fd
        self._readable = select.poll()
        self._readable.register(fd, select.POLLIN)
        self._writable = select.poll()
        self._writable.register(fd, select.POLLOUT)

    def _wait(self, poll: select.poll, until_s: float) -> bool:
        left_s = until_s - self.clock.now_s()
        # rounded up: poll counts in milliseconds, and a wait of 0 ms would spin
        return bool(poll.poll(max(0, int(left_s * 1000.0) + (left_s > 0.0))))

    def _need_fd(self) -> int:
        if self._fd is None:
            raise LinkError(f"{self.name}: got a call while closed, need open() first")
        return self._fd

    def write(self, data: bytes, until_s: float) -> None:
        fd = self._need_fd()
        left = memoryview(data)
        while left:
            try:
                left = left[os.write(fd, left) :]
                continue
            except (BlockingIOError, InterruptedError):
                pass
            except OSError as error:
                raise LinkError(f"{self.name}: writing failed: {error.strerror or error}") from error
            if not self._wait(self._writable, until_s) and self.clock.now_s() >= until_s:
                raise LinkError(f"{self.name}: {len(left)} of {len(data)} bytes could not be sent in time")

    def read(self, most: int, until_s: float) -> bytes:
        fd = self._need_fd()
        while True:
            if not self._wait(self._readable, until_s):
                if self.clock.now_s() >= until_s:
                    return b""
                continue
            try:
                data = os.read(fd, most)
            except (BlockingIOError, InterruptedError):
                continue
            except OSError as error:
                raise LinkError(f"{self.name}: reading failed: {error.strerror or error}") from error
            if not data:
                raise LinkError(f"{self.name}: {self._gone}")
            return data

    def flush_input(self) -> int:
        thrown = 0
        while thrown < FLUSH_MOST:
            data = self.read(CHUNK, -1.0)
            if not data:
                break
            thrown += len(data)
        return thrown

    _gone = "the peer has gone"


class SerialPort(_Descriptor):
    """A serial port or pseudo-terminal, opened exclusively."""

    _gone = "the port has gone (adapter unplugged?)"

    def __init__(self, path: str, line: LineSettings | None = None, clock: Clock | None = None) -> None:
        super().__init__(path, clock)
        self._line = LineSettings() if line is None else line
        self._port: serial.Serial | None = None

    def open(self, until_s: float) -> None:
        self.close()
        line = self._line
        try:
            port = serial.Serial(
                None, line.baud, int(line.frame[0]), line.frame[1], float(line.frame[2:]),
                timeout=0, write_timeout=0, xonxoff=line.xonxoff, rtscts=line.rtscts, exclusive=True,
            )  # fmt: skip
            if line.dtr is not None:
                port.dtr = line.dtr
            if line.rts is not None:
                port.rts = line.rts
            port.port = self.name
            port.open()
            self._port = port
            _mind_parity(port.fileno(), line.frame[1] != "N")
            self._use(port.fileno())
        except (OSError, ValueError, termios.error) as error:
            self.close()
            raise LinkError(f"{self.name}: cannot be opened: {_reason(error)}") from error

    def close(self) -> None:
        port, self._port, self._fd = self._port, None, None
        if port is None:
            return
        with contextlib.suppress(OSError, termios.error, ValueError):
            termios.tcflush(port.fileno(), termios.TCIOFLUSH)
        try:
            port.close()
        except OSError:
            # the descriptor itself is released by the kernel even so; pyserial's helper pipes are not
            for end in ("abort_read_r", "abort_read_w", "abort_write_r", "abort_write_w"):
                fd = getattr(port, "pipe_" + end, None)
                if fd is not None:
                    with contextlib.suppress(OSError):
                        os.close(fd)


class TcpPort(_Descriptor):
    """A TCP connection: an instrument with a network socket, or a serial device server in raw mode."""

    fresh = True
    _gone = "the peer closed the connection"

    def __init__(self, host: str, port: int, clock: Clock | None = None) -> None:
        super().__init__(f"socket://{host}:{port}", clock)
        self._host = host.strip("[]")
        self._tcp_port = port
        self._socket: socket.socket | None = None

    def open(self, until_s: float) -> None:
        self.close()
        problem: Exception | None = None
        for family, address in self._addresses(until_s):
            left_s = until_s - self.clock.now_s()
            if left_s <= 0.0:
                break
            sock = socket.socket(family, socket.SOCK_STREAM)
            try:
                sock.settimeout(left_s)
                sock.connect(address)
                _keep_alive(sock)
                sock.setblocking(False)
            except OSError as error:
                sock.close()
                problem = error
                continue
            self._socket = sock
            self._use(sock.fileno())
            return
        why = "no answer in time" if problem is None else _reason(problem)
        raise LinkError(f"{self.name}: cannot be connected: {why}") from problem

    def _addresses(self, until_s: float) -> list[tuple[int, Any]]:
        """Look the name up in a thread of its own: the resolver knows no deadline."""
        found: list[tuple[int, Any]] = []
        failed: list[OSError] = []

        def look_up() -> None:
            try:
                for family, _, _, _, address in socket.getaddrinfo(
                    self._host, self._tcp_port, type=socket.SOCK_STREAM
                ):
                    found.append((family, address))
            except OSError as error:
                failed.append(error)

        if re.fullmatch(r"[0-9.]+", self._host) or ":" in self._host:
            look_up()  # a numeric address needs no resolver
        else:
            thread = threading.Thread(target=look_up, name=f"look up {self._host}", daemon=True)
            thread.start()
            thread.join(max(0.0, until_s - self.clock.now_s()))
            if thread.is_alive():
                raise LinkError(f"{self.name}: the host name could not be looked up in time")
        if failed:
            raise LinkError(f"{self.name}: unknown host: {_reason(failed[0])}") from failed[0]
        return found

    def close(self) -> None:
        sock, self._socket, self._fd = self._socket, None, None
        if sock is not None:
            with contextlib.suppress(OSError):
                sock.shutdown(socket.SHUT_RDWR)
            with contextlib.suppress(OSError):
                sock.close()


def _mind_parity(fd: int, parity: bool) -> None:
    if parity:
        attributes = termios.tcgetattr(fd)
        attributes[0] |= termios.INPCK
        termios.tcsetattr(fd, termios.TCSANOW, attributes)


def _keep_alive(sock: socket.socket) -> None:
    """Notice within about half a minute that a silent peer was switched off."""
    sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    sock.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
    for option, value in (("TCP_KEEPIDLE", 15), ("TCP_KEEPINTVL", 5), ("TCP_KEEPCNT", 3)):
        if hasattr(socket, option):
            sock.setsockopt(socket.IPPROTO_TCP, getattr(socket, option), value)


def _reason(error: BaseException) -> str:
    number = getattr(error, "errno", None)
    if number in (errno.EAGAIN, errno.EWOULDBLOCK):
        return "in use by another program"
    if isinstance(error, TimeoutError):
        return "no answer in time"
    return getattr(error, "strerror", None) or str(error)


# ------------------------------------------------------------------------------- from options


def read_port(options: OptionReader) -> Callable[[Clock | None], Transport]:
    """Check the options of the port and return how to make it (nothing is opened).

    ``port`` (a stable ``/dev/serial/by-id/...`` name, another absolute path, or ``socket://host:port``),
    ``baud``, ``frame`` (data bits, parity, stop bits: 8N1, 7E1, ...), ``flow_control`` (none, xonxoff,
    rtscts), ``dtr`` and ``rts`` (true or false; some gauges draw their power from these lines).
    """
    name = options.text("port")
    baud = options.whole("baud", 9600, least=50, most=4_000_000)
    if baud not in BAUDS:
        options.wrong("baud", f"got {baud}, need one of " + ", ".join(map(str, BAUDS)))
    frame = options.text("frame", "8N1")
    if not re.fullmatch(r"[78][NEO][12]", frame):
        options.wrong("frame", f"got {frame!r}, need data bits, parity and stop bits like 8N1 or 7E1")
        frame = "8N1"
    flow = options.choice("flow_control", ("none", "xonxoff", "rtscts"), "none")
    dtr = options.flag("dtr", True) if options.has("dtr") else None
    rts = options.flag("rts", True) if options.has("rts") else None
    line = LineSettings(baud, frame, flow == "xonxoff", flow == "rtscts", dtr, rts)
    tcp = _SOCKET.fullmatch(name)
    if tcp is not None:
        host, number = tcp["host"], int(tcp["port"])
        if not 0 < number < 65536:
            options.wrong("port", f"got port number {number}, need 1 to 65535")
        return lambda clock: TcpPort(host, number, clock)
    if name and not (name.startswith("/") and "\0" not in name):
        options.wrong("port", f"got {name!r}, need {PORT_HELP}")
    return lambda clock: SerialPort(name, line, clock)
