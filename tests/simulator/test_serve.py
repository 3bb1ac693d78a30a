"""Emulated instruments behind real pseudo-terminals and sockets, in lab time."""

from __future__ import annotations

import json
import os
import select
import signal
import socket
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
import serial

from simulator.serve import Server, boot_ns

RIGS = {"H1": {"scenario": "tertiary_and_rupture"}, "H4": {"scenario": "quiet", "grid_s": 600.0}}
GAUGE = {
    "protocol": "text",
    "transport": "pty",
    "yields": {"left": {"source": "H1.left", "scale": 25.0}, "right": {"source": "H1.right", "scale": 25.0}},
    "asks": {"A": "{left:+.5f},{right:+.5f}"},
}
SCANNER = {
    "protocol": "scpi",
    "transport": "tcp",
    "yields": {101: "H1.top", "102": "H1.broken", "103": "H4.mid"},
}


def spec(**instruments: Any) -> dict[str, Any]:
    return {"speed": 3600.0, "seed": 7, "rigs": RIGS, "instruments": instruments}


def connect(port: str) -> socket.socket:
    host, number = port.removeprefix("socket://").split(":")
    return socket.create_connection((host, int(number)), timeout=5.0)


def question(connection: socket.socket, line: str) -> str:
    connection.sendall(f"{line}\n".encode())
    answer = b""
    while not answer.endswith(b"\n"):
        answer += connection.recv(4096)
    return answer.decode().strip()


def test_a_terminal_and_a_socket_answer_and_can_be_opened_again() -> None:
    """A driver closes and reopens its port after every failure; the instrument must not mind."""
    with Server(spec(gauge=GAUGE, scanner=SCANNER)) as server:
        for _ in range(3):
            with serial.Serial(server.ports["gauge"], timeout=5.0) as port:
                port.write(b"A\r\n")
                left, right = port.readline().decode().split(",")
                assert 0.0 < float(left) < 5.0
                assert float(right) != float(left)
            with connect(server.ports["scanner"]) as connection:
                assert question(connection, "*IDN?").startswith("EXAMPLE,")
                readings = question(connection, "MEAS:TEMP? (@101:103)").split(",")
                assert 978.0 < float(readings[0]) < 982.0
                assert float(readings[1]) == 0.0


def test_lab_time_runs_fast_and_is_agreed_by_three_numbers() -> None:
    """Daemon and emulation derive lab time from the same origin; a rupture then comes when it is due."""
    # an origin 160 lab hours ago: the specimen of life 150 h has broken
    past = spec(scanner=SCANNER, gauge=GAUGE) | {"origin_boot_ns": boot_ns() - int(160.0 * 1e9)}
    with Server(past) as server:
        assert 160.0 <= server.lab_h() < 170.0
        with connect(server.ports["scanner"]) as connection:
            assert float(question(connection, "MEAS:VOLT? (@102)")) == 1.0
        with serial.Serial(server.ports["gauge"], timeout=5.0) as port:
            port.write(b"A\r\n")
            assert port.readline() == b"OPEN,OPEN\r\n"


def test_an_instrument_that_talks_by_itself_is_heard_on_both_kinds_of_port() -> None:
    """Listening drivers take what comes; here twenty lines a second."""
    talks = {"every_s": 0.05, "line": "{s:+.6f}"}
    talker = {"protocol": "text", "yields": {"s": "H4.strain"}, "talks": talks}
    with (
        Server(spec(a=talker | {"transport": "pty"}, b=talker | {"transport": "tcp"})) as server,
        serial.Serial(server.ports["a"], timeout=5.0) as port,
        connect(server.ports["b"]) as connection,
    ):
        stream = connection.makefile("rb")
        for line in (port.readline(), port.readline(), stream.readline(), stream.readline()):
            assert line.startswith(b"+0.0")
            assert line.endswith(b"\r\n")


def test_a_late_reply_comes_late_and_holds_up_nobody_else() -> None:
    """One thread serves all; a slow instrument is a timer, not a sleep."""
    slow = GAUGE | {"delay_s": 0.3}
    with (
        Server(spec(slow=slow, scanner=SCANNER)) as server,
        serial.Serial(server.ports["slow"], timeout=5.0) as port,
        connect(server.ports["scanner"]) as connection,
    ):
        began_s = time.monotonic()
        port.write(b"A\r\n")
        assert question(connection, "*OPC?") == "1"
        assert not select.select([port.fileno()], [], [], 0.0)[0]
        assert port.readline().count(b",") == 1
        assert time.monotonic() - began_s >= 0.3


