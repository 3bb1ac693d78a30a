"""Spikes, slips, re-zeros and sides that come and go: what is set right before scans become leaves.

Works on a few raw scans beside the ones just before them, one side at a time. A scan that differs from its
predecessor by more than noise and creep explain is *suspected*: it and what follows wait in the
buffer until five scans have been seen from there on. If the level stays, it was a step; if it
comes back, a spike. A step is taken out of what follows by an offset, never out of the record,
and the ladder begins a new segment, whose level the estimator may fit anew: so the neutralisation can be
undone.

Thresholds are in units of the noise of single scans, measured on the scans themselves as the median of
second differences (insensitive to creep, drift and steps), never below the resolution seen. Suspected
beyond four standard deviations (one Gaussian scan in 16 000: a wrong suspicion only costs a wait of four
scans), judged beyond six (one in 5e8)."""

from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np

from daq.records import FloatArray

SUSPECT_SDS: Final = 4.0
JUDGE_SDS: Final = 6.0
CONFIRM: Final = 5
"""Scans needed from a suspected one on: a median of five outvotes two further spikes."""
CONTEXT: Final = 24
"""Clean scans kept before the buffer."""
ROOT_2: Final = math.sqrt(2.0)
ROOT_1P5: Final = math.sqrt(1.5)

JERKS: Final = 3
"""Jumps that look like creep and are then taken as creep: one is an accident, three are a habit of the
material."""


class Judged(NamedTuple):
    """What became of one side's rows.

    ``spikes`` (n,) mask. ``step_at`` row before which a step of ``size`` lies, else None.
    ``hold_at`` first row that must wait, else None. ``noise`` s.d. of single scans. ``least`` change between
    scans, 0 where there is none. ``stuck`` (n,) those of the spikes that only repeat the reading before
    (``core.stuck``), None where there are none.
    """

    spikes: np.ndarray
    step_at: int | None
    size: float
    hold_at: int | None
    noise: float
    least: float
    stuck: np.ndarray | None = None


def scan_noise(v: FloatArray) -> float:
    """Return the s.d. of single scans from second differences (n,), at least the resolution's; NaN if n <
    5."""
    v = v[np.isfinite(v)]
    return _noise_of(v, v[1:] - v[:-1])[0]


def _noise_of(v: FloatArray, moves: FloatArray) -> tuple[float, float]:
    """Return the s.d. of single scans of finite ``v`` and their differences, and the least change seen, 0 if
    none."""
    if v.size < 5:
        return math.nan, 0.0
    second = np.abs(v[1:-1] - 0.5 * (v[2:] + v[:-2]))
    first = np.abs(moves)
    seen = first[first > 1e-12]
    resolution = float(np.minimum.reduce(seen)) if seen.size else 0.0
    return max(1.4826 * median(second) / ROOT_1P5, 0.3 * resolution), resolution


def median(v: FloatArray) -> float:
    """Return the median of finite ``v`` (n,), n > 0: ``np.median`` to the last bit, for a few numbers ten
    times as fast."""
    ordered = np.sort(v)
    half = ordered.size // 2
    if ordered.size % 2:
        return float(ordered[half])
    return 0.5 * (float(ordered[half - 1]) + float(ordered[half]))


