"""Which sensors can be believed? Broken, stuck, at the end of their travel, sides that disagree.

*Broken*: no usable reading for a minute where the instrument says why (open circuit, overload, out of
range), for ten minutes and three times the longest hole so far where a reading is merely missing
(many channels are read less often than others). Scans in which the link was down say nothing. Three
good scans end it.

*Stuck*: the very same number for ten times as many scans, and ten times as long, as ever before in
this test, fifty scans and half an hour at least. The counts of the converter and a slow rate make
readings repeat, and both are in "ever before". Only channels that have shown thirty changes can be
judged, and thermocouples only where their step is at most 0.2 K: a coarse display under good control
may rightly stand still for days.

*Sides disagree*: over three stretches in a row, each a twentieth of the elapsed time, one side moves
more than three times as far as the other, always the same one. One slip falls into two stretches at
most; bending, necking or a crack, and a side that sticks, go on.

*Travel*: nine tenths of the travel named in the rules are used since the first reading.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core.block import Block, Cue
from daq.core.hold import BETWEEN, BEYOND, CLEAR, REST, Hold, Rows, hold
from daq.core.leaves import LEAF, Closed, Paced
from daq.core.rules import Role, TestRules
from daq.records import BAD, TICKS_PER_S, FloatArray, IntArray, Quality

HARD_TICKS: Final = 60 * TICKS_PER_S
SOFT_TICKS: Final = 600 * TICKS_PER_S
HOLE_TIMES: Final = 3
SCANS: Final = 3
UNKNOWN_SCANS: Final = 64
"""Missing scans that count as a hole while it is not known how often a channel is read at all."""
SOFT: Final = (int(Quality.BAD_MISSING), int(Quality.BAD_GARBLED))
AWAY: Final = (int(Quality.BAD_LINK), int(Quality.BAD_IDENTITY))
_WHY: Final = {
    int(Quality.BAD_OPEN_CIRCUIT): "open circuit",
    int(Quality.BAD_OVERLOAD): "overload",
    int(Quality.BAD_RANGE): "out of range",
    int(Quality.BAD_NOT_A_NUMBER): "not a number",
    int(Quality.BAD_GARBLED): "garbled replies",
    int(Quality.BAD_MISSING): "no reading",
}

STUCK_SCANS: Final = 50
STUCK_TICKS: Final = 1800 * TICKS_PER_S
STUCK_TIMES: Final = 10
LIVELY: Final = 30
COARSE_K: Final = 0.2
SCALAR_ROWS: Final = 24
"""Up to so many scans plain Python is faster than whole arrays; both give the same state."""

TRAVEL_ENTER: Final = 0.9
TRAVEL_LEAVE: Final = 0.85
SIDES_RATIO: Final = 1.05
SIDES_LEAST: Final = 100e-6
SIDES_SDS: Final = 8.0
SIDES_SHARE: Final = 0.5
SIDES_STRETCHES: Final = 3


@state
@dataclass(frozen=True, slots=True)
class Hole:
    """A channel without usable readings: since when, how many scans; the longest that healed by itself."""

    since: int | None = None
    since_s: float = 0.0
    scans: int = 0
    healing: int = 0
    longest: int = 0
    active: bool = False


@state
@dataclass(frozen=True, slots=True)
class Still:
    """How long a channel repeats its reading. ``scans`` and ``first`` of the present run of equal readings,
    ``longest`` (scans) and ``lasting`` (ticks) of earlier runs, ``least`` the smallest change seen."""

    value: float = math.nan
    first: int = 0
    scans: int = 0
    changes: int = 0
    longest: int = 0
    lasting: int = 0
    latest: int = 0
    least: float = math.inf
    active: bool = False


@state
@dataclass(frozen=True, slots=True)
class Sides:
    """Sums of leaf means (a, b, leaves) of the open stretch, means of the one before, and stretches in a row:
    of disagreement, counted below zero where B moves more, and of agreement since."""

    until_s: float = 0.0
    a: float = 0.0
    b: float = 0.0
    leaves: int = 0
    last_a: float = math.nan
    last_b: float = math.nan
    run: int = 0
    agreed: int = 0
    active: bool = False


@state
@dataclass(frozen=True, slots=True)
class SensorState:
    """One entry per channel of the rules; ``zero``: first reading for travel."""

    holes: tuple[Hole, ...]
    stills: tuple[Still, ...]
    travel: tuple[Hold, ...]
    zero: tuple[float, ...]
    sides: Sides = Sides()


def begin(rules: TestRules) -> SensorState:
    """Return the state before the first scan."""
    c = len(rules.channels)
    return SensorState((Hole(),) * c, (Still(),) * c, (REST,) * c, (math.nan,) * c)


def watch_sensors(
    s: SensorState, rules: TestRules, block: Block, paced: Paced, linked: Any
) -> tuple[SensorState, list[Cue]]:
    """Judge every channel over n scans; ``linked`` (n,): something was read in that scan."""
    cues: list[Cue] = []
    bad = block.quality >= BAD
    holes = s.holes
    if bad.any() or any(h.since is not None or h.active for h in holes):
        holes = tuple(_follow_hole(h, rules, block, j, bad[:, j], linked, cues) for j, h in enumerate(holes))
    stills = list(s.stills)
    travel, zero = list(s.travel), list(s.zero)
    for j, channel in enumerate(rules.channels):
        role = channel.role
        if role in (Role.STRAIN, Role.EXTENSION, Role.SPECIMEN_TEMPERATURE):
            stills[j] = _follow_still(stills[j], channel.name, role, block, j, cues)
        if channel.travel_mm and role in (Role.STRAIN, Role.EXTENSION):
            travel[j], zero[j] = _follow_travel(travel[j], zero[j], rules, block, j, paced, cues)
    return replace(s, holes=holes, stills=tuple(stills), travel=tuple(travel), zero=tuple(zero)), cues


# --- broken -----------------------------------------------------------------------------


def _follow_hole(
    h: Hole, rules: TestRules, block: Block, j: int, bad: Any, linked: Any, cues: list[Cue]
) -> Hole:
    if h.since is None and not h.active and not bad.any():
        return h
    q = block.quality[:, j]
    said = (q >= BAD) & (q != SOFT[0]) & (q != SOFT[1])  # an instrument that says why is there
    rows = np.flatnonzero((linked | said) & (q != AWAY[0]) & (q != AWAY[1]))
    if not rows.size:
        return h
    is_bad = bad[rows]
    tick = block.tick[rows]
    edges = np.flatnonzero(is_bad[1:] != is_bad[:-1]) + 1
    name = rules.channels[j].name
    for begin_at, end_at in zip([0, *edges.tolist()], [*edges.tolist(), int(rows.size)], strict=True):
        n = end_at - begin_at
        if not is_bad[begin_at]:
            h = _heal(h, name, block, rows[begin_at:end_at], int(tick[begin_at]), cues)
            continue
        if h.since is None:
            h = replace(h, since=int(tick[begin_at]), since_s=float(block.t_s[rows[begin_at]]), scans=0)
        since, scans = h.since or 0, h.scans
        h = replace(h, scans=scans + n, healing=0)
        if h.active:
            continue
        codes = q[rows[begin_at:end_at]]
        soft = (codes == SOFT[0]) | (codes == SOFT[1])
        wanted = np.where(soft, max(SOFT_TICKS, HOLE_TIMES * h.longest), HARD_TICKS)
        enough = np.where(soft & (h.longest == 0), UNKNOWN_SCANS, SCANS)
        long = (tick[begin_at:end_at] - since >= wanted) & (scans + 1 + np.arange(n) >= enough)
        if long.any():
            k = int(np.argmax(long))
            row, why = int(rows[begin_at + k]), _WHY.get(int(codes[k]), "bad readings")
            message = f"{name}: {why} since {h.since_s / 3600.0:.6g} h"
            figures = {"from_h": h.since_s / 3600.0, "why": why}
            cues.append(
                Cue(
                    block.first + row,
                    int(block.tick[row]),
                    "sensor_broken",
                    name,
                    True,
                    message,
                    None,
                    figures,
                )
            )
            h = replace(h, active=True)
    return h


def _heal(h: Hole, name: str, block: Block, rows: IntArray, tick: int, cues: list[Cue]) -> Hole:
    if not h.active:
        longest = h.longest if h.since is None else max(h.longest, tick - h.since)
        return Hole(longest=longest)
    if h.healing + rows.size < SCANS:
        return replace(h, healing=h.healing + int(rows.size))
    row = int(rows[SCANS - h.healing - 1])
    cues.append(Cue(block.first + row, int(block.tick[row]), "sensor_broken", name, False))
    return Hole(longest=h.longest)


# --- stuck ------------------------------------------------------------------------------


def _follow_still(h: Still, name: str, role: Role, block: Block, j: int, cues: list[Cue]) -> Still:
    v = block.values[:, j]
    coarse = COARSE_K if role is Role.SPECIMEN_TEMPERATURE else math.inf
    if len(block) <= SCALAR_ROWS:
        for row, (x, tick) in enumerate(zip(v.tolist(), block.tick.tolist(), strict=True)):
            if x != x:
                continue
            if x != h.value:
                h = _changed(h, name, x, tick, block.first + row, cues)
            else:
                h = replace(h, scans=h.scans + 1, latest=tick)
                if not h.active and h.scans >= STUCK_SCANS:
                    h = _judge_still(h, name, coarse, block, row, cues)
        return h
    rows = np.flatnonzero(v == v)
    if not rows.size:
        return h
    x, tick = v[rows], block.tick[rows]
    changed = np.flatnonzero(x != np.concatenate(([h.value], x[:-1])))
    starts = changed.tolist()
    if not starts:
        return _lengthen(h, name, coarse, block, rows, 0, int(rows.size), cues)
    h = _lengthen(h, name, coarse, block, rows, 0, starts[0], cues)
    h = _changed(h, name, float(x[starts[0]]), int(tick[starts[0]]), block.first + int(rows[starts[0]]), cues)
    lengths = np.diff(changed, append=rows.size)
    # runs too short ever to be judged are folded at once; the others one by one
    slow = [*np.flatnonzero(lengths >= STUCK_SCANS).tolist(), len(starts) - 1]
    done = 0
    for k in dict.fromkeys(slow):
        h = _fold(h, x, tick, changed, done, k)
        h = _lengthen(h, name, coarse, block, rows, starts[k] + 1, starts[k] + int(lengths[k]), cues)
        if k + 1 < len(starts):
            nxt = starts[k + 1]
            h = _changed(h, name, float(x[nxt]), int(tick[nxt]), block.first + int(rows[nxt]), cues)
            done = k + 1
    return h


def _fold(h: Still, x: FloatArray, tick: IntArray, changed: IntArray, begin_at: int, end_at: int) -> Still:
    """Take the changes after number ``begin_at`` up to ``end_at``; every run between them is short."""
    if end_at <= begin_at:
        return h
    at = changed[begin_at : end_at + 1]
    step = np.abs(np.diff(x[at]))
    lengths = np.diff(at)
    lasting = tick[at[1:] - 1] - tick[at[:-1]]
    last = int(at[-1])
    return Still(
        float(x[last]), int(tick[last]), 1, h.changes + int(lengths.size),
        max(h.longest, int(lengths.max())), max(h.lasting, int(lasting.max())), int(tick[last]),
        min(h.least, float(step.min())),
    )  # fmt: skip


def _changed(h: Still, name: str, x: float, tick: int, scan: int, cues: list[Cue]) -> Still:
    if h.scans == 0:
        return Still(x, tick, 1, latest=tick)
    if h.active:
        cues.append(Cue(scan, tick, "sensor_stuck", name, False))
    longest, lasting = (h.longest, h.lasting) if h.active else _longest(h)
    return Still(x, tick, 1, h.changes + 1, longest, lasting, tick, min(h.least, abs(x - h.value)))


def _longest(h: Still) -> tuple[int, int]:
    return max(h.longest, h.scans), max(h.lasting, h.latest - h.first)


def _lengthen(
    h: Still,
    name: str,
    coarse: float,
    block: Block,
    rows: IntArray,
    begin_at: int,
    end_at: int,
    cues: list[Cue],
) -> Still:
    """Take readings ``begin_at`` to ``end_at`` of ``rows``, all equal to the one before."""
    if end_at <= begin_at:
        return h
    tick = block.tick[rows[begin_at:end_at]]
    after = replace(h, scans=h.scans + end_at - begin_at, latest=int(tick[-1]))
    if h.active or after.scans < STUCK_SCANS:
        return after
    scans = h.scans + 1 + np.arange(end_at - begin_at)
    long = (scans >= max(STUCK_SCANS, STUCK_TIMES * h.longest)) & (
        tick - h.first >= max(STUCK_TICKS, STUCK_TIMES * h.lasting)
    )
    if not long.any() or h.changes < LIVELY or h.least > coarse:
        return after
    k = int(np.argmax(long))
    h = replace(h, scans=int(scans[k]), latest=int(tick[k]))
    h = _judge_still(h, name, coarse, block, int(rows[begin_at + k]), cues)
    return replace(after, active=h.active)


def _judge_still(h: Still, name: str, coarse: float, block: Block, row: int, cues: list[Cue]) -> Still:
    if h.changes < LIVELY or h.least > coarse:
        return h
    if h.scans < max(STUCK_SCANS, STUCK_TIMES * h.longest):
        return h
    if h.latest - h.first < max(STUCK_TICKS, STUCK_TIMES * h.lasting):
        return h
    hours = (h.latest - h.first) / TICKS_PER_S / 3600.0
    message = f"{name} has read {h.value:.6g} in {h.scans} scans over {hours:.3g} h"
    figures = {"value": h.value, "scans": h.scans, "hours": hours, "longest_before": h.longest}
    cues.append(
        Cue(block.first + row, int(block.tick[row]), "sensor_stuck", name, True, message, None, figures)
    )
    return replace(h, active=True)


# --- travel -----------------------------------------------------------------------------


def _follow_travel(
    h: Hold, zero: float, rules: TestRules, block: Block, j: int, paced: Paced, cues: list[Cue]
) -> tuple[Hold, float]:
    channel = rules.channels[j]
    scale = 1.0
    if channel.role is Role.STRAIN:
        if rules.specimen.extensometer_length_mm is None:
            return h, zero
        scale = rules.specimen.extensometer_length_mm
    v = block.values[:, j] * scale
    rows = np.flatnonzero(v == v)
    if not rows.size or channel.travel_mm is None:
        return h, zero
    x = v[rows]
    if zero != zero:
        zero = float(x[0])
    used = np.abs(x - zero) / channel.travel_mm
    code = np.full(used.shape, BETWEEN, np.int8)
    code[used >= TRAVEL_ENTER] = BEYOND
    code[used < TRAVEL_LEAVE] = CLEAR
    if h.resting and not code.any():
        return h, zero
    at = Rows(block.first + rows, block.tick[rows], block.t_s[rows], np.maximum(paced.step[rows], 1))
    h, turns = hold(h, code, used, at, 1)
    for turn in turns:
        row = int(rows[turn.row])
        left = channel.travel_mm * max(0.0, 1.0 - float(used[turn.row]))
        message = f"{channel.name} has {left:.3g} mm of {channel.travel_mm:.3g} mm travel left"
        figures = {"left_mm": left, "travel_mm": channel.travel_mm}
        scan, tick = block.first + row, int(block.tick[row])
        if turn.active:
            cues.append(Cue(scan, tick, "travel_nearly_used", channel.name, True, message, None, figures))
        else:
            cues.append(Cue(scan, tick, "travel_nearly_used", channel.name, False))
    return h, zero


# --- sides ------------------------------------------------------------------------------


def watch_sides(
    s: SensorState, block: Block, closed: Closed | None, a: int, b: int, noise: FloatArray
) -> tuple[SensorState, list[Cue]]:
    """Compare the sides over the leaves that closed.

    ``a``, ``b``: columns of the leaves; ``noise`` (leaves,): standard deviation of a scan of their mean.
    """
    if closed is None:
        return s, []
    h, cues = s.sides, []
    mean_a, mean_b = closed.mean[:, a].tolist(), closed.mean[:, b].tolist()
    for k, (x, y) in enumerate(zip(mean_a, mean_b, strict=True)):
        row = int(closed.end[k]) - 1
        t_s = float(block.t_s[row])
        if x != x or y != y or t_s < 0.0:
            continue
        h = replace(h, a=h.a + x, b=h.b + y, leaves=h.leaves + 1)
        if t_s < h.until_s or h.leaves < 4:
            continue
        h, da, db = _close_stretch(h, t_s, float(noise[k]))
        scan, tick = block.first + row, int(block.tick[row])
        if not h.active and abs(h.run) >= SIDES_STRETCHES:
            h = replace(h, active=True)
            message = f"side A moved {1e6 * da:.0f}, side B {1e6 * db:.0f} microstrain in the same stretch"
            figures = {"moved_a": da, "moved_b": db, "test_h": t_s / 3600.0}
            cues.append(Cue(scan, tick, "sides_disagree", "", True, message, None, figures))
        elif h.active and h.agreed >= SIDES_STRETCHES:
            h = replace(h, active=False)
            cues.append(Cue(scan, tick, "sides_disagree", "", False))
    return replace(s, sides=h), cues


def _close_stretch(h: Sides, t_s: float, noise: float) -> tuple[Sides, float, float]:
    """Return the sides with a new stretch open, and what each moved in the one that closed."""
    a, b = h.a / h.leaves, h.b / h.leaves
    da, db = a - h.last_a, b - h.last_b
    least = max(SIDES_LEAST, SIDES_SDS * noise / math.sqrt(LEAF * h.leaves))
    apart = da - db
    run, agreed = 0, h.agreed + 1
    if abs(apart) > least and abs(apart) > SIDES_SHARE * abs(da + db):
        way = 1 if apart > 0.0 else -1
        run, agreed = (h.run + way if h.run * way > 0 else way), 0
    return Sides(SIDES_RATIO * t_s, 0.0, 0.0, 0, a, b, run, agreed, h.active), da, db
