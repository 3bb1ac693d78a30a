"""Drains the outbox to the broker, in order, and tells when it cannot.

One thread owns everything here. Other threads only put on its inbox and wake it. What makes a
message gone from the outbox is the broker's acknowledgement with a good reason code and nothing else.

* **Rows** (events and alarm states that were committed) go out one at a time: the next one only after
  the last was acknowledged. So a fault repeats at most the one message in flight, under the same id. The
  last one acknowledged just before a broker died goes out once more too: brokers acknowledge before
  they have written it down (measured: a killed mosquitto lost it in three of twelve kills).
* **States** (status, birth) are latest-only: a newer one replaces an older one that has not gone yet, and
  all are sent again on each new connection, because a broker may have forgotten them.
* A connection on which nothing is acknowledged is dropped and made anew, whatever it says of itself.
* A topic that the broker refuses parks its own rows, not the others; it is tried again, slowly.
"""

from __future__ import annotations

import contextlib
import random
import socket
import threading
import time
import traceback
from collections import deque
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

from daq.lines import iso_utc
from daq.publish import topics
from daq.publish.access import BrokerSettings, check_access
from daq.publish.link import REFUSED, Answer, Cause, Ended, Link, Up, Will
from daq.publish.outage import Outage, Pace
from daq.records import TICKS_PER_S
from daq.store.rows import OutboxRow

Backlog = Callable[[int, int], list[OutboxRow]]
"""(after sequence number, at most so many) -> rows that nobody has acknowledged, in order."""
RECENT_S: Final = 2.0
"""A row acknowledged this shortly before the broker ended the connection may have died with it [s]."""
FETCH: Final = 200
BUFFER_MOST: Final = 2_000
UNRECORDED_MOST: Final = 100
STATUS_EXPIRES_S: Final = 86_400
"""A status outlives its daemon at the broker for a day (MQTT 5); while the daemon lives it is renewed."""


@dataclass(slots=True)
class _Flight:
    """One message under way. ``row`` for what came from the outbox, else it is a state or a heartbeat."""

    topic: str
    at: float
    row: OutboxRow | None = None


@dataclass(slots=True)
class _State:
    """The newest payload of a retained topic."""

    payload: bytes
    expires_s: int | None = None
    set_at: float = 0.0


_NOT_EMPTY: Final = _State(b"?")


@dataclass(slots=True)
class Counts:
    """What has happened since the start, for the log and the tests."""

    sent: int = 0
    connections: int = 0
    rebuilt: int = 0
    faults: int = 0
    denied: int = 0


@dataclass(slots=True)
class _Parked:
    """Rows of refused topics: they stay in the outbox; only their numbers are kept here."""

    topics: dict[str, str] = field(default_factory=dict)
    seqs: set[int] = field(default_factory=set)
    told: set[str] = field(default_factory=set)
    retry_at: float | None = None


