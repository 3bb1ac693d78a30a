"""Evidence that the creep rate, having fallen or stood still, now rises.

Two families of curves are compared on the block means of the ladder, in temperature-equivalent time:

* *the rate never rises*: any concave curve, as non-negative least squares on concave hinges and
  saturating exponentials (whatever primary and secondary creep look like, they are in it);
* *and then it rises*: the same plus one convex departure (t - onset)^2 for an onset on a grid.

What else bends a curve takes part in both: apparent strain of specimen and room temperature (lagged), an
error of the activation energy, sizes of slips, the day wave where no room temperature is logged. The noise
is integrated over a grid (``core.noise``) in both. The evidence is the log of the ratio of the two
integrated likelihoods (restricted likelihood, scale profiled), the onset averaged over its grid, so that
it behaves as a likelihood ratio does: at most a share alpha of tests without a rise ever see it above
log(1/alpha) (Ville 1939) where the model is right, and what the threshold must add because the model is
fitted was found on simulated rigs. A step that nobody saw is a third explanation, weighed as such: it is
small, or it had been found (``core.clean``), it is rare, and it may have been at any time."""

from __future__ import annotations

from collections.abc import Callable
from typing import Final, NamedTuple

import numpy as np

from daq.core import ladder, noise
from daq.core.rules import ZERO_C_IN_K
from daq.records import FloatArray, IntArray

FLOOR: Final = 0.2e-6
"""Systematic error of a block mean [strain] that no extensometer can be trusted beyond: 5 nm on 25 mm."""
SINCE: Final = (0.03, 0.05, 0.08, 0.12, 0.17, 0.23, 0.3, 0.4, 0.5, 0.62, 0.75, 0.88)
"""Onsets tried, as shares of the elapsed time before now."""
KEEP: Final = 6.0
"""Noise models and onsets whose likelihood lies this far [log] below the best count for nothing: 1 in 400."""
QUIET: Final = 1.0
"""Evidence under the best noise model below which the others are not asked."""
MODELS: Final = 8
"""Noise models that are kept for the second family."""
EXPONENTIALS: Final = (0.01, 0.02, 0.04, 0.08, 0.16, 0.32, 0.64, 1.28)
RAMPS: Final = (0.03, 0.06, 0.12, 0.2, 0.3, 0.42, 0.55, 0.7, 0.85, 1.0)


UNSEEN_SDS: Final = 2.0
UNSEEN_LEAST: Final = 3.0
"""S.d. of a step that cleaning did not find: so many s.d. of one scan, and microstrain at least. Medians of a
few scans on both sides show anything above three or four."""
UNSEEN_IN_GAP: Final = 300.0
"""The same [microstrain] across a gap: people come, mains come back, and no reading shows the jump."""
GAP_TIMES: Final = 5.0
"""An interval between blocks this many times the usual one of scans is a gap (as in ``core.leaves``)."""
UNSEEN: Final = 0.1
"""Share of tests with such a step (common practice, no source)."""
PER_SPECIMEN_K: Final = 30.0
PER_ROOM_K: Final = 30.0
"""S.d. of apparent strain [microstrain/K]: metals expand by 9 to 24e-6/K (handbook values), and no transducer
frame is longer than a few gauge lengths."""
BENT: Final = 0.05
"""Fading start of the difference of the sides, as a share of the elapsed time: settling of the arms."""
MISSING: Final = 8
"""Blocks without both sides beyond which their difference is not asked."""

THIN: Final = (0.06, 0.005, 0.1)
"""How far blocks are merged for a look: shares of distance from now, of the test, and of the time of test."""


class Design(NamedTuple):
    """Columns of the regression: free ones, concave ones (non-negative), departures, steps, and the data.

    ``x`` (n,) shares of elapsed equivalent time, ``precision`` (f,) prior precisions of the free columns in
    units of one scan's variance, ``sd`` of one scan.
    """

    x: FloatArray
    variance: FloatArray
    free: FloatArray
    concave: FloatArray
    departures: FloatArray
    since: FloatArray
    steps: FloatArray
    step_sd: FloatArray
    y: FloatArray
    precision: FloatArray
    sd: float
    now: float
    knots: FloatArray
    witness: noise.Witness | None


