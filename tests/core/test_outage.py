"""The time without readings around a start: what is said of it, and that cuts change nothing."""

from __future__ import annotations

import itertools
import json
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import cache
from importlib.resources import files

import numpy as np
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st
from jsonschema import Draft202012Validator
from jsonschema.exceptions import ValidationError
from rig_facts import facts_of

from daq.codec import encode_finding, encode_state
from daq.core import chain, outage
from daq.core.chain import TestState
from daq.publish import rows_for
from daq.records import (
    BAD,
    EngineStarted,
    Fact,
    Finding,
    FloatArray,
    IntArray,
    RulesAdopted,
    ScansTaken,
    Stamp,
)
from simulator.population import draw
from simulator.rig import Run, simulate

BEFORE, AWAY, MORE = 300, 40, 30
Change = Callable[[ScansTaken, FloatArray], FloatArray]


@cache
def _run() -> Run:
    return simulate(draw(20, 6))


def _started(scans: ScansTaken, row: int, previous: bool = True) -> EngineStarted:
    at = int(scans.boot_tick[row]) - 10
    last = int(scans.boot_tick[0]) if previous else None
    return EngineStarted(Stamp(at, at, ""), "test", last)


def _rows(scans: ScansTaken, rows: slice | IntArray, change: Change | None = None) -> ScansTaken:
    values = scans.values[rows].copy()
    quality = scans.quality[rows].copy()
    part = replace(
        scans, utc_tick=scans.utc_tick[rows], boot_tick=scans.boot_tick[rows], values=values, quality=quality
    )
    return (
        part if change is None else replace(part, values=change(part, values), quality=_marked(part, change))
    )


def _marked(part: ScansTaken, change: Change) -> np.ndarray:
    gone = np.isnan(change(part, part.values.copy())) & (part.quality < BAD)
    return np.where(gone, BAD, part.quality).astype(np.uint8)


def _facts(
    change: Change | None = None, away: int = AWAY, more: int = MORE
) -> tuple[RulesAdopted, list[Fact]]:
    """Rules, and: scans, a start after ``away`` scans that nobody read, scans changed by ``change``."""
    rules, scans = facts_of(_run())
    assert isinstance(rules, RulesAdopted)
    assert isinstance(scans, ScansTaken)
    back = BEFORE + away
    return rules, [
        _rows(scans, slice(0, BEFORE)),
        _started(scans, back),
        _rows(scans, slice(back, back + more), change),
    ]


@cache
def _state_before(rules: RulesAdopted) -> tuple[TestState, tuple[Finding, ...]]:
    scans = facts_of(_run())[1]
    assert isinstance(scans, ScansTaken)
    state, said = chain.step(chain.begin(rules), scans.cut(0, BEFORE))
    return state, tuple(said)


def _through(rules: RulesAdopted, facts: Sequence[Fact]) -> tuple[TestState, list[Finding]]:
    """All that follows from the scans before the outage (always the same) and ``facts`` after them."""
    state, said = _state_before(rules)
    findings = list(said)
    for fact in facts[1:]:
        state, news = chain.step(state, fact)
        findings += news
    return state, findings


def _outages(*given: object, **named: object) -> list[Finding]:
    _, findings = _through(*_facts(*given, **named))  # type: ignore[arg-type]
    return [f for f in findings if f.kind == "outage"]


def _strained(by: float) -> Change:
    return lambda s, v: v + np.array([by if c in ("left", "right") else 0.0 for c in s.channels])


def _warmed(by: float) -> Change:
    couples = [t.name for t in _run().spec.thermocouples]
    return lambda s, v: v + np.array([by if c in couples else 0.0 for c in s.channels])


def test_what_stood_still_is_said_to_have_stood_still_with_both_ends() -> None:
    """The time is that of the last scan before and the first after, whatever the start's own time."""
    (f,) = _outages()
    hours = _run().columns["time_s"] / 3600.0
    zero = hours[0]
    assert f.fields["from_h"] == pytest.approx(hours[BEFORE - 1] - zero, abs=1e-6)
    assert f.fields["to_h"] == pytest.approx(hours[BEFORE + AWAY] - zero, abs=1e-6)
    assert f.fields["hours"] == pytest.approx(f.fields["to_h"] - f.fields["from_h"])
    assert (f.fields["furnace"], f.fields["extensometer"]) == ("as_before", "as_expected")
    assert abs(f.fields["strain_after"] - f.fields["strain_expected"]) < f.fields["strain_doubt"]
    assert f.fields["strain_after"] > f.fields["strain_before"]
    assert "what it was between is not known" in f.fields["words"]
    assert f.id == "H1|S-1|outage||1"


def test_an_extensometer_that_moved_is_told_with_how_far() -> None:
    """Somebody touched it, or the load was off and on: the next strain is not the specimen's alone."""
    (quiet,) = _outages()
    doubt = quiet.fields["strain_doubt"]
    for by in (3.0 * doubt, -3.0 * doubt):
        (f,) = _outages(_strained(by))
        assert f.fields["extensometer"] == "moved"
        off = f.fields["strain_after"] - f.fields["strain_expected"]
        assert off == pytest.approx(by, abs=doubt)
        assert f"moved: strain is {1e6 * off:+.0f}e-6" in f.fields["words"]


