"""Creep rates from the ladder: the least one with an honest interval, the rate now, the three onsets.

Local polynomials in time by generalised least squares on block means, once for each noise model that
matters (``evidence``) and averaged: the interval then carries what is not known about drift. What room and
specimen temperature do to the extensometer is fitted beside. A polynomial over the stretch in which the
rate lies within some 20 % of its least beats a straight line over the 2 % stretch: it may use far more of
the record, and its bend is fitted, not assumed away. Degree three to six by the corrected criterion of
Akaike (Hurvich & Tsai 1989)."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Final, NamedTuple

import numpy as np

from daq.codec import state
from daq.core import ladder
from daq.records import FloatArray

Z90: Final = 1.645
RISE_5: Final = 1.05
OFFSET_0P2: Final = 0.002
STRETCHES: Final = (1.06, 1.12, 1.25, 1.5)
PRIOR_DOF: Final = 12.0
"""How much the level of noise found on the whole record counts against that of the stretch fitted."""
BENT: Final = 0.03
"""Bias of a polynomial of fitting degree, as a share of the bend within its stretch: seen on the theta,
damage and omega curves of the constructed checks, where it is 1 to 4 %."""
BENT_LINE: Final = 0.3
"""The same for a straight line, where there are too few blocks for more: a third of a parabola's height."""


class Fit(NamedTuple):
    """A local polynomial: strain(t) = sum c_k z^k with z = (t - at_h) / half_h, one row of ``coefs`` a
    noise model.

    ``covariances`` (m, p, p) go with ``coefs`` (m, p); ``weights`` (m,).
    """

    at_h: float
    half_h: float
    coefs: FloatArray
    covariances: FloatArray
    weights: FloatArray
    low_h: float
    high_h: float
    score: float

    def rate(self, t_h: FloatArray) -> FloatArray:
        """Return the mean fitted rate [1/h] at ``t_h``."""
        c = self.weights @ self.coefs
        z = (np.asarray(t_h) - self.at_h) / self.half_h
        slope = np.polynomial.polynomial.polyval(z, np.polynomial.polynomial.polyder(c))
        return np.asarray(slope / self.half_h, np.float64)

    def strain(self, t_h: FloatArray) -> FloatArray:
        c = self.weights @ self.coefs
        z = (np.asarray(t_h) - self.at_h) / self.half_h
        return np.asarray(np.polynomial.polynomial.polyval(z, c), np.float64)

    def rate_sd(self, t_h: float) -> float:
        """Return the s.d. of the rate at ``t_h``, noise models mixed."""
        z = (t_h - self.at_h) / self.half_h
        p = self.coefs.shape[1]
        k = np.arange(p)
        g = np.where(k > 0, k * z ** np.maximum(k - 1, 0), 0.0) / self.half_h
        each = self.coefs @ g
        own = np.einsum("i,mij,j->m", g, self.covariances, g)
        mean = float(self.weights @ each)
        return float(np.sqrt(self.weights @ (own + (each - mean) ** 2)))


@state
@dataclass(frozen=True, slots=True)
class Minimum:
    """The least rate [1/h] and its 90 % interval, when it was [h] with interval, and the stretch used."""

    rate: float
    low: float
    high: float
    time_h: float
    time_low_h: float
    time_high_h: float
    from_h: float
    to_h: float
    strain: float


