"""The most likely curve whose rate falls to a least value and rises from there: where the least rate lies.

Non-negative least squares on concave columns before a turning point and convex hinges after it, in the
metric of one noise model, the turning point on a grid. A shape held so strictly cannot be led to a false
least rate by the noise of short stretches, as the least of many local slopes always is."""

from __future__ import annotations

from typing import Final

import numpy as np

from daq.core import estimate, evidence, ladder
from daq.records import FloatArray

TURNS: Final = 16
"""Turning points tried, evenly spread over the blocks."""
FAR: Final = 2.5
"""The curve is fitted up to where the rate is this many times the least: beyond, a blunt shape would bend
the rest."""


def unimodal(rungs: FloatArray, models: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return times [h] between blocks and the rates there [1/h] of the most likely falling-then-rising curve.

    Args:
        rungs: Ladder, (n, COLUMNS), n >= 8.
        models: Noise models, (k, 4); the heaviest is used.
    """
    t, coarse, _ = estimate.coarse_rates(rungs, 0.06)
    least = int(np.argmin(np.where(np.arange(t.size) > 0, coarse, np.inf)))
    far = np.flatnonzero(
        coarse[least:] > FAR * max(float(coarse[least]), 0.3 * float(np.median(np.abs(coarse))))
    )
    r = rungs.copy()
    if far.size and least + far[0] + 1 < t.size:
        inside = rungs[:, ladder.T] <= t[least + far[0]]
        if np.count_nonzero(inside) >= 12:
            r = rungs[inside].copy()
    r[:, ladder.U] = r[:, ladder.T]
    room = bool(np.isfinite(r[:, ladder.ROOM0]).all())
    temp = bool(np.isfinite(r[:, ladder.TEMP]).all())
    d = evidence.design(r, has_temperature=temp, has_room=room)
    memory, drift, white, _ = models[int(np.argmax(models[:, 3]))]
    hours = d.x * d.now
    v = drift * np.exp(-np.abs(hours[:, None] - hours[None, :]) / max(memory, 1e-9)) * 1e12
    v += np.diag(d.variance * white * 1e12 + 0.04)
    root = np.linalg.inv(np.linalg.cholesky(v))
    convex = np.concatenate((-d.concave[:, : d.knots.size], d.departures), axis=1)
    begins = np.concatenate((d.knots, 1.0 - d.since))
    y = root @ d.y
    free = root @ d.free
    q, _ = np.linalg.qr(free)

    def left(c: FloatArray) -> FloatArray:
        turned = root @ c
        out: FloatArray = turned - q @ (q.T @ turned)
        return out

    concave, convex_left = left(d.concave), left(convex)
    y = y - q @ (q.T @ y)
    ends = np.concatenate((4.0 * np.array(evidence.EXPONENTIALS), np.array(evidence.RAMPS)))
    best: tuple[float, FloatArray, FloatArray] | None = None
    for turn in d.x[np.linspace(2, d.x.size - 2, TURNS).astype(np.int64)]:
        # smooth columns that still bend after the turn would undo the order of falling and rising
        before = np.concatenate((d.knots < turn, ends <= turn))
        after = begins >= turn
        columns = np.concatenate((concave[:, before], convex_left[:, after]), axis=1)
        h, b = columns.T @ columns, columns.T @ y
        z, _ = evidence.nnls(h, b)
        rss = float(y @ y - b @ z)
        if best is None or rss < best[0]:
            full = np.zeros(d.concave.shape[1])
            full[before] = z[: int(before.sum())]
            rise = np.zeros(begins.size)
            rise[after] = z[int(before.sum()) :]
            best = (rss, full, rise)
    assert best is not None
    _, full, rise = best
    whole = d.concave @ full + convex @ rise
    beta = np.linalg.lstsq(free, root @ (d.y - whole), rcond=None)[0]
    mid = 0.5 * (d.x[1:] + d.x[:-1])
    slopes = evidence.slopes(d, mid)
    c = d.concave.shape[1]
    rising = np.concatenate((-slopes[:, : d.knots.size], slopes[:, c:]), axis=1)
    rates = beta[1] + slopes[:, :c] @ full + rising @ rise
    return mid * d.now, rates * (1e-6 / d.now)
