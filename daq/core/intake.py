"""From converted scans to leaves: the raw open leaf, cleaning, and the running integrals.

Everything that runs on from scan to scan (clock, equivalent time, lagged room temperature, offsets of
slipped sides) is carried here and advanced leaf by leaf, each leaf in one piece, so that the bits do not
depend on how scans arrived.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import Final, NamedTuple

import numpy as np

from daq.codec import state
from daq.core import clean, jumps, ladder, stuck
from daq.core.block import Block
from daq.core.rules import GAS_CONSTANT_J_PER_MOL_K, ZERO_C_IN_K, TestRules
from daq.records import FloatArray

T_S, A, B, TEMP, ROOM, SCAN, TICK, OUT = range(8)
RAW: Final = 8
ROOM_LAGS_H: Final = (0.75, 3.0)
"""Time constants of the lagged room temperature: with the room as it is they span the phases of a day's wave
for lags from minutes to hours."""
FAR_K: Final = 15.0
"""Specimen temperature this far off is another test condition or a broken thermocouple: strain left out
meanwhile."""
ABSENT_SCANS: Final = 10
COUNT_FADES: Final = 1.01
MEANS: Final = np.array([
    ladder.T, ladder.U, ladder.Q, ladder.E, ladder.TEMP,
    ladder.ROOM0, ladder.ROOM1, ladder.ROOM2, ladder.OUT, ladder.OQ,
])  # fmt: skip
"""Columns of a rung that are means over the leaf."""


def _no_rows() -> FloatArray:
    return np.zeros((0, RAW))


def _no_context() -> FloatArray:
    return np.zeros((0, 4))


@state
@dataclass(frozen=True, slots=True)
class IntakeState:
    """What the intake carries. ``rows`` is the open leaf, raw; ``context`` clean scans before it (t_h, a,
    b, specimen temperature)."""

    rows: FloatArray = field(default_factory=_no_rows)
    context: FloatArray = field(default_factory=_no_context)
    clock_s: float = 0.0
    origin_s: float = 0.0
    last_h: float = 0.0
    u_h: float = 0.0
    q_kh: float = 0.0
    reference_c: float = float("nan")
    temp_c: float = float("nan")
    oq_h: float = 0.0
    first_output: float = float("nan")
    output: float = float("nan")
    rooms_c: tuple[float, float, float] = (float("nan"), float("nan"), float("nan"))
    offsets: tuple[float, float] = (0.0, 0.0)
    noise: tuple[float, float] = (float("nan"), float("nan"))
    half: float = 0.0
    absent: tuple[int, int] = (0, 0)
    stuck: tuple[float, float] = (float("nan"), float("nan"))
    counts: tuple[float, float] = (float("nan"), float("nan"))
    segment: int = 0
    jerks: tuple[tuple[int, float, float], ...] = ()
    jerky: bool = False
    jerk: float = 0.0
    scan: int = -1
    tick: int = 0


class Step(NamedTuple):
    """A jump taken out: before row ``scan``, ``size`` of the mean strain, ``sides`` that jumped."""

    scan: int
    tick: int
    time_h: float
    sides: tuple[str, ...]
    sizes: tuple[float, ...]
    size: float
    both_there: bool


class Leaf(NamedTuple):
    """One closed leaf: its rung (None where no strain was good), steps before it, and the scan that closed
    it."""

    rung: FloatArray | None
    step: Step | None
    scan: int
    tick: int
    now_h: float


def rows_of(block: Block, origin_s: float) -> FloatArray:
    """Return the block's rows at or after full load as raw rows (m, RAW)."""
    keep = np.flatnonzero(block.t_s >= origin_s)
    out = np.empty((keep.size, RAW))
    out[:, T_S] = block.t_s[keep]
    out[:, A] = block.strain_a[keep]
    out[:, B] = block.strain_b[keep]
    out[:, TEMP] = block.specimen_c[keep]
    out[:, ROOM] = block.room_c[keep]
    out[:, SCAN] = block.first + keep
    out[:, TICK] = block.tick[keep]
    out[:, OUT] = block.output[keep]
    return out


