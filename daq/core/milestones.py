"""Strain milestones and the strain limit: when did the mean strain pass a level, once and for all?

The scans vote. A scan beyond the level adds one vote, one below takes one away, never below none. The
passage is certain at twelve votes, or at three scans in a row that are beyond by more than three
standard deviations of the scans' own noise. It is dated where the votes last left zero, by a straight
line between the two scans there. Without noise that is the crossing itself; with white
noise about a third of a standard deviation early, where waiting for three scans in a row beyond the
level would be one to two standard deviations early. A spike is one vote and is soon taken back.

Strain is total strain as measured, the mean of the sides; where one of two sides is missing, the other one
less half of their last known difference.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
import numpy.typing as npt

from daq.codec import state
from daq.core.block import Block, Conclusion, Cue
from daq.core.rules import TestRules
from daq.records import FloatArray, IntArray

VOTES: Final = 12
"""Certain: with white noise a wrong passage a third of a standard deviation early needs about a thousand
tries at odds of 0.37 : 0.63 to the twelfth power."""
CLEARLY: Final = 3
CLEAR_SDS: Final = 3.0
MARGIN: Final = 1e-12
"""Decimal strains are not exact binary numbers: 0.00100 reaches 0.001."""


@state
@dataclass(frozen=True, slots=True)
class MeanState:
    """Half the difference of the sides when both were last there, 0 before; the last mean strain."""

    half: float = 0.0
    two_sided: bool = False
    last: float = math.nan


def mean_strain(s: MeanState, a: FloatArray, b: FloatArray) -> tuple[MeanState, FloatArray]:
    """Return the mean strain (n,) of the sides, NaN where neither side has a reading."""
    if a.size == 1:
        return _mean_of_one(s, float(a[0]), float(b[0]))
    half, two_sided = s.half, s.two_sided
    have_b = b == b
    if not have_b.any():
        mean = a - half if two_sided else a
    else:
        have_a = a == a
        both = have_a & have_b
        row = np.maximum.accumulate(np.where(both, np.arange(a.size), -1))
        halves = np.where(row >= 0, 0.5 * (a - b)[np.maximum(row, 0)], half)
        mean = np.where(both, 0.5 * (a + b), np.where(have_a, a - halves, b + halves))
        half, two_sided = float(halves[-1]), two_sided or bool(both.any())
    there = np.flatnonzero(mean == mean)
    last = float(mean[there[-1]]) if there.size else s.last
    return MeanState(half, two_sided, last), mean


def _mean_of_one(s: MeanState, a: float, b: float) -> tuple[MeanState, FloatArray]:
    if a == a and b == b:
        half, two_sided, mean = 0.5 * (a - b), True, 0.5 * (a + b)
    else:
        half, two_sided = s.half, s.two_sided
        mean = b + half if b == b else a - half if two_sided else a
    return MeanState(half, two_sided, mean if mean == mean else s.last), np.array([mean])


@state
@dataclass(frozen=True, slots=True)
class Passage:
    """The vote about one level. ``since_s`` dates the crossing if it comes true; ``clear`` counts scans in
    a row that are clearly beyond. ``milestone`` False: it is the strain limit."""

    level: float
    milestone: bool = True
    votes: int = 0
    clear: int = 0
    since_s: float = 0.0


@state
@dataclass(frozen=True, slots=True)
class MilestoneState:
    """Levels not passed yet, ascending; time and strain of the last scan that had one (NaN: none)."""

    ahead: tuple[Passage, ...]
    last_s: float = math.nan
    last: float = math.nan


def begin(rules: TestRules) -> MilestoneState:
    """Return the state before the first scan."""
    ahead = [Passage(level) for level in sorted(set(rules.limits.milestones))]
    if rules.limits.strain is not None:
        ahead.append(Passage(rules.limits.strain, milestone=False))
    return MilestoneState(tuple(sorted(ahead, key=lambda p: p.level)))


@dataclass(frozen=True, slots=True)
class _Rows:
    """Scans under load that have a strain: place in the block, time, strain, noise as known before."""

    at: IntArray
    t_s: FloatArray
    x: FloatArray
    noise: FloatArray


def watch_milestones(
    s: MilestoneState, block: Block, mean: FloatArray, noise: FloatArray
) -> tuple[MilestoneState, list[Conclusion | Cue]]:
    """Take n scans.

    Args:
        mean: Mean strain [m/m]; (n,). NaN where there is none.
        noise: Standard deviation of a single scan of it [m/m], as known before each scan; (n,).
    """
    if not s.ahead:
        return s, []
    at = np.flatnonzero((mean == mean) & (block.t_s >= 0.0))
    if not at.size:
        return s, []
    rows = _Rows(at, block.t_s[at], mean[at], noise[at])
    after = replace(s, last_s=float(rows.t_s[-1]), last=float(rows.x[-1]))
    highest = float(rows.x.max())
    if s.ahead[0].level - MARGIN > highest and not s.ahead[0].votes:
        return after, []
    items: list[Conclusion | Cue] = []
    ahead: list[Passage] = []
    for passage in s.ahead:
        # a level can only have votes where every lower one has at least as many
        voted, done = _vote(passage, rows, s)
        if done is None:
            ahead.append(voted)
        else:
            row = int(at[done])
            items.extend(_passed(voted, block.first + row, int(block.tick[row])))
    items.sort(key=lambda item: item.scan)
    return (replace(after, ahead=tuple(ahead)) if ahead else MilestoneState(())), items


def _passed(p: Passage, scan: int, tick: int) -> list[Conclusion | Cue]:
    time_h, percent = p.since_s / 3600.0, 100.0 * p.level
    fields: dict[str, Any] = {"strain": p.level, "time_h": time_h}
    if not p.milestone:
        text = f"strain limit of {percent:g} % passed at {time_h:.6g} h"
        return [Cue(scan, tick, "strain_limit", "", True, text, None, fields)]
    key, text = f"{p.level:g}", f"{percent:g} % strain at {time_h:.6g} h"
    return [
        Conclusion(scan, tick, "milestone", key, fields),
        Cue(scan, tick, "milestone_reached", key, True, text, None, fields),
    ]


def _vote(p: Passage, rows: _Rows, s: MilestoneState) -> tuple[Passage, int | None]:
    """Return the vote after these rows, or after the row that made it certain, and that row."""
    above = rows.x >= p.level - MARGIN
    if not p.votes and not above.any():
        return p, None
    clear = rows.x - p.level > CLEAR_SDS * rows.noise
    edges = np.flatnonzero(above[1:] != above[:-1]) + 1
    begins = [0, *edges.tolist()]
    ends = [*edges.tolist(), int(above.size)]
    for begin_at, end_at in zip(begins, ends, strict=True):
        if not above[begin_at]:
            p = replace(p, votes=max(0, p.votes - (end_at - begin_at)), clear=0)
            continue
        if not p.votes:
            p = replace(p, since_s=_crossing(p.level, rows, begin_at, s))
        in_a_row = _in_a_row(clear[begin_at:end_at], p.clear)
        certain = np.flatnonzero(in_a_row >= CLEARLY)
        done = min(VOTES - p.votes - 1, int(certain[0]) if certain.size else VOTES)
        if begin_at + done < end_at:
            return p, begin_at + done
        p = replace(p, votes=p.votes + end_at - begin_at, clear=int(in_a_row[-1]))
    return p, None


def _in_a_row(clear: npt.NDArray[np.bool_], before: int) -> IntArray:
    """Return for each row how many rows up to it are clear without a break; ``before`` were so earlier."""
    row = np.arange(clear.size)
    broken = np.maximum.accumulate(np.where(clear, -1, row))
    return np.where(broken < 0, row + 1 + before, row - broken)


def _crossing(level: float, rows: _Rows, at: int, s: MilestoneState) -> float:
    t0, x0 = (float(rows.t_s[at - 1]), float(rows.x[at - 1])) if at else (s.last_s, s.last)
    t1, x1 = float(rows.t_s[at]), float(rows.x[at])
    if x0 != x0 or x1 <= x0 or x0 >= level:
        return t1
    return t0 + (t1 - t0) * (level - x0) / (x1 - x0)
