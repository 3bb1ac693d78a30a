"""The life of an alarm: a table of states, and the deadlines between them.

States and words follow ISA-18.2 / IEC 62682, with ``noted`` added for notices. What the
machine is fed: *cues* (a condition became true or false), *entries* (what a person, or
the chain by design, does to alarms) and the passing of time. What it gives: one
:class:`~daq.core.block.Conclusion` for each real transition, none for anything repeated.

Three things keep it honest:

* Time is data. On-delay, off-delay, escalation and the end of a shelf are deadlines; each is
  worked through before the event that comes after it, and stamped with its own tick.
* The order of work depends on ticks and names alone, so any grouping of the same events gives
  the same conclusions (:func:`take_block` does the same for a block of scans).
* A *hold* (shelved by a person, suppressed by design, out of service) is kept apart from the
  alarms it covers, so it also covers alarms that do not stand yet. A hold for a whole frame moves
  only alarms that stand; the others move when their condition comes.

Ticks handed in are the running maximum of lab time; a smaller one is read as the last one.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import StrEnum
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core.alarm_table import HELD, TABLE, Event, State
from daq.core.block import Conclusion, Cue
from daq.core.catalogue import CATALOGUE, RANK, AlarmKind, Priority
from daq.records import TICKS_PER_S, CoreError, IntArray

SHELVE_MOST_S: Final = 7 * 24 * 3600.0
"""Longest shelf [s]: an alarm put away for good belongs out of service, with a reason."""


class Action(StrEnum):
    """What an entry does to alarms; the words are those of operator entries."""

    ACKNOWLEDGE = "acknowledge"
    RESET = "reset"
    SHELVE = "shelve"
    UNSHELVE = "unshelve"
    SUPPRESS = "suppress"
    UNSUPPRESS = "unsuppress"
    OUT_OF_SERVICE = "out_of_service"
    RETURN_TO_SERVICE = "return_to_service"


_ANSWERS: Final[dict[str, Event]] = {Action.ACKNOWLEDGE: Event.ACKNOWLEDGE, Action.RESET: Event.RESET}
_BEGINS: Final[dict[str, Event]] = {
    Action.SHELVE: Event.SHELVE,
    Action.SUPPRESS: Event.SUPPRESS,
    Action.OUT_OF_SERVICE: Event.REMOVE,
}
_ENDS: Final[dict[str, Event]] = {
    Action.UNSHELVE: Event.SHELVE,
    Action.UNSUPPRESS: Event.SUPPRESS,
    Action.RETURN_TO_SERVICE: Event.REMOVE,
}
_STRENGTH: Final = (Event.REMOVE, Event.SUPPRESS, Event.SHELVE)
"""Of several holds on one alarm the first in this row names its state."""


@dataclass(frozen=True, slots=True)
class AlarmEntry:
    """What a person, or the chain by design, does to alarms at one instant: a word of :class:`Action`.

    ``alarm`` empty: all of the frame; ``subject`` empty: all subjects of that alarm.
    ``occurrence``: acknowledge only this one, so that an answer that comes late does not
    acknowledge a newer alarm unseen. ``until_tick``: end of a shelf; without one, and beyond
    :data:`SHELVE_MOST_S`, a shelf ends after that time. ``initials`` say who; empty: by design.
    """

    scan: int
    tick: int
    action: str
    alarm: str = ""
    subject: str = ""
    initials: str = ""
    until_tick: int | None = None
    occurrence: int | None = None
    why: str = ""

    def covers(self, alarm: str, subject: str) -> bool:
        return self.alarm in ("", alarm) and self.subject in ("", subject)


@state
@dataclass(frozen=True, slots=True)
class Hold:
    """A shelf, a suppression or an out-of-service in force; patterns as in :class:`AlarmEntry`."""

    event: str
    alarm: str
    subject: str
    until_tick: int | None
    initials: str
    why: str

    def covers(self, alarm: str, subject: str) -> bool:
        return self.alarm in ("", alarm) and self.subject in ("", subject)


@state
@dataclass(frozen=True, slots=True)
class OpenAlarm:
    """One alarm that was ever cued: its state and what a person wants to know about it.

    Args:
        since_tick: When the condition of this occurrence began (before the on-delay).
        seen: The condition as the last cue gave it; ``active`` after the delays.
        change_tick: Deadline at which ``active`` becomes ``seen``, or None.
        escalate_tick: Deadline of the next rise of priority, or None.
        initials: Who acknowledged, or put it away, last; empty if nobody.
    """

    alarm: str
    subject: str
    state: State = State.NORMAL
    priority: Priority = Priority.LOW
    occurrence: int = 0
    since_tick: int = 0
    message: str = ""
    can_wait_until_tick: int | None = None
    figures: Mapping[str, Any] = field(default_factory=dict)
    initials: str = ""
    seen: bool = False
    active: bool = False
    change_tick: int | None = None
    escalate_tick: int | None = None


@state
@dataclass(frozen=True, slots=True)
class AlarmsState:
    """All alarms of one test (or host), sorted by (alarm, subject), and the holds in force."""

    tick: int | None = None
    alarms: tuple[OpenAlarm, ...] = ()
    holds: tuple[Hold, ...] = ()
    due_tick: int | None = None


ScanAt = Callable[[int], int]
"""From a deadline's tick to the ordinal of the first scan at or after it."""


