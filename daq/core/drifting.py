"""A thermocouple that drifts under control: the loop hides it, the output and the other couples do not.

The controller holds the *indication* of its thermocouple at the set point. If that couple comes to read low
by 3 K, the specimen becomes 3 K hotter: the indication stays, the other couples and the output rise, and
so does the strain rate, by 2 to 10 % per kelvin. That is not tertiary creep.

What output tells of temperature is physics. Losses by conduction and convection go with T - T_room, so
d ln P/dT = 1/(T - T_room); radiation with T^4, so 4/T [K]. A furnace is in between; an output in per cent
of *voltage* moves half as much as power does. From half the first to the second is the range taken
[1/K]; where the indication itself was moved (set-point steps), the record's own ratio narrows it.

* One couple, steady, output moved for good: **weak** evidence. Mains, room, winding and insulation move
  the output as well, and the message says so. What room and day explain, and what settles early (insulation
  that soaks), is regressed away; what the output does anyway over hours and weeks sets how much it must
  move: the error of the change is that of first-order noise as seen in the record (long-run variance).
* Several couples: the differences between them show it within hours. The one that stays while the others move
  together, and the output with them, controls and drifts. The one that moves alone while the others and the
  output stay drifts and does not control. Anything else is no drift of one couple, and is not named.

Memory: at most 128 blocks of means over equal stretches of time that double when they are full. A change is
sought at tenths of the elapsed time, whether that is a day or a year.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core.block import Block, Cue
from daq.core.changes import Z90, best_change, fixed_change
from daq.core.leaves import Closed
from daq.core.rules import ZERO_C_IN_K, TestRules
from daq.core.suspects import columns
from daq.records import FloatArray

ALARM: Final = "thermocouple_drifting"
WIDTH_H: Final = 0.25
MOST: Final = 128
LEAST: Final = 16
"""Blocks needed: four times the columns that a plain change is judged with."""
LOOK: Final = 1.03
ALONE_H: Final = 168.0
"""A single couple is not judged before it has seen a week: doors, people and mains have the periods of a day
and a week, and what has been seen once is no habit yet."""
DAYS_H: Final = 36.0
"""From here on the wave of a day can be told from a change for good."""
SOAK: Final = 0.05
"""Time constant of what settles early, as a share of the elapsed time."""
SIZE_K: Final = 1.5
"""Half of the closest permitted deviation (ISO 204: 3 K to 600 degC): less is no concern."""
SURE: Final = 6.0
"""Standard errors asked for. Ninety shapes at a hundred looks, and an error known to a few per cent at
best: the same order as a normal deviate of 4.5, exceeded once in 150 000, would want."""
DOUBT_K: Final = 0.75
DOUBT_SURE: Final = 4.0
SURE_ALONE: Final = 8.0
"""And where only the output speaks: its disorder may have a memory of days, of which a week shows little."""
LOOKS: Final = 2
QUIET: Final = 3
PATTERN: Final = 0.5
"""Misfit of a pattern, as a share of the change, up to which it is that pattern."""
NEAR_K: Final = 10.0
"""Scans farther than this, or three bands, from the set point are heating, cooling or interruption."""
ROOM_C: Final = 23.0
START, LEAVES, FIRST = 0, 1, 2


@state
@dataclass(frozen=True, slots=True)
class Suspicion:
    """What the latest look made of it. ``reads_k``: error of the indication [K], below zero where it reads
    low and the specimen is hotter, with 90 % limits; ``output``: the output's relative change; ``sure``: in
    standard errors; ``controls``: the others moved, not this one, None where all moved; ``alone``: only the
    output speaks for it."""

    channel: str
    reads_k: float
    low_k: float
    high_k: float
    since_h: float
    output: float
    sure: float
    controls: bool | None
    alone: bool


@state
@dataclass(frozen=True, slots=True)
class DriftState:
    """``blocks``: (k, 2 + 2 (m + 2)): index of the stretch, leaves, then sum and count of output, room and
    each couple; ``run``/``quiet``: looks in a row for and against; ``told``: the couple named."""

    blocks: FloatArray
    width_h: float = WIDTH_H
    next_look_h: float = 1.0
    latest: Suspicion | None = None
    run: int = 0
    quiet: int = 0
    told: str = ""


def begin(rules: TestRules) -> DriftState:
    """Return the state before the first scan."""
    return DriftState(np.zeros((0, FIRST + 2 * (len(columns(rules)) + 2))))


def watch_drift(
    s: DriftState, rules: TestRules, block: Block, closed: Closed | None, output: int, room: int
) -> tuple[DriftState, list[Cue]]:
    """Take the leaves that closed; ``output`` and ``room`` are their columns, the couples come first."""
    sensors = len(columns(rules))
    if closed is None or not sensors or rules.set_point_c is None:
        return s, []
    picked = closed.mean[:, [output, room, *range(sensors)]]
    if not (picked[:, 0] > 0.0).any():
        return s, []
    near = max(NEAR_K, 3.0 * max(rules.below_k or 0.0, rules.above_k or 0.0))
    hours = block.t_s[closed.end - 1] / 3600.0
    cues: list[Cue] = []
    for values, t_h, end in zip(picked.tolist(), hours.tolist(), closed.end.tolist(), strict=True):
        seen = [v for v in values[2:] if v == v]
        if t_h < 0.0 or not values[0] > 0.0 or not seen:
            continue
        if abs(sum(seen) / len(seen) - rules.set_point_c) > near:
            continue
        s = _add(s, t_h, values)
        if t_h >= s.next_look_h:
            row = end - 1
            s = _look(s, rules, t_h, block.first + row, int(block.tick[row]), cues)
    return s, cues


def doubt(s: DriftState) -> str | None:
    """Return why the specimen may be hotter than indicated, None where nothing speaks for it.

    It asks for less than the alarm does: a rate that rises is a reason to look closer.
    """
    d = s.latest
    if d is None or d.controls is False or d.reads_k > -DOUBT_K or d.sure < DOUBT_SURE:
        return None
    if d.controls is None:
        return (
            f"{d.channel} parts from the other thermocouples since {d.since_h:.3g} h: if it controls, the "
            f"specimen is hotter than it says by about {-d.reads_k:.2g} K"
        )
    others = "" if d.alone else ", the other thermocouples with it"
    return (
        f"the controller output has moved by {100.0 * d.output:+.2g} % since {d.since_h:.3g} h with "
        f"{d.channel} steady{others}: the specimen may be hotter than indicated by about {-d.reads_k:.2g} K"
    )


# --- memory -----------------------------------------------------------------------------


def _add(s: DriftState, t_h: float, values: list[float]) -> DriftState:
    """Add one leaf; a stretch that is over takes what comes late (equal or unordered stamps)."""
    blocks, width = s.blocks, s.width_h
    while t_h >= MOST * width:
        blocks, width = _halved(blocks), 2.0 * width
    at = math.floor(t_h / width)
    if blocks.shape[0] and at <= blocks[-1, START]:
        blocks = blocks.copy()
    else:
        fresh = np.zeros((1, blocks.shape[1]))
        fresh[0, START] = at
        blocks = np.concatenate((blocks, fresh))
    last = blocks[-1]
    last[LEAVES] += 1.0
    for j, v in enumerate(values):
        if v == v:
            last[FIRST + 2 * j] += v
            last[FIRST + 2 * j + 1] += 1.0
    return replace(s, blocks=blocks, width_h=width)


def _halved(blocks: FloatArray) -> FloatArray:
    """Return blocks of twice the width."""
    half = np.floor(blocks[:, START] / 2.0)
    first = np.flatnonzero(np.diff(half, prepend=-1.0))
    out = blocks[first].copy()
    out[:, START] = half[first]
    second = np.flatnonzero(np.diff(half, prepend=-1.0) == 0.0)
    out[np.searchsorted(first, second) - 1, LEAVES:] += blocks[second, LEAVES:]
    return out


# --- looks ------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Series:
    """Block means: middle of the stretch [h], output over its mean less one, room, couples; (n,), (n, m)."""

    t_h: FloatArray
    out: FloatArray
    room: FloatArray
    couples: FloatArray
    names: tuple[str, ...]


def _look(s: DriftState, rules: TestRules, now_h: float, scan: int, tick: int, cues: list[Cue]) -> DriftState:
    series = _series(s, rules)
    found = None if series is None else judge(series, now_h)
    sure = SURE_ALONE if found is not None and found.alone else SURE
    strong = found is not None and abs(found.reads_k) >= SIZE_K and found.sure >= sure
    weak = found is None or abs(found.reads_k) < 0.5 * SIZE_K or found.sure < 0.5 * sure
    same = found is not None and s.latest is not None and found.channel == s.latest.channel
    run = (s.run + 1 if same else 1) if strong else 0
    s = replace(s, latest=found, run=run, quiet=s.quiet + 1 if weak else 0, next_look_h=now_h * LOOK)
    other = found is not None and run >= LOOKS and found.channel != s.told
    if s.told and (s.quiet >= QUIET or other):
        cues.append(Cue(scan, tick, ALARM, s.told, False))
        s = replace(s, told="")
    if not s.told and run >= LOOKS and found is not None:
        cues.append(Cue(scan, tick, ALARM, found.channel, True, _message(found), None, _figures(found)))
        s = replace(s, told=found.channel)
    return s


def _series(s: DriftState, rules: TestRules) -> Series | None:
    """Return what can be judged: couples that are read now and were so for most of the time."""
    b = s.blocks
    full = b[:, LEAVES] >= 0.5 * float(np.median(b[:, LEAVES]))
    b = b[full]
    count = b[:, FIRST + 1 :: 2]
    alive = np.flatnonzero((count[-4:] > 0.0).all(axis=0) & ((count > 0.0).mean(axis=0) > 0.7))
    use = [j for j in alive.tolist() if j >= 2]
    if b.shape[0] < LEAST or not use:
        return None
    rows = (count[:, [0, *use]] > 0.0).all(axis=1)
    has_room = bool((count[rows, 1] > 0.0).all())
    b, count = b[rows], count[rows]
    if b.shape[0] < LEAST:
        return None
    mean = b[:, FIRST::2] / np.maximum(count, 1.0)
    at = columns(rules)
    return Series(
        t_h=(b[:, START] + 0.5) * s.width_h,
        out=mean[:, 0] / float(np.mean(mean[:, 0])) - 1.0,
        room=mean[:, 1] if has_room else np.full(b.shape[0], np.nan),
        couples=mean[:, use],
        names=tuple(rules.channels[at[j - 2]].name for j in use),
    )


def judge(x: Series, now_h: float) -> Suspicion | None:
    """Return the couple that has changed most surely, by the pattern it shows, None where none does."""
    return _judge_alone(x, now_h) if len(x.names) == 1 else _judge_several(x)


def _judge_alone(x: Series, now_h: float) -> Suspicion | None:
    if now_h < ALONE_H:
        return None
    base = [*_base_of_output(x, now_h)]
    kelvin = x.couples[:, 0] - float(np.mean(x.couples[:, 0]))
    low, high = np.quantile(kelvin, (0.05, 0.95))
    moved = float(high - low) > 0.5 * SIZE_K
    change = best_change(x.t_h, x.out, np.column_stack([*base, kelvin]))
    if change is None:
        return None
    own = fixed_change(kelvin, np.column_stack([*base, change.shape]), x.out) if moved else None
    least, likely, most = gain(x, own)
    ends = sorted((abs(change.size) + way * Z90 * change.se) / g for way, g in ((-1.0, most), (1.0, least)))
    sign = -1.0 if change.size > 0.0 else 1.0
    limits = sorted((sign * max(ends[0], 0.0), sign * ends[1]))
    return Suspicion(
        x.names[0], -change.size / likely, limits[0], limits[1], change.since_h, change.size, change.sure,
        True, True,
    )  # fmt: skip


def _judge_several(x: Series) -> Suspicion | None:
    m = len(x.names)
    base = np.column_stack(_settling(x))
    total = x.couples.sum(axis=1)
    apart = [best_change(x.t_h, (m * x.couples[:, i] - total) / (m - 1), base) for i in range(m)]
    known = [c for c in apart if c is not None]
    if not known:
        return None
    most = max(known, key=lambda c: (abs(c.size) >= DOUBT_K, c.sure))
    shape = most.shape
    moved = [fixed_change(shape, base, x.couples[:, j]) for j in range(m)]
    now_h = float(x.t_h[-1])
    answer = fixed_change(shape, np.column_stack(_base_of_output(x, now_h)), x.out)
    if answer is None or any(c is None for c in moved):
        return None
    shift = np.array([0.0 if c is None else c[0] for c in moved])
    least, _, high = gain(x, None)
    best: tuple[float, int, float, bool | None] | None = None
    for j in range(m):
        others = float(np.delete(shift, j).mean())
        d = float(shift[j]) - others
        if abs(d) < DOUBT_K:
            continue
        slack = Z90 * answer[1]
        for controls in (True, False):
            pull = -d if controls else 0.0  # how the specimen really moved
            want = np.full(m, pull)
            want[j] = pull + d
            off = float(np.sqrt(np.mean((shift - want) ** 2)))
            # the output must answer to what the specimen did, by some gain within the physics
            limits = sorted((pull * least, pull * high))
            beyond = max(limits[0] - answer[0] - slack, answer[0] - limits[1] - slack, 0.0)
            misfit = math.hypot(off, beyond / math.sqrt(least * high)) / abs(d)
            # of two that part the output alone says which, and only where its answer is clear either way
            told = (
                abs(answer[0]) - 2.0 * answer[1] > 0.0
                if controls
                else (abs(answer[0]) + 2.0 * answer[1] < least * abs(d))
            )
            if (m > 2 or told) and misfit < PATTERN and (best is None or misfit < best[0]):
                best = (misfit, j, d, controls)
    parted = None if best is not None else _parted(shift)
    if parted is not None:
        best = (0.0, *parted, None)
    if best is None:
        return None
    _, j, d, control = best
    own = apart[j]
    se = most.se if own is None else own.se
    return Suspicion(
        x.names[j], d, d - Z90 * se, d + Z90 * se, most.since_h, answer[0],
        min(most.sure, abs(d) / se), control, False,
    )  # fmt: skip


def _parted(shift: FloatArray) -> tuple[int, float] | None:
    """Return the one of three or more that parted from others that stay together, whatever all did
    together (a set point that was moved meanwhile), and how far; None where they do not stay together."""
    if shift.size < 3:
        return None
    j = int(np.argmax(np.abs(shift - np.median(shift))))
    rest = np.delete(shift, j)
    d = float(shift[j] - rest.mean())
    return (j, d) if float(np.ptp(rest)) < PATTERN * abs(d) and abs(d) >= DOUBT_K else None


def gain(x: Series, own: tuple[float, float] | None) -> tuple[float, float, float]:
    """Return least, likely and greatest relative change of output per kelvin [1/K].

    ``own``: the ratio that the record shows where the indication was moved, with its standard error.
    """
    t_c = float(np.mean(x.couples))
    room = float(np.mean(x.room))
    above = max(t_c - (room if room == room else ROOM_C), 50.0)
    least, most = 0.5 / above, 4.0 / (t_c + ZERO_C_IN_K)
    centre, spread = 0.5 * math.log(least * most), math.log(most / least) / (2.0 * Z90)
    if own is not None and own[0] > 0.0:
        error = max(own[1] / own[0], 0.1)
        weight = spread**2 / (spread**2 + error**2)
        centre += weight * (min(max(math.log(own[0]), math.log(least)), math.log(most)) - centre)
        spread *= math.sqrt(1.0 - weight)
    return math.exp(centre - Z90 * spread), math.exp(centre), math.exp(centre + Z90 * spread)


# --- what else moves the output -------------------------------------------------------------------------


def _settling(x: Series) -> list[FloatArray]:
    return [np.ones(x.t_h.size), np.exp(-x.t_h / (SOAK * float(x.t_h[-1])))]


def _base_of_output(x: Series, now_h: float) -> list[FloatArray]:
    """Return what moves the output beside the specimen: soaking, room, and the day where it is resolved."""
    out = _settling(x)
    seen = bool(np.isfinite(x.room).all())
    if seen:
        out.append(x.room - float(np.mean(x.room)))
    step = float(np.median(np.diff(x.t_h)))
    if now_h >= DAYS_H and step <= 6.0:
        angle = 2.0 * math.pi * x.t_h / 24.0
        out += [np.cos(angle), np.sin(angle)]
    return out


# --- words ------------------------------------------------------------------------------


def _message(d: Suspicion) -> str:
    way, size = ("low" if d.reads_k < 0.0 else "high"), abs(d.reads_k)
    ends = sorted((abs(d.low_k), abs(d.high_k)))
    about = f"{way} by about {size:.2g} K ({ends[0]:.2g} to {ends[1]:.2g})"
    up = "up" if d.output > 0.0 else "down"
    out = f"output {up} by {abs(100.0 * d.output):.2g} % since {d.since_h:.3g} h"
    then = "hotter" if d.reads_k < 0.0 else "cooler"
    if d.alone:
        return f"{out}, {d.channel} steady: it may read {about}, or mains, room or winding changed"
    if d.controls:
        return (
            f"{out}, the other thermocouples with it, {d.channel} steady: it reads {about} and the specimen "
            f"is {then} than it says"
        )
    if d.controls is None:
        return (
            f"{d.channel} parts from the others, which stay together, since {d.since_h:.3g} h while all were "
            f"moved: it reads {about}; if it controls, the specimen is {then} than it says"
        )
    return (
        f"{d.channel} moved alone since {d.since_h:.3g} h, the others and the output steady: it reads {about}"
    )


def _figures(d: Suspicion) -> dict[str, Any]:
    return {
        "channel": d.channel,
        "reads_k": d.reads_k,
        "low_k": d.low_k,
        "high_k": d.high_k,
        "since_h": d.since_h,
        "output_percent": 100.0 * d.output,
        "standard_errors": d.sure,
        "controls": d.controls,
        "by_output_alone": d.alone,
    }
