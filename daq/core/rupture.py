"""Has the specimen broken? Break switch, strain that jumps and no longer follows, force, beam.

Something has to happen from one scan to the next: a break switch opens, strain of a side jumps by
more than a slip can, strain of all sides is lost while the rest of the scan goes on, the force falls, a
limit switch closes. Then three scans are awaited (two for a break switch) and judged together, dated
back to the first:

* A break switch that stays open is rupture, unless strain goes on as if nothing had happened (then the
  switch is suspected).
* All sides jump in the sense of the load by 1 % or more, ten times what strain did between scans
  just before, and stay there or are lost: rupture. Slips are smaller, a spike does not stay.
* All sides leave their range at once, or fall by a third of the strain and are then lost, or are lost while
  moving by half a percent a scan: rupture.
* All sides fall and stay: an extensometer that dropped, or one that was set to zero. The curve
  decides: if it no longer moves although by the rate before it should have moved by eight times its noise,
  it is rupture; after a re-zero it goes on.
* The force falls to a fifth, or the beam reaches its stop, and strain jumped, was lost, or is not
  measured (force only): rupture; else the load is off.

Strain that merely vanishes is not rupture: an extensometer may have been taken off, and the end of
a recording proves nothing. In tertiary creep it is said at once, since somebody has to look. A scan in which
everything is missing is a lost link.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from daq.codec import state
from daq.core.block import Block, Cue
from daq.core.rules import Role, TestRules
from daq.core.torn import (
    ALL_STRAIN,
    LOAD_OFF,
    NOTHING,
    SCANS,
    SWITCH_DOUBTED,
    TEAR,
    VANISHED,
    After,
    Motion,
    Pending,
    judge,
)
from daq.records import CoreError, FloatArray, IntArray, Quality

BoolArray = npt.NDArray[np.bool_]
FORCE_GONE: Final = 0.2
SWITCH: Final = "break_switch"
"""Subject of the word that a break switch is doubted."""
_RANGE: Final = (int(Quality.BAD_RANGE), int(Quality.BAD_OVERLOAD))


@state
@dataclass(frozen=True, slots=True)
class RuptureState:
    """``last``: the scan before, sides as last read. ``intact``, ``free``: a break switch, a limit switch was
    seen off. ``off``: the load is off. ``vanished``: all strain is lost, and it was said that it may be
    rupture. ``doubted``: the break switch is open without reason. ``happened``: the test is broken, nothing
    more is judged."""

    last: After = NOTHING
    intact: bool = False
    free: bool = False
    off: bool = False
    vanished: bool = False
    doubted: bool = False
    pending: Pending | None = None
    happened: bool = False


@dataclass(frozen=True, slots=True)
class _Channels:
    strain: tuple[int, ...]
    switches: tuple[int, ...]
    stops: tuple[int, ...]
    force: tuple[int, ...]


def _channels(rules: TestRules) -> _Channels:
    strain, switches, stops, force = [], [], [], []
    for i, c in enumerate(rules.channels):
        if c.role is Role.STRAIN or c.role is Role.EXTENSION:
            strain.append(i)
        elif c.role is Role.BREAK_SWITCH:
            switches.append(i)
        elif c.role is Role.LIMIT_SWITCH:
            stops.append(i)
        elif c.role is Role.FORCE:
            force.append(i)
    return _Channels(tuple(strain), tuple(switches), tuple(stops), tuple(force))


@dataclass(frozen=True, slots=True)
class Context:
    """What others worked out for the same n scans.

    ``motions``: as known before the block and after each leaf it closes; ``ends``: rows up to and with
    each of those leaves. ``linked`` (n,): something was read in that scan. ``gap`` (n,): it comes after a
    gap. ``stage``: the stage the test is in.
    """

    motions: tuple[Motion, ...]
    ends: IntArray
    linked: BoolArray
    gap: BoolArray
    stage: str

    def motion_at(self, row: int) -> Motion:
        """Return the motion as known before ``row``."""
        return self.motions[int(np.searchsorted(self.ends, row, "right"))]


@dataclass(frozen=True, slots=True)
class _Seen:
    """Per scan: sides, sides filled forward from the scans before, switches and force as they then stood."""

    a: FloatArray
    b: FloatArray
    past_a: FloatArray
    past_b: FloatArray
    lost: BoolArray
    open: BoolArray
    gone: BoolArray
    stop: BoolArray
    gap: BoolArray
    mark: BoolArray


def watch_rupture(
    s: RuptureState, rules: TestRules, block: Block, c: Context
) -> tuple[RuptureState, list[Cue]]:
    """Take n scans; after the cue ``rupture`` nothing more is said."""
    n = len(block)
    if not n or s.happened:
        return s, []
    ch = _channels(rules)
    if n == 1:
        quiet = _one_quiet(s, ch, block, c)
        if quiet is not None:
            return quiet, []
    seen, s = _see(s, ch, block, c)
    marks = np.flatnonzero(seen.mark)
    cues: list[Cue] = []
    row = -1
    while not s.happened:
        if s.pending is None:
            later = int(np.searchsorted(marks, row, "right"))
            ahead = int(marks[later]) if later < marks.size else n
            if s.off or s.vanished or s.doubted:
                row, s = _return(s, block, seen, row, ahead, cues)
                if row < ahead:
                    continue
            row = ahead
            if row < n:
                before = _scan(block, ch, seen, row - 1, filled=True) if row else s.last
                s = replace(s, pending=Pending(before, c.motion_at(row)))
        else:
            row += 1
        if row >= n:
            break
        if c.linked[row]:  # a lost link says nothing about the specimen
            s = _append(s, ch, _scan(block, ch, seen, row, filled=False), c.stage, cues)
    if s.happened:
        return RuptureState(happened=True), cues
    return replace(s, last=_scan(block, ch, seen, n - 1, filled=True)), cues


def _one_quiet(s: RuptureState, ch: _Channels, block: Block, c: Context) -> RuptureState | None:
    """Return the state after a live scan in which nothing happened, None where that needs a closer look."""
    last, a, b = s.last, float(block.strain_a[0]), float(block.strain_b[0])
    if s.pending is not None or s.off or s.vanished or s.doubted or ch.switches or ch.stops or ch.force:
        return None
    if (a != a and b != b) or last.lost or abs(a - last.a) >= TEAR or abs(b - last.b) >= TEAR:
        return None
    if not c.linked[0] or c.gap[0]:
        return None
    after = After(
        block.first, int(block.tick[0]), float(block.t_s[0]),
        a if a == a else last.a, b if b == b else last.b,
        False, False, False, False, False, False, False,
    )  # fmt: skip
    return RuptureState(after, s.intact, s.free)


def _return(
    s: RuptureState, block: Block, seen: _Seen, row: int, ahead: int, cues: list[Cue]
) -> tuple[int, RuptureState]:
    """Return the first row after ``row`` in which load, strain or the switch is back, else ``ahead``."""
    span = slice(row + 1, ahead)
    load = ~(seen.gone | seen.stop)[span] if s.off else np.zeros(max(0, ahead - row - 1), np.bool_)
    strain = ~seen.lost[span] if s.vanished else np.zeros_like(load)
    closed = ~seen.open[span] if s.doubted else np.zeros_like(load)
    back = np.flatnonzero(load | strain | closed)
    if not back.size:
        return ahead, s
    k = int(back[0])
    row += 1 + k
    scan, tick = block.first + row, int(block.tick[row])
    if load[k]:
        s = replace(s, off=False)
        cues.append(Cue(scan, tick, "load_off", "", False))
    if strain[k]:
        s = replace(s, vanished=False)
        cues.append(Cue(scan, tick, "sensor_broken", ALL_STRAIN, False))
    if closed[k]:
        s = replace(s, doubted=False)
        cues.append(Cue(scan, tick, "sensor_suspected", SWITCH, False))
    return row, s


def _see(s: RuptureState, ch: _Channels, block: Block, c: Context) -> tuple[_Seen, RuptureState]:
    a, b, n = block.strain_a, block.strain_b, len(block)
    lost = _filled_bool(~((a == a) | (b == b)), c.linked, s.last.lost)
    still = np.zeros(n, np.bool_)
    opened = gone = stop = still
    intact, free = s.intact, s.free
    if ch.switches:
        opened, intact = _switch(block.values[:, ch.switches], s.last.open, s.intact)
    if ch.stops:
        stop, free = _switch(block.values[:, ch.stops], s.last.stop, s.free)
    if ch.force:
        force = np.abs(block.values[:, ch.force[0]])
        reference = np.array([m.force for m in c.motions])[np.searchsorted(c.ends, np.arange(n), "right")]
        known = (force == force) & (reference == reference) & (block.t_s >= 0.0)
        gone = _filled_bool(force < FORCE_GONE * reference, known, s.last.gone)
    past_a, past_b = _past(a, s.last.a), _past(b, s.last.b)
    mark = (np.abs(a - past_a) >= TEAR) | (np.abs(b - past_b) >= TEAR)  # NaN compares false
    if ch.strain:
        had = (past_a == past_a) | (past_b == past_b)
        mark |= _rise(lost, s.last.lost) & had
    for level, before in ((opened, s.last.open), (gone, s.last.gone), (stop, s.last.stop)):
        if level is not still:
            mark |= _rise(level, before)
    seen = _Seen(a, b, past_a, past_b, lost, opened, gone, stop, c.gap, mark)
    return seen, replace(s, intact=intact, free=free)


def _switch(v: FloatArray, before: bool, seen_off: bool) -> tuple[BoolArray, bool]:
    """Return where a switch is on (0.5 or more), counted only once it has been seen off."""
    known = (v == v).any(axis=1)
    on = np.fmax.reduce(v, axis=1) >= 0.5
    off_before = np.logical_or.accumulate(np.concatenate(([seen_off], known & ~on)))
    return _filled_bool(on & off_before[1:], known, before), bool(off_before[-1])


def _filled_bool(x: BoolArray, known: BoolArray, before: bool) -> BoolArray:
    row = np.maximum.accumulate(np.where(known, np.arange(x.size), -1))
    return np.where(row >= 0, x[np.maximum(row, 0)], before)


def _past(x: FloatArray, before: float) -> FloatArray:
    """Return for each scan the last reading before it."""
    shifted = np.concatenate(([before], x[:-1]))
    good = shifted == shifted
    if good.all():
        return shifted
    row = np.maximum.accumulate(np.where(good, np.arange(x.size), 0))
    return shifted[row]


def _rise(x: BoolArray, before: bool) -> BoolArray:
    return x & ~np.concatenate(([before], x[:-1]))


def _scan(block: Block, ch: _Channels, seen: _Seen, row: int, *, filled: bool) -> After:
    """Return scan ``row``; ``filled``: each side as last read instead of NaN."""
    a, b = float(seen.a[row]), float(seen.b[row])
    if filled:
        a = a if a == a else float(seen.past_a[row])
        b = b if b == b else float(seen.past_b[row])
    quality = block.quality[row, ch.strain].tolist() if ch.strain and not filled else ()
    return After(
        scan=block.first + row,
        tick=int(block.tick[row]),
        t_s=float(block.t_s[row]),
        a=a,
        b=b,
        lost=bool(seen.lost[row]),
        ranged=bool(quality) and all(q in _RANGE for q in quality),
        open=bool(seen.open[row]),
        gone=bool(seen.gone[row]),
        stop=bool(seen.stop[row]),
        over_gap=bool(seen.gap[row]),
        mark=bool(seen.mark[row]),
    )


def _append(s: RuptureState, ch: _Channels, after: After, stage: str, cues: list[Cue]) -> RuptureState:
    p = s.pending
    if p is None:
        raise CoreError("rupture: got a scan to await but nothing pending, wanted something pending")
    p = replace(p, rows=(*p.rows, after))
    while len(p.rows) >= SCANS or (len(p.rows) > 1 and p.rows[-1].open and p.rows[-2].open):
        why, wait = judge(p, bool(ch.strain), stage)
        if why == SWITCH_DOUBTED:
            text = "the break switch is open while strain goes on as before: suspect the switch"
            if not s.doubted:
                cues.append(Cue(after.scan, after.tick, "sensor_suspected", SWITCH, True, text))
            return replace(s, pending=None, doubted=True)
        if why == LOAD_OFF:
            if not s.off:
                cues.append(_load_off(p, after))
            return replace(s, pending=None, off=True)
        if why == VANISHED:
            if not s.vanished:
                text = (
                    "all strain was lost at once in tertiary creep: the specimen may have broken, go and look"
                )
                cues.append(Cue(after.scan, after.tick, "sensor_broken", ALL_STRAIN, True, text))
            return replace(s, pending=None, vanished=True)
        if why:
            cues.append(_rupture(p, after, why))
            return replace(s, pending=None, happened=True)
        if wait:
            break
        again = _restart(p)
        if again is None:
            return replace(s, pending=None)
        p = again
    return replace(s, pending=p)


def _restart(p: Pending) -> Pending | None:
    """Return what is pending from the next scan in which something happened, if there is one.

    It is held against the scan before it or against the one before all of this, whichever is nearer: the way
    back from a spike is no jump.
    """
    for k in range(1, len(p.rows)):
        row = p.rows[k]
        if row.mark:
            a = _nearer(row.a, p.before.a, [r.a for r in p.rows[:k]])
            b = _nearer(row.b, p.before.b, [r.b for r in p.rows[:k]])
            return Pending(replace(p.rows[k - 1], a=a, b=b, mark=False), p.motion, p.rows[k:])
    return None


def _nearer(x: float, before: float, since: list[float]) -> float:
    """Return ``before`` or the last of ``since`` that is a number, whichever is nearer to ``x``."""
    last = next((v for v in reversed(since) if v == v), before)
    return last if before != before or abs(x - last) < abs(x - before) else before


def _rupture(p: Pending, now: After, why: str) -> Cue:
    time_h = p.rows[0].t_s / 3600.0
    figures: dict[str, Any] = {"time_h": time_h, "tick": p.rows[0].tick, "why": why}
    if p.before.t_s == p.before.t_s:
        figures["not_before_h"] = p.before.t_s / 3600.0
    sides = [v for v in (p.before.a, p.before.b) if v == v]
    if sides:
        figures["strain"] = sum(sides) / len(sides)
    message = f"rupture after {time_h:.6g} h: {why}"
    return Cue(now.scan, now.tick, "rupture", "", True, message, None, figures)


def _load_off(p: Pending, now: After) -> Cue:
    what = "force gone" if p.rows[-1].gone else "beam on its stop"
    figures = {"from_h": p.rows[0].t_s / 3600.0, "why": what}
    return Cue(now.scan, now.tick, "load_off", "", True, f"{what}; strain goes on", None, figures)
