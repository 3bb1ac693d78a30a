"""Lab time: intervals from the boot clock, whatever happens to UTC."""

from __future__ import annotations

import itertools

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from daq.core.timebase import TimeState, hours, place, place_stamp, seconds_since
from daq.records import ScansTaken, Stamp

HOUR = 36_000_000


def _scans(utc: list[int], boot: list[int], boot_id: str = "a") -> ScansTaken:
    n = len(utc)
    return ScansTaken(
        "H1",
        ("x",),
        boot_id,
        np.array(utc, np.int64),
        np.array(boot, np.int64),
        np.zeros((n, 1)),
        np.zeros((n, 1), np.uint8),
    )


def test_a_clock_set_back_by_an_hour_does_not_move_lab_time() -> None:
    """A step of -1 h inside a 1 h window flips the sign of a fitted rate when UTC is used."""
    s, first = place(TimeState(), _scans([1000 * HOUR], [0]))
    s, second = place(s, _scans([999 * HOUR], [HOUR]))
    assert int(second[0] - first[0]) == HOUR
    assert s.utc_lead == -2 * HOUR


def test_a_reboot_is_bridged_by_utc() -> None:
    """The boot clock starts anew; only UTC knows how long the machine was away."""
    s, first = place(TimeState(), _scans([1000 * HOUR], [50 * HOUR]))
    _, second = place(s, _scans([1003 * HOUR], [17], "b"))
    assert int(second[0] - first[0]) == 3 * HOUR


def test_a_reboot_into_1970_does_not_run_time_backwards() -> None:
    """A machine without a battery boots in 1970: then nothing is known, and zero is the honest least."""
    s, first = place(TimeState(), _scans([1000 * HOUR], [50 * HOUR]))
    _, second = place(s, _scans([0], [17], "b"))
    assert int(second[0]) == int(first[0])


@given(st.lists(st.integers(0, 10**9), min_size=2, max_size=20), st.data())
def test_lab_time_does_not_depend_on_cuts(ticks: list[int], data: st.DataObject) -> None:
    """Recordings hold slightly unordered stamps; a cut between them may change nothing."""
    at = data.draw(st.integers(1, len(ticks) - 1))
    whole_state, whole = place(TimeState(), _scans(ticks, ticks, ""))
    s, head = place(TimeState(), _scans(ticks[:at], ticks[:at], ""))
    s, tail = place(s, _scans(ticks[at:], ticks[at:], ""))
    assert np.concatenate([head, tail]).tolist() == whole.tolist()
    assert s == whole_state


def test_stamps_and_scans_share_one_time() -> None:
    """An entry made between two scans lies between them."""
    s, first = place(TimeState(), _scans([7 * HOUR], [HOUR]))
    _, tick = place_stamp(s, Stamp(8 * HOUR, 2 * HOUR, "a"))
    assert tick - int(first[0]) == HOUR


def test_before_full_load_there_is_no_test_time() -> None:
    """Minus one second says 'not yet under load' to every later step; hours are unknown."""
    assert seconds_since(np.array([5, 6]), None).tolist() == [-1.0, -1.0]
    assert hours(5, None) is None
    assert hours(HOUR + 5, 5) == 1.0


def _booted_in_the_past() -> TimeState:
    """Ten hours recorded, eight hours away, then a boot whose clock says 1970."""
    s, _ = place(TimeState(), _scans([1000 * HOUR, 1010 * HOUR], [0, 10 * HOUR]))
    s, tick = place(s, _scans([0], [0], "b"))
    assert int(tick[0]) == 1010 * HOUR
    return s


def test_hours_lost_to_a_boot_in_the_past_are_made_good_when_utc_is_set() -> None:
    """The test would else be short of the outage for good."""
    s, tick = place(_booted_in_the_past(), _scans([HOUR, 1020 * HOUR], [HOUR, 2 * HOUR], "b"))
    assert (tick - 1010 * HOUR).tolist() == [HOUR, 10 * HOUR]
    s, tick = place(s, _scans([1021 * HOUR, 1200 * HOUR], [3 * HOUR, 4 * HOUR], "b"))
    assert (tick - 1010 * HOUR).tolist() == [11 * HOUR, 12 * HOUR]  # once: a later step bends nothing


def test_a_second_boot_in_the_past_owes_what_the_first_did() -> None:
    """A machine without a battery and without a network may boot many times."""
    s, _ = place(_booted_in_the_past(), _scans([2 * HOUR], [2 * HOUR], "b"))
    s, _ = place(s, _scans([0, HOUR], [0, HOUR], "c"))
    s, tick = place_stamp(s, Stamp(1030 * HOUR, 2 * HOUR, "c"))
    assert tick == 1030 * HOUR
    assert s.owed is None


@given(st.integers(0, 12), st.lists(st.integers(0, 12), max_size=4))
def test_what_is_owed_does_not_depend_on_cuts(set_at: int, cuts: list[int]) -> None:
    """Live every scan comes alone."""
    boot = [k * HOUR for k in range(1, 13)]
    utc = [t + (1018 * HOUR if k >= set_at else 0) for k, t in enumerate(boot)]
    whole_state, whole = place(_booted_in_the_past(), _scans(utc, boot, "b"))
    s, pieces = _booted_in_the_past(), []
    edges = sorted({0, 12, *cuts})
    for a, b in itertools.pairwise(edges):
        s, tick = place(s, _scans(utc[a:b], boot[a:b], "b"))
        pieces += tick.tolist()
    assert pieces == whole.tolist()
    assert s == whole_state
