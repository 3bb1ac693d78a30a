"""Brokers, subscribers and outboxes to test the publisher against; every process is ended by its id."""

from __future__ import annotations

import json
import os
import shutil
import signal
import socket
import subprocess
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties

from daq.publish import BrokerSettings, Pace, Publisher
from daq.store.rows import OutboxRow

FAST = Pace(
    first_retry_s=0.05, most_retry_s=0.2, slow_retry_s=0.4, connect_s=1.0, ack_s=0.8, heartbeat_s=0.4,
    grace_s=0.3, keepalive_s=5,
)  # fmt: skip
SURVIVING = (
    "persistence true\npersistence_location {folder}/\nautosave_interval 1\nautosave_on_changes true\n"
)


def free_port() -> int:
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return int(s.getsockname()[1])


def wait_until(ready: Callable[[], bool], timeout_s: float = 10.0) -> bool:
    end = time.monotonic() + timeout_s
    while time.monotonic() < end:
        if ready():
            return True
        time.sleep(0.01)
    return ready()


def mosquitto_path() -> str:
    """Return the program, or skip the test with a notice."""
    found = shutil.which("mosquitto") or shutil.which("mosquitto", path="/usr/sbin:/usr/local/sbin")
    if found is None:
        pytest.skip("mosquitto is not installed: tested against the embedded broker only")
    return found


