"""Running totals of one test: scans, readings by quality, temperatures, time in band, gaps.

Totals over real numbers go on from a carry, one addition after the other (``np.add.accumulate``); counts and
ticks are integers. So no bit depends on how the scans were cut into blocks.

Means and deviations of temperatures are weighted with time: each reading stands for the time since
the scan before (none across a gap), so that a burst of fast scans does not outvote a quiet week.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core import band, leaves
from daq.core.block import Block
from daq.core.leaves import Cadence, Paced
from daq.core.rules import TestRules
from daq.core.suspects import EPS_K
from daq.records import BAD, TICKS_PER_S, FloatArray

HOUR_TICKS: Final = 3600 * TICKS_PER_S
GAPS_KEPT: Final = 100
"""Gaps listed one by one: the longest ones; all are counted."""


@state
@dataclass(frozen=True, slots=True)
class Temperature:
    """One signal under load: weights [ticks], sums of deviations from the first reading, extremes [degC],
    ticks beyond the limits. ``far`` -1, 0, 1: where the last reading lay."""

    ticks: int = 0
    base: float = math.nan
    sum: float = 0.0
    squares: float = 0.0
    least: float = math.inf
    most: float = -math.inf
    least_s: float = 0.0
    most_s: float = 0.0
    below: int = 0
    above: int = 0
    far: int = 0

    def told(self, *, judged: bool) -> dict[str, float | None] | None:
        """Return plain values, None without a reading."""
        if self.base != self.base:
            return None
        mean = self.base + (self.sum / self.ticks if self.ticks else 0.0)
        spread = max(0.0, self.squares / self.ticks - (self.sum / self.ticks) ** 2) if self.ticks else 0.0
        return {
            "mean_c": mean,
            "sd_k": math.sqrt(spread),
            "min_c": self.least,
            "min_at_h": self.least_s / 3600.0,
            "max_c": self.most,
            "max_at_h": self.most_s / 3600.0,
            "below_band_h": self.below / HOUR_TICKS if judged else None,
            "above_band_h": self.above / HOUR_TICKS if judged else None,
        }


@state
@dataclass(frozen=True, slots=True)
class Tallies:
    """All of it. ``gaps``: the longest (ticks, from_s, to_s); ``good``/``suspect``/``bad`` per channel."""

    cadence: Cadence
    temperatures: tuple[Temperature, ...]
    good: tuple[int, ...]
    suspect: tuple[int, ...]
    bad: tuple[int, ...]
    scans: int = 0
    loaded_scans: int = 0
    first_s: float = math.nan
    last_s: float = math.nan
    seen_ticks: int = 0
    gap_count: int = 0
    gap_ticks: int = 0
    gaps: tuple[tuple[int, float, float], ...] = ()


def begin(rules: TestRules) -> Tallies:
    """Return totals of nothing."""
    c = len(rules.channels)
    signals = len(band.begin(rules).signals)
    return Tallies(Cadence(), (Temperature(),) * signals, (0,) * c, (0,) * c, (0,) * c)


def add(s: Tallies, rules: TestRules, block: Block) -> Tallies:
    """Return the totals with n more scans; only scans under load (``t_s`` >= 0) count, save for ``scans``."""
    n = len(block)
    if not n:
        return s
    cadence, paced = leaves.pace(s.cadence, block.tick, rules.scan_every_s)
    if n == 1 and s.first_s == s.first_s and paced.step[0]:
        return _add_one(replace(s, cadence=cadence), rules, block, int(paced.step[0]))
    loaded = block.t_s >= 0.0
    s = replace(s, cadence=cadence, scans=s.scans + n)
    if not loaded.any():
        return s
    began = s.first_s == s.first_s
    t = block.t_s[loaded]
    step = np.where(loaded, paced.step, 0)
    if not began:
        step[int(np.argmax(loaded))] = 0  # the interval before full load is not time under load
    q = block.quality[loaded]
    bad = np.count_nonzero(q >= BAD, axis=0)
    good = np.count_nonzero(q == 0, axis=0)
    s = replace(
        s,
        loaded_scans=s.loaded_scans + int(t.size),
        first_s=s.first_s if began else float(t[0]),
        last_s=float(t[-1]),
        seen_ticks=s.seen_ticks + int(step.sum()),
        good=_plus(s.good, good),
        bad=_plus(s.bad, bad),
        suspect=_plus(s.suspect, t.size - good - bad),
    )
    s = _add_gaps(s, block, paced, loaded, began)
    return replace(s, temperatures=_add_temperatures(s.temperatures, rules, block, step, loaded))


def _add_one(s: Tallies, rules: TestRules, block: Block, step: int) -> Tallies:
    """Do what :func:`add` does, to the same bits, for the live scan that comes in its turn."""
    t_s = float(block.t_s[0])
    if t_s < 0.0:
        return replace(s, scans=s.scans + 1)
    q = block.quality[0].tolist()
    x = band.signals(rules, block)[0].tolist()
    return Tallies(
        s.cadence,
        tuple(_add_reading(t, rules, t_s, v, step) for t, v in zip(s.temperatures, x[:-1], strict=True)),
        tuple(k + (c == 0) for k, c in zip(s.good, q, strict=True)),
        tuple(k + (0 < c < BAD) for k, c in zip(s.suspect, q, strict=True)),
        tuple(k + (c >= BAD) for k, c in zip(s.bad, q, strict=True)),
        s.scans + 1,
        s.loaded_scans + 1,
        s.first_s,
        t_s,
        s.seen_ticks + step,
        s.gap_count,
        s.gap_ticks,
        s.gaps,
    )


def _add_reading(t: Temperature, rules: TestRules, t_s: float, v: float, w: int) -> Temperature:
    if v != v:
        return t
    base = t.base if t.base == t.base else v
    dev, far = v - base, 0
    if rules.set_point_c is not None and rules.below_k is not None and rules.above_k is not None:
        away = v - rules.set_point_c
        far = int(away > rules.above_k + EPS_K) - int(away < -rules.below_k - EPS_K)
    return Temperature(
        t.ticks + w,
        base,
        t.sum + w * dev,
        t.squares + w * dev * dev,
        min(t.least, v),
        max(t.most, v),
        t_s if v < t.least else t.least_s,
        t_s if v > t.most else t.most_s,
        t.below + w * ((far < 0) + (t.far < 0)) // 2,
        t.above + w * ((far > 0) + (t.far > 0)) // 2,
        far,
    )


def _plus(a: tuple[int, ...], b: Any) -> tuple[int, ...]:
    return tuple(x + int(y) for x, y in zip(a, b, strict=True))


def _add_gaps(s: Tallies, block: Block, paced: Paced, loaded: Any, began: bool) -> Tallies:
    rows = np.flatnonzero(loaded & (paced.interval >= paced.gap))
    gaps = list(s.gaps)
    count, total = s.gap_count, s.gap_ticks
    for row in rows.tolist():
        ticks, to_s = int(paced.interval[row]), float(block.t_s[row])
        from_s = to_s - ticks / TICKS_PER_S
        if not began and from_s < 0.0:
            continue
        count, total = count + 1, total + ticks
        gaps.append((ticks, from_s, to_s))
    if len(gaps) > GAPS_KEPT:
        gaps = sorted(sorted(gaps, reverse=True)[:GAPS_KEPT], key=lambda g: g[1:])
    return replace(s, gap_count=count, gap_ticks=total, gaps=tuple(gaps))


def _add_temperatures(
    temperatures: tuple[Temperature, ...], rules: TestRules, block: Block, step: Any, loaded: Any
) -> tuple[Temperature, ...]:
    if not temperatures:
        return temperatures
    x = band.signals(rules, block)
    return tuple(
        _add_temperature(t, rules, block.t_s, x[:, j], step, loaded) for j, t in enumerate(temperatures)
    )


def _add_temperature(
    t: Temperature, rules: TestRules, t_s: FloatArray, x: FloatArray, step: Any, loaded: Any
) -> Temperature:
    rows = np.flatnonzero(loaded & (x == x))
    if not rows.size:
        return t
    v, w = x[rows], step[rows]
    base = t.base if t.base == t.base else float(v[0])
    dev = v - base
    far = _far(v, rules)
    before = np.concatenate(([t.far], far[:-1]))
    low, high = int(np.argmin(v)), int(np.argmax(v))
    # half of the time between a reading in and one out of the band counts as out: in whole ticks
    return Temperature(
        ticks=t.ticks + int(w.sum()),
        base=base,
        sum=_onward(t.sum, w * dev),
        squares=_onward(t.squares, w * dev * dev),
        least=min(t.least, float(v[low])),
        most=max(t.most, float(v[high])),
        least_s=float(t_s[rows[low]]) if v[low] < t.least else t.least_s,
        most_s=float(t_s[rows[high]]) if v[high] > t.most else t.most_s,
        below=t.below + int((w * ((far < 0).astype(np.int64) + (before < 0)) // 2).sum()),
        above=t.above + int((w * ((far > 0).astype(np.int64) + (before > 0)) // 2).sum()),
        far=int(far[-1]),
    )


def _far(v: FloatArray, rules: TestRules) -> Any:
    if rules.set_point_c is None or rules.below_k is None or rules.above_k is None:
        return np.zeros(v.size, np.int64)
    dev = v - rules.set_point_c
    return (dev > rules.above_k + EPS_K).astype(np.int64) - (dev < -rules.below_k - EPS_K)


def _onward(carry: float, x: FloatArray) -> float:
    return float(np.add.accumulate(np.concatenate(([carry], x)))[-1])