def begin() -> AlarmsState:
    """Return the state before the first cue."""
    return AlarmsState()


def due(state: AlarmsState) -> int | None:
    """Return the tick of the next deadline (delay, escalation, end of a shelf), or None."""
    return state.due_tick


def react(
    state: AlarmsState,
    events: Sequence[Cue | AlarmEntry],
    *,
    scan_at: ScanAt | None = None,
    catalogue: Mapping[str, AlarmKind] = CATALOGUE,
) -> tuple[AlarmsState, tuple[Conclusion, ...]]:
    """Take cues and entries in their order; return the conclusions of all real transitions.

    Deadlines up to each event's tick are worked through before it. Their scan is ``scan_at``
    of the deadline, or else the event's own.

    Raises:
        CoreError: a cue names an alarm that the catalogue does not have.
    """
    if not events:
        return state, ()
    desk = _Desk(state, catalogue)
    for event in events:
        tick = desk.advance(event.tick, event.scan, scan_at)
        if isinstance(event, Cue):
            desk.cue(event, tick)
        else:
            desk.enter(event, tick)
    return desk.close()


def pass_time(
    state: AlarmsState,
    tick: int,
    scan: int,
    *,
    scan_at: ScanAt | None = None,
    catalogue: Mapping[str, AlarmKind] = CATALOGUE,
) -> tuple[AlarmsState, tuple[Conclusion, ...]]:
    """Work through every deadline up to and including ``tick``, each stamped with its own tick."""
    if state.due_tick is None or state.due_tick > tick:
        later = state.tick is None or tick > state.tick
        return (replace(state, tick=tick) if later else state), ()
    desk = _Desk(state, catalogue)
    desk.advance(tick, scan, scan_at)
    return desk.close()


def take_block(
    state: AlarmsState,
    events: Sequence[Cue | AlarmEntry],
    tick: IntArray,
    first: int,
    *,
    catalogue: Mapping[str, AlarmKind] = CATALOGUE,
) -> tuple[AlarmsState, tuple[Conclusion, ...]]:
    """Take the cues of one block of scans and let its time pass, whatever the block's size.

    Args:
        events: Each with the ordinal of its scan; its tick is taken from the block, as the
            running maximum, so that slightly unordered stamps cannot depend on the cut.
        tick: Lab time of the block's scans, in order of arrival; (n,).
        first: Ordinal of the first scan.
    """
    if not len(tick):
        return react(state, events, catalogue=catalogue)
    start = int(tick[0]) if state.tick is None else state.tick
    latest = np.maximum.accumulate(np.maximum(tick, start))
    end = int(latest[-1])
    if not events and (state.due_tick is None or state.due_tick > end):
        return replace(state, tick=end), ()

    def scan_at(when: int) -> int:
        return first + int(np.searchsorted(latest, when))

    placed: list[Cue | AlarmEntry] = []
    for event in sorted(events, key=lambda e: e.scan):
        row = min(max(event.scan - first, 0), len(latest) - 1)
        placed.append(replace(event, tick=int(latest[row])))
    state, early = react(state, placed, scan_at=scan_at, catalogue=catalogue)
    state, late = pass_time(state, end, first + len(latest) - 1, scan_at=scan_at, catalogue=catalogue)
    return state, early + late


