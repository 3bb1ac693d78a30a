"""One test, from facts to findings: the steps in their order, as one pure function.

    state, findings = step(state, fact)

Scans go through timebase, convert, watch (limits, milestones, rupture), follow (rate and
stage), forecast and alarms. Operator entries and news of the installation enter at their place in
time. Before any fact is taken, every deadline that its time implies is worked through, stamped
with the deadline, so that a recording needs no clock and a slow machine changes nothing.

Blocks are cut here where something depends on a single scan: where test time begins, at
the looks of the forecast, and at rupture. Since no step depends on cuts, neither do the findings.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from functools import lru_cache
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core import alarms, causes, follow, forecast, results, timebase, watch
from daq.core.alarms import AlarmEntry, AlarmsState
from daq.core.block import Block, Conclusion, Cue
from daq.core.catalogue import CATALOGUE
from daq.core.causes import CausesState
from daq.core.convert import Plan, convert, prepare
from daq.core.follow import FollowState
from daq.core.forecast import ForecastState
from daq.core.results import ResultsState
from daq.core.rules import Role, TestRules, rules_from_json
from daq.core.timebase import TimeState
from daq.core.watch import WatchState
from daq.records import (
    TICKS_PER_S,
    BurstTaken,
    ConditionChanged,
    CoreError,
    EngineStarted,
    EntryMade,
    Fact,
    Finding,
    FloatArray,
    IntArray,
    RulesAdopted,
    ScansTaken,
    Ticked,
)

FORECAST_FIRST_S: Final = 3600.0
FORECAST_RATIO: Final = 1.08
"""A forecast is looked at again when test time has grown by this: thirty looks a decade."""
FULL_LOAD_SHARE: Final = 0.98
"""Share of the nominal force from which ``starts: load_channel`` calls the load full; machines of
class 1 (ISO 7500-2) are within 1 %, so 2 % leaves room for the load cell's own error."""


@state
@dataclass(frozen=True, slots=True)
class TestState:
    """Everything known of one test. ``start`` is the lab tick of full load, None before."""

    __test__ = False

    test: str
    rules: str
    clock: TimeState
    follow: FollowState
    watch: WatchState
    alarms: AlarmsState
    forecast: ForecastState
    results: ResultsState
    scans: int = 0
    start: int | None = None
    over: bool = False
    next_forecast_s: float = FORECAST_FIRST_S
    counts: Mapping[str, int] | None = None
    specimen_c: float | None = None
    causes: CausesState = field(default_factory=CausesState)


@lru_cache(maxsize=1024)
def rules_of(text: str) -> TestRules:
    """Return the rules in canonical JSON ``text``; parsed once, they are asked for with every scan."""
    return rules_from_json(text)


@lru_cache(maxsize=1024)
def _plan(text: str, columns: tuple[str, ...]) -> Plan:
    return prepare(rules_of(text), columns)


def begin(fact: RulesAdopted) -> TestState:
    """Return the state of a test that begins with its first rules."""
    rules = rules_of(fact.rules)
    clock, _ = timebase.place_stamp(TimeState(), fact.stamp) if fact.stamp.boot_id else (TimeState(), 0)
    start = None
    if rules.starts not in ("first_scan", "entry", "load_channel"):
        start = int(datetime.fromisoformat(rules.starts).timestamp() * TICKS_PER_S)
    return TestState(
        fact.test, fact.rules, clock, follow.begin(rules), watch.begin(rules),
        alarms.begin(), forecast.begin(), results.begin(rules), start=start, counts={},
    )  # fmt: skip


def step(s: TestState, fact: Fact) -> tuple[TestState, list[Finding]]:
    """Take one fact of this test's frame (or of the host) and return what follows from it.

    Raises:
        CoreError: a fact for another test's state, or a broken promise between the steps.
    """
    handler = _HANDLERS[type(fact)]
    return handler(s, fact)


# --- numbering --------------------------------------------------------------------------


