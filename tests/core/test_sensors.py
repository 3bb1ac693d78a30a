"""Broken, stuck, used-up and disagreeing sensors; and the healthy ones that must be left in peace."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.core import watch
from daq.core.block import Cue
from daq.core.rules import ChannelRules, Limits, Role
from daq.records import FloatArray, Quality

N = 3000


def cues(
    columns: dict[str, FloatArray], every_s: float = 30.0, **more: Any
) -> list[tuple[str, str, bool, int]]:
    rules = more.pop("rules", None) or rules_for(list(columns), Limits(milestones=()))
    block = block_of(rules, columns, every_s, **more)
    items = watch.watch(watch.begin(rules), rules, block, stage="secondary")[1]
    return [(i.alarm, i.subject, i.active, i.scan) for i in items if isinstance(i, Cue)]


def quiet(seed: int = 0) -> dict[str, FloatArray]:
    rng = np.random.default_rng(seed)
    x = 1e-7 * np.arange(N)
    columns = {side: np.round(x + 1e-5 * rng.normal(size=N), 6) for side in ("a", "b")}
    columns["mid"] = np.round(600.0 + 0.2 * rng.normal(size=N), 1)
    return columns


def test_healthy_sensors_are_left_in_peace() -> None:
    """Thirty hours of noise, counts and slow creep."""
    assert cues(quiet()) == []


def test_an_open_circuit_is_told_within_three_scans_and_a_minute() -> None:
    """The instrument says why, so there is little to wait for; three good scans end it."""
    columns = quiet()
    columns["mid"][1000:1200] = np.nan
    assert cues(columns, why_bad=Quality.BAD_OPEN_CIRCUIT) == [
        ("sensor_broken", "mid", True, 1002),
        ("sensor_broken", "mid", False, 1202),
    ]


def test_a_single_bad_reading_is_nothing() -> None:
    """One or two in a row happen to every instrument."""
    columns = quiet()
    columns["mid"][[100, 200, 201, 1500]] = np.nan
    assert cues(columns, why_bad=Quality.BAD_OPEN_CIRCUIT) == []


def test_a_channel_read_less_often_is_not_broken() -> None:
    """A recording may hold a channel every fortieth row; missing thrice as long as ever is another thing."""
    columns = quiet()
    sparse = np.full(N, np.nan)
    sparse[::40] = 600.0
    assert cues({**columns, "mid": sparse}) == []
    sparse[1201:] = np.nan
    (found,) = cues({**columns, "mid": sparse})
    assert found[:3] == ("sensor_broken", "mid", True)
    assert 1300 < found[3] < 1340


def test_a_lost_link_breaks_no_sensor() -> None:
    """The link has its own alarm; one cause, one alarm."""
    columns = quiet()
    for x in columns.values():
        x[1000:1500] = np.nan
    assert cues(columns, why_bad=Quality.BAD_LINK) == []
    assert cues(columns, why_bad=Quality.BAD_MISSING) == []


@pytest.mark.parametrize("name", ["a", "mid"])
def test_a_frozen_reading_is_told(name: str) -> None:
    """An amplifier that hangs repeats its last number with great precision."""
    columns = quiet()
    columns[name][2000:2400] = columns[name][2000]
    found = [c for c in cues(columns) if c[0] == "sensor_stuck"]
    assert [(c[1], c[2]) for c in found] == [(name, True), (name, False)]
    assert 2050 <= found[0][3] <= 2110
    assert found[1][3] == 2400


def test_counts_and_a_slow_rate_are_not_a_stuck_sensor() -> None:
    """Noise-free counts of 36 microstrain while the rate falls as one over time: runs grow with the test."""
    t = np.arange(60_000) + 30.0
    x = np.round(3e-3 * np.log(t / 30.0) / 36e-6) * 36e-6
    assert [c for c in cues({"a": x, "mid": np.full(t.size, 600.0)}) if c[0] == "sensor_stuck"] == []


def test_a_burst_of_fast_scans_is_not_a_stuck_sensor() -> None:
    """At one scan a second a count may repeat a thousand times; it took no longer than before."""
    rng = np.random.default_rng(2)
    slow = np.arange(1000) * 300.0
    burst = slow[-1] + 1.0 + np.arange(900)
    t_s = np.concatenate((slow, burst))
    true = 1e-8 * t_s
    x = np.round((true + 3e-6 * rng.normal(size=t_s.size)) / 20e-6) * 20e-6
    x[1000:] = x[999]
    assert [
        c for c in cues({"a": x, "mid": np.full(t_s.size, 600.0)}, t_s=t_s) if c[0] == "sensor_stuck"
    ] == []


def test_a_coarse_thermometer_under_good_control_is_not_stuck() -> None:
    """Whole degrees may stand still for days."""
    rng = np.random.default_rng(3)
    mid = np.round(600.45 + 0.03 * rng.normal(size=N))
    mid[:40] = 600.0 + np.arange(40) % 2
    assert [c for c in cues({"a": quiet()["a"], "mid": mid}) if c[0] == "sensor_stuck"] == []


def test_sides_that_drift_apart_are_told_and_a_slip_is_not() -> None:
    """Bending, a crack or a side that sticks goes on; a slip is over in one scan."""
    columns = quiet()
    n = 6000
    rng = np.random.default_rng(5)
    x = 2e-6 * np.arange(n)
    sides = {side: x + 1e-5 * rng.normal(size=n) for side in ("a", "b")}
    mid = {"mid": 600.0 + 0.2 * rng.normal(size=n)}
    assert [c for c in cues({**sides, **mid}) if c[0] == "sides_disagree"] == []
    slipped = sides["a"] + np.where(np.arange(n) > 2000, 0.003, 0.0)
    assert [c for c in cues({"a": slipped, "b": sides["b"], **mid}) if c[0] == "sides_disagree"] == []
    sticking = np.where(np.arange(n) > 2000, sides["a"][2000] + 1e-5 * rng.normal(size=n), sides["a"])
    found = [c for c in cues({"a": sticking, "b": sides["b"], **mid}) if c[0] == "sides_disagree"]
    assert [c[2] for c in found] == [True]
    assert 2000 < found[0][3] < 2700
    assert columns.keys() == {"a", "b", "mid"}


def test_ordinary_bending_is_no_disagreement() -> None:
    """Sides that see 85 and 115 % of the strain are common (ASTM E139 permits 10 % bending)."""
    rng = np.random.default_rng(6)
    x = 2e-6 * np.arange(6000)
    sides = {"a": 1.15 * x + 1e-5 * rng.normal(size=6000), "b": 0.85 * x + 1e-5 * rng.normal(size=6000)}
    assert cues({**sides, "mid": 600.0 + 0.2 * rng.normal(size=6000)}) == []


def test_travel_that_is_nearly_used_is_told() -> None:
    """Nine tenths of what the rules give, in millimetres or through the reference length of 25 mm."""
    base = rules_for(["a", "mid"], Limits(milestones=()))
    strain = ChannelRules("a", Role.STRAIN, "A", travel_mm=5.0)
    rules = replace(base, channels=(strain, base.channels[1]))
    x = 0.01 + 1e-4 * np.arange(N)
    found = cues({"a": x, "mid": quiet()["mid"]}, rules=rules)
    assert found == [("travel_nearly_used", "a", True, 1801)]
    extension = ChannelRules("a", Role.EXTENSION, "A", travel_mm=5.0)
    rules = replace(base, channels=(extension, base.channels[1]))
    found = cues({"a": 25.0 * x, "mid": quiet()["mid"]}, rules=rules)
    assert found == [("travel_nearly_used", "a", True, 1801)]
