"""How long an alarm takes to its acknowledgement, and how fast a backlog drains, beside a bare client.

    python tests/bench/publish_latency.py [messages]

Needs mosquitto. Prints one line a measurement; asserts nothing: figures of a machine are no test.
"""

from __future__ import annotations

import statistics
import sys
import tempfile
import threading
import time
from pathlib import Path

from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

sys.path.insert(0, str(Path(__file__).parents[1] / "system"))

from mqtt_peers import House, Mosquitto, Outbox, running, wait_until

from daq.publish import BrokerSettings, Pace

TOPIC = "upturn/1/s/event/H1/-"


def say(what: str, seconds: list[float]) -> None:
    cut = statistics.quantiles(seconds, n=100)
    print(f"{what:<44} p50 {1e3 * cut[49]:7.2f} ms   p99 {1e3 * cut[98]:7.2f} ms   n {len(seconds)}")


def bare(port: int, count: int) -> list[float]:
    """One publish at a time through the client library's own threaded loop."""
    client = Client(CallbackAPIVersion.VERSION2, "bare", protocol=MQTTProtocolVersion.MQTTv5)
    acked = threading.Event()
    client.on_publish = lambda *what: acked.set()
    client.connect("127.0.0.1", port)
    client.loop_start()
    taken = []
    for i in range(count):
        acked.clear()
        began = time.perf_counter()
        client.publish(TOPIC, b'{"id":"%d"}' % i, qos=1)
        acked.wait()
        taken.append(time.perf_counter() - began)
    client.disconnect()
    client.loop_stop()
    return taken


def through_the_publisher(port: int, count: int) -> list[float]:
    """From the offer to the call that lets the row leave the outbox."""
    house = House(BrokerSettings(port=port), Pace())
    acked = threading.Event()
    keep = house.outbox.on_acked

    def on_acked(seqs: object) -> None:
        keep(seqs)  # type: ignore[arg-type]
        acked.set()

    house.publisher._on_acked = on_acked
    house.start()
    wait_until(lambda: house.publisher.counts.sent > 0)
    taken = []
    for _ in range(count):
        acked.clear()
        rows = house.outbox.add(1)
        began = time.perf_counter()
        house.publisher.offer(rows)
        acked.wait()
        taken.append(time.perf_counter() - began)
    house.publisher.stop(1.0)
    return taken


def drain(port: int, count: int) -> float:
    outbox = Outbox()
    outbox.add(count)
    rows, acked = outbox.rows, outbox.acked
    outbox.backlog = lambda after, most: rows[after : after + most]  # type: ignore[method-assign]
    house = House(BrokerSettings(port=port), Pace(), outbox).start()
    began = time.perf_counter()
    wait_until(lambda: len(acked) == count, 120.0)
    taken = time.perf_counter() - began
    assert acked == [r.seq for r in rows]
    house.publisher.stop(1.0)
    return taken


def main() -> None:
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    with tempfile.TemporaryDirectory() as folder, running(Mosquitto(Path(folder))) as m:
        for _ in range(2):  # twice, in turn, so that a busy moment shows
            say("bare client, publish to acknowledgement", bare(m.port, count))
            say("publisher, offer to acknowledgement", through_the_publisher(m.port, count))
        print(f"backlog of {10 * count} messages, one in flight: {drain(m.port, 10 * count):.1f} s")


if __name__ == "__main__":
    main()
