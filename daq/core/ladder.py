"""The ladder: a test's whole past in a few hundred blocks of moments, finer near now.

Scans are first cut into *leaves*: the cut depends on the scans alone (count and stamps), never on
how they arrived, and a leaf is reduced in one piece. So nothing computed here can depend on block
cuts. Leaves are appended to the *ladder*, a matrix with one block a row; neighbours are merged
when together they are narrow against both their age and the time of test at which they lie.
Memory and work then grow with the logarithm of the test.

Constants are shares of elapsed time, chosen so that what they blur is small beside the stretch over
which a creep rate changes (at least a tenth of the elapsed time for anything that can be called a
stage): a leaf spans at most 0.4 %, a block at most 4 % of its age plus 0.3 % of the test.
Moments are merged with the pairwise update of Chan, Golub and LeVeque (1979).
"""

from __future__ import annotations

from typing import Final

import numpy as np

from daq.records import FloatArray

LEAF_SHARE: Final = 0.004
"""Greatest span of a leaf as a share of elapsed time."""
LEAF_SCANS: Final = 256
"""Greatest number of scans in a leaf: bounds the raw rows that the state must hold."""

(
    N, T, U, Q, E, H, TEMP, ROOM0, ROOM1, ROOM2, S_TT, S_TE, S_EE, START, END, SEGMENT, OUT, OQ,
) = range(18)  # fmt: skip
"""Columns. N scans; means of T time [h], U equivalent time [h], Q integral of (T - T0) dU [K h], E strain,
H half difference of the sides, TEMP specimen [degC], ROOM0..2 room as it is and lagged [degC]; S_.. sums
of squares and products about the means; START, END [h]; SEGMENT counts the steps before; means of OUT
controller output [%], NaN where it is not logged, and OQ integral of (output - first output) dU [% h], zero
there."""
COLUMNS: Final = 18
_MEANS: Final = np.array([T, U, Q, E, H, TEMP, ROOM0, ROOM1, ROOM2, OUT, OQ])

SWEEP_EVERY: Final = 8
"""Leaves between two sweeps that merge neighbours."""


def empty() -> FloatArray:
    """Return a ladder without a rung; (0, COLUMNS)."""
    return np.zeros((0, COLUMNS))


def leaf_end(clock_s: FloatArray, start: int) -> int | None:
    """Return one past the last row of the leaf that begins at ``start``, None while it is open.

    ``clock_s`` is the running maximum of the stamps [s], so unordered stamps cannot close a leaf early.
    """
    n = clock_s.shape[0]
    full = start + LEAF_SCANS
    first = clock_s[start] / (1.0 - LEAF_SHARE)
    if first <= clock_s[start]:  # the very first instant: a leaf of its own
        return start + 1
    at = start + int(np.searchsorted(clock_s[start : min(full, n)], first, side="left"))
    end = min(at + 1, full)
    return end if end <= n else None


def merge(x: FloatArray, y: FloatArray) -> FloatArray:
    """Return the rungs ``x`` and ``y`` (k, COLUMNS) as one each; ``y`` follows ``x``."""
    n = x[:, N] + y[:, N]
    w = y[:, N] / n
    out = x.copy()
    d = y[:, _MEANS] - x[:, _MEANS]
    out[:, _MEANS] = x[:, _MEANS] + d * w[:, None]
    c = x[:, N] * w
    dt, de = y[:, T] - x[:, T], y[:, E] - x[:, E]
    out[:, S_TT] = x[:, S_TT] + y[:, S_TT] + c * dt * dt
    out[:, S_TE] = x[:, S_TE] + y[:, S_TE] + c * dt * de
    out[:, S_EE] = x[:, S_EE] + y[:, S_EE] + c * de * de
    out[:, N] = n
    out[:, END] = np.maximum(x[:, END], y[:, END])
    return out


def width_allowed(start_h: FloatArray, end_h: FloatArray, now_h: float) -> FloatArray:
    """Return how wide [h] a block from ``start_h`` to ``end_h`` may be when the test is ``now_h`` old."""
    return np.minimum(0.04 * (now_h - end_h) + 0.003 * now_h, 0.06 * start_h + 0.002 * now_h)


