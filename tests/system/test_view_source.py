"""From a journal folder to a snapshot, with a real journal and with whatever a status may lack."""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.records import Finding
from daq.store.journal import Journal
from daq.store.rows import Batch
from daq.view.model import ViewError, places
from daq.view.source import JournalSource, row_of, snapshot

TICK = 1_715_656_360 * 10_000
FULL: dict[str, Any] = {
    "at_tick": TICK, "test_h": 326.1, "stage": "tertiary", "stage_since_h": 313.7,
    "specimen": "S-1", "strain": 0.0183,
    "rate_per_h": 2.1e-4, "rate_low_per_h": 2.0e-4, "rate_high_per_h": 2.2e-4, "minimum_rate_per_h": 1e-4,
    "temperature_c": 980.3, "set_point_c": 980.0, "below_k": 3.0, "above_k": 3.0, "quarantined": None,
    "alarms": [{"alarm": "tertiary_detected", "subject": "", "state": "unacknowledged", "priority": "medium",
                "message": "tertiary since 308 h", "since_tick": TICK, "can_wait_until_tick": TICK + 10}],
    "curve": {"t_h": [1.0, 3.0, 2.0], "strain": [0.1, None, 0.2], "rate_per_h": [3.0, 2.0, 1.0]},
    "forecast": {"rupture": {"low_h": 351.0, "median_h": 358.0, "high_h": 365.0, "coverage": 0.9}},
}  # fmt: skip
HOST = {"site": "hall-a", "now_tick": TICK, "speed": 3600.0, "emulated": True, "alarms": [], "version": "1"}


@pytest.fixture
def journal(tmp_path: Path) -> Iterator[Journal]:
    with Journal.open(tmp_path, site="hall-a") as opened:
        opened.commit(Batch(status={"": HOST, "H7": FULL, "H8/2": {}}))
        yield opened


def stage(
    number: int, name: str, onset_h: float, withdraws: str | None = None, specimen: str = "S-1"
) -> Finding:
    """Return a stage finding."""
    fields = {"stage": name, "from": "", "onset_h": onset_h, "withdraws": withdraws, "why": "because"}
    return Finding(f"H7|{specimen}|stage|{name}|{number}", TICK + number, 320.0, "H7", "stage", fields)


def test_a_status_becomes_a_snapshot(journal: Journal, tmp_path: Path) -> None:
    """What the daemon committed is what the view shows."""
    shot = JournalSource(tmp_path).read(None)
    assert (shot.site, shot.now_tick, shot.speed, shot.emulated) == ("hall-a", TICK, 3600.0, True)
    test = next(t for t in shot.tests if t.name == "H7")
    assert (test.stage, test.specimen, test.test_h, test.temperature_c) == ("tertiary", "S-1", 326.1, 980.3)
    assert test.alarms[0].unacknowledged
    assert test.expected[0].of == "rupture"
    assert test.can_wait_until_tick == TICK + int((351.0 - 326.1) * 3600 * 10_000)
    assert test.curve is not None
    np.testing.assert_array_equal(test.curve.t_h, [1.0, 2.0, 3.0])
    np.testing.assert_array_equal(test.curve.strain, [0.1, 0.2, np.nan])


def test_what_a_status_lacks_is_unknown_and_no_error(journal: Journal, tmp_path: Path) -> None:
    """A daemon that has just begun, or an older one, says less."""
    shot = JournalSource(tmp_path).read(None)
    bare = next(t for t in shot.tests if t.name == "H8/2")
    assert (bare.stage, bare.strain, bare.curve, bare.alarms, bare.expected) == ("", None, None, (), ())
    assert [p.name for p in places(shot)] == ["H7", "H8/2"]


@pytest.mark.parametrize("key", [k for k in FULL if k != "at_tick"])
@pytest.mark.parametrize("value", [None, "x", -1, True, [], {}, [1], {"a": 1}, float("inf")])
def test_a_value_of_the_wrong_kind_is_unknown(key: str, value: Any) -> None:
    """The view of sixty-three frames must not fail for what one of them says."""
    row = row_of("H7", FULL | {key: value})
    assert row.name == "H7"
    assert all(isinstance(t, float) for t, _ in row.marks)


@pytest.mark.parametrize("told", [{}, {"": 3}, {"": {"now_tick": "x"}, "H1": 4}, {"H1": {"at_tick": 5}}])
def test_a_status_without_a_host_is_no_error(told: dict[str, Any]) -> None:
    """The first commit of a new journal has none."""
    assert snapshot(told, None).now_tick in (0, 5)


