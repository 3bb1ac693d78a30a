"""Specimen temperature against its permitted band: excursions, and a word before they happen.

Every thermocouple along the gauge length is judged, and their mean. The band belongs to the
*specified* temperature (ISO 204: +-3 K to 600 C, +-4 K to 800 C, +-5 K to 1000 C, +-6 K to 1100 C;
the settings choose it), so the limits are numbers of the rules here.

* Nothing is judged while the furnace heats up: a signal counts from its second reading in a row
  at or above the lower limit. Overshoot therefore counts. A thermocouple that never arrives
  counts half an hour after the mean did, once the specimen is under load.
* Time out of band must add up to ``excursion_min_s`` (``core.hold``). A spike does not, whatever its size.
* Nearing: between four fifths of the way to a limit and the limit, for ten minutes or more.
* One thermocouple that leaves while the others, and the controller output where it is logged, stay
  where they were is a suspected thermocouple and not a hot specimen. The excursion of the
  *indicated* temperature is still recorded, marked ``suspected_sensor``.

A reading of quality ``SUSPECT_SPIKE`` or ``SUSPECT_SENSOR`` is passed over: it neither begins, prolongs nor
ends anything. Other suspect readings count.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np

from daq.codec import state
from daq.core.block import Block, Conclusion, Cue
from daq.core.hold import BETWEEN, BEYOND, CLEAR, REST, Codes, Hold, Rows, Turn, hold
from daq.core.leaves import Closed, Paced
from daq.core.rules import TestRules
from daq.core.suspects import (
    EPS_K,
    NEAR_ENTER,
    NEAR_LEAVE,
    Limits,
    Look,
    Reference,
    columns,
    follow_references,
    limits_of,
)
from daq.records import TICKS_PER_S, FloatArray, IntArray, Quality

MEAN: Final = "specimen_mean"
"""Name of the mean of the specimen's thermocouples where a finding needs a channel."""
SUSPECTED: Final = "sensor_suspected"
HYSTERESIS: Final = 0.1
"""Back inside means a tenth of the band inside, so that a furnace sitting on the limit raises once."""
SETTLE_TICKS: Final = 1800 * TICKS_PER_S
_SKIPPED: Final = (int(Quality.SUSPECT_SPIKE), int(Quality.SUSPECT_SENSOR))


@state
@dataclass(frozen=True, slots=True)
class Signal:
    """One thermocouple or the mean. ``arriving`` counts readings in the band before it is judged."""

    name: str
    judged: bool = False
    arriving: int = 0
    high: Hold = REST
    low: Hold = REST
    near_high: Hold = REST
    near_low: Hold = REST
    suspected: bool = False
    missed: int = 0

    @property
    def resting(self) -> bool:
        return self.judged and all(h.resting for h in (self.high, self.low, self.near_high, self.near_low))


@state
@dataclass(frozen=True, slots=True)
class BandState:
    """Signals in the order of the channels, the mean last; references of the same and of the output.

    ``arrived_scan`` and ``arrived_tick`` say when the mean (or the only thermocouple) reached the band.
    ``calm``: every signal is judged and rests.
    """

    signals: tuple[Signal, ...]
    references: tuple[Reference, ...]
    gradient: Hold = REST
    gradient_missed: int = 0
    arrived_scan: int | None = None
    arrived_tick: int = 0
    calm: bool = False


Item = Conclusion | Cue


def begin(rules: TestRules) -> BandState:
    """Return the state before the first scan."""
    names = [rules.channels[i].name for i in columns(rules)]
    if len(names) > 1:
        names.append(MEAN)
    return BandState(tuple(Signal(n) for n in names), (Reference(),) * (len(names) + 1))


def signals(rules: TestRules, block: Block) -> FloatArray:
    """Return the judged signals, columns as ``BandState.signals``, and last the output; (n, m + 1)."""
    at = columns(rules)
    x = block.values[:, at]
    if at:
        quality = block.quality[:, at]
        doubtful = (quality == _SKIPPED[0]) | (quality == _SKIPPED[1])
        if doubtful.any():
            x = np.where(doubtful, np.nan, x)
    parts = [x]
    if len(at) > 1:
        parts.append(block.specimen_c[:, None])
    return np.concatenate([*parts, block.output[:, None]], axis=1)


