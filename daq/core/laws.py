"""Laws of tertiary creep fitted to a strain curve: which fit, and what each says comes next.

Three laws, each added to what is left of primary creep:

* ``singular``: rate = r (1 - t/tf)^-p, the inverse-rate law d(rate)/dt ~ rate^a of Voight (1988) with
  free exponent a = 1 + 1/p. p = 1 is the Omega law (Prager 1995, API 579-1), p = n/(1+phi) continuum
  damage (Kachanov 1958, Rabotnov 1969). It has an end, tf.
* ``exponential``: rate = r exp(k t), tertiary of the theta projection (Evans & Wilshire 1985). It has no end.
* ``steady_exponential``: the same on top of a steady rate; no end either.

Strain is fitted, not its rate: differentiation would throw away what the noise allows. For given
(tf, p) or k everything else is linear, so the likelihood is worked out on a grid with the linear part
profiled out, and the grid zooms in. Noise is white, drift of two memories, and creep that itself varies
(a furnace that wanders: increments with variance ~ rate^2 dt), in several mixtures that are averaged.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from daq.records import FloatArray

POINTS: Final = 48
"""Block means that enter a fit: work grows with their square, and a smooth law has few parameters."""
STAGES: Final = 4
SINGULAR_GRID: Final[tuple[int, ...]] = (16, 7)
EXPONENTIAL_GRID: Final[tuple[int, ...]] = (20,)
DROP: Final = 9.0
"""A cell whose log-likelihood is this far below the best has no weight: exp(-9)."""
LIGHT: Final = 1e-4
"""Cells lighter than this against the heaviest are left out of what follows."""
PRIMARY_SHARES: Final = (0.15, 0.4)
"""Time constants of what is left of an exponential primary stage, as shares of the time of least rate:
at a minimum the primary has decayed by exp(-3) to exp(-6) (McVetty, theta); Andrade's t^(1/3) beside."""
POWER_RANGE: Final = (0.2, 4.0)
"""a = 1 + 1/p from 6 (sudden) to 1.25 (all but exponential)."""
GROWTH_RANGE: Final = (0.2, 60.0)
"""Relative growth of the law's rate now, d ln(rate)/dt, in units of one over the tertiary stage so far: k of
the exponential, p/(tf - t) of the singular law. It is what a curve tells best, so grids lie along it."""
TEMPER: Final = 0.5
"""Power to which likelihoods are raised: no law is exact and no noise model complete, so evidence is taken
for half of what it seems (safe Bayes, Gruenwald & van Ommen 2017)."""

SINGULAR: Final = "singular"
EXPONENTIAL: Final = "exponential"
STEADY_EXPONENTIAL: Final = "steady_exponential"


@dataclass(frozen=True, slots=True, eq=False)
class Points:
    """Block means of a curve: time [h], strain, scans in each, rate [1/h] for the size of the noise; (n,).
    ``sd_h``: standard deviation of the times within each block: where the rate runs away, the mean strain
    of a block is not the strain at its mean time."""

    t_h: FloatArray
    sd_h: FloatArray
    strain: FloatArray
    scans: FloatArray
    rate_per_h: FloatArray

    def __len__(self) -> int:
        return int(self.t_h.shape[0])


@dataclass(frozen=True, slots=True, eq=False)
class Posterior:
    """Weights of the cells of one law's grid, and what each cell predicts.

    ``first`` (k,): time left [h] of ``singular``, growth [1/h] of the others; ``second`` (k,): power p, or
    zero. ``weight`` (k,) sums to one. ``coefs`` (k, b + 1): of the base columns and of the law's own shape.
    ``log_evidence``: of the law as a whole, tempered.
    """

    law: str
    first: FloatArray
    second: FloatArray
    weight: FloatArray
    coefs: FloatArray
    log_evidence: float


