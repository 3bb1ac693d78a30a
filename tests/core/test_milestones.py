"""Strain milestones: dated where the curve crosses, robust to spikes, noise and a side that goes missing."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.core import watch
from daq.core.block import Conclusion, Cue
from daq.core.rules import Limits
from daq.records import FloatArray


def milestones(
    columns: dict[str, FloatArray], limits: Limits | None = None, every_s: float = 60.0, **more: Any
) -> dict[float, float]:
    correction = more.pop("step_correction", None)
    rules = rules_for(list(columns), limits)
    block = block_of(rules, columns, every_s, **more)
    _, items = watch.watch(watch.begin(rules), rules, block, step_correction=correction)
    found = [i.fields for i in items if isinstance(i, Conclusion) and i.kind == "milestone"]
    assert len({f["strain"] for f in found}) == len(found), "each is told once"
    told = {
        (c.subject, c.figures["time_h"])
        for c in items
        if isinstance(c, Cue) and c.alarm == "milestone_reached"
    }
    assert told == {(f"{f['strain']:g}", f["time_h"]) for f in found}
    return {f["strain"]: f["time_h"] for f in found}


def test_without_noise_the_crossing_itself_is_told() -> None:
    """A straight line crosses 0.1, 0.2, 0.5 and 1 % at exact times between scans."""
    x = 1.3e-6 * np.arange(9000)
    found = milestones({"a": x, "b": x})
    assert list(found) == [0.001, 0.002, 0.005, 0.01]
    for level, time_h in found.items():
        assert time_h == pytest.approx(level / 1.3e-6 / 60.0, rel=1e-9)


@pytest.mark.parametrize("seed", range(5))
def test_noise_moves_a_milestone_by_less_than_a_standard_deviation(seed: int) -> None:
    """Early by a third of a standard deviation is what the vote promises; three in a row would be 1 to 2."""
    rng = np.random.default_rng(seed)
    rate, noise = 2e-7, 200e-6  # a thousand scans to a standard deviation
    x = rate * np.arange(20_000)
    found = milestones({"a": x + noise * rng.normal(size=x.size)}, Limits(milestones=(0.001, 0.002, 0.003)))
    early = [(level / rate / 60.0 - found[level]) * 60.0 * rate / noise for level in found]
    assert len(early) == 3
    assert max(abs(e) for e in early) < 0.8
    assert np.mean(early) < 0.6


def test_spikes_reach_no_milestone() -> None:
    """Not even several of them in a row of a thousand scans."""
    rng = np.random.default_rng(0)
    x = 1e-4 + 2e-5 * rng.normal(size=5000)
    x[rng.integers(0, 5000, 100)] += 0.05
    x[2000:2002] += 0.05
    assert milestones({"a": x}) == {}


def test_one_jump_may_pass_several() -> None:
    """A load step: all levels are dated between the two scans."""
    x = np.concatenate((np.full(50, 0.0005), np.full(50, 0.006)))
    found = milestones({"a": x})
    assert list(found) == [0.001, 0.002, 0.005]
    assert all(49 / 60.0 < t < 50 / 60.0 for t in found.values())
    assert found[0.001] < found[0.002] < found[0.005]


def test_before_full_load_nothing_counts() -> None:
    """Loading strain is not creep; what is passed by then is told at the first scan under load."""
    n = 200
    t_s = (np.arange(n) - 100) * 60.0
    x = np.concatenate((np.linspace(0.0, 0.0025, 100), np.full(100, 0.0025)))
    found = milestones({"a": x}, t_s=t_s)
    assert found == {0.001: 0.0, 0.002: 0.0}


def test_a_side_that_goes_missing_makes_no_step() -> None:
    """The mean goes on from half of the last known difference."""
    x = 1e-6 * np.arange(4000)
    a, b = 1.5 * x, 0.5 * x
    b = b.copy()
    b[900:] = np.nan
    found = milestones({"a": a, "b": b}, Limits(milestones=(0.001,)))
    # after scan 899 the mean moves with side A alone, 1.5e-6 a scan
    mean_899 = 899e-6
    assert found[0.001] == pytest.approx((899 + (0.001 - mean_899) / 1.5e-6) / 60.0, rel=1e-3)


def test_a_known_slip_is_taken_off() -> None:
    """What a step did to the strain must not pass a milestone."""
    x = 1e-7 * np.arange(2000)
    slipped = x + np.where(np.arange(2000) >= 500, 0.0015, 0.0)
    assert milestones({"a": slipped}, Limits(milestones=(0.001,)))[0.001] < 10.0
    correction = np.where(np.arange(2000) >= 500, 0.0015, 0.0)
    assert milestones({"a": slipped}, Limits(milestones=(0.001,)), step_correction=correction) == {}


def test_counts_of_a_coarse_converter_pass_at_the_count() -> None:
    """A staircase of 36 microstrain without noise: the first stair at or above the level."""
    x = np.round(1e-6 * np.arange(4000) / 36e-6) * 36e-6
    found = milestones({"a": x}, Limits(milestones=(0.001,)))
    first = int(np.argmax(x >= 0.001))
    assert (first - 1) / 60.0 <= found[0.001] <= first / 60.0


def test_the_strain_limit_is_an_alarm_and_no_milestone() -> None:
    """It asks for a person."""
    rules = rules_for(["a"], Limits(milestones=(), strain=0.002))
    block = block_of(rules, {"a": 1e-6 * np.arange(3000)})
    _, items = watch.watch(watch.begin(rules), rules, block)
    (cue,) = items
    assert isinstance(cue, Cue)
    assert (cue.alarm, cue.active) == ("strain_limit", True)
    assert 2000 <= cue.scan <= 2003
