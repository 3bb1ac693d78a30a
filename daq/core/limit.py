"""The best possible delay of a tertiary detection: what no method can beat at a given error share.

For a true curve y(t) and a noise covariance C the energy up to T is

    E(T) = min over all f whose rate never rises of (y - f)' C^-1 (y - f),   scans up to T,

the squared distance to the nearest curve of primary and secondary creep alone. A sequential test that
is false in at most a share alpha of all tests may act once the likelihood ratio reaches 1/alpha (Ville
1939), hence no earlier than E(T) = 2 ln(1/alpha). E never falls with T.

Worked out from the dual side. With D the second divided differences at the scans ("rate rises" where
(D y) > 0) the problem is: minimise the distance subject to D f <= 0, and its dual is

    E = max over lambda >= 0 of 2 lambda' D y - lambda' (D C D') lambda.

That needs no inverse of C, takes intercept and slope out by itself, is well behaved through a steep
primary (lambda is zero there), and scans up to an earlier T are simply the leading part of the same matrix:
monotone in T by construction. Solved by block principal pivoting (Portugal, Judice & Vicente 1994,
doi:10.1090/S0025-5718-1994-1250776-4) with single pivots as the fall-back that always ends.

Thousands of scans are first put into a few hundred blocks; a block counts as one reading at its mean
time whose noise is the mean of its scans'. The true curve is taken *at* that time, not averaged, since
averages of a concave curve over uneven blocks are not concave.

Inverse primary: "never rises" is meant from the end of the incubation on; pass the scans after it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
import numpy.typing as npt

from daq.records import CoreError, FloatArray, IntArray

BoolArray = npt.NDArray[np.bool_]

BLOCKS: Final = 180
"""Blocks that a record is put into. Twice as many moved the delay by at most 0.3 % on forty varied rigs.

