"""The alarm machine against its table, against a plain second model, and against regrouping."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.codec import decode_state, encode_state
from daq.core import alarms
from daq.core.alarm_table import HELD, TABLE, Event, State, diagram
from daq.core.alarms import Action, AlarmEntry
from daq.core.block import Conclusion, Cue
from daq.core.catalogue import CATALOGUE, AlarmKind, Priority
from daq.records import TICKS_PER_S, CoreError

TICK_S = 1.0 / TICKS_PER_S

KINDS = {
    k.name: k
    for k in (
        AlarmKind("plain", Priority.LOW, "p", "do"),
        AlarmKind("slow", Priority.LOW, "s", "do", on_delay_s=3 * TICK_S, off_delay_s=5 * TICK_S),
        AlarmKind("latch", Priority.HIGH, "l", "do", off_delay_s=2 * TICK_S, latching=True),
        AlarmKind("climb", Priority.LOW, "c", "do", on_delay_s=1 * TICK_S, escalate_s=4 * TICK_S),
        AlarmKind("note", Priority.NOTICE, "n", "do", on_delay_s=2 * TICK_S),
        AlarmKind("blink", Priority.NOTICE, "b", "do", momentary=True),
        AlarmKind("bang", Priority.LOW, "!", "do", momentary=True),
    )
}

MOVES = """
                          raise note clear clear_l ack reset esc
normal                    B     J    -     -       -   -     -
unacknowledged            -     -    D     E       C   -     B
acknowledged              -     -    A     F       -   -     -
returned_unacknowledged   B     -    -     -       A   -     -
latched_unacknowledged    B     -    -     -       F   -     -
latched_acknowledged      B     -    -     -       -   A     -
noted                     -     -    A     -       -   -     -
shelved                   -     -    -     -       -   -     -
suppressed                -     -    -     -       -   -     -
out_of_service            -     -    -     -       -   -     -
"""
LETTERS = dict(zip("ABCDEFGHIJ", State, strict=True))
COLUMNS = (
    Event.RAISE, Event.NOTE, Event.CLEAR, Event.CLEAR_LATCHING,
    Event.ACKNOWLEDGE, Event.RESET, Event.ESCALATE,
)  # fmt: skip


def cue(tick: int, alarm: str, active: bool, subject: str = "", message: str = "") -> Cue:
    return Cue(tick, tick, alarm, subject, active, message)


def entry(tick: int, action: Action, alarm: str = "", subject: str = "", **more: object) -> AlarmEntry:
    return AlarmEntry(tick, tick, action, alarm, subject, **more)  # type: ignore[arg-type]


def run(*events: Cue | AlarmEntry, until: int | None = None) -> tuple[alarms.AlarmsState, list[Conclusion]]:
    state, out = alarms.react(alarms.begin(), events, catalogue=KINDS)
    if until is not None:
        state, late = alarms.pass_time(state, until, until, catalogue=KINDS)
        out += late
    return state, list(out)


def told(out: list[Conclusion]) -> list[tuple[int, str, str]]:
    return [(c.tick, c.key, c.fields["state"]) for c in out]


@pytest.mark.parametrize("state", list(State))
@pytest.mark.parametrize("event", list(Event))
def test_every_pair_of_state_and_event_does_what_the_written_matrix_says(state: State, event: Event) -> None:
    """ISA-18.2 / IEC 62682 state diagram; A to F in part verified, the rest from memory; J is ours."""
    rows = {line.split()[0]: line.split()[1:] for line in MOVES.strip().splitlines()[1:]}
    if event in COLUMNS:
        letter = rows[state.value][COLUMNS.index(event)]
        wanted = None if letter == "-" else LETTERS[letter]
    elif event in HELD:
        wanted = None if state is HELD[event] else HELD[event]
    else:
        after = {
            Event.RELEASE: State.NORMAL,
            Event.RELEASE_LATCHED: State.LATCHED_UNACKNOWLEDGED,
            Event.RELEASE_RAISED: State.UNACKNOWLEDGED,
            Event.RELEASE_NOTED: State.NOTED,
        }
        wanted = after[event] if state.value in ("shelved", "suppressed", "out_of_service") else None
    assert TABLE.get((state, event)) is wanted


def test_raised_acknowledged_and_gone_makes_three_conclusions() -> None:
    """The usual life: unacknowledged, acknowledged with initials, normal."""
    _, out = run(
        cue(10, "plain", True, "mid", "too hot"),
        entry(20, Action.ACKNOWLEDGE, initials="ab"),
        cue(30, "plain", False, "mid"),
    )
    assert told(out) == [
        (10, "plain/mid#1", "unacknowledged"),
        (20, "plain/mid#1", "acknowledged"),
        (30, "plain/mid#1", "normal"),
    ]
    assert [c.fields["initials"] for c in out] == ["", "ab", "ab"]
    assert {c.fields["message"] for c in out} == {"too hot"}
    assert {c.kind for c in out} == {"alarm"}


def test_a_condition_that_goes_before_it_is_acknowledged_stays_to_be_acknowledged() -> None:
    """Returned to normal unacknowledged; a new occurrence raises it again with the next number."""
    state, out = run(cue(1, "plain", True), cue(2, "plain", False), cue(3, "plain", True))
    assert told(out)[1:] == [(2, "plain#1", "returned_unacknowledged"), (3, "plain#2", "unacknowledged")]
    assert [a.state for a in alarms.open_alarms(state)] == [State.UNACKNOWLEDGED]


def test_acknowledging_what_has_just_returned_to_normal_ends_it() -> None:
    """An acknowledgement may race with the return to normal: either order ends in normal."""
    _, first = run(cue(1, "plain", True), cue(5, "plain", False), entry(5, Action.ACKNOWLEDGE))
    _, second = run(cue(1, "plain", True), entry(5, Action.ACKNOWLEDGE), cue(5, "plain", False))
    assert told(first)[-1] == told(second)[-1] == (5, "plain#1", "normal")


def test_a_late_acknowledgement_of_one_occurrence_leaves_the_next_alone() -> None:
    """Nobody may acknowledge an alarm that he has not seen."""
    events = [cue(1, "plain", True), cue(2, "plain", False), cue(3, "plain", True)]
    _, out = run(*events, entry(4, Action.ACKNOWLEDGE, "plain", occurrence=1))
    assert told(out)[-1] == (3, "plain#2", "unacknowledged")
    _, out = run(*events, entry(4, Action.ACKNOWLEDGE, "plain", occurrence=2))
    assert told(out)[-1] == (4, "plain#2", "acknowledged")


def test_repeated_cues_and_entries_conclude_nothing() -> None:
    """Only real transitions are worth a person's time."""
    _, out = run(
        cue(1, "plain", True), cue(2, "plain", True), cue(3, "plain", True),
        entry(4, Action.ACKNOWLEDGE), entry(5, Action.ACKNOWLEDGE),
        cue(6, "plain", False), cue(7, "plain", False), entry(8, Action.ACKNOWLEDGE),
    )  # fmt: skip
    assert [c.tick for c in out] == [1, 4, 6]


