"""A thermocouple that leaves alone: where each signal usually is, and whether the others are still there.

A hot specimen warms every thermocouple, and the controller answers. If one indication leaves the band while
the others, and the controller output where it is logged, stay where they were, the sensor is to be doubted
before the specimen. "Where they were" is a mean over earlier leaves that lay well inside the band.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from daq.codec import state
from daq.core.block import Block
from daq.core.leaves import Closed
from daq.core.rules import Role, TestRules
from daq.records import TICKS_PER_S, FloatArray

NEAR_ENTER: Final = 0.8
NEAR_LEAVE: Final = 0.5
"""Once near an edge, a signal is so until it is back in the inner half: a furnace that wanders by half a
kelvin beside the edge raises one alarm, not one a day."""
USUAL: Final = 0.7
"""A leaf tells where a signal usually is only if it lies within this share of the band."""
NEAR_S: Final = 600.0
STEADY_SHARE: Final = 0.25
"""Others that moved less than a quarter of the band from their reference are steady."""
MOVED_SHARE: Final = 0.5
OUTPUT_STEADY_PERCENT: Final = 1.0
REFERENCE_LEAVES: Final = 256
"""Memory of a reference in leaves of 16 scans, once that many are known."""
KNOWN_LEAVES: Final = 4
EPS_K: Final = 1e-9
"""Decimal readings are not exact binary numbers: 603.0 at 600 +- 3 is in the band."""


@state
@dataclass(frozen=True, slots=True)
class Reference:
    """Where a column usually is, and how much its leaf means differ from one to the next."""

    level: float = 0.0
    scatter: float = 0.0
    last: float = 0.0
    leaves: int = 0


def columns(rules: TestRules) -> tuple[int, ...]:
    """Return the columns of the specimen's thermocouples."""
    return tuple(i for i, c in enumerate(rules.channels) if c.role is Role.SPECIMEN_TEMPERATURE)


@dataclass(frozen=True, slots=True)
class Limits:
    """The permitted band [degC, K], and the ticks that a signal must be out of it, or near its edge."""

    set_point: float
    below: float
    above: float
    wanted: int
    near_wanted: int


def limits_of(rules: TestRules) -> Limits | None:
    """Return the band of the rules, None where no tolerance was given."""
    if rules.set_point_c is None or rules.below_k is None or rules.above_k is None:
        return None
    least = rules.limits.excursion_min_s
    return Limits(
        rules.set_point_c, rules.below_k, rules.above_k, max(1, round(least * TICKS_PER_S)),
        round(max(NEAR_S, 10.0 * least) * TICKS_PER_S),
    )  # fmt: skip


def follow_references(
    references: tuple[Reference, ...], lim: Limits | None, closed: Closed | None
) -> tuple[list[tuple[Reference, ...]], tuple[Reference, ...]]:
    """Return the references after 0, 1, ... closed leaves, and the last of them."""
    history = [references]
    if closed is None:
        return history, references
    now = list(references)
    for row in closed.mean.tolist():
        for j, value in enumerate(row):
            if value != value:  # NaN: no reading
                continue
            if lim is not None and j < len(row) - 1:
                dev = value - lim.set_point
                if not -USUAL * lim.below < dev < USUAL * lim.above:
                    continue
            now[j] = _renew(now[j], value)
        history.append(tuple(now))
    return history, history[-1]


def _renew(r: Reference, value: float) -> Reference:
    if not r.leaves:
        return Reference(value, 0.0, value, 1)
    leaves = r.leaves + 1
    w = 1.0 / min(leaves, REFERENCE_LEAVES)
    scatter = r.scatter + w * (abs(value - r.last) - r.scatter)
    return Reference(r.level + w * (value - r.level), scatter, value, min(leaves, REFERENCE_LEAVES))


@dataclass(frozen=True, slots=True)
class Look:
    """What the judgement of one block needs, in one place."""

    rules: TestRules
    block: Block
    x: FloatArray
    dev: FloatArray
    lim: Limits
    history: list[tuple[Reference, ...]]
    closed: Closed | None

    def references_at(self, row: int) -> tuple[Reference, ...]:
        """Return the references as known at ``row``."""
        if self.closed is None:
            return self.history[0]
        return self.history[int(np.searchsorted(self.closed.end, row + 1, "right"))]

    def suspected(self, row: int, i: int) -> bool:
        """Did thermocouple ``i`` leave alone? Judged on the readings of ``row`` against the references."""
        sensors = len(columns(self.rules))
        now, ref = self.x[row], self.references_at(row)
        band = self.lim.above if self.dev[row, i] > 0 else self.lim.below
        others = [
            j for j in range(sensors)
            if j != i and np.isfinite(now[j]) and ref[j].leaves >= KNOWN_LEAVES
        ]  # fmt: skip
        if ref[i].leaves < KNOWN_LEAVES or not others:
            return False
        if any(abs(float(now[j]) - ref[j].level) > STEADY_SHARE * band for j in others):
            return False
        if abs(float(now[i]) - ref[i].level) < MOVED_SHARE * band:
            return False
        out, usual = float(now[-1]), ref[-1]
        if out == out and usual.leaves >= KNOWN_LEAVES:
            return abs(out - usual.level) <= max(OUTPUT_STEADY_PERCENT, 5.0 * usual.scatter)
        return len(others) >= 2

    def explained(self, row: int) -> bool:
        """Is the mean out only because of a suspected thermocouple?"""
        sensors = len(columns(self.rules))
        dev = self.dev[row, :sensors]
        bad = [
            i for i in range(sensors)
            if np.isfinite(dev[i]) and outside(float(dev[i]), self.lim) and self.suspected(row, i)
        ]  # fmt: skip
        rest = [float(dev[i]) for i in range(sensors) if i not in bad and np.isfinite(dev[i])]
        return bool(bad and rest) and not outside(sum(rest) / len(rest), self.lim)


def outside(dev: float, lim: Limits) -> bool:
    """Is a deviation [K] beyond the band?"""
    return dev > lim.above + EPS_K or dev < -lim.below - EPS_K
