"""When does a condition on a noisy signal count? A clock that must be paid up, and paid back.

A reading is *clear* (0), *between* (1, inside the hysteresis) or *beyond* (2) a limit. Time spent
beyond is credited, time spent back is debited, never below nothing. The condition becomes
active when the credit reaches the asked time, and inactive when as much time has been
paid back in the clear. So a single spike never counts (one reading spans no time), a
reading that flickers about the limit counts as soon as it is beyond more often than not, and
nothing chatters.

All counts are integers of ticks and only whole readings change them, so that the answer does not
depend on how the readings were cut into blocks.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from daq.codec import state
from daq.records import FloatArray, IntArray

CLEAR: Final = 0
BETWEEN: Final = 1
BEYOND: Final = 2
Codes = npt.NDArray[np.int8]


@state
@dataclass(frozen=True, slots=True)
class Hold:
    """One condition on one signal.

    ``since_scan``, ``since_tick``, ``since_s`` are of the first reading beyond of the present spell
    (pending or active); ``last_s`` of its last one, ``worst`` the farthest of them.
    """

    code: int = CLEAR
    credit: int = 0
    active: bool = False
    since_scan: int = -1
    since_tick: int = 0
    since_s: float = 0.0
    last_s: float = 0.0
    worst: float = 0.0

    @property
    def resting(self) -> bool:
        """Nothing is pending and nothing is active: clear readings change nothing."""
        return self.code == CLEAR and self.credit == 0 and not self.active


REST: Final = Hold()


class Turn(NamedTuple):
    """The condition became active or inactive at ``row``; ``hold`` is how it stood then."""

    row: int
    active: bool
    hold: Hold


class Rows(NamedTuple):
    """The readings of one signal that count, all (n,): scan ordinals, ticks, test time, and
    ``step``, the ticks since the reading before that may be credited (0 across a gap)."""

    scan: IntArray
    tick: IntArray
    t_s: FloatArray
    step: IntArray


def hold(h: Hold, code: Codes, x: FloatArray, rows: Rows, wanted: int) -> tuple[Hold, list[Turn]]:
    """Take n readings with their codes and return every change, in order.

    Args:
        code: ``CLEAR``, ``BETWEEN`` or ``BEYOND`` of each reading; (n,).
        x: The distance that "worst" is the greatest of, growing outwards; (n,).
        wanted: Credit for a change [ticks]; at least 1, so that it takes two readings.
    """
    if not code.size or (h.resting and not code.any()):
        return h, []
    wanted = max(1, wanted)
    turns: list[Turn] = []
    spent = np.cumsum(rows.step)
    edges = np.flatnonzero(code[1:] != code[:-1]) + 1
    begins = [0, *edges.tolist()]
    ends = [*edges.tolist(), int(code.size)]
    for begin, end in zip(begins, ends, strict=True):
        h = _run(h, int(code[begin]), begin, end, x, rows, spent, wanted, turns)
    return h, turns


def _run(
    h: Hold, code: int, begin: int, end: int, x: FloatArray, rows: Rows, spent: IntArray, wanted: int,
    turns: list[Turn],
) -> Hold:  # fmt: skip
    """Take one run of equal codes."""
    if code == BEYOND and not h.active and h.credit == 0 and h.code != BEYOND:
        first = float(rows.t_s[begin])
        h = replace(
            h, since_scan=int(rows.scan[begin]), since_tick=int(rows.tick[begin]), since_s=first,
            last_s=first, worst=float(x[begin]),
        )  # fmt: skip
    # the first pair joins the reading before; only pairs of one kind are credited or debited
    before = int(spent[begin]) - (int(rows.step[begin]) if _same_side(h, code) else 0)
    elapsed = spent[begin:end] - before
    if h.active:
        h = _run_active(h, code, begin, end, x, rows, elapsed, wanted, turns)
    elif code == BEYOND:
        row = _first_at(elapsed, wanted - h.credit)
        if row is None:
            h = _seen(h, x[begin:end], float(rows.t_s[end - 1]))
            h = replace(h, credit=h.credit + int(elapsed[-1]))
        else:
            at = begin + row
            h = _seen(h, x[begin : at + 1], float(rows.t_s[at]))
            h = replace(h, credit=wanted, active=True)
            turns.append(Turn(at, True, h))
            if at + 1 < end:
                h = _seen(h, x[at + 1 : end], float(rows.t_s[end - 1]))
    else:
        h = replace(h, credit=max(0, h.credit - int(elapsed[-1])))
    return replace(h, code=code)


def _run_active(
    h: Hold, code: int, begin: int, end: int, x: FloatArray, rows: Rows, elapsed: IntArray, wanted: int,
    turns: list[Turn],
) -> Hold:  # fmt: skip
    if code != CLEAR:
        if code == BEYOND:
            h = _seen(h, x[begin:end], float(rows.t_s[end - 1]))
        return replace(h, credit=min(wanted, h.credit + int(elapsed[-1])))
    row = _first_at(elapsed, h.credit)
    if row is None:
        return replace(h, credit=h.credit - int(elapsed[-1]))
    turns.append(Turn(begin + row, False, h))
    return REST


def _same_side(h: Hold, code: int) -> bool:
    return (h.code == CLEAR) == (code == CLEAR) if h.active else (h.code == BEYOND) == (code == BEYOND)


def _first_at(elapsed: IntArray, least: int) -> int | None:
    row = int(np.searchsorted(elapsed, max(1, least)))
    return row if row < elapsed.size else None


def _seen(h: Hold, x: FloatArray, last_s: float) -> Hold:
    return replace(h, worst=max(h.worst, float(x.max())), last_s=last_s)
