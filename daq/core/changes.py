"""Has a series of block means changed for good, by how much, since when, and how sure is that?

Least squares of one shape beside known regressors, over steps and ramps that begin and end at shares of the
elapsed time. The error is that of noise with a memory, because neighbours of a slow disorder look alike.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from daq.records import FloatArray

Z90: Final = 1.645
MOST_MEMORY: Final = 0.97
BATCHES: Final = 10
PLACES: Final = (0.0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.98, 1.0)
"""Where changes are sought to begin and end, shares of the elapsed time."""


@dataclass(frozen=True, slots=True)
class Change:
    """A change for good of one series: its size at the end, its standard error, its shape and its start."""

    size: float
    se: float
    shape: FloatArray
    since_h: float

    @property
    def sure(self) -> float:
        return abs(self.size) / self.se


def best_change(t_h: FloatArray, y: FloatArray, base: FloatArray) -> Change | None:
    """Return the change for good that explains ``y`` (n,) best beside ``base`` (n, p), of those that begin
    and end at tenths of the time, closer near now, at once or as a ramp."""
    tenths = np.quantile(t_h, PLACES)
    pairs = [(a, b) for i, a in enumerate(tenths) for b in tenths[i:] if a < tenths[-1] and b > tenths[0]]
    begin_h, end_h = (np.array(p) for p in zip(*pairs, strict=True))
    long = np.maximum(end_h - begin_h, 1e-9 * float(t_h[-1]))
    shapes = np.clip((t_h[:, None] - begin_h) / long, 0.0, 1.0)
    q = _basis(base)
    left = shapes - q @ (q.T @ shapes)
    power = np.einsum("ij,ij->j", left, left)
    whole = np.einsum("ij,ij->j", shapes - shapes.mean(axis=0), shapes - shapes.mean(axis=0))
    rest = y - q @ (q.T @ y)
    sizes = (left.T @ rest) / np.maximum(power, 1e-300)
    gained = np.where(power > 0.05 * whole, sizes * sizes * power, -1.0)
    k = int(np.argmax(gained))
    if gained[k] <= 0.0:
        return None
    error = _error(rest - sizes[k] * left[:, k], base.shape[1] + 3)
    return Change(float(sizes[k]), error / math.sqrt(float(power[k])), shapes[:, k], float(begin_h[k]))


def fixed_change(shape: FloatArray, base: FloatArray, y: FloatArray) -> tuple[float, float] | None:
    """Return the coefficient of ``shape`` (n,) in ``y`` beside ``base`` and its standard error."""
    q = _basis(base)
    left = shape - q @ (q.T @ shape)
    power = float(left @ left)
    if power <= 1e-12 * float(shape @ shape):
        return None
    rest = y - q @ (q.T @ y)
    size = float(left @ rest) / power
    return size, _error(rest - size * left, base.shape[1] + 1) / math.sqrt(power)


def _basis(base: FloatArray) -> FloatArray:
    """Return orthonormal columns that span ``base``; one that others make up (a display that stood still
    all the time) spans nothing, and its arbitrary direction must not be taken off."""
    q, r = np.linalg.qr(base)
    real = np.abs(np.diag(r)) > 1e-9 * np.sqrt(np.einsum("ij,ij->j", base, base))
    return np.asarray(q[:, real])


def _error(e: FloatArray, used: int) -> float:
    """Return the standard deviation that counts for slow shapes, the larger one of two.

    Residual scatter times the root of the long-run variance of first-order noise, (1 + r)/(1 - r), with r
    from neighbours and the bias of a short series taken out (Marriott and Pope 1954,
    doi:10.1093/biomet/41.3-4.390, from memory); and the scatter of the means of tenths (batch means), which
    sees a memory that white noise hides from neighbours.
    """
    n = e.size
    power = float(e @ e)
    if power <= 0.0:
        return 1e-12
    r = float(e[1:] @ e[:-1]) / power
    r = min(max(r + (1.0 + 3.0 * r + used) / n, 0.0), MOST_MEMORY)
    near = power / max(n - used, 1) * (1.0 + r) / (1.0 - r)
    edges = np.arange(BATCHES) * n // BATCHES
    size = np.diff(np.append(edges, n))
    means = np.add.reduceat(e, edges) / size
    far = float(size @ (means * means)) / max(BATCHES - used, 3)
    return math.sqrt(max(near, far))