def test_delays_are_stamped_with_their_own_deadline() -> None:
    """On-delay 3, off-delay 5 ticks: the alarm stands from 13 to 25, whenever time is told."""
    state, out = run(cue(10, "slow", True), cue(20, "slow", False))
    assert told(out) == [(13, "slow#1", "unacknowledged")]
    assert alarms.due(state) == 25
    state, late = alarms.pass_time(state, 1000, 1000, catalogue=KINDS)
    assert told(list(late)) == [(25, "slow#1", "returned_unacknowledged")]
    assert alarms.due(state) is None
    assert out[0].fields["age_s"] == pytest.approx(3 * TICK_S)


def test_a_value_that_plays_around_its_limit_raises_one_alarm() -> None:
    """Every change within the delays is forgotten: no chatter."""
    chatter = [cue(t, "slow", t % 2 == 0) for t in range(10, 40)]
    _, out = run(*chatter, until=1000)
    assert out == []
    held = [cue(0, "slow", True), *(cue(t, "slow", t % 4 != 0) for t in range(5, 200))]
    _, out = run(*held, until=1000)
    assert told(out) == [(3, "slow#1", "unacknowledged")]


def test_an_off_delay_counts_as_the_same_occurrence() -> None:
    """Gone for 4 of 5 ticks and back again is the alarm that stood all along."""
    _, out = run(cue(0, "slow", True), cue(10, "slow", False), cue(14, "slow", True), until=100)
    assert told(out) == [(3, "slow#1", "unacknowledged")]


