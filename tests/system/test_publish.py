"""The publisher against real brokers that are absent, killed, frozen, restarted empty, or silent."""

from __future__ import annotations

import json
import socket
import threading
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from mqtt_peers import (
    FAST,
    SURVIVING,
    Ear,
    Mosquitto,
    Outbox,
    free_port,
    freeze,
    house,
    running,
    thaw,
    wait_until,
)

from daq.broker import EmbeddedBroker, EmbeddedBrokerError
from daq.publish import BrokerSettings, link
from daq.publish.link import Link
from daq.publish.publisher import FETCH


@pytest.fixture(params=["mosquitto 5", "mosquitto 3.1.1", "embedded 5"])
def broker(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[BrokerSettings]:
    """Give the access to each kind of running broker."""
    kind, protocol = request.param.split()
    if kind == "mosquitto":
        with running(Mosquitto(tmp_path)) as m:
            yield BrokerSettings(port=m.port, protocol=protocol)
        return
    pytest.importorskip("iotcore", reason="the embedded broker is not installed (extra broker)")
    with EmbeddedBroker(protocol=protocol) as b:
        yield BrokerSettings(port=b.port, protocol=protocol)


def test_what_was_committed_arrives_once_in_order_and_leaves_the_outbox(broker: BrokerSettings) -> None:
    """A backlog from before the start, then offers; every row acknowledged in its order."""
    ear = Ear(broker.port, "upturn/1/s/event/#", protocol=broker.protocol)
    try:
        outbox = Outbox()
        outbox.add(FETCH + 30)
        with house(broker, replace(FAST, heartbeat_s=60.0), outbox) as h:
            assert wait_until(lambda: outbox.left == 0)
            for _ in range(20):
                news = outbox.add(2)
                h.publisher.offer(news)
                h.publisher.offer(news)  # told twice is sent once
            assert wait_until(lambda: outbox.left == 0 and len(ear.messages) == len(outbox.rows))
        assert ear.ids() == outbox.ids
        assert outbox.acked == [r.seq for r in outbox.rows]
        assert h.troubles == []
    finally:
        ear.close()


def test_birth_heartbeat_and_a_clean_goodbye(broker: BrokerSettings) -> None:
    """Online is retained, heartbeats come, and a stop says offline itself."""
    with house(broker):
        time.sleep(0.6)
    ear = Ear(broker.port, "upturn/1/s/host/#", protocol=broker.protocol)
    try:
        assert wait_until(lambda: len(ear.messages) == 1)
        assert ear.on("/online") == [{"v": 1, "site": "s", "host": "h", "state": "offline"}]
        with house(broker) as h:
            h.publisher.offer(h.outbox.add(1))
            assert wait_until(lambda: len(ear.on("/heartbeat")) >= 2)
        assert wait_until(lambda: [b["state"] for b in ear.on("/online")][1:] == ["online", "offline"])
        assert ear.on("/heartbeat")[-1]["waiting"] == 0
    finally:
        ear.close()


def test_the_broker_says_offline_when_the_daemon_vanishes(broker: BrokerSettings) -> None:
    """The will is what tells a dead daemon from a quiet laboratory."""
    ear = Ear(broker.port, "upturn/1/s/host/h/online", protocol=broker.protocol)
    try:
        with house(broker) as h:
            assert wait_until(lambda: len(ear.messages) == 1)
            h.publisher._lose(link.Cause("cut by the test"))
            assert wait_until(lambda: [b["state"] for b in ear.on("")][:3] == ["online", "offline", "online"])
    finally:
        ear.close()


def test_the_newest_state_is_kept_for_those_who_come_later(broker: BrokerSettings) -> None:
    """Latest only: of many changes in one breath the last one stays; an empty payload clears."""
    with house(broker) as h:
        for i in range(200):
            h.publisher.retained("upturn/1/s/status/H1/-", b'{"i":%d}' % i)
        h.publisher.retained("upturn/1/s/status/H2/-", b'{"i":7}')
        h.publisher.retained("upturn/1/s/status/H2/-", b"")
        time.sleep(0.3)
        ear = Ear(broker.port, "upturn/1/s/status/#", protocol=broker.protocol)
        try:
            assert wait_until(lambda: len(ear.messages) >= 1)
            time.sleep(0.1)
            assert [(t, p) for t, p, _ in ear.messages] == [("upturn/1/s/status/H1/-", b'{"i":199}')]
        finally:
            ear.close()


def test_a_broker_absent_at_the_start_is_found_when_it_comes(tmp_path: Path) -> None:
    """Nothing is lost meanwhile, the trouble is told once and taken back."""
    m = Mosquitto(tmp_path)
    with house(BrokerSettings(port=m.port)) as h:
        h.publisher.offer(h.outbox.add(30))
        assert wait_until(lambda: h.told("publisher_down", True, "nobody listens"))
        with running(m):
            h.drain()
            assert wait_until(lambda: h.told("publisher_down", False))
        assert h.outbox.acked == list(range(1, 31))
        assert [a for _, a, _ in h.troubles][:2] == [True, False]


def test_a_broker_killed_in_the_middle_loses_nothing_and_repeats_at_most_one_each_time(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Three kills while a backlog drains; the broker keeps its sessions on disk."""
    m = Mosquitto(tmp_path, SURVIVING + "allow_anonymous true\nmax_queued_messages 0\n")
    sent: list[str] = []
    fly = Link.publish

    def counted(self: Link, topic: str, payload: bytes, **more: Any) -> int | None:
        if "/event/" in topic:
            sent.append(json.loads(payload)["id"])
        return fly(self, topic, payload, **more)

    monkeypatch.setattr(Link, "publish", counted)
    with running(m):
        ear = Ear(m.port, "upturn/1/s/event/#")
        try:
            outbox = Outbox()
            outbox.add(400)
            with house(BrokerSettings(port=m.port), outbox=outbox) as h:
                for share in (100, 200, 300):
                    assert wait_until(lambda share=share: len(outbox.acked) >= share)  # type: ignore[misc]
                    m.kill()
                    time.sleep(0.1)
                    m.start()
                h.drain(20.0)
                assert wait_until(lambda: len(set(ear.ids())) == 400, 20.0)
            counts = Counter(sent)
            assert max(counts.values()) <= 2
            assert len(sent) <= 400 + 2 * 3  # the one in flight, and the one acknowledged last
            assert sorted(counts) == outbox.ids
            # the broker may repeat more to the subscriber from the session it saved; by id each is one
            assert list(dict.fromkeys(ear.ids())) == outbox.ids
        finally:
            ear.close()


def test_a_frozen_broker_is_noticed_although_the_connection_stands(tmp_path: Path) -> None:
    """Only an acknowledgement counts: the client is rebuilt, the row goes again with the same id."""
    m = Mosquitto(tmp_path)
    with running(m), house(BrokerSettings(port=m.port)) as h:
        h.publisher.offer(h.outbox.add(1))
        h.drain()
        freeze(m)
        try:
            h.publisher.offer(h.outbox.add(5))
            assert wait_until(lambda: h.publisher.counts.rebuilt >= 1, 5.0)
            assert wait_until(lambda: h.told("publisher_down", True), 5.0)
        finally:
            thaw(m)
        h.drain()
        assert wait_until(lambda: h.told("publisher_down", False))


def test_a_frozen_broker_is_noticed_in_a_quiet_laboratory_too(tmp_path: Path) -> None:
    """Heartbeats ask for an acknowledgement, so silence is noticed when there is nothing to say."""
    m = Mosquitto(tmp_path)
    with running(m), house(BrokerSettings(port=m.port)) as h:
        assert wait_until(lambda: h.publisher.counts.connections == 1)
        freeze(m)
        try:
            assert wait_until(lambda: h.publisher.counts.rebuilt >= 1, 5.0)
        finally:
            thaw(m)


def test_a_broker_restarted_empty_gets_all_states_again(tmp_path: Path) -> None:
    """Statuses and alarm states are sent on each new connection; cleared ones stay cleared."""
    m = Mosquitto(tmp_path)
    with running(m), house(BrokerSettings(port=m.port)) as h:
        h.publisher.retained("upturn/1/s/status/H1/-", b'{"a":1}')
        for topic, payload in (
            ("rupture", b'{"state":"unacknowledged"}'),
            ("gradient", b"{}"),
            ("gradient", b""),
        ):
            h.publisher.offer(h.outbox.put(f"upturn/1/s/alarm/H1/-/{topic}/-", payload))
        h.drain()
        assert wait_until(lambda: "upturn/1/s/alarm/H1/-/gradient/-" not in h.publisher._states)
        m.kill()
        m.start()
        assert wait_until(lambda: h.publisher.counts.connections == 2)
        time.sleep(0.3)
        ear = Ear(m.port, "upturn/1/s/#")
        try:
            assert wait_until(lambda: len({t for t, _, kept in ear.messages if kept}) >= 3)
            kept = {t: p for t, p, retained in ear.messages if retained}
            assert kept["upturn/1/s/alarm/H1/-/rupture/-"] == b'{"state":"unacknowledged"}'
            assert kept["upturn/1/s/status/H1/-"] == b'{"a":1}'
            assert "upturn/1/s/alarm/H1/-/gradient/-" not in kept
        finally:
            ear.close()


def test_alarms_of_a_test_that_has_left_the_frame_are_cleared_by_its_status(broker: BrokerSettings) -> None:
    """What is retained must not outlive the test: the status names all open alarms, the rest goes."""
    alarm = "upturn/1/s/alarm/H1/-/rupture/-"
    with house(broker) as h:
        h.publisher.offer(h.outbox.put(alarm, b'{"state":"acknowledged"}'))
        h.publisher.offer(h.outbox.put("upturn/1/s/alarm/H11/-/rupture/-", b"{}"))
        h.drain()
        open_one = {"alarm": "rupture", "subject": "", "state": "acknowledged"}
        h.publisher.status("H1", {"at_tick": 0, "alarms": [open_one]})
        time.sleep(0.2)
        assert h.publisher._states[alarm].payload
        h.publisher.status("H1", {"at_tick": 1, "alarms": []})
        time.sleep(0.3)
        ear = Ear(broker.port, "upturn/1/s/alarm/#", protocol=broker.protocol)
        try:
            assert wait_until(lambda: len(ear.messages) >= 1)
            assert [t for t, _, _ in ear.messages] == ["upturn/1/s/alarm/H11/-/rupture/-"]
        finally:
            ear.close()


def test_readings_expire_and_events_do_not(tmp_path: Path) -> None:
    """A status that is older than its time must not look like news (message expiry, MQTT 5)."""
    with running(Mosquitto(tmp_path)) as m, house(BrokerSettings(port=m.port)) as h:
        ear = Ear(m.port, "upturn/1/s/#")
        try:
            h.publisher.status("H1", {"at_tick": 0, "alarms": []}, expires_s=60)
            h.publisher.offer(h.outbox.add(1))
            assert wait_until(lambda: len(ear.on("/status/")) == 1 and len(ear.on("/event/")) == 1)
            life = {t.split("/")[3]: e for (t, _, _), e in zip(ear.messages, ear.expiry, strict=True)}
            assert life["status"] in (59, 60)
            assert life["event"] is None
        finally:
            ear.close()


def test_a_status_that_does_not_change_is_renewed_before_it_expires(tmp_path: Path) -> None:
    """A frame at rest must not vanish from the broker while its daemon lives; nor be sent for nothing."""
    with running(Mosquitto(tmp_path)) as m, house(BrokerSettings(port=m.port)) as h:
        ear = Ear(m.port, "upturn/1/s/status/#")
        try:
            for _ in range(20):
                h.publisher.status("H1", {"at_tick": 0, "alarms": []}, expires_s=1)
                h.publisher.status("H2", {"at_tick": 0, "alarms": []})
                time.sleep(0.1)
            counts = Counter(topic for topic, _, _ in ear.messages)
            assert counts["upturn/1/s/status/H2/-"] == 1
            assert 2 <= counts["upturn/1/s/status/H1/-"] <= 5
        finally:
            ear.close()


def test_an_exception_in_a_callback_costs_a_connection_and_no_alarm(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """In the client library's own thread it would have ended all publishing in silence."""
    heard = Link._on_publish
    thrown = []

    def throws(self: Link, *what: Any) -> None:
        if len(thrown) < 2:
            thrown.append(1)
            raise RuntimeError("from a callback")
        heard(self, *what)

    monkeypatch.setattr(Link, "_on_publish", throws)
    outbox = Outbox()
    outbox.add(20)
    with running(Mosquitto(tmp_path)) as m, house(BrokerSettings(port=m.port), outbox=outbox) as h:
        h.drain()
        assert h.publisher.counts.faults == 2
        assert h.told("publisher_down", True, "from a callback")
        assert wait_until(lambda: h.told("publisher_down", False))


def test_a_backlog_that_cannot_be_read_is_read_again(tmp_path: Path) -> None:
    """The journal may be busy; the publisher asks again and goes on living."""
    with running(Mosquitto(tmp_path)) as m:
        outbox = Outbox()
        outbox.add(10)
        good, calls = outbox.backlog, []

        def busy(after: int, most: int) -> list[Any]:
            calls.append(after)
            if len(calls) == 1:
                raise OSError("busy")
            return good(after, most)

        outbox.backlog = busy  # type: ignore[method-assign]
        with house(BrokerSettings(port=m.port), outbox=outbox):
            assert wait_until(lambda: outbox.left == 0)


def test_rows_that_nobody_offered_are_found_with_the_next_heartbeat(tmp_path: Path) -> None:
    """An offer is only a hint; what counts is what the outbox holds."""
    with running(Mosquitto(tmp_path)) as m, house(BrokerSettings(port=m.port)) as h:
        h.publisher.offer(h.outbox.add(1))
        h.drain()
        h.outbox.add(3)
        h.drain(5.0)
        assert h.outbox.acked == [1, 2, 3, 4]


def test_the_embedded_broker_speaks_the_older_protocol_too() -> None:
    """MQTT 3.1.1 is selectable; one listener has one version."""
    pytest.importorskip("iotcore", reason="the embedded broker is not installed (extra broker)")
    with EmbeddedBroker(protocol="3.1.1") as b, house(BrokerSettings(port=b.port, protocol="3.1.1")) as h:
        h.publisher.offer(h.outbox.add(10))
        h.drain()
        assert h.outbox.acked == list(range(1, 11))


def test_a_flood_of_offers_is_taken_from_the_backlog_in_order(tmp_path: Path) -> None:
    """More than the memory may hold: the rest is read from the outbox, nothing is skipped or repeated."""
    m = Mosquitto(tmp_path)
    with house(BrokerSettings(port=m.port), replace(FAST, heartbeat_s=60.0)) as h:
        with running(m):
            assert wait_until(lambda: h.publisher.counts.connections == 1)
        for _ in range(25):
            h.publisher.offer(h.outbox.add(100))
        with running(m):
            assert wait_until(lambda: len(h.outbox.acked) >= 1990, 30.0)
            h.publisher.offer(h.outbox.add(1))
            h.drain(30.0)
        # the broker went away without a row in flight, so nothing goes out twice
        assert h.outbox.acked == list(range(1, 2502))


def test_an_alarm_that_could_not_be_written_down_still_goes_out(broker: BrokerSettings) -> None:
    """Disk full, or broken: the last word comes from memory, also when the daemon stops at once."""
    ear = Ear(broker.port, "upturn/1/s/event/#", protocol=broker.protocol)
    try:
        with house(broker) as h:
            h.publisher.offer(h.outbox.add(1))
            h.drain()
            h.publisher.unrecorded("journal_trouble", "the disk is broken")
            h.publisher.stop(2.0)
        assert wait_until(lambda: len(ear.messages) == 2)
        told = ear.on("/event/@h/-")[0]
        assert (told["kind"], told["alarm"], told["message"]) == (
            "unrecorded", "journal_trouble", "the disk is broken",
        )  # fmt: skip
    finally:
        ear.close()


def test_a_stop_ends_in_time_whatever_the_broker_does(tmp_path: Path) -> None:
    """No broker, or a frozen one: the service manager must not have to kill us."""
    h = house(BrokerSettings(port=free_port()))
    with h as absent:
        absent.outbox.add(5)
        began = time.monotonic()
        absent.publisher.stop(1.0)
        assert time.monotonic() - began < 3.0
        assert not absent.publisher.alive()
    m = Mosquitto(tmp_path)
    with running(m), house(BrokerSettings(port=m.port), replace(FAST, ack_s=30.0)) as frozen:
        assert wait_until(lambda: frozen.publisher.counts.connections == 1)
        freeze(m)
        try:
            frozen.publisher.offer(frozen.outbox.add(5))
            began = time.monotonic()
            frozen.publisher.stop(0.5)
            assert time.monotonic() - began < 3.0
            assert not frozen.publisher.alive()
        finally:
            thaw(m)


def test_a_message_that_the_broker_chokes_on_does_not_keep_back_the_others(tmp_path: Path) -> None:
    """Too large a packet makes this broker hang up: after three times its topic is set aside and told."""
    m = Mosquitto(tmp_path, "allow_anonymous true\nmax_packet_size 2000\n")
    outbox = Outbox()
    outbox.put("upturn/1/s/event/H9/-", b"x" * 5000, retain=False)
    outbox.add(5)
    with running(m), house(BrokerSettings(port=m.port), outbox=outbox) as h:
        assert wait_until(lambda: len(h.outbox.acked) == 5, 15.0)
        assert h.told("publish_denied", True, "upturn/1/s/event/H9/-", "hangs up")
        assert h.outbox.left == 1


def test_a_second_client_with_the_same_id_is_named(tmp_path: Path) -> None:
    """Two daemons for one host take the connection from each other: named, and tried slowly."""
    with running(Mosquitto(tmp_path)) as m, house(BrokerSettings(port=m.port)) as first:
        assert wait_until(lambda: first.publisher.counts.connections == 1)
        with house(BrokerSettings(port=m.port)):
            assert wait_until(lambda: first.told("publisher_down", True, "same client id"))


class Mute:
    """A peer that accepts the connection, greets, and never acknowledges anything."""

    def __init__(self) -> None:
        self._server = socket.create_server(("127.0.0.1", 0))
        self._server.settimeout(0.1)
        self.port = int(self._server.getsockname()[1])
        self.connections = 0
        self._end = threading.Event()
        self._thread = threading.Thread(target=self._serve)
        self._thread.start()

    def _serve(self) -> None:
        peers = []
        while not self._end.is_set():
            try:
                peer, _ = self._server.accept()
            except TimeoutError:
                continue
            peer.recv(4096)
            peer.sendall(bytes((0x20, 3, 0, 0, 0)))  # CONNACK, accepted, no properties (MQTT 5.0, 3.2)
            peers.append(peer)
            self.connections += 1
        for peer in peers:
            peer.close()
        self._server.close()

    def close(self) -> None:
        self._end.set()
        self._thread.join()


def test_a_connection_that_never_acknowledges_is_made_anew_again_and_again() -> None:
    """`connected` means nothing; the trouble stays told until something is acknowledged."""
    mute = Mute()
    try:
        with house(BrokerSettings(port=mute.port)) as h:
            h.publisher.offer(h.outbox.add(1))
            assert wait_until(lambda: mute.connections >= 3, 15.0)
            assert h.told("publisher_down", True, "nothing was acknowledged")
            assert not h.told("publisher_down", False)
            assert h.outbox.left == 1
    finally:
        mute.close()


def test_the_embedded_broker_refuses_a_taken_port_and_says_which() -> None:
    """Its port may be in use by the laboratory's own broker."""
    pytest.importorskip("iotcore", reason="the embedded broker is not installed (extra broker)")
    with socket.create_server(("127.0.0.1", 0)) as taken:
        port = taken.getsockname()[1]
        with pytest.raises(EmbeddedBrokerError, match=f"127.0.0.1:{port}"):
            EmbeddedBroker(port).start()


def test_a_missing_extra_is_named_with_the_command_that_installs_it(monkeypatch: pytest.MonkeyPatch) -> None:
    """A plain installation has no embedded broker."""
    monkeypatch.setitem(__import__("sys").modules, "iotcore", None)
    with pytest.raises(EmbeddedBrokerError, match=r"upturn\[broker\]"):
        EmbeddedBroker().start()


def test_the_listener_prints_each_alarm_once_with_its_id(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """`listen` is the example of a subscriber: a repeated event is dropped by host and id."""
    from daq.publish import listen

    body = {
        "v": 1, "site": "s", "host": "h", "id": "H1|S-1|alarm|rupture#1|1", "at": "2026-01-02T03:04:05.0000Z",
        "test_h": 12.5, "frame": "H1", "kind": "alarm", "alarm": "rupture", "subject": "", "priority": "high",
        "state": "unacknowledged", "message": "ruptured", "initials": "",
    }  # fmt: skip
    with running(Mosquitto(tmp_path)) as m, house(BrokerSettings(port=m.port)) as h:
        code: list[int] = []
        ear = threading.Thread(
            target=lambda: code.append(listen(BrokerSettings(port=m.port), site="s", count=2, seconds=10.0))
        )
        ear.start()
        time.sleep(0.4)
        for text in (body, body, body | {"id": "second"}):
            h.publisher.offer(h.outbox.put("upturn/1/s/event/H1/-", json.dumps(text).encode(), retain=False))
        ear.join(12.0)
    assert code == [0]
    lines = capsys.readouterr().out.splitlines()
    assert lines == [
        "2026-01-02T03:04:05Z H1         high rupture unacknowledged: ruptured  [H1|S-1|alarm|rupture#1|1]",
        "2026-01-02T03:04:05Z H1         high rupture unacknowledged: ruptured  [second]",
    ]