@dataclass(slots=True)
class _Out:
    """Collects conclusions of one fact and turns them into numbered findings."""

    rules: TestRules
    counts: dict[str, int]
    start: int | None
    findings: list[Finding]

    def put(self, c: Conclusion, utc_tick: int) -> None:
        name = f"{c.kind}|{c.key}"
        count = self.counts[name] = self.counts.get(name, 0) + 1
        fields = dict(c.fields)
        if fields.get("withdraws") is not None:
            fields["withdraws"] = self.prefix() + f"stage|{fields['withdraws']}"
        lead = utc_tick - c.tick
        if fields.get("can_wait_until") is not None:
            fields["can_wait_until"] += lead
        test_h = timebase.hours(c.tick, self.start)
        self.findings.append(
            Finding(f"{self.prefix()}{name}|{count}", utc_tick, test_h, self.rules.test, c.kind, fields)
        )

    def prefix(self) -> str:
        return f"{self.rules.test}|{self.rules.specimen.id}|"


def _out(s: TestState) -> _Out:
    return _Out(rules_of(s.rules), dict(s.counts or {}), s.start, [])


# --- alarms -----------------------------------------------------------------------------


def _react(
    a: AlarmsState, item: Cue | AlarmEntry, out: _Out, utc: Callable[[int], int], utc_tick: int
) -> AlarmsState:
    a = _pass_time(a, item.tick, item.scan, out, utc)
    a, said = alarms.react(a, [item])
    for c in said:
        out.put(c, utc_tick)
    return a


def _pass_time(a: AlarmsState, tick: int, scan: int, out: _Out, utc: Callable[[int], int]) -> AlarmsState:
    due = alarms.due(a)
    if due is None or due > tick:
        return a
    a, said = alarms.pass_time(a, tick, scan)
    for c in said:
        out.put(c, utc(c.tick))
    return a


_STAGE_ALARMS: Final = {"tertiary": "tertiary_detected", "secondary": "stage_secondary"}


def _cues_of(c: Conclusion) -> Sequence[Cue]:
    """Return what the alarm machine must hear of a conclusion."""
    if c.kind == "stage":
        f = c.fields
        cues = []
        if f.get("from") in _STAGE_ALARMS and f.get("withdraws") is not None:
            cues.append(Cue(c.scan, c.tick, _STAGE_ALARMS[f["from"]], "", False, f.get("why", "")))
        if f["stage"] in _STAGE_ALARMS:
            figures = {k: _frozen(v) for k, v in f.items() if k not in ("why", "withdraws", "from")}
            cues.append(
                Cue(c.scan, c.tick, _STAGE_ALARMS[f["stage"]], "", True, f.get("why", ""), None, figures)
            )
        return cues
    if c.kind == "step":
        return [
            Cue(c.scan, c.tick, "correction", ",".join(c.fields["channels"]), True, c.fields.get("cause", ""))
        ]
    return []


def _note(r: ResultsState, c: Conclusion) -> ResultsState:
    return results.note(r, replace(c, fields=_frozen(c.fields)))


def _frozen(v: Any) -> Any:
    """Return a plain JSON value that nobody can change: what the alarm machine keeps is state."""
    if isinstance(v, list | tuple):
        return tuple(_frozen(x) for x in v)
    return {k: _frozen(x) for k, x in v.items()} if isinstance(v, Mapping) else v


# --- scans ------------------------------------------------------------------------------


def _take_scans(s: TestState, fact: ScansTaken) -> tuple[TestState, list[Finding]]:
    out = _out(s)
    clock, tick = timebase.place(s.clock, fact)
    carried_latest, carried_lead = s.clock.latest, s.clock.utc_lead
    rules, plan = out.rules, _plan(s.rules, fact.channels)
    s = replace(s, clock=clock)
    lead = fact.utc_tick - tick
    reached = np.maximum.accumulate(np.concatenate(([carried_latest], tick)))[1:]
    first = s.scans

    def utc(at: int) -> int:
        row = int(np.searchsorted(reached, at, "right")) - 1
        return at + (int(lead[row]) if row >= 0 else carried_lead)

    done, n = 0, len(fact)
    while done < n:
        stop = n
        start = s.start
        if start is None and not s.over:
            start, begins = _find_start(rules, plan, fact, tick, done, first)
            if start is not None and begins > done:
                start, stop = None, begins  # the rows before full load are a block of their own
        t_s = timebase.seconds_since(tick[done:], start)
        if start is not None and not s.over:
            later = np.flatnonzero(t_s >= s.next_forecast_s)
            if later.size:
                stop = min(stop, done + int(later[0]) + 1)
        rows = slice(done, stop)
        block = convert(rules, plan, fact.cut(done, stop), tick[rows], t_s[: stop - done], first + done)
        s = replace(s, start=start)
        out.start = start
        s, taken = _take_block(s, rules, block, out, utc, fact.utc_tick[rows])
        done += taken
        s = _look_ahead(s, rules, block, taken, out, int(fact.utc_tick[done - 1]))
    return replace(s, scans=first + n, counts=out.counts), out.findings


