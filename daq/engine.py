"""The only caller of the core: facts in, findings out, one state a test.

The same engine serves the live daemon, a restart and every replay. It owns no file, no
socket and no thread. A core error quarantines its test: the test's later facts are still
recorded, its state stands still, and an alarm says so; the other tests go on.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from daq import __version__
from daq.codec import decode_state, encode_state, state
from daq.core import alarms, chain, timebase
from daq.core.alarms import AlarmEntry, AlarmsState
from daq.core.block import Conclusion, Cue
from daq.core.chain import TestState
from daq.core.timebase import TimeState
from daq.records import (
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
        """Take one fact; return its findings in order."""
        findings: list[Finding] = []
        if isinstance(fact, RulesAdopted):
            findings += self._adopt(fact)
        if isinstance(fact, ScansTaken):
            names = self._frames.get(fact.frame, [])
        else:
            findings += self._take_host(fact)
            names = self._frames.get(fact.frame, []) if fact.frame else list(self.tests)
        for name in names:
            findings += self._step(name, fact)
        return findings

    def _adopt(self, fact: RulesAdopted) -> list[Finding]:
        """Begin a test, or begin anew where another specimen hangs in the same place."""
        known = self.tests.get(fact.test)
        if known is not None:
            before, now = chain.rules_of(known.rules).specimen.id, chain.rules_of(fact.rules).specimen.id
            if before == now:
                return []
            self.quarantined.pop(fact.test, None)
        else:
            self._frames.setdefault(fact.frame, []).append(fact.test)
        self.tests[fact.test] = chain.begin(fact)
        return []

    def _step(self, name: str, fact: Fact) -> list[Finding]:
        if name in self.quarantined:
            return []
        try:
            self.tests[name], findings = chain.step(self.tests[name], fact)
            return findings
        except (
            Exception
        ) as error:  # a bug of ours must cost one test's conclusions, not the laboratory's record
            why = f"{type(error).__name__}: {error}"
            self.quarantined[name] = why
            tick = self.tests[name].clock.latest
            return self._cue(
                Cue(0, tick, "quarantined", name, True, why), tick + self.tests[name].clock.utc_lead
            )

    # --- the installation -------------------------------------------------------------

    def _take_host(self, fact: Any) -> list[Finding]:
        clock, tick = timebase.place_stamp(self.host.clock, fact.stamp)
        self.host = replace(self.host, clock=clock)
        utc_tick = fact.stamp.utc_tick
        findings = self._pass_time(tick)
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
        elif (
            isinstance(fact, EntryMade)
            and fact.frame == HOST
            and fact.entry in ("acknowledge", "shelve", "unshelve")
        ):
            v = fact.values
            until = tick + int(float(v["hours"]) * 3600 * 10_000) if "hours" in v else None
            entry = AlarmEntry(
                0, tick, fact.entry, str(v.get("alarm", "")), str(v.get("subject", "")), fact.initials, until
            )
            findings += self._cue(entry, utc_tick)
        return findings

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
        if key == HOST:
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
        told = {
            name: chain.status(s, with_curve=with_curve) | {"quarantined": self.quarantined.get(name)}
            for name, s in self.tests.items()
        }
        lead = self.host.clock.utc_lead
        told[HOST] = {
            "version": __version__,
            "now_tick": self.host.clock.latest + lead,
            "alarms": [chain.open_alarm(a, lead) for a in alarms.open_alarms(self.host.alarms)],
        }
        return told
