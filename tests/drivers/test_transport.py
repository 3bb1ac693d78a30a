"""Real pseudo-terminals and sockets: deadlines, unplugging, exclusiveness, descriptors."""

from __future__ import annotations

import os
import socket
import struct
import termios
import threading
import time
import tty
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from drivers.base import LinkError
from drivers.options import OptionReader
from drivers.transport import LineSettings, SerialPort, TcpPort, Transport, read_port


def soon(after_s: float = 1.0) -> float:
    return time.monotonic() + after_s


class Pty:
    """Both ends of a pseudo-terminal; the master plays the instrument."""

    def __init__(self) -> None:
        self.master, self.slave = os.openpty()
        tty.setraw(self.slave)
        self.path = os.ttyname(self.slave)

    def unplug(self) -> None:
        for fd in (self.master, self.slave):
            if fd >= 0:
                os.close(fd)
        self.master = self.slave = -1


@pytest.fixture
def pty() -> Iterator[Pty]:
    pair = Pty()
    yield pair
    pair.unplug()


@pytest.fixture
def listener() -> Iterator[socket.socket]:
    with socket.create_server(("127.0.0.1", 0)) as server:
        server.settimeout(2.0)
        yield server


def tcp_to(listener: socket.socket) -> TcpPort:
    return TcpPort("127.0.0.1", listener.getsockname()[1])


def descriptors() -> int:
    return len(os.listdir("/proc/self/fd"))


needs_proc = pytest.mark.skipif(not Path("/proc/self/fd").exists(), reason="counts descriptors in /proc")


def test_bytes_go_both_ways_through_a_pseudo_terminal(pty: Pty) -> None:
    """Raw means raw: no byte is translated or swallowed, whatever its value."""
    port = SerialPort(pty.path)
    port.open(soon())
    try:
        everything = bytes(range(256))
        port.write(everything, soon())
        assert os.read(pty.master, 1000) == everything
        os.write(pty.master, everything)
        assert port.read(1000, soon()) == everything
    finally:
        port.close()


def test_reading_waits_for_the_deadline_and_no_longer(pty: Pty) -> None:
    """An empty answer means that the time is up, not before and not much later."""
    port = SerialPort(pty.path)
    port.open(soon())
    try:
        started_s = time.monotonic()
        assert port.read(10, started_s + 0.05) == b""
        assert 0.05 <= time.monotonic() - started_s < 0.5
    finally:
        port.close()


def test_bytes_that_trickle_do_not_push_the_deadline_away(pty: Pty) -> None:
    """A read with a time-out per byte would go on for ever here (a byte each 0.3 s)."""
    port = SerialPort(pty.path)
    port.open(soon())
    stop = threading.Event()

    def trickle() -> None:
        while not stop.wait(0.01):
            os.write(pty.master, b"x")

    thread = threading.Thread(target=trickle)
    thread.start()
    try:
        until_s = soon(0.1)
        while port.read(10, until_s):
            pass
        assert time.monotonic() - until_s < 0.5
    finally:
        stop.set()
        thread.join()
        port.close()


def test_writing_to_a_peer_that_takes_nothing_ends_at_the_deadline(pty: Pty) -> None:
    """pyserial without write_timeout would block for ever."""
    port = SerialPort(pty.path)
    port.open(soon())
    try:
        with pytest.raises(LinkError, match="could not be sent in time"):
            port.write(b"x" * 10_000_000, soon(0.05))
    finally:
        started_s = time.monotonic()
        port.close()
        assert time.monotonic() - started_s < 0.5  # unsent bytes do not hold up closing either


@pytest.mark.parametrize("call", [lambda p: p.read(10, soon(0.2)), lambda p: p.flush_input()])
def test_an_adapter_pulled_out_is_noticed_by_reading(pty: Pty, call: Callable[[Transport], object]) -> None:
    """pyserial's is_open stays true; readiness without data, or an I/O error, is the sign."""
    port = SerialPort(pty.path)
    port.open(soon())
    pty.unplug()
    try:
        with pytest.raises(LinkError, match=r"gone|failed"):
            call(port)
    finally:
        port.close()


def test_an_adapter_pulled_out_is_noticed_by_writing(pty: Pty) -> None:
    """The request must not seem to have been sent."""
    port = SerialPort(pty.path)
    port.open(soon())
    pty.unplug()
    try:
        with pytest.raises(LinkError, match="failed"):
            port.write(b"D\r\n", soon(0.2))
    finally:
        port.close()
        port.close()


