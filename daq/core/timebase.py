"""From stamps to lab time: intervals from the boot clock, reboots bridged by UTC.

A creep test outlives kernels. Within one boot, time is the boot clock's (it neither
jumps nor stops in suspend). From one boot to the next only UTC can say how long the
machine was away; that step is taken once, at the first stamp of the new boot, never
backwards, and the doubt is that of the two UTC clocks. Setting the clock therefore cannot
bend a rate: the least-squares slope of a test is the same before and after.

A machine without a battery for its clock may boot in the past. Then that step is owed until UTC has
been set, and taken at the first stamp that shows it: late, but the hours of the test are right again.

A recording knows no boot: its stamps are its time.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from daq.codec import state
from daq.records import TICKS_PER_S, FloatArray, IntArray, ScansTaken, Stamp


@state
@dataclass(frozen=True, slots=True)
class TimeState:
    """Where lab time stands. ``shift`` turns boot ticks into lab ticks.

    ``latest`` is the greatest lab tick so far, ``utc_lead`` what UTC was ahead of lab time at
    the last stamp. ``boot_id`` None means: nothing has been stamped yet. ``owed`` is what UTC was ahead
    of lab time before a boot that began in the past, until UTC can tell how long the machine was away.
    """

    boot_id: str | None = None
    shift: int = 0
    latest: int = 0
    utc_lead: int = 0
    owed: int | None = None


def _anchor(s: TimeState, boot_id: str, utc: int, boot: int) -> TimeState:
    """Return the state for stamps of ``boot_id``, the first of which reads ``utc``, ``boot``."""
    if boot_id == s.boot_id:
        return s
    if s.boot_id is None:
        return TimeState(boot_id, utc - boot, utc, 0)
    lead = s.utc_lead if s.owed is None else s.owed
    away = utc - (s.latest + lead)
    owed = lead if away < 0 else None
    return replace(s, boot_id=boot_id, shift=s.latest + max(0, away) - boot, owed=owed)


def place(s: TimeState, scans: ScansTaken) -> tuple[TimeState, IntArray]:
    """Return lab ticks (n,) of a block of scans. Slightly unordered stamps stay as they are."""
    if not len(scans):
        return s, scans.boot_tick
    s = _anchor(s, scans.boot_id, int(scans.utc_tick[0]), int(scans.boot_tick[0]))
    tick = scans.boot_tick + s.shift
    if s.owed is not None:
        ahead = scans.utc_tick - s.owed - tick  # UTC was set: from that row on it tells more than we counted
        if (set_at := np.flatnonzero(ahead > 0)).size:
            row = int(set_at[0])
            tick[row:] += ahead[row]
            s = replace(s, shift=s.shift + int(ahead[row]), owed=None)
    latest = max(s.latest, int(tick.max()))
    return replace(s, latest=latest, utc_lead=int(scans.utc_tick[-1] - tick[-1])), tick


def place_stamp(s: TimeState, stamp: Stamp) -> tuple[TimeState, int]:
    """Return the lab tick of a single stamp."""
    s = _anchor(s, stamp.boot_id, stamp.utc_tick, stamp.boot_tick)
    tick = stamp.boot_tick + s.shift
    if s.owed is not None and stamp.utc_tick - s.owed > tick:
        tick = stamp.utc_tick - s.owed
        s = replace(s, shift=tick - stamp.boot_tick, owed=None)
    return replace(s, latest=max(s.latest, tick), utc_lead=stamp.utc_tick - tick), tick


def seconds_since(tick: IntArray, start: int | None) -> FloatArray:
    """Return test time [s]; before the start is known every row is -1 s (that is, not yet under load)."""
    if start is None:
        return np.full(tick.shape, -1.0)
    return (tick - start) / float(TICKS_PER_S)


def hours(tick: int, start: int | None) -> float | None:
    """Return test time [h] of one lab tick, None before the start is known."""
    return None if start is None else (tick - start) / TICKS_PER_S / 3600.0
