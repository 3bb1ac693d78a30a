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

from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import lru_cache
from typing import Any, Final

import numpy as np

from daq.core import alarms, causes, entered, follow, forecast, milestones, outage, results, timebase, watch
from daq.core.adopt import adopt
from daq.core.block import Block, Conclusion, Cue
from daq.core.convert import Plan, convert, prepare
from daq.core.hearing import cues_of, finish, leave, note, react, stamped
from daq.core.rules import Role, TestRules
from daq.core.shown import deadline, open_alarm, status, summary
from daq.core.teststate import Out, TestState, begin, out_of, rules_of, start_of
from daq.records import (
    TICKS_PER_S,
    BurstTaken,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    EntryMade,
    Fact,
    Finding,
    IntArray,
    RulesAdopted,
    ScansTaken,
    Ticked,
)

FORECAST_LEAST: Final = 1.002
"""Looks of the forecast are never closer than this ratio of test time, whatever it foretells."""
FULL_LOAD_SHARE: Final = 0.98
"""Share of the nominal force from which ``starts: load_channel`` calls the load full; machines of
class 1 (ISO 7500-2) are within 1 %, so 2 % leaves room for the load cell's own error."""


@lru_cache(maxsize=1024)
def _plan(text: str, columns: tuple[str, ...]) -> Plan:
    return prepare(rules_of(text), columns)


def step(s: TestState, fact: Fact) -> tuple[TestState, list[Finding]]:
    """Take one fact of this test's frame (or of the host) and return what follows from it.

    Raises:
        CoreError: a fact for another test's state, or a broken promise between the steps.
    """
    handler = _HANDLERS[type(fact)]
    return handler(s, fact)


# --- scans ------------------------------------------------------------------------------


def _take_scans(s: TestState, fact: ScansTaken) -> tuple[TestState, list[Finding]]:
    out = out_of(s)
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
        s = _look_ahead(s, rules, block, taken, out, utc, int(fact.utc_tick[done - 1]))
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
    s: TestState, rules: TestRules, block: Block, out: Out, utc: Callable[[int], int], utc_tick: IntArray
) -> tuple[TestState, int]:
    """Run one converted block through watch and follow; stop after the scan that shows rupture."""
    known = np.flatnonzero(np.isfinite(block.specimen_c))
    if known.size:
        s = replace(s, specimen_c=float(block.specimen_c[known[-1]]))
    if s.over:
        return _conclude(s, (), block, out, utc, utc_tick), len(block)
    stage = follow.stage_of(s.follow)
    while True:
        seen, watched = watch.watch(s.watch, rules, block, stage=stage)
        followed, concluded = follow.follow(s.follow, rules, block)
        broken = next((c for c in watched if isinstance(c, Cue) and c.alarm == "rupture" and c.active), None)
        # what is watched depends on the stage, so no block may reach across a change of it, nor past rupture
        ends = [c.scan for c in concluded if c.kind == "stage"] + ([broken.scan] if broken else [])
        last = min(ends, default=block.first + len(block) - 1)
        if last - block.first + 1 >= len(block):
            break
        block = block.cut(0, last - block.first + 1)
    concluded = _with_doubt(concluded, watch.doubt(seen))
    if s.outage is not None:
        _, mean = milestones.mean_strain(s.results.mean, block.strain_a, block.strain_b)
        waits, told = outage.take(s.outage, rules, block, mean, s.start)
        s, concluded = replace(s, outage=waits), (*concluded, *told)
    s = replace(s, watch=seen, follow=followed, results=results.observe(s.results, rules, block))
    s = _conclude(s, (*watched, *concluded), block, out, utc, utc_tick)
    if broken is not None:
        t_s = float(broken.figures["time_h"]) * 3600.0  # when it broke, a scan or more before it was sure
        s = finish(
            s, rules, "ruptured", broken.tick, t_s, broken.scan, out, utc, int(utc_tick[len(block) - 1])
        )
    return s, len(block)


def _with_doubt(concluded: tuple[Conclusion, ...], doubt: str | None) -> tuple[Conclusion, ...]:
    """Say beside a tertiary detection that the specimen may be hotter than indicated, where that is so."""
    if doubt is None:
        return concluded
    return tuple(
        replace(c, fields={**c.fields, "why": f"{c.fields['why']}; but {doubt}"})
        if c.kind == "stage" and c.fields["stage"] == "tertiary"
        else c
        for c in concluded
    )


def _conclude(
    s: TestState,
    items: Sequence[Conclusion | Cue],
    block: Block,
    out: Out,
    utc: Callable[[int], int],
    utc_tick: IntArray,
) -> TestState:
    """Let the alarm machine hear of a block's items, and number everything in the order of scans."""
    said = [i for i in items if isinstance(i, Conclusion)]
    cues = [i for i in items if isinstance(i, Cue)] + [cue for c in said for cue in cues_of(c)]
    known, cues = causes.gather(s.causes, sorted(cues, key=lambda cue: cue.scan))
    a, alarmed = alarms.take_block(s.alarms, cues, block.tick, block.first)
    for c in said:
        s = replace(s, results=note(s.results, c))

    def place(c: Conclusion) -> tuple[int, bool]:
        """By scan; what fell due before that scan comes first, as where time was ticked in between."""
        return c.scan, c.kind != "alarm" or c.tick >= block.tick[c.scan - block.first]

    for c in sorted((*said, *alarmed), key=place):  # stable: what was seen, then its alarm
        own = c.kind != "alarm"
        out.put(c, int(utc_tick[c.scan - block.first]) if own else utc(c.tick))
    return replace(s, alarms=a, causes=known)