def watch_band(
    s: BandState, rules: TestRules, block: Block, x: FloatArray, paced: Paced, closed: Closed | None
) -> tuple[BandState, list[Item]]:
    """Judge n scans; ``x`` is :func:`signals` of them and ``closed`` its leaves."""
    m = len(s.signals)
    lim = limits_of(rules)
    if not m or not len(block):
        return s, []
    history, references = follow_references(s.references, lim, closed)
    items: list[Item] = []
    if lim is not None:
        dev = x[:, :m] - lim.set_point
        inside = not (
            (dev > NEAR_LEAVE * lim.above - EPS_K).any() or (dev < -NEAR_LEAVE * lim.below + EPS_K).any()
        )
        if not (s.calm and inside):
            look = Look(rules, block, x, dev, lim, history, closed)
            s = _judge(s, look, paced, items)
    s = _judge_gradient(s, rules, block, x, paced, items)
    return (s if references is s.references else replace(s, references=references)), items


def end(s: BandState, rules: TestRules, tick: int, scan: int) -> tuple[BandState, list[Item]]:
    """Close what is open when the test ends; excursions are told, alarms let go."""
    items: list[Item] = []
    lim = limits_of(rules)
    out = []
    for signal in s.signals:
        sides = [(n, getattr(signal, n)) for n in ("high", "low")]
        for side, h in sides:
            if h.active and lim is not None:
                items.append(_excursion(scan, tick, signal.name, side, h, lim, signal.suspected))
        gone = [_alarm(side, signal.suspected) for side, h in sides if h.active]
        near = (("high", signal.near_high), ("low", signal.near_low))
        gone += [f"temperature_nearing_{side}" for side, h in near if h.active]
        items.extend(Cue(scan, tick, alarm, signal.name, False) for alarm in dict.fromkeys(gone))
        out.append(Signal(signal.name, judged=signal.judged, arriving=signal.arriving))
    if s.gradient.active:
        items.append(Cue(scan, tick, "gradient", "", False))
    return replace(s, signals=tuple(out), gradient=REST, gradient_missed=0), items


# --- judging ----------------------------------------------------------------------------


def _judge(s: BandState, look: Look, paced: Paced, items: list[Item]) -> BandState:
    out: list[Signal] = []
    spent = np.cumsum(paced.step)
    for i in reversed(range(len(s.signals))):  # the mean first: it says when the others must have arrived
        signal = s.signals[i]
        usable = np.flatnonzero(np.isfinite(look.x[:, i]))
        was_judged = signal.judged
        signal, first = _arrive(signal, look, i, usable, s)
        if i == len(s.signals) - 1 and signal.judged and not was_judged:
            row = int(usable[first])
            s = replace(s, arrived_scan=look.block.first + row, arrived_tick=int(look.block.tick[row]))
        out.append(_judge_signal(signal, look, i, usable, first, spent, paced, items))
    return replace(s, signals=tuple(reversed(out)), calm=all(signal.resting for signal in out))


def _arrive(signal: Signal, look: Look, i: int, usable: IntArray, s: BandState) -> tuple[Signal, int]:
    """Return the signal and the first of its usable readings that is judged."""
    if signal.judged or not usable.size:
        return signal, 0
    ok = look.dev[usable, i] >= -look.lim.below - EPS_K
    before = np.concatenate(([signal.arriving > 0], ok[:-1]))
    judged = ok & before
    if s.arrived_scan is not None:
        tick, t_s = look.block.tick[usable], look.block.t_s[usable]
        judged |= (tick - s.arrived_tick >= SETTLE_TICKS) & (t_s >= 0.0)
    rows = np.flatnonzero(judged)
    if not rows.size:
        return replace(signal, arriving=int(ok[-1])), int(usable.size)
    return replace(signal, judged=True, arriving=0), int(rows[0])


