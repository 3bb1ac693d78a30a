"""The follower as a whole: cuts, prefixes, canonical state, stages on constructed curves."""

from __future__ import annotations

import dataclasses
import itertools
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from daq.codec import decode_state, encode_state
from daq.core import follow
from daq.core.block import Block, Conclusion
from daq.core.rules import ChannelRules, Role, Specimen, TestRules

RULES = TestRules(
    "hall", "H1", "H1", Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")),
    set_point_c=600.0, activation_energy_j_per_mol=300e3,
)  # fmt: skip


def block(t_h: np.ndarray, a: np.ndarray, b: np.ndarray | None = None, **other: np.ndarray) -> Block:
    """Return a block of converted scans from hours and strains."""
    n = t_h.size
    none = np.full(n, np.nan)
    values = np.zeros((n, 0))
    return Block(
        0, np.round(t_h * 3.6e7).astype(np.int64), t_h * 3600.0, values, values.astype(np.uint8),
        a, none if b is None else b, other.get("temp", none), other.get("room", none), none,
    )  # fmt: skip


def part(b: Block, lo: int, hi: int) -> Block:
    s = slice(lo, hi)
    return Block(
        b.first + lo, b.tick[s], b.t_s[s], b.values[s], b.quality[s], b.strain_a[s], b.strain_b[s],
        b.specimen_c[s], b.room_c[s], b.output[s],
    )  # fmt: skip


def run(b: Block, cuts: list[int], rules: TestRules = RULES) -> tuple[follow.FollowState, list[Conclusion]]:
    s, said = follow.begin(rules), []
    edges = [0, *sorted(cuts), len(b)]
    for lo, hi in itertools.pairwise(edges):
        s, some = follow.follow(s, rules, part(b, lo, hi))
        said += some
    return s, said


def creep(t: np.ndarray, life: float, rise_from: float = 0.4) -> np.ndarray:
    """Primary, plateau and a rise from a share of life on."""
    x = t / life
    late = np.maximum(x - rise_from, 0.0)
    return 0.002 * (1 - np.exp(-x / 0.05)) + 0.006 * x + 0.06 * late**2.5


