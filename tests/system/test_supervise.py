"""Readiness and watchdog as the service manager sees them, on a real socket."""

from __future__ import annotations

import os
import signal
import socket
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from daq.supervise import Signals, Supervisor, notify


@pytest.fixture
def manager(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[socket.socket]:
    """The service manager's end of the notification socket."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as s:
        s.bind(str(tmp_path / "n"))
        s.settimeout(0.2)
        monkeypatch.setenv("NOTIFY_SOCKET", str(tmp_path / "n"))
        yield s


def _heard(s: socket.socket) -> bytes:
    try:
        return s.recv(200)
    except TimeoutError:
        return b""


def test_a_message_arrives_as_it_was_sent(manager: socket.socket) -> None:
    """The protocol is one datagram of KEY=VALUE lines."""
    assert notify("READY=1")
    assert _heard(manager) == b"READY=1"


def test_a_socket_of_the_abstract_name_space_works_too(monkeypatch: pytest.MonkeyPatch) -> None:
    """Service managers use both kinds."""
    name = f"upturn-test-{os.getpid()}"
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as s:
        s.bind("\0" + name)
        s.settimeout(0.2)
        monkeypatch.setenv("NOTIFY_SOCKET", "@" + name)
        assert notify("READY=1")
        assert _heard(s) == b"READY=1"


def test_a_reload_is_asked_for_by_a_signal_and_ends_nothing() -> None:
    """A closed terminal sends the same signal; ten of them are one reload."""
    with Signals() as signals:
        assert not signals.take_reload()
        for _ in range(10):
            os.kill(os.getpid(), signal.SIGHUP)
        began = time.monotonic()
        assert not signals.wait(5.0)
        assert time.monotonic() - began < 4.0  # it is not left waiting
        assert signals.take_reload()
        assert not signals.take_reload()


def test_a_manager_that_does_not_read_holds_nothing_up(manager: socket.socket) -> None:
    """Its queue is full after some ten messages; who waits for it looks after nothing any more."""
    began = time.monotonic()
    while notify("WATCHDOG=1"):
        assert time.monotonic() - began < 20.0
    assert time.monotonic() - began < 5.0


def test_without_a_manager_nothing_is_sent_and_nothing_fails(monkeypatch: pytest.MonkeyPatch) -> None:
    """A run at a desk has no service manager."""
    monkeypatch.delenv("NOTIFY_SOCKET", raising=False)
    assert not notify("READY=1")


def test_the_watchdog_is_fed_only_while_every_loop_moves(manager: socket.socket) -> None:
    """A ping that one loop sends proves only that loop."""
    now, beats = [0.0], {"a": 0, "b": 0}
    supervisor = Supervisor(lambda: now[0])
    for name in beats:
        supervisor.watch(name, lambda name=name: beats[name], 10.0)  # type: ignore[misc]
    assert supervisor.look() == []
    assert _heard(manager) == b"WATCHDOG=1"
    beats["a"] += 1
    now[0] = 11.0
    assert supervisor.look() == [("b", True)]
    assert _heard(manager) == b""
    beats["b"] += 1
    beats["a"] += 1
    now[0] = 12.0
    assert supervisor.look() == [("b", False)]
    assert _heard(manager) == b"WATCHDOG=1"


def test_a_loop_that_is_not_vital_is_told_but_stops_no_ping(manager: socket.socket) -> None:
    """One hung port is no reason to restart the polling of all others."""
    now = [0.0]
    supervisor = Supervisor(lambda: now[0])
    supervisor.watch("bus", lambda: 0, 10.0, vital=False)
    supervisor.look()
    _heard(manager)
    now[0] = 11.0
    assert supervisor.look() == [("bus", True)]
    assert _heard(manager) == b"WATCHDOG=1"


def test_a_storm_of_signals_is_one_word_to_stop_and_blocks_nothing() -> None:
    """A handler that takes a lock may interrupt itself while it holds it, and then waits for ever."""
    before = {n: signal.getsignal(n) for n in (signal.SIGTERM, signal.SIGINT, signal.SIGHUP)}
    try:
        with Signals() as signals:
            assert not signals.wait(0.01)
            storm = threading.Thread(
                target=lambda: [os.kill(os.getpid(), signal.SIGTERM) for _ in range(2000)]
            )
            storm.start()
            began = time.monotonic()
            while not signals.wait(0.5):
                assert time.monotonic() - began < 5.0
            storm.join()
            assert signals.wait(10.0)
        os.kill(os.getpid(), signal.SIGTERM)  # while the house is put in order: changes nothing
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
    with Signals():
        pass
    assert {n: signal.getsignal(n) for n in before} == before
