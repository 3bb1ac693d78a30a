"""From converted scans to leaves: the raw open leaf, cleaning, and the running integrals.

Everything that runs on from scan to scan (clock, equivalent time, lagged room temperature, offsets of
slipped sides) is carried here and advanced leaf by leaf, each leaf in one piece, so that the bits do not
depend on how scans arrived.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Final, NamedTuple

import numpy as np

from daq.codec import state
from daq.core import clean, ladder
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


def _no_rows() -> FloatArray:
    return np.zeros((0, RAW))


def _no_context() -> FloatArray:
    return np.zeros((0, 3))


@state
@dataclass(frozen=True, slots=True)
class IntakeState:
    """What the intake carries. ``rows`` is the open leaf, raw; ``context`` clean scans before it (t_h, a,
    b)."""

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
    still: tuple[int, int] = (0, 0)
    segment: int = 0
    jerks: tuple[tuple[int, float, float], ...] = ()
    jerky: bool = False
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
        judged = _judge(s, part, final)
        first_hold = min((j.hold_at for j in judged if j.hold_at is not None), default=None)
        first_step = min((j.step_at for j in judged if j.step_at is not None), default=None)
        if first_step == 0:
            s2, step = _step(s, part, judged)
            if part[-1, SCAN] > s2.scan:  # the step was not known before this scan, however short the leaf
                s2 = replace(s2, scan=int(part[-1, SCAN]), tick=int(part[-1, TICK]))
            s2, used, leaf = next_leaf(s2, rules, rows, clock, at, final)
            if leaf is None:  # what follows is not yet clear: decide again when it is
                return s, at, None
            return s2, used, leaf._replace(step=step)
        stop = min(x for x in (first_hold, first_step, part.shape[0]) if x is not None)
        if stop > 0:
            s2, rung = _close(s, rules, part[:stop], clock[at : at + stop], judged)
            # dated by the last scan that the decision needed; a held scan may lie beyond the leaf
            if part[-1, SCAN] > s.scan:
                s2 = replace(s2, scan=int(part[-1, SCAN]), tick=int(part[-1, TICK]))
            now_h = (float(clock[at + stop - 1]) - s.origin_s) / 3600.0
            return s2, at + stop, Leaf(rung, None, s2.scan, s2.tick, now_h)
        end += 1
    return s, at, None


def _judge(s: IntakeState, part: FloatArray, final: bool) -> tuple[clean.Judged, clean.Judged]:
    k = s.context.shape[0]
    t = np.concatenate((s.context[:, 0], (part[:, T_S] - s.origin_s) / 3600.0))
    a = np.concatenate((s.context[:, 1], part[:, A] - s.offsets[0]))
    b = np.concatenate((s.context[:, 2], part[:, B] - s.offsets[1]))
    return (
        clean.judge(t, a, k, s.noise[0], final, s.jerky),
        clean.judge(t, b, k, s.noise[1], final, s.jerky),
    )


def _step(
    s: IntakeState, part: FloatArray, judged: tuple[clean.Judged, clean.Judged]
) -> tuple[IntakeState, Step | None]:
    """Take the step before the first row of ``part`` out of what follows."""
    sizes = [j.size if j.step_at is not None and j.step_at <= 1 else 0.0 for j in judged]
    both = bool(np.isfinite(part[:, A]).any() and np.isfinite(part[:, B]).any())
    offsets = (s.offsets[0] + sizes[0], s.offsets[1] + sizes[1])
    sides = tuple(name for name, size in zip("AB", sizes, strict=True) if size != 0.0)
    size = sum(sizes) / (2.0 if both else 1.0)
    step = Step(
        int(part[0, SCAN]), int(part[0, TICK]), float((part[0, T_S] - s.origin_s) / 3600.0),
        sides, tuple(x for x in sizes if x != 0.0), size, both,
    )  # fmt: skip
    jerks = s.jerks
    if not s.jerky and clean.looks_like_creep(step.sizes, both):
        jerks = (*jerks, (s.segment + 1, sizes[0], sizes[1]))
    return replace(s, offsets=offsets, segment=s.segment + 1, jerks=jerks), step


def give_back(s: IntakeState, rungs: FloatArray) -> tuple[IntakeState, FloatArray]:
    """Put the jumps that turned out to be jerky creep back into the ladder, and take no more of them out."""
    rungs = rungs.copy()
    context = s.context.copy()
    offsets = list(s.offsets)
    segments = rungs[:, ladder.SEGMENT].copy()
    for segment, size_a, size_b in s.jerks:
        sizes = [x for x in (size_a, size_b) if x != 0.0]
        later = segments >= segment
        rungs[later, ladder.E] += sum(sizes) / len(sizes)
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
    )
    return fed, rungs


def _close(
    s: IntakeState,
    rules: TestRules,
    part: FloatArray,
    clock: FloatArray,
    judged: tuple[clean.Judged, clean.Judged],
) -> tuple[IntakeState, FloatArray | None]:
    """Reduce ``part`` to one rung and carry on."""
    n = part.shape[0]
    t = (part[:, T_S] - s.origin_s) / 3600.0
    a = part[:, A] - s.offsets[0]
    b = part[:, B] - s.offsets[1]
    a[judged[0].spikes[:n]] = np.nan
    b[judged[1].spikes[:n]] = np.nan
    has_a, has_b = np.isfinite(a), np.isfinite(b)
    offsets, half = s.offsets, s.half
    # a side that was away for long comes back at an unknown level: joined on where the mean is
    for side, has in ((0, has_a), (1, has_b)):
        values, other = (a, b) if side == 0 else (b, a)
        if s.absent[side] >= ABSENT_SCANS and has.any() and np.isfinite(other).any():
            sign = 1.0 if side == 0 else -1.0
            shift = float(np.nanmedian(values) - (np.nanmedian(other) + sign * 2.0 * half))
            np.subtract(values, shift, out=values)
            offsets = (offsets[0] + shift, offsets[1]) if side == 0 else (offsets[0], offsets[1] + shift)
    both = has_a & has_b
    e = np.where(both, 0.5 * (a + b), np.where(has_a, a - half, b + half))
    if both.any():
        half = float(np.mean(0.5 * (a[both] - b[both])))
    absent = (
        0 if has_a.any() else s.absent[0] + n,
        0 if has_b.any() else s.absent[1] + n,
    )
    temp, temp_last = _filled(part[:, TEMP], s.temp_c)
    reference = s.reference_c
    if not np.isfinite(reference):
        given = rules.set_point_c
        reference = (
            given if given is not None else (float(np.mean(temp)) if np.isfinite(temp).all() else np.nan)
        )
    when = (clock - s.origin_s) / 3600.0
    dt = np.diff(np.concatenate(([s.last_h], when)))
    off = np.zeros(n)
    if np.isfinite(temp).all() and np.isfinite(reference):
        before = np.concatenate(([s.temp_c if np.isfinite(s.temp_c) else temp[0]], temp[:-1]))
        off = np.clip(0.5 * (before + temp) - reference, -4.0 * FAR_K, FAR_K)
        e[np.abs(temp - reference) > FAR_K] = np.nan
    factor = np.ones(n)
    q = rules.activation_energy_j_per_mol
    if q is not None and np.isfinite(reference):
        k0 = reference + ZERO_C_IN_K
        factor = np.exp(q / GAS_CONSTANT_J_PER_MOL_K * (1.0 / k0 - 1.0 / (k0 + off)))
    u = s.u_h + np.cumsum(dt * factor)
    qs = s.q_kh + np.cumsum(dt * factor * off)
    output, output_last = _filled(part[:, OUT], s.output)
    first_output = s.first_output
    oq = np.full(n, s.oq_h)
    if np.isfinite(output_last):
        if not np.isfinite(first_output):
            first_output = float(np.mean(output))
        before = np.concatenate(([s.output if np.isfinite(s.output) else output[0]], output[:-1]))
        oq = s.oq_h + np.cumsum(dt * factor * (0.5 * (before + output) - first_output))
    room, room_last = _filled(part[:, ROOM], s.rooms_c[0])
    lagged = [room]
    lasts = [room_last]
    for i, lag in enumerate(ROOM_LAGS_H):
        start = s.rooms_c[i + 1] if np.isfinite(s.rooms_c[i + 1]) else float(room[0])
        filtered = _lag(room, dt, lag, start)
        lagged.append(filtered)
        lasts.append(float(filtered[-1]))
    good = np.flatnonzero(np.isfinite(e))
    rung: FloatArray | None = None
    if good.size:
        rung = np.zeros((1, ladder.COLUMNS))
        r = rung[0]
        tg, eg = t[good], e[good]
        r[ladder.N] = good.size
        r[ladder.T], r[ladder.E] = np.mean(tg), np.mean(eg)
        r[ladder.U], r[ladder.Q] = np.mean(u[good]), np.mean(qs[good])
        r[ladder.H] = half
        r[ladder.TEMP] = np.mean(temp[good])
        for c, x in zip((ladder.ROOM0, ladder.ROOM1, ladder.ROOM2), lagged, strict=True):
            r[c] = np.mean(x[good])
        d, f = tg - r[ladder.T], eg - r[ladder.E]
        r[ladder.S_TT], r[ladder.S_TE], r[ladder.S_EE] = np.sum(d * d), np.sum(d * f), np.sum(f * f)
        r[ladder.START], r[ladder.END] = np.min(tg), np.max(tg)
        r[ladder.SEGMENT] = s.segment
        r[ladder.OUT], r[ladder.OQ] = np.mean(output[good]), np.mean(oq[good])
    noise = tuple(
        now if not np.isfinite(old) else (old if not np.isfinite(now) else old + 0.05 * (now - old))
        for old, now in zip(s.noise, (judged[0].noise, judged[1].noise), strict=True)
    )
    fresh = np.stack((t, a, b), axis=1)
    context = np.concatenate((s.context, fresh))[-clean.CONTEXT :]
    return (
        replace(
            s, context=context, clock_s=float(clock[-1]), last_h=float(when[-1]), u_h=float(u[-1]),
            q_kh=float(qs[-1]), reference_c=float(reference), temp_c=temp_last,
            oq_h=float(oq[-1]), first_output=first_output, output=output_last,
            rooms_c=(lasts[0], lasts[1], lasts[2]), offsets=offsets, noise=(noise[0], noise[1]),
            half=half, absent=absent,
        ),
        rung,
    )  # fmt: skip


def _filled(v: FloatArray, last: float) -> tuple[FloatArray, float]:
    """Return ``v`` with gaps filled by the last value before them, and the last value."""
    ok = np.isfinite(v)
    if ok.all():
        return v, float(v[-1])
    if not ok.any():
        return np.full(v.shape, last), last
    idx = np.maximum.accumulate(np.where(ok, np.arange(v.size), -1))
    out = np.where(idx >= 0, v[np.maximum(idx, 0)], last if np.isfinite(last) else v[np.flatnonzero(ok)[0]])
    return out, float(out[-1])


def _lag(v: FloatArray, dt: FloatArray, lag_h: float, start: float) -> FloatArray:
    """Return the first-order lag of ``v`` held between stamps; exact, in one pass per leaf."""
    out = np.empty_like(v)
    keep = np.exp(-np.minimum(dt / lag_h, 50.0))
    level = start
    for i, (k, x) in enumerate(zip(keep.tolist(), v.tolist(), strict=True)):
        level = x + k * (level - x)
        out[i] = level
    return out