class Evidence(NamedTuple):
    """What one look found.

    ``log_ratio``: evidence for a rise against the better of "never rises" and "a step",
    ``against_falling`` against the first alone. ``since``: share of the elapsed equivalent time since the
    most likely onset. ``fall_gain``: log likelihood gained by letting the rate fall before the onset,
    ``fall_ratio`` first rate over least, ``rise_ratio`` rate now over least, ``offset`` strain above the
    tangent at the least rate, all on the best fitting curve. ``noise``: (k, 4) memory [h], drift variance,
    variance of one scan [strain^2], weight, of the noise models that matter."""

    log_ratio: float
    against_falling: float
    since: float
    fall_gain: float
    fall_ratio: float
    rise_ratio: float
    offset: float
    minimum_share: float
    noise: FloatArray
    x: FloatArray
    rates: FloatArray
    model: tuple[float, float]


def design(
    rungs: FloatArray,
    *,
    has_temperature: bool,
    has_room: bool,
    q_error: float = 0.0,
    per_kelvin: float = 0.0,
) -> Design:
    """Build the regression from the ladder.

    ``q_error``: prior s.d. [1/K] of the error of the temperature sensitivity of the rate, 0 for none.
    ``per_kelvin``: that sensitivity [1/K]; where the controller output is logged, it stands for a temperature
    that a drifting thermocouple may hide. Output goes with T - T_room where heat is conducted and with T^4
    where it is radiated: about 2/T a kelvin is taken, and may be wrong by as much.
    """
    sd = ladder.white_sd(rungs) * 1e6
    rungs = ladder.thinned(rungs[rungs[:, ladder.T] > 0.004 * rungs[-1, ladder.T]], *THIN)
    u = rungs[:, ladder.U]
    now = float(u[-1])
    x = u / now
    n = rungs[:, ladder.N]
    y = (rungs[:, ladder.E] - rungs[0, ladder.E]) * 1e6
    if not np.isfinite(sd):
        d2 = y[1:-1] - 0.5 * (y[2:] + y[:-2])
        sd = float(np.sqrt(np.mean(d2 * d2) / 1.5)) if d2.size else 1.0
    sd = max(sd, 0.05)
    variance = 1.0 / n + (FLOOR * 1e6 / sd) ** 2
    free = [np.ones_like(x), x]
    precision = [0.0, 0.0]
    if has_temperature:
        t = rungs[:, ladder.TEMP]
        t = t - np.mean(t)
        if np.std(t) > 1e-3:
            free.append(t)
            precision.append((sd / PER_SPECIMEN_K) ** 2)
            rate = float((y[-1] - y[0]) / max(now - u[0], 1e-9))
            q = rungs[:, ladder.Q] * rate  # what a relative rate error of 1 per kelvin would do [microstrain]
            if q_error > 0 and np.std(q) > 0:
                free.append((q - np.mean(q)) * q_error)
                precision.append(sd**2)
            output = float(np.mean(rungs[:, ladder.OUT]))
            hidden = rungs[:, ladder.OQ] * rate
            if per_kelvin > 0 and output > 0 and np.std(hidden) > 0:  # NaN where it is not logged: left out
                kelvin = (float(np.mean(rungs[:, ladder.TEMP])) + ZERO_C_IN_K) / (2.0 * output)
                free.append((hidden - np.mean(hidden)) * kelvin * per_kelvin)
                precision.append(sd**2)
    if has_room:
        for c in (ladder.ROOM0, ladder.ROOM1, ladder.ROOM2):
            r = rungs[:, c] - np.mean(rungs[:, c])
            if np.std(r) > 1e-3:
                free.append(r)
                precision.append((sd / PER_ROOM_K) ** 2)
    elif rungs[-1, ladder.T] > 60.0:
        phase = 2.0 * np.pi * rungs[:, ladder.T] / 24.0
        fine = np.minimum(1.0, np.maximum(0.0, 2.0 - (rungs[:, ladder.END] - rungs[:, ladder.START]) / 6.0))
        free += [np.cos(phase) * fine, np.sin(phase) * fine]
        precision += [(sd / PER_ROOM_K) ** 2] * 2
    seg = rungs[:, ladder.SEGMENT]
    for s in np.unique(seg)[1:][-6:]:
        free.append((seg >= s).astype(np.float64))
        precision.append(0.0)
    knots = _knots(x)
    concave = np.concatenate(
        (
            -np.maximum(x[:, None] - knots[None, :], 0.0) / (1.0 - knots)[None, :],
            1.0 - np.exp(-x[:, None] / np.array(EXPONENTIALS)[None, :]),
            _ramps(x),
        ),
        axis=1,
    )
    since = np.array([s for s in SINCE if np.count_nonzero(x > 1.0 - s) >= 4])
    departures = np.maximum(x[:, None] - (1.0 - since)[None, :], 0.0) ** 2 / (since**2)[None, :]
    at = 0.5 * (x[2:] + x[1:-1])
    gap = (rungs[1:, ladder.START] - rungs[:-1, ladder.END])[1:]
    usual = ((rungs[:, ladder.END] - rungs[:, ladder.START]) / np.maximum(n - 1.0, 1.0))[1:]
    in_gap = gap > GAP_TIMES * np.maximum(usual[1:], usual[:-1])
    step_sd = np.hypot(UNSEEN_LEAST, np.where(in_gap, UNSEEN_IN_GAP, UNSEEN_SDS * sd))
    steps = (x[:, None] > at[None, :]).astype(np.float64)
    columns, penalty = np.stack(free, axis=1), np.array(precision)
    witness = _witness(rungs[:, ladder.H] * 1e6, x, y, columns, penalty)
    return Design(
        x, variance, columns, concave, departures, since, steps, step_sd, y, penalty, sd, now, knots, witness
    )


