"""From raw readings to the quantities of a test: strain, extension, temperature, force.

``prepare`` works out once, for one test and one order of columns, what is done to which column;
``convert`` does it to a block of any number of scans. Nothing is remembered between blocks and every
step is elementwise (sums over sensors are made sensor by sensor, in the order of the rules), so that
the bits of a row do not depend on the block it came in.

What this step does *not* do, because it needs a memory, is left to ``clean``:

* When the best strain source of a side gives way to the next by rank, the other source's number is
  taken as it is. Two transducers zeroed at different moments then differ by a constant: a step, with
  both sources visible in ``Block.values``.
* When one thermocouple of several drops out, the mean of the others is taken as it is. With a
  gradient along the gauge length the mean moves by up to the gradient / (number left).

Strain is engineering strain on the extensometer's reference length. Under compression (a negative
stress in the rules) its sign is turned, so that creep counts positive in the sense of the load and
everything later is the same for both.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from daq.core.block import Block
from daq.core.rules import ChannelRules, Conversion, Role, TestRules
from daq.core.thermo import Thermocouple, pt100_c, thermocouple
from daq.records import BAD, ByteArray, CoreError, FloatArray, IntArray, Quality, ScansTaken

BoolArray = npt.NDArray[np.bool_]
NO_JUNCTION: Final = -1


@dataclass(frozen=True, slots=True, eq=False)
class ColumnPlan:
    """What is done to one channel: where it comes from, and the pieces of its conversion.

    ``column`` is its place in the scans, ``junction`` the place of its cold junction among the test's
    channels or NO_JUNCTION; ``points_x``/``points_y`` are empty where there are none.
    """

    column: int
    conversion: Conversion
    couple: Thermocouple | None
    junction: int
    points_x: FloatArray
    points_y: FloatArray
    plain: bool


@dataclass(frozen=True, slots=True, eq=False)
class Plan:
    """All of it for one test; channels are named by their place in the rules.

    ``take``: scans column of each channel; ``low``/``high``: (c, 1). ``changed``: those with a conversion
    of their own, ``compensated``: those that a cold junction channel feeds. ``side_a``/``side_b``: (channel,
    factor to strain in the sense of the load), best first, as are ``room`` and ``output``.
    """

    columns: tuple[ColumnPlan, ...]
    take: IntArray
    low: FloatArray
    high: FloatArray
    changed: tuple[int, ...]
    compensated: tuple[int, ...]
    side_a: tuple[tuple[int, float], ...]
    side_b: tuple[tuple[int, float], ...]
    specimen: tuple[int, ...]
    room: tuple[int, ...]
    output: tuple[int, ...]


def prepare(rules: TestRules, columns: Sequence[str]) -> Plan:
    """Return the plan for scans whose columns are ``columns``.

    Raises:
        CoreError: a channel or cold junction that is not among the columns, an unknown thermocouple,
            calibration points that do not rise, an extension without a reference length.
    """
    names = [c.name for c in rules.channels]
    built = tuple(_column(c, rules, columns, names) for c in rules.channels)
    a, b = _sides(rules)
    return Plan(
        columns=built,
        take=np.array([c.column for c in built], dtype=np.int64),
        low=np.array([[-np.inf if c.low is None else c.low] for c in rules.channels]),
        high=np.array([[np.inf if c.high is None else c.high] for c in rules.channels]),
        changed=tuple(i for i, c in enumerate(built) if not c.plain and c.junction == NO_JUNCTION),
        compensated=tuple(i for i, c in enumerate(built) if c.junction != NO_JUNCTION),
        side_a=a,
        side_b=b,
        specimen=_by_rank(rules, Role.SPECIMEN_TEMPERATURE),
        room=_by_rank(rules, Role.ROOM_TEMPERATURE),
        output=_by_rank(rules, Role.CONTROLLER_OUTPUT),
    )


def convert(
    rules: TestRules, plan: Plan, scans: ScansTaken, tick: IntArray, t_s: FloatArray, first: int
) -> Block:
    """Return ``scans`` as a block of the test of ``rules``.

    Args:
        plan: What ``prepare(rules, scans.channels)`` gave.
        scans: n raw scans, columns as the plan was prepared for.
        tick: Lab time [0.1 ms], from the timebase; (n,).
        t_s: Time since full load [s]; (n,).
        first: Ordinal of the first row among all scans of this test.

    A value is NaN exactly where its quality is bad. A reading that was good but is no number becomes
    BAD_NOT_A_NUMBER or BAD_OVERLOAD (infinite); one whose converted value is outside what the sensor's
    curve covers or outside ``low``/``high`` becomes BAD_RANGE; one whose cold junction is bad takes
    the junction's quality.
    """
    raw: FloatArray = scans.values.T[plan.take]
    given: ByteArray = scans.quality.T[plan.take]
    with np.errstate(all="ignore"):  # overflow and NaN are judged by quality, not by warnings
        x = raw.copy() if plan.changed else raw
        for i in plan.changed:
            x[i] = _number(plan.columns[i], raw[i], None)
        values, quality = _judged(x, given, raw, plan.low, plan.high)
        for i in plan.compensated:
            p = plan.columns[i]
            degrees = _number(p, raw[i], values[p.junction])
            q = _with_junction(given[i], quality[p.junction])
            values[i], quality[i] = _judged(degrees, q, raw[i], plan.low[i], plan.high[i])
        n = len(scans)
        return Block(
            first=first,
            tick=tick,
            t_s=t_s,
            values=values.T,
            quality=quality.T,
            strain_a=_best(values, plan.side_a, n),
            strain_b=_best(values, plan.side_b, n),
            specimen_c=_mean(values, plan.specimen, n),
            room_c=_best(values, tuple((i, 1.0) for i in plan.room), n),
            output=_best(values, tuple((i, 1.0) for i in plan.output), n),
        )


# --- the plan -----------------------------------------------------------------------------


def _column(c: ChannelRules, rules: TestRules, columns: Sequence[str], names: Sequence[str]) -> ColumnPlan:
    place = f"{rules.test}: channel {c.name}"
    if c.name not in columns:
        raise CoreError(f"{place}: got scans of {', '.join(columns)}, wanted this channel among them")
    v = c.conversion
    if c.role is Role.EXTENSION and not rules.specimen.extensometer_length_mm:
        raise CoreError(f"{place}: got no extensometer_length_mm, wanted one to make strain of mm")
    junction = NO_JUNCTION
    if v.cold_junction_channel:
        if v.cold_junction_channel not in names or v.cold_junction_channel == c.name:
            raise CoreError(f"{place}: got cold junction {v.cold_junction_channel!r}, wanted another channel")
        junction = names.index(v.cold_junction_channel)
        if rules.channels[junction].conversion.cold_junction_channel:
            raise CoreError(
                f"{place}: got cold junction {v.cold_junction_channel!r}, wanted one without its own"
            )
    points = np.array(v.points, dtype=np.float64).reshape(-1, 2)
    if len(points) == 1 or np.any(np.diff(points[:, 0]) <= 0.0):
        raise CoreError(
            f"{place}: got calibration points {v.points}, wanted two or more with rising raw value"
        )
    return ColumnPlan(
        column=list(columns).index(c.name),
        conversion=v,
        couple=thermocouple(v.thermocouple) if v.thermocouple else None,
        junction=junction,
        points_x=points[:, 0].copy(),
        points_y=points[:, 1].copy(),
        plain=v == Conversion(),
    )


def _by_rank(rules: TestRules, role: Role) -> tuple[int, ...]:
    found = [i for i, c in enumerate(rules.channels) if c.role is role]
    return tuple(sorted(found, key=lambda i: rules.channels[i].rank))  # stable: equals keep their order


def _sides(rules: TestRules) -> tuple[tuple[tuple[int, float], ...], tuple[tuple[int, float], ...]]:
    """Strain sources of each side; a single side is always A, whatever it was called."""
    sign = -1.0 if rules.stress_pa is not None and rules.stress_pa < 0.0 else 1.0
    length = rules.specimen.extensometer_length_mm
    found = sorted(
        [*_by_rank(rules, Role.STRAIN), *_by_rank(rules, Role.EXTENSION)],
        key=lambda i: (rules.channels[i].rank, i),
    )
    a: list[tuple[int, float]] = []
    b: list[tuple[int, float]] = []
    for i in found:
        c = rules.channels[i]
        factor = sign / length if c.role is Role.EXTENSION and length else sign
        (b if c.side.upper() == "B" else a).append((i, factor))
    return (tuple(a), tuple(b)) if a else (tuple(b), ())


# --- the numbers --------------------------------------------------------------------------


def _judged(
    x: FloatArray, quality: ByteArray, raw: FloatArray, low: FloatArray, high: FloatArray
) -> tuple[FloatArray, ByteArray]:
    """Return values and qualities with what cannot be a reading marked bad; arguments are left alone."""
    fits = (x >= low) & (x <= high) & np.isfinite(x)
    usable = quality < BAD
    good = usable & fits
    if good.all():
        return x, quality
    why = np.where(
        np.isnan(raw),
        np.uint8(Quality.BAD_NOT_A_NUMBER),
        np.where(np.isinf(raw), np.uint8(Quality.BAD_OVERLOAD), np.uint8(Quality.BAD_RANGE)),
    )
    return np.where(good, x, np.nan), np.where(usable & ~fits, why, quality)


def _number(p: ColumnPlan, raw: FloatArray, junction_c: FloatArray | None) -> FloatArray:
    v = p.conversion
    x = raw * v.raw_scale
    if p.couple is not None:
        if junction_c is not None:
            x = x + p.couple.junction_mv(junction_c)
        elif v.cold_junction_c is not None:
            x = x + p.couple.junction_mv(np.array([v.cold_junction_c]))
        x = p.couple.temperature_c(x)
    elif v.pt100:
        x = pt100_c(x)
    if p.points_x.size:
        x = _along_points(p, x)
    if v.polynomial:
        y = np.full_like(x, v.polynomial[-1])
        for factor in v.polynomial[-2::-1]:
            y = y * x + factor
        x = y
    return x * v.scale + v.offset


def _along_points(p: ColumnPlan, x: FloatArray) -> FloatArray:
    """Linear between the points, the first and last piece extended (np.interp would hold the ends)."""
    i = np.clip(np.searchsorted(p.points_x, x, side="right") - 1, 0, p.points_x.size - 2)
    slope = np.diff(p.points_y) / np.diff(p.points_x)
    out: FloatArray = p.points_y[i] + (x - p.points_x[i]) * slope[i]
    return out


def _with_junction(quality: ByteArray, junction: ByteArray) -> ByteArray:
    """A temperature is worth no more than its cold junction."""
    worse = (junction > quality) & (quality < BAD)
    out: ByteArray = np.where(worse, junction, quality)
    return out


def _best(values: FloatArray, sources: tuple[tuple[int, float], ...], n: int) -> FloatArray:
    """Row by row the first source that has a number, times its factor."""
    if not sources:
        return np.full(n, np.nan)
    last, factor = sources[-1]
    out: FloatArray = values[last] * factor
    for i, factor in sources[-2::-1]:
        out = np.where(np.isnan(values[i]), out, values[i] * factor)
    return out


def _mean(values: FloatArray, sources: tuple[int, ...], n: int) -> FloatArray:
    """Row by row the mean of the sources that have a number, added in the order of the rules."""
    if not sources:
        return np.full(n, np.nan)
    total, count = np.zeros(n), np.zeros(n)
    for i in sources:
        there = ~np.isnan(values[i])
        total = np.where(there, total + values[i], total)
        count += there
    out: FloatArray = total / count  # 0 / 0 is NaN: no sensor, no temperature
    return out