def eventful(n: int, seed: int) -> Block:
    """A turning test with spikes, a slip, a gap, equal and unordered stamps, missing readings."""
    rng = np.random.default_rng(seed)
    t = np.sort(rng.uniform(0.0, 400.0, n))
    t[n // 3 :] += 20.0
    t[50] = t[51]
    t[60], t[61] = t[61], t[60]
    e = creep(t, 500.0)
    a = e + rng.normal(0.0, 1e-5, n)
    b = 1.02 * e + rng.normal(0.0, 1e-5, n)
    a[n // 2 :] += 4e-4
    a[n // 4] += 3e-3
    b[n // 5 : n // 5 + 4] = np.nan
    room = 20.0 + np.sin(2 * np.pi * t / 24.0)
    temp = 600.0 + rng.normal(0.0, 0.3, n)
    return block(t, a, b, room=room, temp=temp)


EVENTFUL = eventful(700, 3)
WHOLE = run(EVENTFUL, [])


def test_the_eventful_test_has_something_to_say() -> None:
    """Otherwise the tests of cuts below would show nothing."""
    kinds = {c.kind for c in WHOLE[1]}
    assert {"stage", "step", "minimum_rate", "onset"} <= kinds
    assert any(c.key == "tertiary" for c in WHOLE[1])


@settings(max_examples=5, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.lists(st.integers(0, 700), max_size=12))
def test_cuts_change_nothing_to_the_last_bit(cuts: list[int]) -> None:
    """A replay takes thousands of scans at once, the live house one."""
    s, said = run(EVENTFUL, cuts)
    assert said == WHOLE[1]
    assert encode_state(s) == encode_state(WHOLE[0])


def test_one_scan_at_a_time_changes_nothing() -> None:
    """The live case, and a state that goes through its bytes on the way."""
    s, said = follow.begin(RULES), []
    for i in range(len(EVENTFUL)):
        s, some = follow.follow(s, RULES, part(EVENTFUL, i, i + 1))
        said += some
        if i % 97 == 0:
            s = decode_state(encode_state(s))
    assert said == WHOLE[1]
    assert encode_state(s) == encode_state(WHOLE[0])


def test_findings_of_the_beginning_are_a_prefix() -> None:
    """Nothing may be said that only later scans could have told."""
    for n in (100, 333, 500, 650):
        _, said = run(part(EVENTFUL, 0, n), [])
        assert said == WHOLE[1][: len(said)]
        assert all(c.scan < n for c in said)


@pytest.mark.parametrize("n", [200, 3000])
def test_tertiary_is_said_between_its_beginning_and_the_offset(n: int) -> None:
    """The job, for a short and a long record: onset at 400 h of 1000 h, 0.2 % offset at 642 h."""
    t = np.linspace(0.0, 900.0, n)
    rng = np.random.default_rng(5)
    _, said = run(block(t, creep(t, 1000.0) + rng.normal(0.0, 1e-5, n)), [])
    when = [t[c.scan] for c in said if c.key == "tertiary"]
    assert len(when) == 1
    assert 400.0 < when[0] < 642.0


@pytest.mark.parametrize("seed", [1, 2])
def test_a_plateau_with_drift_is_not_tertiary(seed: int) -> None:
    """Drift of hours of memory bends the curve up somewhere in every test."""
    rng = np.random.default_rng(seed)
    n = 1500
    t = np.linspace(0.0, 500.0, n)
    drift = np.zeros(n)
    keep = np.exp(-(t[1] - t[0]) / 8.0)
    for i in range(1, n):
        drift[i] = keep * drift[i - 1] + rng.normal(0.0, 2e-5 * np.sqrt(1 - keep**2))
    e = creep(t, 500.0, 2.0) + drift + rng.normal(0.0, 1e-5, n)
    _, said = run(block(t, e), [])
    assert not [c for c in said if c.key == "tertiary"]


def test_the_end_gives_the_least_rate_and_the_onsets_once_more() -> None:
    """A test that ends has a result table."""
    s, _ = WHOLE
    last = len(EVENTFUL) - 1
    s, said = follow.tell(s, RULES, "ruptured", int(EVENTFUL.tick[last]), float(EVENTFUL.t_s[last]), last)
    assert [c.kind for c in said][-5:] == ["minimum_rate", "onset", "onset", "onset", "stage"]
    assert follow.stage_of(s) == "ruptured"
    least: dict[str, Any] = dict(next(c.fields for c in said if c.kind == "minimum_rate"))
    assert least["low_per_h"] < 1.01 * 0.006 / 500.0 < least["high_per_h"]


def test_status_holds_plain_values() -> None:
    """Screens and MQTT take JSON."""
    for value in follow.status(WHOLE[0], RULES).values():
        assert value is None or isinstance(value, str | float | int)


def test_a_constant_added_to_strain_changes_no_time() -> None:
    """The zero of an extensometer is arbitrary."""
    moved = block(
        EVENTFUL.t_s / 3600.0, EVENTFUL.strain_a + 0.25, EVENTFUL.strain_b + 0.25,
        room=EVENTFUL.room_c, temp=EVENTFUL.specimen_c,
    )  # fmt: skip
    _, said = run(moved, [])
    assert [(c.scan, c.kind, c.key) for c in said] == [(c.scan, c.kind, c.key) for c in WHOLE[1]]


def test_swapping_the_sides_changes_no_time() -> None:
    """A and B are names."""
    swapped = block(
        EVENTFUL.t_s / 3600.0,
        EVENTFUL.strain_b,
        EVENTFUL.strain_a,
        room=EVENTFUL.room_c,
        temp=EVENTFUL.specimen_c,
    )
    _, said = run(swapped, [])
    assert [(c.scan, c.kind) for c in said] == [(c.scan, c.kind) for c in WHOLE[1]]


def test_a_furnace_that_drifts_by_three_kelvin_is_no_stage() -> None:
    """+3 K at 600 C with Q = 300 kJ/mol is a rate x 1.15199 (CHECKVALUES 7.1), and 17.3 microstrain per K
    apparent."""
    t = np.linspace(0.0, 800.0, 1600)
    temp = 600.0 + 3.0 * np.clip((t - 400.0) / 200.0, 0.0, 1.0)
    factor = np.exp(300e3 / 8.314462618 * (1 / 873.15 - 1 / (temp + 273.15)))
    assert factor[-1] == pytest.approx(1.15199, abs=1e-5)
    own = np.concatenate(([0.0], np.cumsum(np.diff(t) * 0.5 * (factor[1:] + factor[:-1]))))
    rng = np.random.default_rng(2)
    e = creep(own, 2000.0, 2.0) + 17.3e-6 * (temp - 600.0) + rng.normal(0.0, 1e-5, t.size)
    _, said = run(block(t, e, temp=temp + rng.normal(0.0, 0.1, t.size)), [])
    assert {c.key for c in said if c.kind == "stage"} <= {"primary", "secondary"}


@pytest.mark.parametrize("expected", [None, 1000.0])
def test_inverse_primary_is_a_stage_of_its_own(expected: float | None) -> None:
    """The rate rises 1.7-fold within the first twelfth, then falls to a plateau and stays there."""
    t = np.linspace(0.0, 1000.0, 2000)
    x = t / 1000.0
    rate = 1.0 + 0.7 * np.where(x < 0.08, x / 0.08, np.exp(-(((x - 0.08) / 0.1) ** 2)))
    e = np.concatenate(([0.0], np.cumsum(np.diff(t) * 0.5 * (rate[1:] + rate[:-1])))) * 3e-5
    rules = dataclasses.replace(RULES, expected_rupture_h=expected)
    _, said = run(block(t, e + np.random.default_rng(1).normal(0.0, 1e-5, t.size)), [], rules)
    stages = [c.key for c in said if c.kind == "stage"]
    assert "inverse primary" in stages
    assert "tertiary" not in stages


def test_a_slip_of_one_side_is_taken_out_and_named() -> None:
    """The raw record keeps it, the curve goes on."""
    t = np.linspace(0.0, 300.0, 900)
    rng = np.random.default_rng(3)
    e = creep(t, 1000.0)
    a, b = e + rng.normal(0.0, 1e-5, t.size), e + rng.normal(0.0, 1e-5, t.size)
    a[500:] -= 6e-4
    s, said = run(block(t, a, b), [])
    steps = [c.fields for c in said if c.kind == "step"]
    assert len(steps) == 1
    assert steps[0]["channels"] == ["left"]
    assert steps[0]["size"] == pytest.approx(-3e-4, abs=1e-5)
    assert steps[0]["time_h"] == pytest.approx(t[500], abs=0.5)
    assert follow.status(s, RULES)["strain"] == pytest.approx(e[-1], abs=2e-5)


def test_a_side_that_comes_and_goes_leaves_the_mean_where_it_is() -> None:
    """The half difference of the sides stands in for the missing one."""
    t = np.linspace(0.0, 300.0, 900)
    e = creep(t, 1000.0)
    b = e + 0.003
    b[400:460] = np.nan
    s, said = run(block(t, e + np.random.default_rng(0).normal(0, 1e-6, t.size), b), [])
    assert not [c for c in said if c.kind == "step"]
    assert follow.status(s, RULES)["strain"] == pytest.approx(e[-1] + 0.0015, abs=1e-5)


def test_a_stress_change_begins_a_new_segment() -> None:
    """Its own primary and its own least rate."""
    t = np.linspace(0.0, 300.0, 900)
    e = creep(t, 1000.0)
    b = block(t, e)
    s, _ = run(part(b, 0, 600), [])
    s, said = follow.tell(s, RULES, "stress_changed", int(b.tick[599]), float(b.t_s[599]), 599)
    assert [c.key for c in said if c.kind == "stage"] == ["primary"]
    assert follow.curve(s)[0].size == 0
    s, _ = follow.follow(s, RULES, part(b, 600, 900))
    assert follow.curve(s)[0].size > 20


def test_the_share_of_the_shrinking_section_is_told() -> None:
    """Under constant load the rate rises by exp(n x strain since the least rate) though the material does
    not change."""
    rules = dataclasses.replace(RULES, stress_exponent=5.0)
    t = np.linspace(0.0, 900.0, 1500)
    _, said = run(block(t, creep(t, 1000.0) + np.random.default_rng(1).normal(0, 1e-5, t.size)), [], rules)
    why = next(c.fields["why"] for c in said if c.key == "tertiary")
    assert "shrinking section alone explains" in why


@pytest.mark.parametrize(
    "case", ["one instant", "still", "no strain", "no noise", "one count", "backwards", "huge gap"]
)
def test_odd_records_are_survived(case: str) -> None:
    """Real records hold all of this; none may quarantine a test or bring a false alarm."""
    n = 400
    t = np.linspace(0.0, 100.0, n)
    e = creep(t, 1000.0)
    if case == "one instant":
        t = np.zeros(n)
    elif case == "still":
        e = np.full(n, 0.01)
    elif case == "no strain":
        e = np.full(n, np.nan)
    elif case == "one count":
        e = np.round(e / 4e-4) * 4e-4
    elif case == "backwards":
        t[100:140] = t[100:140][::-1].copy()
    elif case == "huge gap":
        t[200:] += 5000.0
    b = block(t, e)
    with np.errstate(all="raise", under="ignore"):
        s, said = run(b, [])
        s, last = follow.tell(s, RULES, "ended", int(b.tick[-1]), float(b.t_s[-1]), n - 1)
    assert not [c for c in said if c.key == "tertiary"]
    assert last[-1].key == "ended"
    encode_state(s)