def _find_start(
    rules: TestRules, plan: Plan, fact: ScansTaken, tick: IntArray, done: int, first: int
) -> tuple[int | None, int]:
    """Return the lab tick of full load and its row, or (None, 0) while it is not reached."""
    if rules.starts == "first_scan":
        return int(tick[done]), done
    if rules.starts != "load_channel" or rules.stress_pa is None:
        return None, 0
    force = [j for j, c in enumerate(rules.channels) if c.role is Role.FORCE]
    area = results.area_m2(rules)
    if not force or area is None:
        return None, 0
    rest = fact.cut(done, len(fact))
    block = convert(rules, plan, rest, tick[done:], timebase.seconds_since(tick[done:], None), first + done)
    full = np.flatnonzero(np.abs(block.values[:, force[0]]) >= FULL_LOAD_SHARE * abs(rules.stress_pa) * area)
    return (int(tick[done + full[0]]), done + int(full[0])) if full.size else (None, 0)


def _take_block(
    s: TestState, rules: TestRules, block: Block, out: _Out, utc: Callable[[int], int], utc_tick: IntArray
) -> tuple[TestState, int]:
    """Run one converted block through watch and follow; stop after the scan that shows rupture."""
    known = np.flatnonzero(np.isfinite(block.specimen_c))
    if known.size:
        s = replace(s, specimen_c=float(block.specimen_c[known[-1]]))
    if s.over:
        return _conclude(s, (), block, out, utc, utc_tick), len(block)
    stage = follow.stage_of(s.follow)
    seen, watched = watch.watch(s.watch, rules, block, stage=stage)
    broken = next((c for c in watched if isinstance(c, Cue) and c.alarm == "rupture" and c.active), None)
    if broken is not None and broken.scan + 1 - block.first < len(block):
        block = cut(block, 0, broken.scan + 1 - block.first)
        seen, watched = watch.watch(s.watch, rules, block, stage=stage)
    followed, concluded = follow.follow(s.follow, rules, block)
    moved = [c for c in concluded if c.kind == "stage"]
    if moved and moved[0].scan + 1 - block.first < len(block) and broken is None:
        # what is watched depends on the stage, so no block may reach across a change of it
        block = cut(block, 0, moved[0].scan + 1 - block.first)
        seen, watched = watch.watch(s.watch, rules, block, stage=stage)
        followed, concluded = follow.follow(s.follow, rules, block)
    s = replace(s, watch=seen, follow=followed, results=results.observe(s.results, rules, block))
    s = _conclude(s, (*watched, *concluded), block, out, utc, utc_tick)
    if broken is not None:
        t_s = float(block.t_s[-1])
        s = _finish(
            s, rules, "ruptured", broken.tick, t_s, broken.scan, out, utc, int(utc_tick[len(block) - 1])
        )
    return s, len(block)


def _conclude(
    s: TestState,
    items: Sequence[Conclusion | Cue],
    block: Block,
    out: _Out,
    utc: Callable[[int], int],
    utc_tick: IntArray,
) -> TestState:
    """Let the alarm machine hear of a block's items, and number everything in the order of scans."""
    said = [i for i in items if isinstance(i, Conclusion)]
    cues = [i for i in items if isinstance(i, Cue)] + [cue for c in said for cue in _cues_of(c)]
    known, cues = causes.gather(s.causes, sorted(cues, key=lambda cue: cue.scan))
    a, alarmed = alarms.take_block(s.alarms, cues, block.tick, block.first)
    for c in said:
        s = replace(s, results=_note(s.results, c))
    for c in sorted((*said, *alarmed), key=lambda c: c.scan):  # stable: what was seen, then its alarm
        own = c.kind != "alarm"
        out.put(c, int(utc_tick[c.scan - block.first]) if own else utc(c.tick))
    return replace(s, alarms=a, causes=known)


