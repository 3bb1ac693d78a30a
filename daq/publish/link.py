"""One MQTT connection, from the first packet to its end. Never reused: the next one is new.

The client library is driven from the publisher's own thread through its external-loop calls
(``loop_read``, ``loop_write``, ``loop_misc``); only the blocking connect, with name lookup and TLS
handshake, has a thread of its own. So no callback runs in a thread whose death would go
unnoticed, an exception lands in our hands, and a connection that hangs can be dropped at once.

What failed is named by :class:`Cause`: a person at 3 a.m. must read "wrong password", not "code 134".
"""

from __future__ import annotations

import contextlib
import select
import socket
import ssl
import threading
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

from daq.publish.access import BrokerSettings, PublishError, read_secret, tls_context

REFUSED: Final = 0x80
"""Least reason code that says no (MQTT 5.0, 2.4)."""


@dataclass(frozen=True, slots=True)
class Cause:
    """Why there is no connection. ``settled``: trying again soon cannot help (a person must act)."""

    text: str
    settled: bool = False


@dataclass(frozen=True, slots=True)
class Up:
    """The broker has accepted us."""


@dataclass(frozen=True, slots=True)
class Answer:
    """The broker has answered a publish: ``code`` below :data:`REFUSED` is a yes."""

    mid: int
    code: int
    name: str


@dataclass(frozen=True, slots=True)
class Ended:
    """The connection is over."""

    cause: Cause


LinkEvent = Up | Answer | Ended


@dataclass(frozen=True, slots=True)
class Will:
    """What the broker says for us when we vanish."""

    topic: str
    payload: bytes


class Link:
    """One connection. All methods but the wake-up belong to one thread."""

    def __init__(
        self,
        settings: BrokerSettings,
        client_id: str,
        will: Will,
        *,
        connect_s: float,
        keepalive_s: int,
        wake: Callable[[], None],
    ) -> None:
        self._settings = settings
        self._connect_s = connect_s
        self._keepalive_s = keepalive_s
        self._wake = wake
        self._events: deque[LinkEvent] = deque()
        self._lock = threading.Lock()
        self._dropped = False
        self._connected = False
        self._accepted = False
        self._client: Any = None
        self._thread = threading.Thread(
            target=self._connect, args=(client_id, will), name="mqtt connect", daemon=True
        )

    def open(self) -> None:
        """Begin to connect; :class:`Up` or :class:`Ended` comes later from :meth:`pump`."""
        self._thread.start()

    # --- the connecting thread -----------------------------------------------------------

    def _connect(self, client_id: str, will: Will) -> None:
        cause: Cause | None = None
        client = None
        try:
            client = self._make(client_id, will)
            client.connect(self._settings.host, self._settings.port, self._keepalive_s)
        except Exception as error:  # whatever it is, it must reach the publisher as a named cause
            cause = cause_of(error, self._settings, self._connect_s)
        with self._lock:
            if cause is not None:
                self._events.append(Ended(cause))
            elif not self._dropped:
                self._client, self._connected = client, True
        if self._dropped and client is not None:
            _shut(client)
        with contextlib.suppress(OSError):  # the publisher may have gone meanwhile
            self._wake()

    def _make(self, client_id: str, will: Will) -> Any:
        # late: 0.1 s that a viewer or a replay need not pay
        from paho.mqtt.client import Client
        from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion

        s = self._settings
        five = s.protocol == "5"
        client = Client(
            CallbackAPIVersion.VERSION2,
            client_id,
            clean_session=None if five else True,
            protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311,
            reconnect_on_failure=False,
        )
        client.connect_timeout = self._connect_s
        if s.user is not None:
            client.username_pw_set(s.user, read_secret(s.password_file) if s.password_file else None)
        if s.tls:
            client.tls_set_context(tls_context(s))
        client.will_set(will.topic, will.payload, qos=1, retain=True)
        client.on_connect = self._on_connect
        client.on_publish = self._on_publish
        client.on_disconnect = self._on_disconnect
        return client

    # --- callbacks: they only put on a queue ---------------------------------------------------

    def _on_connect(self, client: Any, data: Any, flags: Any, reason: Any, properties: Any) -> None:
        if reason.value >= REFUSED:
            self._end(cause_of_refusal(reason.value, str(reason), self._settings))
        else:
            self._accepted = True
            self._events.append(Up())

    def _on_publish(self, client: Any, data: Any, mid: int, reason: Any, properties: Any) -> None:
        self._events.append(Answer(mid, reason.value, str(reason)))

    def _on_disconnect(self, client: Any, data: Any, flags: Any, reason: Any, properties: Any) -> None:
        if flags.is_disconnect_packet_from_server:
            self._end(cause_of_refusal(reason.value, str(reason), self._settings))
        elif not self._accepted:
            self._end(_unanswered(self._settings))
        else:
            self._end(Cause(f"{self._settings.place} ended the connection ({reason})"))

    def _end(self, cause: Cause) -> None:
        if not any(isinstance(e, Ended) for e in self._events):  # the first cause is the true one
            self._events.append(Ended(cause))

    # --- the publisher's thread ----------------------------------------------------------------

    def wait(self, wake: socket.socket, timeout_s: float) -> None:
        """Wait for the network, for ``wake`` or for the time to pass, and move what can be moved."""
        if self._events:
            return  # a publish may have found the connection broken
        client = self._client if self._connected else None
        sock = None if client is None else client.socket()
        if client is None or sock is None:
            select.select([wake], [], [], timeout_s)
            return
        pending = isinstance(sock, ssl.SSLSocket) and sock.pending() > 0
        writers = [sock] if client.want_write() else []
        readable, writable, _ = select.select([sock, wake], writers, [], 0.0 if pending else timeout_s)
        if pending or sock in readable:
            client.loop_read()
        if client.want_write() and (writable or sock in readable or writers == []):
            client.loop_write()
        client.loop_misc()
        if client.socket() is None:
            self._end(_unanswered(self._settings) if not self._accepted else Cause("the connection broke"))

    def pump(self) -> list[LinkEvent]:
        """Return what has happened since the last call."""
        with self._lock:
            events = list(self._events)
            self._events.clear()
        return events

    def publish(
        self, topic: str, payload: bytes, *, retain: bool, expires_s: int | None = None
    ) -> int | None:
        """Send with QoS 1; return the packet's number, or None if the library has no room for it.

        Raises:
            ValueError: a topic or payload that MQTT forbids.
        """
        properties = None
        if expires_s is not None and self._settings.protocol == "5":
            from paho.mqtt.packettypes import PacketTypes
            from paho.mqtt.properties import Properties

            properties = Properties(PacketTypes.PUBLISH)  # type: ignore[no-untyped-call]
            properties.MessageExpiryInterval = max(1, int(expires_s))
        info = self._client.publish(topic, payload, qos=1, retain=retain, properties=properties)
        return None if info.rc else int(info.mid)

    def close(self) -> None:
        """Say goodbye, so that the broker does not send the will."""
        with self._lock:
            self._dropped = True
            client = self._client
        if client is not None:
            with contextlib.suppress(OSError):
                client.disconnect()
            _shut(client)

    def drop(self) -> None:
        """Cut the connection; the broker will send the will. A connect under way ends by itself."""
        with self._lock:
            self._dropped = True
            client = self._client
        if client is not None:
            client.on_disconnect = None
            _shut(client)


