"""Noise of an extensometer seen through block means: white plus drift, never one estimate of it.

The covariance of block means is s^2 (diag(1/n) + r K(tau)): white noise of single scans averaged, and a
stationary Ornstein-Uhlenbeck drift of memory tau, whose limit for long tau is a random walk. Neither tau
nor the ratio r can be pinned down while a test runs (a memory near the length of the record cannot be told
from creep), so every likelihood is averaged over a weighted grid of both. For each tau one eigenvalue
decomposition serves all ratios.

Two sides tell more than one. Half their difference holds the same noise as their mean (that of two
independent transducers) and no creep but bending, which follows the strain: a *witness* to the noise that
neither primary nor tertiary creep can be mistaken for. What drifts both sides alike it cannot see, so its
word counts for less than it would if the two were independent."""

from __future__ import annotations

from typing import Final, NamedTuple

import numpy as np

from daq.records import FloatArray

MEMORY_SHARES: Final = (0.01, 0.03, 0.1, 0.25, 0.5)
"""Memories as shares of the elapsed time: shorter ones act as white noise of a block, longer ones as a
random walk."""
RATIOS: Final = (0.5, 2.0, 8.0, 32.0, 128.0, 512.0, 2048.0)
"""Variance of the drift over that of a typical block mean: a factor of four apart."""


DRIFT: Final = 8.0
"""Middle of what drifts extensometers show [microstrain]: 0.2 um on 25 mm (common practice, no source)."""
DRIFT_SPREAD: Final = 1.0
"""And the s.d. of its logarithm: a factor of ten either way is hardly seen. A weak opinion, and it must be
one: in the first hours no record can tell a drift of hours from creep."""


WITNESS: Final = 0.7
"""Weight of the witness' log likelihood: sides share room, electronics and frame (common practice, no
source)."""


class Witness(NamedTuple):
    """Half the difference of the sides (n,) [microstrain] beside each block mean, and the columns (n, c) that
    it may follow: what bends the mean, the mean itself (bending), a fading start; ``precision`` (c,) as in
    ``evidence.Design``."""

    half: FloatArray
    columns: FloatArray
    precision: FloatArray


def log_prior(drift_microstrain: float, ratio: float) -> float:
    """Return the log prior weight of a drift of this s.d.; none at all counts as 0.2 microstrain."""
    drift = max(drift_microstrain, 0.2) if ratio > 0.0 else 0.2
    return -0.5 * float((np.log(drift / DRIFT) / DRIFT_SPREAD) ** 2)


class Model(NamedTuple):
    """One noise model: memory as a share of the elapsed time, ratio, log weight (of the grid, and what the
    witness says), eigenvectors (n, n), columns in that basis (n, c), inverse variances (n,), log
    determinant."""

    memory: float
    ratio: float
    prior: float
    vectors: FloatArray
    columns: FloatArray
    weights: FloatArray
    logdet: float


class Grid:
    """The grid of noise models of one look; decompositions are made when first asked for.

    Args:
        x: Times as shares of the elapsed time (n,), rising.
        variance: White variance of each block mean in units of one scan's (n,).
        columns: Regressors and data, one a column.
        witness: Half the difference of the sides, None where there is one side or none.

    Cells are (memory index, ratio index); ratio index 0 is white noise alone, the same for all memories.
    """

    def __init__(
        self, x: FloatArray, variance: FloatArray, columns: FloatArray, witness: Witness | None = None
    ) -> None:
        self._x = x
        self._witness = witness
        self._root = 1.0 / np.sqrt(variance)
        self._gap = np.abs(x[:, None] - x[None, :])
        self._scaled = columns * self._root[:, None]
        self._base = float(np.sum(np.log(variance)))
        self.typical = float(np.median(variance))
        self._known: dict[int, tuple[FloatArray, FloatArray, FloatArray]] = {}

    def model(self, i: int, j: int) -> Model:
        if j == 0:
            n = self._root.size
            heard = self._heard(np.eye(n), np.ones(n))
            return Model(MEMORY_SHARES[0], 0.0, heard, np.eye(n), self._scaled, np.ones(n), self._base)
        if i not in self._known:
            k = np.exp(-self._gap / MEMORY_SHARES[i]) * (
                self.typical * self._root[:, None] * self._root[None, :]
            )
            value, vector = np.linalg.eigh(k)
            self._known[i] = (np.maximum(value, 0.0), vector, vector.T @ self._scaled)
        value, vector, turned = self._known[i]
        spread = 1.0 + RATIOS[j - 1] * value
        weight = self._heard(vector, 1.0 / spread) - float(np.log(len(MEMORY_SHARES) * len(RATIOS)))
        logdet = self._base + float(np.sum(np.log(spread)))
        return Model(MEMORY_SHARES[i], RATIOS[j - 1], weight, vector, turned, 1.0 / spread, logdet)

    def _heard(self, vectors: FloatArray, weights: FloatArray) -> float:
        """Return the weighted log likelihood (restricted, scale profiled) of the witness; 0 without one."""
        w = self._witness
        if w is None:
            return 0.0
        n, c = w.columns.shape
        table = np.concatenate((w.columns, w.half[:, None]), axis=1) * self._root[:, None]
        turned = vectors.T @ table
        gram = turned.T @ (weights[:, None] * turned)
        own = gram[:c, :c] + np.diag(w.precision + 1e-10 * np.diag(gram)[:c] + 1e-12)
        rest = float(gram[-1, -1] - gram[:c, -1] @ np.linalg.solve(own, gram[:c, -1]))
        determinant = -float(np.sum(np.log(weights))) + float(np.linalg.slogdet(own)[1])
        scale = float(np.log(max(rest, 0.0) + 1e-6 * n))
        return float(-0.5 * WITNESS * (determinant + (n - c) * scale))

    def nearest(self, model: tuple[float, float] | None) -> tuple[int, int]:
        """Return the cell nearest to (memory share, ratio); the middle of the grid for None."""
        if model is None or model[1] <= 0.0:
            return len(MEMORY_SHARES) // 2, 1
        i = int(np.argmin(np.abs(np.log(np.array(MEMORY_SHARES) / model[0]))))
        j = int(np.argmin(np.abs(np.log(np.array(RATIOS) / model[1]))))
        return i, j + 1

    def neighbours(self, i: int, j: int) -> list[tuple[int, int]]:
        """Return the cells beside (i, j)."""
        if j == 0:
            return [(m, 1) for m in range(len(MEMORY_SHARES))]
        near = [(i - 1, j), (i + 1, j), (i, j + 1), (i, j - 1) if j > 1 else (0, 0)]
        return [(m, r) for m, r in near if 0 <= m < len(MEMORY_SHARES) and r <= len(RATIOS)]


def log_mean(terms: FloatArray) -> float:
    """Return log(sum(exp(terms))) without overflow."""
    top = float(np.max(terms))
    return top + float(np.log(np.sum(np.exp(terms - top))))
