"""What a person may tell, and that a slip of the hand stops nothing."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from daq.core import chain
from daq.core.entered import wrong
from daq.core.rules import ChannelRules, Role, Specimen, TestRules, rules_to_json
from daq.records import EntryMade, RulesAdopted, ScansTaken, Stamp


def _stamp(t_s: float) -> Stamp:
    return Stamp(int(t_s * 1e4) + 10**13, int(t_s * 1e4), "boot")


def _begun(starts: str = "entry", test: str = "H1") -> chain.TestState:
    channels = (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("mid", Role.SPECIMEN_TEMPERATURE))
    rules = TestRules("s", "H1", test, Specimen("S-1", "x", 25.0, 6.0), channels, starts=starts)
    state = chain.begin(RulesAdopted(_stamp(0), "H1", test, rules_to_json(rules)))
    at = _stamp(60)
    scan = ScansTaken(
        "H1", ("left", "mid"), "boot", np.array([at.utc_tick]), np.array([at.boot_tick]),
        np.array([[0.001, 980.0]]), np.zeros((1, 2), np.uint8),
    )  # fmt: skip
    return chain.step(state, scan)[0]


@pytest.mark.parametrize(
    ("entry", "values", "why"),
    [
        ("shelve", {"alarm": "rupture", "hours": -3.0}, "hours: got -3.0"),
        ("shelve", {"alarm": "rupture", "hours": float("nan")}, "hours: got nan"),
        ("shelve", {"alarm": "rupture", "hours": 10**400}, "hours: got 1000"),
        ("shelve", {"alarm": "rupture", "hours": True}, "hours: got True"),
        ("shelve", {"alarm": "rupture", "hours": "4"}, "hours: got '4'"),
        ("shelve", {"alarm": "rupture"}, "got no hours"),
        ("shelve", {"hours": 4.0}, "got no alarm"),
        ("loaded", {"minutes_ago": -1}, "minutes_ago: got -1"),
        ("loaded", {"minutes_ago": 1e9}, "minutes_ago: got 1000000000.0"),
        ("loaded", {"hours": 1.0}, "wanted it with shelve"),
        ("acknowledge", {"alarm": "tertiary_detcted"}, "alarm: got 'tertiary_detcted', wanted one of"),
        ("acknowledge", {"alarm": 7}, "alarm: got 7"),
        ("acknowledge", {"subject": "left"}, "without an alarm"),
        ("ended", {"alarm": "rupture"}, "alarm: got 'rupture' with ended"),
    ],
)
def test_what_is_wrong_with_an_entry_is_said_and_changes_nothing(
    entry: str, values: dict[str, Any], why: str
) -> None:
    """Refused at the door; and where an older record holds it, the test goes on as if it were not there."""
    assert why in wrong(entry, values)
    before = _begun()
    after, said = chain.step(before, EntryMade(_stamp(61), "H1", entry, "mk", values))
    assert (after.start, after.over, after.alarms) == (None, False, before.alarms)
    assert [f.kind for f in said] == ["entry"]
    assert str(said[0].fields["effect"]).startswith("none: ")


@pytest.mark.parametrize(
    ("entry", "values"),
    [
        ("loaded", {"minutes_ago": 0, "mass_kg": 41.5}),
        ("acknowledge", {"alarm": "", "subject": "", "position": "upper"}),
        ("shelve", {"alarm": "temperature_low", "hours": 4}),
        ("unshelve", {"alarm": "temperature_low"}),
        ("note", {}),
    ],
)
def test_what_is_right_is_let_through(entry: str, values: dict[str, Any]) -> None:
    """A door that refuses what is meant is no door."""
    assert wrong(entry, values) == ""


def test_a_second_word_that_the_load_is_on_moves_nothing_and_says_so() -> None:
    """A person who sees test time unchanged must learn why."""
    state, _ = chain.step(_begun(), EntryMade(_stamp(3660), "H1", "loaded", "mk", {"minutes_ago": 30}))
    assert state.start is not None
    again, (said,) = chain.step(state, EntryMade(_stamp(3700), "H1", "loaded", "mk"))
    assert again.start == state.start
    assert said.fields["effect"] == "none: test time runs already (0.51 h)"


def test_a_person_may_say_that_the_load_is_on_where_the_load_cell_does_not() -> None:
    """A dead load cell must not cost the test its time."""
    state, (said,) = chain.step(_begun("load_channel"), EntryMade(_stamp(100), "H1", "loaded", "mk"))
    assert state.start is not None
    assert "effect" not in said.fields


def test_an_entry_for_one_position_leaves_the_others_alone() -> None:
    """Names of positions may end alike."""
    state = _begun(test="H1/b/upper")
    after, said = chain.step(state, EntryMade(_stamp(61), "H1", "ended", "mk", {"position": "upper"}))
    assert said == []
    assert not after.over


def test_a_clock_that_was_set_is_no_fault_of_the_test() -> None:
    """It once quarantined every test of the house."""
    from daq.records import ClockStepped

    before = _begun("first_scan")
    at = _stamp(61)
    state, said = chain.step(
        before, ClockStepped(Stamp(at.utc_tick + 36_000_000, at.boot_tick, "boot"), 36_000_000)
    )
    assert said == []
    assert (state.start, state.clock.latest) == (before.start, before.clock.latest + 10_000)


def test_an_alarm_that_latches_can_be_let_go() -> None:
    """Without a word for it the alarm stood for the rest of the test."""
    from daq.engine import Engine
    from daq.records import ConditionChanged

    engine = Engine()
    for t, active in ((1.0, True), (2.0, False)):
        engine.take(ConditionChanged(_stamp(t), "", "journal", "journal_trouble", active, "disk"))
    states = []
    for t, entry in ((3.0, "acknowledge"), (4.0, "reset")):
        (said,) = engine.take(EntryMade(_stamp(t), "", entry, "mk", {"alarm": "journal_trouble"}))
        states.append(said.fields["state"])
    assert states == ["latched_acknowledged", "normal"]