class Mosquitto:
    """A real broker on a port of its own, to be killed, frozen and started again."""

    def __init__(self, folder: Path, text: str = "allow_anonymous true\n", port: int | None = None) -> None:
        self.port = port or free_port()
        self.config = folder / "mosquitto.conf"
        self.config.write_text(f"listener {self.port} 127.0.0.1\nuser root\n" + text.format(folder=folder))
        self._program = mosquitto_path()
        self._process: subprocess.Popen[bytes] | None = None

    def start(self) -> Mosquitto:
        self._process = subprocess.Popen(
            [self._program, "-c", str(self.config)], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        assert wait_until(self._listens), "mosquitto did not start"
        return self

    def _listens(self) -> bool:
        assert self._process is not None
        try:
            socket.create_connection(("127.0.0.1", self.port), 0.2).close()
        except OSError:
            assert self._process.poll() is None, "mosquitto ended: wrong configuration?"
            return False
        assert self._process.poll() is None, f"another process has taken port {self.port}"
        return True

    def signal(self, number: int) -> None:
        assert self._process is not None
        os.kill(self._process.pid, number)

    def kill(self) -> None:
        if self._process is not None:
            self._process.kill()
            self._process.wait()
            self._process = None


@contextmanager
def running(broker: Mosquitto) -> Iterator[Mosquitto]:
    try:
        yield broker.start()
    finally:
        broker.kill()


class Ear:
    """A subscriber as the contract asks: a session that outlives a connection, QoS 1."""

    def __init__(
        self, port: int, topic: str = "upturn/1/#", *, protocol: str = "5", user: str = "",
        password: str = "", context: Any = None, host: str = "127.0.0.1", client_id: str = "ear",
    ) -> None:  # fmt: skip
        self.messages: list[tuple[str, bytes, bool]] = []
        self.expiry: list[int | None] = []
        self.granted: list[int] = []
        self.ready = threading.Event()
        five = protocol == "5"
        self.client = Client(
            CallbackAPIVersion.VERSION2, client_id, clean_session=None if five else False,
            protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311,
        )  # fmt: skip
        if user:
            self.client.username_pw_set(user, password)
        if context is not None:
            self.client.tls_set_context(context)
        self.client.on_connect = lambda c, *rest: c.subscribe(topic, qos=1)
        self.client.on_subscribe = self._subscribed
        self.client.on_message = self._hear
        self.client.reconnect_delay_set(1, 1)
        more: dict[str, Any] = {}
        if five:
            session = Properties(PacketTypes.CONNECT)
            session.SessionExpiryInterval = 600
            more = {"clean_start": False, "properties": session}
        self.client.connect(host, port, 5, **more)
        self.client.loop_start()
        assert self.ready.wait(10.0), "the subscriber was not heard by the broker"

    def _subscribed(self, c: Any, data: Any, mid: int, reasons: Any, properties: Any) -> None:
        self.granted = [r.value for r in reasons]
        self.ready.set()

    def _hear(self, c: Any, data: Any, m: Any) -> None:
        self.expiry.append(getattr(getattr(m, "properties", None), "MessageExpiryInterval", None))
        self.messages.append((m.topic, bytes(m.payload), m.retain))

    def on(self, part: str) -> list[Any]:
        """Return the payloads that arrived on topics with ``part`` in them (None: cleared)."""
        return [json.loads(p) if p else None for t, p, _ in list(self.messages) if part in t]

    def ids(self) -> list[str]:
        return [body["id"] for body in self.on("/event/")]

    def close(self) -> None:
        self.client.disconnect()
        self.client.loop_stop()


class Outbox:
    """An outbox in memory with the promises of the real one: rows stay until they are acknowledged."""

    def __init__(self) -> None:
        self.rows: list[OutboxRow] = []
        self.acked: list[int] = []
        self._lock = threading.Lock()

    def add(self, count: int = 1, topic: str = "upturn/1/s/event/H1/-") -> list[OutboxRow]:
        with self._lock:
            first = len(self.rows) + 1
            news = [
                OutboxRow(
                    seq, f"id{seq:05d}", topic, json.dumps({"id": f"id{seq:05d}"}).encode(), False, None
                )
                for seq in range(first, first + count)
            ]
            self.rows += news
        return news

    def put(self, topic: str, payload: bytes, retain: bool = True) -> list[OutboxRow]:
        with self._lock:
            row = OutboxRow(len(self.rows) + 1, f"x{len(self.rows)}", topic, payload, retain, None)
            self.rows.append(row)
        return [row]

    def backlog(self, after: int, most: int) -> list[OutboxRow]:
        with self._lock:
            gone = set(self.acked)
            return [r for r in self.rows if r.seq > after and r.seq not in gone][:most]

    def on_acked(self, seqs: Sequence[int]) -> None:
        with self._lock:
            self.acked += seqs

    @property
    def left(self) -> int:
        return len(self.rows) - len(set(self.acked))

    @property
    def ids(self) -> list[str]:
        return [r.id for r in self.rows]


class House:
    """A publisher with its outbox, and the troubles it told."""

    def __init__(self, settings: BrokerSettings, pace: Pace = FAST, outbox: Outbox | None = None) -> None:
        self.outbox = outbox or Outbox()
        self.troubles: list[tuple[str, bool, str]] = []
        self.publisher = Publisher(
            settings, site="s", host="h", on_acked=self.outbox.on_acked,
            on_trouble=lambda *what: self.troubles.append(what), pace=pace,
        )  # fmt: skip

    def start(self) -> House:
        self.publisher.start(self.outbox.backlog)
        return self

    def drain(self, timeout_s: float = 15.0) -> None:
        """Wait until the outbox is empty; where it does not become so, say what is known."""
        p = self.publisher
        assert wait_until(lambda: self.outbox.left == 0, timeout_s), (
            f"{self.outbox.left} left; told {self.troubles}; {p.counts}; alive {p.alive()}, turn {p.beat}"
        )

    def told(self, condition: str, active: bool, *words: str) -> bool:
        return any(
            c == condition and a == active and all(w in text for w in words) for c, a, text in self.troubles
        )


@contextmanager
def house(settings: BrokerSettings, pace: Pace = FAST, outbox: Outbox | None = None) -> Iterator[House]:
    h = House(settings, pace, outbox).start()
    try:
        yield h
    finally:
        h.publisher.stop(0.5)


def freeze(broker: Mosquitto) -> None:
    broker.signal(signal.SIGSTOP)


def thaw(broker: Mosquitto) -> None:
    broker.signal(signal.SIGCONT)
