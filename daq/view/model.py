"""What the view shows, as plain frozen values, and how urgent each of it is.

A *source* gives a :class:`Snapshot`; everything else in this room only draws it. So the
view is tested without a journal, and the same view can show a journal, a broker or an invention.
Whatever is not known is None and is shown as "-": a gap in what a source says is no error.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, NamedTuple, Protocol

import numpy as np

from daq.records import TICKS_PER_S, FloatArray, UpturnError


class ViewError(UpturnError):
    """What was to be shown cannot be read just now; the message says which and why."""


@dataclass(frozen=True, slots=True)
class AlarmRow:
    """One open alarm, or a notice that still holds.

    States and priorities are the words of the alarm machine; unknown ones are shown as they are.
    """

    alarm: str
    subject: str = ""
    state: str = "unacknowledged"
    priority: str = ""
    message: str = ""
    since_tick: int | None = None
    can_wait_until_tick: int | None = None
    to_do: str = ""

    @property
    def unacknowledged(self) -> bool:
        """Whether a person has yet to say that it was seen."""
        return "unack" in self.state

    @property
    def notice(self) -> bool:
        """Whether it is a notice, which asks nobody for anything."""
        return self.state == "noted" or self.priority == "notice"

    @property
    def aside(self) -> bool:
        """Whether it is put aside (shelved, suppressed by design, out of service) and presses nobody."""
        return self.state.startswith(("shelved", "suppressed", "out"))


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """A whole test, thinned: test time [h], strain [m/m], rate [1/h]; equal shapes (n,), NaN for gaps."""

    t_h: FloatArray
    strain: FloatArray
    rate_per_h: FloatArray


@dataclass(frozen=True, slots=True)
class Expected:
    """One forecast: an event, and the interval of test hours in which it is expected."""

    of: str
    low_h: float
    median_h: float
    high_h: float
    coverage: float | None = None


@dataclass(frozen=True, slots=True)
class Event:
    """One recent finding, as a line for people."""

    at_tick: int
    test_h: float | None
    text: str


@dataclass(frozen=True, slots=True)
class TestRow:
    """One test. ``name`` is FRAME or FRAME/POSITION; strain in m/m, rates in 1/h, differences in K.

    ``next_event`` is one line about what comes next, or why nothing can be said; ``expected``
    the same as figures, soonest first. ``can_wait_until_tick``: when the test needs a person at the
    latest, as far as is known; open alarms carry their own. ``marks``: (test hour, word) of what happened
    on the curve. ``coverage``: that of ``rate_low_per_h`` to ``rate_high_per_h``. ``quarantined``: why the
    test is no longer evaluated, if so.
    """

    __test__ = False  # not a test class, whatever a collector thinks of its name

    name: str
    specimen: str = ""
    stage: str = ""
    stage_since_h: float | None = None
    test_h: float | None = None
    strain: float | None = None
    rate_per_h: float | None = None
    rate_low_per_h: float | None = None
    rate_high_per_h: float | None = None
    minimum_rate_per_h: float | None = None
    ratio_to_minimum: float | None = None
    temperature_c: float | None = None
    set_point_c: float | None = None
    below_k: float | None = None
    above_k: float | None = None
    alarms: tuple[AlarmRow, ...] = ()
    next_event: str | None = None
    can_wait_until_tick: int | None = None
    curve: Curve | None = None
    marks: tuple[tuple[float, str], ...] = ()
    events: tuple[Event, ...] = ()
    expected: tuple[Expected, ...] = ()
    quarantined: str = ""
    coverage: float = 0.9


@dataclass(frozen=True, slots=True)
class Snapshot:
    """The laboratory at one instant.

    ``now_tick`` is the laboratory's time, which runs ``speed`` times as fast as a clock on the wall where
    every instrument is emulated. ``commit_age_s``: real seconds since the daemon last wrote, None if
    unknown; beyond ``silent_after_s`` the view calls the record silent.
    """

    site: str = ""
    now_tick: int = 0
    speed: float = 1.0
    emulated: bool = False
    commit_age_s: float | None = None
    host_alarms: tuple[AlarmRow, ...] = ()
    tests: tuple[TestRow, ...] = ()
    version: str = ""
    silent_after_s: float = 60.0

    @property
    def silent(self) -> bool:
        """Whether the daemon has not written for so long that what is shown is old."""
        return self.commit_age_s is not None and self.commit_age_s > self.silent_after_s


class Source(Protocol):
    """Where snapshots come from. ``detail`` names the test whose marks and events are wanted too.

    ``read`` returns soon, writes nothing, keeps no transaction open between calls, and raises
    :class:`ViewError` where there is nothing to show.
    """

    def read(self, detail: str | None) -> Snapshot: ...


# --- urgency ----------------------------------------------------------------------------

HOST: Final = ""
"""The name under which the host's own alarms stand in the list."""

