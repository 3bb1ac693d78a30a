"""The whole line, live: emulated instruments on real ports, real drivers, journal, broker and processes."""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import suppress
from pathlib import Path
from typing import Any

import pytest

from daq.codec import encode_state
from daq.daemon import recover
from daq.engine import Engine
from daq.records import ConditionChanged, ScansTaken, UpturnError
from daq.store.journal import Journal, JournalReader

LAB = """\
site: test
journal: record
broker: {{url: "mqtt://127.0.0.1:{port}"}}
instruments:
  gauge:
    driver: textline
    port: emulated
    poll_s: 1200
    ask: "D"
    timeout_s: 0.5
    longest_reply_s: 0.5
    identity: {{ask: "*IDN?", reply: "GAUGE.*"}}
    yields: {{left: 1, right: 2}}
  scanner:
    driver: scpi
    port: emulated
    poll_s: 1200
    identity: "EXAMPLE,.*"
    scan: "MEAS:TEMP? (@{{channels}})"
    timeout_s: 2.0
    yields: {{mid: 101, broken: 102}}
frames:
  H1:
    specimen: {{id: T-1, extensometer_length_mm: 25.0, diameter_mm: 6.0}}
    stress_mpa: 200
    temperature_c: 980
    tolerance: iso204
    activation_energy_kj_per_mol: 330
    expected_rupture_h: 150
    channels:
      left:   {{role: extension, side: A, source: gauge.left}}
      right:  {{role: extension, side: B, source: gauge.right}}
      mid:    {{role: specimen_temperature, source: scanner.mid}}
      broken: {{role: break_switch, source: scanner.broken}}
bench:
  speed: 20000
  seed: 5
  rigs:
    H1: {{scenario: tertiary_and_rupture}}
  instruments:
    gauge:
      protocol: text
      transport: pty
      identity: "GAUGE 1"
      yields: {{left: {{source: H1.left, scale: 25.0}}, right: {{source: H1.right, scale: 25.0}}}}
      asks: {{"D": "{{left:+09.5f}},{{right:+09.5f}}"}}
    scanner:
      protocol: scpi
      transport: tcp
      identity: "EXAMPLE,SCAN,1,1"
      yields: {{"101": H1.mid, "102": H1.broken}}
"""


class Subscriber:
    """Collects the ids of alarm events in the order of arrival, repetitions included."""

    def __init__(self, port: int) -> None:
        import json

        from paho.mqtt.client import Client
        from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

        self.ids: list[str] = []
        self.retained: dict[str, Any] = {}
        self._client = Client(
            CallbackAPIVersion.VERSION2, "test-subscriber", protocol=MQTTProtocolVersion.MQTTv5
        )

        def on_message(client: Any, data: Any, m: Any) -> None:
            body = json.loads(m.payload) if m.payload else None
            if "/event/" in m.topic and body["kind"] == "alarm":
                self.ids.append(body["id"])
            elif "/alarm/" in m.topic:
                self.retained[m.topic] = body

        self._client.on_connect = lambda c, *rest: c.subscribe("upturn/#", qos=1)
        self._client.on_message = on_message
        self._client.connect("127.0.0.1", port)
        self._client.loop_start()

    def stop(self) -> None:
        self._client.disconnect()
        self._client.loop_stop()


@pytest.fixture
def port() -> Iterator[int]:
    """A broker that outlives the daemon."""
    pytest.importorskip("iotcore", reason="needs the extra 'broker'")
    from daq.broker import EmbeddedBroker

    broker = EmbeddedBroker()
    broker.start()
    yield broker.port
    broker.stop()


@pytest.fixture
def lab(tmp_path: Path, port: int) -> Path:
    path = tmp_path / "lab.yaml"
    path.write_text(LAB.format(port=port))
    return path


def _upturn(*args: str) -> list[str]:
    return [sys.executable, "-m", "daq.cli", *args]