def next_leaf(
    s: IntakeState, rules: TestRules, rows: FloatArray, clock: FloatArray, at: int, final: bool = False
) -> tuple[IntakeState, int, Leaf | None]:
    """Close the leaf that begins at row ``at`` of ``rows``, if it can be closed.

    Args:
        clock: Running maximum of the stamps [s] of ``rows``.
        final: Nothing will follow: close what is there.

    Returns:
        The state, the row at which the next leaf begins, and the leaf; None (and ``at``) while it stays open.
    """
    end = rows.shape[0] if final else ladder.leaf_end(clock, at)
    if end is None:
        return s, at, None
    while end <= rows.shape[0]:
        part = rows[at:end]
        view = _view(s, part, final)
        judged, left_in = _judge(s, view, final)
        first_hold = min((j.hold_at for j in judged if j.hold_at is not None), default=None)
        first_step = min((j.step_at for j in judged if j.step_at is not None), default=None)
        if first_step == 0:
            s2, step = _step(s, part, view, judged)
            if part[-1, SCAN] > s2.scan:  # the step was not known before this scan, however short the leaf
                s2 = replace(s2, scan=int(part[-1, SCAN]), tick=int(part[-1, TICK]))
            s2, used, leaf = next_leaf(s2, rules, rows, clock, at, final)
            if leaf is None:  # what follows is not yet clear: decide again when it is
                return s, at, None
            return s2, used, leaf._replace(step=step)
        stop = min(x for x in (first_hold, first_step, part.shape[0]) if x is not None)
        if stop > 0:
            # dated by the last scan that the decision needed; a held scan may lie beyond the leaf
            s2, rung = _close(s, rules, part[:stop], clock[at : at + stop], judged, left_in, part[-1])
            now_h = (float(clock[at + stop - 1]) - s.origin_s) / 3600.0
            return s2, at + stop, Leaf(rung, None, s2.scan, s2.tick, now_h)
        end += 1
    return s, at, None


class _View(NamedTuple):
    """Context and the rows of a leaf to be, side by side: k rows of context, stamps [h], both sides and
    specimen temperature, and what each side shows that only repeats itself."""

    k: int
    t: FloatArray
    sides: tuple[FloatArray, FloatArray]
    temp: FloatArray
    still: tuple[stuck.Still | None, stuck.Still | None]


def _view(s: IntakeState, part: FloatArray, final: bool) -> _View:
    k = s.context.shape[0]
    t = np.concatenate((s.context[:, 0], (part[:, T_S] - s.origin_s) / 3600.0))
    sides, still = [], []
    for side in (0, 1):
        v = np.concatenate((s.context[:, 1 + side], part[:, A + side] - s.offsets[side]))
        was = s.stuck[side] - s.offsets[side]
        same = stuck.judge(t, v, k, s.noise[side], s.counts[side], was, final)
        if same is not None:
            v[k:][same.mask] = np.nan
        sides.append(v)
        still.append(same)
    temp = np.concatenate((s.context[:, 3], part[:, TEMP]))
    return _View(k, t, (sides[0], sides[1]), temp, (still[0], still[1]))


def _judge(
    s: IntakeState, view: _View, final: bool
) -> tuple[tuple[clean.Judged, clean.Judged], list[tuple[int, tuple[float, float]]]]:
    """Judge both sides; return also the jumps that stay in the record because they are no slips: rows and
    sizes. In ``view`` what lies before them is shifted by that, so that they bend no slope."""
    cleared = 0
    left_in: list[tuple[int, tuple[float, float]]] = []
    while True:
        a, b = (
            clean.judge(view.t, v, view.k, n, final, cleared)
            for v, n in zip(view.sides, s.noise, strict=True)
        )
        steps = [j.step_at for j in (a, b) if j.step_at is not None]
        if not steps:
            break
        row = min(steps)
        seen = _look(s, view, (a, b), row)
        if not (jumps.by_heat(seen) or (s.jerky and jumps.by_creep(seen, s.jerk))):
            break
        cleared = max(x for x in steps if x <= row + 1) + 1
        sizes = (
            0.0 if math.isnan(seen.sizes[0]) else seen.sizes[0],
            0.0 if math.isnan(seen.sizes[1]) else seen.sizes[1],
        )
        left_in.append((row, sizes))
        for v, size in zip(view.sides, sizes, strict=True):
            v[: view.k + row] += size
    return (_with_still(a, view.still[0]), _with_still(b, view.still[1])), left_in