def test_latched_alarms_need_acknowledgement_and_reset() -> None:
    """E and F of the standards' diagram."""
    _, out = run(
        cue(0, "latch", True), cue(10, "latch", False), entry(20, Action.RESET),
        entry(21, Action.ACKNOWLEDGE), entry(22, Action.RESET),
    )  # fmt: skip
    assert told(out) == [
        (0, "latch#1", "unacknowledged"),
        (12, "latch#1", "latched_unacknowledged"),
        (21, "latch#1", "latched_acknowledged"),
        (22, "latch#1", "normal"),
    ]


def test_a_shelf_outlives_a_restart_and_ends_by_itself() -> None:
    """The state is the whole memory: bytes and back in the middle of a shelf change nothing."""
    state, out = run(cue(0, "plain", True), entry(5, Action.SHELVE, "plain", until_tick=50, initials="cd"))
    assert told(out)[-1] == (5, "plain#1", "shelved")
    assert out[-1].fields["initials"] == "cd"
    state = decode_state(encode_state(state))
    state, out = alarms.pass_time(state, 100, 100, catalogue=KINDS)
    assert told(list(out)) == [(50, "plain#1", "unacknowledged")]


def test_a_shelf_without_an_end_gets_one() -> None:
    """A shelf is for hours or days; for good is out of service."""
    for until in (None, 10**15):
        state, _ = run(cue(0, "plain", True), entry(5, Action.SHELVE, "plain", until_tick=until))
        assert alarms.due(state) == 5 + alarms.SHELVE_MOST_S * TICKS_PER_S


def test_an_alarm_raised_while_suppressed_is_told_when_the_suppression_ends() -> None:
    """Too cold while heating is by design; too cold at its end is an alarm."""
    events = [entry(0, Action.SUPPRESS, "plain"), cue(5, "plain", True), entry(9, Action.UNSUPPRESS)]
    _, out = run(*events)
    assert told(out) == [(5, "plain#1", "suppressed"), (9, "plain#1", "unacknowledged")]
    _, out = run(*events[:2], cue(7, "plain", False), events[2])
    assert told(out) == [(5, "plain#1", "suppressed"), (9, "plain#1", "normal")]


def test_out_of_service_is_stronger_than_a_shelf_that_ends_under_it() -> None:
    """Holds are kept apart: the end of one uncovers the next, not the alarm."""
    _, out = run(
        cue(0, "plain", True),
        entry(1, Action.SHELVE, "plain", until_tick=40),
        entry(2, Action.OUT_OF_SERVICE),
        entry(10, Action.RETURN_TO_SERVICE),
        until=100,
    )
    assert [(t, s) for t, _, s in told(out)] == [
        (0, "unacknowledged"), (1, "shelved"), (2, "out_of_service"), (10, "shelved"), (40, "unacknowledged"),
    ]  # fmt: skip


def test_nobody_acknowledges_and_the_priority_rises_to_high() -> None:
    """Escalation: low, medium, high, then no more; acknowledged before, none."""
    _, out = run(cue(0, "climb", True), until=100)
    assert [(c.tick, c.fields["priority"]) for c in out] == [(1, "low"), (5, "medium"), (9, "high")]
    _, out = run(cue(0, "climb", True), entry(2, Action.ACKNOWLEDGE), until=100)
    assert [c.tick for c in out] == [1, 2]


def test_notices_need_no_acknowledgement_and_momentary_ones_repeat() -> None:
    """A notice is noted and goes with its condition; an event is told each time it happens."""
    state, out = run(cue(0, "note", True), entry(5, Action.ACKNOWLEDGE), cue(9, "note", False))
    assert told(out) == [(2, "note#1", "noted"), (9, "note#1", "normal")]
    state, out = run(cue(0, "blink", True), cue(1, "blink", True), cue(2, "blink", False))
    assert told(out) == [(0, "blink#1", "noted"), (1, "blink#2", "noted")]
    assert alarms.open_alarms(state) == ()