def _look_ahead(
    s: TestState,
    rules: TestRules,
    block: Block,
    taken: int,
    out: Out,
    utc: Callable[[int], int],
    utc_tick: int,
) -> TestState:
    """Forecast, and hold the rate against its limit, when test time has grown enough since the last look."""
    t_s = float(block.t_s[taken - 1])
    if s.start is None or s.over or t_s < s.next_forecast_s:
        return s
    least = s.follow.minimum
    fore, said = forecast.look(
        s.forecast, rules, follow.curve(s.follow), follow.stage_of(s.follow), t_s / 3600.0,
        least_h=None if least is None else least.time_h,
    )  # fmt: skip
    scan, tick = block.first + taken - 1, int(block.tick[taken - 1])
    for fields in said:
        out.put(Conclusion(scan, tick, "forecast", fields["of"], fields), utc_tick)
    # before noise is known its 90 % limits are those of white noise alone, and much too close
    if rules.limits.rate_per_h is not None and s.follow.models.shape[0]:
        now = follow.status(s.follow, rules)
        if now["rate_per_h"] is not None:
            rate = (now["rate_per_h"], now["rate_low_per_h"], now["rate_high_per_h"])
            seen, cues = watch.watch_rate(s.watch, rules, scan, tick, t_s, rate)
            a = s.alarms
            for cue in cues:
                a = react(a, cue, out, utc, utc_tick)
            s = replace(s, watch=seen, alarms=a)
    next_s = max(3600.0 * forecast.next_look_h(fore, t_s / 3600.0), t_s * FORECAST_LEAST)
    return replace(s, forecast=fore, next_forecast_s=next_s)


# --- everything else --------------------------------------------------------------------


def _take_stamped(s: TestState, fact: Any) -> tuple[TestState, list[Finding]]:
    s, out, _, _ = stamped(s, fact)
    return replace(s, counts=out.counts), out.findings


def _take_started(s: TestState, fact: EngineStarted) -> tuple[TestState, list[Finding]]:
    """Note what stood before a start; what came after the start before is judged with what there is."""
    s, out, tick, utc_tick = stamped(s, fact)
    known, last = s.outage, s.watch.cadence.latest
    if fact.previous_tick is None or s.over or last is None or (known is not None and known.to_tick is None):
        return replace(s, counts=out.counts), out.findings
    if known is not None:
        for c in outage.conclude(known, out.rules, s.scans, tick, s.start):
            out.put(c, utc_tick)
    now = follow.status(s.follow, out.rules)
    rate = (now["rate_per_h"], now["rate_low_per_h"], now["rate_high_per_h"])
    usual = max(s.watch.cadence.usual, (out.rules.scan_every_s or 0.0) * TICKS_PER_S)
    before = outage.begin(last, usual, s.specimen_c, s.results.recent, rate)
    return replace(s, outage=before, counts=out.counts), out.findings


def _take_rules(s: TestState, fact: RulesAdopted) -> tuple[TestState, list[Finding]]:
    """Adopt rules; those that began the test are in force already, and in a recording they have no time."""
    if fact.test != s.test or (fact.rules == s.rules and not fact.stamp.boot_id):
        return s, []
    s, out, tick, utc_tick = stamped(s, fact)
    new = rules_of(fact.rules)
    seen, told, gone = adopt(s.watch, s.results, out.rules, new)
    ends = [Cue(s.scans, tick, alarm, subject, False) for alarm, subject in gone]
    known, ends = causes.gather(s.causes, ends)
    a = s.alarms
    for cue in ends:
        a = react(a, cue, out, lambda at: at + utc_tick - tick, utc_tick)
    start = s.start if s.start is not None else start_of(new)
    s = replace(s, rules=fact.rules, start=start, watch=seen, results=told, alarms=a, causes=known)
    return replace(s, counts=out.counts), out.findings


def _take_nothing(s: TestState, fact: Any) -> tuple[TestState, list[Finding]]:
    return s, []


_HANDLERS: Final[dict[type, Callable[[TestState, Any], tuple[TestState, list[Finding]]]]] = {
    ScansTaken: _take_scans,
    EntryMade: entered.take,
    RulesAdopted: _take_rules,
    EngineStarted: _take_started,
    ConditionChanged: _take_stamped,
    ClockStepped: _take_stamped,
    Ticked: _take_stamped,
    BurstTaken: _take_nothing,
}

__all__ = [
    "TestState",
    "begin",
    "deadline",
    "leave",
    "open_alarm",
    "rules_of",
    "start_of",
    "status",
    "step",
    "summary",
]