@pytest.fixture
def start() -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Start daemons; whatever still runs at the end is ended by its id."""
    running: list[subprocess.Popen[str]] = []

    def begin(lab: Path, *more: str) -> subprocess.Popen[str]:
        p = subprocess.Popen(
            _upturn("run", str(lab), "--plain", *more),
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )
        running.append(p)
        threading.Thread(target=_collect, args=(p,), daemon=True).start()
        return p

    yield begin
    for p in running:
        if p.poll() is None:
            p.kill()
        p.wait()


def _collect(p: subprocess.Popen[str]) -> None:
    p.said = []  # type: ignore[attr-defined]
    for line in p.stdout or ():
        p.said.append(line)  # type: ignore[attr-defined]
    if p.stdout is not None:
        p.stdout.close()


def _said(p: subprocess.Popen[str]) -> str:
    return "".join(getattr(p, "said", []))


def _wait(what: Callable[[], bool], seconds: float, p: subprocess.Popen[str]) -> None:
    end = time.monotonic() + seconds
    while not what():
        assert time.monotonic() < end, f"not within {seconds} s; the daemon said:\n{_said(p)}"
        assert p.poll() is None, f"the daemon ended with {p.returncode}:\n{_said(p)}"
        time.sleep(0.05)


def _findings(command: str, record: Path, *more: str) -> list[str]:
    out = record.parent / "out.jsonl"
    done = subprocess.run(
        _upturn(command, str(record), "--findings", str(out), *more),
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return [line for line in out.read_text().splitlines() if '"kind":"summary"' not in line]


def test_from_a_serial_port_to_an_acknowledged_alarm_and_the_same_again_in_replay(
    lab: Path, port: int, start: Callable[..., subprocess.Popen[str]]
) -> None:
    """The main job, on real input, through a kill: no alarm lost, the record whole, the replay equal."""
    record = lab.parent / "record"
    subscriber = Subscriber(port)
    try:
        p = start(lab)
        _wait(lambda: "stage tertiary" in _said(p), 40, p)
        p.send_signal(signal.SIGKILL)
        p.wait()
        q = start(lab)
        _wait(lambda: "alarm rupture" in _said(q), 40, q)
        told = subprocess.run(
            _upturn("tell", "--lab", str(lab), "H1", "acknowledge", "rupture", "--initials", "MK"),
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        assert told.returncode == 0, told.stderr
        _wait(lambda: "rupture acknowledged by MK" in _said(q), 10, q)
        _wait(
            lambda: any(
                "rupture" in t and b and b["state"] == "acknowledged" for t, b in subscriber.retained.items()
            ),
            10,
            q,
        )
        q.send_signal(signal.SIGTERM)
        began = time.monotonic()
        assert q.wait(10) == 0, _said(q)
        assert time.monotonic() - began < 5.0
    finally:
        subscriber.stop()
    live = _findings("export", record)
    assert _findings("replay", record) == live
    assert _findings("replay", record, "--cut", "7") == live
    with JournalReader(record) as reader:
        alarms = [f.id for _, f in reader.findings() if f.kind == "alarm"]
    assert any("tertiary_detected" in i for i in alarms)
    assert set(alarms) <= set(subscriber.ids)
    # what the broker had acknowledged but the kill kept out of the record comes again, each id once at most
    assert max(Counter(subscriber.ids).values()) <= 2
    assert len(subscriber.ids) - len(set(subscriber.ids)) <= 2
    with Journal.open(record, site="test") as journal:
        recovered, _ = recover(journal, lambda line: None)
        rebuilt = Engine()
        for _, fact in journal.facts():
            rebuilt.take(fact)
    assert {k: encode_state(s) for k, s in recovered.tests.items()} == {
        k: encode_state(s) for k, s in rebuilt.tests.items()
    }
    assert encode_state(recovered.host) == encode_state(rebuilt.host)


def test_a_second_daemon_on_the_same_journal_is_refused_and_told_who_holds_it(
    lab: Path, start: Callable[..., subprocess.Popen[str]]
) -> None:
    """Two writers would ruin the record."""
    p = start(lab)
    _wait(lambda: "stage primary" in _said(p), 20, p)
    q = subprocess.run(
        _upturn("run", str(lab), "--plain"), capture_output=True, text=True, check=False, timeout=20
    )
    assert q.returncode == 4
    assert str(p.pid) in q.stderr


def test_wrong_settings_are_named_with_their_place_and_nothing_starts(tmp_path: Path) -> None:
    """A newcomer mends the file from the message alone."""
    bad = tmp_path / "lab.yaml"
    bad.write_text("site: test\njournal: record\nframes:\n  H1:\n    stress_mpa: lots\n")
    done = subprocess.run(_upturn("run", str(bad)), capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert f"{bad}:5:" in done.stderr
    assert not (tmp_path / "record").exists()


def test_a_missing_port_is_an_alarm_not_an_end(
    lab: Path, start: Callable[..., subprocess.Popen[str]]
) -> None:
    """Other instruments and frames go on; the link is tried again."""
    text = lab.read_text().replace("speed: 20000", "speed: 1").replace("poll_s: 1200", "poll_s: 0.2")
    text = text.replace(
        "    driver: textline\n    port: emulated\n", "    driver: textline\n    port: /dev/nowhere-at-all\n"
    )
    cut = text.index("    gauge:\n      protocol")
    lab.write_text(text[:cut] + text[text.index("    scanner:\n      protocol") :])
    p = start(lab)
    record = lab.parent / "record"

    def lost() -> list[ConditionChanged]:
        with suppress(UpturnError), JournalReader(record) as reader:  # it may not be there yet
            facts = [f for _, f in reader.facts() if isinstance(f, ConditionChanged)]
            return [f for f in facts if f.condition == "link_lost"]
        return []

    _wait(lambda: bool(lost()), 20, p)
    assert "/dev/nowhere-at-all" in lost()[0].message
    p.send_signal(signal.SIGTERM)
    assert p.wait(10) == 0
    with JournalReader(record) as reader:
        scans = [f for _, f in reader.facts(frame="H1") if isinstance(f, ScansTaken)]
    assert sum(int((s.quality[:, 2] == 0).sum()) for s in scans) > 0
