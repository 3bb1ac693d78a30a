"""The engine: what happens to the house, and what no fact may do."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from daq.codec import encode_state
from daq.core import chain
from daq.core.rules import ChannelRules, Role, Specimen, TestRules, rules_to_json
from daq.engine import Engine
from daq.publish import rows_for
from daq.records import (
    BurstTaken,
    ClockStepped,
    ConditionChanged,
    EngineStarted,
    EntryMade,
    Finding,
    RulesAdopted,
    ScansTaken,
    Stamp,
    Ticked,
)

BOOT = "boot"
UTC = 17 * 10**12


def _stamp(t_s: float, ahead_s: float = 0.0) -> Stamp:
    tick = round(t_s * 1e4)
    return Stamp(UTC + tick + round(ahead_s * 1e4), tick, BOOT)


def _adopt(frame: str, specimen: str = "S-1", t_s: float = 0.0) -> RulesAdopted:
    channels = (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("mid", Role.SPECIMEN_TEMPERATURE))
    rules = TestRules(
        "s", frame, frame, Specimen(specimen, "x", 25.0, 6.0), channels,
        stress_pa=2e8, set_point_c=980.0, below_k=3.0, above_k=3.0,
    )  # fmt: skip
    return RulesAdopted(_stamp(t_s), frame, frame, rules_to_json(rules))


def _scan(frame: str, t_s: float, celsius: float = 980.0) -> ScansTaken:
    at = _stamp(t_s)
    return ScansTaken(
        frame, ("left", "mid"), BOOT, np.array([at.utc_tick]), np.array([at.boot_tick]),
        np.array([[0.001, celsius]]), np.zeros((1, 2), np.uint8),
    )  # fmt: skip


@pytest.fixture
def engine() -> Engine:
    """Two frames with a scan each."""
    e = Engine()
    for fact in (_adopt("H1"), _adopt("H2"), _scan("H1", 1.0), _scan("H2", 1.0)):
        e.take(fact)
    return e


def _hot(e: Engine, frame: str, start_s: float = 10.0) -> list[Finding]:
    """Make ``frame`` too hot for ten minutes; return the findings."""
    return [f for t in range(40) for f in e.take(_scan(frame, start_s + 15.0 * t, 990.0))]


def test_a_clock_that_was_set_is_told_once_and_stops_no_test(engine: Engine) -> None:
    """A step once quarantined every test of the house."""
    said = engine.take(ClockStepped(_stamp(2.0, 3600.0), 36_000_000))
    assert [f.fields["alarm"] for f in said] == ["clock_stepped"]
    assert engine.quarantined == {}


def test_a_word_to_the_host_moves_no_specimen(engine: Engine) -> None:
    """'host ended' once ended every test, and 'host acknowledge' saw every alarm for everybody."""
    _hot(engine, "H1")
    open_before = [a["state"] for a in engine.status(with_curve=False)["H1"]["alarms"]]
    assert "unacknowledged" in open_before
    engine.take(EntryMade(_stamp(700.0), "", "acknowledge", "mk"))
    assert [a["state"] for a in engine.status(with_curve=False)["H1"]["alarms"]] == open_before
    said = engine.take(EntryMade(_stamp(701.0), "", "ended", "mk"))
    assert [f.fields.get("effect") for f in said] == ["none: it concerns a test, not the host"]
    assert not any(s.over for s in engine.tests.values())


@pytest.mark.parametrize(
    "fact",
    [
        EntryMade(_stamp(2.0), "", "shelve", "mk", {"alarm": "link_lost", "hours": "many"}),
        ConditionChanged(_stamp(2.0), "", "x", "no_such_condition", True),
        BurstTaken(_scan("H1", 2.0), "rupture"),
        EntryMade(_stamp(2.0), "H9", "ended", "mk"),
        RulesAdopted(_stamp(2.0), "H3", "H3", "{}"),
        RulesAdopted(_stamp(2.0), "H3", "H3", "no json"),
        Ticked(_stamp(-50.0), "H1"),
    ],
    ids=lambda fact: type(fact).__name__,
)
def test_no_fact_however_odd_raises_anything_or_stops_another_test(engine: Engine, fact: Any) -> None:
    """It would end the daemon, and again at each start, since the fact is in the record."""
    engine.take(fact)
    assert set(engine.quarantined) <= {"H3"}
    assert engine.take(_scan("H1", 60.0)) is not None
    assert engine.tests["H1"].scans == 2


def test_findings_without_a_canonical_form_quarantine_their_test_alone(
    engine: Engine, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A NaN in one finding would be refused by the journal together with everybody's facts."""
    real = chain.step

    def step(s: Any, fact: Any) -> Any:
        state, said = real(s, fact)
        if s.test == "H1":
            said = [*said, Finding("x", 1, None, "H1", "minimum_rate", {"rate_per_h": float("nan")})]
        return state, said

    monkeypatch.setattr(chain, "step", step)
    (alarm,) = [f for f in engine.take(_scan("H1", 2.0)) if f.kind == "alarm"]
    assert (alarm.fields["alarm"], alarm.fields["subject"]) == ("quarantined", "H1")
    engine.take(_scan("H2", 2.0))
    assert set(engine.quarantined) == {"H1"}


