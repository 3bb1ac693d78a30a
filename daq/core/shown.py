"""What may be asked of a test's state: the next deadline, the table of results, and what screens show."""

from __future__ import annotations

from typing import Any

import numpy as np

from daq.core import alarms, follow, forecast, results, timebase, watch
from daq.core.catalogue import CATALOGUE
from daq.core.teststate import TestState, rules_of
from daq.records import Finding, FloatArray


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
