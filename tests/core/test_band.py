"""Temperature against its band: excursions, heating, overshoot, spikes, gaps, suspected thermocouples."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.core import watch
from daq.core.block import Conclusion, Cue
from daq.core.rules import Limits, TestRules
from daq.records import FloatArray, Quality

EVERY_S = 30.0


def items_of(rules: TestRules, columns: dict[str, FloatArray], **more: Any) -> list[Conclusion | Cue]:
    n = len(next(iter(columns.values())))
    columns = {"a": np.zeros(n), **columns}
    block = block_of(rules, columns, EVERY_S, **more)
    state, items = watch.watch(watch.begin(rules), rules, block)
    end = watch.end(state, rules, int(block.tick[-1]), float(block.t_s[-1]), n - 1)[1]
    return [*items, *end]


def excursions(items: list[Conclusion | Cue]) -> list[dict[str, Any]]:
    return [dict(i.fields) for i in items if isinstance(i, Conclusion) and i.kind == "excursion"]


def cues(items: list[Conclusion | Cue], subject: str = "") -> list[tuple[str, bool, int]]:
    found = [(i.alarm, i.active, i.scan) for i in items if isinstance(i, Cue) and i.subject == subject]
    return [c for c in found if not c[0].startswith("temperature_nearing")]


def one(levels: list[tuple[int, float]]) -> FloatArray:
    """A record of so many scans at each level."""
    return np.concatenate([np.full(n, level) for n, level in levels])


@pytest.mark.parametrize(
    ("set_point", "reading", "out"),
    [
        (600.0, 603.1, True),
        (600.0, 603.0, False),
        (800.0, 803.9, False),
        (800.0, 804.1, True),
        (801.0, 805.9, False),
    ],
)
def test_the_specified_temperature_chooses_the_band(set_point: float, reading: float, out: bool) -> None:
    """603.1 at 600 is out of ISO 204's limits, 803.9 at 800 is in (limits from memory)."""
    band = 3.0 if set_point <= 600.0 else 4.0 if set_point <= 800.0 else 5.0
    rules = rules_for(["a", "mid"], set_point_c=set_point, below_k=band, above_k=band)
    items = items_of(rules, {"mid": one([(50, set_point), (20, reading), (50, set_point)])})
    assert bool(excursions(items)) is out


def test_an_excursion_is_told_with_its_times_and_its_worst() -> None:
    """The alarm comes once the time is out, the finding when it is over, both dated back."""
    rules = rules_for(["a", "mid"])
    x = one([(100, 600.0), (5, 604.0), (1, 605.5), (14, 604.0), (100, 600.0)])
    items = items_of(rules, {"mid": x})
    assert excursions(items) == [
        {
            "channel": "mid",
            "from_h": 100 * EVERY_S / 3600.0,
            "to_h": 119 * EVERY_S / 3600.0,
            "worst_c": 605.5,
            "limit_c": 603.0,
        }
    ]
    # 60 s out of band: the third scan; back: 60 s in the clear
    assert cues(items, "mid") == [("temperature_high", True, 102), ("temperature_high", False, 122)]


def test_low_is_told_as_low() -> None:
    """A cold specimen is another alarm than a hot one."""
    rules = rules_for(["a", "mid"])
    items = items_of(rules, {"mid": one([(100, 600.0), (20, 595.0), (100, 600.0)])})
    (excursion,) = excursions(items)
    assert (excursion["worst_c"], excursion["limit_c"]) == (595.0, 597.0)
    assert [c[0] for c in cues(items, "mid")] == ["temperature_low", "temperature_low"]


def test_a_spike_is_no_excursion_however_large() -> None:
    """One reading spans no time."""
    rules = rules_for(["a", "mid"])
    x = one([(100, 600.0), (1, 900.0), (50, 600.0), (1, 300.0), (50, 600.0), (1, 700.0), (50, 600.0)])
    assert items_of(rules, {"mid": x}) == []


