"""The result table: identities of the standard, running totals that no cut can change, reasons for gaps."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest
from watch_blocks import block_of, rules_for

from daq.codec import encode_state
from daq.core import iso204, results
from daq.core.block import Block, Conclusion
from daq.core.rules import Limits, TestRules
from daq.records import CoreError, Quality

# BAM reference data set, ISO 204 tests of CMSX-6, doi 10.1016/j.dib.2025.112436:
# name, Lo, Le, Lu, Au, et, eti, ee, ei, ep, ef; extensions to the printed rounding
BAM = (
    ("C-78", 23.8, 22.7, 30.4, 28.0, 28.1, 0.290, 0.274, 0.016, 27.8, 27.8),
    ("C-80", 24.0, 22.5, 30.4, 27.0, 27.5, 0.287, 0.270, 0.017, 27.2, 27.2),
    ("C-89", 24.0, 22.9, 30.3, 26.0, 26.9, 0.280, 0.262, 0.018, 26.6, 26.6),
    ("C-82", 23.8, 22.8, 30.4, 28.0, 28.8, 0.251, 0.242, 0.009, 28.5, 28.5),
    ("C-97", 23.8, 22.6, 30.3, 27.0, 28.0, 0.256, 0.242, 0.013, 27.8, 27.7),
    ("C-99", 23.9, 22.9, 30.5, 28.0, 28.2, 0.251, 0.236, 0.015, 28.0, 27.9),
    ("C-81", 23.9, 23.0, 30.2, 27.0, 27.4, 0.207, 0.207, 0.0, 27.2, 27.2),
    ("C-91", 24.1, 22.8, 30.5, 27.0, 27.8, 0.209, 0.209, 0.0, 27.6, 27.6),
    ("C-98", 24.0, 22.9, 30.2, 26.0, 26.7, 0.202, 0.202, 0.0, 26.5, 26.5),
    ("C-85", 24.0, 23.8, None, None, 1.00, 0.177, 0.177, 0.0, 0.828, 0.828),
    ("C-94", 24.0, 22.5, None, None, 0.944, 0.156, 0.156, 0.0, 0.788, 0.788),
    ("C-95", 23.9, 22.9, None, None, 0.964, 0.153, 0.153, 0.0, 0.811, 0.811),
)


@pytest.mark.parametrize("row", BAM, ids=[r[0] for r in BAM])
def test_extensions_follow_the_reference_data_set(row: Any) -> None:
    """Published rows of uninterrupted tests must come out of the identities, to the rounding printed."""
    _, lo, _, lu, au, et, eti, ee, ei, ep, ef = row
    found = iso204.extensions_percent(et, eti, ee)
    coarse = 0.06 if et > 10.0 else 0.006
    assert found["ei"] == pytest.approx(ei, abs=0.0016)
    assert found["ep"] == pytest.approx(ep, abs=coarse)
    assert found["ef"] == pytest.approx(ef, abs=max(coarse, 0.106 if et > 10.0 else 0.0))
    if lu is not None:
        lengths = 100.0 * 0.05 * (1.0 + lu / lo) / lo  # both lengths are printed to 0.1 mm
        assert iso204.elongation_percent(lo, lu) == pytest.approx(au, abs=0.5 + lengths)


def test_identities_of_the_standard_hold() -> None:
    """eti = ee + ei; et = ee + ei + ef; ep = ei + ef (definitions of ISO 204)."""
    f = iso204.extensions_percent(5.3, 0.29, 0.274)
    assert f["ee"] + f["ei"] == pytest.approx(f["eti"])  # type: ignore[operator]
    assert f["ee"] + f["ei"] + f["ef"] == pytest.approx(f["et"])  # type: ignore[operator]
    assert f["ei"] + f["ef"] == pytest.approx(f["ep"])  # type: ignore[operator]
    assert iso204.extensions_percent(0.29, 0.29, 0.274)["ef"] == 0.0


def test_proportionality_of_a_six_millimetre_piece() -> None:
    """D = 6 mm and 24 mm give k = 4.5135 (Lr/sqrt(So), computed)."""
    assert iso204.proportionality(24.0, iso204.circle_mm2(6.0)) == pytest.approx(4.5135, abs=5e-5)
    with pytest.raises(CoreError, match="original gauge length"):
        iso204.elongation_percent(0.0, 1.0)


def record(seed: int, n: int = 700) -> tuple[TestRules, Block]:
    rng = np.random.default_rng(seed)
    rules = rules_for(["a", "b", "top", "mid"], Limits(milestones=(0.001, 0.01)))
    interval = 30.0 * (rng.random(n) + 0.5)
    interval[[200, 450]] = 7200.0
    t_s = np.cumsum(interval) - 3000.0
    columns = {
        "a": np.linspace(0.0, 0.004, n) + 1e-5 * rng.normal(size=n),
        "b": np.linspace(0.0, 0.0042, n) + 1e-5 * rng.normal(size=n),
        "top": 600.0 + np.cumsum(rng.normal(size=n)) * 0.2,
        "mid": 600.0 + rng.normal(size=n),
    }
    columns["mid"][rng.random(n) < 0.1] = np.nan
    quality = {"b": np.where(rng.random(n) < 0.2, int(Quality.SUSPECT_SIDES), 0)}
    return rules, block_of(rules, columns, t_s=t_s, quality=quality)


def run(rules: TestRules, block: Block, cuts: list[int]) -> results.ResultsState:
    state = results.begin(rules)
    for i, j in zip([0, *cuts], [*cuts, len(block)], strict=True):
        state = results.observe(state, rules, block.cut(i, j))
    return state


@pytest.mark.parametrize("seed", range(4))
def test_totals_do_not_depend_on_cuts(seed: int) -> None:
    """Sums over real numbers are the usual way to lose the last bit."""
    rules, block = record(seed)
    n = len(block)
    whole = encode_state(run(rules, block, []))
    rng = np.random.default_rng(seed)
    for cuts in (list(range(1, n)), sorted(set(rng.integers(1, n, 40).tolist()))):
        assert encode_state(run(rules, block, cuts)) == whole


def test_totals_agree_with_a_plain_recount() -> None:
    """Against the same figures worked out another way, over the whole record at once."""
    rules, block = record(5)
    table = results.results(run(rules, block, []), rules, {"stage": "primary"})
    loaded = block.t_s >= 0.0
    interval = np.diff(block.t_s, prepend=block.t_s[0])
    weight = np.where(loaded & (interval < 3600.0), interval, 0.0)
    weight[np.argmax(loaded)] = 0.0
    top = block.values[:, 2]
    told = table["temperatures"]["top"]
    mean = np.average(top[loaded], weights=weight[loaded])
    assert told["mean_c"] == pytest.approx(mean, abs=1e-6)
    assert told["sd_k"] == pytest.approx(
        np.sqrt(np.average((top[loaded] - mean) ** 2, weights=weight[loaded]))
    )
    assert told["max_c"] == top[loaded].max()
    assert told["min_at_h"] == pytest.approx(block.t_s[loaded][np.argmin(top[loaded])] / 3600.0)
    over = (top > 603.0).astype(float)
    half = 0.5 * (over + np.concatenate(([0.0], over[:-1])))
    assert told["above_band_h"] == pytest.approx(float((half * weight)[loaded].sum()) / 3600.0, rel=2e-3)
    assert table["gaps"]["count"] == 2
    assert table["gaps"]["total_h"] == pytest.approx(4.0)
    assert table["hours_recorded"] == pytest.approx(weight.sum() / 3600.0)
    assert table["scans"] == len(block)
    mid = block.values[:, 3]
    assert table["readings"]["mid"]["bad"] == int(np.isnan(mid[loaded]).sum())
    assert table["readings"]["b"]["suspect"] == int((block.quality[loaded, 1] > 0).sum())


def test_a_gap_before_full_load_is_no_gap_of_the_test() -> None:
    """Heating and soaking are not time under load."""
    rules = rules_for(["a"])
    t_s = np.concatenate((np.arange(40) * 10.0 - 9000.0, np.arange(40) * 10.0))
    block = block_of(rules, {"a": np.zeros(80)}, t_s=t_s)
    table = results.results(run(rules, block, []), rules, {})
    assert table["gaps"]["count"] == 0
    assert table["duration_h"] == pytest.approx(390.0 / 3600.0)


def test_the_table_is_plain_json_and_says_why_something_is_missing() -> None:
    """An empty field without a reason is a question to the laboratory."""
    rules, block = record(1)
    state = run(rules, block, [])
    tick = int(block.tick[-1])
    n = len(block)
    state = results.note(state, Conclusion(n, tick, "milestone", "0.001", {"strain": 0.001, "time_h": 1.5}))
    state = results.note(
        state,
        Conclusion(
            n, tick, "onset", "rate_rise_5_percent", {"definition": "rate_rise_5_percent", "time_h": None}
        ),
    )
    table = results.results(state, rules, {"stage": "primary", "rate_per_h": 1e-4})
    assert json.loads(json.dumps(table, allow_nan=False)) == table
    assert table["times_to_strain"] == [{"strain": 0.001, "time_h": 1.5}]
    assert table["onsets"] == {"minimum_rate": None, "rate_rise_5_percent": None, "offset_0p2_percent": None}
    assert table["not_known"]["rupture_time_h"] == "the specimen has not ruptured"
    assert table["not_known"]["time to 1 % strain"] == "not reached"
    assert table["not_known"]["ef"] == "needs the entry loading_strain"
    assert "Zu" in table["not_known"]


def test_entries_and_rupture_complete_the_table() -> None:
    """Final length and section come from a person; strain at rupture is the last one before it."""
    rules, block = record(2)
    state = run(rules, block, [])
    tick, n = int(block.tick[-1]), len(block)
    rupture_h = float(block.t_s[-3]) / 3600.0
    for kind, key, fields in (
        ("stage", "ruptured", {"stage": "ruptured", "from": "tertiary", "onset_h": rupture_h}),
        (
            "entry",
            "loading_strain",
            {"entry": "loading_strain", "values": {"eti_percent": 0.2, "ee_percent": 0.15}},
        ),
        (
            "entry",
            "after_test",
            {"entry": "after_test", "values": {"lo_mm": 24.0, "lu_mm": 30.0, "so_mm2": 28.0}},
        ),
        ("entry", "after_test", {"entry": "after_test", "values": {"lu_mm": 30.4, "su_mm2": 12.0}}),
    ):
        state = results.note(state, Conclusion(n, tick, kind, key, fields))
    table = results.results(state, rules, {"stage": "ruptured"})
    iso = table["iso204"]
    mean = 0.5 * (block.strain_a + block.strain_b)
    assert iso["tu_h"] == rupture_h
    assert iso["et_percent"] == pytest.approx(100.0 * mean[-4])
    assert iso["ef_percent"] == pytest.approx(iso["et_percent"] - 0.2)
    assert iso["Au_percent"] == pytest.approx(100.0 * 6.4 / 24.0)
    assert iso["Zu_percent"] == pytest.approx(100.0 * 16.0 / 28.0)
    assert table["duration_h"] == rupture_h


def test_an_interruption_is_not_time_under_load() -> None:
    """Hours under load and hours since full load differ by what was unloaded."""
    rules, block = record(3)
    state = run(rules, block, [])
    first = state.started_tick
    assert first is not None
    for key, hours in (("interrupted", 1.0), ("resumed", 2.5)):
        tick = first + round(hours * 36_000_000)
        state = results.note(state, Conclusion(0, tick, "entry", key, {"entry": key, "values": {}}))
    table = results.results(state, rules, {})
    assert table["hours_under_load"] == pytest.approx(table["duration_h"] - 1.5)
