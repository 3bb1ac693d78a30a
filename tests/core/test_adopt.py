"""New rules in the middle of a test: it goes on, with what it has learnt."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from daq.codec import decode_state, encode_state
from daq.core import chain
from daq.core.rules import ChannelRules, Limits, Role, Specimen, TestRules, rules_to_json
from daq.records import Finding, Quality, RulesAdopted, ScansTaken, Stamp

PERIOD_S = 60.0
OLD = TestRules(
    "s", "H1", "H1", Specimen("S-1", "x", 25.0, 6.0),
    (
        ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B"),
        ChannelRules("top", Role.SPECIMEN_TEMPERATURE), ChannelRules("mid", Role.SPECIMEN_TEMPERATURE),
    ),
    stress_pa=2e8, set_point_c=980.0, below_k=3.0, above_k=3.0, limits=Limits(milestones=(0.001, 0.01)),
)  # fmt: skip
NEW_CHANNEL = replace(OLD, channels=(ChannelRules("hall", Role.OTHER), *OLD.channels))
NEW_SENSOR = replace(
    OLD, channels=(*OLD.channels[:2], ChannelRules("bot", Role.SPECIMEN_TEMPERATURE), *OLD.channels[2:])
)
WITHOUT_TOP = replace(OLD, channels=(*OLD.channels[:2], OLD.channels[3]))
ONE_SIDED = replace(OLD, channels=OLD.channels[:1] + OLD.channels[2:])
TOP_IS_ROOM = replace(
    OLD, channels=(*OLD.channels[:2], ChannelRules("top", Role.ROOM_TEMPERATURE), OLD.channels[3])
)


@cache
def _columns(n: int = 900) -> dict[str, np.ndarray]:
    dice = np.random.default_rng(4)
    t = np.arange(n) * PERIOD_S
    strain = 2e-3 * (1.0 - np.exp(-t / 9000.0)) + 1e-7 * t
    columns = {"left": strain + dice.normal(0, 4e-6, n), "right": strain + dice.normal(0, 4e-6, n)}
    columns |= {c: 980.0 + dice.normal(0, 0.1, n) for c in ("top", "mid", "bot")}
    return columns | {"hall": dice.normal(22.0, 0.1, n), "room": dice.normal(22.0, 0.1, n)}


def _scans(rules: TestRules, start: int, stop: int, *, top_c: float = 0.0) -> ScansTaken:
    names = tuple(c.name for c in rules.channels)
    values = np.column_stack([_columns()[c][start:stop] + (top_c if c == "top" else 0.0) for c in names])
    tick = np.rint(np.arange(start, stop) * PERIOD_S * 1e4).astype(np.int64)
    return ScansTaken("H1", names, "", tick, tick, values, np.zeros(values.shape, np.uint8))


def _adopted(rules: TestRules, scan: int) -> RulesAdopted:
    tick = round(scan * PERIOD_S * 1e4)
    return RulesAdopted(Stamp(tick, tick, ""), "H1", "H1", rules_to_json(rules))


@cache
def _through(rules: TestRules, *, at: int = 450, stop: int = 900) -> tuple[chain.TestState, list[Finding]]:
    state = chain.begin(_adopted(OLD, 0))
    found: list[Finding] = []
    for fact in (_scans(OLD, 0, at), _adopted(rules, at), _scans(rules, at, stop)):
        state, said = chain.step(state, fact)
        found += said
    return state, found


def _of_strain(found: list[Finding]) -> list[str]:
    return [f.id for f in found if f.kind in ("stage", "milestone", "minimum_rate")]


@pytest.mark.parametrize("new", [NEW_CHANNEL, NEW_SENSOR, WITHOUT_TOP, TOP_IS_ROOM, ONE_SIDED])
def test_a_test_goes_on_when_channels_come_go_or_change_their_meaning(new: TestRules) -> None:
    """Any such change once quarantined the test for good."""
    state, found = _through(new)
    assert len(state.watch.sensors.holes) == len(new.channels)
    assert not [f for f in found if f.kind == "alarm" and f.fields["alarm"] == "sensor_broken"]
    assert decode_state(encode_state(state)) is not None
    assert chain.summary(state).fields
    if new is not ONE_SIDED:  # a lost side is a step that is neutralised, and may move what follows it
        assert _of_strain(found) == _of_strain(_through(OLD)[1])


def test_what_is_counted_of_a_channel_stays_with_its_name() -> None:
    """The table of results must not mix two channels."""
    state, _ = _through(NEW_CHANNEL)
    good = dict(zip([c.name for c in NEW_CHANNEL.channels], state.results.tallies.good, strict=True))
    assert good["hall"] == 450
    assert good["left"] == 900


def test_alarms_of_a_channel_that_has_left_end_with_it() -> None:
    """Nothing would ever end them: no reading of it comes any more."""
    state = chain.begin(_adopted(OLD, 0))
    state, _ = chain.step(state, _scans(OLD, 0, 400))
    dead = _scans(OLD, 400, 430)
    dead.values[:, 2] = np.nan
    dead.quality[:, 2] = int(Quality.BAD_OPEN_CIRCUIT)
    state, said = chain.step(state, dead)
    assert [f.fields["subject"] for f in said if f.kind == "alarm" and "sensor_broken" in f.id] == ["top"]
    state, said = chain.step(state, _adopted(WITHOUT_TOP, 430))
    state, more = chain.step(state, _scans(WITHOUT_TOP, 430, 500))
    states = [f.fields["state"] for f in (*said, *more) if f.kind == "alarm" and "sensor_broken" in f.id]
    assert states == ["returned_unacknowledged"]


def test_limits_that_were_moved_hold_and_milestones_are_told_once() -> None:
    """A new strain limit was ignored for the rest of the test."""
    new = replace(OLD, limits=Limits(milestones=(0.001, 0.0015, 0.005, 0.01), strain=0.006))
    _, found = _through(new)
    milestones = [f.fields["strain"] for f in found if f.kind == "milestone"]
    assert milestones == [0.001, 0.005]
    assert any(f.kind == "alarm" and f.fields["alarm"] == "strain_limit" for f in found)