def test_a_value_that_plays_around_its_limit_raises_one_alarm() -> None:
    """Noise at the limit must not chatter (ISA-18.2: chattering alarms, zero)."""
    rules = rules_for(["a", "mid"])
    rng = np.random.default_rng(4)
    x = 603.15 + 0.25 * rng.normal(size=4000)
    x[:200] = 600.0
    items = items_of(rules, {"mid": x})
    assert len(excursions(items)) <= 3
    assert {c[0] for c in cues(items, "mid")} == {"temperature_high"}
    assert len(cues(items, "mid")) <= 6


def test_heating_raises_nothing_and_overshoot_is_judged() -> None:
    """Hours of rising temperature are no excursion; what comes over the top is."""
    rules = rules_for(["a", "top", "mid", "bot"])
    ramp = np.concatenate((np.linspace(20.0, 606.0, 400), one([(20, 606.0), (200, 600.0)])))
    columns = {"top": ramp, "mid": ramp - 0.5, "bot": ramp - 1.0}
    items = items_of(rules, columns)
    assert {e["channel"] for e in excursions(items)} == {"top", "mid", "bot", "specimen_mean"}
    assert all(e["worst_c"] > 603.0 for e in excursions(items))
    assert not [c for c in items if isinstance(c, Cue) and "low" in c.alarm]


def test_a_thermocouple_that_never_arrives_counts_half_an_hour_after_the_mean() -> None:
    """Else a cold end would never be told; while it still warms up it is left alone."""
    rules = rules_for(["a", "top", "mid", "bot"])
    n = 300
    x = np.full(n, 601.5)
    items = items_of(rules, {"top": x, "mid": x, "bot": np.full(n, 594.0)})
    (low,) = [c for c in items if isinstance(c, Cue) and c.subject == "bot" and c.active]
    assert low.alarm == "temperature_low"
    assert 1800.0 <= low.scan * EVERY_S <= 1900.0


def test_nearing_is_said_before_the_band_is_left() -> None:
    """Four fifths of the way for ten minutes; a short touch is not worth a word."""
    rules = rules_for(["a", "mid"])
    x = one([(100, 600.0), (10, 602.6), (100, 600.0), (40, 602.6), (100, 600.0)])
    near = [(i.alarm, i.active, i.scan) for i in items_of(rules, {"mid": x}) if isinstance(i, Cue)]
    assert near == [("temperature_nearing_high", True, 230), ("temperature_nearing_high", False, 270)]


def test_a_gap_does_not_count_as_time_out_of_band() -> None:
    """Two readings out with hours between them prove nothing about those hours."""
    rules = rules_for(["a", "mid"], scan_every_s=EVERY_S)
    t_s = np.arange(60) * EVERY_S
    t_s[30:] += 20_000.0
    x = np.full(60, 600.0)
    x[29:31] = 610.0
    assert excursions(items_of(rules, {"mid": x}, t_s=t_s)) == []
    x[29:33] = 610.0  # but 60 s after it do
    (excursion,) = excursions(items_of(rules, {"mid": x}, t_s=t_s))
    assert excursion["from_h"] == t_s[29] / 3600.0
    assert excursion["to_h"] == t_s[32] / 3600.0


def test_missing_readings_neither_end_nor_prolong_an_excursion() -> None:
    """No reading is no evidence."""
    rules = rules_for(["a", "mid"])
    x = one([(100, 600.0), (30, 605.0), (100, 600.0)])
    holes = x.copy()
    holes[[105, 110, 111, 120]] = np.nan
    assert excursions(items_of(rules, {"mid": holes})) == excursions(items_of(rules, {"mid": x}))


def test_doubtful_readings_are_passed_over() -> None:
    """A reading marked as a spike, or of a suspected sensor, begins nothing."""
    rules = rules_for(["a", "mid"])
    x = one([(100, 600.0), (30, 605.0), (100, 600.0)])
    doubt = np.where(x > 603.0, int(Quality.SUSPECT_SPIKE), 0)
    assert items_of(rules, {"mid": x}, quality={"mid": doubt}) == []
    doubt = np.where(x > 603.0, int(Quality.SUSPECT_RANGE), 0)
    assert len(excursions(items_of(rules, {"mid": x}, quality={"mid": doubt}))) == 1