_URGENCY: Final = {
    State.UNACKNOWLEDGED: 0,
    State.LATCHED_UNACKNOWLEDGED: 1,
    State.RETURNED_UNACKNOWLEDGED: 2,
    State.ACKNOWLEDGED: 3,
    State.LATCHED_ACKNOWLEDGED: 4,
    State.NOTED: 5,
    State.SHELVED: 6,
    State.SUPPRESSED: 7,
    State.OUT_OF_SERVICE: 8,
}


def open_alarms(state: AlarmsState) -> tuple[OpenAlarm, ...]:
    """Return every alarm that is not normal, by how much it asks for a person.

    Order: state, then priority, then the time left to act, then the name.
    """

    def urgency(a: OpenAlarm) -> tuple[int, int, float, str, str]:
        left = float("inf") if a.can_wait_until_tick is None else float(a.can_wait_until_tick)
        return (_URGENCY[a.state], -RANK[a.priority], left, a.alarm, a.subject)

    return tuple(sorted((a for a in state.alarms if a.state is not State.NORMAL), key=urgency))


def fields_of(a: OpenAlarm, tick: int, catalogue: Mapping[str, AlarmKind] = CATALOGUE) -> dict[str, Any]:
    """Return the fields of an ``alarm`` finding at ``tick``.

    ``can_wait_until`` is a tick of lab time; ``age_s`` [s] counts from the beginning of the condition.
    """
    return {
        "alarm": a.alarm,
        "subject": a.subject,
        "state": a.state.value,
        "priority": a.priority.value,
        "message": a.message,
        "to_do": catalogue[a.alarm].to_do,
        "age_s": (tick - a.since_tick) / TICKS_PER_S,
        "can_wait_until": a.can_wait_until_tick,
        "occurrence": a.occurrence,
        "initials": a.initials,
        "figures": dict(a.figures),
    }


