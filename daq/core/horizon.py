"""When do fitted laws reach an event? Weighted times of rupture, of a strain, of the 0.2 % offset.

Everything is a weighted sample of times left [h]: one per cell of a law's grid, spread a little because
no law is exact. Intervals are weighted quantiles of it.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Final, NamedTuple

import numpy as np

from daq.core import laws
from daq.core.laws import SINGULAR, Points, Posterior, Whitening
from daq.records import FloatArray

BEFORE_END: Final = 0.02
BEFORE_LEFT: Final = 0.3
"""Rupture comes before the law's end: at phi = 7 a critical damage of 0.4 leaves (1 - 0.4)^8 = 2 % of
life (Kachanov-Rabotnov). Uniform between none and that, at most this share of the time left."""
INEXACT: Final = 0.1
"""Relative s.d. added to times left to rupture: no law is exact, and weeks to come are not those past."""
INEXACT_STRAIN: Final = 0.05
"""The same for a strain: it asks for less of a law than its end does."""
EARLY: Final = 0.25
"""Before tertiary creep the early edge of a milestone is moved up by this share of the time left, times time
left over age (at most one): the rate may begin to rise."""
OFFSET_0P2: Final = 0.002
NODES: Final = np.linspace(-2.2, 2.2, 9)
NODE_WEIGHTS: Final = np.exp(-0.5 * NODES**2)
SHARES: Final = np.array([0.1, 0.3, 0.5, 0.7, 0.9])
FUTURE: Final = np.geomspace(0.002, 3.0, 48)
"""Instants ahead at which a law is read, in units of the age of the test."""
Z90: Final = 1.645


class Sample(NamedTuple):
    """Times left [h] with weights; infinite where the event does not come before the law's end."""

    left_h: FloatArray
    weight: FloatArray


class Interval(NamedTuple):
    """Low, median and high of a time left [h]."""

    low: float
    median: float
    high: float


def interval(s: Sample, coverage: float) -> Interval:
    """Return the central interval of that coverage, with the median."""
    order = np.argsort(s.left_h, kind="stable")
    left = s.left_h[order]
    share = np.cumsum(s.weight[order])
    share /= share[-1]
    tail = 0.5 * (1.0 - coverage)
    at = np.minimum(np.searchsorted(share, (tail, 0.5, 1.0 - tail)), left.size - 1)
    return Interval(*(float(left[i]) for i in at))


def spread(s: Sample, relative_sd: float) -> Sample:
    """Return the sample widened by what laws do not know."""
    left = (s.left_h[:, None] * np.exp(relative_sd * NODES)).ravel()
    return Sample(left, (s.weight[:, None] * NODE_WEIGHTS).ravel())


def ends(post: Posterior, age_h: float) -> Sample:
    """Return times left to rupture by the singular law: its end, less what rupture comes before it."""
    s = spread(Sample(post.first, post.weight), INEXACT)
    before = np.minimum(BEFORE_END * (s.left_h + age_h), BEFORE_LEFT * s.left_h)
    left = s.left_h[:, None] - SHARES * before[:, None]
    return Sample(left.ravel(), np.repeat(s.weight, SHARES.size))


def with_prior(s: Sample, age_h: float, life_h: float, log_sd: float) -> Sample:
    """Return the sample weighted with a log-normal estimate of the life from elsewhere."""
    z = np.log((age_h + s.left_h) / life_h) / log_sd
    return Sample(s.left_h, s.weight * np.exp(-0.5 * z * z) + 1e-300)


def life_sample(age_h: float, life_h: float, log_sd: float) -> Sample:
    """Return times left by such an estimate alone, given that the specimen still holds."""
    z = np.linspace(-3.0, 3.0, 121)
    left = life_h * np.exp(log_sd * z) - age_h
    weight = np.where(left > 0.0, np.exp(-0.5 * z * z), 0.0)
    if not weight.any():  # older than the estimate allows: nothing is known beyond "soon"
        left, weight = age_h * log_sd * np.linspace(0.05, 1.0, 20), np.ones(20)
    keep = weight > 0.0
    return Sample(left[keep], weight[keep])