def test_a_port_is_opened_by_one_program_only(pty: Pty) -> None:
    """Two readers on one port steal each other's bytes."""
    first, second = SerialPort(pty.path), SerialPort(pty.path)
    first.open(soon())
    try:
        with pytest.raises(LinkError, match="in use by another program"):
            second.open(soon())
    finally:
        first.close()
    second.open(soon())
    second.close()


def test_a_port_that_is_not_there_is_a_link_error(tmp_path: Path) -> None:
    """A missing adapter is no mistake in the settings: it may come back."""
    with pytest.raises(LinkError, match="No such file"):
        SerialPort(str(tmp_path / "gauge")).open(soon())


def test_a_file_that_is_no_port_is_a_link_error(tmp_path: Path) -> None:
    """Not an exception that ends the bus thread."""
    path = tmp_path / "gauge"
    path.write_text("")
    with pytest.raises(LinkError, match="cannot be opened"):
        SerialPort(str(path)).open(soon())


def test_wrong_parity_is_not_ignored_by_the_kernel(pty: Pty) -> None:
    """pyserial clears INPCK; without it a byte with a wrong parity bit passes as good (termios(3))."""
    for frame, minded in (("7E1", True), ("8N1", False)):
        port = SerialPort(pty.path, LineSettings(frame=frame))
        port.open(soon())
        try:
            iflag = termios.tcgetattr(pty.slave)[0]
            assert bool(iflag & termios.INPCK) == minded
            assert not iflag & termios.IGNPAR  # IGNPAR would drop the byte and make 12.3 of 12.43
        finally:
            port.close()


def test_what_waited_before_opening_or_flushing_is_not_read(pty: Pty) -> None:
    """Old bytes are the beginning of a reading under the wrong name."""
    os.write(pty.master, b"old")
    port = SerialPort(pty.path)
    port.open(soon())
    try:
        assert port.read(10, soon(0.05)) == b""
        os.write(pty.master, b"late")
        time.sleep(0.02)
        assert port.flush_input() == 4
        assert port.flush_input() == 0
        os.write(pty.master, b"new")
        assert port.read(10, soon()) == b"new"
    finally:
        port.close()


@needs_proc
def test_a_thousand_unplugged_adapters_leave_no_descriptor(tmp_path: Path) -> None:
    """A descriptor left open makes the adapter come back under another number."""
    link = tmp_path / "by-id-gauge"
    before = descriptors()
    port = SerialPort(str(link))
    for turn in range(1000):
        pair = Pty()
        link.unlink(missing_ok=True)
        link.symlink_to(pair.path)
        port.open(soon())
        if turn % 2:
            port.write(b"D", soon())
        pair.unplug()
        with pytest.raises(LinkError):
            port.read(10, soon(0.1))
        port.close()
    assert descriptors() == before


# ------------------------------------------------------------------------------------------ TCP


def test_bytes_go_both_ways_over_tcp(listener: socket.socket) -> None:
    """Also more than one socket buffer holds."""
    port = tcp_to(listener)
    port.open(soon())
    peer, _ = listener.accept()
    with peer:
        try:
            port.write(b"D\r\n", soon())
            assert peer.recv(100) == b"D\r\n"
            peer.sendall(b"+1.5\r\n")
            assert port.read(100, soon()) == b"+1.5\r\n"
            assert port.read(100, soon(0.02)) == b""
        finally:
            port.close()


@pytest.mark.parametrize("reset", [False, True])
def test_a_connection_closed_or_reset_by_the_peer_is_noticed(listener: socket.socket, reset: bool) -> None:
    """End of stream and reset both mean: open again."""
    port = tcp_to(listener)
    port.open(soon())
    peer, _ = listener.accept()
    if reset:
        peer.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
    peer.close()
    try:
        with pytest.raises(LinkError, match=r"closed the connection|reset"):
            port.read(100, soon())
    finally:
        port.close()


def test_a_refused_connection_is_a_link_error_at_once() -> None:
    """Nobody listens: no time is lost."""
    with socket.socket() as unused:
        unused.bind(("127.0.0.1", 0))
        started_s = time.monotonic()
        with pytest.raises(LinkError, match="refused"):
            TcpPort("127.0.0.1", unused.getsockname()[1]).open(soon(2.0))
        assert time.monotonic() - started_s < 1.0