def thin(
    t_h: FloatArray, strain: FloatArray, scans: FloatArray, rate: FloatArray, most: int = POINTS
) -> Points:
    """Merge neighbours until at most ``most`` points are left, finest near the end of the curve."""
    now, first = float(t_h[-1]), float(t_h[0])
    share = 0.06
    while True:
        starts = _starts(t_h, now, share, 3.0 * (now - first) / most)
        if len(starts) <= most or share > 3.0:
            break
        share *= 1.25
    at = np.array(starts)
    total = np.add.reduceat(scans, at)
    mean_t = np.add.reduceat(scans * t_h, at) / total
    mean_e = np.add.reduceat(scans * strain, at) / total
    group = np.repeat(np.arange(at.size), np.diff(np.append(at, t_h.size)))
    apart = (t_h - mean_t[group]) ** 2 + np.gradient(
        t_h
    ) ** 2 / 12.0  # each block reaches halfway to its neighbours
    sd = np.sqrt(np.add.reduceat(scans * apart, at) / total)
    return Points(mean_t, sd, mean_e, total, np.interp(mean_t, t_h, rate))


def _starts(t_h: FloatArray, now: float, share: float, widest: float) -> list[int]:
    starts, begun = [0], float(t_h[0])
    for i, t in enumerate(t_h.tolist()):
        if t - begun >= min(share * (now - begun) + 0.004 * now, widest):
            starts.append(i)
            begun = t
    return starts


# --- noise ------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Whitening:
    """What makes the noise of each mixture white: ``roots`` (m, n, n), and log-determinants (m,)."""

    roots: FloatArray
    log_dets: FloatArray


def whitening_of(p: Points) -> Whitening:
    """Return the noise mixtures: white alone, with varying creep, with drift of a short or a long memory."""
    n, now = len(p), float(p.t_h[-1])
    white = np.diag(np.median(p.scans) / p.scans)
    square = np.maximum(np.abs(p.rate_per_h), 1e-3 * float(np.abs(p.rate_per_h).max())) ** 2
    if not float(square.max()) > 0.0:
        square = np.ones(n)
    pieces = 0.5 * (square[1:] + square[:-1]) * np.diff(p.t_h)
    clock = np.concatenate(([0.0], np.cumsum(pieces)))
    varying = np.minimum(clock[:, None], clock[None, :]) / float(np.median(pieces))
    gap = np.abs(p.t_h[:, None] - p.t_h[None, :])
    short, long = np.exp(-gap / (0.03 * now)), np.exp(-gap / (0.2 * now))
    mixtures = np.stack((
        white, white + 0.3 * varying, white + 10.0 * varying, white + short, white + 30.0 * short,
        white + 10.0 * long, white + 3.0 * varying + 3.0 * short,
    ))  # fmt: skip
    lower = np.linalg.cholesky(mixtures + 1e-9 * np.eye(n))
    log_dets = -np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(axis=1)
    return Whitening(np.linalg.inv(lower), log_dets)


# --- shapes -----------------------------------------------------------------------------


def base_columns(t_h: FloatArray, law: str, start_h: float, least_h: float, now_h: float) -> FloatArray:
    """Return what is not the law's own: level, primary creep, the steady rate where it has one; (b, n)."""
    since = t_h - start_h
    rows = [np.ones_like(t_h), np.cbrt(np.maximum(t_h, 0.0) / now_h)]
    rows += [np.exp(-since / (share * least_h)) for share in PRIMARY_SHARES]
    if law == STEADY_EXPONENTIAL:
        rows.append(t_h / now_h)
    return np.stack(rows)


def base_rates(t_h: FloatArray, law: str, start_h: float, least_h: float, now_h: float) -> FloatArray:
    """Return the time derivatives of :func:`base_columns`."""
    since = t_h - start_h
    root = np.cbrt(np.maximum(t_h, 1e-9 * now_h) / now_h)
    rows = [np.zeros_like(t_h), 1.0 / (3.0 * now_h * root**2)]
    rows += [-np.exp(-since / (share * least_h)) / (share * least_h) for share in PRIMARY_SHARES]
    if law == STEADY_EXPONENTIAL:
        rows.append(np.full_like(t_h, 1.0 / now_h))
    return np.stack(rows)