Small matrices also keep threaded LAPACK from slowing things down on a busy machine."""
REFINED_SHARE: Final = 0.6
"""Share of the blocks that the second pass spends from the least rate to a little after the first answer."""
_MAX_BLOCK_PIVOTS: Final = 10
_TOLERANCE: Final = 1e-9


@dataclass(frozen=True, slots=True)
class Noise:
    """Noise of one strain reading.

    Args:
        white: Standard deviation from scan to scan [1], >= 0.
        count: Step of the converter [1]; its error counts as uniform, variance count^2/12.
        drifts: (standard deviation [1], memory [s]) of each first-order (Ornstein-Uhlenbeck) process.
    """

    white: float
    count: float = 0.0
    drifts: tuple[tuple[float, float], ...] = ()

    def __post_init__(self) -> None:
        if not (self.white >= 0.0 and self.count >= 0.0):
            raise CoreError(f"noise: got white {self.white}, count {self.count}, wanted >= 0")
        for sd, memory_s in self.drifts:
            if not (sd >= 0.0 and memory_s > 0.0):
                raise CoreError(f"noise.drifts: got ({sd}, {memory_s}), wanted sd >= 0 and memory > 0 s")
        if self.scan_variance + sum(sd for sd, _ in self.drifts) <= 0.0:
            raise CoreError("noise: got none at all, wanted some; without noise there is no limit")

    @property
    def scan_variance(self) -> float:
        """Return the variance that is independent from scan to scan."""
        return self.white**2 + self.count**2 / 12.0


def level_for(false_share: float) -> float:
    """Return the energy 2 ln(1/alpha) at which a test false in a share ``false_share`` may act.

    Raises:
        CoreError: ``false_share`` is not in (0, 1).
    """
    if not 0.0 < false_share < 1.0:
        raise CoreError(f"limit: got false share {false_share}, wanted in (0, 1)")
    return 2.0 * math.log(1.0 / false_share)


def energy(t_s: FloatArray, strain: FloatArray, noise: Noise, ends_s: FloatArray) -> FloatArray:
    """Return E(T) for each T of ``ends_s`` (any order), all on one set of blocks: never falling with T.

    Args:
        t_s: Scan times [s], shape (n,), not falling, n >= 1. Where temperature bends the rate, pass the
            temperature-equivalent time, and T in it too.
        strain: True strain at those times [1], without noise, shape (n,).
        noise: The true noise of a scan.
        ends_s: Times up to which scans count [s], shape (m,).

    Raises:
        CoreError: shapes differ, times fall, or a value is not finite.
    """
    t_s, strain = _checked(t_s, strain)
    ends = np.asarray(ends_s, dtype=np.float64)
    inner = np.unique(ends[(ends > t_s[0]) & (ends < t_s[-1])])
    edges = np.union1d(np.linspace(t_s[0], t_s[-1], BLOCKS + 1), np.nextafter(inner, np.inf))
    problem = _Problem(t_s, strain, noise, edges)
    out = np.zeros(ends.shape)
    for i in range(ends.size):
        blocks = int(np.searchsorted(problem.last_s, ends[i], side="right"))
        out[i] = problem.solve(blocks)
    return out


def detectable_at(t_s: FloatArray, strain: FloatArray, noise: Noise, level: float) -> float | None:
    """Return the earliest time at which E reaches ``level``, or None if it never does.

    Two passes: evenly spread blocks find the neighbourhood, then blocks that are fine between the least
    rate and there. Between the ends of two blocks E is taken as a power of time. Costs 0.02-0.1 s.

    Args:
        t_s, strain, noise: As in :func:`energy`; the answer is in the same time as ``t_s``.
        level: Energy asked for, > 0; :func:`level_for` gives it.
    """
    t_s, strain = _checked(t_s, strain)
    if not level > 0.0:
        raise CoreError(f"limit: got level {level}, wanted > 0")
    first = _crossing(_Problem(t_s, strain, noise, np.linspace(t_s[0], t_s[-1], BLOCKS + 1)), level)
    if first is None:
        return None
    found_s, begin_s = first
    span = found_s - begin_s
    low, high = max(begin_s - 0.3 * span, t_s[0]), min(found_s + 0.3 * span, t_s[-1])
    fine = int(REFINED_SHARE * BLOCKS)
    edges = np.union1d(np.linspace(low, high, fine), np.linspace(t_s[0], t_s[-1], BLOCKS - fine))
    second = _crossing(_Problem(t_s, strain, noise, edges), level)
    return found_s if second is None else second[0]


def _checked(t_s: FloatArray, strain: FloatArray) -> tuple[FloatArray, FloatArray]:
    t = np.asarray(t_s, dtype=np.float64)
    y = np.asarray(strain, dtype=np.float64)
    if t.ndim != 1 or t.shape != y.shape or t.size == 0:
        raise CoreError(f"limit: got times {t.shape} and strains {y.shape}, wanted two equal (n,), n >= 1")
    if not (np.isfinite(t).all() and np.isfinite(y).all()):
        raise CoreError("limit: got a time or strain that is not finite")
    if np.any(np.diff(t) < 0.0):
        raise CoreError("limit: got times that fall, wanted them in order")
    return t, y


def _crossing(problem: _Problem, level: float) -> tuple[float, float] | None:
    """Return (time at which E crosses ``level``, time of the least rate before), by bisection over blocks."""
    low, high = 2, problem.mean_s.size
    top = problem.solve(high)
    if top < level:
        return None
    bottom = 0.0
    while high - low > 1:
        middle = (low + high) // 2
        e = problem.solve(middle)
        if e < level:
            low, bottom = middle, e
        else:
            high, top = middle, e
    begin = float(problem.mean_s[int(np.argmin(problem.slope[: high - 1]))])
    from_s, to_s = float(problem.last_s[low - 1]), float(problem.last_s[high - 1])
    begin = min(begin, from_s)
    if bottom <= 0.0 or from_s <= begin:
        return to_s, begin
    # between two block ends ln E is close to linear in ln(time since the least rate)
    power = math.log((to_s - begin) / (from_s - begin)) / math.log(top / bottom)
    return begin + (from_s - begin) * (level / bottom) ** power, begin


class _Problem:
    """The dual problem on one set of blocks; ``solve`` for any number of leading blocks."""

    def __init__(self, t_s: FloatArray, strain: FloatArray, noise: Noise, edges_s: FloatArray) -> None:
        block = np.clip(np.searchsorted(edges_s, t_s, side="right") - 1, 0, edges_s.size - 2)
        starts: IntArray = np.flatnonzero(np.diff(block, prepend=-1)).astype(np.int64)
        counts = np.diff(starts, append=t_s.size).astype(np.float64)
        mean_s = np.add.reduceat(t_s, starts) / counts
        keep = np.diff(mean_s, prepend=-np.inf) > 1e-12 * max(1.0, abs(float(t_s[-1])))
        self.mean_s: FloatArray = mean_s[keep]
        first_s = t_s[starts][keep]
        self.last_s: FloatArray = t_s[np.append(starts[1:], t_s.size) - 1][keep]
        counts = counts[keep]
        y = np.interp(self.mean_s, t_s, strain)
        gaps = np.diff(self.mean_s)
        self.slope: FloatArray = np.diff(y) / gaps if gaps.size else np.full(1, np.nan)
        covariance = block_covariance(first_s, self.last_s, counts, noise)
        left, right = 1.0 / gaps[:-1], 1.0 / gaps[1:]
        # rows of D: left y[k] - (left + right) y[k+1] + right y[k+2]; scaled to ones on D C D' diagonal
        dc = left[:, None] * covariance[:-2] - (left + right)[:, None] * covariance[1:-1]
        dc += right[:, None] * covariance[2:]
        dcd = dc[:, :-2] * left - dc[:, 1:-1] * (left + right) + dc[:, 2:] * right
        scale = 1.0 / np.sqrt(np.diagonal(dcd))
        self._matrix: FloatArray = dcd * scale * scale[:, None]
        self._rises: FloatArray = np.diff(self.slope) * scale

    def solve(self, blocks: int) -> float:
        """Return E of the first ``blocks`` blocks."""
        n = max(blocks - 2, 0)
        rises = self._rises[:n]
        if n == 0 or not np.any(rises > 0.0):
            return 0.0
        matrix = self._matrix[:n, :n]
        return float(_pivot(matrix, rises, _last_stretch(matrix, rises)) @ rises)


def _last_stretch(matrix: FloatArray, rises: FloatArray) -> BoolArray:
    """Guess where lambda > 0: one stretch that reaches up to the end, as on curves with one minimum.

    With the indices turned round, one Cholesky factor holds the solutions of all such stretches; the one
    more index that a stretch takes in has lambda = z/L with the sign of z, so the first z <= 0 ends it.
    """
    factor = np.linalg.cholesky(matrix[::-1, ::-1])
    z = np.linalg.solve(factor, rises[::-1])
    falling = np.flatnonzero(z <= 0.0)
    length = int(falling[0]) if falling.size else rises.size
    free = np.zeros(rises.size, dtype=bool)
    free[rises.size - length :] = True
    return free


def _pivot(matrix: FloatArray, rises: FloatArray, free: BoolArray) -> FloatArray:
    """Solve lambda >= 0, w = matrix lambda - rises >= 0, lambda' w = 0 by block principal pivoting."""
    n = rises.size
    fewest, tries = n + 1, _MAX_BLOCK_PIVOTS
    zero = _TOLERANCE * float(np.abs(rises).max())
    weights = np.zeros(n)
    for _ in range(50 * n + 100):
        inside = np.flatnonzero(free)
        weights = np.zeros(n)
        if inside.size:
            weights[inside] = np.linalg.solve(matrix[np.ix_(inside, inside)], rises[inside])
        # not ``@``: threaded BLAS costs a hundred times the work for a product this small on a busy machine
        slack = np.einsum("ij,j->i", matrix, weights) - rises
        least = -_TOLERANCE * float(np.abs(weights).max())
        wrong = np.where(free, weights < least, slack < -zero)
        count = int(wrong.sum())
        if count == 0:
            return np.maximum(weights, 0.0)
        if count < fewest:
            fewest, tries = count, _MAX_BLOCK_PIVOTS
            free = free ^ wrong
        elif tries > 0:
            tries -= 1
            free = free ^ wrong
        else:
            last = int(np.flatnonzero(wrong)[-1])
            free = free.copy()
            free[last] = not free[last]
    raise CoreError(f"limit: got no solution for {n} blocks, wanted one; the noise covariance is degenerate")