def test_a_peer_that_accepts_nobody_costs_no_more_than_the_deadline() -> None:
    """A full accept queue on loopback behaves like a black hole: connection requests go unanswered."""
    with socket.socket() as server:
        server.bind(("127.0.0.1", 0))
        server.listen(0)
        callers = []
        try:
            for _ in range(4):
                caller = socket.socket()
                caller.setblocking(False)
                caller.connect_ex(server.getsockname())
                callers.append(caller)
            time.sleep(0.02)
            started_s = time.monotonic()
            with pytest.raises(LinkError, match="no answer in time"):
                TcpPort("127.0.0.1", server.getsockname()[1]).open(soon(0.1))
            assert time.monotonic() - started_s < 0.6
        finally:
            for caller in callers:
                caller.close()


def test_an_unknown_host_name_is_a_link_error(monkeypatch: pytest.MonkeyPatch) -> None:
    """The reserved domain of RFC 6761 that never exists."""

    def nobody(*_: object, **__: object) -> list[object]:
        raise socket.gaierror(socket.EAI_NONAME, "Name or service not known")

    monkeypatch.setattr(socket, "getaddrinfo", nobody)
    with pytest.raises(LinkError, match="unknown host"):
        TcpPort("gauge.invalid", 4001).open(soon(1.0))


def test_a_resolver_that_hangs_does_not_hang_the_bus(monkeypatch: pytest.MonkeyPatch) -> None:
    """getaddrinfo knows no deadline; it waits in a thread of its own."""
    release = threading.Event()

    def hang(*_: object, **__: object) -> list[object]:
        release.wait(5.0)
        return []

    monkeypatch.setattr(socket, "getaddrinfo", hang)
    started_s = time.monotonic()
    with pytest.raises(LinkError, match="looked up"):
        TcpPort("gauge.example", 4001).open(soon(0.05))
    assert time.monotonic() - started_s < 0.5
    release.set()


@needs_proc
def test_connections_that_break_leave_no_descriptor(listener: socket.socket) -> None:
    """pyserial's own TCP class leaks the socket when the peer went first."""
    before = descriptors()
    port = tcp_to(listener)
    for turn in range(200):
        port.open(soon())
        peer, _ = listener.accept()
        if turn % 2:
            peer.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
        peer.close()
        with pytest.raises(LinkError):
            port.read(100, soon())
        if turn % 3:
            port.close()
    port.close()
    assert descriptors() == before


@pytest.mark.parametrize("make", [lambda: SerialPort("/dev/none"), lambda: TcpPort("127.0.0.1", 9)])
def test_a_closed_port_says_so(make: Callable[[], Transport]) -> None:
    """Rather than fail with something that nobody catches."""
    port = make()
    for call in (
        lambda: port.read(1, soon(0.01)),
        lambda: port.write(b"x", soon(0.01)),
        port.flush_input,
    ):
        with pytest.raises(LinkError, match="need open"):
            call()
    port.close()


# -------------------------------------------------------------------------------------- options


@pytest.mark.parametrize(
    ("given", "kind"),
    [
        ({"port": "/dev/serial/by-id/usb-gauge-port0", "baud": 19200, "frame": "7E2"}, SerialPort),
        ({"port": "socket://192.168.1.20:4001"}, TcpPort),
        ({"port": "socket://[::1]:4001"}, TcpPort),
        ({"port": "socket://gauge-3.lab:4001"}, TcpPort),
    ],
)
def test_a_port_name_says_what_it_is(given: dict[str, object], kind: type) -> None:
    """By its form alone; nothing is opened."""
    options = OptionReader(given)
    make = read_port(options)
    assert options.found() == []
    assert isinstance(make(None), kind)


@pytest.mark.parametrize(
    ("given", "place", "need"),
    [
        ({}, "port", "is missing"),
        ({"port": "COM3"}, "port", "/dev/serial/by-id"),
        ({"port": "ttyUSB0"}, "port", "absolute path"),
        ({"port": "socket://host"}, "port", "socket://host:port"),
        ({"port": "socket://host:0"}, "port", "1 to 65535"),
        ({"port": "socket://host:99999"}, "port", "1 to 65535"),
        ({"port": "/dev/x", "baud": 9601}, "baud", "9600"),
        ({"port": "/dev/x", "baud": True}, "baud", "whole number"),
        ({"port": "/dev/x", "frame": "8X1"}, "frame", "8N1"),
        ({"port": "/dev/x", "flow_control": "yes"}, "flow_control", "xonxoff"),
        ({"port": "/dev/x", "dtr": "on"}, "dtr", "true or false"),
    ],
)
def test_a_wrong_port_option_is_named(given: dict[str, object], place: str, need: str) -> None:
    """Place, got, wanted."""
    options = OptionReader(given)
    read_port(options)
    (found,) = options.found()
    assert found[0] == place
    assert need in found[1]
