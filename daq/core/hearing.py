"""What the alarm machine of a test hears: cues, conclusions that are alarms too, and the end of the test."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from typing import Any, Final

from daq.core import alarms, causes, follow, results, timebase, watch
from daq.core.alarm_table import State
from daq.core.alarms import AlarmEntry, AlarmsState
from daq.core.block import Conclusion, Cue
from daq.core.results import ResultsState
from daq.core.rules import TestRules
from daq.core.teststate import Out, TestState, out_of
from daq.records import Finding, RulesAdopted

Utc = Callable[[int], int]
"""From a lab tick to the UTC tick beside it."""


def react(a: AlarmsState, item: Cue | AlarmEntry, out: Out, utc: Utc, utc_tick: int) -> AlarmsState:
    a = pass_time(a, item.tick, item.scan, out, utc)
    a, said = alarms.react(a, [item])
    for c in said:
        out.put(c, utc_tick)
    return a


def pass_time(a: AlarmsState, tick: int, scan: int, out: Out, utc: Utc) -> AlarmsState:
    due = alarms.due(a)
    if due is None or due > tick:
        return a
    a, said = alarms.pass_time(a, tick, scan)
    for c in said:
        out.put(c, utc(c.tick))
    return a


_STAGE_ALARMS: Final = {"tertiary": "tertiary_detected", "secondary": "stage_secondary"}


def cues_of(c: Conclusion) -> Sequence[Cue]:
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


def note(r: ResultsState, c: Conclusion) -> ResultsState:
    return results.note(r, replace(c, fields=_frozen(c.fields)))


def _frozen(v: Any) -> Any:
    """Return a plain JSON value that nobody can change: what the alarm machine keeps is state."""
    if isinstance(v, list | tuple):
        return tuple(_frozen(x) for x in v)
    return {k: _frozen(x) for k, x in v.items()} if isinstance(v, Mapping) else v


def finish(
    s: TestState, rules: TestRules, cue: str, tick: int, t_s: float, scan: int, out: Out,
    utc: Utc, utc_tick: int,
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
                a = react(a, event, out, utc, utc_tick)
            s = replace(s, alarms=a, causes=known)
            continue
        out.put(item, utc_tick)
        for event in cues_of(item):
            a = react(a, event, out, utc, utc_tick)
        s = replace(s, alarms=a, results=note(s.results, item))
    return s


def stamped(s: TestState, fact: Any) -> tuple[TestState, Out, int, int]:
    """Bring the test up to the time of a single stamp: clock, then deadlines."""
    out = out_of(s)
    clock, tick = timebase.place_stamp(s.clock, fact.stamp)
    lead = s.clock.utc_lead
    a = pass_time(s.alarms, tick, s.scans, out, lambda at: at + lead)
    return replace(s, clock=clock, alarms=a), out, tick, fact.stamp.utc_tick


def leave(s: TestState, fact: RulesAdopted, next_one: str) -> tuple[list[Finding], Mapping[str, int]]:
    """Return the last findings of a test whose specimen has left, and how far its findings were counted.

    Its open alarms end: else the broker would keep alarms of a specimen that hangs there no more.
    """
    s, out, tick, utc_tick = stamped(s, fact)
    for a in alarms.open_alarms(s.alarms):
        message = f"was {a.state.value} when specimen {next_one} took the place: {a.message}"
        ended = replace(a, state=State.NORMAL, message=message, can_wait_until_tick=None)
        name = f"{a.alarm}/{a.subject}" if a.subject else a.alarm
        fields = alarms.fields_of(ended, tick)
        out.put(Conclusion(s.scans, tick, "alarm", f"{name}#{a.occurrence}", fields), utc_tick)
    return out.findings, out.counts
