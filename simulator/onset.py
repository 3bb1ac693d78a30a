"""When things happen on a true curve: least rate, onsets by each definition, equivalent time."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from simulator.creep import NEARLY, Curve, FloatArray, bisect

GAS_CONSTANT_J_PER_MOL_K: Final = 8.314462618
ZERO_C_IN_K: Final = 273.15


def equivalent_time_h(
    t_h: FloatArray, temperature_c: FloatArray, set_point_c: float, activation_energy_j_per_mol: float
) -> FloatArray:
    """Return the time at the set point that does as much: the integral of exp(Q/R (1/T0 - 1/T)) dt.

    Trapezoids over ``t_h`` [h], shape (n,), ascending; starts at ``t_h[0]``. The Arrhenius law with one
    activation energy for the whole curve (temperature-compensated time of Sherby & Dorn 1954).
    """
    inverse = 1.0 / (set_point_c + ZERO_C_IN_K) - 1.0 / (temperature_c + ZERO_C_IN_K)
    speed = np.exp(activation_energy_j_per_mol / GAS_CONSTANT_J_PER_MOL_K * inverse)
    out = np.empty_like(t_h)
    out[0] = t_h[0]
    np.cumsum(0.5 * (speed[1:] + speed[:-1]) * np.diff(t_h), out=out[1:])
    out[1:] += t_h[0]
    return out


@dataclass(frozen=True)
class CurveEvents:
    """What happens on a curve up to its end, by each definition; None is "not reached".

    ``first_rise_h`` is the time of the least rate before the first rise by 5 % over it: equal to
    ``minimum_h`` on curves with one minimum, earlier on curves with several.
    """

    minimum_h: float
    minimum_rate_per_h: float
    rise_5_percent_h: float | None
    offset_0p2_h: float | None
    first_rise_h: float | None


def curve_events(curve: Curve, end_h: float) -> CurveEvents:
    """Find the least rate after incubation and the onsets of tertiary creep on [0, ``end_h``].

    On 2001 points, then refined by zooming, to about 1e-7 of ``end_h``. Judged on the smooth envelope.
    """
    smooth = curve.envelope
    begin = min(smooth.incubation_h, 0.5 * end_h)
    grid = np.linspace(begin, min(end_h, smooth.end_h * NEARLY), 2001)
    rates = smooth.rate(grid)
    low, high = begin, float(grid[-1])
    best, points, values = int(np.argmin(rates)), grid, rates
    for _ in range(5):
        low, high = float(points[max(best - 1, 0)]), float(points[min(best + 1, points.size - 1)])
        points = np.linspace(low, high, 65)
        values = smooth.rate(points)
        best = int(np.argmin(values))
    minimum_h, least = float(points[best]), float(values[best])
    base = float(smooth.strain(minimum_h))
    after = grid > minimum_h
    times = grid[after]
    rise = _first(times, rates[after] - 1.05 * least, lambda t: float(smooth.rate(t)) - 1.05 * least)
    away = smooth.strain(times) - base - least * (times - minimum_h) - 0.002
    offset = _first(times, away, lambda t: float(smooth.strain(t)) - base - least * (t - minimum_h) - 0.002)
    lowest = np.minimum.accumulate(rates)
    risen = np.flatnonzero(rates > 1.05 * lowest)
    first = None
    if risen.size:
        at = float(grid[int(np.argmin(rates[: int(risen[0])]))])
        first = minimum_h if abs(at - minimum_h) <= 1.5 * (grid[1] - grid[0]) else at
    return CurveEvents(minimum_h, least, rise, offset, first)


def _first(times: FloatArray, values: FloatArray, f: Callable[[float], float]) -> float | None:
    above = np.flatnonzero(values > 0.0)
    if not above.size:
        return None
    i = int(above[0])
    return float(times[0]) if i == 0 else bisect(f, float(times[i - 1]), float(times[i]))