def _witness(
    half: FloatArray, x: FloatArray, y: FloatArray, free: FloatArray, precision: FloatArray
) -> noise.Witness | None:
    """Return half the difference of the sides with what it may follow; None where there is none to speak of.

    While a side is away its last value is carried: such blocks get a column of their own each."""
    carried = np.flatnonzero(np.diff(half) == 0.0) + 1
    if carried.size > MISSING or half.size < 2 * (free.shape[1] + carried.size) + MISSING:
        return None
    bending = np.stack((1.0 - np.exp(-x / BENT), y), axis=1)
    alone = (np.arange(half.size)[:, None] == carried[None, :]).astype(np.float64)
    columns = np.concatenate((free, bending, alone), axis=1)
    own = np.concatenate((precision, np.zeros(2 + carried.size)))
    return noise.Witness(half - half[0], columns, own)


def _ramps(x: FloatArray) -> FloatArray:
    """Return strains whose rates fall linearly to zero at each of ``RAMPS``: smooth where hinges are not."""
    end = np.array(RAMPS)[None, :]
    t = np.minimum(x[:, None], end)
    ramps: FloatArray = (2.0 * end * t - t * t) / end**2
    return ramps


def _knots(x: FloatArray) -> FloatArray:
    """Return knots for concave hinges: about geometric from the start and towards now."""
    knots = []
    last = 0.0
    for v in x[2:-2]:
        if v < 0.999 and v - last >= min(0.1 * v, 0.03 + 0.1 * (1.0 - v)):
            knots.append(float(v))
            last = float(v)
    return np.array(knots)