def _look(s: IntakeState, view: _View, judged: tuple[clean.Judged, clean.Judged], row: int) -> jumps.Seen:
    """Measure the jump before ``row`` of the leaf on both sides, spikes left out."""
    sides = []
    for side, j in zip(view.sides, judged, strict=True):
        v = side.copy()
        v[view.k :][j.spikes] = np.nan
        sides.append(v)
    noises = [clean.noise_of(j.noise, n) for j, n in zip(judged, s.noise, strict=True)]
    return jumps.look(view.t, (sides[0], sides[1]), view.temp, view.k + row, (noises[0], noises[1]))


def _with_still(judged: clean.Judged, still: stuck.Still | None) -> clean.Judged:
    if still is None:
        return judged
    holds = [h for h in (judged.hold_at, still.hold_at) if h is not None]
    return judged._replace(
        spikes=judged.spikes | still.mask, stuck=still.mask, hold_at=min(holds) if holds else None
    )


def _step(
    s: IntakeState, part: FloatArray, view: _View, judged: tuple[clean.Judged, clean.Judged]
) -> tuple[IntakeState, Step | None]:
    """Take the step before the first row of ``part`` out of what follows."""
    a, b = (j.size if j.step_at is not None and j.step_at <= 1 else 0.0 for j in judged)
    sizes = jumps.slips(_look(s, view, judged, 0), (a, b))
    both = bool(np.isfinite(part[:, A]).any() and np.isfinite(part[:, B]).any())
    offsets = (s.offsets[0] + sizes[0], s.offsets[1] + sizes[1])
    sides = tuple(name for name, size in zip("AB", sizes, strict=True) if size != 0.0)
    size = sum(sizes) / (2.0 if both else 1.0)
    step = Step(
        int(part[0, SCAN]), int(part[0, TICK]), float((part[0, T_S] - s.origin_s) / 3600.0),
        sides, tuple(x for x in sizes if x != 0.0), size, both,
    )  # fmt: skip
    known = s.jerks
    if clean.looks_like_creep(step.sizes, both):
        # a habit has a size: what is far larger or smaller was something else
        most, least = jumps.JERK_TIMES * max(sizes), max(sizes) / jumps.JERK_TIMES
        known = tuple(k for k in known if least <= max(k[1:]) <= most)
        known = (*known, (s.segment + 1, sizes[0], sizes[1]))
    return replace(s, offsets=offsets, segment=s.segment + 1, jerks=known), step


def give_back(s: IntakeState, rungs: FloatArray) -> tuple[IntakeState, FloatArray]:
    """Put the jumps that turned out to be jerky creep back into the ladder, and take no more of them out."""
    rungs = rungs.copy()
    context = s.context.copy()
    offsets = list(s.offsets)
    largest = s.jerk
    segments = rungs[:, ladder.SEGMENT].copy()
    for segment, size_a, size_b in s.jerks:
        sizes = [x for x in (size_a, size_b) if x != 0.0]
        later = segments >= segment
        size = sum(sizes) / len(sizes)
        largest = max(largest, size)
        rungs[later, ladder.E] += size
        rungs[later, ladder.SEGMENT] -= 1.0
        offsets[0] -= size_a
        offsets[1] -= size_b
        context[:, 1] += size_a
        context[:, 2] += size_b
    fed = replace(
        s,
        context=context,
        offsets=(offsets[0], offsets[1]),
        segment=s.segment - len(s.jerks),
        jerks=(),
        jerky=True,
        jerk=largest,
    )
    return fed, rungs


