"""The watch as a whole: the same answers however scans are cut, and an end that closes what is open."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.codec import decode_state, encode_state
from daq.core import watch
from daq.core.block import Block, Conclusion, Cue
from daq.core.rules import Limits, TestRules

NAMES = ["a", "b", "top", "mid", "bot", "output", "force", "switch", "stop"]


def eventful(seed: int) -> tuple[TestRules, Block, str]:
    """A test in which everything happens: spikes, slips, holes, heating, excursions, gaps, switches."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(300, 1200))
    limits = Limits(milestones=(0.001, 0.002, 0.005, 0.01, 0.02, 0.05), strain=0.015, gradient_k=4.0)
    rules = rules_for(NAMES, limits, scan_every_s=None if rng.random() < 0.5 else 30.0)
    interval = rng.exponential(30.0, n) * (rng.random(n) < 0.95)
    interval[rng.random(n) < 0.005] = 5000.0
    t_s = np.cumsum(interval) - rng.integers(0, 2) * 3000.0
    columns: dict[str, Any] = {}
    noise, count = 10 ** rng.uniform(-5.5, -3.5), rng.choice([1e-12, 1e-5, 3e-4])
    true = np.linspace(0.0, rng.choice([0.004, 0.06]), n)

    def stretch() -> slice:
        i = int(rng.integers(0, n))
        return slice(i, i + int(rng.integers(1, 300)))

    for side in "ab":
        x = true + noise * rng.standard_normal(n)
        for _ in range(int(rng.integers(0, 4))):
            x[int(rng.integers(0, n)) :] += 0.02 * rng.normal()
        for _ in range(5):
            x[int(rng.integers(0, n))] += 0.1 * rng.normal()
        x = np.round(x / count) * count
        if rng.random() < 0.3:
            s = stretch()
            x[s] = x[s.start]
        if rng.random() < 0.3:
            x[stretch()] = np.nan
        columns[side] = x
    if rng.random() < 0.4:
        i = int(rng.integers(0, n))
        for side in "ab":
            columns[side][i:] += rng.choice([0.1, -0.04, np.nan])
    wander = 0.1 * rng.random() * np.cumsum(rng.normal(size=n))
    wander -= np.linspace(0.0, wander[-1], n)
    if rng.random() < 0.5:
        wander[: n // 10] -= np.linspace(300.0, 0.0, n // 10)
    for name in ("top", "mid", "bot"):
        x = 600.0 + wander + rng.normal() + 0.3 * rng.random() * rng.normal(size=n)
        if rng.random() < 0.4:
            x[stretch()] += 6.0 * rng.normal()
        x[rng.random(n) < 0.02] = np.nan
        columns[name] = np.round(x, 1)
    columns["output"] = 48.0 + 0.1 * rng.normal(size=n)
    columns["force"] = 1000.0 + rng.normal(size=n)
    if rng.random() < 0.3:
        columns["force"][stretch()] = 1.0
    for name in ("switch", "stop"):
        columns[name] = np.zeros(n)
        if rng.random() < 0.4:
            columns[name][stretch()] = 1.0
    dead = rng.random(n) < 0.01
    for x in columns.values():
        x[dead] = np.nan
    why = int(rng.choice([64, 65, 69, 70]))
    return rules, block_of(rules, columns, t_s=t_s, why_bad=why), str(rng.choice(["secondary", "tertiary"]))


def run(rules: TestRules, block: Block, cuts: list[int], stage: str) -> tuple[bytes, list[Conclusion | Cue]]:
    state, out = watch.begin(rules), []
    for i, j in zip([0, *cuts], [*cuts, len(block)], strict=True):
        state, items = watch.watch(state, rules, block.cut(i, j), stage=stage)
        out += items
    return encode_state(state), out


@pytest.mark.parametrize("seed", range(12))
def test_neither_state_nor_findings_depend_on_cuts(seed: int) -> None:
    """A replay feeds thousands of scans, the live daemon one; both must say the same, to the last bit."""
    rules, block, stage = eventful(seed)
    n = len(block)
    rng = np.random.default_rng(seed)
    whole = run(rules, block, [], stage)
    assert decode_state(whole[0]) is not None
    for cuts in (
        sorted(set(rng.integers(1, n, n // 3).tolist())),
        sorted(set(rng.integers(1, n, 7).tolist())),
        list(range(1, n)) if seed < 2 else [n // 2],
    ):
        assert run(rules, block, cuts, stage) == whole


def test_the_cut_property_is_tested_on_everything_that_can_be_said() -> None:
    """A property of runs in which nothing happens would show nothing."""
    seen = set()
    for seed in range(12):
        rules, block, stage = eventful(seed)
        seen |= {i.alarm if isinstance(i, Cue) else i.kind for i in run(rules, block, [], stage)[1]}
    assert seen >= {
        "milestone", "excursion", "temperature_high", "temperature_low", "temperature_nearing_high",
        "sensor_suspected", "gradient", "sensor_broken", "sensor_stuck", "sides_disagree", "load_off",
        "strain_limit", "milestone_reached", "rupture",
    }  # fmt: skip


@pytest.mark.parametrize("seed", range(3))
def test_findings_of_a_shorter_record_are_a_prefix(seed: int) -> None:
    """Nothing said may depend on scans that came later."""
    rules, block, stage = eventful(seed)
    whole = run(rules, block, [], stage)[1]
    for stop in (100, 201, 290):
        part = run(rules, block.cut(0, stop), [], stage)[1]
        assert part == whole[: len(part)]
        assert all(item.scan >= stop for item in whole[len(part) :])


def test_the_end_tells_open_excursions_and_lets_conditions_go() -> None:
    """After a test no alarm may stand for a specimen that no longer hangs there."""
    rules = rules_for(["a", "top"], Limits(excursion_min_s=60.0))
    n = 200
    top = np.full(n, 600.0)
    top[120:] = 610.0
    block = block_of(rules, {"a": np.linspace(0, 1e-4, n), "top": top})
    state, items = watch.watch(watch.begin(rules), rules, block)
    assert [i.alarm for i in items if isinstance(i, Cue)] == ["temperature_high"]
    state, last = watch.end(state, rules, int(block.tick[-1]), float(block.t_s[-1]), n - 1)
    (excursion,) = [i for i in last if isinstance(i, Conclusion)]
    assert excursion.fields == {
        "channel": "top",
        "from_h": 1.0,
        "to_h": pytest.approx(block.t_s[-1] / 3600.0),
        "worst_c": 610.0,
        "limit_c": 603.0,
    }
    gone = {(c.alarm, c.active) for c in last if isinstance(c, Cue)}
    assert gone == {("temperature_high", False)}
    assert watch.end(state, rules, 0, 0.0, n) == (state, ())
    assert watch.watch(state, rules, block) == (state, ())


RATE = 1e-4


def rate_limit(looks: list[tuple[float, float, float, float]]) -> list[tuple[float, bool]]:
    """Hours at which the alarm changed; looks are (hours, rate, low, high) in units of the limit."""
    rules = rules_for(["a"], Limits(rate_per_h=RATE))
    state, said = watch.begin(rules), []
    for scan, (h, *rate) in enumerate(looks):
        value, low, high = (RATE * x for x in rate)
        state, cues = watch.watch_rate(state, rules, scan, scan, 3600.0 * h, (value, low, high))
        state = decode_state(encode_state(state))
        said += [(h, c.active) for c in cues]
    return said


def test_rate_limit_asks_for_the_lower_bound_over_a_stretch_and_ignores_early_primary() -> None:
    """Rates just after loading are above any sensible limit and concern nobody."""
    looks = [
        (1.0, 10.0, 9.0, 11.0), (1.5, 10.0, 9.0, 11.0), (10.0, 0.5, 0.4, 0.6), (100.0, 1.1, 0.9, 1.3),
        (101.0, 1.3, 1.1, 1.5), (102.0, 1.3, 1.1, 1.5), (104.1, 1.3, 1.1, 1.5), (106.0, 0.95, 0.8, 1.1),
        (107.0, 0.8, 0.7, 0.9),
    ]  # fmt: skip
    assert rate_limit(looks) == [(104.1, True), (107.0, False)]


def test_a_rate_known_badly_must_be_above_its_limit_for_longer() -> None:
    """The rate is taken over a tenth of the time and more: looks closer than that are one look."""
    vague = [(100.0 + k, 2.5, 1.2, 3.8) for k in range(30)]
    assert rate_limit([(50.0, 0.5, 0.4, 0.6), *vague]) == [(120.0, True)]


def test_a_noisy_look_below_the_limit_does_not_arm_it() -> None:
    """In noisy primary the estimate dips below any limit; the rate itself was never there."""
    high = [(4.0, 3.0, 2.5, 3.5), (4.1, 3.0, 2.5, 3.5)]
    assert rate_limit([(2.0, 0.8, -3.0, 4.6), (2.5, 0.2, -3.0, 3.4), *high]) == []
    assert rate_limit([(2.0, -9.0, -12.0, -6.0), *high]) == []
    assert rate_limit([(2.0, 0.4, 0.0, 0.8), (2.3, 0.4, 0.0, 0.8), *high]) == [(4.1, True)]


def test_one_high_look_between_others_is_no_rate_above_its_limit() -> None:
    """The lower bound of a 90 % interval is above the truth at one look in twenty."""
    calm = (100.0, 0.6, 0.5, 0.7)
    lone, below = (1.4, 1.1, 1.7), (1.0, 0.9, 1.2)
    assert rate_limit([calm, *((100.0 + k, *(lone if k % 3 else below)) for k in range(1, 40))]) == []


def test_a_rate_that_runs_away_is_told_at_the_second_look() -> None:
    """Near rupture the stretch may be all the time that is left."""
    looks = [(100.0, 0.6, 0.5, 0.7), (101.0, 1.8, 1.6, 2.0), (101.5, 2.2, 2.0, 2.4)]
    assert rate_limit(looks) == [(101.5, True)]
