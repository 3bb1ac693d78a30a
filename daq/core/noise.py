"""Noise of an extensometer seen through block means: white plus drift, never one estimate of it.

The covariance of block means is s^2 (diag(1/n) + r K(tau)): white noise of single scans averaged, and a
stationary Ornstein-Uhlenbeck drift of memory tau, whose limit for long tau is a random walk. Neither tau
nor the ratio r can be pinned down while a test runs (a memory near the length of the record cannot be told from
creep), so every likelihood is averaged over a weighted grid of both. For each tau one eigenvalue
decomposition serves all ratios.
"""

from __future__ import annotations

from typing import Final, NamedTuple

import numpy as np

from daq.records import FloatArray

MEMORY_SHARES: Final = (0.01, 0.03, 0.1, 0.25, 0.5)
"""Memories as shares of the elapsed time: shorter ones act as white noise of a block, longer ones as a random walk."""
RATIOS: Final = (0.5, 2.0, 8.0, 32.0, 128.0, 512.0, 2048.0)
"""Variance of the drift over that of a typical block mean: a factor of four apart."""


class Whitened(NamedTuple):
    """Columns in the eigenbasis of one memory, for all ratios.

    ``columns`` (n, c); ``weights`` (r, n) inverse variances; ``logdet`` (r,); ``prior`` (r,) log weights;
    ``ratios`` (r,), ``memory`` share of the elapsed time.
    """

    columns: FloatArray
    weights: FloatArray
    logdet: FloatArray
    prior: FloatArray
    ratios: FloatArray
    memory: float


def whiten(x: FloatArray, variance: FloatArray, columns: FloatArray) -> list[Whitened]:
    """Return ``columns`` (n, c) whitened for each memory of the grid.

    Args:
        x: Times as shares of the elapsed time (n,), rising.
        variance: White variance of each block mean in units of one scan's (n,).
        columns: Regressors and data, one a column.
    """
    typical = float(np.median(variance))
    root = 1.0 / np.sqrt(variance)
    gap = np.abs(x[:, None] - x[None, :])
    grid: list[Whitened] = []
    ratios = np.array(RATIOS)
    share = np.log(0.5 / (len(MEMORY_SHARES) * len(RATIOS)))
    scaled = columns * root[:, None]
    base = float(np.sum(np.log(variance)))
    for i, memory in enumerate(MEMORY_SHARES):
        k = np.exp(-gap / memory) * (typical * root[:, None] * root[None, :])
        value, vector = np.linalg.eigh(k)
        value = np.maximum(value, 0.0)
        r = ratios
        prior = np.full(len(ratios), share)
        if i == 0:  # white alone belongs to every memory: said once, with half of the weight
            r = np.concatenate(([0.0], ratios))
            prior = np.concatenate(([np.log(0.5)], prior))
        spread = 1.0 + r[:, None] * value[None, :]
        grid.append(
            Whitened(vector.T @ scaled, 1.0 / spread, base + np.sum(np.log(spread), axis=1), prior, r, memory)
        )
    return grid


def log_mean(terms: FloatArray) -> float:
    """Return log(sum(exp(terms))) without overflow."""
    top = float(np.max(terms))
    return top + float(np.log(np.sum(np.exp(terms - top))))