_PRIORITY: Final = {"high": 0, "medium": 1, "low": 2, "notice": 3}
_RESPONSE_S: Final = {0: 0.0, 1: 8 * 3600.0, 2: 24 * 3600.0}
"""How long an alarm that names no time may wait before someone looks: a priority is, in ISA-18.2, a
statement about the time to respond; a shift and a day for the lower two are common practice, no source."""

SECTIONS: Final = (
    (0.0, "now"),
    (3600.0, "within the hour"),
    (8 * 3600.0, "within 8 hours"),
    (24 * 3600.0, "within a day"),
    (7 * 24 * 3600.0, "within a week"),
    (math.inf, "more than a week away"),
)
UNKNOWN: Final = "nobody needed, as far as is known"


class Need(NamedTuple):
    """When something needs a person. ``left_s`` is None where nothing is known to need one.

    ``stated`` is false where the time follows from a priority alone: then it gives the row its
    place and is not shown as a deadline.
    """

    left_s: float | None
    stated: bool
    unacknowledged: bool
    priority: int


def priority_of(alarm: AlarmRow) -> int:
    """Return 0 (most) to 3 (a notice); an unknown word counts as medium."""
    return _PRIORITY.get(alarm.priority, 1)


def ranked(alarms: Sequence[AlarmRow]) -> list[AlarmRow]:
    """Return alarms in the order in which they press: unacknowledged first, then deadline, priority, age."""
    far = float("inf")

    def key(a: AlarmRow) -> tuple[bool, bool, bool, float, int, float, str, str]:
        until = far if a.can_wait_until_tick is None else a.can_wait_until_tick
        since = far if a.since_tick is None else a.since_tick
        return (a.notice, a.aside, not a.unacknowledged, until, priority_of(a), since, a.alarm, a.subject)

    return sorted(alarms, key=key)


def need(alarms: Sequence[AlarmRow], until_tick: int | None, now_tick: int) -> Need:
    """Return when a row with these alarms and this deadline of its own needs a person."""
    pressing = [a for a in alarms if not (a.aside or a.notice)]
    stated = [a.can_wait_until_tick for a in pressing if a.can_wait_until_tick is not None]
    if until_tick is not None:
        stated.append(until_tick)
    left = (min(stated) - now_tick) / TICKS_PER_S if stated else None
    is_stated = left is not None
    for a in pressing:
        if a.unacknowledged and a.can_wait_until_tick is None:
            since = now_tick if a.since_tick is None else a.since_tick
            looks = _RESPONSE_S[priority_of(a)] - (now_tick - since) / TICKS_PER_S
            if left is None or looks < left:
                left, is_stated = looks, False
    priority = min((priority_of(a) for a in pressing), default=4)
    return Need(left, is_stated, any(a.unacknowledged for a in pressing), priority)


def section_of(n: Need) -> str:
    """Return the heading under which a row stands."""
    if n.left_s is None:
        return UNKNOWN
    return next(label for limit, label in SECTIONS if n.left_s <= limit)