def nnls(h: FloatArray, b: FloatArray, start: FloatArray | None = None) -> tuple[FloatArray, FloatArray]:
    """Minimise z'Hz - 2 b'z over z >= 0 by the active-set method of Lawson and Hanson (1974).

    Returns (z, passive mask). ``start``: passive set to begin with (warm start).
    """
    m = b.shape[0]
    tol = 1e-9 * float(np.max(np.abs(b), initial=1e-300))
    z = np.zeros(m)
    passive = np.zeros(m, dtype=bool)
    if start is not None and start.any():
        idx = np.flatnonzero(start)
        while idx.size:
            s = _solve(h, b, idx)
            if s.min() > 0:
                z[idx] = s
                passive[idx] = True
                break
            idx = idx[s > 0]
    for _ in range(3 * m):
        w = b - h @ z
        w[passive] = -np.inf
        j = int(np.argmax(w))
        if w[j] <= tol:
            break
        passive[j] = True
        while True:
            idx = np.flatnonzero(passive)
            s = _solve(h, b, idx)
            if s.min() > 0:
                z = np.zeros(m)
                z[idx] = s
                break
            old = z[idx]
            bad = s <= 0
            step = float(np.min(old[bad] / np.maximum(old[bad] - s[bad], 1e-300)))
            new = old + step * (s - old)
            drop = bad & (new <= 1e-14 * np.max(np.abs(new), initial=1e-300))
            if not drop.any():
                drop = bad & (new == new[bad].min())
            z = np.zeros(m)
            z[idx] = np.where(drop, 0.0, np.maximum(new, 0.0))
            passive[idx[drop]] = False
    return z, passive


def _solve(h: FloatArray, b: FloatArray, idx: IntArray) -> FloatArray:
    g = h[idx[:, None], idx]
    g.flat[:: idx.size + 1] *= 1.0 + 1e-11
    return np.asarray(np.linalg.solve(g, b[idx]), np.float64)


class _Cell(NamedTuple):
    """One noise model: reduced normal equations after the free columns, and the fit of the falling family."""

    memory: float
    ratio: float
    weights: FloatArray
    columns: FloatArray
    vectors: FloatArray
    gram: FloatArray
    rest: FloatArray
    const: float
    z: FloatArray
    passive: FloatArray
    rss: float
    log_like: float