class _Desk:
    """A state laid out for work: alarms by name, conclusions as they come. Never leaves this module."""

    def __init__(self, state: AlarmsState, catalogue: Mapping[str, AlarmKind]) -> None:
        self._kinds = catalogue
        self._tick = state.tick
        self._alarms = {(a.alarm, a.subject): a for a in state.alarms}
        self._holds = {(h.event, h.alarm, h.subject): h for h in state.holds}
        self._out: list[Conclusion] = []

    def close(self) -> tuple[AlarmsState, tuple[Conclusion, ...]]:
        next_one = self._next_deadline()
        return (
            AlarmsState(
                self._tick,
                tuple(self._alarms[k] for k in sorted(self._alarms)),
                tuple(self._holds[k] for k in sorted(self._holds)),
                None if next_one is None else next_one[0],
            ),
            tuple(self._out),
        )

    # --- time ----------------------------------------------------------------------------

    def advance(self, tick: int, scan: int, scan_at: ScanAt | None) -> int:
        """Work through the deadlines up to ``tick``; return the tick that counts from now on."""
        while (entry := self._next_deadline()) is not None and entry[0] <= tick:
            when = entry[0]
            # a deadline of zero length was due at once: it belongs to the scan in hand
            self._meet(entry, scan if scan_at is None else scan_at(when))
            self._tick = when if self._tick is None else max(self._tick, when)
        self._tick = tick if self._tick is None else max(self._tick, tick)
        return self._tick

    def _next_deadline(self) -> tuple[int, int, str, str, str] | None:
        """Return (tick, kind, names) of the earliest deadline; ties in the order of kind and name."""
        found: list[tuple[int, int, str, str, str]] = []
        for a in self._alarms.values():
            if a.change_tick is not None:
                found.append((a.change_tick, 0, a.alarm, a.subject, ""))
            if a.escalate_tick is not None:
                found.append((a.escalate_tick, 1, a.alarm, a.subject, ""))
        found += [
            (h.until_tick, 2, h.alarm, h.subject, h.event)
            for h in self._holds.values()
            if h.until_tick is not None
        ]
        return min(found, default=None)

    def _meet(self, entry: tuple[int, int, str, str, str], scan: int) -> None:
        when, kind, alarm, subject, event = entry
        if kind == 0:
            self._settle(self._alarms[alarm, subject], when, scan)
        elif kind == 1:
            self._escalate(self._alarms[alarm, subject], when, scan)
        else:
            del self._holds[event, alarm, subject]
            self._apply_holds(when, scan, "")

    # --- cues ----------------------------------------------------------------------------

    def cue(self, cue: Cue, tick: int) -> None:
        kind = self._kind(cue.alarm)
        key = (cue.alarm, cue.subject)
        a = self._alarms.get(key, OpenAlarm(cue.alarm, cue.subject, priority=kind.priority))
        if cue.active:
            a = replace(
                a,
                message=cue.message or kind.text,
                can_wait_until_tick=cue.can_wait_until_tick,
                figures=dict(cue.figures),
            )
        if kind.momentary:
            if cue.active:
                self._happen(replace(a, since_tick=tick), kind, tick, cue.scan)
            return
        if cue.active == a.seen:
            if key in self._alarms:
                self._alarms[key] = a  # newer figures; no transition, so nothing to conclude
            return
        a = replace(a, seen=cue.active)
        if cue.active == a.active:
            a = replace(a, change_tick=None)  # it came back within the delay
        else:
            if cue.active:
                a = replace(a, since_tick=tick)
            delay = kind.on_delay_s if cue.active else kind.off_delay_s
            a = replace(a, change_tick=tick + round(delay * TICKS_PER_S))
        self._alarms[key] = a
        if a.change_tick is not None and a.change_tick <= tick:
            self._settle(a, tick, cue.scan)

    def _happen(self, a: OpenAlarm, kind: AlarmKind, tick: int, scan: int) -> None:
        """Something happened and is over: a notice is told, an alarm raised and left to acknowledge."""
        if not kind.notice:
            self._settle(replace(a, seen=True), tick, scan)
            self._settle(replace(self._alarms[a.alarm, a.subject], seen=False), tick, scan)
            return
        a = replace(a, occurrence=a.occurrence + 1)
        hold = self._hold_on(a)
        state = State.NOTED if hold is None else HELD[Event[hold.event]]
        self._conclude(replace(a, state=state), tick, scan)
        self._alarms[a.alarm, a.subject] = replace(a, message="", can_wait_until_tick=None, figures={})

    def _settle(self, a: OpenAlarm, tick: int, scan: int) -> None:
        """The condition has lasted through its delay: what was seen is now so."""
        kind = self._kind(a.alarm)
        a = replace(a, active=a.seen, change_tick=None)
        if not a.active:
            event = Event.CLEAR_LATCHING if kind.latching else Event.CLEAR
            self._move(a, event, tick, scan, a.initials)
            return
        a = replace(a, occurrence=a.occurrence + 1, priority=kind.priority, initials="")
        hold = self._hold_on(a)
        event = Event[hold.event] if hold else Event.NOTE if kind.notice else Event.RAISE
        self._move(a, event, tick, scan, hold.initials if hold else "")

    def _escalate(self, a: OpenAlarm, tick: int, scan: int) -> None:
        step = RANK[a.priority] + 1
        risen = next(p for p, rank in RANK.items() if rank == step)
        self._move(replace(a, priority=risen), Event.ESCALATE, tick, scan, "")

    # --- entries -------------------------------------------------------------------------

    def enter(self, e: AlarmEntry, tick: int) -> None:
        if e.alarm:
            self._kind(e.alarm)
        if e.action in _ANSWERS:
            self._answer(e, _ANSWERS[e.action], tick)
            return
        if e.action in _BEGINS:
            self._hold(e, tick)
        elif e.action in _ENDS:
            ended = _ENDS[e.action].name
            for name, alarm, subject in sorted(self._holds):
                if name == ended and e.covers(alarm, subject):
                    del self._holds[name, alarm, subject]
        else:
            raise CoreError(f"alarm entry: got {e.action!r}, wanted one of {', '.join(Action)}")
        self._apply_holds(tick, e.scan, e.initials)

    def _answer(self, e: AlarmEntry, event: Event, tick: int) -> None:
        for key in sorted(self._alarms):
            a = self._alarms[key]
            if e.covers(*key) and e.occurrence in (None, a.occurrence):
                self._move(a, event, tick, e.scan, e.initials)

    def _hold(self, e: AlarmEntry, tick: int) -> None:
        until = e.until_tick
        if e.action == Action.SHELVE:
            most = tick + round(SHELVE_MOST_S * TICKS_PER_S)
            until = most if until is None else min(until, most)
        if until is not None and until <= tick:
            return
        event = _BEGINS[e.action].name
        self._holds[event, e.alarm, e.subject] = Hold(event, e.alarm, e.subject, until, e.initials, e.why)

    def _hold_on(self, a: OpenAlarm) -> Hold | None:
        """Return the strongest hold on an alarm; of equals the one with the narrowest pattern."""
        names = [e.name for e in _STRENGTH]
        covering = [h for h in self._holds.values() if h.covers(a.alarm, a.subject)]
        return min(covering, key=lambda h: (names.index(h.event), not h.alarm, not h.subject), default=None)

    def _apply_holds(self, tick: int, scan: int, initials: str) -> None:
        """Move every standing alarm to where the holds now in force put it."""
        for key in sorted(self._alarms):
            a = self._alarms[key]
            hold = self._hold_on(a)
            held = a.state in HELD.values()
            if hold is not None:
                # a released alarm that another hold still covers goes straight to that one
                if a.state is not State.NORMAL and a.state is not HELD[Event[hold.event]]:
                    self._move(a, Event[hold.event], tick, scan, hold.initials)
            elif held:
                kind = self._kind(a.alarm)
                if a.active:
                    event = Event.RELEASE_NOTED if kind.notice else Event.RELEASE_RAISED
                else:
                    event = Event.RELEASE_LATCHED if kind.latching else Event.RELEASE
                self._move(a, event, tick, scan, initials)

    # --- the one place where a state changes -------------------------------------------------

    def _move(self, a: OpenAlarm, event: Event, tick: int, scan: int, initials: str) -> None:
        """Look the move up in the table; conclude it, or keep the alarm where it is."""
        target = TABLE.get((a.state, event))
        if target is not None:
            a = replace(a, state=target, initials=initials, escalate_tick=self._escalation(a, target, tick))
            self._conclude(a, tick, scan)
        self._alarms[a.alarm, a.subject] = a

    def _escalation(self, a: OpenAlarm, target: State, tick: int) -> int | None:
        kind = self._kind(a.alarm)
        if target is not State.UNACKNOWLEDGED or not kind.escalate_s or a.priority is Priority.HIGH:
            return None
        return tick + round(kind.escalate_s * TICKS_PER_S)

    def _conclude(self, a: OpenAlarm, tick: int, scan: int) -> None:
        name = f"{a.alarm}/{a.subject}" if a.subject else a.alarm
        self._out.append(
            Conclusion(scan, tick, "alarm", f"{name}#{a.occurrence}", fields_of(a, tick, self._kinds))
        )

    def _kind(self, name: str) -> AlarmKind:
        try:
            return self._kinds[name]
        except KeyError:
            raise CoreError(f"alarm: got {name!r}, wanted one of {', '.join(sorted(self._kinds))}") from None