def test_an_alarm_of_something_that_is_over_waits_to_be_acknowledged() -> None:
    """An outage has no end to wait for: raised and returned at once, each one with its number."""
    state, out = run(cue(0, "bang", True), cue(4, "bang", True), cue(5, "bang", False))
    assert told(out) == [
        (0, "bang#1", "unacknowledged"), (0, "bang#1", "returned_unacknowledged"),
        (4, "bang#2", "unacknowledged"), (4, "bang#2", "returned_unacknowledged"),
    ]  # fmt: skip
    state, late = alarms.react(state, [entry(9, Action.ACKNOWLEDGE)], catalogue=KINDS)
    assert told(list(late)) == [(9, "bang#2", "normal")]


def test_the_most_urgent_stands_first() -> None:
    """Asking for a person first, then the worst, then the least time left."""
    state, _ = alarms.react(
        alarms.begin(),
        [
            cue(0, "tertiary_detected", True),
            replace(cue(1, "identity_wrong", True), can_wait_until_tick=99),
            cue(2, "quarantined", True),
            cue(3, "milestone_reached", True, "0.01"),
        ],
    )
    names = [a.alarm for a in alarms.open_alarms(state)]
    assert names == ["quarantined", "identity_wrong", "tertiary_detected", "milestone_reached"]


def test_an_unknown_name_is_a_fault_of_this_program_and_says_so() -> None:
    """A typing mistake in a step must not become a silent alarm."""
    with pytest.raises(CoreError, match=r"got 'ruptured', wanted one of .*rupture"):
        alarms.react(alarms.begin(), [cue(0, "ruptured", True)])
    with pytest.raises(CoreError, match=r"got 'ack', wanted one of acknowledge"):
        alarms.react(alarms.begin(), [AlarmEntry(0, 0, "ack")])


def test_the_catalogue_names_all_that_a_laboratory_needs_told() -> None:
    """The list of the alarms and notices promised, each with a word on what to do."""
    promised = (
        "tertiary_detected rupture milestone_reached strain_limit rate_limit temperature_high "
        "temperature_low "
        "temperature_nearing_high temperature_nearing_low gradient sensor_broken sensor_stuck sides_disagree "
        "travel_nearly_used load_off link_lost identity_wrong disk_full journal_trouble publisher_down "
        "publish_denied quarantined outage entry_refused sensor_suspected clock_stepped stage_secondary "
        "correction calibration_due"
    )
    assert set(promised.split()) <= set(CATALOGUE)
    for kind in CATALOGUE.values():
        assert kind.text
        assert kind.to_do.endswith(".")
        assert not (kind.notice and (kind.latching or kind.escalate_s))
        assert not (kind.momentary and (kind.latching or kind.on_delay_s or kind.off_delay_s))


def test_high_priority_stays_rare_in_the_catalogue() -> None:
    """Were every second kind high, high would mean nothing (ISA-18.2: about 5 % of what is raised)."""
    real = [k for k in CATALOGUE.values() if not k.notice]
    assert sum(k.priority is Priority.HIGH for k in real) <= len(real) / 4


def test_the_diagram_shows_every_move_of_the_table() -> None:
    """DEVELOPERS.md is drawn from the table, so the drawing must not leave anything out."""
    text = diagram()
    for (source, event), target in TABLE.items():
        if target in HELD.values():
            assert f"any_other_state --> {target.value}: {event.value}" in text
        elif source in HELD.values():
            assert f"held --> {target.value}: {event.value}" in text
        else:
            assert f"{source.value} --> {target.value}: {event.value}" in text


# --- properties -------------------------------------------------------------------------

NAMES = st.sampled_from(
    [("plain", ""), ("slow", "a"), ("slow", "b"), ("latch", ""), ("climb", ""), ("note", "")]
)


@st.composite
def schedules(draw: st.DrawFn) -> list[Cue | AlarmEntry]:
    """Events in order of time on a timeline of 60 ticks, several at the same instant now and then."""
    ticks = sorted(draw(st.lists(st.integers(0, 60), max_size=25)))
    events: list[Cue | AlarmEntry] = []
    for t in ticks:
        if draw(st.booleans()):
            alarm, subject = draw(NAMES)
            events.append(cue(t, alarm, draw(st.booleans()), subject))
        else:
            alarm, subject = draw(st.one_of(NAMES, st.just(("", ""))))
            until = t + draw(st.integers(1, 20)) if draw(st.booleans()) else None
            events.append(entry(t, draw(st.sampled_from(Action)), alarm, subject, until_tick=until))
    return events