def test_a_state_that_cannot_be_shown_costs_one_status_not_all(
    engine: Engine, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The record must go on when a screen cannot."""
    real = chain.status

    def status(s: Any, *, with_curve: bool) -> Any:
        return {"rate_per_h": float("inf")} if s.test == "H1" else real(s, with_curve=with_curve)

    monkeypatch.setattr(chain, "status", status)
    told = engine.status(with_curve=False)
    assert "cannot be shown" in told["H1"]["quarantined"]
    assert told["H2"]["quarantined"] is None


def test_alarms_of_a_specimen_that_has_left_its_frame_end(engine: Engine) -> None:
    """The broker keeps an alarm until it is told that it is over."""
    raised = [f for f in _hot(engine, "H1") if f.kind == "alarm" and f.fields["state"] == "unacknowledged"]
    assert raised
    said = engine.take(_adopt("H1", "S-2", 700.0))
    assert {f.fields["alarm"] for f in said} >= {f.fields["alarm"] for f in raised}
    cleared = {row.topic for f in said for row in rows_for(f, "s") if row.retain and row.payload == b""}
    standing = {row.topic for f in raised for row in rows_for(f, "s") if row.retain}
    assert standing <= cleared
    assert engine.status(with_curve=False)["H1"]["alarms"] == []


def test_a_specimen_that_hangs_here_again_repeats_no_id(engine: Engine) -> None:
    """A finding whose id was there before would be taken for a repetition, its alarm never told."""
    said = _hot(engine, "H1")
    for t_s, specimen in ((700.0, "S-2"), (710.0, "S-1")):
        said += engine.take(_adopt("H1", specimen, t_s))
        said += _hot(engine, "H1", t_s + 10.0)
    ids = [f.id for f in said]
    assert len(ids) == len(set(ids))
    assert sum(i.startswith("H1|S-1|alarm|temperature_high") for i in ids) >= 2


def test_a_quarantine_ends_with_its_specimen_and_the_next_one_is_told_again(
    engine: Engine, monkeypatch: pytest.MonkeyPatch
) -> None:
    """An alarm that stands for ever hides the next."""

    def fails(s: Any, fact: Any) -> Any:
        raise ZeroDivisionError("a bug")

    with monkeypatch.context() as broken:
        broken.setattr(chain, "step", fails)
        engine.take(_scan("H1", 2.0))
    assert set(engine.quarantined) == {"H1"}
    engine.take(_adopt("H1", "S-2", 10.0))
    assert engine.quarantined == {}
    monkeypatch.setattr(chain, "step", fails)
    said = engine.take(_scan("H1", 20.0))
    assert [f.fields["alarm"] for f in said] == ["quarantined"]
    assert said[0].fields["state"] == "unacknowledged"


def test_deadlines_of_the_host_before_a_clock_step_are_dated_by_the_clock_of_then(engine: Engine) -> None:
    """The finding would else stand in the record an hour after it was so."""
    engine.take(ConditionChanged(_stamp(10.0), "", "gauge", "link_lost", True, "no answer"))
    said = engine.take(ClockStepped(_stamp(200.0, 3600.0), 36_000_000))
    lost = [f for f in said if f.fields["alarm"] == "link_lost"]
    assert [f.at_tick for f in lost] == [_stamp(70.0).utc_tick]


@pytest.mark.parametrize("kill_at", [0, 3, 5, 8, 12])
def test_alarms_with_delays_are_the_same_live_with_ticks_and_in_a_recording_without(kill_at: int) -> None:
    """Live, time without facts is ticked; a recording has only the next scan. Also across a kill."""
    scans = [
        _scan("H1", t, c) for t, c in ((5, 980.0), (10, 990.0), (200, 990.0), (205, 980.0), (4000, 980.0))
    ]
    recorded, live = Engine(), Engine()
    wanted, got = list(recorded.take(_adopt("H1"))), list(live.take(_adopt("H1")))
    for scan in scans:
        wanted += recorded.take(scan)
    taken = 0
    now, to_come = 0.0, list(scans)
    while to_come:
        now += 1.0
        due = live.next_deadline("H1")
        if due is not None and due <= now * 1e4 < to_come[0].boot_tick[0]:
            at = due / 1e4
            got += live.take(Ticked(_stamp(at), "H1"))
            taken += 1
        elif to_come[0].boot_tick[0] <= now * 1e4:
            got += live.take(to_come.pop(0))
            taken += 1
        if taken == kill_at:
            after = Engine()
            for key, data in list(live.snapshots()):
                after.restore(key, data)
            live = after
            taken += 1
    assert [(f.id, f.at_tick, f.test_h, dict(f.fields)) for f in got] == [
        (f.id, f.at_tick, f.test_h, dict(f.fields)) for f in wanted
    ]
    assert any(f.fields.get("alarm") == "temperature_high" for f in got if f.kind == "alarm")
    assert encode_state(live.tests["H1"].alarms) == encode_state(recorded.tests["H1"].alarms)


def test_a_start_after_an_outage_says_how_long_nothing_was_recorded(engine: Engine) -> None:
    """And a restart in the blink of an eye says nothing."""
    quick = engine.take(EngineStarted(_stamp(10.0), "1", _stamp(8.0).utc_tick))
    long = engine.take(EngineStarted(_stamp(4000.0), "1", _stamp(400.0).utc_tick))
    assert (quick, {f.fields["alarm"] for f in long}) == ([], {"outage"})
    assert "1.00 h" in long[0].fields["message"]