def polynomial(
    rungs: FloatArray, models: FloatArray, low_h: float, high_h: float, degree: int, column: int = ladder.T
) -> Fit | None:
    """Fit a polynomial to the strain of the rungs whose mean time lies in [low_h, high_h]; None if too few.

    Args:
        models: (k, 4) memory [h], drift variance, variance of one scan, weight.
        column: ``ladder.T`` for time as it is, ``ladder.U`` for equivalent time.
    """
    t_all = rungs[:, column]
    r = rungs[(t_all >= low_h) & (t_all <= high_h)]
    if r.shape[0] < degree + 3:
        return None
    t = r[:, column]
    at, half = 0.5 * (t[0] + t[-1]), max(0.5 * (t[-1] - t[0]), 1e-9)
    z = (t - at) / half
    # mean of z^k over a block from its own spread: exact to second order
    spread = r[:, ladder.S_TT] / r[:, ladder.N] / half**2
    cols = [
        z**k + (0.5 * k * (k - 1) * z ** max(k - 2, 0) * spread if k >= 2 else 0.0) for k in range(degree + 1)
    ]
    n_poly = len(cols)
    for c, prior_sd in (
        (ladder.TEMP, 30e-6),
        (ladder.ROOM0, 100e-6),
        (ladder.ROOM1, 100e-6),
        (ladder.ROOM2, 100e-6),
    ):
        v = r[:, c]
        if np.isfinite(v).all() and np.std(v) > 1e-3 and r.shape[0] > 3 * (degree + 3):
            cols.append((v - np.mean(v)) * prior_sd)
    cols += [(r[:, ladder.SEGMENT] >= s).astype(np.float64) for s in np.unique(r[:, ladder.SEGMENT])[1:]]
    x = np.stack(cols, axis=1)
    precision = np.zeros(x.shape[1])
    nuisance = x.shape[1] - n_poly - (np.unique(r[:, ladder.SEGMENT]).size - 1)
    precision[n_poly : n_poly + nuisance] = 1.0
    y = r[:, ladder.E]
    base = float(y[0])
    gap = np.abs(t[:, None] - t[None, :])
    coefs, covs = [], []
    score = 0.0
    for memory, drift, white, weight in models:
        v = drift * np.exp(-gap / max(memory, 1e-9)) + np.diag(white / r[:, ladder.N] + 4e-14)
        inv = np.linalg.inv(v)
        a = x.T @ inv @ x + np.diag(precision)
        cov = np.linalg.inv(a + np.diag(np.diag(a) * 1e-13))
        beta = cov @ (x.T @ (inv @ (y - base)))
        rest = y - base - x @ beta
        misfit = float(rest @ inv @ rest)
        score += weight * misfit
        scale = (misfit + PRIOR_DOF) / (max(y.size - x.shape[1], 0) + PRIOR_DOF)
        cov = cov * scale
        coefs.append(np.concatenate(([beta[0] + base], beta[1:n_poly])))
        covs.append(cov[:n_poly, :n_poly])
    p, n = x.shape[1], r.shape[0]
    score += 2.0 * p + 2.0 * p * (p + 1) / max(n - p - 1, 1)
    return Fit(at, half, np.array(coefs), np.array(covs), models[:, 3], float(t[0]), float(t[-1]), score)


def best_polynomial(
    rungs: FloatArray,
    models: FloatArray,
    low_h: float,
    high_h: float,
    degrees: tuple[int, ...],
    column: int = ladder.T,
) -> Fit | None:
    """Return the polynomial of the degree that the data support."""
    fits = [f for k in degrees if (f := polynomial(rungs, models, low_h, high_h, k, column)) is not None]
    return min(fits, key=lambda f: f.score) if fits else None


def minimum(
    rungs: FloatArray, models: FloatArray, t_h: FloatArray, rates: FloatArray, column: int = ladder.T
) -> Minimum | None:
    """Fit the least rate.

    Args:
        t_h, rates: The falling-then-rising curve of ``core.shape`` (n,), which says where to look.
        column: Time of the fit; ``t_h`` is in the same time.

    Of stretches in which the rate is within 6, 12, 25 and 50 % of its least, the one with the least sum of
    variance and squared bias is taken, the bias being put at ``BENT`` of the bend allowed.
    """
    rough = float(np.min(rates))
    at = int(np.argmin(rates))
    if rough <= 0.0:
        rough = max(float(np.median(np.abs(rates))) * 0.02, 1e-300)
    best: tuple[float, Minimum] | None = None
    for within in STRETCHES:
        low, high = _around(t_h, rates, at, within * rough, rungs, column)
        fit, bent = best_polynomial(rungs, models, low, high, (3, 4, 5), column), BENT
        if fit is None:
            fit, bent = polynomial(rungs, models, low, high, 1, column), BENT_LINE
        if fit is None:
            continue
        inner_low, inner_high = _around(t_h, rates, at, (1.0 + 0.6 * (within - 1.0)) * rough, rungs, column)
        grid = np.linspace(max(fit.low_h, inner_low), min(fit.high_h, inner_high), 401)
        fitted = fit.rate(grid)
        k = int(np.argmin(fitted))
        sd = float(np.hypot(fit.rate_sd(float(grid[k])), bent * (within - 1.0) * rough))
        if best is not None and sd >= best[0]:
            continue
        # where the rate cannot be told from the least one: the interval of the time
        rate, when = float(fitted[k]), float(grid[k])
        wide = np.linspace(fit.low_h, fit.high_h, 401)
        at_least = int(np.searchsorted(wide, when))
        far = np.flatnonzero(fit.rate(wide) > rate + Z90 * sd)
        lo = int(max((i for i in far if i < at_least), default=0))
        hi = int(min((i for i in far if i >= at_least), default=400))
        best = (
            sd,
            Minimum(
                rate, rate - Z90 * sd, rate + Z90 * sd,
                when, min(when, float(wide[lo])), max(when, float(wide[hi])),
                fit.low_h, fit.high_h, float(fit.strain(np.array([when]))[0]),
            ),
        )  # fmt: skip
    return None if best is None else best[1]