def _close(
    s: IntakeState,
    rules: TestRules,
    part: FloatArray,
    clock: FloatArray,
    judged: tuple[clean.Judged, clean.Judged],
    left_in: list[tuple[int, tuple[float, float]]],
    known_by: FloatArray,
) -> tuple[IntakeState, FloatArray | None]:
    """Reduce ``part`` to one rung and carry on; ``known_by`` is the last row that this decision needed.

    Leaves are small and many: numpy's ufuncs are called without the wrappers around them, which take
    longer than the work.
    """
    n = part.shape[0]
    t = (part[:, T_S] - s.origin_s) / 3600.0
    a = part[:, A] - s.offsets[0]
    b = part[:, B] - s.offsets[1]
    stuck_at = (_stuck_at(judged[0], part[:, A]), _stuck_at(judged[1], part[:, B]))
    a[judged[0].spikes[:n]] = np.nan
    b[judged[1].spikes[:n]] = np.nan
    has_a, has_b = np.isfinite(a), np.isfinite(b)
    any_a, any_b = _any(has_a), _any(has_b)
    offsets, half = s.offsets, s.half
    # a side that was away for long comes back at an unknown level: joined on where the mean is
    if any_a and any_b and max(s.absent) >= ABSENT_SCANS:
        for side in (0, 1):
            values, other = (a, b) if side == 0 else (b, a)
            if s.absent[side] >= ABSENT_SCANS:
                sign = 1.0 if side == 0 else -1.0
                shift = float(np.nanmedian(values) - (np.nanmedian(other) + sign * 2.0 * half))
                np.subtract(values, shift, out=values)
                offsets = (offsets[0] + shift, offsets[1]) if side == 0 else (offsets[0], offsets[1] + shift)
    both = has_a & has_b
    count = int(np.count_nonzero(both))
    if count == n:
        e = 0.5 * (a + b)
        half = _mean(0.5 * (a - b))
    else:
        e = np.where(both, 0.5 * (a + b), np.where(has_a, a - half, b + half))
        if count:
            half = _mean(0.5 * (a[both] - b[both]))
    absent = (0 if any_a else s.absent[0] + n, 0 if any_b else s.absent[1] + n)
    temp, temp_last = _filled(part[:, TEMP], s.temp_c)
    has_temp = math.isfinite(temp_last)
    reference = s.reference_c
    if not math.isfinite(reference):
        given = rules.set_point_c
        reference = given if given is not None else (_mean(temp) if has_temp else math.nan)
    when = (clock - s.origin_s) / 3600.0
    du = _steps(when, s.last_h)
    dt = du
    off: FloatArray | None = None
    if has_temp and math.isfinite(reference):
        off = _between(temp, s.temp_c) - reference
        off = np.minimum(np.maximum(off, -4.0 * FAR_K), FAR_K)
        e[np.abs(temp - reference) > FAR_K] = np.nan
        q = rules.activation_energy_j_per_mol
        if q is not None:
            k0 = reference + ZERO_C_IN_K
            du = dt * np.exp(q / GAS_CONSTANT_J_PER_MOL_K * (1.0 / k0 - 1.0 / (k0 + off)))
    output, output_last = _filled(part[:, OUT], s.output)
    first_output = s.first_output
    if not math.isfinite(first_output) and math.isfinite(output_last):
        first_output = _mean(output)

    good = np.isfinite(e)
    whole = _all(good)
    # one row each of what a rung holds the means of, in the order of MEANS
    x = np.empty((len(MEANS), n))
    x[0] = t
    x[1] = s.u_h + np.add.accumulate(du)
    x[2] = s.q_kh if off is None else s.q_kh + np.add.accumulate(du * off)
    x[3] = e
    x[4] = temp
    x[5], room_last = _filled(part[:, ROOM], s.rooms_c[0])
    lagged = (math.nan, math.nan)
    if math.isfinite(room_last):
        room = x[5].tolist()
        starts = [r if math.isfinite(r) else room[0] for r in s.rooms_c[1:]]
        for i, (lag, start) in enumerate(zip(ROOM_LAGS_H, starts, strict=True)):
            x[6 + i] = _lag(room, dt, lag, start)
        lagged = (float(x[6, -1]), float(x[7, -1]))
    else:
        x[6:8] = np.nan
    x[8] = output
    x[9] = s.oq_h
    if math.isfinite(output_last):
        x[9] += np.add.accumulate(du * (_between(output, s.output) - first_output))
    rung: FloatArray | None = None
    if whole or _any(good):
        g = x if whole else x.compress(good, axis=1)  # rows contiguous: the same bits either way
        rung = np.zeros((1, ladder.COLUMNS))
        r = rung[0]
        r[ladder.N] = g.shape[1]
        r[MEANS] = np.add.reduce(g, axis=1) / g.shape[1]
        r[ladder.H] = half
        d, f = g[0] - r[ladder.T], g[3] - r[ladder.E]
        r[ladder.S_TT], r[ladder.S_TE], r[ladder.S_EE] = (np.add.reduce(y) for y in (d * d, d * f, f * f))
        r[ladder.START], r[ladder.END] = np.minimum.reduce(g[0]), np.maximum.reduce(g[0])
        r[ladder.SEGMENT] = s.segment
    fresh = np.empty((n, 4))
    fresh[:, 0], fresh[:, 1], fresh[:, 2], fresh[:, 3] = t, a, b, part[:, TEMP]
    context = np.concatenate((s.context, fresh))
    for row, sizes in left_in:
        if row < n:
            context[: s.context.shape[0] + row, 1:3] += sizes
    context = context[-clean.CONTEXT :]
    scan, tick = s.scan, s.tick
    if known_by[SCAN] > scan:
        scan, tick = int(known_by[SCAN]), int(known_by[TICK])
    return (
        IntakeState(
            rows=s.rows, context=context, clock_s=float(clock[-1]), origin_s=s.origin_s,
            last_h=float(when[-1]), u_h=float(x[1, -1]), q_kh=float(x[2, -1]),
            reference_c=float(reference), temp_c=temp_last, oq_h=float(x[9, -1]),
            first_output=first_output, output=output_last,
            rooms_c=(room_last, lagged[0], lagged[1]), offsets=offsets,
            noise=(_faded(s.noise[0], judged[0].noise), _faded(s.noise[1], judged[1].noise)),
            half=half, absent=absent, stuck=stuck_at,
            counts=(_least(s.counts[0], judged[0].least), _least(s.counts[1], judged[1].least)),
            segment=s.segment, jerks=s.jerks, jerky=s.jerky, jerk=s.jerk,
            scan=scan, tick=tick,
        ),
        rung,
    )  # fmt: skip


