"""The other detectors of the comparison do what they are said to, and all are scored by one rule."""

from __future__ import annotations

import dataclasses
import itertools
import json
from pathlib import Path
from typing import Any

import compare
import numpy as np
import others
import pytest

from daq.prove.table import figures
from simulator import population
from simulator.spec import Event

RIG = (2023, 3)


def record(n: int = 600, seed: int = 4) -> others.Record:
    """A steady rate that doubles at 60 of 100 h, with noise."""
    t = np.sort(np.random.default_rng(seed).uniform(0.0, 100.0, n))
    noise = 2e-6 * np.random.default_rng(seed + 1).standard_normal(n)
    t[0] = 0.0
    return others.Record(t, t, 1e-5 * t + 1e-5 * np.maximum(t - 60.0, 0.0) + noise, 0.0)


def test_running_sums_give_least_squares_slopes() -> None:
    """Slopes and errors from differences of running sums are those of a fit to the stretch alone."""
    r = record()
    rate, error, mid, mean = others.Slopes(r).over(np.array([0, 100, 590]), np.array([600, 140, 600]))
    for i, (a, b) in enumerate([(0, 600), (100, 140), (590, 600)]):
        (slope, _), cov = np.polyfit(r.clock_h[a:b], r.strain[a:b], 1, cov="unscaled")
        left = r.strain[a:b] - np.polyval(np.polyfit(r.clock_h[a:b], r.strain[a:b], 1), r.clock_h[a:b])
        assert rate[i] == pytest.approx(slope, rel=1e-9)
        assert error[i] == pytest.approx((cov[0, 0] * (left**2).sum() / (b - a - 2)) ** 0.5, rel=1e-6)
        assert mid[i] == pytest.approx(r.clock_h[a:b].mean())
        assert mean[i] == pytest.approx((r.strain - r.strain.mean())[a:b].mean())


def test_slope_rule_agrees_with_a_plain_loop_over_looks() -> None:
    """The grid in one pass must answer as somebody who looks again and again would."""
    r = record()
    grid = [s for s in others.SETTINGS["slope over the last stretch"] if s["input"] == others.INPUTS[0]]
    answers = np.concatenate(list(others._by_hand(r, others.Slopes(r))))
    picked = [
        {"window": 0.1, "stood": 0.15, "margin": 3.0, "ratio": 1.3, "persists": 0.05},
        {"window": 0.2, "stood": 0.0, "margin": 6.0, "ratio": 1.0, "persists": 0.0},
    ]
    for want in picked:
        i = next(i for i, s in enumerate(grid) if all(s[k] == v for k, v in want.items()))
        assert answers[i] == _loop(r, **want)
        assert 60.0 < answers[i] < 80.0


def _loop(
    r: others.Record, window: float, stood: float, margin: float, ratio: float, persists: float
) -> float | None:
    t, y = r.clock_h, r.strain
    least, when, not_over = np.inf, np.inf, -np.inf
    for look in np.exp(np.arange(np.log(t[24]), np.log(t[-1]), others.LOOK)):
        inside = (t >= look * (1.0 - window)) & (t <= look)
        n = int(inside.sum())
        if n < others.FEWEST_SCANS:
            not_over = look
            continue
        fit = np.polyfit(t[inside], y[inside], 1)
        left = y[inside] - np.polyval(fit, t[inside])
        error = (left @ left / (n - 2) / ((t[inside] - t[inside].mean()) ** 2).sum()) ** 0.5
        if fit[0] > 3.0 * error and fit[0] + margin * error < least:
            least, when = fit[0] + margin * error, look
        if not (fit[0] - margin * error > ratio * least and when <= look * (1.0 - stood)):
            not_over = look
        elif look * (1.0 - persists) >= not_over:
            return float(t[t <= look][-1])
    return None


@pytest.mark.parametrize("rule", others.BLOCK_RULES, ids=str)
@pytest.mark.parametrize("kind", others.KINDS)
def test_charts_alarm_after_the_change_and_not_on_a_steady_rate(rule: Any, kind: str) -> None:
    """With a strict design the alarm comes once the rate has doubled; never before, never without."""
    turning = record(2000)
    steady = dataclasses.replace(turning, strain=turning.strain - 1e-5 * np.maximum(turning.t_h - 60.0, 0.0))
    for r, turns in ((turning, True), (steady, False)):
        rates = others.BlockRates(r, others.Slopes(r), rule, kind)
        hours = np.array(others._cusum(rates)).reshape(
            len(others.RISES), len(others.STOOD_BLOCKS), len(others.CUSUM_K), len(others.CUSUM_H)
        )
        strict = hours[0, 0, others.CUSUM_K.index(1.0), 8]
        assert 60.0 < strict < 95.0 if turns else np.isnan(strict)


