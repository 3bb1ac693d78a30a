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
RATE_ROOM: Final = 0.7
"""Share by which creep may go faster or slower than over the last two dozen scans."""
SLOPE_SDS: Final = 3.0
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


class Jump(NamedTuple):
    """Levels of a side before and after a row, the rate [1/h] taken out, and how far the levels may be off:
    ``error`` by noise, ``rate_room`` [1/h] times the longest ``interval_h`` by creep. ``scans`` after it."""

    before: float
    after: float
    slope: float
    error: float
    rate_room: float
    interval_h: float
    scans: int

    @property
    def size(self) -> float:
        return self.after - self.before


def jump_at(t: FloatArray, v: FloatArray, j: int, noise: float) -> Jump:
    """Return the jump before row ``j`` (0 < j < n) of finite readings (n,)."""
    before, after = slice(max(0, j - 8), j), slice(j, min(j + CONFIRM + 3, t.size))
    # the slope of one side of the jump: across it, the jump itself would pass for creep
    side = slice(max(0, j - CONTEXT), j) if j >= 8 else slice(j, t.size)
    slope = slope_of(t[side], v[side])
    k0, k1 = before.stop - before.start, after.stop - after.start
    return Jump(
        median(v[before] - slope * (t[before] - t[j])),
        median(v[after] - slope * (t[after] - t[j])),
        slope,
        noise * math.sqrt(1.57 * (1 / k0 + 1 / k1)),
        rate_room(t[side], slope, noise),
        float(np.max(np.diff(t[before.start : after.stop]))),
        k1,
    )


def noise_of(now: float, before: float) -> float:
    """Return the noise of single scans to judge by: that of these scans, not far below the long-run one."""
    if not math.isfinite(now):
        return before
    return now if math.isnan(before) else max(now, 0.7 * before)


def judge(
    t_h: FloatArray, v: FloatArray, context: int, noise_before: float, final: bool, cleared: int = 0
) -> Judged:
    """Judge the rows from ``context`` on of one side.

    Args:
        t_h: Stamps [h], context rows first; (c + n,).
        v: Strain of one side, earlier steps taken out; NaN where there is none.
        context: How many leading rows are context, already judged.
        noise_before: Long-run noise of single scans; NaN in the beginning.
        final: No more rows will come: decide with what is there.
        cleared: Rows before this one are not suspected: what jumped there is explained otherwise.
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
    noise = noise_of(now, noise_before)
    if vg.size < 6 or not math.isfinite(noise):
        return Judged(spikes, None, 0.0, None, now, least)
    # nearly every leaf ends here: no scan differs from the one before it by more than may be
    # the rate of the context where there is enough of it: a jump over a gap must not pass for its own rate
    known = fresh + 1 if fresh + 1 >= CONTEXT // 2 else tg.size
    slope = slope_of(tg[:known], vg[:known])
    dt = tg[fresh + 1 :] - tg[fresh:-1]
    limit = SUSPECT_SDS * ROOT_2 * noise + rate_room(tg[:known], slope, noise) * np.abs(dt)
    if not np.logical_or.reduce(np.abs(moves[fresh:] - slope * dt) > limit):
        return Judged(spikes, None, 0.0, None, now, least)
    good = np.flatnonzero(finite)
    cleared += context
    for _ in range(16):
        tg, vg = t_h[good], v[good]
        slope = slope_of(tg[:known], vg[:known])
        dt = np.diff(tg)
        limit = SUSPECT_SDS * ROOT_2 * noise + rate_room(tg[:known], slope, noise) * np.abs(dt)
        odd = np.flatnonzero((np.abs(np.diff(vg) - slope * dt) > limit) & (good[1:] >= cleared))
        if odd.size == 0:
            break
        j = int(odd[0]) + 1
        if good.size - j < CONFIRM and not final:
            return Judged(spikes, None, 0.0, int(good[j]) - context, now, least)
        jump = jump_at(tg, vg, j, noise)
        sure = JUDGE_SDS * jump.error + jump.rate_room * jump.interval_h
        stays = abs(vg[j] - jump.after) <= abs(vg[j] - jump.before)
        if jump.scans >= CONFIRM and abs(jump.size) > sure and stays:
            return Judged(spikes, int(good[j]) - context, jump.size, None, now, least)
        if abs(vg[j] - jump.before) > JUDGE_SDS * noise + jump.rate_room * float(dt[j - 1]):
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


def slope_error(t: FloatArray, noise: float) -> float:
    """Return the standard error [1/h] of :func:`slope_of` for single scans of s.d. ``noise``.

    Pairs a few seconds apart, in a burst of fast records, say nothing about the rate over the next half hour.
    """
    h = t.size // 2
    lag = min(float(t[h] - t[0]), float(t[-1] - t[-1 - h])) if h else 0.0
    return 1.25 * ROOT_2 * noise / (math.sqrt(t.size - h) * lag) if lag > 0.0 else math.inf


def rate_room(t: FloatArray, slope: float, noise: float) -> float:
    """Return by how much [1/h] the rate may differ from ``slope`` of scans at ``t``: other creep, and the
    error of ``slope``."""
    return RATE_ROOM * abs(slope) + SLOPE_SDS * min(slope_error(t, noise), 1e3)


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