@dataclass
class Model:
    """The same life, told tick by tick with plain rules: no table, no deadlines, only counters."""

    kind: AlarmKind
    subject: str
    seen: bool = False
    pending: int | None = None
    on: bool = False
    place: str = "normal"
    level: int = 0
    unanswered: int | None = None
    count: int = 0
    log: list[tuple[int, str, int]] = field(default_factory=list)

    def go(self, t: int, place: str) -> None:
        self.place = place
        self.unanswered = t if place == "unacknowledged" else None
        self.log.append((t, place, self.count))

    def before(self, t: int, held: str | None) -> None:
        delay = self.kind.on_delay_s if self.seen else self.kind.off_delay_s
        if self.pending is not None and t >= self.pending + round(delay * TICKS_PER_S):
            self.settle(t, held)

    def nag(self, t: int) -> None:
        wait = round(self.kind.escalate_s * TICKS_PER_S)
        if self.unanswered is not None and wait and self.level < 3 and t >= self.unanswered + wait:
            self.level += 1
            self.go(t, "unacknowledged")

    def settle(self, t: int, held: str | None) -> None:
        self.pending, self.on = None, self.seen
        if self.on:
            self.count += 1
            self.level = {"notice": 0, "low": 1, "high": 3}[self.kind.priority.value]
            if self.place in ("shelved", "suppressed", "out_of_service"):
                return
            self.go(t, held or ("noted" if self.kind.notice else "unacknowledged"))
        elif self.place == "unacknowledged":
            self.go(t, "latched_unacknowledged" if self.kind.latching else "returned_unacknowledged")
        elif self.place == "acknowledged":
            self.go(t, "latched_acknowledged" if self.kind.latching else "normal")
        elif self.place == "noted":
            self.go(t, "normal")

    def hear(self, t: int, active: bool, held: str | None) -> None:
        if active == self.seen:
            return
        self.seen = active
        self.pending = None if active == self.on else t
        if self.pending is not None and not (self.kind.on_delay_s if active else self.kind.off_delay_s):
            self.settle(t, held)

    def hold(self, t: int, held: str | None) -> None:
        if held is not None:
            if self.place not in ("normal", held):
                self.go(t, held)
        elif self.place in ("shelved", "suppressed", "out_of_service"):
            if self.on:
                self.go(t, "noted" if self.kind.notice else "unacknowledged")
            else:
                self.go(t, "latched_unacknowledged" if self.kind.latching else "normal")


def model_log(events: list[Cue | AlarmEntry], end: int) -> dict[str, list[tuple[int, str, int]]]:
    """Walk every tick from 0 to ``end`` and write down each alarm's moves."""
    models = [
        Model(KINDS[a], s)
        for a, s in [("climb", ""), ("latch", ""), ("note", ""), ("plain", ""), ("slow", "a"), ("slow", "b")]
    ]
    holds: dict[tuple[str, str, str], int | None] = {}
    heard: set[int] = set()

    def held(m: Model) -> str | None:
        for place in ("out_of_service", "suppressed", "shelved"):
            for p, a, s in holds:
                if p == place and a in ("", m.kind.name) and s in ("", m.subject):
                    return place
        return None

    def apply(t: int) -> None:
        for m in models:
            if id(m) in heard:
                m.hold(t, held(m))

    begins = {"shelve": "shelved", "suppress": "suppressed", "out_of_service": "out_of_service"}
    ends = {"unshelve": "shelved", "unsuppress": "suppressed", "return_to_service": "out_of_service"}
    for t in range(end + 1):
        for m in models:
            m.before(t, held(m))
        for m in models:
            m.nag(t)
        over = [
            (until, k[1], k[2], k[0], k) for k, until in holds.items() if until is not None and until <= t
        ]
        for *_, key in sorted(over):  # at the same tick by name, as the machine has it
            del holds[key]
            apply(t)
        for e in events:
            if e.tick != t:
                continue
            if isinstance(e, Cue):
                for m in models:
                    if (m.kind.name, m.subject) == (e.alarm, e.subject) and (e.active or id(m) in heard):
                        heard.add(id(m))
                        m.hear(t, e.active, held(m))
                continue
            for m in models:
                if e.alarm in ("", m.kind.name) and e.subject in ("", m.subject):
                    if e.action == Action.ACKNOWLEDGE:
                        after = {
                            "unacknowledged": "acknowledged",
                            "returned_unacknowledged": "normal",
                            "latched_unacknowledged": "latched_acknowledged",
                        }
                        if m.place in after:
                            m.go(t, after[m.place])
                    elif e.action == Action.RESET and m.place == "latched_acknowledged":
                        m.go(t, "normal")
            if e.action in begins:
                until = e.until_tick
                if e.action == Action.SHELVE and until is None:
                    until = t + int(alarms.SHELVE_MOST_S * TICKS_PER_S)
                holds[begins[e.action], e.alarm, e.subject] = until
            elif e.action in ends:
                for p, a, s in list(holds):
                    if p == ends[e.action] and e.alarm in ("", a) and e.subject in ("", s):
                        del holds[p, a, s]
            if e.action not in (Action.ACKNOWLEDGE, Action.RESET):
                apply(t)
    return {m.kind.name + ("/" + m.subject if m.subject else ""): m.log for m in models}