def three(seed: int, n: int = 600) -> dict[str, FloatArray]:
    rng = np.random.default_rng(seed)
    columns = {name: 600.0 + 0.2 * rng.normal(size=n) for name in ("top", "mid", "bot")}
    columns["output"] = 48.0 + 0.1 * rng.normal(size=n)
    return columns


def test_one_thermocouple_that_leaves_alone_is_suspected() -> None:
    """Steady others and a steady controller: the sensor, not the specimen; the excursion is on record."""
    rules = rules_for(["a", "top", "mid", "bot", "output"])
    columns = three(1)
    columns["bot"][300:400] += 15.0
    items = items_of(rules, columns)
    alarms = {(i.alarm, i.subject) for i in items if isinstance(i, Cue) and i.active}
    assert ("sensor_suspected", "bot") in alarms
    assert not {a for a in alarms if a[0] == "temperature_high"}
    marked = {e["channel"]: e.get("suspected_sensor") for e in excursions(items)}
    assert marked == {"bot": True, "specimen_mean": True}


def test_a_hot_specimen_is_not_taken_for_a_sensor() -> None:
    """All of them leave: whatever the controller says, the specimen is hot."""
    rules = rules_for(["a", "top", "mid", "bot", "output"])
    columns = three(2)
    for name in ("top", "mid", "bot"):
        columns[name][300:400] += 6.0
    alarms = {(i.alarm, i.subject) for i in items_of(rules, columns) if isinstance(i, Cue) and i.active}
    assert {a for a in alarms if a[0] == "temperature_high"} >= {
        ("temperature_high", n) for n in ("top", "mid", "bot")
    }
    assert not {a for a in alarms if a[0] == "sensor_suspected"}


def test_a_moving_controller_output_clears_the_sensor() -> None:
    """One end of the specimen gets hot while the controller works: believe the thermocouple."""
    rules = rules_for(["a", "top", "mid", "bot", "output"])
    columns = three(3)
    columns["bot"][300:400] += 6.0
    columns["output"][300:400] -= 4.0
    alarms = {(i.alarm, i.subject) for i in items_of(rules, columns) if isinstance(i, Cue) and i.active}
    assert ("temperature_high", "bot") in alarms
    assert ("sensor_suspected", "bot") not in alarms


def test_suspicion_ends_when_the_others_follow() -> None:
    """What began as a sensor's fault may be the first sign of a hot furnace."""
    rules = rules_for(["a", "top", "mid", "bot", "output"])
    columns = three(4)
    columns["bot"][300:500] += 5.0
    columns["mid"][350:500] += 2.0
    columns["top"][350:500] += 2.0
    said = [
        (i.alarm, i.active) for i in items_of(rules, columns) if isinstance(i, Cue) and i.subject == "bot"
    ]
    order = [s for s in said if s[0] in ("sensor_suspected", "temperature_high")]
    assert order[:3] == [("sensor_suspected", True), ("sensor_suspected", False), ("temperature_high", True)]


def test_gradient_along_the_gauge_length_is_watched() -> None:
    """Hottest less coldest, with the same patience as an excursion."""
    rules = rules_for(["a", "top", "mid", "bot"], Limits(gradient_k=3.0))
    n = 300
    top = one([(100, 600.0), (1, 640.0), (49, 600.0), (50, 602.2), (100, 600.0)])
    items = items_of(rules, {"top": top, "mid": np.full(n, 600.0), "bot": np.full(n, 599.0)})
    assert cues(items) == [("gradient", True, 152), ("gradient", False, 202)]


def test_without_a_tolerance_nothing_is_judged() -> None:
    """A laboratory may only want the record."""
    rules = rules_for(["a", "mid"], below_k=None, above_k=None)
    assert items_of(rules, {"mid": one([(100, 600.0), (100, 700.0)])}) == []