def block_covariance(first_s: FloatArray, last_s: FloatArray, counts: FloatArray, noise: Noise) -> FloatArray:
    """Return the covariance (k, k) of block means; scans count as evenly spread within their block."""
    out: FloatArray = np.diag(noise.scan_variance / counts)
    gap = np.maximum(first_s[None, :] - last_s[:, None], 0.0)
    for sd, memory_s in noise.drifts:
        spacing = (last_s - first_s) / np.maximum(counts - 1.0, 1.0) / memory_s
        gone = -np.expm1(-spacing)  # 1 - a, a the correlation of neighbours
        a = np.exp(-spacing)
        whole = -np.expm1(-counts * spacing)  # 1 - a^n
        # the closed sums cancel where n spacing is small; there their first-order series is as good
        flat = counts * spacing < 1e-4
        safe = np.where(flat, 1.0, counts * gone)
        share = np.where(flat, 1.0 - 0.5 * (counts - 1.0) * spacing, whole / safe)
        within = (1.0 + a) / safe - 2.0 * a * whole / safe**2
        within = np.where(flat, 1.0 - (counts - 1.0 / counts) * spacing / 3.0, within)
        upper = np.triu(share[:, None] * share[None, :] * np.exp(-gap / memory_s), 1)
        out += sd**2 * (upper + upper.T + np.diag(within))
    return out