def within_blocks(p: Points, f: Callable[[FloatArray], FloatArray]) -> FloatArray:
    """Return the mean of ``f`` over each block, from its values one s.d. before and after its mean time."""
    return 0.5 * (f(p.t_h - p.sd_h) + f(p.t_h + p.sd_h))


def shapes(
    law: str,
    t_h: FloatArray,
    start_h: float,
    now_h: float,
    first: FloatArray,
    second: FloatArray,
    *,
    soft: bool = False,
) -> FloatArray:
    """Return the law's own strain for each cell; (k, n). Past the end of a singular law it is infinite, or,
    ``soft``, what it is just before."""
    if law != SINGULAR:
        return np.expm1(np.minimum(first[:, None] * (t_h - now_h), 300.0))
    end = now_h + first[:, None]
    x = (end - t_h) / (end - start_h)
    if soft:
        x = np.maximum(x, 1e-6)
    with np.errstate(divide="ignore", invalid="ignore"):
        log_x = np.log(np.maximum(x, 0.0))
        q = (1.0 - second)[:, None]
        small = np.abs(q) < 1e-6
        shape = np.where(small, -log_x, -np.expm1(q * log_x) / np.where(small, 1.0, q))
    return np.where(x > 0.0, shape, np.inf)


def shape_rates(
    law: str, t_h: FloatArray, start_h: float, now_h: float, first: FloatArray, second: FloatArray
) -> FloatArray:
    """Return the time derivatives of :func:`shapes`."""
    if law != SINGULAR:
        return first[:, None] * np.exp(np.minimum(first[:, None] * (t_h - now_h), 300.0))
    end = now_h + first[:, None]
    x = np.maximum((end - t_h) / (end - start_h), 1e-12)
    return np.asarray(x ** -second[:, None] / (end - start_h))


# --- fits -------------------------------------------------------------------------------


def fit(p: Points, law: str, least_h: float, whitening: Whitening) -> Posterior:
    """Fit one law to the points.

    Args:
        least_h: When the rate was least [h]: scale of the tertiary stage and of what is left of primary.
    """
    now, start = float(p.t_h[-1]), float(p.t_h[0])
    stage = now - least_h

    def base(t_h: FloatArray) -> FloatArray:
        return base_columns(t_h, law, start, least_h, now)

    def shape(cells: Cells) -> FloatArray:
        return within_blocks(p, lambda t_h: shapes(law, t_h, start, now, *cells, soft=True))

    frame = _frame(whitening, within_blocks(p, base), p.strain)

    def likelihood(cells: Cells) -> FloatArray:
        return _profile(frame, shape(cells))[0]

    ranges = [(GROWTH_RANGE[0] / stage, GROWTH_RANGE[1] / stage)]
    sizes = EXPONENTIAL_GRID
    if law == SINGULAR:
        ranges, sizes = [*ranges, POWER_RANGE], SINGULAR_GRID
    cells, log_like, share = _zoom(likelihood, ranges, sizes, STAGES if law == SINGULAR else STAGES - 1)
    if law == STEADY_EXPONENTIAL:
        log_like = log_like - 0.5 * np.log(
            len(p)
        )  # one linear parameter more than the other laws (Schwarz 1978)
    tempered = TEMPER * log_like
    top = float(tempered.max())
    each = np.exp(tempered - top)
    weight = each.sum(axis=0)
    best = int(np.argmax(each.sum(axis=1)))
    evidence = top + float(np.log(weight.sum() * share / len(whitening.log_dets)))
    keep = weight > LIGHT * float(weight.max())
    kept = (cells[0][keep], cells[1][keep])
    coefs = _coefficients(frame, shape(kept), best)
    return Posterior(law, *kept, weight[keep] / weight[keep].sum(), coefs, evidence)


