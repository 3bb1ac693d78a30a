"""A thermocouple that drifts under control: named by what it cannot hide, none for a warm room."""

from __future__ import annotations

import itertools
import math
from dataclasses import replace

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.codec import decode_state, encode_state
from daq.core import chain, drifting, watch
from daq.core.adopt import adopt
from daq.core.block import Block, Conclusion, Cue
from daq.core.changes import best_change, fixed_change
from daq.core.results import begin as begin_results
from daq.core.rules import TestRules
from daq.core.watch import WatchState
from daq.records import FloatArray

EVERY_S = 480.0
HOURS = 240.0
T_H = np.arange(int(HOURS * 3600.0 / EVERY_S)) * EVERY_S / 3600.0
SLOPE = 1.8 / (600.0 - 22.0)
"""Relative output per kelvin of the furnace in these tests: between conduction, 1/(T - room) [1/K], and
radiation, 4/T."""


def ramp(begin_h: float, end_h: float) -> FloatArray:
    return np.clip((T_H - begin_h) / (end_h - begin_h), 0.0, 1.0)


def furnace(
    seed: int,
    couples: tuple[str, ...],
    true_k: FloatArray | float = 0.0,
    errors: dict[str, FloatArray] | None = None,
    room_k: FloatArray | float = 0.0,
    logged: bool = True,
    disorder: FloatArray | float = 0.0,
) -> tuple[TestRules, Block]:
    """A furnace at 600 degC whose specimen is off by ``true_k``; each couple shows that and its error."""
    rng = np.random.default_rng(seed)
    n = T_H.size
    columns: dict[str, FloatArray] = {"a": 1e-5 * rng.standard_normal(n)}
    for i, name in enumerate(couples):
        error = (errors or {}).get(name, np.zeros(n))
        columns[name] = np.round(600.0 + 0.4 * i + true_k + error + 0.1 * rng.standard_normal(n), 1)
    answer = SLOPE * true_k - room_k / (600.0 - 22.0) + disorder
    columns["output"] = np.round(48.0 * (1.0 + answer) + 0.1 * rng.standard_normal(n), 2)
    rules = rules_for(["a", *couples, "output"])
    block = block_of(rules, columns, EVERY_S)
    room = 22.0 + np.zeros(n) + room_k
    return rules, replace(block, room_c=room if logged else np.full(n, np.nan))


def run(rules: TestRules, block: Block, cuts: tuple[int, ...] = ()) -> tuple[WatchState, list[Cue]]:
    state, said = watch.begin(rules), []
    edges = [0, *cuts, len(block)]
    for i, j in itertools.pairwise(edges):
        state, items = watch.watch(state, rules, block.cut(i, j), stage="secondary")
        said += [c for c in items if isinstance(c, Cue) and c.alarm == drifting.ALARM]
    return state, said


def controlled(couples: tuple[str, ...], size: float, seed: int = 1) -> tuple[TestRules, Block]:
    """The couple ``mid`` is held at the set point and drifts by ``size`` K from 60 h to 100 h."""
    course = size * ramp(60.0, 100.0)
    return furnace(seed, couples, -course, {"mid": course})


@pytest.mark.parametrize("size", [-3.0, 3.0])
def test_of_three_the_one_that_stays_while_others_and_output_move_is_named(size: float) -> None:
    """The loop holds the indication: what is steady is what errs."""
    rules, block = controlled(("top", "mid", "bot"), size)
    state, said = run(rules, block)
    assert {c.subject for c in said} == {"mid"}
    assert said[0].active
    figures = said[0].figures
    assert figures["controls"] is True
    assert 60.0 < said[0].tick / 36e6 < 100.0
    assert ("hotter" if size < 0.0 else "cooler") in said[0].message
    last = state.drifting.latest
    assert last is not None
    assert last.low_k < size < last.high_k
    assert abs(last.since_h - 60.0) < 0.1 * HOURS
    assert last.output * size < 0.0


def test_a_couple_alone_is_named_with_what_else_it_may_be() -> None:
    """Output is moved by mains, room and winding too: who says more than it knows is not believed twice."""
    rules, block = controlled(("mid",), -3.0)
    state, said = run(rules, block)
    assert [(c.subject, c.active) for c in said] == [("mid", True)]
    assert "may read low" in said[0].message
    assert "mains, room or winding" in said[0].message
    last = state.drifting.latest
    assert last is not None
    assert last.low_k < -3.0 < last.high_k < 0.0


def test_of_two_the_output_says_which() -> None:
    """Two couples that part accuse each other."""
    course = -3.0 * ramp(60.0, 100.0)
    rules, block = furnace(2, ("top", "mid"), -course, {"mid": course})
    assert {c.subject for c in run(rules, block)[1]} == {"mid"}
    rules, block = furnace(2, ("top", "mid"), 0.0, {"top": -course})
    said = run(rules, block)[1]
    assert {c.subject for c in said} == {"top"}
    assert said[0].figures["controls"] is False