class Place(NamedTuple):
    """A row at its place in the list: the host (``row`` None) or a test. Notices stand apart from alarms."""

    name: str
    row: TestRow | None
    alarms: tuple[AlarmRow, ...]
    notices: tuple[AlarmRow, ...]
    need: Need


def places(shot: Snapshot) -> list[Place]:
    """Return the host (where it has alarms) and all tests, by time left to act.

    Deadlines are instants, so the order stays while nothing new is known and does not jump about at
    every redraw. What has no time comes last: with open alarms first, finished tests at the very end.
    """
    rows = [_place(t.name, t, t.alarms, t.can_wait_until_tick, shot.now_tick) for t in shot.tests]
    host = _place(HOST, None, shot.host_alarms, None, shot.now_tick)
    if host.alarms:
        rows.append(host)

    def key(p: Place) -> tuple[float, int, bool, bool, list[tuple[int, int, str]]]:
        n = p.need
        left = math.inf if n.left_s is None else max(n.left_s, 0.0)
        over = p.row is not None and finished(p.row)
        return (left, n.priority, not n.unacknowledged, over, natural(p.name))

    return sorted(rows, key=key)


def _place(name: str, row: TestRow | None, alarms: Sequence[AlarmRow], until: int | None, now: int) -> Place:
    order = ranked(alarms)
    real = tuple(a for a in order if not a.notice)
    return Place(name, row, real, tuple(a for a in order if a.notice), need(real, until, now))


def finished(row: TestRow) -> bool:
    """Whether the test is over."""
    return row.stage in ("ruptured", "ended")


def natural(name: str) -> list[tuple[int, int, str]]:
    """Return a key that puts H2 before H10."""
    return [(0, int(p), "") if p.isdigit() else (1, 0, p) for p in re.split(r"(\d+)", name) if p]


# --- what a row says about itself ---------------------------------------------------------


def trend(row: TestRow) -> int | None:
    """Return 1 where the rate rises, -1 where it falls, 0 where neither is shown, None if not known.

    The rate of now against the one when the test was 9/10 as old; a difference counts only
    where the earlier rate lies outside the present interval (outside +-5 % where no interval is
    given), so that noise is not called a trend.
    """
    c, now, t_h = row.curve, row.rate_per_h, row.test_h
    if c is None or now is None or t_h is None or t_h <= 0 or now <= 0:
        return None
    good = np.isfinite(c.rate_per_h) & np.isfinite(c.t_h)
    if np.count_nonzero(good) < 2 or c.t_h[good][0] > 0.9 * t_h:
        return None
    before = float(np.interp(0.9 * t_h, c.t_h[good], c.rate_per_h[good]))
    low = row.rate_low_per_h if row.rate_low_per_h is not None else 0.95 * now
    high = row.rate_high_per_h if row.rate_high_per_h is not None else 1.05 * now
    return 1 if before < low else -1 if before > high else 0


class Band(NamedTuple):
    """Where the temperature lies; ``beyond`` is 1 above the band, -1 below it, 0 within."""

    off_k: float
    below_k: float | None
    above_k: float | None
    beyond: int


def band(row: TestRow) -> Band | None:
    """Return the specimen's temperature against its band, or None where either is unknown."""
    if row.temperature_c is None or row.set_point_c is None:
        return None
    off = row.temperature_c - row.set_point_c
    above = row.above_k is not None and off > row.above_k
    below = row.below_k is not None and off < -row.below_k
    return Band(off, row.below_k, row.above_k, 1 if above else -1 if below else 0)


def ratio_to_minimum(row: TestRow) -> float | None:
    """Return the rate over the minimum rate, as given or worked out."""
    if row.ratio_to_minimum is not None:
        return row.ratio_to_minimum
    if row.rate_per_h is None or not row.minimum_rate_per_h or row.minimum_rate_per_h < 0:
        return None
    return row.rate_per_h / row.minimum_rate_per_h