def judge(
    t_h: FloatArray, v: FloatArray, context: int, noise_before: float, final: bool, jerky: bool = False
) -> Judged:
    """Judge the rows from ``context`` on of one side.

    Args:
        t_h: Stamps [h], context rows first; (c + n,).
        v: Strain of one side, earlier steps taken out; NaN where there is none.
        context: How many leading rows are context, already judged.
        noise_before: Long-run noise of single scans; NaN in the beginning.
        final: No more rows will come: decide with what is there.
        jerky: Creep has been seen to go in jumps: those in its direction are creep, not steps.
    """
    n = v.shape[0] - context
    spikes = np.zeros(n, dtype=bool)
    finite = np.isfinite(v)
    if np.logical_and.reduce(finite):
        tg, vg, fresh = t_h, v, max(context - 1, 0)
    else:
        tg, vg = t_h[finite], v[finite]
        fresh = max(int(np.count_nonzero(finite[:context])) - 1, 0)
    moves = vg[1:] - vg[:-1]
    now, least = _noise_of(vg, moves)
    noise = noise_before
    if math.isfinite(now):
        noise = now if math.isnan(noise_before) else max(now, 0.7 * noise_before)
    if vg.size < 6 or not math.isfinite(noise):
        return Judged(spikes, None, 0.0, None, now, least)
    # nearly every leaf ends here: no scan differs from the one before it by more than may be
    slope = slope_of(tg, vg)
    dt = tg[fresh + 1 :] - tg[fresh:-1]
    limit = SUSPECT_SDS * ROOT_2 * noise + 0.7 * abs(slope) * np.abs(dt)
    if not np.logical_or.reduce(np.abs(moves[fresh:] - slope * dt) > limit):
        return Judged(spikes, None, 0.0, None, now, least)
    good = np.flatnonzero(finite)
    cleared = context
    for _ in range(16):
        tg, vg = t_h[good], v[good]
        slope = slope_of(tg, vg)
        dt = np.diff(tg)
        limit = SUSPECT_SDS * ROOT_2 * noise + 0.7 * abs(slope) * np.abs(dt)
        odd = np.flatnonzero((np.abs(np.diff(vg) - slope * dt) > limit) & (good[1:] >= cleared))
        if odd.size == 0:
            break
        j = int(odd[0]) + 1
        after = slice(j, min(j + CONFIRM + 3, good.size))
        if good.size - j < CONFIRM and not final:
            return Judged(spikes, None, 0.0, int(good[j]) - context, now, least)
        before = slice(max(0, j - 8), j)
        # the slope of one side of the jump: across it, the jump itself would pass for creep
        slope = (
            slope_of(tg[max(0, j - CONTEXT) : j], vg[max(0, j - CONTEXT) : j])
            if j >= 8
            else slope_of(tg[j:], vg[j:])
        )
        level0 = median(vg[before] - slope * (tg[before] - tg[j]))
        level1 = median(vg[after] - slope * (tg[after] - tg[j]))
        jump = level1 - level0
        room = 0.7 * abs(slope) * float(np.max(np.diff(tg[before.start : after.stop])))
        k0, k1 = before.stop - before.start, after.stop - after.start
        sure = JUDGE_SDS * noise * np.sqrt(1.57 * (1 / k0 + 1 / k1)) + room
        if k1 >= CONFIRM and abs(jump) > sure and abs(vg[j] - level1) <= abs(vg[j] - level0):
            if jerky and jump > 0.0:
                cleared = int(good[j]) + 1
                continue
            return Judged(spikes, int(good[j]) - context, jump, None, now, least)
        if abs(vg[j] - level0) > JUDGE_SDS * noise + 0.7 * abs(slope) * float(dt[j - 1]):
            spikes[good[j] - context] = True
            good = np.delete(good, j)
        else:
            cleared = int(good[j]) + 1
    return Judged(spikes, None, 0.0, None, now, least)


def slope_of(t: FloatArray, v: FloatArray) -> float:
    """Return a median slope of pairs half the record apart: one step or spike does not move it much."""
    h = t.size // 2
    dt = t[h:] - t[: t.size - h]
    dv = v[h:] - v[: t.size - h]
    ok = dt > 0
    if not np.logical_and.reduce(ok):
        dt, dv = dt[ok], dv[ok]
        if not dt.size:
            return 0.0
    return median(dv / dt)


def looks_like_creep(sizes: tuple[float, ...], both_there: bool) -> bool:
    """Say whether every side there is jumped alike in the direction of creep."""
    if both_there:
        return len(sizes) == 2 and min(sizes) > 0.5 * max(sizes) > 0.0
    return len(sizes) == 1 and sizes[0] > 0.0


def cause_of(sides: tuple[str, ...], sizes: tuple[float, ...], both_there: bool) -> str:
    """Say in words what a step may have been."""
    if not both_there:
        return "jump of the only side: slip, re-zero or a shock"
    if len(sides) == 1:
        return f"side {sides[0]} alone jumped: slip or re-zero"
    if min(sizes) < 0 < max(sizes):
        return "both sides jumped in opposite directions: knock on the extensometer"
    return "both sides jumped together: re-zero, shock or change of load"
