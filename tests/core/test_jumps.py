"""What made a jump: temperature and jerky creep stay in the record, slips are taken out."""

from __future__ import annotations

import math

import numpy as np
import pytest

from daq.core import follow, jumps, ladder
from daq.core.block import Block, Conclusion
from daq.core.rules import ChannelRules, Role, Specimen, TestRules

SD = 5e-6
RULES = TestRules(
    "hall", "H1", "H1", Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")), set_point_c=900.0,
)  # fmt: skip


def run(
    t_h: np.ndarray, a: np.ndarray, b: np.ndarray | None = None, temp: np.ndarray | None = None
) -> tuple[follow.FollowState, list[Conclusion]]:
    """Follow a record; return the state and the steps."""
    none = np.full(t_h.size, np.nan)
    values = np.zeros((t_h.size, 0))
    s, said = follow.follow(
        follow.begin(RULES), RULES,
        Block(
            0, np.round(t_h * 3.6e7).astype(np.int64), t_h * 3600.0, values, values.astype(np.uint8),
            a, none if b is None else b, none if temp is None else temp, none, none,
        ),
    )  # fmt: skip
    return s, [c for c in said if c.kind == "step"]


def excursion(sides: int = 2, per_k: float = 15e-6) -> tuple[np.ndarray, list[np.ndarray], np.ndarray]:
    """Return 150 h of slow creep of which 12 h are 8 K too hot, from one scan to the next."""
    rng = np.random.default_rng(5)
    t = np.linspace(0.0, 150.0, 300)
    hot = 8.0 * ((t > 100.0) & (t < 112.0))
    temp = np.round(900.0 + hot + rng.normal(0.0, 0.1, t.size), 1)
    return t, [1e-6 * t + per_k * hot + rng.normal(0.0, SD, t.size) for _ in range(sides)], temp


@pytest.mark.parametrize("sides", [1, 2])
def test_apparent_strain_of_a_hot_furnace_is_no_step(sides: int) -> None:
    """What comes with the temperature goes with it; without a thermocouple nobody could know."""
    t, strains, temp = excursion(sides)
    assert run(t, *strains, temp=temp)[1] == []
    assert len(run(t, *strains)[1]) == 2


def test_a_slip_of_one_side_in_the_heat_is_found_with_its_own_size() -> None:
    """The other side shows what the temperature did."""
    t, (a, b), temp = excursion()
    a = a + 3e-4 * (t > 100.0)
    s, steps = run(t, a, b, temp)
    assert [c.fields["channels"] for c in steps] == [["left"]]
    assert steps[0].fields["size"] == pytest.approx(1.5e-4, abs=2 * SD)
    late = s.rungs[s.rungs[:, ladder.T] > 120.0]
    assert np.abs(late[:, ladder.E] - 1e-6 * late[:, ladder.T]).max() < 3 * SD


def test_a_jump_of_both_sides_beyond_what_heat_can_do_is_found() -> None:
    """25 microstrain per kelvin is what metals expand by at most."""
    t, (a, b), temp = excursion(per_k=45e-6)
    assert [c.fields["channels"] for c in run(t, a, b, temp)[1]] == [["left", "right"]] * 2


def jerky(sides: int, seed: int = 2) -> tuple[np.ndarray, list[np.ndarray]]:
    """Return 400 h of creep in twenty jumps of 200 microstrain, both sides alike."""
    rng = np.random.default_rng(seed)
    t = np.linspace(0.0, 400.0, 1600)
    e = 2e-4 * np.floor(t / 20.0 + 0.5)
    return t, [g * e + rng.normal(0.0, SD, t.size) for g in (0.9, 1.1)[:sides]]


@pytest.mark.parametrize("sides", [1, 2])
def test_jerky_creep_is_given_back_whole(sides: int) -> None:
    """Three jumps of a kind are a habit; none of the strain may be lost for it."""
    t, strains = jerky(sides)
    s, steps = run(t, *strains)
    assert len(steps) == 3
    assert s.rungs[-1, ladder.E] == pytest.approx(np.mean([x[-5:] for x in strains]), abs=2 * SD)


@pytest.mark.parametrize("size", [-1e-3, 2e-3])
@pytest.mark.parametrize("sides", [1, 2])
def test_a_slip_in_jerky_creep_is_still_one(sides: int, size: float) -> None:
    """One side alone, or far beyond the habit, or backwards."""
    t, strains = jerky(sides)
    strains[0] = strains[0] + size * (t > 295.0)
    _, steps = run(t, *strains)
    assert len(steps) == 4
    assert steps[-1].fields["channels"] == ["left"]
    assert steps[-1].fields["size"] == pytest.approx(size / sides, abs=3 * SD)


def test_three_upward_slips_of_unlike_size_are_no_habit() -> None:
    """Only jumps of about one size are given back to creep."""
    t = np.linspace(0.0, 400.0, 1600)
    a = 1e-6 * t + np.random.default_rng(3).normal(0.0, SD, t.size)
    for at, size in ((100.0, 8e-5), (200.0, 8e-4), (300.0, 8e-3)):
        a += size * (t > at)
    s, steps = run(t, a)
    assert len(steps) == 3
    assert s.rungs[-1, ladder.E] == pytest.approx(4e-4, abs=5 * SD)


def test_a_burst_says_nothing_about_the_next_half_hour() -> None:
    """The slope of a few seconds' noise, drawn out to the next slow scan, once looked like a slip."""
    for seed in range(4):
        rng = np.random.default_rng(seed)
        t = np.sort(np.concatenate((np.arange(0.0, 120.0, 0.5), 101.2 + np.arange(100) / 3600.0)))
        assert run(t, 1e-5 * t + rng.normal(0.0, SD, t.size))[1] == []


def test_a_side_too_faint_to_be_seen_jumps_with_the_other_if_it_moved_alike() -> None:
    """One side just above the threshold and one just below: half a step taken out would bend the mean."""
    seen = jumps.Seen((5e-5, 4e-5), (3e-6, 3e-6), 0.0)
    assert jumps.slips(seen, (5e-5, 0.0)) == (5e-5, 4e-5)
    assert jumps.slips(seen, (0.0, 4e-5)) == (5e-5, 4e-5)
    assert jumps.slips(jumps.Seen((5e-5, 1e-6), (3e-6, 3e-6), 0.0), (5e-5, 0.0)) == (5e-5, 0.0)
    assert jumps.slips(jumps.Seen((5e-5, math.nan), (3e-6, math.nan), 0.0), (5e-5, 0.0)) == (5e-5, 0.0)


def test_a_rezero_in_a_gap_does_not_pass_for_the_rate_of_the_gap() -> None:
    """Pairs of scans on both sides of the gap all show one rate, that of the jump."""
    rng = np.random.default_rng(7)
    t = 80.0 + 0.02 * np.arange(1000)
    t = t + 10.0 * (t > 90.0)
    a = 1e-4 * t + rng.normal(0.0, SD, t.size)
    a -= 4.5e-3 * (t > 90.0)
    _, steps = run(t, a)
    assert [round(c.fields["size"], 4) for c in steps] == [-0.0045]


def test_jerky_creep_goes_on_over_a_gap() -> None:
    """Between two scans far apart there is room for more than one jerk."""
    t, strains = jerky(2)
    there = (t < 305.0) | (t > 395.0)
    assert len(run(t[there], *[x[there] for x in strains])[1]) == 3
