"""One cause, one alarm."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from daq.core.block import Cue
from daq.core.causes import CausesState, gather

SENSORS = ("top", "mid", "bot", "specimen_mean")


def _cue(scan: int, alarm: str, subject: str, active: bool = True) -> Cue:
    return Cue(scan, scan * 10, alarm, subject, active, f"{subject} says so", None, {"now_c": 988.0})


def test_a_hot_furnace_is_one_alarm_whatever_the_number_of_sensors() -> None:
    """Eight alarms for one warm hour are how alarms come to be switched off."""
    cues = [_cue(1, "temperature_high", s) for s in SENSORS]
    cues += [_cue(2, "temperature_nearing_high", s) for s in SENSORS]
    cues += [_cue(9, "temperature_high", s, False) for s in SENSORS]
    cues += [_cue(12, "temperature_nearing_high", s, False) for s in SENSORS]
    _, heard = gather(CausesState(), cues)
    assert [(c.alarm, c.subject, c.active, c.scan) for c in heard] == [
        ("temperature_high", "", True, 1),
        ("temperature_high", "", False, 9),
        ("temperature_nearing_high", "", True, 9),
        ("temperature_nearing_high", "", False, 12),
    ]
    assert heard[0].figures["channel"] == "top"


def test_a_warning_gives_way_to_the_alarm_it_warned_of() -> None:
    """Nearing the edge says nothing more once the edge is passed."""
    cues = [
        _cue(1, "temperature_nearing_low", "mid"),
        _cue(2, "temperature_low", "mid"),
        _cue(3, "temperature_low", "mid", False),
        _cue(4, "temperature_nearing_low", "mid", False),
    ]
    _, heard = gather(CausesState(), cues)
    assert [(c.alarm, c.active) for c in heard] == [
        ("temperature_nearing_low", True),
        ("temperature_low", True),
        ("temperature_nearing_low", False),
        ("temperature_low", False),
        ("temperature_nearing_low", True),
        ("temperature_nearing_low", False),
    ]


def test_a_warning_comes_back_when_the_graver_alarm_ends_and_the_edge_is_still_near() -> None:
    """A furnace that is just inside again is not well: silence there would read as all clear."""
    cues = [
        _cue(1, "temperature_nearing_high", "mid"),
        _cue(2, "temperature_nearing_high", "top"),
        _cue(3, "temperature_high", "mid"),
        _cue(4, "temperature_nearing_high", "top", False),
        _cue(5, "temperature_high", "mid", False),
    ]
    _, heard = gather(CausesState(), cues)
    assert [(c.alarm, c.active, c.scan) for c in heard] == [
        ("temperature_nearing_high", True, 1),
        ("temperature_high", True, 3),
        ("temperature_nearing_high", False, 3),
        ("temperature_high", False, 5),
        ("temperature_nearing_high", True, 5),
    ]
    assert heard[-1].figures == {"channel": "mid"}
    assert "still close" in heard[-1].message


def test_a_warning_that_ended_meanwhile_does_not_come_back() -> None:
    """Back well inside the band there is nothing to warn of."""
    cues = [
        _cue(1, "temperature_nearing_high", "mid"),
        _cue(3, "temperature_high", "mid"),
        _cue(4, "temperature_nearing_high", "mid", False),
        _cue(5, "temperature_high", "mid", False),
    ]
    assert gather(CausesState(), cues)[1][-1].alarm == "temperature_high"


def test_other_alarms_pass_untouched() -> None:
    """Two broken sensors are two things to mend."""
    cues = [_cue(1, "sensor_broken", "top"), _cue(2, "sensor_broken", "mid")]
    assert gather(CausesState(), cues)[1] == cues


EVENTS = st.lists(
    st.tuples(
        st.sampled_from(["temperature_high", "temperature_nearing_high", "temperature_low", "gradient"]),
        st.sampled_from(SENSORS),
        st.booleans(),
    ),
    max_size=30,
)


@given(EVENTS, st.data())
def test_families_balance_and_do_not_depend_on_cuts(
    events: list[tuple[str, str, bool]], data: st.DataObject
) -> None:
    """What is raised is let go before it is raised again, and where the cues were cut is all the same."""
    cues = [_cue(i, a, s, on) for i, (a, s, on) in enumerate(events)]
    at = data.draw(st.integers(0, len(cues)))
    whole_state, whole = gather(CausesState(), cues)
    half, first = gather(CausesState(), cues[:at])
    rest_state, second = gather(half, cues[at:])
    assert first + second == whole
    assert rest_state == whole_state
    up: dict[str, bool] = {}
    for c in whole:
        if c.alarm.startswith("temperature"):
            assert up.get(c.alarm, False) is not c.active
            up[c.alarm] = c.active
    for alarm in ("temperature_high", "temperature_low"):
        stands = {s: on for a, s, on in events if a == alarm}
        assert up.get(alarm, False) == any(stands.values())