# --- reading a law ------------------------------------------------------------------------


def read(post: Posterior, p: Points, least_h: float, t_h: FloatArray) -> FloatArray:
    """Return the strain of every cell at ``t_h``; (k, n). Infinite past the end of a singular law."""
    now, start = float(p.t_h[-1]), float(p.t_h[0])
    base = laws.base_columns(t_h, post.law, start, least_h, now)
    shape = laws.shapes(post.law, t_h, start, now, post.first, post.second)
    amplitude = post.coefs[:, -1:]
    own = np.where(np.isinf(shape), np.inf, amplitude * np.where(np.isinf(shape), 0.0, shape))
    return np.asarray(post.coefs[:, :-1] @ base + own)


def read_rate(post: Posterior, p: Points, least_h: float, t_h: FloatArray) -> FloatArray:
    """Return the rate [1/h] of every cell at ``t_h``; (k, n)."""
    now, start = float(p.t_h[-1]), float(p.t_h[0])
    base = laws.base_rates(t_h, post.law, start, least_h, now)
    shape = laws.shape_rates(post.law, t_h, start, now, post.first, post.second)
    return np.asarray(post.coefs[:, :-1] @ base + post.coefs[:, -1:] * shape)


def predicted(post: Posterior, p: Points, least_h: float, t_h: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return mean and s.d. (n,) of the strain to come, over cells that have not ended by then."""
    strain = read(post, p, least_h, t_h)
    alive = np.isfinite(strain)
    w = np.where(alive, post.weight[:, None], 0.0)
    total = np.maximum(w.sum(axis=0), 1e-300)
    strain = np.where(alive, strain, 0.0)
    mean = (w * strain).sum(axis=0) / total
    var = (w * (strain - mean) ** 2).sum(axis=0) / total
    return mean, np.sqrt(np.maximum(var, 0.0))


def crossings(
    strain: FloatArray, left_h: FloatArray, level: FloatArray | float, ends_h: FloatArray
) -> FloatArray:
    """Return when each row of ``strain`` (k, n) at ``left_h`` (n,) first reaches ``level``; (k,).

    Infinite where it does not. ``ends_h`` (k,): when a law has its end, infinite for laws without one.
    """
    over = strain >= level
    reached = over.any(axis=1)
    j = np.where(reached, np.argmax(over, axis=1), 0)
    rows = np.arange(strain.shape[0])
    hi = strain[rows, j]
    i = np.maximum(j - 1, 0)
    lo = strain[rows, i]
    goal = np.broadcast_to(np.asarray(level), strain.shape)[rows, j]
    with np.errstate(invalid="ignore", divide="ignore"):
        part = np.where((j > 0) & (hi > lo), (goal - lo) / (hi - lo), 1.0)
    t0, t1 = left_h[i], np.minimum(left_h[j], ends_h)
    # where the strain runs off to infinity between two instants it passes the level just before the end
    t = np.where(np.isfinite(hi), t0 + np.clip(part, 0.0, 1.0) * (left_h[j] - t0), t1)
    return np.where(reached, t, np.inf)


def strain_sample(
    posts: Sequence[tuple[Posterior, float]], p: Points, least_h: float, level: float
) -> Sample:
    """Return times left to a strain by all laws, each with its weight."""
    now = float(p.t_h[-1])
    left = now * FUTURE
    parts = []
    for post, weight in posts:
        strain = read(post, p, least_h, now + left)
        end = post.first if post.law == SINGULAR else np.full(post.first.size, np.inf)
        t = crossings(strain, left, level, end)
        if post.law == SINGULAR:
            t = np.where(_bounded(post, p, least_h) < level, np.inf, t)
        parts.append(Sample(t, weight * post.weight))
    return spread(Sample(*(np.concatenate(x) for x in zip(*parts, strict=True))), INEXACT_STRAIN)


def _bounded(post: Posterior, p: Points, least_h: float) -> FloatArray:
    """Return the strain at the end of a singular law: finite where p < 1."""
    now, start = float(p.t_h[-1]), float(p.t_h[0])
    finite = post.second < 1.0 - 1e-6
    shape = 1.0 / np.where(finite, 1.0 - post.second, 1.0)
    base = laws.base_columns(np.array([now]), post.law, start, least_h, now)
    end = (post.coefs[:, :-1] @ base)[:, 0] + post.coefs[:, -1] * shape
    return np.where(finite, end, np.inf)


def offset_sample(posts: Sequence[tuple[Posterior, float]], p: Points, least_h: float) -> Sample:
    """Return times left until strain leaves the tangent of least rate by 0.2 %; below zero where it has."""
    now, start = float(p.t_h[-1]), float(p.t_h[0])
    past = np.linspace(start, now, 60)
    t = np.concatenate((past, now + now * FUTURE))
    parts = []
    for post, weight in posts:
        strain = read(post, p, least_h, t)
        rate = read_rate(post, p, least_h, past)
        rows, j = np.arange(strain.shape[0]), np.argmin(rate, axis=1)
        tangent = strain[rows, j][:, None] + rate[rows, j][:, None] * (t - past[j][:, None])
        away = np.where(t >= past[j][:, None], strain - tangent, -np.inf)
        end = post.first + now if post.law == SINGULAR else np.full(post.first.size, np.inf)
        parts.append(Sample(crossings(away, t, OFFSET_0P2, end) - now, weight * post.weight))
    return spread(Sample(*(np.concatenate(x) for x in zip(*parts, strict=True))), INEXACT_STRAIN)


# --- before tertiary creep ---------------------------------------------------------------


class Onward(NamedTuple):
    """Strain to come by primary creep and a steady rate: mean and s.d. (n,) at ``left_h`` (n,)."""

    left_h: FloatArray
    mean: FloatArray
    sd: FloatArray


def onward(p: Points, whitening: Whitening) -> Onward:
    """Fit primary creep (cube root of time, two exponentials) and a steady rate, and read them ahead."""
    now, start = float(p.t_h[-1]), float(p.t_h[0])
    left = now * FUTURE
    base = laws.base_columns(p.t_h, laws.STEADY_EXPONENTIAL, start, now, now)
    ahead = laws.base_columns(now + left, laws.STEADY_EXPONENTIAL, start, now, now)
    freedom = len(p) - base.shape[0]
    means, variances, likes = [], [], []
    for root, log_det in zip(whitening.roots, whitening.log_dets, strict=True):
        q, r = np.linalg.qr(root @ base.T)
        y = root @ p.strain
        on = q.T @ y
        rest = y - q @ on
        scale = float(rest @ rest) / freedom
        inverse = np.linalg.pinv(r)
        coefs = inverse @ on
        means.append(coefs @ ahead)
        variances.append(scale * ((ahead.T @ inverse) ** 2).sum(axis=1))
        likes.append(-0.5 * freedom * math.log(scale + 1e-300) + float(log_det))
    like = laws.TEMPER * np.array(likes)
    weight = np.exp(like - like.max())
    weight /= weight.sum()
    mean = weight @ np.array(means)
    var = weight @ (np.array(variances) + (np.array(means) - mean) ** 2)
    return Onward(left, mean, np.sqrt(var))


def reach(o: Onward, level: float, age_h: float) -> Interval | None:
    """Return when the level is reached, opened towards early times; None where it is not within reach."""
    spans = []
    for z in (Z90, 0.0, -Z90):
        strain = o.mean + z * o.sd
        t = float(crossings(strain[None], o.left_h, level, np.array([np.inf]))[0])
        spans.append(t)
    low, median, high = spans
    if not math.isfinite(median):
        return None
    if not math.isfinite(high):
        high = float(o.left_h[-1])
    low *= math.exp(-INEXACT_STRAIN * Z90) * (1.0 - EARLY * min(1.0, median / age_h))
    return Interval(low, median, high * math.exp(INEXACT_STRAIN * Z90))
