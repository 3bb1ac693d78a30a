"""The only caller of the core: facts in, findings out, one state a test.

The same engine serves the live daemon, a restart and every replay. It owns no file, no
socket and no thread. A core error quarantines its test: the test's later facts are still
recorded, its state stands still, and an alarm says so; the other tests go on.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from daq import __version__
from daq.codec import canonical_json, decode_state, encode_finding, encode_state, state
from daq.core import alarms, chain, entered, timebase
from daq.core.alarms import AlarmEntry, AlarmsState
from daq.core.block import Conclusion, Cue
from daq.core.chain import TestState
from daq.core.timebase import TimeState
from daq.records import (
    BurstTaken,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    EntryMade,
    Fact,
    Finding,
    RecordError,
    RulesAdopted,
    ScansTaken,
)

HOST = ""
"""The frame of what concerns the whole installation."""
OUTAGE_LEAST_S = 5.0
"""A gap in writing shorter than this is a restart, not an outage worth a notice."""


@state
@dataclass(frozen=True, slots=True)
class HostState:
    """The installation's own alarms (links, disk, broker, quarantines) and its clock."""

    clock: TimeState = field(default_factory=TimeState)
    alarms: AlarmsState = field(default_factory=alarms.begin)
    counts: Mapping[str, int] = field(default_factory=dict)
    left: Mapping[str, Mapping[str, int]] = field(default_factory=dict)
    """Of specimens that have left their place (``TEST|SPECIMEN``): how far their findings were counted."""