def weigh(d: Design, start: tuple[float, float] | None = None) -> Evidence:
    """Compare the families of curves; see the head of this file.

    ``start``: memory share and ratio of the noise model that fitted best at the look before; the
    grid is explored from there and from white noise as far as models matter.
    """
    f, c, k, steps = d.free.shape[1], d.concave.shape[1], d.departures.shape[1], d.steps.shape[1]
    columns = np.concatenate((d.free, d.concave, d.departures, d.y[:, None]), axis=1)
    dof = d.x.shape[0] - f
    floor = 1e-6 * d.x.shape[0]
    penalty = np.diag(d.precision + 1e-12)

    def like(const: float, rss: FloatArray | float) -> FloatArray:
        return np.asarray(const - 0.5 * dof * np.log(np.maximum(rss, 0.0) + floor))

    grid = noise.Grid(d.x, d.variance, columns, d.witness)
    cells: dict[tuple[int, int], _Cell] = {}
    todo = [(0, 0), grid.nearest(start)]
    best = -np.inf
    warm: FloatArray | None = None
    while todo:
        at = todo.pop()
        if at in cells:
            continue
        memory, ratio, prior, vectors, z_columns, weights, logdet = grid.model(*at)
        gram = z_columns.T @ (weights[:, None] * z_columns)
        ff = gram[:f, :f] + penalty
        rest = gram[f:, f:] - gram[f:, :f] @ np.linalg.solve(ff, gram[:f, f:])
        const = float(prior - 0.5 * logdet - 0.5 * np.linalg.slogdet(ff)[1])
        z, passive = nnls(rest[:c, :c], rest[:c, -1], warm)
        warm = passive
        rss = float(rest[-1, -1] - rest[:c, -1] @ z)
        # how large a drift this model means, against what extensometers show
        drift = np.sqrt(max(rss, floor) / dof * ratio * grid.typical)
        const += noise.log_prior(drift, ratio)
        log_like = float(like(const, rss))
        cells[at] = _Cell(
            memory, ratio, weights, z_columns, vectors, gram, rest, const, z, passive, rss, log_like
        )
        best = max(best, log_like)
        if log_like > best - KEEP - 2.0:
            todo += grid.neighbours(*at)
    order = sorted(cells, key=lambda at: (-cells[at].log_like, at))
    total0 = noise.log_mean(np.array([cells[at].log_like for at in order]))
    # departures: hinges only before the onset, so that a hump is not taken for a rise
    smooth = np.arange(d.knots.size, c)
    sels = [
        np.concatenate((np.flatnonzero(d.knots < 1.0 - s), smooth, [c + j])) for j, s in enumerate(d.since)
    ]
    kept = [at for at in order[:MODELS] if cells[at].log_like > best - KEEP]
    # shorter stretches have more places: weighted by their length, as scan statistics are
    by_length = np.log(d.since / np.sum(d.since))
    l1 = np.full((len(kept), k), -np.inf)
    rss1 = np.full((len(kept), k), np.nan)
    for i, at in enumerate(kept):
        cell = cells[at]
        if i and noise.log_mean(l1[0] + by_length) - cells[kept[0]].log_like < QUIET:
            break
        g = cell.rest
        for j, sel in enumerate(sels):
            if i and l1[0, j] < np.max(l1[0]) - KEEP:
                continue  # an onset far from the best one under the best model
            z1, _ = nnls(g[sel[:, None], sel], g[sel, -1], np.append(cell.passive[sel[:-1]], True))
            rss1[i, j] = float(g[-1, -1] - g[sel, -1] @ z1)
            l1[i, j] = like(cell.const, rss1[i, j])
    per_onset = np.array([noise.log_mean(l1[:, j]) for j in range(k)])
    if np.isfinite(l1).any(axis=1).sum() == 1:
        against = float(noise.log_mean(l1[0] + by_length) - cells[kept[0]].log_like)
    else:
        against = float(noise.log_mean(per_onset + by_length) - total0)
    step = _step_gain(d, [cells[at] for at in kept[:3]], like) if against > QUIET and steps > 1 else 0.0
    j = int(np.argmax(per_onset))
    i = int(np.argmax(l1[:, j]))
    cell, sel = cells[kept[i]], sels[j]
    g = cell.rest
    z1, _ = nnls(g[sel[:, None], sel], g[sel, -1])
    # without a fall before the onset
    one = max(float(g[c + j, -1]), 0.0) ** 2 / float(g[c + j, c + j])
    fall_gain = float(l1[i, j] - like(cell.const, float(g[-1, -1]) - one))
    z = np.zeros(c + k)
    z[sel] = z1
    beta = np.linalg.solve(cell.gram[:f, :f] + penalty, cell.gram[:f, -1] - cell.gram[:f, f : f + c + k] @ z)
    mid = 0.5 * (d.x[1:] + d.x[:-1])
    rates = beta[1] + slopes(d, mid) @ z
    onset = 1.0 - float(d.since[j])
    least = int(np.argmin(np.where(mid > 0.02, rates, np.inf)))
    low = float(rates[least])
    shape = d.concave @ z[:c] + d.departures @ z[c:] + beta[1] * d.x
    tangent = float(np.interp(mid[least], d.x, shape)) + low * (1.0 - mid[least])
    safe = max(low, 1e-3 * float(np.max(np.abs(rates))), 1e-300)
    typical = float(np.median(d.variance))
    models = []
    for m, at in enumerate(kept[:4]):
        rss = rss1[m, j] if np.isfinite(rss1[m, j]) else cells[at].rss
        scale = max(rss / dof, 1e-6) * 1e-12
        weight = float(np.exp(np.clip(cells[at].log_like - best, -30.0, 0.0)))
        if np.isfinite(l1[m, j]):
            weight = float(np.exp(np.clip(l1[m, j] - np.max(l1[:, j]), -30.0, 0.0)))
        models.append((cells[at].memory * d.now, scale * cells[at].ratio * typical, scale, weight))
    table = np.array(models)
    table[:, 3] /= np.sum(table[:, 3])
    first = cells[order[0]]
    return Evidence(
        against - step, against, 1.0 - onset, fall_gain,
        float(np.mean(rates[mid < max(0.1 * onset, mid[2])])) / safe, float(rates[-1]) / safe,
        float(shape[-1] - tangent) * 1e-6, float(mid[least]), table, mid, rates * (1e-6 / d.now),
        (first.memory, first.ratio),
    )  # fmt: skip


