"""A side that repeats itself: the same reading again and again where noise alone would have changed it.

Equal readings are nothing rare: a coarse converter shows the same count for as long as creep takes to cross
it, and an instrument that is read faster than it converts gives each value many times. So a run of equal
readings is held against this very channel, as it was before the run: how often two readings in a row were
equal, how large its noise is beside its count, how far apart its scans were, and how fast it moved (half of
that counts: rates fall). Where the noise does not reach over the count, only movement over several counts can
tell.

A run that chance would bring in one of a thousand makes its scans wait; one in 10^9 (a million readings a
channel and a thousand tests) is masked from its second reading on, until the reading changes.
"""

from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np

from daq.core.clean import ROOT_2, SLOPE_SDS, median, slope_error, slope_of
from daq.records import FloatArray

CERTAIN: Final = math.log(1e-9)
SUSPECTED: Final = math.log(1e-3)
LEAST: Final = 4
"""Equal readings below which nothing is suspected, however lively the channel."""
LONGEST_WAIT: Final = 64
"""Readings that may wait; a channel that needs more to be sure is not judged."""
OVER_COUNT: Final = 1.5
"""Least ratio of measured noise to count. The measure itself steps with the count: up to 1.2 of it may come
from toggling between two counts alone. Above 1.5 the true noise is at least the count."""
SURE_COUNTS: Final = 2.0
SURE_SDS: Final = 4.0
"""Of movement that a coarse channel cannot hide."""
BEFORE: Final = 12
"""Pairs of readings before a run needed to know the channel."""
LASTING: Final = 2.5
"""A run lasts at least this many usual intervals: within a burst of fast records a slow converter repeats
itself."""


class Still(NamedTuple):
    """``mask`` (n,) of readings that only repeat; ``hold_at`` first row that must wait, else None."""

    mask: np.ndarray
    hold_at: int | None


def judge(
    t_h: FloatArray, v: FloatArray, context: int, noise: float, count: float, was: float, final: bool
) -> Still | None:
    """Judge the rows from ``context`` on of one side; None where there is nothing to mask or wait for.

    Args:
        t_h: Stamps [h], context rows first; (c + n,).
        v: Strain of one side; NaN where there is none, masked context included.
        context: How many leading rows are context, already judged.
        noise: Long-run s.d. of single scans; NaN while unknown.
        count: Least change ever seen, forgotten slowly; NaN while unknown.
        was: Reading that the side was stuck at when the context ended, NaN when it was not.
        final: No more rows will come: nothing waits.
    """
    last = max(context - 1, 0)
    if was != was and not np.logical_or.reduce(v[last + 1 :] == v[last:-1]):
        return None
    at = np.flatnonzero(np.isfinite(v))
    x = v[at]
    same = x[1:] == x[:-1]
    first = int(np.searchsorted(at, context))
    mask = np.zeros(v.shape[0] - context, dtype=bool)
    begin = first
    if was == was:
        differs = np.flatnonzero(x[first:] != was)
        begin = first + int(differs[0]) if differs.size else x.size
        mask[at[first:begin] - context] = True
    hold: int | None = None
    starts = np.concatenate(([0], np.flatnonzero(~same) + 1, [x.size]))
    for i in range(starts.size - 1):
        lo, hi = int(starts[i]), int(starts[i + 1])
        if hi - lo < LEAST or hi <= begin:
            continue
        if lo < BEFORE or not (math.isfinite(noise) and math.isfinite(count)):
            continue
        by_noise, by_rate = _chance(t_h[at[:hi]], x[:hi], lo, noise, count)
        said = (hi - lo - 1) * by_noise + by_rate
        fresh = max(lo + 1, begin)
        enough = LASTING * median(t_h[at[1 : lo + 1]] - t_h[at[:lo]])
        if said <= CERTAIN and t_h[at[hi - 1]] - t_h[at[lo]] >= enough:
            mask[at[fresh:hi] - context] = True
        elif hi == x.size and not final and said <= SUSPECTED and hi - lo < LONGEST_WAIT:
            hold = max(int(at[fresh]) - context, 0)
    return Still(mask, hold) if hold is not None or mask.any() else None


def _chance(t_h: FloatArray, x: FloatArray, lo: int, noise: float, count: float) -> tuple[float, float]:
    """Return the logs of the chance that a reading repeats the one before, and that rows ``lo`` to the last
    do so though the channel moves.

    The chance that Gaussian noise leaves a reading in its count is at most that in the middle of it; readings
    at times t whose mean moves at a rate r are alike by a factor exp(-r^2 S_tt / (2 noise^2)) less often.
    """
    t, run = t_h[: lo + 1], t_h[lo:]
    rate = 0.5 * max(abs(slope_of(t, x[: lo + 1])) - SLOPE_SDS * slope_error(t, noise), 0.0)
    if noise < OVER_COUNT * count:
        sure = rate * float(run[-1] - run[0]) > SURE_COUNTS * count + SURE_SDS * noise
        return 0.0, CERTAIN if sure else 0.0
    by_noise = math.erf(OVER_COUNT * count / (noise * 2.0 * ROOT_2))
    by_past = (float(np.count_nonzero(x[1 : lo + 1] == x[:lo])) + 1.0) / (lo + 2.0)
    d = run - np.add.reduce(run) / run.size
    return math.log(max(by_noise, by_past)), -0.5 * (rate / noise) ** 2 * float(np.add.reduce(d * d))
