"""Sides that repeat themselves: masked when certain, left alone where equal readings are usual."""

from __future__ import annotations

import numpy as np
import pytest

from daq.codec import encode_state
from daq.core import follow, ladder, stuck
from daq.core.block import Block
from daq.core.rules import ChannelRules, Role, Specimen, TestRules

SD = 1e-5
RULES = TestRules(
    "hall", "H1", "H1", Specimen("S-1"),
    (ChannelRules("left", Role.STRAIN, "A"), ChannelRules("right", Role.STRAIN, "B")),
)  # fmt: skip


def record(
    n: int = 80, seed: int = 0, slope: float = 1e-5, count: float = 1e-6
) -> tuple[np.ndarray, np.ndarray]:
    """Return quarter-hourly scans of a creeping specimen, in counts."""
    t = 0.25 * np.arange(n) + 50.0
    v = 0.01 + slope * t + np.random.default_rng(seed).normal(0.0, SD, n)
    return t, np.round(v / count) * count


def judge(
    t: np.ndarray, v: np.ndarray, *, count: float = 1e-6, was: float = np.nan, noise: float = SD
) -> stuck.Still:
    """Judge all rows from the 24th on; nothing masked and nothing held where there is nothing to say."""
    found = stuck.judge(t, v, 24, noise, count, was, False)
    return stuck.Still(np.zeros(v.size - 24, bool), None) if found is None else found


def test_a_lively_channel_that_stands_still_is_masked_from_its_second_reading() -> None:
    """The first one is a measurement, those after it are not."""
    t, v = record()
    v[40:60] = v[40]
    assert np.flatnonzero(judge(t, v).mask).tolist() == list(range(41 - 24, 60 - 24))


def test_a_short_run_waits_and_is_left_alone_when_it_ends() -> None:
    """Four equal readings are chance once in a thousand channels a day."""
    t, v = record()
    v[75:] = v[75]
    found = judge(t, v)
    assert found.hold_at == 76 - 24
    assert not found.mask.any()
    t, v = record()
    v[70:74] = v[70]
    assert not judge(t, v).mask.any()


def test_what_was_stuck_stays_so_until_the_reading_changes() -> None:
    """Context is masked by then and cannot tell."""
    t, v = record()
    v[10:30] = v[10]
    was = float(v[10])
    v[11:24] = np.nan
    assert np.flatnonzero(judge(t, v, was=was).mask).tolist() == list(range(30 - 24))


@pytest.mark.parametrize("slope", [0.0, 1e-5, 4e-5])
@pytest.mark.parametrize("count", [15e-6, 36e-6])
@pytest.mark.parametrize("sd", [0.0, 4e-6])
def test_a_coarse_converter_may_stand_still(slope: float, count: float, sd: float) -> None:
    """Slow creep needs many scans to cross a count, and between two counts noise only toggles at times."""
    for seed in range(20):
        rng = np.random.default_rng(seed)
        t = 0.25 * np.arange(400) + 50.0
        v = np.round((0.01 + slope * t + rng.normal(0.0, sd, t.size)) / count) * count
        for at in range(0, 300, 20):
            assert not judge(
                t[at : at + 90], v[at : at + 90], count=count, noise=max(sd, 0.7 * count)
            ).mask.any()


def test_creep_fast_beside_a_coarse_count_gives_a_stuck_channel_away() -> None:
    """Half the rate before, and it would have crossed several counts."""
    t, v = record(count=36e-6, slope=5e-4)
    v[40:60] = v[40]
    assert judge(t, v, count=36e-6, noise=20e-6).mask[41 - 24 : 60 - 24].all()
    t, v = record(slope=4e-4)
    v[40:44] = v[40]
    assert judge(t, v).mask[41 - 24 : 44 - 24].all()


def test_a_burst_faster_than_the_converter_is_no_stuck_channel() -> None:
    """Half-hourly scans, then one each second of an instrument that converts each minute."""
    rng = np.random.default_rng(4)
    t = np.concatenate((0.5 * np.arange(40), 20.0 + np.arange(600) / 3600.0))
    v = 1e-5 * t + rng.normal(0.0, SD, t.size)
    v[40:] = np.repeat(v[40::60], 60)
    for end in range(60, 640, 40):
        assert not judge(t[max(0, end - 90) : end], v[max(0, end - 90) : end]).mask.any()


def block(t_h: np.ndarray, a: np.ndarray, b: np.ndarray | None) -> Block:
    none = np.full(t_h.size, np.nan)
    values = np.zeros((t_h.size, 0))
    return Block(
        0, np.round(t_h * 3.6e7).astype(np.int64), t_h * 3600.0, values, values.astype(np.uint8),
        a, none if b is None else b, none, none, none,
    )  # fmt: skip


def creeping(sides: int) -> tuple[np.ndarray, list[np.ndarray]]:
    """Return 900 scans over 300 h of a specimen that creeps by 10 noises an hour, sides in microns."""
    rng = np.random.default_rng(11)
    t = np.linspace(0.0, 300.0, 900)
    return t, [np.round(1e-4 * t + rng.normal(0.0, SD, t.size), 6) for _ in range(sides)]


@pytest.mark.parametrize("sides", [1, 2])
def test_a_stuck_side_is_neither_a_step_nor_a_bend_of_the_mean(sides: int) -> None:
    """Otherwise: a falling rate while it stands still, and a slip when it comes back."""
    t, (a, *more) = creeping(sides)
    b = more[0] if more else None
    a[400:440] = a[400]
    s, said = follow.follow(follow.begin(RULES), RULES, block(t, a, b))
    assert not [c for c in said if c.kind == "step"]
    off = s.rungs[:, ladder.E] - 1e-4 * s.rungs[:, ladder.T]
    assert np.abs(off).max() < 4 * SD


def test_cuts_do_not_change_what_is_taken_for_stuck() -> None:
    """Live, the scans of a stuck side come one by one."""
    t, (a, b) = creeping(2)
    a[400:440] = a[400]
    b[600:603] = b[600]
    b[700:720] = b[700]
    whole = block(t, a, b)
    s, said = follow.follow(follow.begin(RULES), RULES, whole)
    cut, told = follow.begin(RULES), ()
    for i in range(0, 380, 38):
        cut, some = follow.follow(cut, RULES, whole.cut(i, i + 38))
        told += some
    for i in range(380, 900):
        cut, some = follow.follow(cut, RULES, whole.cut(i, i + 1))
        told += some
    assert told == said
    assert encode_state(cut) == encode_state(s)