def _judge_signal(
    signal: Signal, look: Look, i: int, usable: IntArray, first: int, spent: IntArray, paced: Paced,
    items: list[Item],
) -> Signal:  # fmt: skip
    lim, block = look.lim, look.block
    rows, missed = _rows(block, usable, spent, paced, signal.missed)
    dev, x = look.dev[usable, i], look.x[usable, i]
    turns: list[tuple[int, str, Turn]] = []
    holds: dict[str, Hold] = {}
    for name, sign, limit, wanted in (
        ("high", 1.0, lim.above, lim.wanted),
        ("low", -1.0, lim.below, lim.wanted),
        ("near_high", 1.0, lim.above, lim.near_wanted),
        ("near_low", -1.0, lim.below, lim.near_wanted),
    ):
        enter, leave = (NEAR_ENTER, NEAR_LEAVE) if name.startswith("near") else (1.0, 1.0 - HYSTERESIS)
        code = _codes(sign * dev, enter * limit + EPS_K, leave * limit + EPS_K)
        if name.startswith("near"):  # what is out is no longer near: the other alarm says so
            code[sign * dev > limit + EPS_K] = BETWEEN
        code[:first] = CLEAR
        h, said = hold(getattr(signal, name), code, sign * x, rows, wanted)
        holds[name] = h
        turns.extend((int(usable[t.row]), name, t) for t in said)
    suspected = _tell(signal, look, i, turns, items)
    done = replace(
        signal, suspected=suspected, missed=missed, high=holds["high"], low=holds["low"],
        near_high=holds["near_high"], near_low=holds["near_low"],
    )  # fmt: skip
    return replace(done, missed=0) if done.resting else done


def _rows(block: Block, usable: IntArray, spent: IntArray, paced: Paced, missed: int) -> tuple[Rows, int]:
    """Return the usable readings with the time each may be credited, and what is left over."""
    step = np.diff(spent[usable], prepend=-missed)
    step = np.where(step < paced.gap[usable], step, 0)
    rows = Rows(block.first + usable, block.tick[usable], block.t_s[usable], step)
    left = int(spent[-1]) - int(spent[usable[-1]]) if usable.size else missed + int(spent[-1])
    return rows, left


def _codes(out: FloatArray, enter: float, leave: float) -> Codes:
    """Return codes of distances ``out`` towards a limit."""
    code = np.full(out.shape, BETWEEN, np.int8)
    code[out > enter] = BEYOND
    code[out <= leave] = CLEAR
    return code


def _tell(
    signal: Signal, look: Look, i: int, turns: Sequence[tuple[int, str, Turn]], items: list[Item]
) -> bool:
    """Turn changes into cues and findings, in order of time; return whether the sensor is suspected."""
    suspected = signal.suspected
    outside = [n for n in ("high", "low") if getattr(signal, n).active]
    marks: list[tuple[int, int, str, Turn | None]] = [(row, 0, name, turn) for row, name, turn in turns]
    if look.closed is not None and (suspected or any(t.active for _, n, t in turns if n in ("high", "low"))):
        marks += [(int(e) - 1, 1, "leaf", None) for e in look.closed.end]
    marks.sort(key=lambda mark: mark[:2])
    for row, _, name, turn in marks:
        scan, tick = look.block.first + row, int(look.block.tick[row])
        if turn is None:  # a leaf ended: do the others still say it is the sensor alone?
            if suspected and outside and not _alone(look, i, row):
                items.append(Cue(scan, tick, SUSPECTED, signal.name, False))
                suspected = False
                items.extend(_excursion_cue(look, i, row, signal.name, side, None, False) for side in outside)
        elif name.startswith("near"):
            items.append(_near_cue(look, i, row, signal.name, name.removeprefix("near_"), turn))
        elif turn.active:
            if not outside:
                suspected = _alone(look, i, row)
            outside.append(name)
            items.append(_excursion_cue(look, i, row, signal.name, name, turn, suspected))
        else:
            outside.remove(name)
            items.append(_excursion(scan, tick, signal.name, name, turn.hold, look.lim, suspected))
            if not (suspected and outside):
                items.append(Cue(scan, tick, _alarm(name, suspected), signal.name, False))
            suspected = suspected and bool(outside)
    return suspected


def _alone(look: Look, i: int, row: int) -> bool:
    """Is it this sensor alone, or for the mean a sensor alone, that is out at ``row``?"""
    if i >= len(columns(look.rules)):
        return look.explained(row)
    return not np.isfinite(look.x[row, i]) or look.suspected(row, i)


def _alarm(side: str, suspected: bool) -> str:
    return SUSPECTED if suspected else f"temperature_{side}"


def _limit(lim: Limits, side: str) -> float:
    return lim.set_point + lim.above if side == "high" else lim.set_point - lim.below