def test_scatter_is_that_of_independent_rates() -> None:
    """Standardised by neighbouring differences, rates of a steady record have about unit deviation."""
    t = np.linspace(0.0, 100.0, 40_001)
    noise = 2e-6 * np.random.default_rng(1).standard_normal(t.size)
    r = others.Record(t, t, 1e-5 * t + noise, 0.0)
    rates = others.BlockRates(r, others.Slopes(r), ("scans", 10), "slope")
    assert np.std(rates.z[100:]) == pytest.approx(1.0, abs=0.2)


def test_first_hours_is_the_first_permitted_crossing() -> None:
    """A crossing without permission is passed over, as a loop would."""
    r = record(2000)
    rates = others.BlockRates(r, others.Slopes(r), ("share", 0.01), "means")
    rng = np.random.default_rng(8)
    statistic, may = rng.standard_normal(rates.at_h.size), rng.random(rates.at_h.size) < 0.5
    thresholds = np.array([0.0, 1.0, 2.0, 9.0])
    for threshold, got in zip(thresholds, rates.first_hours(statistic, thresholds, may), strict=True):
        hits = [h for h, s, m in zip(rates.at_h, statistic, may, strict=True) if m and s > threshold]
        assert got == hits[0] if hits else np.isnan(got)


def test_page_hinkley_path_crosses_where_rivers_detector_alarms() -> None:
    """The statistic is read from inside the detector; its public alarm is the judge."""
    drift = pytest.importorskip("river.drift")
    z = np.random.default_rng(2).standard_normal(300)
    z[150:] += 1.0
    fresh = np.zeros(300, dtype=bool)
    path = others.page_hinkley_path(z, fresh, 0.25)
    for threshold in (3.0, 8.0, 20.0):
        one = drift.PageHinkley(min_instances=5, delta=0.25, threshold=threshold, mode="up")
        for i, value in enumerate(z.tolist()):  # noqa: B007
            one.update(value)
            if one.drift_detected:
                break
        assert one.drift_detected
        assert int(np.argmax(path > threshold)) == i


def test_adwin_tells_a_rise_from_a_fall() -> None:
    """Only a window that was cut because the mean rose is a sign of tertiary creep."""
    pytest.importorskip("river")
    z = 0.3 * np.random.default_rng(2).standard_normal(400)
    z[200:] += 2.0
    assert 200 < int(np.argmax(others.adwin_alarms(z, 0.002))) < 240
    assert not others.adwin_alarms(-z, 0.002).any()


def test_help_takes_out_slips_and_nothing_else() -> None:
    """The helped record of a rig that slips is the record of the same rig that does not."""
    spec = population.draw(*RIG)
    spec = dataclasses.replace(spec, events=())
    at_h = 0.5 * spec.duration_h
    slipped = dataclasses.replace(spec, events=(Event("slip", at_h, 3e-3),))
    plain, helped = others.prepare(spec, "as recorded"), others.prepare(slipped, "helped")
    assert np.array_equal(plain.strain, helped.strain)
    left = others.prepare(slipped, "as recorded")
    later = left.t_h > at_h + 1.0
    assert np.allclose((left.strain - plain.strain)[later], 3e-3, atol=4e-4)


def test_every_setting_of_every_detector_has_its_answer() -> None:
    """A grid out of step with its answers would tune one setting and score another."""
    _, answers = others.first_alarms(*RIG)
    assert set(answers) == set(others.available())
    for method, hours in answers.items():
        assert len(hours) == len(others.SETTINGS[method])
    grid = others.SETTINGS["CUSUM on block rates"]
    groups = itertools.groupby(
        zip(grid, answers["CUSUM on block rates"], strict=True),
        key=lambda x: [v for k, v in x[0].items() if k != "h"],
    )
    for _, group in groups:  # a higher bar is never crossed sooner
        times = [np.inf if hour is None else hour for _, hour in group]
        assert times == sorted(times)


def _rig(index: int, **told: Any) -> dict[str, Any]:
    row = {"index": index, "kind": "x", "rises": True, "turns": True, "ruptured": True, "min_h": 10.0}
    row |= {"first_h": 10.0, "end_h": 100.0, "offset_h": 50.0, "seen_h": 100.0, "limit_h": 20.0}
    return row | told