class Publisher:
    """See the module. ``start`` and ``stop`` once each; everything else from any thread.

    Args:
        on_acked: Gets the sequence numbers that may leave the outbox; must only put them on a queue.
        on_trouble: Gets (condition, active, message); conditions are ``publisher_down`` and
            ``publish_denied`` of the catalogue. Must only put them on a queue.
        clock: Monotonic seconds. ``wall``: UTC ticks, for heartbeats.

    Raises:
        PublishError: a secret or certificate that cannot be used.
    """

    def __init__(
        self,
        broker: BrokerSettings,
        *,
        site: str,
        host: str = topics.THIS_HOST,
        on_acked: Callable[[Sequence[int]], None],
        on_trouble: Callable[[str, bool, str], None],
        clock: Callable[[], float] = time.monotonic,
        wall: Callable[[], int] = lambda: time.time_ns() * TICKS_PER_S // 1_000_000_000,
        pace: Pace | None = None,
    ) -> None:
        check_access(broker)
        self._broker = broker
        self._site = site
        self._host = host
        self._on_acked = on_acked
        self._on_trouble = on_trouble
        self._clock = clock
        self._wall = wall
        self._pace = pace or Pace()
        self._client_id = broker.client_id or f"upturn-{site}-{host}"
        self._online = topics.host_topic(site, host, "online")
        self._random = random.Random()
        self._inbox: deque[Callable[[], None]] = deque()
        self._woken, self._waker = socket.socketpair()
        for end in (self._woken, self._waker):
            end.setblocking(False)
        self._thread = threading.Thread(target=self._run, name="publisher", daemon=True)
        self._backlog: Backlog = lambda after, most: []
        self._stop_at: float | None = None
        self.beat = 0
        self.counts = Counts()
        self._began_unrecorded = 0

        # rows of the outbox
        self._pending: deque[OutboxRow] = deque()
        self._last = 0
        self._caught_up = False
        self._fetch_at = 0.0
        self._parked = _Parked()
        self._again: set[int] = set()
        self._again_up_to = 0
        # states
        self._states: dict[str, _State] = {}
        self._dirty: dict[str, None] = {}
        self._unrecorded: deque[tuple[str, bytes]] = deque(maxlen=UNRECORDED_MOST)
        # the connection
        self._link: Link | None = None
        self._up = False
        self._up_at = 0.0
        self._proven = False
        self._flying: dict[int, _Flight] = {}
        self._latest: tuple[OutboxRow, float] | None = None
        self._repeated = 0
        self._connect_at = 0.0
        self._beat_at = 0.0
        self._outage = Outage(
            self._pace,
            broker.place,
            self._client_id,
            lambda active, text: self._on_trouble("publisher_down", active, text),
        )

    # --- from any thread -----------------------------------------------------------------

    def start(self, backlog: Backlog) -> None:
        """Begin to publish what ``backlog`` gives and what is offered."""
        self._backlog = backlog
        self._outage.begin(self._clock())
        self._set_state(self._online, self._birth("online"))
        self._thread.start()

    def offer(self, rows: Iterable[OutboxRow]) -> None:
        """Say that rows were committed, in order. They may be dropped here: the backlog has them."""
        news = tuple(rows)
        self._put(lambda: self._take_offer(news))

    def retained(self, topic: str, payload: bytes, expires_s: int | None = None) -> None:
        """Set the newest payload of a retained topic; an empty one clears it."""
        self._put(lambda: self._set_state(topic, payload, expires_s))

    def status(self, test: str, told: Mapping[str, Any], expires_s: int | None = STATUS_EXPIRES_S) -> None:
        """Set the retained status of a test (of the host where ``test`` is empty)."""
        self._put(lambda: self._take_status(test, told, expires_s))

    def unrecorded(self, alarm: str, message: str) -> None:
        """Tell an alarm that could not be written down, once, from memory."""
        self._put(lambda: self._take_unrecorded(alarm, message))

    def alive(self) -> bool:
        """Whether the thread runs. That it moves is seen from ``beat``, at least once a second."""
        return self._thread.is_alive()

    def stop(self, deadline_s: float) -> None:
        """Send what is left for at most ``deadline_s``, say offline, disconnect, end the thread."""

        def begin() -> None:
            self._stop_at = self._clock() + deadline_s

        if not self._thread.is_alive():
            return
        self._put(begin)
        self._thread.join(deadline_s + 2.0)
        if not self._thread.is_alive():
            self._woken.close()
            self._waker.close()

    def _put(self, work: Callable[[], None]) -> None:
        self._inbox.append(work)
        self._wake()

    def _wake(self) -> None:
        with contextlib.suppress(OSError):  # full: it is awake already; closed: it has ended
            self._waker.send(b"\0")

    # --- the thread ----------------------------------------------------------------------

    def _run(self) -> None:
        while True:
            try:
                if self._turn():
                    return
            except Exception as error:  # a fault of ours must cost a second, not the alarms
                self.counts.faults += 1
                where = traceback.extract_tb(error.__traceback__)[-1]
                what = f"{type(error).__name__}: {error} ({where.name}, line {where.lineno})"
                text = f"fault of this program: {what}"
                self._lose(Cause(text, settled=True))
                self._connect_at = self._clock() + 1.0

    def _turn(self) -> bool:
        """Do everything that can be done now, then wait; return whether it is time to end."""
        self.beat += 1
        while self._inbox:
            self._inbox.popleft()()
        now = self._clock()
        if self._stop_at is not None and self._finished(now):
            self._say_offline()
            return True
        self._connect_if_due(now)
        if self._up:
            self._retry_parked(now)
            self._fetch(now)
            self._send(now)
            self._check_answers(now)
            if self._proven:
                self._outage.proven(now - self._up_at)
        elif self._link is not None and now >= self._connect_at:
            self._lose(Cause(f"{self._broker.place}: no answer within {3 * self._pace.connect_s:g} s"))
        self._outage.look(now)
        self._wait(self._until_next(now))
        for event in self._link.pump() if self._link else ():
            self._hear(event)
        return False

    def _wait(self, timeout_s: float) -> None:
        if self._link is not None:
            self._link.wait(self._woken, timeout_s)
        else:
            with contextlib.suppress(TimeoutError):
                self._woken.settimeout(max(timeout_s, 1e-3))
                self._woken.recv(1)
                self._woken.setblocking(False)
        with contextlib.suppress(BlockingIOError, TimeoutError):
            self._woken.setblocking(False)
            while self._woken.recv(4096):
                pass

    def _until_next(self, now: float) -> float:
        times = [now + 1.0]
        if self._inbox or (self._up and self._room_for_row() and self._pending):
            return 0.0
        if self._link is None:
            times.append(self._connect_at)
        if self._up:
            times.append(self._beat_at)
            if self._hungry():
                times.append(self._fetch_at)
        times += [f.at + self._pace.ack_s for f in self._flying.values()]
        if self._stop_at is not None:
            times.append(self._stop_at)
        return max(0.0, min(times) - now)

    # --- inbox ---------------------------------------------------------------------------

    def _take_offer(self, rows: Sequence[OutboxRow]) -> None:
        if not self._caught_up:
            return  # the backlog will give them
        if len(self._pending) + len(rows) > BUFFER_MOST:
            self._caught_up = False
            return
        for row in rows:
            if row.seq > self._last:
                self._pending.append(row)
                self._last = row.seq

    def _set_state(self, topic: str, payload: bytes, expires_s: int | None = None) -> None:
        known, now = self._states.get(topic), self._clock()
        fresh = known is not None and (expires_s is None or now - known.set_at < expires_s / 2)
        if known is not None and known.payload == payload and fresh:
            return
        self._states[topic] = _State(payload, expires_s, now)
        self._dirty[topic] = None

    def _take_status(self, test: str, told: Mapping[str, Any], expires_s: int | None) -> None:
        topic = topics.status_topic(self._site, test, self._host)
        self._set_state(topic, topics.status_payload(self._site, self._host, test, told), expires_s)
        # what the broker still keeps of a test that has left the frame
        stand = topics.open_alarm_topics(self._site, self._host, test, told)
        root = topics.alarm_topic(self._site, test, "", "", self._host).rsplit("/", 2)[0] + "/"
        waiting = {row.topic for row in self._pending} | {f.topic for f in self._flying.values()}
        for topic, state in self._states.items():
            if topic.startswith(root) and state.payload and topic not in stand | waiting:
                self._states[topic] = _State(b"")
                self._dirty[topic] = None

    def _take_unrecorded(self, alarm: str, message: str) -> None:
        self._began_unrecorded += 1
        at = self._wall()
        body = {
            "id": f"@{self._host}|unrecorded|{alarm}|{at}|{self._began_unrecorded}",
            "at": iso_utc(at),
            "test_h": None,
            "frame": topics.HOST,
            "kind": "unrecorded",
            "alarm": alarm,
            "message": message,
        }
        topic = topics.event_topic(self._site, topics.HOST, self._host)
        self._unrecorded.append((topic, topics.payload(self._site, self._host, body)))

    def _birth(self, state: str) -> bytes:
        return topics.payload(self._site, self._host, {"state": state})

    # --- the connection ------------------------------------------------------------------

    def _connect_if_due(self, now: float) -> None:
        if self._link is not None or now < self._connect_at or self._stop_at is not None:
            return
        self._link = Link(
            self._broker,
            self._client_id,
            Will(self._online, self._birth("offline")),
            connect_s=self._pace.connect_s,
            keepalive_s=self._pace.keepalive_s,
            wake=self._wake,
        )
        self._link.open()
        # name lookup and handshake have deadlines of their own; this one holds for all together
        self._connect_at = now + 3.0 * self._pace.connect_s

    def _hear(self, event: Up | Answer | Ended) -> None:
        now = self._clock()
        if isinstance(event, Ended):
            self._lose(event.cause, by_peer=True)
        elif isinstance(event, Up):
            self._up, self._up_at, self._proven = True, now, False
            self.counts.connections += 1
            self._beat_at = now + self._pace.heartbeat_s
            self._dirty = dict.fromkeys([self._online, *self._states])
        else:
            self._answer(event, now)

    def _lose(self, cause: Cause, *, by_peer: bool = False) -> None:
        """Drop the connection; what was under way goes back to the head of the queue."""
        now = self._clock()
        if self._link is not None:
            self._link.drop()
        rows = sorted((f.row for f in self._flying.values() if f.row is not None), key=lambda r: r.seq)
        if self._up and by_peer:
            first = rows[0].seq if rows else None
            cause, choked = self._outage.hung_up(cause, now - self._up_at, first)
            if choked:
                row = rows.pop(0)
                self._refuse(_Flight(row.topic, now, row), f"the broker hangs up on it ({row.id})", now)
        self._link, self._up = None, False
        self._pending.extendleft(reversed(rows))
        if by_peer and self._latest is not None and now - self._latest[1] < RECENT_S:
            self._pending.appendleft(self._latest[0])
            self._repeated = self._latest[0].seq  # once is enough, however often the broker dies
        self._latest = None
        self._flying.clear()
        self._connect_at = now + self._outage.lost(cause, now)

    def _check_answers(self, now: float) -> None:
        oldest = min((f.at for f in self._flying.values()), default=now)
        if now - oldest >= self._pace.ack_s:
            self.counts.rebuilt += 1
            text = f"{self._broker.place}: connected, but nothing was acknowledged for {self._pace.ack_s:g} s"
            self._lose(Cause(text))

    # --- sending -------------------------------------------------------------------------

    def _hungry(self) -> bool:
        return not self._caught_up and len(self._pending) <= FETCH // 4

    def _fetch(self, now: float) -> None:
        if not self._hungry() or now < self._fetch_at:
            return
        try:
            rows = self._backlog(self._last, FETCH)
        except Exception:  # the journal's trouble is told by the journal; here it is only tried again
            self.counts.faults += 1
            self._fetch_at = now + 1.0
            return
        for row in rows:
            self._last = row.seq
            if row.seq > self._again_up_to or row.seq in self._again:
                self._again.discard(row.seq)
                self._pending.append(row)
        self._caught_up = len(rows) < FETCH

    def _room_for_row(self) -> bool:
        return not any(f.row is not None for f in self._flying.values())

    def _send(self, now: float) -> None:
        while self._unrecorded and self._fly(*self._unrecorded[0], now):
            self._unrecorded.popleft()
        while self._pending and self._room_for_row():
            row = self._pending[0]
            if row.topic in self._parked.topics:
                self._parked.seqs.add(row.seq)
            elif not self._fly(row.topic, row.payload, now, row.retain, row.expires_s, row):
                break
            self._pending.popleft()
        room = self._pace.states_in_flight - sum(f.row is None for f in self._flying.values())
        for topic in list(self._dirty)[: max(room, 0)]:
            state = self._states.get(topic)
            del self._dirty[topic]
            if state is None or topic in self._parked.topics:
                continue
            if not self._fly(topic, state.payload, now, True, state.expires_s):
                self._dirty[topic] = None
                break
        if now >= self._beat_at:
            self._beat_at = now + self._pace.heartbeat_s
            body = {"at": iso_utc(self._wall()), "waiting": len(self._pending), "sent": self.counts.sent}
            topic = topics.host_topic(self._site, self._host, "heartbeat")
            expires = round(3 * self._pace.heartbeat_s)
            self._fly(topic, topics.payload(self._site, self._host, body), now, False, expires)
            self._caught_up = False  # an offer is a hint; now and then the outbox itself is asked

    def _fly(
        self,
        topic: str,
        payload: bytes,
        now: float,
        retain: bool = False,
        expires_s: int | None = None,
        row: OutboxRow | None = None,
    ) -> bool:
        """Send one message; False where the library has no room just now."""
        assert self._link is not None
        try:
            mid = self._link.publish(topic, payload, retain=retain, expires_s=expires_s)
        except ValueError as error:
            self._refuse(_Flight(topic, now, row), f"cannot be published: {error}", now)
            return True
        if mid is None:
            return False
        self._flying[mid] = _Flight(topic, now, row)
        return True

    def _answer(self, answer: Answer, now: float) -> None:
        flight = self._flying.pop(answer.mid, None)
        if flight is None:
            return
        self._proven = True
        self._outage.proven(now - self._up_at)
        if answer.code >= REFUSED:
            self._refuse(flight, answer.name, now)
            return
        self.counts.sent += 1
        if flight.topic in self._parked.told:
            self._parked.told.discard(flight.topic)
            if not self._parked.told:
                self._on_trouble("publish_denied", False, "the broker takes all topics again")
        if flight.row is not None:
            self._latest = None if flight.row.seq == self._repeated else (flight.row, now)
            self._on_acked((flight.row.seq,))
            if flight.row.retain:
                # sent again on a new connection; what was cleared need not be
                self._dirty.pop(flight.topic, None)
                self._states.pop(flight.topic, None)
                if flight.row.payload:
                    self._states[flight.topic] = _State(flight.row.payload, flight.row.expires_s)
        elif flight.topic not in self._dirty and not self._states.get(flight.topic, _NOT_EMPTY).payload:
            del self._states[flight.topic]  # cleared, and the broker knows

    # --- refused topics ------------------------------------------------------------------

    def _refuse(self, flight: _Flight, why: str, now: float) -> None:
        self.counts.denied += 1
        p = self._parked
        new = flight.topic not in p.topics
        p.topics[flight.topic] = why
        if flight.row is not None:
            p.seqs.add(flight.row.seq)
        if p.retry_at is None:
            p.retry_at = now + self._pace.slow_retry_s * self._random.uniform(0.5, 1.0)
        if new and flight.topic not in p.told:
            p.told.add(flight.topic)
            more = f" and {len(p.told) - 1} more" if len(p.told) > 1 else ""
            self._on_trouble("publish_denied", True, f"{self._broker.place}: {flight.topic}{more}: {why}")

    def _retry_parked(self, now: float) -> None:
        p = self._parked
        if p.retry_at is None or now < p.retry_at or not self._room_for_row():
            return
        self._dirty |= dict.fromkeys(t for t in p.topics if t in self._states)
        if p.seqs:
            # read them, and what waits in memory behind them, from the outbox again, in order
            self._again |= p.seqs | {row.seq for row in self._pending}
            self._again_up_to = max(self._again_up_to, self._last)
            self._last = min(self._again) - 1
            self._pending.clear()
            self._caught_up, self._fetch_at = False, now
        p.topics.clear()
        p.seqs.clear()
        p.retry_at = None

    # --- the end -------------------------------------------------------------------------

    def _finished(self, now: float) -> bool:
        idle = not (self._pending or self._dirty or self._unrecorded or self._flying) and self._caught_up
        return now >= (self._stop_at or 0.0) or not self._up or idle

    def _say_offline(self) -> None:
        link = self._link
        if link is None:
            return
        if self._up:
            with contextlib.suppress(ValueError, OSError):
                self._set_state(self._online, self._birth("offline"))
                mid = link.publish(self._online, self._birth("offline"), retain=True)
                end = time.monotonic() + 0.5
                while time.monotonic() < end:
                    link.wait(self._woken, 0.05)
                    if any(not isinstance(e, Answer) or e.mid == mid for e in link.pump()):
                        break
        link.close()