def test_babble_that_nobody_reads_costs_bounded_memory_and_no_neighbour() -> None:
    """A megabyte a second into a closed serial line and into a client that does not read."""
    fault = {"faults": [{"kind": "babble", "bytes_per_s": 3e6}]}
    with (
        Server(spec(a=GAUGE | fault, b=GAUGE | fault | {"transport": "tcp"}, scanner=SCANNER)) as server,
        socket.socket() as deaf,
        connect(server.ports["scanner"]) as connection,
    ):
        deaf.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        deaf.connect(("127.0.0.1", int(server.ports["b"].rpartition(":")[2])))
        until_s = time.monotonic() + 0.5
        while time.monotonic() < until_s:
            assert question(connection, "*OPC?") == "1"
        waiting = {link.is_terminal: len(link.waiting) for link in server._links if link.waiting}
    assert 0 < waiting[True] < 100_000
    assert 100_000 < waiting[False] <= 1 << 18


def test_hanging_up_closes_the_connection_and_the_next_one_works() -> None:
    """A half-dead serial-to-TCP converter does just that."""
    rude = SCANNER | {"faults": [{"kind": "hang_up"}]}
    with Server(spec(scanner=rude)) as server:
        with connect(server.ports["scanner"]) as connection:
            connection.sendall(b"*IDN?\n")
            assert connection.recv(100) == b""
        server.instruments["scanner"].faults.faults.clear()
        with connect(server.ports["scanner"]) as connection:
            assert question(connection, "*OPC?") == "1"


def open_descriptors() -> int:
    return len(os.listdir("/proc/self/fd"))


@pytest.mark.skipif(not Path("/proc/self/fd").exists(), reason="counts descriptors in /proc")
def test_a_server_gives_back_every_descriptor() -> None:
    """Test suites start hundreds of them."""
    with Server(spec(gauge=GAUGE, scanner=SCANNER)):
        pass
    before = open_descriptors()
    for _ in range(5):
        with Server(spec(gauge=GAUGE, scanner=SCANNER)) as server, connect(server.ports["scanner"]):
            pass
    assert open_descriptors() == before


@pytest.mark.parametrize("ending", ["stdin", "SIGTERM"])
def test_as_a_program_it_prints_its_ports_and_ends_when_told(tmp_path: Path, ending: str) -> None:
    """Its parent learns the ports from one line, and must never leave it behind."""
    file = tmp_path / "spec.json"
    file.write_text(json.dumps(spec(gauge=GAUGE, scanner=SCANNER)))
    child = subprocess.Popen(
        [sys.executable, "-m", "simulator.serve", str(file)], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    )
    assert child.stdin is not None
    assert child.stdout is not None
    ports = json.loads(child.stdout.readline())
    assert sorted(ports) == ["gauge", "scanner"]
    with connect(ports["scanner"]) as connection:
        assert question(connection, "*OPC?") == "1"
    if ending == "stdin":
        child.stdin.close()
    else:
        child.send_signal(signal.SIGTERM)
    assert child.wait(10.0) == 0
    child.stdout.close()
    child.stdin.close()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"speeed": 1}, "speeed: unknown"),
        ({"speed": 0}, "speed: got 0"),
        ({"rigs": None}, "rigs: got None"),
        ({"rigs": {"H1": {"scenario": "boom"}}}, "rigs.H1.scenario: got 'boom'"),
        ({"rigs": {"H1": {"duration_h": 10}}}, "rigs.H1: missing"),
        ({"rigs": {"H1": {"scenario": "quiet", "grid_s": 0}}}, "rigs.H1.grid_s: got 0.0"),
        (
            {"rigs": {"H1": {"scenario": "quiet", "events": [{"kind": "x", "at_h": 1}]}}},
            r"event.kind: got 'x'",
        ),
        ({"instruments": {"g": {"protocol": "modbus"}}}, "instruments.g.protocol: got 'modbus'"),
        ({"instruments": {"g": GAUGE | {"transport": "usb"}}}, "instruments.g.transport: got 'usb'"),
        (
            {"instruments": {"g": GAUGE | {"yields": {"a": "H1.toes"}}}},
            "instruments.g.yields.a: got 'H1.toes'",
        ),
        ({"instruments": {"g": GAUGE | {"yields": {"a": "left"}}}}, "wanted RIG.CHANNEL with RIG of"),
    ],
)
def test_a_wrong_bench_is_refused_by_place(change: dict[str, Any], message: str) -> None:
    """It is written by hand in a lab file; the daemon passes the message on."""
    with pytest.raises(ValueError, match=message):
        Server(spec(gauge=GAUGE) | change)


def test_a_wrong_bench_ends_the_program_with_code_2(tmp_path: Path) -> None:
    """The parent reads the reason from standard error."""
    file = tmp_path / "spec.json"
    file.write_text('{"rigs": {}, "instruments": {"g": {}}}')
    done = subprocess.run(
        [sys.executable, "-m", "simulator.serve", str(file)], capture_output=True, text=True, check=False
    )
    assert done.returncode == 2
    assert "instruments.g.protocol: got None" in done.stderr