def test_one_rule_scores_everybody() -> None:
    """False before the rise or without one; missed, late and delay as the words under the table say."""
    rows = [
        _rig(0),
        _rig(1),
        _rig(2),
        _rig(3),
        _rig(4, rises=False, turns=False, first_h=None, offset_h=None, limit_h=None),
        _rig(5, seen_h=40.0),  # the extensometer was taken off before the 0.2 % offset
    ]
    alarms = np.array([[25.0], [60.0], [np.nan], [9.0], [30.0], [np.nan]])
    got = compare.judged(compare.Truths(rows), alarms).at(0)
    assert (got.rigs, got.turning, got.false, got.missed, got.late) == (6, 4, 2, 1, 1)
    assert (got.median, got.ninetieth) == (5.0, np.inf)  # of 1.5, 5, never, never
    for row, hour in zip(rows, alarms[:, 0], strict=True):
        early = not row["rises"] or hour < 10.0
        row |= {"false": bool(early and hour == hour), "true_h": None if early or hour != hour else hour}
    assert compare.ours(rows) == got
    rows = [r for r in rows if not r["false"]]  # these two are left out here, and not there
    theirs = figures([r | {"onset": None, "least": None, "levels": []} for r in rows])
    mine = compare.ours(rows)
    assert (theirs["must_detect"], theirs["missed"], theirs["after_offset"]) == (3, mine.missed, mine.late)
    assert theirs["delay_over_best"]["median"] == mine.median


def test_best_setting_is_the_quickest_of_those_that_keep_the_share_and_find_most() -> None:
    """Few false first, then few misses, then delay."""
    tuning = compare.Score(
        200,
        100,
        np.array([2, 1, 0, 1, 1]),
        np.array([0, 40, 3, 2, 1]),
        np.zeros(5),
        np.array([1.0, 1.1, 1.9, 1.7, 1.2]),
        np.array([2.0, 2.0, 3.0, 3.0, 3.0]),
    )
    every = np.ones(5, dtype=bool)
    assert compare.best_setting(tuning, 1 / 200, every) == 4
    assert compare.best_setting(tuning, 1 / 200, np.arange(5) < 4) == 3
    assert compare.best_setting(tuning, 1 / 100, every) == 0
    assert compare.best_setting(tuning, 1 / 200, np.arange(5) < 1) is None


def test_a_stopped_run_goes_on_and_other_settings_begin_anew(tmp_path: Path) -> None:
    """A line cut short by a kill is worked out again; rows of another grid are never mixed in."""
    done: list[int] = []

    def do(job: tuple[int, int]) -> dict[str, Any]:
        done.append(job[1])
        return {"index": job[1], "x": job[0]}

    path = tmp_path / "rows.jsonl"
    jobs = [(7, i) for i in range(4)]
    first = compare.kept(path, "a", jobs[:3], do, 1)
    path.write_text(path.read_text()[:-5])
    assert compare.kept(path, "a", jobs, do, 1)[:3] == first
    assert done == [0, 1, 2, 2, 3]
    compare.kept(path, "b", jobs, do, 1)
    assert done[5:] == [0, 1, 2, 3]
    assert [json.loads(line)["index"] for line in path.read_text().splitlines()[1:]] == [0, 1, 2, 3]


def test_a_library_that_is_not_there_is_named_and_its_detectors_left_out(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """The comparison must run for somebody who has neither river nor ruptures."""
    monkeypatch.setattr(others, "find_spec", lambda name: None)
    row = compare.others_one(RIG)
    assert set(row["alarms"]) == set(others.SETTINGS) - set(others.NEEDS)
    said = compare.table([], [row], [row])
    assert "river is not installed, left out: Page-Hinkley (river), ADWIN (river)." in said
    assert "ruptures is not installed, left out: KernelCPD (ruptures), hindsight." in said
    assert said.count("CUSUM on block rates") == 2 * len(compare.PARTS)


def test_kept_answers_know_the_program_that_gave_them(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A changed detector must not be judged by rows of the one before."""
    (tmp_path / "core").mkdir()
    (tmp_path / "core" / "a.py").write_text("x = 1")
    monkeypatch.setattr(compare, "ROOT", tmp_path)
    before = compare.sources("core")
    assert compare.sources("core") == before == compare.sources("core/a.py")
    (tmp_path / "core" / "a.py").write_text("x = 2")
    assert compare.sources("core") != before