@pytest.mark.parametrize(
    "forecast",
    [
        FULL["forecast"],
        [{"of": "rupture", **FULL["forecast"]["rupture"]}],
        {"of": "rupture", **FULL["forecast"]["rupture"]},
    ],
)
def test_forecasts_are_taken_in_every_form_they_are_told_in(forecast: Any) -> None:
    """A mapping by event, a list, or a single one."""
    (expected,) = row_of("H7", FULL | {"forecast": forecast}).expected
    assert (expected.of, expected.low_h, expected.high_h) == ("rupture", 351.0, 365.0)


def test_no_forecast_says_why() -> None:
    """ "None yet, because" is an answer, and the one about rupture is wanted most."""
    forecast = {
        "strain_1_percent": {"none_because": "it is past"},
        "rupture": {"none_because": "no minimum yet"},
    }
    row = row_of("H7", FULL | {"forecast": forecast})
    assert row.next_event == "rupture: none yet, because no minimum yet"
    assert row.can_wait_until_tick is None


def test_what_goes_by_two_names_is_found_by_either() -> None:
    """The core says ``since_h`` and ``rise_ratio`` where a topic says more."""
    bare = {k: v for k, v in FULL.items() if k not in ("stage_since_h", "forecast")}
    row = row_of("H7", bare | {"since_h": 300.0, "rise_ratio": 2.1, "next_milestone": 0.02})
    assert (row.stage_since_h, row.ratio_to_minimum) == (300.0, 2.1)
    assert row.next_event == "strain 2 % is the next milestone"


def test_a_rupture_that_may_come_any_moment_is_placed_by_its_median() -> None:
    """Past the early edge of the forecast a test must not fall to the end of the list."""
    row = row_of("H7", FULL | {"test_h": 355.0})
    assert row.can_wait_until_tick == TICK + int(3.0 * 3600 * 10_000)
    assert row_of("H7", FULL | {"test_h": 400.0}).can_wait_until_tick == TICK
    assert row_of("H7", FULL | {"stage": "ruptured"}).can_wait_until_tick is None


def test_marks_and_events_follow_the_findings(journal: Journal, tmp_path: Path) -> None:
    """A withdrawn stage leaves the curve; what was found is listed, newest first."""
    source = JournalSource(tmp_path)
    early = stage(1, "tertiary", 100.0)
    journal.commit(Batch(findings=(stage(1, "secondary", 71.0), early)))
    test = source.read("H7").tests[0]
    assert test.marks == ((71.0, "secondary"), (100.0, "tertiary"))
    assert "stage tertiary, since 100.00 h" in test.events[0].text
    journal.commit(
        Batch(findings=(stage(2, "secondary", 71.0, withdraws=early.id), stage(2, "tertiary", 308.0)))
    )
    test = source.read("H7").tests[0]
    assert test.marks == ((71.0, "secondary"), (308.0, "tertiary"))
    assert [e.at_tick - TICK for e in test.events] == [2, 2, 1, 1]
    assert source.read(None).tests[0].marks == ((313.7, "tertiary"),)


def test_another_specimen_in_the_same_place_begins_anew(journal: Journal, tmp_path: Path) -> None:
    """The marks of the last specimen are not those of this one."""
    journal.commit(Batch(findings=(stage(1, "secondary", 71.0), stage(1, "primary", 0.5, specimen="S-2"))))
    test = JournalSource(tmp_path).read("H7").tests[0]
    assert test.marks == ((0.5, "primary"),)
    assert len(test.events) == 1


def test_the_age_of_the_record_is_that_of_its_last_change(journal: Journal, tmp_path: Path) -> None:
    """A daemon that stands still must show, at whatever speed its bench runs."""
    old = time.time() - 900
    for file in tmp_path.glob("*"):
        if file.is_file():
            os.utime(file, (old, old))
    source = JournalSource(tmp_path)
    assert source.read(None).commit_age_s == pytest.approx(900, abs=30)
    assert source.read(None).silent
    journal.commit(Batch(status={"": HOST | {"now_tick": TICK + 1}, "H7": FULL}))
    assert source.read(None).commit_age_s == pytest.approx(0, abs=5)


def test_a_folder_without_a_journal_is_named(tmp_path: Path) -> None:
    """A view that is started before its daemon says what it waits for, and goes on when it is there."""
    source = JournalSource(tmp_path)
    with pytest.raises(ViewError, match=r"the journal cannot be read"):
        source.read(None)
    with Journal.open(tmp_path, site="hall-a") as opened:
        opened.commit(Batch(status={"": HOST, "H7": FULL}))
        assert source.read(None).site == "hall-a"
    source.close()


def test_between_reads_nothing_is_held_open(journal: Journal, tmp_path: Path) -> None:
    """A viewer left open for a month must not keep the journal's log from being folded in."""
    source = JournalSource(tmp_path)
    for n in range(3):
        source.read("H7")
        journal.commit(Batch(status={"": HOST | {"now_tick": TICK + n}}))
        assert journal.checkpoint()
