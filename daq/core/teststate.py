"""The state of one test, and the numbering of what is concluded about it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from functools import lru_cache
from typing import Final

from daq.codec import state
from daq.core import alarms, follow, forecast, results, timebase, watch
from daq.core.alarms import AlarmsState
from daq.core.block import Conclusion
from daq.core.causes import CausesState
from daq.core.follow import FollowState
from daq.core.forecast import ForecastState
from daq.core.outage import OutageState
from daq.core.results import ResultsState
from daq.core.rules import TestRules, rules_from_json
from daq.core.timebase import TimeState
from daq.core.watch import WatchState
from daq.records import TICKS_PER_S, Finding, RulesAdopted

FORECAST_FIRST_S: Final = 3600.0


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
    outage: OutageState | None = None


@lru_cache(maxsize=1024)
def rules_of(text: str) -> TestRules:
    """Return the rules in canonical JSON ``text``; parsed once, they are asked for with every scan."""
    return rules_from_json(text)


def start_of(rules: TestRules) -> int | None:
    """Return the lab tick of full load where the rules name an instant (ISO 8601 with zone), else None."""
    if rules.starts in ("first_scan", "entry", "load_channel"):
        return None
    return round(datetime.fromisoformat(rules.starts).timestamp() * TICKS_PER_S)


def begin(fact: RulesAdopted) -> TestState:
    """Return the state of a test that begins with its first rules."""
    rules = rules_of(fact.rules)
    clock, _ = timebase.place_stamp(TimeState(), fact.stamp) if fact.stamp.boot_id else (TimeState(), 0)
    start = start_of(rules)
    return TestState(
        fact.test, fact.rules, clock, follow.begin(rules), watch.begin(rules),
        alarms.begin(), forecast.begin(), results.begin(rules), start=start, counts={},
    )  # fmt: skip


@dataclass(slots=True)
class Out:
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


def out_of(s: TestState) -> Out:
    return Out(rules_of(s.rules), dict(s.counts or {}), s.start, [])
