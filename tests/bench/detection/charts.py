"""Control charts that the comparison uses: CUSUM, EWMA, Page-Hinkley, and their run lengths by simulation.

Recursions along the last axis, for any number of series at once. Input in units of the standard deviation
where a design says so. Nothing here is used by the program itself: on creep rates, whose noise has memory,
these charts do not keep the run length that their tables promise; ``run_lengths.py`` shows by how much.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

Array = npt.NDArray[np.float64]
CHUNK = 128
"""Readings that a simulation draws at once for every run that has not alarmed yet."""


def cusum(z: Array, k: float, start: float | Array = 0.0) -> Array:
    """Return the upper CUSUM S(i) = max(0, S(i-1) + z(i) - k), S(0) = ``start``; the lower one is that of -z.

    Page 1954, doi:10.1093/biomet/41.1-2.100. Computed as the random walk less its least value so far (or
    zero), which is the same number without a loop.
    """
    walk = np.cumsum(z - k, axis=-1) + np.asarray(start)[..., None]
    return np.asarray(walk - np.minimum(np.minimum.accumulate(walk, axis=-1), 0.0))


def cusum_since(z: Array, k: float) -> npt.NDArray[np.int64]:
    """Return N(i), how many readings ago S was last zero: the change is dated after reading i - N(i)."""
    i = np.arange(z.shape[-1])
    zero = np.where(cusum(z, k) <= 0.0, i, -1)
    return np.asarray(i - np.maximum.accumulate(zero, axis=-1))


def page_hinkley(x: Array, mean: float, delta: float) -> Array:
    """Return m(i) - M(i): m the sum of x - mean - delta, M its least value, the starting zero included.

    Hinkley 1971, doi:10.1093/biomet/58.3.509, known mean, nothing forgotten.
    """
    m = np.cumsum(x - mean - delta, axis=-1)
    least = np.minimum.accumulate(np.concatenate([np.zeros((*m.shape[:-1], 1)), m], axis=-1), axis=-1)
    return np.asarray(m - least[..., 1:])


def ewma(x: Array, weight: float, start: float | Array = 0.0) -> Array:
    """Return Z(i) = weight x(i) + (1 - weight) Z(i-1), Z(0) = ``start`` (Roberts 1959)."""
    first = np.broadcast_to(
        (1.0 - weight) * np.asarray(start, dtype=np.float64)[..., None], (*x.shape[:-1], 1)
    )
    out, _ = lfilter([weight], [1.0, weight - 1.0], x, axis=-1, zi=first)
    return np.asarray(out)


def ewma_spread(weight: float, n: int | None = None) -> float | Array:
    """Return the standard deviation of Z in units of that of x: in the long run, or of Z(1) .. Z(n)."""
    settled = (weight / (2.0 - weight)) ** 0.5
    if n is None:
        return float(settled)
    return np.asarray(settled * np.sqrt(1.0 - (1.0 - weight) ** (2.0 * np.arange(1, n + 1))))


def first_above(statistic: Array, threshold: float) -> int | None:
    """Return the index of the first value of a series above ``threshold``, or None."""
    above = np.flatnonzero(statistic > threshold)
    return int(above[0]) if above.size else None


@dataclass(frozen=True)
class CusumDesign:
    """CUSUM of reference value ``k`` and decision interval ``h``, both in standard deviations."""

    k: float
    h: float
    two_sided: bool = True
    head_start: float = 0.0

    def begin(self, runs: int) -> Array:
        """Return the state of so many charts at their start, shape (runs, sides)."""
        return np.full((runs, 2 if self.two_sided else 1), self.head_start)

    def follow(self, state: Array, z: Array) -> tuple[Array, npt.NDArray[np.bool_]]:
        """Return the state after the readings ``z``, shape (runs, n), and where each chart alarms."""
        sides = [cusum(sign * z, self.k, state[:, i]) for i, sign in enumerate((1.0, -1.0)[: state.shape[1]])]
        return np.stack([s[:, -1] for s in sides], axis=1), np.max(sides, axis=0) > self.h


@dataclass(frozen=True)
class EwmaDesign:
    """Two-sided EWMA with fixed limits of ``limit`` of its long-run standard deviations."""

    weight: float
    limit: float

    def begin(self, runs: int) -> Array:
        """Return the state of so many charts at their start, shape (runs,)."""
        return np.zeros(runs)

    def follow(self, state: Array, z: Array) -> tuple[Array, npt.NDArray[np.bool_]]:
        """Return the state after the readings ``z``, shape (runs, n), and where each chart alarms."""
        out = ewma(z, self.weight, state)
        return out[:, -1], np.abs(out) > self.limit * ewma_spread(self.weight)


def run_lengths(
    design: CusumDesign | EwmaDesign,
    runs: int,
    seed: int | Any,
    shift: float = 0.0,
    phi: float = 0.0,
    most: int = 1_000_000,
) -> npt.NDArray[np.int64]:
    """Return how many readings each of ``runs`` simulated charts took to its first alarm.

    Readings are normal with mean ``shift`` and unit variance, first-order autocorrelated with coefficient
    ``phi`` and stationary from the first on; a chart knows mean and variance and nothing of ``phi``. A run
    is cut at ``most`` readings.
    """
    rng = np.random.default_rng(seed)
    out = np.full(runs, most, dtype=np.int64)
    going = np.arange(runs)
    state = design.begin(runs)
    last = rng.standard_normal(runs)
    done = 0
    while going.size and done < most:
        shocks = (1.0 - phi * phi) ** 0.5 * rng.standard_normal((going.size, CHUNK))
        x, _ = lfilter([1.0], [1.0, -phi], shocks, axis=-1, zi=phi * last[:, None])
        state, alarm = design.follow(state, x + shift)
        hit = alarm.any(axis=1)
        out[going[hit]] = np.minimum(done + 1 + alarm[hit].argmax(axis=1), most)
        going, state, last = going[~hit], state[~hit], x[~hit, -1]
        done += CHUNK
    return out
