"""Operator entries: what each may say, and what it does to a test or to the host's alarms.

A person's slip of the hand must never stop an evaluation. What is wrong is refused at the
door (:func:`wrong`); what stands in a record all the same changes nothing and says why.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any, Final

from daq.core import timebase
from daq.core.alarms import SHELVE_MOST_S, AlarmEntry
from daq.core.block import Conclusion
from daq.core.catalogue import CATALOGUE
from daq.core.hearing import finish, react, stamped
from daq.core.teststate import TestState
from daq.records import TICKS_PER_S, EntryMade, Finding

ON_ALARMS: Final = ("acknowledge", "reset", "shelve", "unshelve")
HOURS_MOST: Final = SHELVE_MOST_S / 3600.0
MINUTES_MOST: Final = 60.0 * 24.0 * 366.0
"""A full load that has been on for longer than a year [min] was meant for another test."""
_NUMBERS: Final = {"hours": ("shelve", HOURS_MOST), "minutes_ago": ("loaded", MINUTES_MOST)}
_TEXTS: Final = ("alarm", "subject", "position")


def wrong(entry: str, values: Mapping[str, Any]) -> str:
    """Return what is wrong with the values of an entry (place, got, wanted), or an empty text."""
    for key, (belongs, most) in _NUMBERS.items():
        if key not in values:
            continue
        x = values[key]
        if entry != belongs:
            return f"{key}: got it with {entry}, wanted it with {belongs} only"
        number = isinstance(x, int | float) and not isinstance(x, bool)
        if not number or not (0 < x <= most or (x == 0 and key == "minutes_ago")):  # a NaN is none of these
            return f"{key}: got {x!r}, wanted a number above 0, at most {most:g}"
    for key in _TEXTS:
        if not isinstance(values.get(key, ""), str):
            return f"{key}: got {values[key]!r}, wanted text"
    alarm = values.get("alarm", "")
    if (alarm or values.get("subject")) and entry not in ON_ALARMS:
        return f"alarm: got {alarm!r} with {entry}, wanted it with {', '.join(ON_ALARMS)} only"
    if values.get("subject") and not alarm:
        return f"subject: got {values['subject']!r} without an alarm, wanted the alarm's name beside it"
    if alarm and alarm not in CATALOGUE:
        return f"alarm: got {alarm!r}, wanted one of {', '.join(sorted(CATALOGUE))}"
    if entry == "shelve" and not (alarm and "hours" in values):
        return (
            "shelve: got no " + ("hours" if alarm else "alarm") + ", wanted one alarm and for how many hours"
        )
    return ""


def take(s: TestState, fact: EntryMade) -> tuple[TestState, list[Finding]]:
    """Take one entry for this test's frame; one that names another position only brings the time."""
    s, out, tick, utc_tick = stamped(s, fact)
    if not concerns(s.test, fact):
        return replace(s, counts=out.counts), out.findings
    lead = utc_tick - tick

    def utc(at: int) -> int:
        return at + lead

    bad = wrong(fact.entry, fact.values)
    if fact.entry in ON_ALARMS and not bad:
        event = on_alarms(fact, s.scans, tick)
        s = replace(s, alarms=react(s.alarms, event, out, utc, utc_tick))
        return replace(s, counts=out.counts), out.findings
    effect = bad or _effect(s, fact.entry)
    fields = {"entry": fact.entry, "initials": fact.initials, "values": dict(fact.values), "note": fact.note}
    if effect:
        fields["effect"] = f"none: {effect}"
    elif fact.entry == "loaded":
        begun = tick - int(float(fact.values.get("minutes_ago", 0.0)) * 60 * TICKS_PER_S)
        s, out.start = replace(s, start=begun), begun
    out.put(Conclusion(s.scans, tick, "entry", fact.entry, fields), utc_tick)
    if fact.entry == "ended" and not effect:
        t_s = -1.0 if s.start is None else (tick - s.start) / TICKS_PER_S
        s = finish(s, out.rules, "ended", tick, t_s, s.scans, out, utc, utc_tick)
    return replace(s, counts=out.counts), out.findings


def _effect(s: TestState, entry: str) -> str:
    """Return why an entry changes nothing, or an empty text."""
    if entry == "loaded" and s.start is not None:
        ran = timebase.hours(s.clock.latest, s.start) or 0.0
        return f"test time runs already ({ran:.2f} h)"
    if entry in ("loaded", "ended") and s.over:
        return "the test is over"
    return ""


def on_alarms(fact: EntryMade, scan: int, tick: int) -> AlarmEntry:
    """Return what the alarm machine is told by an entry that :func:`wrong` has passed."""
    v = fact.values
    until = tick + int(float(v["hours"]) * 3600 * TICKS_PER_S) if "hours" in v else None
    return AlarmEntry(
        scan, tick, fact.entry, v.get("alarm", ""), v.get("subject", ""), fact.initials, until
    )  # fmt: skip


def concerns(test: str, fact: EntryMade) -> bool:
    """An entry for a frame concerns all its positions unless it names one."""
    position = str(fact.values.get("position", ""))
    return not position or test == f"{fact.frame}/{position}"