@dataclass(frozen=True, slots=True, eq=False)
class _Frame:
    """Base columns and data made white for each noise mixture: ``q`` (m, n, b) and ``r`` (m, b, b) of the
    columns, ``on`` (m, b) the data along them, ``rest`` (m, n) what is left of the data."""

    whitening: Whitening
    q: FloatArray
    r: FloatArray
    on: FloatArray
    rest: FloatArray


def _frame(whitening: Whitening, base: FloatArray, y: FloatArray) -> _Frame:
    q, r = np.linalg.qr(whitening.roots @ base.T)
    white = whitening.roots @ y
    on = np.einsum("mnb,mn->mb", q, white)
    return _Frame(whitening, q, r, on, white - np.einsum("mnb,mb->mn", q, on))


def _profile(f: _Frame, columns: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return log-likelihoods and amplitudes (m, k) of the law's shapes ``columns`` (k, n), with level,
    primary, amplitude and scale profiled out. A negative amplitude counts as none."""
    n, b = f.q.shape[1:]
    white = columns @ np.swapaxes(f.whitening.roots, 1, 2)
    along = white @ f.q
    size = np.maximum((white * white).sum(axis=2) - (along * along).sum(axis=2), 1e-300)
    amplitude = np.maximum((white @ f.rest[:, :, None])[:, :, 0], 0.0) / size
    total = (f.rest * f.rest).sum(axis=1)[:, None]
    left = np.maximum(total - amplitude**2 * size, 1e-12 * total + 1e-300)
    like = -0.5 * (n - b - 1) * np.log(left) + f.whitening.log_dets[:, None]
    return like, amplitude


def _coefficients(f: _Frame, columns: FloatArray, mixture: int) -> FloatArray:
    """Return coefficients (k, b + 1) of base and shape under one noise mixture."""
    amplitude = _profile(f, columns)[1][mixture]
    along = (columns @ f.whitening.roots[mixture].T) @ f.q[mixture]
    base = (f.on[mixture] - amplitude[:, None] * along) @ np.linalg.pinv(f.r[mixture]).T
    return np.concatenate((base, amplitude[:, None]), axis=1)


Cells = tuple[FloatArray, FloatArray]


def _zoom(
    likelihood: Callable[[Cells], FloatArray],
    ranges: Sequence[tuple[float, float]],
    sizes: Sequence[int],
    stages: int,
) -> tuple[Cells, FloatArray, float]:
    """Evaluate on a logarithmic grid, again on the part that has weight, and so on.

    Return the last cells, likelihoods (m, k), and the share of the first grid that a cell covers.
    """
    low, high = (np.log([r[i] for r in ranges]) for i in (0, 1))
    whole = float(np.prod(high - low))
    for stage in range(stages):
        axes = [np.linspace(a, b, n) for a, b, n in zip(low, high, sizes, strict=True)]
        grid = np.meshgrid(*axes, indexing="ij")
        first = np.exp(grid[0].ravel())
        second = np.zeros_like(first)
        if len(axes) > 1:  # the singular law: from growth and power to time left and power
            second = np.exp(grid[1].ravel())
            first = second / first
        like = likelihood((first, second))
        if stage < stages - 1:
            best = like.max(axis=0).reshape(grid[0].shape)
            low, high = _part(best, axes)
    cell = float(np.prod([a[1] - a[0] for a in axes]))
    return (first, second), like, cell / whole


def _part(best: FloatArray, axes: Sequence[FloatArray]) -> tuple[FloatArray, FloatArray]:
    low, high = [], []
    for d, axis in enumerate(axes):
        others = tuple(j for j in range(best.ndim) if j != d)
        along = best.max(axis=others) if others else best
        keep = np.flatnonzero(along > float(best.max()) - DROP / TEMPER)
        low.append(axis[max(int(keep[0]) - 1, 0)])
        high.append(axis[min(int(keep[-1]) + 1, axis.size - 1)])
    return np.array(low), np.array(high)