def sweep(rungs: FloatArray, now_h: float) -> FloatArray:
    """Merge neighbours wherever that is allowed, old ones first; at most pairs in one sweep."""
    if rungs.shape[0] < 4:
        return rungs
    a, b = rungs[:-1], rungs[1:]
    fits = (b[:, END] - a[:, START] <= width_allowed(a[:, START], b[:, END], now_h)) & (
        a[:, SEGMENT] == b[:, SEGMENT]
    )
    if not fits.any():
        return rungs
    take = np.zeros(fits.shape[0], dtype=bool)
    last = -2
    for i in np.flatnonzero(fits):
        if i > last + 1:
            take[i] = True
            last = int(i)
    first = np.flatnonzero(take)
    out = rungs.copy()
    out[first] = merge(rungs[first], rungs[first + 1])
    keep = np.ones(rungs.shape[0], dtype=bool)
    keep[first + 1] = False
    return out[keep]


def thinned(rungs: FloatArray, now_share: float, floor_share: float, age_share: float) -> FloatArray:
    """Return the rungs merged further, as far as ``now_share`` of the distance from now plus
    ``floor_share`` of the test, and ``age_share`` of the time of test, allow: for work that grows with the
    cube of their number."""
    now = float(rungs[-1, END])
    start, end, segment = rungs[:, START].tolist(), rungs[:, END].tolist(), rungs[:, SEGMENT].tolist()
    first = [0]
    for i in range(1, rungs.shape[0]):
        a = first[-1]
        wide = min(now_share * (now - end[i]) + floor_share * now, age_share * start[a] + 0.004 * now)
        if end[i] - start[a] > wide or segment[i] != segment[a]:
            first.append(i)
    at = np.array(first)
    if at.size == rungs.shape[0]:
        return rungs
    out: FloatArray = rungs[at].copy()
    n = rungs[:, N]
    total = np.add.reduceat(n, at)
    group = np.repeat(np.arange(at.size), np.diff(np.append(at, rungs.shape[0])))
    means = (
        np.add.reduceat(n[:, None] * (rungs[:, _MEANS] - out[group][:, _MEANS]), at, axis=0) / total[:, None]
    )
    out[:, _MEANS] += means
    dt, de = rungs[:, T] - out[group, T], rungs[:, E] - out[group, E]
    out[:, S_TT] = np.add.reduceat(rungs[:, S_TT] + n * dt * dt, at)
    out[:, S_TE] = np.add.reduceat(rungs[:, S_TE] + n * dt * de, at)
    out[:, S_EE] = np.add.reduceat(rungs[:, S_EE] + n * de * de, at)
    out[:, N] = total
    out[:, END] = np.maximum.reduceat(rungs[:, END], at)
    return out


def slope_and_scatter(rungs: FloatArray) -> tuple[float, float, float]:
    """Return slope [1/h], value at mean time, and residual s.d. of all scans in ``rungs``, by moments
    alone."""
    whole = rungs[:1]
    for i in range(1, rungs.shape[0]):
        whole = merge(whole, rungs[i : i + 1])
    row = whole[0]
    slope = row[S_TE] / row[S_TT]
    left = max(row[S_EE] - slope * row[S_TE], 0.0)
    return float(slope), float(row[E] - slope * row[T]), float(np.sqrt(left / (row[N] - 2.0)))


def white_sd(rungs: FloatArray) -> float:
    """Return the s.d. of single scans about a line within each block, pooled; NaN when no block has three
    scans.

    The scale of the noise model only: what is slower than a block is found by ``core.noise``.
    """
    many = rungs[(rungs[:, N] >= 3) & (rungs[:, S_TT] > 0)]
    dof = float(np.sum(many[:, N] - 2.0))
    if dof <= 0:
        return float("nan")
    rest = np.maximum(many[:, S_EE] - many[:, S_TE] ** 2 / many[:, S_TT], 0.0)
    return float(np.sqrt(np.sum(rest) / dof))
