"""How long the broker has been away, why, what was told about it, and when to try again.

Pure bookkeeping on a monotonic clock: no socket, no thread. The publisher asks and obeys.
"""

from __future__ import annotations

import random
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from daq.publish.link import Cause

SHORT_MOST: Final = 3
"""Connections in a row that the broker ended soon after accepting them, until a cause is suspected."""


@dataclass(frozen=True, slots=True)
class Pace:
    """How fast things are tried and given up [s]. Shorter only in tests."""

    first_retry_s: float = 0.5
    most_retry_s: float = 30.0
    slow_retry_s: float = 60.0
    connect_s: float = 5.0
    ack_s: float = 8.0
    heartbeat_s: float = 10.0
    grace_s: float = 5.0
    keepalive_s: int = 15
    states_in_flight: int = 10


class Outage:
    """From the loss of a connection (or the start) to the first acknowledgement on a new one.

    Args:
        place: ``host:port``, for messages.
        tell: Gets (active, message) when the alarm ``publisher_down`` begins, changes its cause or ends.
    """

    def __init__(self, pace: Pace, place: str, client_id: str, tell: Callable[[bool, str], None]) -> None:
        self._pace = pace
        self._place = place
        self._client_id = client_id
        self._tell = tell
        self._random = random.Random()
        self._since: float | None = None
        self._cause: Cause | None = None
        self._told: Cause | None = None
        self._told_at = 0.0
        self._attempt = 0
        self._short = 0
        self._head = (0, 0)

    def begin(self, now: float) -> None:
        """There is no connection yet."""
        self._since = now

    def lost(self, cause: Cause, now: float) -> float:
        """Note a connection or an attempt that failed; return how long to wait before the next [s]."""
        if self._since is None:
            self._since = now
        self._cause = cause
        if cause.settled:
            wait = self._pace.slow_retry_s
        else:
            wait = min(self._pace.first_retry_s * 2.0 ** min(self._attempt, 20), self._pace.most_retry_s)
        self._attempt += 1
        return wait * self._random.uniform(0.5, 1.0)

    def hung_up(self, cause: Cause, lasted_s: float, row: int | None) -> tuple[Cause, bool]:
        """Suspect what ends one connection after the other; not every broker says why it hangs up.

        ``row`` is the sequence number of the row under way, if any. Returns the cause to go by, and
        whether that row is to be set aside: one message that the broker chokes on must not keep
        the others back for ever.
        """
        if lasted_s >= self._pace.grace_s:
            self._short, self._head = 0, (0, 0)
            return cause, False
        self._short += 1
        if row is not None:
            self._head = (row, self._head[1] + 1 if self._head[0] == row else 1)
            if self._head[1] >= SHORT_MOST:
                self._short, self._head = 0, (0, 0)
                return cause, True
        if self._short < SHORT_MOST or cause.settled:
            return cause, False
        what = f"does another client use the same client id {self._client_id!r}?"
        return Cause(f"{self._place}: hangs up soon after accepting: {what}", settled=True), False

    def look(self, now: float) -> None:
        """Tell the alarm where it is time: at once for a settled cause, else after the grace."""
        if self._since is None:
            return
        cause = self._cause or Cause(f"{self._place}: no answer yet")
        if not cause.settled and now - self._since < self._pace.grace_s:
            return
        changed = cause != self._told and (cause.settled or now - self._told_at >= self._pace.slow_retry_s)
        if self._told is None or changed:
            self._told, self._told_at = cause, now
            self._tell(True, cause.text)

    def proven(self, lasted_s: float) -> None:
        """The broker has acknowledged something: only that proves a working connection.

        After several that ended soon it must also have lasted a while.
        """
        if self._since is None or (self._short >= SHORT_MOST and lasted_s < self._pace.grace_s):
            return
        self._attempt = 0
        self._since = self._cause = None
        if self._told is not None:
            self._told = None
            self._tell(False, f"{self._place} acknowledges again")