def _look_ahead(
    s: TestState, rules: TestRules, block: Block, taken: int, out: _Out, utc_tick: int
) -> TestState:
    """Forecast, when test time has grown enough since the last look."""
    t_s = float(block.t_s[taken - 1])
    if s.start is None or s.over or t_s < s.next_forecast_s:
        return s
    next_s = s.next_forecast_s
    while next_s <= t_s:
        next_s *= FORECAST_RATIO
    least = s.follow.minimum
    fore, said = forecast.look(
        s.forecast, rules, follow.curve(s.follow), follow.stage_of(s.follow), t_s / 3600.0,
        least_h=None if least is None else least.time_h,
    )  # fmt: skip
    scan, tick = block.first + taken - 1, int(block.tick[taken - 1])
    for fields in said:
        out.put(Conclusion(scan, tick, "forecast", fields["of"], fields), utc_tick)
    return replace(s, forecast=fore, next_forecast_s=next_s)


def _finish(
    s: TestState, rules: TestRules, cue: str, tick: int, t_s: float, scan: int, out: _Out,
    utc: Callable[[int], int], utc_tick: int,
) -> TestState:  # fmt: skip
    """End the test: last words of follow and watch; what comes later is kept but not judged."""
    seen, last = watch.end(s.watch, rules, tick, t_s, scan)
    followed, concluded = follow.tell(s.follow, rules, cue, tick, t_s, scan)
    s = replace(s, watch=seen, follow=followed, over=True)
    for item in (*last, *concluded):
        a = s.alarms
        if isinstance(item, Cue):
            known, heard = causes.gather(s.causes, [item])
            for event in heard:
                a = _react(a, event, out, utc, utc_tick)
            s = replace(s, alarms=a, causes=known)
            continue
        out.put(item, utc_tick)
        for event in _cues_of(item):
            a = _react(a, event, out, utc, utc_tick)
        s = replace(s, alarms=a, results=_note(s.results, item))
    return s


def cut(block: Block, start: int, stop: int) -> Block:
    """Return rows ``start`` to ``stop`` of a block as a block of their own."""
    r = slice(start, stop)
    return Block(
        block.first + start,
        block.tick[r],
        block.t_s[r],
        block.values[r],
        block.quality[r],
        block.strain_a[r],
        block.strain_b[r],
        block.specimen_c[r],
        block.room_c[r],
        block.output[r],
    )


# --- everything else --------------------------------------------------------------------


def _stamped(s: TestState, fact: Any) -> tuple[TestState, _Out, int, int]:
    """Bring the test up to the time of a single stamp: clock, then deadlines."""
    out = _out(s)
    clock, tick = timebase.place_stamp(s.clock, fact.stamp)
    lead = s.clock.utc_lead
    a = _pass_time(s.alarms, tick, s.scans, out, lambda at: at + lead)
    return replace(s, clock=clock, alarms=a), out, tick, fact.stamp.utc_tick


def _take_entry(s: TestState, fact: EntryMade) -> tuple[TestState, list[Finding]]:
    s, out, tick, utc_tick = _stamped(s, fact)
    if not _concerns(s.test, fact):
        return replace(s, counts=out.counts), out.findings
    rules = out.rules
    same = utc_tick - tick

    def utc(at: int) -> int:
        return at + same

    if fact.entry == "loaded" and s.start is None and rules.starts == "entry":
        begun = tick - int(float(fact.values.get("minutes_ago", 0.0)) * 60 * TICKS_PER_S)
        s, out.start = replace(s, start=begun), begun
        out.put(Conclusion(s.scans, tick, "entry", "loaded", _entry_fields(fact)), utc_tick)
    elif fact.entry == "ended" and not s.over:
        out.put(Conclusion(s.scans, tick, "entry", "ended", _entry_fields(fact)), utc_tick)
        t_s = float(timebase.seconds_since(np.array([tick]), s.start)[0])
        s = _finish(s, rules, "ended", tick, t_s, s.scans, out, utc, utc_tick)
    elif fact.entry in ("acknowledge", "shelve", "unshelve"):
        v = fact.values
        until = tick + int(float(v["hours"]) * 3600 * TICKS_PER_S) if "hours" in v else None
        item = AlarmEntry(
            s.scans,
            tick,
            fact.entry,
            str(v.get("alarm", "")),
            str(v.get("subject", "")),
            fact.initials,
            until,
        )
        s = replace(s, alarms=_react(s.alarms, item, out, utc, utc_tick))
    else:
        out.put(Conclusion(s.scans, tick, "entry", fact.entry, _entry_fields(fact)), utc_tick)
    return replace(s, counts=out.counts), out.findings