def _least(old: float, now: float) -> float:
    """Return the least change seen: a range switched to a coarser one is known a few hundred leaves later."""
    if now == 0.0:
        return old
    return now if math.isnan(old) else min(now, COUNT_FADES * old)


def _stuck_at(judged: clean.Judged, raw: FloatArray) -> float:
    """Return the reading, as it came, that a side is stuck at when these rows end; NaN when it is not."""
    if judged.stuck is None:
        return math.nan
    there = np.flatnonzero(np.isfinite(raw))
    if not there.size:
        return math.nan
    last = int(there[-1])
    return float(raw[last]) if judged.stuck[last] else math.nan


def _any(mask: np.ndarray) -> bool:
    return bool(np.logical_or.reduce(mask))


def _all(mask: np.ndarray) -> bool:
    return bool(np.logical_and.reduce(mask))


def _mean(v: FloatArray) -> float:
    return float(np.add.reduce(v) / v.size)


def _faded(old: float, now: float) -> float:
    """Return the long-run noise: slow to follow, and kept where there is none now."""
    if not math.isfinite(old):
        return now
    return old if not math.isfinite(now) else old + 0.05 * (now - old)


def _steps(v: FloatArray, before: float) -> FloatArray:
    """Return the differences of ``v`` (n,), the first one from ``before``."""
    out = np.empty_like(v)
    out[0] = v[0] - before
    np.subtract(v[1:], v[:-1], out=out[1:])
    return out


def _between(v: FloatArray, before: float) -> FloatArray:
    """Return the middles of ``v`` and the value before each: trapezoids."""
    out = np.empty_like(v)
    out[0] = (before if math.isfinite(before) else v[0]) + v[0]
    np.add(v[:-1], v[1:], out=out[1:])
    out *= 0.5
    return out


def _filled(v: FloatArray, last: float) -> tuple[FloatArray, float]:
    """Return ``v`` with gaps filled by the last value before them, and the last value; all NaN where there
    never was one, finite otherwise."""
    ok = np.isfinite(v)
    if _all(ok):
        return v, float(v[-1])
    if not _any(ok):
        return np.full(v.shape, last), last
    idx = np.maximum.accumulate(np.where(ok, np.arange(v.size), -1))
    out = np.where(idx >= 0, v[np.maximum(idx, 0)], last if np.isfinite(last) else v[np.flatnonzero(ok)[0]])
    return out, float(out[-1])


def _lag(v: list[float], dt: FloatArray, lag_h: float, start: float) -> list[float]:
    """Return the first-order lag of ``v`` held between stamps; exact, in one pass per leaf."""
    keep = np.exp(-np.minimum(dt / lag_h, 50.0)).tolist()
    level = start
    out = []
    for k, x in zip(keep, v, strict=True):
        level = x + k * (level - x)
        out.append(level)
    return out
