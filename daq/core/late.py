"""Steps found late, in the means of many scans: slips too small for the few scans that cleaning looks at.

A slip of one to four s.d. of a scan passes ``clean``, and over hours it bends the rate like creep. The
blocks of the ladder average tens of scans and see it. A place is tested by a parabola on each side of it,
free in level, slope and bend: whatever begins there and is no jump (a rise of the rate, a furnace step that
speeds creep up) is in both parabolas and leaves the jump alone. A slip within a block leaves that block's
mean anywhere between, so each place is tried with the block there left out, too.

First all places at once with white noise, to see whether there is anything; then the largest by
generalised least squares under every noise model that matters (``core.noise``), the least significant
counting. What a smooth curve, rough drift or jerky creep makes of such a test is not one jump: it must stand
alone once taken out, and be as large when seen from half as far.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Final, NamedTuple

import numpy as np

from daq.core import ladder
from daq.core.intake import IntakeState
from daq.records import FloatArray, IntArray

CAUSE: Final = "small jump seen only in the means of many scans: slip, or a knock"
NEAR: Final = 12
"""Blocks on each side of a place: a jump must be told from a parabola, whose value at its end is three times
as uncertain as a mean. Twelve blocks bring that down to that of one block; with more, drift adds as much
as they take."""
LEAST: Final = 5
"""Blocks needed on each side: three for the parabola and two to see that it fits. The newest are never
tested: a rise that has just begun is no jump until what follows says so."""
REACH: Final = (0.7, 1.4)
"""How far a side may reach, as shares of the time of test of the place: over more than that primary creep,
fast in the beginning, is no parabola."""
JUDGE_SDS: Final = 6.0
"""S.d. beyond which a jump is one. Some 150 places at a hundred looks are 15 000 tests, a tenth of them new:
one Gaussian in 5e8 each, one in 2 million with the tails of a scale that is known from forty blocks. The
rest is for noise that is none of the models: simulated rigs in jerky creep pass 5.5."""
ALONE: Final = 0.5
"""Share of it that nothing else may reach once it is taken out."""
SAME_SDS: Final = 3.0
"""How far the size may differ when seen from half as many blocks."""
SIZE_LEAST: Final = 2e-6
"""Strain that is not worth a step: a tenth of what drift extensometers show in a day (common practice, no
source)."""
SIZE_MOST: Final = 16.0
"""And in s.d. of one scan: cleaning sees what is larger, unless scans are so far apart that creep between
them is; where it saw it and left it in, it was heat, creep over a gap, or jerky creep."""
FLOOR: Final = 0.2e-6
"""Systematic error of a block mean, as in ``core.evidence``."""
STILL: Final = 1e-20
"""Variance of the scans of a block [strain^2] that is rounding."""
WEIGHT_LEAST: Final = 0.1
"""Weight of a noise model that is asked."""
MODEL_DOF: Final = 12.0
"""How much the noise found on the whole record counts against that of the few blocks around a place."""
TRIED: Final = 3
"""Places that are looked at closely in one look."""
PER_K: Final = 30e-6
"""S.d. of apparent strain [1/K] of specimen and room temperature, as in ``core.evidence``."""
FASTER_PER_K: Final = 0.05
"""S.d. of how much faster creep goes [1/K]: 300 to 500 kJ/mol at 600 to 800 C. An excursion is a jump of
strain that is creep."""
_JUMP: Final = 3
"""Column of the jump in a design."""


class Late(NamedTuple):
    """A jump of ``size`` [strain], its standard error, and how many of them it is under the least sure model.

    ``first`` is the first rung after it, ``astride`` the one that it lies within, None between two.
    ``time_h`` is the middle of where it may be.
    """

    first: int
    astride: int | None
    time_h: float
    size: float
    error: float
    sds: float


class _Sides(NamedTuple):
    """What a fit around places is made of: (p, b) of blocks, which are used, time from the place as a share
    of the reach, and whether they come after; ``enough`` (p,) of them on both sides."""

    rows: IntArray
    used: np.ndarray
    z: FloatArray
    after: np.ndarray
    enough: np.ndarray


def find(rungs: FloatArray, models: FloatArray, resolution: float = 0.0) -> Late | None:
    """Return the jump that stands out of the block means, None where there is none.

    Args:
        rungs: The ladder (n, ``ladder.COLUMNS``).
        models: (k, 4) memory [h], drift variance, variance of one scan, weight; none, and nothing is found.
        resolution: Least change that a side shows [strain]: what a coarse scale does is no jump.
    """
    white = ladder.white_sd(rungs) if rungs.shape[0] > 2 * LEAST else math.nan
    if not math.isfinite(white) or models.shape[0] == 0:
        return None
    variance = white * white / rungs[:, ladder.N] + FLOOR * FLOOR
    places = np.arange(LEAST, rungs.shape[0] - LEAST)
    left_out = _seen(rungs, variance, places, True, False)
    between = _seen(rungs, variance, places, False, False)
    both = np.maximum(np.abs(left_out), np.abs(between))
    if np.max(both) < JUDGE_SDS * max(1.0, _middle(both)):
        return None
    left_out = _seen(rungs, variance, places, True, True)
    between = _seen(rungs, variance, places, False, True)
    top = np.maximum(np.abs(left_out), np.abs(between))
    sizes = max(SIZE_LEAST, resolution), SIZE_MOST * white
    for _ in range(TRIED):
        j = int(np.argmax(top))
        if top[j] < JUDGE_SDS:
            return None
        i = int(places[j])
        astride = bool(abs(left_out[j]) >= abs(between[j]))
        late = _judged(rungs, models, variance, i, astride, float(top[j]), sizes)
        if late is not None:
            return late
        top[np.abs(places - i) <= NEAR] = 0.0
    return None


def take_out(s: IntakeState, rungs: FloatArray, late: Late) -> tuple[IntakeState, FloatArray]:
    """Take the jump out of the ladder and of all that follows, where a new segment begins.

    A rung astride is dropped: it is not known how much of it lies before the jump, so it says nothing of
    either level, and its own slope and scatter hold the jump.
    """
    segment = float(rungs[late.first, ladder.SEGMENT])
    keep = np.ones(rungs.shape[0], dtype=bool)
    if late.astride is not None:
        keep[late.astride] = False
    out: FloatArray = rungs.copy()
    out[late.first :, ladder.E] -= late.size
    out[late.first :, ladder.SEGMENT] += 1.0
    context = s.context.copy()
    context[context[:, 0] >= late.time_h, 1:3] -= late.size
    fed = replace(
        s,
        context=context,
        offsets=(s.offsets[0] + late.size, s.offsets[1] + late.size),
        segment=s.segment + 1,
        jerks=tuple((n + 1 if n > segment else n, a, b) for n, a, b in s.jerks),
    )
    return fed, out[keep]


def _sides(rungs: FloatArray, places: IntArray, astride: bool, near: int) -> _Sides:
    """Return the blocks around each of ``places``: rungs that hold it (``astride``) or begin with it."""
    n = rungs.shape[0]
    step = np.arange(-near, near + 1 if astride else near)
    rows = places[:, None] + step[None, :]
    used = (rows >= 0) & (rows < n)
    rows = np.clip(rows, 0, n - 1)
    t, segment = rungs[:, ladder.T], rungs[:, ladder.SEGMENT]
    at = t[places] if astride else 0.5 * (rungs[places, ladder.START] + rungs[places - 1, ladder.END])
    when = t[rows]
    used &= segment[rows] == segment[places][:, None]
    # one reading over and over, stuck or coarser than the noise, is no mean of noise
    used &= ~((rungs[:, ladder.S_EE] <= STILL * rungs[:, ladder.N]) & (rungs[:, ladder.N] >= LEAST))[rows]
    used &= (when >= REACH[0] * at[:, None]) & (when <= REACH[1] * at[:, None])
    if astride:
        used &= step[None, :] != 0
    after = np.broadcast_to(step > 0 if astride else step >= 0, used.shape)
    enough = (np.sum(used & after, axis=1) >= LEAST) & (np.sum(used & ~after, axis=1) >= LEAST)
    z = np.where(used, when - at[:, None], 0.0)
    z /= np.maximum(np.max(np.abs(z), axis=1), 1e-12)[:, None]
    return _Sides(rows, used, z, after, enough)


def _columns(rungs: FloatArray, sides: _Sides, heat: bool) -> tuple[FloatArray, FloatArray]:
    """Return the design (p, b, c) and prior precisions (c,): two parabolas; temperatures where they moved."""
    z = sides.z
    after = np.where(sides.after, 1.0, 0.0)
    cols = [np.ones_like(z), z, z * z, after, after * z, after * z * z]
    parabolas = len(cols)
    for c in (ladder.TEMP, ladder.ROOM0, ladder.ROOM1, ladder.ROOM2) if heat else ():
        v = rungs[:, c]
        if np.isfinite(v).all() and np.std(v) > 1e-3:
            cols.append(_about_mean(v, sides) * PER_K)
    if heat and np.std(rungs[:, ladder.Q]) > 0.0:
        first, last = (
            np.min(np.where(sides.used, sides.rows, rungs.shape[0]), axis=1),
            np.max(np.where(sides.used, sides.rows, 0), axis=1),
        )
        went = rungs[last, ladder.E] - rungs[first, ladder.E]
        rate = np.abs(went) / np.maximum(rungs[last, ladder.T] - rungs[first, ladder.T], 1e-12)
        cols.append(_about_mean(rungs[:, ladder.Q], sides) * (FASTER_PER_K * rate)[:, None])
    precision = np.zeros(len(cols))
    precision[parabolas:] = 1.0
    return np.stack(cols, axis=2), precision


def _middle(sds: FloatArray) -> float:
    """Return the middle of what is not 0: how much rougher than white noise this stretch is."""
    there = sds[sds > 0.0]
    return float(np.median(there)) if there.size else 0.0


def _about_mean(v: FloatArray, sides: _Sides) -> FloatArray:
    """Return what ``v`` (n,) is at the blocks of each place, less its mean there."""
    x = v[sides.rows]
    count = np.maximum(np.sum(sides.used, axis=1), 1)
    mean = np.sum(np.where(sides.used, x, 0.0), axis=1) / count
    about: FloatArray = x - mean[:, None]
    return about


def _seen(rungs: FloatArray, variance: FloatArray, places: IntArray, astride: bool, heat: bool) -> FloatArray:
    """Return the jump at each place in units of its white noise; 0 where there are too few blocks."""
    sides = _sides(rungs, places, astride, NEAR)
    out = np.zeros(places.size)
    ok = np.flatnonzero(sides.enough)
    if ok.size == 0:
        return out
    sides = _Sides(sides.rows[ok], sides.used[ok], sides.z[ok], sides.after[ok], sides.enough[ok])
    x, precision = _columns(rungs, sides, heat)
    root = np.where(sides.used, 1.0 / np.sqrt(variance[sides.rows]), 0.0)
    x = x * root[:, :, None]
    e = rungs[:, ladder.E]
    y = (e[sides.rows] - e[places[ok]][:, None]) * root
    turned = np.swapaxes(x, 1, 2)
    gram = turned @ x
    k = np.arange(precision.size)
    gram[:, k, k] += precision + 1e-11 * gram[:, k, k] + 1e-30
    right = np.zeros((ok.size, precision.size, 2))
    right[:, :, 0] = (turned @ y[:, :, None])[:, :, 0]
    right[:, _JUMP, 1] = 1.0
    solved = np.linalg.solve(gram, right)[:, _JUMP, :]
    out[ok] = solved[:, 0] / np.sqrt(np.maximum(solved[:, 1], 1e-300))
    return out


def _jump(
    rungs: FloatArray, models: FloatArray, place: int, astride: bool, near: int
) -> tuple[float, float, float] | None:
    """Return size, standard error, least number of them over noise models; None with too few blocks."""
    sides = _sides(rungs, np.array([place]), astride, near)
    if not sides.enough[0]:
        return None
    used = np.flatnonzero(sides.used[0])
    rows = sides.rows[0, used]
    cols, precision = _columns(rungs, sides, True)
    x = cols[0, used]
    y = rungs[rows, ladder.E] - rungs[place, ladder.E]
    t = rungs[rows, ladder.T]
    gap = np.abs(t[:, None] - t[None, :])
    found = []
    asked = models[models[:, 3] >= min(WEIGHT_LEAST, float(np.max(models[:, 3])))]
    for memory, drift, white, weight in asked:
        v = drift * np.exp(-gap / max(memory, 1e-9)) + np.diag(white / rungs[rows, ladder.N] + FLOOR * FLOOR)
        inverse = np.linalg.inv(v)
        a = x.T @ inverse @ x + np.diag(precision)
        covariance = np.linalg.inv(a + np.diag(np.diag(a) * 1e-12 + 1e-30))
        beta = covariance @ (x.T @ (inverse @ y))
        rest = y - x @ beta
        dof = max(rows.size - x.shape[1], 0)
        scale = (MODEL_DOF + float(rest @ inverse @ rest)) / (MODEL_DOF + dof)
        found.append((float(beta[_JUMP]), float(np.sqrt(scale * covariance[_JUMP, _JUMP])), float(weight)))
    least = min(found, key=lambda f: abs(f[0]) / f[1])
    size = sum(f[0] * f[2] for f in found) / sum(f[2] for f in found)
    return size, least[1], min(abs(size), abs(least[0])) / least[1]


def _judged(
    rungs: FloatArray,
    models: FloatArray,
    variance: FloatArray,
    place: int,
    astride: bool,
    top: float,
    sizes: tuple[float, float],
) -> Late | None:
    """Return the jump at ``place``, seen as ``top`` of its white noise, if it is one, sized in ``sizes``."""
    seen = _jump(rungs, models, place, astride, NEAR)
    if seen is None:
        return None
    size, error, sds = seen
    least, most = sizes
    if sds < JUDGE_SDS or not least <= abs(size) <= most:
        return None
    closer = _jump(rungs, models, place, astride, NEAR // 2)
    if closer is None or abs(closer[0] - size) > SAME_SDS * closer[1]:
        return None
    first = place + 1 if astride else place
    without = rungs.copy()
    without[first:, ladder.E] -= size
    if astride:
        keep = np.arange(rungs.shape[0]) != place
        without, variance = without[keep], variance[keep]
    places = np.arange(LEAST, without.shape[0] - LEAST)
    rest = np.maximum(
        np.abs(_seen(without, variance, places, True, True)),
        np.abs(_seen(without, variance, places, False, True)),
    )
    if np.max(rest) > ALONE * top:
        return None
    rough = _middle(rest[np.abs(places - place) <= 2 * NEAR])
    if top < JUDGE_SDS * max(1.0, rough):
        return None
    at = float(rungs[place, ladder.T])
    if not astride:
        at = 0.5 * float(rungs[place, ladder.START] + rungs[place - 1, ladder.END])
    return Late(first, place if astride else None, at, size, error, min(sds, top / max(1.0, rough)))