def _entry_fields(fact: EntryMade) -> dict[str, Any]:
    return {"entry": fact.entry, "initials": fact.initials, "values": dict(fact.values), "note": fact.note}


def _concerns(test: str, fact: EntryMade) -> bool:
    """An entry for a frame concerns all its positions unless it names one."""
    position = str(fact.values.get("position", ""))
    return not position or test.endswith("/" + position)


def _take_stamped(s: TestState, fact: Any) -> tuple[TestState, list[Finding]]:
    s, out, _, _ = _stamped(s, fact)
    return replace(s, counts=out.counts), out.findings


def _take_rules(s: TestState, fact: RulesAdopted) -> tuple[TestState, list[Finding]]:
    if fact.test != s.test:
        return s, []
    s, findings = _take_stamped(s, fact)
    return replace(s, rules=fact.rules), findings


def _take_nothing(s: TestState, fact: Any) -> tuple[TestState, list[Finding]]:
    return s, []


_HANDLERS: Final[dict[type, Callable[[TestState, Any], tuple[TestState, list[Finding]]]]] = {
    ScansTaken: _take_scans,
    EntryMade: _take_entry,
    RulesAdopted: _take_rules,
    EngineStarted: _take_stamped,
    ConditionChanged: _take_stamped,
    Ticked: _take_stamped,
    BurstTaken: _take_nothing,
}


# --- what others may ask ----------------------------------------------------------------


def deadline(s: TestState) -> int | None:
    """Return the next lab tick at which something happens although no fact arrives."""
    return alarms.due(s.alarms)


def summary(s: TestState) -> Finding:
    """Return the result table of the test as it stands, as the finding that closes a replay."""
    rules = rules_of(s.rules)
    fields = results.results(s.results, rules, follow.status(s.follow, rules))
    tick = s.clock.latest
    prefix = f"{s.test}|{rules.specimen.id}|summary||1"
    return Finding(prefix, tick + s.clock.utc_lead, timebase.hours(tick, s.start), s.test, "summary", fields)


def status(s: TestState, *, with_curve: bool) -> dict[str, Any]:
    """Return plain values for screens and retained topics."""
    rules = rules_of(s.rules)
    told: dict[str, Any] = dict(follow.status(s.follow, rules))
    lead = s.clock.utc_lead
    told |= watch.status(s.watch)
    told |= {
        "at_tick": s.clock.latest + lead,
        "test_h": timebase.hours(s.clock.latest, s.start),
        "specimen": rules.specimen.id,
        "temperature_c": s.specimen_c,
        "set_point_c": rules.set_point_c,
        "below_k": rules.below_k,
        "above_k": rules.above_k,
        "forecast": forecast.status(s.forecast),
        "alarms": [open_alarm(a, lead) for a in alarms.open_alarms(s.alarms)],
    }
    if with_curve:
        t_h, strain, rate = follow.curve(s.follow)[:3]
        told["curve"] = {"t_h": _thin(t_h), "strain": _thin(strain), "rate_per_h": _thin(rate)}
    return told


def open_alarm(a: alarms.OpenAlarm, lead: int) -> dict[str, Any]:
    """Return one open alarm as plain values; ``lead`` turns lab ticks into UTC ticks."""
    until = a.can_wait_until_tick
    return {
        "alarm": a.alarm,
        "subject": a.subject,
        "state": a.state.value,
        "priority": a.priority.value,
        "message": a.message,
        "to_do": CATALOGUE[a.alarm].to_do,
        "since_tick": a.since_tick + lead,
        "can_wait_until_tick": None if until is None else until + lead,
    }


def _thin(x: FloatArray, most: int = 200) -> list[float | None]:
    rows = np.unique(np.linspace(0, len(x) - 1, most).astype(int)) if len(x) > most else np.arange(len(x))
    return [float(v) if np.isfinite(v) else None for v in x[rows]]


__all__ = ["CoreError", "TestState", "begin", "cut", "deadline", "rules_of", "status", "step", "summary"]