def test_of_two_neither_is_named_where_the_output_is_too_restless_to_say() -> None:
    """A guess between two is wrong every second time."""
    rules, block = furnace(2, ("top", "mid"), 0.0, {"top": 3.0 * ramp(60.0, 100.0)}, disorder=wander(0.02))
    assert run(rules, block)[1] == []


def test_a_couple_that_moves_alone_does_not_control() -> None:
    """The specimen is where it was; only the mean errs."""
    rules, block = furnace(3, ("top", "mid", "bot"), 0.0, {"bot": 3.0 * ramp(50.0, 90.0)})
    state, said = run(rules, block)
    assert {c.subject for c in said} == {"bot"}
    assert "moved alone" in said[0].message
    assert watch.doubt(state) is None


def test_a_couple_that_parts_while_the_set_point_is_moved_is_still_named() -> None:
    """A drift hides well behind an intended change."""
    course = 4.0 * ramp(60.0, 110.0)
    moved = np.where(T_H > 62.0, -3.0, 0.0)
    rules, block = furnace(4, ("top", "mid", "bot"), moved - course, {"mid": course})
    assert {c.subject for c in run(rules, block)[1]} == {"mid"}


DAY = 4.0 * np.cos(2.0 * math.pi * (T_H - 7.0) / 24.0)
STEP = np.where(T_H > 70.0, 2.4, 0.0)
RNG = np.random.default_rng(9)
KEEP = math.exp(-EVERY_S / 3600.0 / 30.0)


def wander(sd: float) -> FloatArray:
    """First-order noise with a memory of 30 h."""
    out = [0.0]
    for shock in RNG.standard_normal(T_H.size - 1).tolist():
        out.append(KEEP * out[-1] + sd * math.sqrt(1.0 - KEEP**2) * shock)
    return np.array(out)


@pytest.mark.parametrize("couples", [("mid",), ("top", "mid"), ("top", "mid", "bot")])
@pytest.mark.parametrize(
    "nuisance",
    [
        {},
        {"room_k": DAY},
        {"room_k": DAY, "logged": False},
        {"room_k": 12.0 * ramp(50.0, 120.0)},
        {"true_k": STEP},
        {"true_k": STEP - 4.0 * ramp(110.0, 111.0)},
        {"disorder": wander(0.01)},
    ],
    ids=[
        "quiet",
        "day",
        "day unseen",
        "room seen to warm up",
        "set point",
        "two set points",
        "restless mains",
    ],
)
def test_nobody_is_accused(couples: tuple[str, ...], nuisance: dict[str, FloatArray]) -> None:
    """Warm rooms, other set points and restless mains move the output of every furnace."""
    rules, block = furnace(5, couples, **nuisance)  # type: ignore[arg-type]
    state, said = run(rules, block)
    assert said == []
    assert watch.doubt(state) is None


def test_all_couples_that_rise_with_the_output_are_believed() -> None:
    """Then the specimen is hotter, and the band says so; no couple of these is at fault."""
    rules, block = furnace(6, ("top", "mid", "bot"), 2.5 * ramp(60.0, 100.0))
    assert run(rules, block)[1] == []


def test_the_doubt_is_there_for_a_specimen_hotter_than_indicated_only() -> None:
    """A cooler specimen creeps more slowly: no reason to doubt a rate that rises."""
    for couples in (("mid",), ("top", "mid", "bot")):
        said = watch.doubt(run(*controlled(couples, -3.0))[0])
        assert said is not None
        assert "may be hotter than indicated" in said
        assert "mid" in said
        assert watch.doubt(run(*controlled(couples, 3.0))[0]) is None


def test_a_tertiary_detection_says_that_the_specimen_may_be_hotter_than_indicated() -> None:
    """A hot specimen creeps faster without being damaged; whoever decides must have both in one message."""
    tertiary = Conclusion(9, 90, "stage", "tertiary", {"stage": "tertiary", "why": "the rate rises"})
    secondary = Conclusion(5, 50, "stage", "secondary", {"stage": "secondary", "why": "steady"})
    said = watch.doubt(run(*controlled(("top", "mid", "bot"), -3.0))[0])
    first, second = chain._with_doubt((secondary, tertiary), said)
    assert first == secondary
    assert second.fields["why"] == f"the rate rises; but {said}"
    assert chain._with_doubt((secondary, tertiary), None) == (secondary, tertiary)


