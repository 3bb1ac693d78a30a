"""A subscriber to try things with: prints what arrives, alarms with their ids.

It also shows what any subscriber must do: keep a session, subscribe with QoS 1, drop what came before by
(host, id).
"""

from __future__ import annotations

import json
import queue
import sys
import time
from typing import Any, Final

from daq.publish import topics
from daq.publish.access import BrokerSettings, PublishError, read_secret, tls_context
from daq.publish.link import REFUSED, cause_of, cause_of_refusal

SEEN_MOST: Final = 100_000
RETRY_S: Final = 0.5


def describe(topic: str, body: Any) -> str:
    """Return one line for people: when, where, what, and the id."""
    if not isinstance(body, dict):
        return f"{topic} {body}"
    at = str(body.get("at", ""))[:19] or "-" * 19
    where = body.get("frame") or f"@{body.get('host', '')}"
    if body.get("kind") == "alarm":
        subject = f"/{body['subject']}" if body.get("subject") else ""
        by = f" by {body['initials']}" if body.get("initials") else ""
        what = f"{body['priority']} {body['alarm']}{subject} {body['state']}{by}: {body['message']}"
    else:
        known = ("v", "site", "host", "at", "test_h", "frame", "kind", "id")
        what = f"{body.get('kind', topic)} " + " ".join(
            f"{k}={v}" for k, v in body.items() if k not in known and v is not None
        )
    return f"{at}Z {where:<10} {what}  [{body.get('id', '-')}]"


def listen(
    broker: BrokerSettings,
    *,
    site: str = "+",
    topic: str = "",
    count: int | None = None,
    seconds: float | None = None,
) -> int:
    """Print messages until ``count`` of them, ``seconds``, or an interrupt; return the exit code.

    Without ``topic``: every event of ``site``. Tries again while the broker is away.

    Raises:
        PublishError: the broker refuses us, or a secret cannot be used.
    """
    from paho.mqtt.client import Client
    from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

    pattern = topic or f"{topics.ROOT}/{site if site == '+' else topics.level(site)}/event/#"
    arrived: queue.SimpleQueue[Any] = queue.SimpleQueue()
    five = broker.protocol == "5"
    client = Client(
        CallbackAPIVersion.VERSION2,
        "",
        clean_session=None if five else True,
        protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311,
    )
    if broker.user is not None:
        client.username_pw_set(
            broker.user, read_secret(broker.password_file) if broker.password_file else None
        )
    if broker.tls:
        client.tls_set_context(tls_context(broker))

    def on_connect(c: Any, data: Any, flags: Any, reason: Any, properties: Any) -> None:
        if reason.value >= REFUSED:
            cause = cause_of_refusal(reason.value, str(reason), broker)
            arrived.put(PublishError(cause.text) if cause.settled else None)
        else:
            c.subscribe(pattern, qos=1)

    client.on_connect = on_connect
    client.on_message = lambda c, data, m: arrived.put((m.topic, bytes(m.payload)))
    client.reconnect_delay_set(1, 10)
    end = None if seconds is None else time.monotonic() + seconds
    if not _connect(client, broker, end):
        return 0
    client.loop_start()
    try:
        return _print_all(arrived, count, end)
    finally:
        client.disconnect()
        client.loop_stop()


def _connect(client: Any, broker: BrokerSettings, end: float | None) -> bool:
    """Connect, waiting for a broker that is not there yet; False when the time is over."""
    told = ""
    while end is None or time.monotonic() < end:
        try:
            client.connect(broker.host, broker.port, 30)
            return True
        except Exception as error:  # of many kinds; all become one named cause
            cause = cause_of(error, broker, client.connect_timeout)
            if cause.settled:
                raise PublishError(cause.text) from error
            if cause.text != told:
                told = cause.text
                print(f"waiting: {told}", file=sys.stderr, flush=True)
            time.sleep(RETRY_S)
    return False


def _print_all(arrived: queue.SimpleQueue[Any], count: int | None, end: float | None) -> int:
    seen: dict[tuple[str, str], None] = {}
    printed = 0
    while count is None or printed < count:
        left = 3600.0 if end is None else end - time.monotonic()
        if left <= 0.0:
            break
        try:
            item = arrived.get(timeout=left)
        except queue.Empty:
            continue
        if isinstance(item, PublishError):
            raise item
        if item is None:
            continue
        topic, payload = item
        try:
            body = json.loads(payload) if payload else "(cleared)"
        except ValueError:
            body = payload.decode("utf-8", "replace")
        if isinstance(body, dict) and "id" in body and "/event/" in topic:
            name = (str(body.get("host")), str(body["id"]))
            if name in seen:
                continue
            seen[name] = None
            if len(seen) > SEEN_MOST:
                del seen[next(iter(seen))]
        print(describe(topic, body), flush=True)
        printed += 1
    return 0