class Engine:
    """Routes facts to tests and keeps their states.

    ``tests`` maps a test's name to its state; ``quarantined`` names tests whose step failed.
    """

    def __init__(self) -> None:
        self.tests: dict[str, TestState] = {}
        self.host = HostState()
        self.quarantined: dict[str, str] = {}
        self.wanted: tuple[str, ...] = ()
        """Tests whose snapshots belong to the host's that was restored."""
        self._frames: dict[str, list[str]] = {}

    def take(self, fact: Fact) -> list[Finding]:
        """Take one fact; return its findings in order. No fact, however odd, raises anything."""
        findings: list[Finding] = []
        if isinstance(fact, RulesAdopted):
            findings += self._guard(fact.test, lambda: self._adopt(fact))
        if not isinstance(fact, ScansTaken | BurstTaken):
            findings += self._guard(HOST, lambda: self._take_host(fact))
        if fact.frame:
            names = self._frames.get(fact.frame, [])
        else:  # what a person tells the host concerns the host's own alarms, never the specimens
            names = [] if isinstance(fact, EntryMade) else list(self.tests)
        for name in names:
            findings += self._step(name, fact)
        return findings

    def _adopt(self, fact: RulesAdopted) -> list[Finding]:
        """Begin a test, or begin anew where another specimen hangs in the same place."""
        known = self.tests.get(fact.test)
        specimen = chain.rules_of(fact.rules).specimen.id
        findings: list[Finding] = []
        if known is not None:
            before = chain.rules_of(known.rules).specimen.id
            if before == specimen:
                return []
            counts = known.counts or {}
            if fact.test not in self.quarantined:
                findings, counts = chain.leave(known, fact, specimen)
            self.host = replace(self.host, left={**self.host.left, f"{fact.test}|{before}": dict(counts)})
        fresh = chain.begin(fact)
        # a specimen that hangs here again goes on counting: two findings never share an id
        counts_before = self.host.left.get(f"{fact.test}|{specimen}", {})
        self.tests[fact.test] = replace(fresh, counts=counts_before)
        names = self._frames.setdefault(fact.frame, [])
        if fact.test not in names:
            names.append(fact.test)
        if self.quarantined.pop(fact.test, None) is not None:
            tick = self.host.clock.latest
            cue = Cue(0, tick, "quarantined", fact.test, False)
            findings += self._cue(cue, tick + self.host.clock.utc_lead)
        return findings

    def _step(self, name: str, fact: Fact) -> list[Finding]:
        def step() -> list[Finding]:
            state, findings = chain.step(self.tests[name], fact)
            for f in findings:
                encode_finding(f)  # what has no canonical form could never be committed
            self.tests[name] = state
            return findings

        return [] if name in self.quarantined else self._guard(name, step)

    def _guard(self, name: str, work: Callable[[], list[Finding]]) -> list[Finding]:
        """Do ``work``; a bug of ours must cost one test's conclusions, not the laboratory's record."""
        host = self.host
        try:
            return work()
        except Exception as error:
            why = f"{type(error).__name__}: {error}"
            self.host = host
        lead, tick = self.host.clock.utc_lead, self.host.clock.latest
        if name in self.tests:
            clock = self.tests[name].clock
            tick = max(tick, clock.latest + clock.utc_lead - lead)
        if name != HOST:  # of the host only this one fact is passed over: its alarms are needed
            self.quarantined[name] = why
        return self._cue(Cue(0, tick, "quarantined", name or "host", True, why), tick + lead)

    # --- the installation -------------------------------------------------------------

    def _take_host(self, fact: Any) -> list[Finding]:
        clock, tick = timebase.place_stamp(self.host.clock, fact.stamp)
        utc_tick = fact.stamp.utc_tick
        findings = self._pass_time(tick)  # deadlines before it are dated by the clock as it was
        self.host = replace(self.host, clock=clock)
        if isinstance(fact, ConditionChanged):
            cue = Cue(0, tick, fact.condition, fact.subject, fact.active, fact.message)
            findings += self._cue(cue, utc_tick)
        elif isinstance(fact, ClockStepped):
            message = f"UTC was set by {fact.by_ticks / 1e4:+.1f} s; test time goes on by the boot clock"
            findings += self._cue(Cue(0, tick, "clock_stepped", "", True, message), utc_tick)
        elif isinstance(fact, EngineStarted) and fact.previous_tick is not None:
            away = (utc_tick - fact.previous_tick) / 1e4
            if away >= OUTAGE_LEAST_S:
                message = (
                    f"nothing was recorded for {away / 3600:.2f} h before this start (version {fact.version})"
                )
                findings += self._cue(Cue(0, tick, "outage", "", True, message), utc_tick)
        elif isinstance(fact, EntryMade) and fact.frame == HOST:
            findings += self._enter(fact, tick, utc_tick)
        return findings

    def _enter(self, fact: EntryMade, tick: int, utc_tick: int) -> list[Finding]:
        bad = entered.wrong(fact.entry, fact.values)
        if fact.entry in entered.ON_ALARMS and not bad:
            return self._cue(entered.on_alarms(fact, 0, tick), utc_tick)
        fields = {
            "entry": fact.entry, "initials": fact.initials, "values": dict(fact.values), "note": fact.note,
        }  # fmt: skip
        if bad or fact.entry != "note":
            fields["effect"] = f"none: {bad or 'it concerns a test, not the host'}"
        return [self._number(Conclusion(0, tick, "entry", fact.entry, fields), utc_tick)]

    def _cue(self, item: Cue | AlarmEntry, utc_tick: int) -> list[Finding]:
        a, said = alarms.react(self.host.alarms, [item])
        self.host = replace(self.host, alarms=a)
        return [self._number(c, utc_tick) for c in said]

    def _pass_time(self, tick: int) -> list[Finding]:
        due = alarms.due(self.host.alarms)
        if due is None or due > tick:
            return []
        a, said = alarms.pass_time(self.host.alarms, tick, 0)
        self.host = replace(self.host, alarms=a)
        return [self._number(c, c.tick + self.host.clock.utc_lead) for c in said]

    def _number(self, c: Conclusion, utc_tick: int) -> Finding:
        name = f"{c.kind}|{c.key}"
        counts = dict(self.host.counts)
        counts[name] = counts.get(name, 0) + 1
        self.host = replace(self.host, counts=counts)
        return Finding(f"{HOST}||{name}|{counts[name]}", utc_tick, None, HOST, c.kind, dict(c.fields))

    # --- deadlines, snapshots, screens ------------------------------------------------

    def next_deadline(self, frame: str) -> int | None:
        """Return the earliest boot tick at which a test of ``frame`` has a deadline, or None."""
        due = []
        for name in self._frames.get(frame, []):
            s = self.tests[name]
            at = chain.deadline(s)
            if at is not None and name not in self.quarantined:
                due.append(at - s.clock.shift)
        if frame == HOST:
            at = alarms.due(self.host.alarms)
            if at is not None:
                due.append(at - self.host.clock.shift)
        return min(due, default=None)

    @property
    def frames(self) -> tuple[str, ...]:
        return (HOST, *self._frames)

    def snapshots(self) -> Iterator[tuple[str, bytes]]:
        """Yield (key, canonical bytes) of the host (which names the tests) and of every test."""
        yield HOST, encode_state((self.host, tuple(sorted(self.quarantined.items())), tuple(self.tests)))
        for name, s in self.tests.items():
            yield name, encode_state(s)

    def restore(self, key: str, data: bytes) -> None:
        """Put one snapshot back.

        Raises:
            RecordError: the bytes are not a state of this program.
        """
        value = decode_state(data)
        if key == HOST and isinstance(value, tuple) and len(value) == 3 and isinstance(value[0], HostState):
            self.host, quarantined, self.wanted = value
            self.quarantined = dict(quarantined)
        elif isinstance(value, TestState) and value.test == key:
            self.tests[key] = value
            names = self._frames.setdefault(chain.rules_of(value.rules).frame, [])
            if key not in names:
                names.append(key)
        else:
            raise RecordError(
                f"snapshot {key!r}: got a {type(value).__name__}, wanted the state of that test"
            )

    def status(self, *, with_curve: bool) -> dict[str, dict[str, Any]]:
        """Return what screens and retained topics show, by test; the host's own under ``""``."""
        told = {name: self._told(name, with_curve) for name in self.tests}
        lead = self.host.clock.utc_lead
        told[HOST] = {
            "version": __version__,
            "now_tick": self.host.clock.latest + lead,
            "alarms": [chain.open_alarm(a, lead) for a in alarms.open_alarms(self.host.alarms)],
        }
        return told

    def _told(self, name: str, with_curve: bool) -> dict[str, Any]:
        """Return one test's status; a state that cannot be shown must not stop the record of the others."""
        s, why = self.tests[name], self.quarantined.get(name)
        try:
            told = chain.status(s, with_curve=with_curve)
            canonical_json(told)
        except Exception as error:
            lead = s.clock.utc_lead
            told = {
                "at_tick": s.clock.latest + lead,
                "test_h": timebase.hours(s.clock.latest, s.start),
                "specimen": chain.rules_of(s.rules).specimen.id,
                "alarms": [chain.open_alarm(a, lead) for a in alarms.open_alarms(s.alarms)],
            }
            why = why or f"cannot be shown: {type(error).__name__}: {error}"
        return told | {"quarantined": why}
