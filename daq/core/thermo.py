"""Temperature from a thermocouple's emf or a platinum resistance, for whole columns at once.

Thermocouples: the ITS-90 reference functions (NIST Monograph 175, identical to IEC 60584-1), as
the library ``thermocouple-its90`` holds them. A column is inverted by one cubic Hermite spline per
type with knots every 0.5 K, values from the library's ``emf()`` and slopes from its Seebeck
coefficient: 5 to 20 M inversions a second instead of 0.1 M, within 1e-5 K of the exact inverse.

The cold junction is compensated by adding its emf, never its degrees: for type K at 4.096 mV and a
junction at 25 degC the answer is 124.31 degC, adding degrees would give 125.0.

Platinum: IEC 60751, closed form above 0 degC, fixed Newton steps below.

Only +, -, *, / and sqrt are used, which IEEE 754 rounds exactly, so the bits of a result do not
depend on how many rows are worked on together.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np

from daq.records import CoreError, FloatArray

THERMOCOUPLES: Final = ("B", "E", "J", "K", "N", "R", "S", "T")
KNOT_K: Final = 0.5
SIDE_K: Final = 1e-9
"""How far inside a piece its slope is taken, so that it is the slope of the range on that side."""
LOWEST_C: Final = {
    "B": 42.2, "E": -200.0, "J": -210.0, "K": -200.0, "N": -200.0, "R": -50.0, "S": -50.0, "T": -200.0,
}  # fmt: skip
"""Below these nothing is inverted. Type B has its least emf near 21 degC, so that one emf means two
temperatures below 42.13 degC; for E, K, N and T the published inverses end at -200 degC."""
TOP_SLACK_MV: Final = 0.0005
"""The printed tables are rounded to 0.001 mV; the last printed emf of a type must still be a temperature."""
JUNCTION_C: Final = (-40.0, 125.0)
"""Where a cold junction may be: what terminal blocks and their sensors are made for."""

PT_A: Final = 3.9083e-3
PT_B: Final = -5.775e-7
PT_C: Final = -4.183e-12
PT_RANGE_OHM: Final = (18.52, 390.4812)
"""-200 to 850 degC, where IEC 60751 defines the curve of a Pt100."""


@dataclass(frozen=True, slots=True, eq=False)
class Spline:
    """A cubic piece between each two knots: ``c0 + c1 u + c2 u^2 + c3 u^3`` with ``u = x - knot``.

    ``top`` is how far the last piece goes on.
    """

    knots: FloatArray
    c0: FloatArray
    c1: FloatArray
    c2: FloatArray
    c3: FloatArray
    top: float

    def __call__(self, x: FloatArray) -> FloatArray:
        """Return the value at each ``x``; NaN below the first knot, above ``top`` and for NaN."""
        i = np.searchsorted(self.knots, x, side="right") - 1
        i = np.clip(i, 0, self.knots.size - 2)
        u = x - self.knots[i]
        y = self.c0[i] + u * (self.c1[i] + u * (self.c2[i] + u * self.c3[i]))
        inside = (x >= self.knots[0]) & (x <= self.top)
        out: FloatArray = np.where(inside, y, np.nan)
        return out


def hermite(x: FloatArray, y: FloatArray, begin: FloatArray, end: FloatArray, slack: float = 0.0) -> Spline:
    """Return the spline through ``y`` at ``x`` (rising); slopes at the begin and end of each piece.

    Two slopes a knot, because the reference functions are made of ranges that meet at a small angle
    (type N at 0 degC: one slope for both would cost 7e-4 K there).
    """
    h = np.diff(x)
    secant = np.diff(y) / h
    c2 = (3.0 * secant - 2.0 * begin - end) / h
    c3 = (begin + end - 2.0 * secant) / (h * h)
    return Spline(x, y[:-1].copy(), begin, c2, c3, float(x[-1]) + slack)


@dataclass(frozen=True, slots=True, eq=False)
class Thermocouple:
    """One letter type, ready for columns."""

    letter: str
    inverse: Spline
    junction: Spline

    def temperature_c(self, emf_mv: FloatArray) -> FloatArray:
        """Return the temperature [degC] for an emf [mV] against a junction at 0 degC; NaN where none is."""
        return self.inverse(emf_mv)

    def junction_mv(self, junction_c: FloatArray) -> FloatArray:
        """Return the emf [mV] to add for a cold junction at ``junction_c`` [degC]; NaN outside JUNCTION_C."""
        return self.junction(junction_c)


@lru_cache(maxsize=len(THERMOCOUPLES))
def thermocouple(letter: str) -> Thermocouple:
    """Return the splines of one letter type (about 15 ms for the first call of a type).

    Raises:
        CoreError: a letter that is none of THERMOCOUPLES.
    """
    if letter not in LOWEST_C:
        raise CoreError(f"thermocouple: got type {letter!r}, wanted one of {', '.join(THERMOCOUPLES)}")
    import thermocouple_its90 as its90  # 40 ms that a host without thermocouples need not spend

    couple = its90.get(letter)
    low, high = couple.range

    def sample(first: float, last: float) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        t = np.append(np.arange(first, last - 0.5 * KNOT_K, KNOT_K), last)
        emf = [couple.emf(x) for x in t.tolist()]
        begin = [couple.seebeck(x + SIDE_K) for x in t[:-1].tolist()]
        end = [couple.seebeck(x - SIDE_K) for x in t[1:].tolist()]
        return t, np.array(emf), np.array(begin), np.array(end)

    t, emf, begin, end = sample(max(low, LOWEST_C[letter]), high)
    inverse = hermite(emf, t, 1.0 / begin, 1.0 / end, TOP_SLACK_MV)
    return Thermocouple(letter, inverse, hermite(*sample(max(low, JUNCTION_C[0]), JUNCTION_C[1])))


def pt100_c(ohm: FloatArray) -> FloatArray:
    """Return the temperature [degC] of a Pt100 of ``ohm`` [ohm]; NaN outside -200 to 850 degC.

    IEC 60751: R = 100 (1 + A t + B t^2) from 0 degC up; below, C (t - 100) t^3 is added in the bracket.
    The quadratic is solved in closed form; below 0 degC four Newton steps from there reach rounding.
    """
    ratio = np.where((ohm >= PT_RANGE_OHM[0]) & (ohm <= PT_RANGE_OHM[1]), ohm, np.nan) / 100.0
    t = (np.sqrt(PT_A * PT_A - 4.0 * PT_B * (1.0 - ratio)) - PT_A) / (2.0 * PT_B)
    below = t < 0.0
    if not below.any():
        return t
    cold = t
    for _ in range(4):
        r = 1.0 + cold * (PT_A + cold * (PT_B + cold * (PT_C * (cold - 100.0))))
        per_k = PT_A + cold * (2.0 * PT_B + cold * (PT_C * (4.0 * cold - 300.0)))
        cold = cold - (r - ratio) / per_k
    out: FloatArray = np.where(below, cold, t)
    return out
