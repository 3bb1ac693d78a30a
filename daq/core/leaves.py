"""Means over whole leaves of sixteen scans, and the usual interval between scans.

The grid depends on the scans alone (leaf k holds scans 16 k to 16 k + 15), open leaves stay raw,
and a leaf is reduced by sixteen elementwise additions, so that no bit depends on how scans
arrived together.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from daq.codec import state
from daq.records import TICKS_PER_S, FloatArray, IntArray

LEAF: Final = 16
FADE: Final = 0.98
"""How slowly the usual interval forgets longer ones, per leaf: bursts of a thousand 1 s records between
records minutes apart must not turn each ordinary interval into a gap."""
GAP_FACTOR: Final = 5.0
"""An interval this many times the usual one is a gap (common practice, no source)."""
LEAST_GAP_TICKS: Final = 2 * TICKS_PER_S
"""Below two seconds it is jitter of a busy machine, not a gap."""


@state
@dataclass(frozen=True, slots=True)
class Leaves:
    """The open leaf: its ticks (m,) and columns (m, c), m < 16. ``scans`` counts all so far."""

    tick: IntArray
    columns: FloatArray
    scans: int = 0


@dataclass(frozen=True, slots=True)
class Closed:
    """Leaves that closed, k of them.

    ``end`` (k,): rows of the present block up to and with each leaf's last scan. ``tick`` (k, 16).
    ``columns`` (k, 16, c) raw; ``mean`` (k, c), NaN where less than half of the readings count.
    """

    end: IntArray
    tick: IntArray
    columns: FloatArray
    mean: FloatArray

    def __len__(self) -> int:
        return int(self.end.shape[0])


def begin(columns: int) -> Leaves:
    """Return an empty leaf of ``columns`` columns."""
    return Leaves(np.empty(0, np.int64), np.empty((0, columns)))


def take(s: Leaves, tick: IntArray, columns: FloatArray) -> tuple[Leaves, Closed | None]:
    """Take n scans (columns (n, c), NaN where there is no reading); return the leaves they close."""
    had, n = s.tick.shape[0], tick.shape[0]
    tick = np.concatenate((s.tick, tick))
    columns = np.concatenate((s.columns, columns))
    whole = (had + n) // LEAF
    rest = whole * LEAF
    after = Leaves(tick[rest:].copy(), columns[rest:].copy(), s.scans + n)
    if not whole:
        return after, None
    c = columns.shape[1]
    raw = columns[:rest].reshape(whole, LEAF, c)
    end = np.arange(1, whole + 1, dtype=np.int64) * LEAF - had
    return after, Closed(end, tick[:rest].reshape(whole, LEAF), raw, means(raw))


def means(raw: FloatArray) -> FloatArray:
    """Return means (k, c) of leaves (k, 16, c) over the finite readings, NaN below eight of them."""
    good = np.isfinite(raw)
    filled = np.where(good, raw, 0.0)
    total, count = filled[:, 0].copy(), good[:, 0].astype(np.float64)
    for i in range(1, raw.shape[1]):
        total += filled[:, i]
        count += good[:, i]
    return np.where(count >= LEAF // 2, total / np.maximum(count, 1.0), np.nan)


# --- intervals --------------------------------------------------------------------------


@state
@dataclass(frozen=True, slots=True)
class Cadence:
    """The usual interval between scans [ticks], 0 while unknown, and the latest tick seen."""

    usual: float = 0.0
    latest: int | None = None
    open: IntArray | None = None


@dataclass(frozen=True, slots=True)
class Paced:
    """Of n scans: ``interval`` (n,) since the latest tick before [ticks], 0 for the first scan and
    where time does not advance; ``gap`` (n,) the interval from which on it is a gap; ``step``
    (n,) the interval, 0 where it is one."""

    interval: IntArray
    gap: IntArray
    step: IntArray


def pace(s: Cadence, tick: IntArray, scan_every_s: float | None) -> tuple[Cadence, Paced]:
    """Return the intervals of n scans, with the gaps among them.

    The usual interval is the second longest of sixteen, forgotten slowly; a scan interval in the
    rules is a floor to it. Before sixteen intervals are known, and without such a rule, there are no gaps.
    """
    n = tick.shape[0]
    if not n:
        return s, Paced(*(np.empty(0, np.int64) for _ in range(3)))
    if n == 1 and s.latest is not None and s.open is not None and s.open.shape[0] < LEAF - 1:
        return _pace_one(s, int(tick[0]), s.latest, s.open, scan_every_s)
    carried = int(tick[0]) if s.latest is None else s.latest
    reached = np.maximum.accumulate(np.concatenate((np.array([carried]), tick)))
    interval = np.diff(reached)
    floor = 0.0 if scan_every_s is None else scan_every_s * TICKS_PER_S
    opened = interval if s.open is None else np.concatenate((s.open, interval))
    whole = opened.shape[0] // LEAF
    usual = s.usual
    levels: list[float] = [usual]
    if whole:
        longest = np.sort(opened[: whole * LEAF].reshape(whole, LEAF), axis=1)[:, -2]
        for value in longest.tolist():
            usual = max(float(value), FADE * usual)
            levels.append(usual)
    had = opened.shape[0] - n
    leaf = (np.arange(n) + had) // LEAF  # a leaf is judged by the leaves before it
    gap = _gap_of(np.array(levels), floor)[leaf]
    after = Cadence(usual, int(reached[-1]), opened[whole * LEAF :].copy())
    return after, Paced(interval, gap, np.where(interval < gap, interval, 0))


def _pace_one(
    s: Cadence, tick: int, latest: int, opened: IntArray, scan_every_s: float | None
) -> tuple[Cadence, Paced]:
    """Do what :func:`pace` does, for the live scan that closes no leaf."""
    interval = max(0, tick - latest)
    level = max(s.usual, 0.0 if scan_every_s is None else scan_every_s * TICKS_PER_S)
    gap = int(max(GAP_FACTOR * level, float(LEAST_GAP_TICKS))) if level > 0.0 else _NEVER
    step = interval if interval < gap else 0
    after = Cadence(s.usual, max(latest, tick), np.append(opened, interval))
    return after, Paced(*(np.array([x], np.int64) for x in (interval, gap, step)))


_NEVER: Final = 1 << 60


def _gap_of(usual: npt.NDArray[np.float64], floor: float) -> IntArray:
    level = np.maximum(usual, floor)
    ticks = np.maximum(GAP_FACTOR * level, float(LEAST_GAP_TICKS)).astype(np.int64)
    return np.where(level > 0.0, ticks, _NEVER)
