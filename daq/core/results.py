"""The result table of one test: what is known of it by the terms of ISO 204, and why the rest is not.

``observe`` takes the scans (running totals, ``core.tallies``), ``note`` the findings on their way out, and
``results`` makes the table: plain JSON values, deterministic, units in the keys. Strains are m/m,
extensions (e) and elongations (A, Z) per cent as the standard prints them.

What only a person can know enters by entries: ``loading_strain`` (``eti_percent``, ``ee_percent``) and
``after_test`` (``lo_mm``, ``lu_mm``, ``so_mm2`` or ``do_mm``, ``su_mm2`` or ``du_mm``).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core import band, iso204, milestones, tallies
from daq.core.block import Block, Conclusion
from daq.core.milestones import MeanState
from daq.core.rules import TestRules
from daq.core.tallies import HOUR_TICKS, Tallies
from daq.records import TICKS_PER_S, FloatArray

LIST_KEPT: Final = 200
"""Excursions, steps and entries listed one by one; all are counted."""
RECENT: Final = 80
"""Last mean strains kept: rupture may be concluded some sixty scans after it happened."""
DEFINITIONS: Final = ("minimum_rate", "rate_rise_5_percent", "offset_0p2_percent")


def _none() -> FloatArray:
    return np.empty((0, 2))


@state
@dataclass(frozen=True, slots=True)
class ResultsState:
    """``noted``: fields of findings kept, per kind; ``counts``: how many there were. ``recent`` (k, 2): test
    time [s] and mean strain of the last scans that had one. ``started_tick``: full load; ``paused_tick``:
    since when the load is taken off by entry, ``paused_ticks``: how long it was off before."""

    tallies: Tallies
    mean: MeanState = MeanState()  # noqa: RUF009
    recent: FloatArray = field(default_factory=_none)
    first_strain: float = math.nan
    noted: Mapping[str, tuple[Mapping[str, Any], ...]] = field(default_factory=dict)
    counts: Mapping[str, int] = field(default_factory=dict)
    started_tick: int | None = None
    paused_tick: int | None = None
    paused_ticks: int = 0


def begin(rules: TestRules) -> ResultsState:
    """Return the table of a test that has not begun."""
    return ResultsState(tallies.begin(rules))


def observe(s: ResultsState, rules: TestRules, block: Block) -> ResultsState:
    """Take n scans."""
    if not len(block):
        return s
    mean_state, mean = milestones.mean_strain(s.mean, block.strain_a, block.strain_b)
    s = replace(s, tallies=tallies.add(s.tallies, rules, block), mean=mean_state)
    if len(block) == 1 and s.started_tick is not None and s.first_strain == s.first_strain:
        return _observe_one(s, float(block.t_s[0]), float(mean[0]))
    rows = np.flatnonzero((mean == mean) & (block.t_s >= 0.0))
    if s.started_tick is None and block.t_s[-1] >= 0.0:
        row = int(np.argmax(block.t_s >= 0.0))
        s = replace(s, started_tick=int(block.tick[row]) - round(float(block.t_s[row]) * TICKS_PER_S))
    if not rows.size:
        return s
    first = s.first_strain if s.first_strain == s.first_strain else float(mean[rows[0]])
    last = rows[-RECENT:]
    recent = np.concatenate((s.recent, np.stack((block.t_s[last], mean[last]), axis=1)))[-RECENT:]
    return replace(s, recent=recent.copy(), first_strain=first)


def _observe_one(s: ResultsState, t_s: float, strain: float) -> ResultsState:
    if strain != strain or t_s < 0.0:
        return s
    recent = np.empty((min(RECENT, s.recent.shape[0] + 1), 2))
    recent[:-1] = s.recent[s.recent.shape[0] + 1 - recent.shape[0] :]
    recent[-1] = t_s, strain
    return replace(s, recent=recent)


def note(s: ResultsState, c: Conclusion) -> ResultsState:
    """Take one finding of this test."""
    if c.kind not in ("stage", "minimum_rate", "onset", "milestone", "excursion", "step", "entry"):
        return s
    fields = {**c.fields, "key": c.key}
    before = s.noted.get(c.kind, ())
    if c.kind == "onset":
        before = tuple(f for f in before if f["definition"] != fields["definition"])
    elif c.kind == "minimum_rate":
        before = ()
    kept = (*before, fields)[-LIST_KEPT:]
    counts = {**s.counts, c.kind: s.counts.get(c.kind, 0) + 1}
    s = replace(s, noted={**s.noted, c.kind: kept}, counts=counts)
    if c.kind == "entry" and c.key == "interrupted" and s.paused_tick is None:
        return replace(s, paused_tick=c.tick)
    if c.kind == "entry" and c.key == "resumed" and s.paused_tick is not None:
        return replace(s, paused_tick=None, paused_ticks=s.paused_ticks + c.tick - s.paused_tick)
    return s


def area_m2(rules: TestRules) -> float | None:
    """Return the cross section of the specimen [m2], None where it is not given."""
    area = iso204.area_mm2(rules)
    return None if area is None else area * 1e-6


# --- the table --------------------------------------------------------------------------


def results(s: ResultsState, rules: TestRules, status: Mapping[str, Any]) -> dict[str, Any]:
    """Return the table as it stands. ``status``: ``follow.status`` of the same test."""
    table: dict[str, Any] = {"not_known": {}}
    why: dict[str, str] = table["not_known"]
    rupture_h = _rupture_h(s)
    table |= _identity(rules)
    table |= {"stage": status.get("stage"), "stages": _stages(s), "rupture_time_h": rupture_h}
    if rupture_h is None:
        why["rupture_time_h"] = "the specimen has not ruptured"
    table |= _clocks(s, rules, rupture_h)
    table["times_to_strain"] = [
        {"strain": f["strain"], "time_h": f["time_h"]} for f in s.noted.get("milestone", ())
    ]
    for level in rules.limits.milestones:
        if not any(f["strain"] == level for f in table["times_to_strain"]):
            why[f"time to {100.0 * level:g} % strain"] = "not reached"
    table |= _rates(s, status, why)
    table["onsets"] = _onsets(s, why)
    table["iso204"] = _iso204(s, rules, rupture_h, why)
    table["temperatures"] = _temperatures(s, rules)
    table["excursions"] = _listed(s, "excursion")
    table["steps"] = _listed(s, "step")
    table["entries"] = _listed(s, "entry")
    table["gaps"] = _gaps(s.tallies)
    table["readings"] = _readings(s.tallies, rules)
    return table


def _identity(rules: TestRules) -> dict[str, Any]:
    area, length = iso204.area_mm2(rules), rules.specimen.extensometer_length_mm
    limits = None
    if rules.set_point_c is not None and rules.below_k is not None and rules.above_k is not None:
        limits = [rules.set_point_c - rules.below_k, rules.set_point_c + rules.above_k]
    return {
        "test": rules.test,
        "specimen": rules.specimen.id,
        "material": rules.specimen.material,
        "stress_mpa": None if rules.stress_pa is None else rules.stress_pa / iso204.PASCAL_PER_MPA,
        "loading": rules.loading.value,
        "set_point_c": rules.set_point_c,
        "band_c": limits,
        "tolerance": rules.tolerance,
        "extensometer_length_mm": length,
        "area_mm2": area,
        "proportionality": iso204.proportionality(length, area) if area and length else None,
    }


def _stages(s: ResultsState) -> list[dict[str, Any]]:
    wanted = ("stage", "from", "onset_h", "onset_low_h", "onset_high_h", "withdraws", "why")
    return [{k: f.get(k) for k in wanted} for f in s.noted.get("stage", ())]


def _rupture_h(s: ResultsState) -> float | None:
    times = [f.get("onset_h") for f in s.noted.get("stage", ()) if f["stage"] == "ruptured"]
    return times[-1] if times else None


def _clocks(s: ResultsState, rules: TestRules, rupture_h: float | None) -> dict[str, Any]:
    t = s.tallies
    last_h = None if t.last_s != t.last_s else t.last_s / 3600.0
    duration_h = rupture_h if rupture_h is not None else last_h
    paused = s.paused_ticks
    if s.paused_tick is not None and s.started_tick is not None and last_h is not None:
        paused += max(0, s.started_tick + round(last_h * HOUR_TICKS) - s.paused_tick)
    judged = rules.set_point_c is not None and rules.below_k is not None and bool(t.temperatures)
    mean = t.temperatures[-1] if t.temperatures else None
    return {
        "duration_h": duration_h,
        "hours_under_load": None if duration_h is None else max(0.0, duration_h - paused / HOUR_TICKS),
        "hours_recorded": t.seen_ticks / HOUR_TICKS,
        "hours_recorded_in_band": (mean.ticks - mean.below - mean.above) / HOUR_TICKS
        if judged and mean is not None
        else None,
        "scans": t.scans,
        "scans_under_load": t.loaded_scans,
    }


def _rates(s: ResultsState, status: Mapping[str, Any], why: dict[str, str]) -> dict[str, Any]:
    found = s.noted.get("minimum_rate", ())
    if found:
        f = found[-1]
        told = {
            "rate_per_h": f["rate_per_h"],
            "low_per_h": f["low_per_h"],
            "high_per_h": f["high_per_h"],
            "time_h": f["time_h"],
            "corrected_rate_per_h": f["corrected_rate_per_h"],
        }
    else:
        told = None
        why["minimum_rate"] = "the rate still falls, or too little was seen to fit it"
    last = {k: status.get(k) for k in ("rate_per_h", "rate_low_per_h", "rate_high_per_h")}
    return {"minimum_rate": told, "last_rate": last}


def _onsets(s: ResultsState, why: dict[str, str]) -> dict[str, float | None]:
    known = {f["definition"]: f["time_h"] for f in s.noted.get("onset", ())}
    for name in DEFINITIONS:
        if known.get(name) is None:
            why[f"onset by {name}"] = "not reached"
    return {name: known.get(name) for name in DEFINITIONS}


def _entered(s: ResultsState, entry: str) -> dict[str, float]:
    """Return the numbers of the last entries of that name; a later entry corrects an earlier one."""
    out: dict[str, float] = {}
    for f in s.noted.get("entry", ()):
        if f["key"] == entry:
            values = f.get("values", {})
            out |= {k: float(v) for k, v in values.items() if isinstance(v, int | float)}
    return out


def _final_strain(s: ResultsState, rupture_h: float | None) -> float | None:
    rows = s.recent
    if rupture_h is not None:
        rows = rows[rows[:, 0] < rupture_h * 3600.0 - 1e-6]
    return float(rows[-1, 1]) if rows.size else None


def _iso204(
    s: ResultsState, rules: TestRules, rupture_h: float | None, why: dict[str, str]
) -> dict[str, Any]:
    loading, after = _entered(s, "loading_strain"), _entered(s, "after_test")
    total = _final_strain(s, rupture_h)
    symbols: dict[str, Any] = {"tu_h": rupture_h, "et_percent": None}
    names = ("eti", "ee", "ei", "ep", "ef")
    if total is None:
        why["et"] = "no strain was measured"
        symbols |= {f"{n}_percent": None for n in names}
    else:
        found = iso204.extensions_percent(
            100.0 * total, loading.get("eti_percent"), loading.get("ee_percent")
        )
        symbols |= {f"{name}_percent": value for name, value in found.items()}
        for name in names:
            if found[name] is None:
                why[name] = "needs the entry loading_strain"
    lo, lu = after.get("lo_mm"), after.get("lu_mm")
    so, su = _section(after, "o"), _section(after, "u")
    so = so if so is not None else iso204.area_mm2(rules)
    a_name = "Au_percent" if rupture_h is not None else "Aper_percent"
    symbols[a_name] = iso204.elongation_percent(lo, lu) if lo and lu else None
    symbols["Zu_percent"] = iso204.reduction_percent(so, su) if so and su else None
    for name in (a_name, "Zu_percent"):
        if symbols[name] is None:
            why[name.removesuffix("_percent")] = "needs the entry after_test"
    symbols["strain_at_full_load"] = s.first_strain if s.first_strain == s.first_strain else None
    return symbols


def _section(after: Mapping[str, float], which: str) -> float | None:
    if f"s{which}_mm2" in after:
        return after[f"s{which}_mm2"]
    return iso204.circle_mm2(after[f"d{which}_mm"]) if f"d{which}_mm" in after else None


def _temperatures(s: ResultsState, rules: TestRules) -> dict[str, Any]:
    judged = rules.set_point_c is not None and rules.below_k is not None and rules.above_k is not None
    names = [signal.name for signal in band.begin(rules).signals]
    return {name: t.told(judged=judged) for name, t in zip(names, s.tallies.temperatures, strict=True)}


def _listed(s: ResultsState, kind: str) -> dict[str, Any]:
    listed = [{k: v for k, v in f.items() if k != "key"} for f in s.noted.get(kind, ())]
    return {"count": s.counts.get(kind, 0), "listed": listed}


def _gaps(t: Tallies) -> dict[str, Any]:
    return {
        "count": t.gap_count,
        "total_h": t.gap_ticks / HOUR_TICKS,
        "usual_interval_s": t.cadence.usual / TICKS_PER_S if t.cadence.usual else None,
        "listed": [{"from_h": a / 3600.0, "to_h": b / 3600.0} for _, a, b in t.gaps],
    }


def _readings(t: Tallies, rules: TestRules) -> dict[str, dict[str, int]]:
    return {
        c.name: {"good": good, "suspect": suspect, "bad": bad}
        for c, good, suspect, bad in zip(rules.channels, t.good, t.suspect, t.bad, strict=True)
    }