def _shut(client: Any) -> None:
    sock = client.socket()
    if sock is not None:
        with contextlib.suppress(OSError):
            sock.shutdown(socket.SHUT_RDWR)
        with contextlib.suppress(OSError):
            sock.close()


# --- naming what went wrong ---------------------------------------------------------------


def _unanswered(s: BrokerSettings) -> Cause:
    hint = f"does it speak MQTT {s.protocol}" + ("" if s.tls else ", and without TLS,") + " on this port?"
    return Cause(f"{s.place} closed the connection instead of answering: {hint}")


def cause_of_refusal(code: int, name: str, s: BrokerSettings) -> Cause:
    """Return the cause behind a reason code of CONNACK or DISCONNECT (MQTT 5.0, 3.2.2.2 and 3.14.2.1)."""
    known = {
        0x84: f"the broker does not speak MQTT {s.protocol}: choose another protocol",
        0x85: f"the broker refuses the client id {s.client_id or ''}".rstrip(),
        0x86: f"wrong user or password for user {s.user!r}",
        0x87: f"user {s.user!r} is not authorized" if s.user else "not authorized: the broker wants a user",
        0x8A: "the broker has banned this client",
        0x8E: "another client came with the same client id: is a second daemon running?",
        0x95: "a message is larger than the broker takes",
    }
    if code in known:
        return Cause(f"{s.place}: {known[code]}", settled=code != 0x95)
    return Cause(f"{s.place} ended the connection: {name}")


def cause_of(error: Exception, s: BrokerSettings, connect_s: float) -> Cause:
    """Return the named cause of a failed attempt to connect."""
    if isinstance(error, PublishError):
        return Cause(str(error), settled=True)
    if isinstance(error, ssl.SSLCertVerificationError):
        return Cause(f"{s.place}: certificate refused: {_certificate(error)}", settled=True)
    if isinstance(error, ssl.SSLError):
        if error.reason in ("WRONG_VERSION_NUMBER", "RECORD_LAYER_FAILURE", "UNKNOWN_PROTOCOL"):
            return Cause(f"{s.place}: no TLS there: is it the plain port?", settled=True)
        return Cause(f"{s.place}: TLS failed: {error.reason or error}", settled=True)
    if isinstance(error, socket.gaierror):
        return Cause(f"{s.host}: no such host name ({error.strerror})")
    if isinstance(error, ConnectionRefusedError):
        return Cause(f"{s.place}: nobody listens there: is the broker running?")
    if isinstance(error, TimeoutError):
        return Cause(f"{s.place}: no answer within {connect_s:g} s")
    if s.tls and isinstance(error, ConnectionResetError | BrokenPipeError | EOFError):
        return Cause(f"{s.place}: closed during the TLS handshake: is it the plain port?", settled=True)
    if isinstance(error, OSError):
        return Cause(f"{s.place}: {error.strerror or error}")
    return Cause(f"{s.place}: {type(error).__name__}: {error}")


def _certificate(error: ssl.SSLCertVerificationError) -> str:
    text = error.verify_message.rstrip(".")
    if "expired" in text:
        return f"expired ({text})"
    if "self-signed" in text or "self signed" in text or "issuer" in text:
        return f"unknown authority ({text})"
    if "mismatch" in text.lower():
        return f"wrong host name ({text})"
    return text
