"""What speaks for rupture in the few scans after something happened, and what against it.

The evidence is listed in ``core.rupture``, which gathers the scans; here they are judged.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

from daq.codec import state

TEAR: Final = 0.01
"""Least jump of a rupture [m/m]; extensometers slip by less (common practice, no source)."""
TEAR_OVER_GAP: Final = 0.05
TIMES_BEFORE: Final = 10.0
FALL_SHARE: Final = 0.3
SCANS: Final = 3
LOOKS: Final = (8, 16, 32, 64)
"""Scans after which a fallen strain is looked at again for whether it still follows."""
MOVED_SDS: Final = 8.0
STILL_SHARE: Final = 0.25
GOES_ON_SDS: Final = 10.0
GOES_ON: Final = 0.002


@state
@dataclass(frozen=True, slots=True)
class Motion:
    """The strain in the last whole leaf: rate [1/s], greatest step between scans, noise of one scan, middle
    (tick, strain); and the force there. NaN while unknown."""

    rate_per_s: float = math.nan
    step: float = math.nan
    noise: float = 0.0
    tick: float = math.nan
    mean: float = math.nan
    force: float = math.nan


STILL: Final = Motion()


@state
@dataclass(frozen=True, slots=True)
class After:
    """One scan around something that happened. ``lost``: no strain in it; ``ranged``: because out of range;
    ``open``, ``gone``, ``stop``: break switch, force and beam; ``mark``: something happened in it."""

    scan: int
    tick: int
    t_s: float
    a: float
    b: float
    lost: bool
    ranged: bool
    open: bool
    gone: bool
    stop: bool
    over_gap: bool
    mark: bool


@state
@dataclass(frozen=True, slots=True)
class Pending:
    """Something happened in ``rows[0]``; ``before`` is the scan before it, each side as last read."""

    before: After
    motion: Motion
    rows: tuple[After, ...] = ()


NOTHING: Final = After(-1, 0, math.nan, math.nan, math.nan, True, False, False, False, False, False, False)


SWITCH_DOUBTED: Final = "switch doubted"
LOAD_OFF: Final = "load off"
VANISHED: Final = "strain vanished"
ALL_STRAIN: Final = "strain"
"""Subject of the word that all strain channels went at once."""


def judge(p: Pending, has_strain: bool, stage: str) -> tuple[str, bool]:
    """Return why it is rupture (or one of the two other verdicts, or empty), and whether to wait on."""
    rows = p.rows
    if rows[-1].open and not rows[-2].open:
        return "", True
    sides = [side for side in ("a", "b") if getattr(p.before, side) == getattr(p.before, side)]
    jumped = any(_rose(p, side) or _fell(p, side) for side in sides)
    lost = all(r.lost for r in rows[-SCANS:])
    if rows[-1].open:
        if sides and not p.before.lost and _goes_on(p, sides):
            return SWITCH_DOUBTED, False
        return "break switch open", False
    if rows[-1].gone or rows[-1].stop:
        what = "force gone" if rows[-1].gone else "beam on its stop"
        if jumped:
            return f"{what} and strain jumped", False
        if sides and not p.before.lost and lost:
            return f"{what} and strain lost", False
        if rows[-1].gone and not has_strain:
            return what, False
        return LOAD_OFF, False
    if not sides or p.before.lost:
        return "", False
    why = _strain_verdict(p, sides, lost, stage)
    if why:
        return why, False
    if all(_fell(p, side) for side in sides):
        return _still_verdict(p, sides)
    return "", False


def _values(p: Pending, side: str) -> list[float]:
    return [v for v in (getattr(r, side) for r in p.rows) if v == v]


def _least_jump(p: Pending) -> float:
    m, dt = p.motion, max(0.0, p.rows[0].t_s - p.before.t_s)
    moved = max(m.step, abs(m.rate_per_s) * dt) if m.step == m.step else math.inf
    return max(TEAR_OVER_GAP if p.rows[0].over_gap else TEAR, TIMES_BEFORE * moved)


def _rose(p: Pending, side: str) -> bool:
    values, before = _values(p, side), getattr(p.before, side)
    return bool(values) and min(values) >= before + _least_jump(p)


def _fell(p: Pending, side: str) -> bool:
    values, before = _values(p, side), getattr(p.before, side)
    return bool(values) and max(values) <= before - max(_least_jump(p), FALL_SHARE * abs(before))


def _goes_on(p: Pending, sides: list[str]) -> bool:
    """Did strain go on as before? Over a gap nobody can say so."""
    m = p.motion
    if p.rows[0].over_gap:
        return False
    for side in sides:
        values, before = _values(p, side), getattr(p.before, side)
        rate = abs(m.rate_per_s) if m.rate_per_s == m.rate_per_s else 0.0
        reach = max(GOES_ON, GOES_ON_SDS * m.noise) + TIMES_BEFORE * rate * (p.rows[-1].t_s - p.before.t_s)
        if not values or max(abs(v - before) for v in values) > reach:
            return False
    return True


def _strain_verdict(p: Pending, sides: list[str], lost: bool, stage: str) -> str:
    gone = {side: not _values(p, side) for side in sides}
    if any(_rose(p, s) for s in sides) and all(_rose(p, s) or gone[s] for s in sides):
        return "strain jumped and does not come back"
    if not lost:
        return ""
    if any(_fell(p, s) for s in sides) and all(_fell(p, s) or gone[s] for s in sides):
        return "strain fell and was lost"
    if all(r.ranged for r in p.rows[-SCANS:]) and (len(sides) > 1 or stage == "tertiary"):
        return "strain out of range at once"
    if stage == "tertiary" and all(gone.values()) and p.motion.step >= 0.5 * TEAR:
        return "strain lost while tearing"
    return VANISHED if stage == "tertiary" and all(gone.values()) else ""


def _still_verdict(p: Pending, sides: list[str]) -> tuple[str, bool]:
    """All sides fell and stay: does the curve go on?"""
    n, m = len(p.rows), p.motion
    if n >= LOOKS[-1]:
        return "", False
    if n not in LOOKS or not m.rate_per_s > 0.0:
        return "", True
    half = n // 2
    x = [sum(getattr(r, s) for s in sides) / len(sides) for r in p.rows]
    early, late = [v for v in x[:half] if v == v], [v for v in x[half:] if v == v]
    if len(early) < half // 2 or len(late) < half // 2:
        return "", True
    moved = sum(late) / len(late) - sum(early) / len(early)
    t = [r.t_s for r in p.rows]
    expected = m.rate_per_s * (sum(t[half:]) / (n - half) - sum(t[:half]) / half)
    if expected <= MOVED_SDS * m.noise * math.sqrt(2.0 / min(len(early), len(late))):
        return "", True
    return ("strain fell and no longer follows", False) if moved < STILL_SHARE * expected else ("", False)