def _step_gain(d: Design, cells: list[_Cell], like: Callable[[float, FloatArray], FloatArray]) -> float:
    """Return how much better [log] a falling rate fits where one test in ten has a step that nobody saw, of a
    size and at a place averaged over; never below zero."""
    f = d.free.shape[1]
    per_cell = []
    precision = (d.sd / d.step_sd) ** 2
    width = np.diff(d.x)[1:]
    place = width[:-1] + width[1:]
    place = np.log(place / np.sum(place))
    for cell in cells:
        idx = np.concatenate((np.arange(f), f + np.flatnonzero(cell.passive)))
        a = cell.gram[idx[:, None], idx].copy()
        a.flat[:: idx.size + 1] *= 1.0 + 1e-10
        a[np.arange(f), np.arange(f)] += d.precision + 1e-12
        turned = cell.vectors.T @ (d.steps / np.sqrt(d.variance)[:, None])
        weighted = cell.weights[:, None] * turned
        cross = cell.columns[:, idx].T @ weighted
        own = np.sum(turned * weighted, axis=0)
        t = np.linalg.solve(a, np.concatenate((cross, cell.gram[idx, -1][:, None]), axis=1))
        grad = weighted.T @ cell.columns[:, -1] - cross.T @ t[:, -1]
        size = own - np.sum(cross * t[:, :-1], axis=0)
        beside = np.sum(turned[:, :-1] * weighted[:, 1:], axis=0) - np.sum(cross[:, :-1] * t[:, 1:-1], axis=0)
        # a step inside a block leaves its mean anywhere between: two steps, before and after it
        size = size + precision
        product = size[:-1] * size[1:]
        det = np.maximum(product - beside**2, 1e-9 * product)
        both = grad[:-1] ** 2 * size[1:] + grad[1:] ** 2 * size[:-1] - 2.0 * grad[:-1] * grad[1:] * beside
        occam = -0.5 * np.log(det / (precision[:-1] * precision[1:]))
        per_cell.append(like(cell.const, cell.rss - both / det) + occam)
    table = np.array(per_cell)
    total0 = noise.log_mean(np.array([cell.log_like for cell in cells]))
    each = np.array([noise.log_mean(table[:, j]) for j in range(table.shape[1])])
    return float(np.logaddexp(0.0, np.log(UNSEEN) + noise.log_mean(each + place) - total0))


def slopes(d: Design, x: FloatArray) -> FloatArray:
    """Return the derivatives of concave columns and departures at ``x``."""
    tau = np.array(EXPONENTIALS)
    return np.concatenate(
        (
            np.where(x[:, None] > d.knots[None, :], -1.0, 0.0) / (1.0 - d.knots)[None, :],
            np.exp(-x[:, None] / tau[None, :]) / tau[None, :],
            2.0 * np.maximum(np.array(RAMPS)[None, :] - x[:, None], 0.0) / np.array(RAMPS)[None, :] ** 2,
            2.0 * np.maximum(x[:, None] - (1.0 - d.since)[None, :], 0.0) / (d.since**2)[None, :],
        ),
        axis=1,
    )
