"""The time without readings around a start, judged from both of its ends.

The record says when nothing was read; what furnace and extensometer did meanwhile can only be seen from what
stood before and what stands after. Temperature is held against the tolerance of the test, strain against what
the last rate would have given. A furnace that cooled and was hot again in time leaves no trace at all, so
"as before" is said of the two ends, never of the time between.

How far strain may be from what is expected: four standard deviations of the two means and of the rate over
that time, beside what the rate itself may have changed (a rate that goes as 1/t, or grows as fast, changes
by the share by which test time grew), and a floor for slow wander that no scan-to-scan noise shows.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from daq.codec import state
from daq.core import timebase
from daq.core.block import Block, Conclusion
from daq.core.rules import TestRules
from daq.records import TICKS_PER_S, FloatArray

SCANS: Final = 5
"""Strains whose median stands for each end."""
PATIENCE: Final = 16
"""Scans after which it is concluded with what there is: a sensor may be gone for good."""
MISSED: Final = 2.5
"""Times the usual interval from which on a scan is missing; a restart between two scans is no outage."""
MISSED_LEAST_TICKS: Final = 2 * TICKS_PER_S
SDS: Final = 4.0
WANDER: Final = 20e-6
"""Strain [m/m] that an extensometer at rest may wander in hours (common practice, no source)."""
TOLERANCE_K: Final = 3.0
"""Where the test has no tolerance (common practice, no source)."""
NORMAL_90: Final = 1.645
HOUR_TICKS: Final = 3600 * TICKS_PER_S


@state
@dataclass(frozen=True, slots=True)
class OutageState:
    """What stood before a start, and what came since. NaN where something is not known.

    ``from_tick``: the last scan before. ``celsius``: specimen temperature then. ``strain``, ``strain_s``:
    median of the last mean strains and its test time [s]; ``noise``: standard deviation of one of them.
    ``rate_per_s`` with its standard deviation. ``to_tick``: the first scan after; ``seen`` scans since,
    ``after`` their mean strains (test time [s], strain).
    """

    from_tick: int
    usual_ticks: float
    celsius: float
    strain: float
    strain_s: float
    noise: float
    rate_per_s: float
    rate_sd_per_s: float
    to_tick: int | None = None
    celsius_after: float = math.nan
    seen: int = 0
    after: tuple[tuple[float, float], ...] = ()


def begin(
    from_tick: int,
    usual_ticks: float,
    celsius: float | None,
    recent: FloatArray,
    rate_per_h: tuple[float | None, float | None, float | None],
) -> OutageState:
    """Return what is known at a start.

    Args:
        usual_ticks: Usual interval between scans, 0 while unknown.
        recent: (k, 2), test time [s] and mean strain of the last scans under load.
        rate_per_h: Strain rate with its 90 % limits [1/h], None where it is not known.
    """
    last = recent[-SCANS:]
    known = last.shape[0] == SCANS
    value, low, high = rate_per_h
    rate = math.nan if value is None else value / 3600.0
    sd = math.nan if low is None or high is None else (high - low) / (2.0 * NORMAL_90) / 3600.0
    return OutageState(
        from_tick, usual_ticks, math.nan if celsius is None else celsius,
        float(np.median(last[:, 1])) if known else math.nan,
        float(np.median(last[:, 0])) if known else math.nan,
        _noise(recent), rate, sd,
    )  # fmt: skip


def _noise(recent: FloatArray) -> float:
    """Standard deviation of one strain from second differences, which a steady creep rate does not touch."""
    if recent.shape[0] < 2 * SCANS:
        return math.nan
    bend = np.diff(recent[:, 1], n=2)
    return float(1.4826 / math.sqrt(6.0) * np.median(np.abs(bend)))


def take(
    s: OutageState, rules: TestRules, block: Block, mean: FloatArray, start: int | None
) -> tuple[OutageState | None, tuple[Conclusion, ...]]:
    """Take n scans after a start, with their mean strain (n,); return what is left to wait for, and findings.

    ``start`` is the lab tick of full load, None before. The state is None once there is nothing more to say.
    """
    for row in range(len(block)):
        tick = int(block.tick[row])
        if s.to_tick is None:
            if tick - s.from_tick < max(MISSED * s.usual_ticks, MISSED_LEAST_TICKS):
                return None, ()
            s = replace(s, to_tick=tick)
        celsius, strain, t_s = float(block.specimen_c[row]), float(mean[row]), float(block.t_s[row])
        if s.celsius_after != s.celsius_after and celsius == celsius:
            s = replace(s, celsius_after=celsius)
        if strain == strain and t_s >= 0.0 and len(s.after) < SCANS:
            s = replace(s, after=(*s.after, (t_s, strain)))
        s = replace(s, seen=s.seen + 1)
        strains = len(s.after) == SCANS or s.strain != s.strain
        warm = s.celsius_after == s.celsius_after or s.celsius != s.celsius
        if (strains and warm) or s.seen >= PATIENCE:
            return None, conclude(s, rules, block.first + row, tick, start)
    return s, ()


def conclude(
    s: OutageState, rules: TestRules, scan: int, tick: int, start: int | None
) -> tuple[Conclusion, ...]:
    """Return the finding, from what there is; none where no scan came since."""
    if s.to_tick is None:
        return ()
    furnace, about_heat = _furnace(s, rules)
    expected, doubt, gauge, about_strain = _extensometer(s)
    after = float(np.median([e for _, e in s.after])) if s.after else math.nan
    if gauge == "moved" and furnace in ("cooled", "hotter"):
        about_strain += ", which the change of temperature alone can do"
    hours = (s.to_tick - s.from_tick) / HOUR_TICKS
    fields = {
        "from_h": timebase.hours(s.from_tick, start),
        "to_h": timebase.hours(s.to_tick, start),
        "hours": hours,
        "furnace": furnace,
        "temperature_before_c": _known(s.celsius),
        "temperature_after_c": _known(s.celsius_after),
        "extensometer": gauge,
        "strain_before": _known(s.strain),
        "strain_expected": _known(expected),
        "strain_after": _known(after),
        "strain_doubt": _known(doubt),
        "words": f"no readings for {hours:.2f} h; {about_heat}; {about_strain}",
    }
    return (Conclusion(scan, tick, "outage", "", fields),)


def _known(x: float) -> float | None:
    return x if math.isfinite(x) else None


def _furnace(s: OutageState, rules: TestRules) -> tuple[str, str]:
    a, b = s.celsius, s.celsius_after
    if not (math.isfinite(a) and math.isfinite(b)):
        return "not_known", "the specimen's temperature is not known on both sides"
    ends = f"{a:.1f} degC before, {b:.1f} degC after"
    if b < a - (TOLERANCE_K if rules.below_k is None else rules.below_k):
        return "cooled", f"the furnace cooled: {ends}"
    if b > a + (TOLERANCE_K if rules.above_k is None else rules.above_k):
        return "hotter", f"the specimen is hotter: {ends}"
    return "as_before", f"temperature as before ({ends}), what it was between is not known"


def _extensometer(s: OutageState) -> tuple[float, float, str, str]:
    """Return the strain expected, how far from it is still as expected, the judgement, and words."""
    if s.strain != s.strain or not s.after:
        return math.nan, math.nan, "not_known", "strain is not known on both sides"
    if s.rate_per_s != s.rate_per_s:
        return math.nan, math.nan, "not_known", "the rate before is not known well enough to expect a strain"
    at = _median([t for t, _ in s.after])
    there = _median([e for _, e in s.after])
    away = at - s.strain_s
    expected = s.strain + s.rate_per_s * away
    noise = (
        0.0 if s.noise != s.noise else s.noise * math.sqrt(math.pi / 2.0 * (1.0 / SCANS + 1.0 / len(s.after)))
    )
    rate_sd = 0.0 if s.rate_sd_per_s != s.rate_sd_per_s else s.rate_sd_per_s
    grown = away / s.strain_s if s.strain_s > 0.0 else 1.0
    doubt = WANDER + SDS * math.hypot(noise, rate_sd * away) + abs(s.rate_per_s) * away * grown
    off = there - expected
    told = f"{1e6 * off:+.0f}e-6 from what the last rate gives, {1e6 * doubt:.0f}e-6 allowed"
    if abs(off) > doubt:
        return expected, doubt, "moved", f"the extensometer moved: strain is {told}"
    return expected, doubt, "as_expected", f"strain is as expected ({told})"


def _median(values: Sequence[float]) -> float:
    return float(np.median(np.array(values)))
