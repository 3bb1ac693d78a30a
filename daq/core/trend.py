"""Plain questions to the ladder: does the rate rise, does it rise faster and faster, is it steady?

Cheap answers from moments and one local fit; what is asked of a verdict is weighed in ``core.evidence``.
"""

from __future__ import annotations

import numpy as np

from daq.core import estimate, ladder
from daq.records import FloatArray


def rising(r: FloatArray) -> bool:
    """Cheap screen: is the rate of any late stretch above that of the one before it by more than white noise
    alone would do? Drift only adds to that noise, and evidence enough for a verdict needs four of these
    standard errors: nothing is lost below two."""
    white = ladder.white_sd(r)
    if not np.isfinite(white):
        return True
    now = float(r[-1, ladder.T])
    t = r[:, ladder.T]
    for share in (0.05, 0.1, 0.2, 0.35):
        late = r[t > now * (1.0 - share)]
        early = r[(t <= now * (1.0 - share)) & (t > now * (1.0 - 2.0 * share))]
        if late.shape[0] >= 3 and early.shape[0] >= 3:
            (b1, s1), (b0, s0) = _slope(late), _slope(early)
            if b1 - b0 > 2.0 * white * np.sqrt(1.0 / s1 + 1.0 / s0):
                return True
    return False


def accelerates(r: FloatArray) -> bool:
    """Say whether the rate rose about as much from the middle to the last third as from the first to the
    middle."""
    t, now = r[:, ladder.T], float(r[-1, ladder.T])
    thirds = [r[(t > now * a) & (t <= now * b)] for a, b in ((0.0, 0.33), (0.33, 0.67), (0.67, 1.0))]
    if min(x.shape[0] for x in thirds) < 3:
        return False
    (r1, _), (r2, _), (r3, _) = (_slope(x) for x in thirds)
    return r3 - r2 >= 0.7 * (r2 - r1) and r3 > r2


def _slope(r: FloatArray) -> tuple[float, float]:
    """Return the slope of all scans in ``r`` and the sum of squares of their times."""
    w, x, y = r[:, ladder.N], r[:, ladder.T], r[:, ladder.E]
    n = float(np.sum(w))
    dx, dy = x - float(np.sum(w * x)) / n, y - float(np.sum(w * y)) / n
    sxx = float(np.sum(w * dx * dx) + np.sum(r[:, ladder.S_TT]))
    return float(np.sum(w * dx * dy) + np.sum(r[:, ladder.S_TE])) / sxx, sxx


def change_of_rate(r: FloatArray, models: FloatArray) -> tuple[float, float] | None:
    """Return the relative change of the rate over the last half of the time and its s.d., None if unknown."""
    now = float(r[-1, ladder.T])
    fit = estimate.polynomial(r, models, 0.5 * now, now, 2)
    if fit is None:
        return None
    c = fit.weights @ fit.coefs
    if c[1] <= 0:
        return None
    each = 4.0 * fit.coefs[:, 2] / fit.coefs[:, 1]
    change = float(fit.weights @ each)
    own = 16.0 * fit.covariances[:, 2, 2] / fit.coefs[:, 1] ** 2
    return change, float(np.sqrt(fit.weights @ (own + (each - change) ** 2)))