def _around(
    t_h: FloatArray, rates: FloatArray, at: int, goal: float, rungs: FloatArray, column: int
) -> tuple[float, float]:
    """Return the stretch around point ``at`` in which the curve's rate is below ``goal``."""
    near = rates <= goal
    lo = at - int(np.argmin(near[at::-1])) if not near[: at + 1].all() else -1
    hi = at + int(np.argmin(near[at:])) if not near[at:].all() else rates.size
    low = float(rungs[0, column]) if lo < 0 else float(t_h[lo])
    high = float(rungs[-1, column]) if hi >= rates.size else float(t_h[hi])
    return low, high


NOW_STRETCHES: Final = (0.03, 0.06, 0.12, 0.25, 0.5, 1.0)
"""Stretches before now that are tried for the rate now, as shares of the test."""
NOW_BENT: Final = 0.1
NOW_BENT_LINE: Final = 0.6
"""Error of the rate at the end put down to what the fit leaves out, as a share of how much the rate changed
over the stretch: a straight line misses half of it and more where the bend grows; a parabola misses what a
cubic would add, a tenth where the rate has doubled exponentially."""


AGREE: Final = 3.0
"""S.d. by which a longer stretch may differ from a shorter one: less throws long ones away on chance."""
CHOSEN: Final = 1.8
"""The surest of several is surer of itself than it should be: found on simulated rigs (seed 77)."""


def rate_now(rungs: FloatArray, models: FloatArray) -> tuple[float, float, float]:
    """Return the rate at the end [1/h] with a 90 % interval, NaN where too little is known.

    Lines and parabolas over stretches that end now, from short to long; the one with the least sum of
    variance and squared bias, as long as the longer ones agree with what the shorter ones left possible
    (Lepski 1991): the whole of a test may look straight where its beginning and its end are equally steep.
    """
    now = float(rungs[-1, ladder.T])
    end = np.array([now])
    best: tuple[float, float] | None = None
    for part in NOW_STRETCHES:
        low = now * (1.0 - part)
        line = polynomial(rungs, models, low, now, 1)
        if line is None:
            continue
        bend = polynomial(rungs, models, low, now, 2)
        change = 0.0
        tried = []
        if bend is not None:
            change = float(bend.rate(end)[0] - bend.rate(np.array([bend.low_h]))[0])
            sd = float(np.hypot(bend.rate_sd(now), NOW_BENT * change))
            tried.append((float(bend.rate(end)[0]), sd))
            # a change that noise alone would show is none
            noise = 2.0 * bend.rate_sd(now)
            change = float(np.sqrt(max(change * change - noise * noise, 0.0)))
        sd = float(np.hypot(line.rate_sd(now), NOW_BENT_LINE * change))
        tried.append((float(line.rate(end)[0]), sd))
        known = best
        fits = [c for c in tried if known is None or abs(c[0] - known[0]) <= AGREE * known[1]]
        if not fits:  # longer stretches only blur more
            break
        for candidate in fits:
            if best is None or candidate[1] < best[1]:
                best = candidate
    if best is None:
        return float("nan"), float("nan"), float("nan")
    rate, sd = best[0], CHOSEN * best[1]
    return rate, rate - Z90 * sd, rate + Z90 * sd