def _excursion_cue(
    look: Look, i: int, row: int, name: str, side: str, turn: Turn | None, suspected: bool
) -> Cue:
    value, limit = float(look.x[row, i]), _limit(look.lim, side)
    figures: dict[str, Any] = {"limit_c": limit}
    if value == value:
        figures["now_c"] = value
    if turn is not None:
        worst = turn.hold.worst if side == "high" else -turn.hold.worst
        figures |= {"from_h": turn.hold.since_s / 3600.0, "worst_c": worst}
    if suspected:
        what = "alone out of the band while the others are steady: suspect the sensor, not the specimen"
    else:
        what = f"{'above' if side == 'high' else 'below'} the permitted {limit:.1f} degC"
    message = f"{name} reads {value:.1f} degC, {what}"
    scan, tick = look.block.first + row, int(look.block.tick[row])
    return Cue(scan, tick, _alarm(side, suspected), name, True, message, None, figures)


def _near_cue(look: Look, i: int, row: int, name: str, side: str, turn: Turn) -> Cue:
    scan, tick, alarm = look.block.first + row, int(look.block.tick[row]), f"temperature_nearing_{side}"
    if not turn.active:
        return Cue(scan, tick, alarm, name, False)
    value, limit = float(look.x[row, i]), _limit(look.lim, side)
    message = f"{name} reads {value:.1f} degC, close to the permitted {limit:.1f} degC"
    figures = {"now_c": value, "limit_c": limit, "from_h": turn.hold.since_s / 3600.0}
    return Cue(scan, tick, alarm, name, True, message, None, figures)


def _excursion(
    scan: int, tick: int, name: str, side: str, h: Hold, lim: Limits, suspected: bool
) -> Conclusion:
    fields: dict[str, Any] = {
        "channel": name,
        "from_h": h.since_s / 3600.0,
        "to_h": h.last_s / 3600.0,
        "worst_c": h.worst if side == "high" else -h.worst,
        "limit_c": _limit(lim, side),
    }
    if suspected:
        fields["suspected_sensor"] = True
    return Conclusion(scan, tick, "excursion", f"{name}:{side}", fields)


# --- gradient ---------------------------------------------------------------------------


def _judge_gradient(
    s: BandState, rules: TestRules, block: Block, x: FloatArray, paced: Paced, items: list[Item]
) -> BandState:
    limit, sensors = rules.limits.gradient_k, len(columns(rules))
    if limit is None or sensors < 2:
        return s
    t = x[:, :sensors]
    spread = np.fmax.reduce(t, axis=1) - np.fmin.reduce(t, axis=1)
    if s.gradient.resting and not (spread > (1.0 - HYSTERESIS) * limit).any():
        return replace(s, gradient_missed=0) if s.gradient_missed else s
    several = np.isfinite(t).sum(axis=1) >= 2
    if limits_of(rules) is None:
        counts = several & (block.t_s >= 0.0)
    elif s.arrived_scan is None:
        return s
    else:
        counts = several & (block.first + np.arange(len(block)) >= s.arrived_scan)
    usable = np.flatnonzero(counts)
    g = spread[usable]
    code = _codes(g, limit + EPS_K, (1.0 - HYSTERESIS) * limit + EPS_K)
    if s.gradient.resting and not code.any():
        return replace(s, gradient_missed=0) if s.gradient_missed else s
    rows, missed = _rows(block, usable, np.cumsum(paced.step), paced, s.gradient_missed)
    wanted = max(1, round(rules.limits.excursion_min_s * TICKS_PER_S))
    h, turns = hold(s.gradient, code, g, rows, wanted)
    for turn in turns:
        row = int(usable[turn.row])
        message = f"gradient {g[turn.row]:.1f} K along the gauge length, permitted {limit:.1f} K"
        figures = {"gradient_k": float(g[turn.row]), "limit_k": limit, "from_h": turn.hold.since_s / 3600.0}
        scan, tick = block.first + row, int(block.tick[row])
        if turn.active:
            items.append(Cue(scan, tick, "gradient", "", True, message, None, figures))
        else:
            items.append(Cue(scan, tick, "gradient", "", False))
    return replace(s, gradient=h, gradient_missed=0 if h.resting else missed)