@settings(max_examples=300, deadline=None)
@given(schedules())
def test_the_machine_agrees_with_a_model_that_walks_every_tick(events: list[Cue | AlarmEntry]) -> None:
    """Two programs of different make, one by deadlines and a table, one by counters and rules."""
    _, out = run(*events, until=120)
    got: dict[str, list[tuple[int, str, int]]] = {name: [] for name in model_log([], 0)}
    for c in out:
        got[c.key.rpartition("#")[0]].append((c.tick, c.fields["state"], c.fields["occurrence"]))
    assert got == model_log(events, 120)


@settings(max_examples=150, deadline=None)
@given(schedules(), st.data())
def test_grouping_of_events_and_telling_of_time_change_nothing(
    events: list[Cue | AlarmEntry], data: st.DataObject
) -> None:
    """One by one, with the time told in between and the state written to bytes: the same to the last bit."""
    together, wanted = run(*events, until=120)
    state = alarms.begin()
    got: list[Conclusion] = []
    for event in events:
        if data.draw(st.booleans()):
            before = event.tick - data.draw(st.integers(0, 3))
            if state.tick is None or before >= state.tick:
                state, out = alarms.pass_time(state, before, event.tick, catalogue=KINDS)
                got += out
        state, out = alarms.react(state, [event], catalogue=KINDS)
        got += out
        state = decode_state(encode_state(state))
    state, out = alarms.pass_time(state, 120, 120, catalogue=KINDS)
    got += out
    assert [(c.tick, c.key, c.fields) for c in got] == [(c.tick, c.key, c.fields) for c in wanted]
    assert encode_state(state) == encode_state(together)


@settings(max_examples=150, deadline=None)
@given(st.lists(st.integers(0, 120), min_size=1, max_size=40), schedules(), st.data())
def test_conclusions_do_not_depend_on_where_the_scans_were_cut(
    stamps: list[int], events: list[Cue | AlarmEntry], data: st.DataObject
) -> None:
    """Slightly unordered and equal stamps included; scan ordinals and state bytes agree too."""
    ticks = np.array([sorted(stamps)[i] for i in range(len(stamps))], np.int64)
    swaps = data.draw(st.lists(st.integers(0, max(len(ticks) - 2, 0)), max_size=3))
    for i in swaps:
        if len(ticks) > 1:
            ticks[[i, i + 1]] = ticks[[i + 1, i]]
    placed = [replace(e, scan=i % len(ticks)) for i, e in enumerate(events) if isinstance(e, Cue)]
    placed.sort(key=lambda e: e.scan)
    state, whole = alarms.take_block(alarms.begin(), placed, ticks, 0, catalogue=KINDS)
    cuts = sorted(data.draw(st.sets(st.integers(1, len(ticks)), max_size=6)) | {len(ticks)})
    parts: list[Conclusion] = []
    piece, start = alarms.begin(), 0
    for stop in cuts:
        mine = [e for e in placed if start <= e.scan < stop]
        piece, out = alarms.take_block(piece, mine, ticks[start:stop], start, catalogue=KINDS)
        parts += out
        start = stop
    assert parts == list(whole)
    assert encode_state(piece) == encode_state(state)
    assert [c.scan for c in whole] == sorted(c.scan for c in whole)