@pytest.mark.parametrize(("by", "word"), [(-300.0, "cooled"), (-20.0, "cooled"), (20.0, "hotter")])
def test_a_furnace_that_cooled_is_told_with_both_temperatures(by: float, word: str) -> None:
    """Hours at another temperature are not hours of the test."""
    (f,) = _outages(_warmed(by))
    assert f.fields["furnace"] == word
    assert f.fields["temperature_after_c"] - f.fields["temperature_before_c"] == pytest.approx(by, abs=5.0)
    assert f"{f.fields['temperature_before_c']:.1f} degC before" in f.fields["words"]
    (both,) = _outages(lambda s, v: _strained(-5e-3)(s, _warmed(by)(s, v)))
    assert "which the change of temperature alone can do" in both.fields["words"]


def test_subscribers_find_it_as_the_contract_says() -> None:
    """What is not known is null, never a number."""
    schema = json.loads((files("daq") / "schemas" / "mqtt_event.json").read_text(encoding="utf-8"))
    gone = _outages(lambda s, v: np.full_like(v, np.nan))
    for f in (*_outages(), *gone):
        body = json.loads(rows_for(f, "s")[0].payload)
        Draft202012Validator(schema).validate(body)
        with pytest.raises(ValidationError):
            Draft202012Validator(schema).validate({**body, "furnace": "warm"})


def test_a_restart_between_two_scans_is_no_outage() -> None:
    """Where no reading is missing there is nothing to judge."""
    assert _outages(away=0) == []
    assert len(_outages(away=3)) == 1


def test_a_first_start_is_none_either() -> None:
    """A new journal has no time before."""
    rules, facts = _facts()
    assert isinstance(facts[1], EngineStarted)
    first = replace(facts[1], previous_tick=None)
    _, findings = _through(rules, [facts[0], first, facts[2]])
    assert not [f for f in findings if f.kind == "outage"]


def test_starts_in_a_row_are_one_outage_and_scans_between_make_two() -> None:
    """A house that falls over before its first scan was away all the time; with a few scans it was there."""
    rules, (before, started, after) = _facts()
    assert isinstance(after, ScansTaken)
    assert isinstance(started, EngineStarted)
    _, whole = _through(rules, [before, started, after])
    again = replace(started, stamp=replace(started.stamp, boot_tick=started.stamp.boot_tick + 1))
    _, twice = _through(rules, [before, started, again, after])
    assert [f.fields for f in twice if f.kind == "outage"] == [f.fields for f in whole if f.kind == "outage"]
    parts = [before, started, after.cut(0, 2), _started(after, 14), after.cut(14, len(after))]
    _, findings = _through(rules, parts)
    one, two = [f for f in findings if f.kind == "outage"]
    assert one.fields["furnace"] == "as_before"  # from two scans
    assert two.fields["from_h"] == pytest.approx(one.fields["to_h"], abs=1.0)
    assert one.id != two.id


def test_sensors_that_do_not_come_back_are_waited_for_no_longer_than_needed() -> None:
    """Their loss is an alarm of its own; the outage is told with what there is."""
    (f,) = _outages(lambda s, v: np.full_like(v, np.nan))
    assert (f.fields["furnace"], f.fields["extensometer"]) == ("not_known", "not_known")
    assert f.fields["strain_after"] is None
    rules, (before, started, after) = _facts(lambda s, v: np.full_like(v, np.nan))
    assert isinstance(after, ScansTaken)
    _, findings = _through(rules, [before, started, after.cut(0, outage.PATIENCE - 1)])
    assert not [f for f in findings if f.kind == "outage"]


def test_before_the_load_is_on_only_the_furnace_is_judged() -> None:
    """There is no test time yet, and no strain that counts."""
    rules, facts = _facts()
    waiting = replace(rules, rules=rules.rules.replace('"first_scan"', '"entry"'))
    _, findings = _through(waiting, facts)
    (f,) = [f for f in findings if f.kind == "outage"]
    assert (f.fields["from_h"], f.fields["to_h"]) == (None, None)
    assert (f.fields["furnace"], f.fields["extensometer"]) == ("as_before", "not_known")
    assert f.fields["hours"] > 1.0


@settings(
    max_examples=8, deadline=None, phases=[Phase.generate], suppress_health_check=[HealthCheck.too_slow]
)
@given(data=st.data())
def test_cuts_change_neither_finding_nor_state(data: st.DataObject) -> None:
    """Live the scans after a start come one at a time, in a replay all at once."""
    rules, (before, started, after) = _facts(_strained(2e-4))
    assert isinstance(after, ScansTaken)
    whole_state, whole = _through(rules, [before, started, after])
    cuts = sorted(data.draw(st.sets(st.integers(1, 25), min_size=1)))
    edges = [0, *cuts, len(after)]
    pieces = [after.cut(a, b) for a, b in itertools.pairwise(edges)]
    state, findings = _through(rules, [before, started, *pieces])
    assert [encode_finding(f) for f in findings] == [encode_finding(f) for f in whole]
    assert encode_state(state) == encode_state(whole_state)