def coarse_rates(rungs: FloatArray, share: float = 0.04) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return (times, rates, scan counts) of groups of rungs that each span about ``share`` of their
    distance from either end, by moments alone; cheap."""
    t = rungs[:, ladder.T]
    now = float(rungs[-1, ladder.END])
    times, rates, counts = [], [], []
    i = 0
    n = rungs.shape[0]
    cut = [0]
    while i < n:
        want = max(share * now * 0.5, min(0.5 * t[i], share * now))
        j = int(np.searchsorted(t, t[i] + want, side="right"))
        j = min(max(j, i + 2), n)
        cut.append(j)
        i = j
    if len(cut) > 2 and cut[-1] - cut[-2] < 2:
        cut.pop(-2)
    for a, b in itertools.pairwise(cut):
        w = rungs[a:b, ladder.N]
        x, y = t[a:b], rungs[a:b, ladder.E]
        total = float(np.sum(w))
        mx, my = float(np.sum(w * x)) / total, float(np.sum(w * y)) / total
        sxx = float(np.sum(w * (x - mx) ** 2) + np.sum(rungs[a:b, ladder.S_TT]))
        sxy = float(np.sum(w * (x - mx) * (y - my)) + np.sum(rungs[a:b, ladder.S_TE]))
        if sxx > 0:
            times.append(mx)
            rates.append(sxy / sxx)
            counts.append(total)
    return np.array(times), np.array(rates), np.array(counts)


def crossing(t: FloatArray, v: FloatArray, level: float) -> float | None:
    """Return the time after which ``v`` stays above ``level`` for good, linear between points; None if not
    so."""
    above = v > level
    if not above[-1]:
        return None
    below = np.flatnonzero(~above)
    if below.size == 0:
        return float(t[0])
    i = int(below[-1])
    return float(t[i] + (t[i + 1] - t[i]) * (level - v[i]) / (v[i + 1] - v[i]))


def rise_5_percent(rungs: FloatArray, models: FloatArray, least: Minimum) -> float | None:
    """Return when the rate had risen by 5 % over the least one for good, from the curve after it; None if
    not yet."""
    now = float(rungs[-1, ladder.T])
    goal = RISE_5 * least.rate
    high = now
    first, rate, _ = coarse_rates(rungs[rungs[:, ladder.T] >= least.time_h], 0.06)
    over = np.flatnonzero(rate > 1.6 * least.rate)
    if over.size:
        high = float(first[over[0]])
    low = least.from_h
    fit = best_polynomial(rungs, models, low, max(high, least.to_h), (2, 3, 4, 5, 6))
    if fit is None:
        return None
    grid = np.linspace(max(least.time_h, fit.low_h), fit.high_h, 801)
    rates = fit.rate(grid)
    found = np.flatnonzero(rates > goal)
    if found.size == 0:
        return None
    i = int(found[0])
    if i == 0:
        return float(grid[0])
    return float(grid[i - 1] + (grid[i] - grid[i - 1]) * (goal - rates[i - 1]) / (rates[i] - rates[i - 1]))


def offset_0p2(rungs: FloatArray, least: Minimum) -> float | None:
    """Return when the strain left the tangent at the least rate by 0.002 for good; None if not yet."""
    r = rungs[rungs[:, ladder.T] >= least.time_h]
    if r.shape[0] < 2:
        return None
    t = r[:, ladder.T]
    v = r[:, ladder.E] - least.strain - least.rate * (t - least.time_h)
    at = crossing(t, v, OFFSET_0P2)
    if at is None:
        return None
    i = int(np.searchsorted(t, at))
    pick = slice(max(0, i - 3), min(t.size, i + 3))
    if t[pick].size >= 5:
        # block means of a bent curve lie above it: taken off, then a cubic through six means
        tt, vv = t[pick], v[pick]
        spread = r[pick, ladder.S_TT] / r[pick, ladder.N]
        scale = max(float(tt[-1] - tt[0]), 1e-9)
        z = (tt - at) / scale
        x = np.stack(
            [
                z**k + (0.5 * k * (k - 1) * z ** max(k - 2, 0) * spread / scale**2 if k >= 2 else 0.0)
                for k in range(4)
            ],
            axis=1,
        )
        c = np.linalg.lstsq(x, vv, rcond=None)[0]
        grid = np.linspace(float(z[0]), float(z[-1]), 401)
        smooth = np.polynomial.polynomial.polyval(grid, c)
        found = crossing(grid, smooth, OFFSET_0P2)
        if found is not None and -1.0 < found < 1.0:
            return float(at + found * scale)
    return at