def test_the_alarm_goes_when_the_couple_is_put_right() -> None:
    """An alarm that outlives its cause teaches people to look away."""
    course = -4.0 * (np.clip((T_H - 40.0) / 10.0, 0.0, 1.0) - (T_H > 70.0))
    rules, block = furnace(7, ("top", "mid", "bot"), -course, {"mid": course})
    assert [(c.subject, c.active) for c in run(rules, block)[1]] == [("mid", True), ("mid", False)]


def test_neither_state_nor_alarms_depend_on_cuts() -> None:
    """A replay feeds thousands of scans, the live daemon one."""
    rules, block = controlled(("top", "mid", "bot"), -3.0)
    whole_state, whole = run(rules, block)
    assert whole
    for seed in range(2):
        cuts = np.unique(np.random.default_rng(seed).integers(1, len(block), 60)).tolist()
        state, said = run(rules, block, tuple(cuts))
        assert said == whole
        assert encode_state(state) == encode_state(whole_state)
    assert encode_state(decode_state(encode_state(whole_state))) == encode_state(whole_state)


def test_memory_is_bounded_and_means_are_kept_whatever_the_length() -> None:
    """Ten years must cost what ten days do."""
    rules = rules_for(["mid", "output"])
    s = drifting.begin(rules)
    t_h = np.cumsum(np.random.default_rng(0).exponential(20.0, 4000))
    for i, t in enumerate(t_h.tolist()):
        s = drifting._add(s, t, [48.0 + i % 3, math.nan, 600.0])
        assert s.blocks.shape[0] <= drifting.MOST
    assert s.blocks[:, drifting.LEAVES].sum() == 4000
    assert s.blocks[:, drifting.FIRST].sum() == sum(48.0 + i % 3 for i in range(4000))
    assert (np.diff(s.blocks[:, drifting.START]) > 0).all()
    assert s.blocks[-1, drifting.START] == math.floor(t_h[-1] / s.width_h)


def test_other_channels_begin_anew_and_take_the_alarm_along() -> None:
    """Who drifts was told by channels that are no longer the same."""
    rules, block = controlled(("top", "mid", "bot"), -3.0)
    state, _ = run(rules, block)
    fewer = replace(rules, channels=tuple(c for c in rules.channels if c.name != "bot"))
    after, _, gone = adopt(state, begin_results(rules), rules, fewer)
    assert (drifting.ALARM, "mid") in gone
    assert after.drifting.blocks.shape == drifting.begin(fewer).blocks.shape
    assert after.drifting.told == ""


def test_three_kelvin_at_600_degc_are_half_to_one_and_a_half_per_cent_of_power() -> None:
    """By conduction 3/(600 - 22), by radiation 4 * 3/873; and half the first where output is voltage."""
    x = drifting.Series(np.arange(20.0), np.zeros(20), np.full(20, 22.0), np.full((20, 1), 600.0), ("mid",))
    least, likely, most = drifting.gain(x, None)
    assert 2.0 * 3.0 * least == pytest.approx(3.0 / 578.0)
    assert 3.0 * most == pytest.approx(12.0 / 873.15)
    assert least < likely < most
    measured = drifting.gain(x, (0.003, 0.0003))
    assert measured[1] == pytest.approx(0.003, rel=0.05)
    assert measured[2] / measured[0] < 0.5 * most / least


def test_a_change_is_found_with_its_size_and_date() -> None:
    """Against a change put in by hand."""
    t = np.arange(120.0)
    y = 0.2 * np.random.default_rng(1).standard_normal(120) + 5.0 + 2.0 * np.clip((t - 48) / 24, 0, 1)
    change = best_change(t, y, np.ones((120, 1)))
    assert change is not None
    assert abs(change.size - 2.0) < 4.0 * change.se < 0.8
    assert abs(change.since_h - 48.0) <= 12.0


def test_slow_noise_rarely_looks_sure() -> None:
    """Errors as if neighbours were independent would accuse every second furnace."""
    rng = np.random.default_rng(3)
    t, sure = np.arange(120.0), []
    for _ in range(300):
        y = np.zeros(120)
        for i in range(1, 120):
            y[i] = 0.9 * y[i - 1] + rng.standard_normal()
        change = best_change(t, y, np.ones((120, 1)))
        assert change is not None
        sure.append(change.sure)
    assert np.mean(np.array(sure) >= drifting.SURE) < 0.02


def test_a_regressor_that_stands_still_takes_nothing_off() -> None:
    """A display that shows the same number all the time is the intercept once more, not a free direction."""
    t = np.arange(60.0)
    y = np.random.default_rng(4).standard_normal(60)
    shape = (t > 30.0).astype(float)
    plain = fixed_change(shape, np.ones((60, 1)), y)
    beside = fixed_change(shape, np.column_stack([np.ones(60), np.zeros(60), np.full(60, 3.0)]), y)
    assert plain is not None
    assert beside is not None
    assert beside[0] == pytest.approx(plain[0])
