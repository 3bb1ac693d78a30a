"""What could have been known at best about the least rate of a rig whose truth is known.

The yardstick is a straight line laid by generalised least squares, under the true noise covariance, over the
stretch in which the true rate is within 2 % of its least: longer stretches bend, shorter ones waste scans.
Its standard error is that of the best linear unbiased estimate (Aitken 1935) had one known the stretch
and the noise. Time is equivalent time, so that a furnace wander does not count as bending.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np

from daq.core import limit
from daq.core.rules import GAS_CONSTANT_J_PER_MOL_K, ZERO_C_IN_K
from daq.records import FloatArray
from simulator.rig import Run

WITHIN: Final = 0.02
BLOCKS: Final = 200
GRID: Final = 4001
LEAST_SCANS: Final = 3


def limit_noise(run: Run) -> limit.Noise:
    """Return the rig's true noise in seconds, as the bounds of ``core.limit`` want it."""
    noise = run.truth.noise
    return limit.Noise(noise.white, noise.count, tuple((sd, m * 3600.0) for sd, m in noise.drifts))


def slope_error(t_s: FloatArray, noise: limit.Noise) -> float | None:
    """Return the standard error [1/s] of the slope through scans at ``t_s`` [s] (n,), not falling.

    None with fewer than three scans or no spread of time. Scans go into at most ``BLOCKS`` blocks.
    """
    if t_s.size < LEAST_SCANS or t_s[-1] <= t_s[0]:
        return None
    starts = np.unique(np.linspace(0, t_s.size, min(BLOCKS, t_s.size) + 1).astype(np.int64))[:-1]
    counts = np.diff(starts, append=t_s.size).astype(np.float64)
    mean_s = np.add.reduceat(t_s, starts) / counts
    last_s = t_s[np.append(starts[1:], t_s.size) - 1]
    covariance = limit.block_covariance(t_s[starts], last_s, counts, noise)
    scale = float(np.trace(covariance)) / starts.size  # for the solver's sake: variances here are 1e-12
    span = t_s[-1] - t_s[0]
    line = np.column_stack((np.ones(starts.size), (mean_s - t_s[0]) / span))
    weighed = line.T @ np.linalg.solve(covariance / scale, line)
    return math.sqrt(scale * float(np.linalg.inv(weighed)[1, 1])) / float(span)


def stretch(run: Run) -> tuple[float, float]:
    """Return from and to [h, equivalent time] between which the true rate is within 2 % of its least."""
    truth = run.truth
    smooth = run.spec.creep.envelope
    end = float(truth.equivalent_h[-1])
    at = min(max(float(np.interp(truth.minimum_h, truth.t_h, truth.equivalent_h)), 0.0), end)
    # points that crowd around the least rate: the stretch may be a small share of the record
    power = np.linspace(0.0, 1.0, GRID) ** 3
    after, before = at + (end - at) * power, at * (1.0 - power)
    most = (1.0 + WITHIN) * truth.minimum_rate_per_h
    begin = max(truth.incubation_h, 0.0)
    inside_after = np.logical_and.accumulate(smooth.rate(after) <= most)
    inside_before = np.logical_and.accumulate((smooth.rate(before) <= most) & (before >= min(begin, at)))
    low = before[inside_before][-1] if inside_before.any() else at
    high = after[inside_after][-1] if inside_after.any() else at
    return float(low), float(high)


def least_rate_error(run: Run, equivalent_h: FloatArray) -> tuple[float, float] | None:
    """Return the best possible standard error [1/h] of the least rate, and what bending adds to the rate.

    The second is the mean rate over the stretch less the least one: up to 1 % of it by the stretch's making.
    Where noise is low it is the greater part of such a line's error.

    Args:
        equivalent_h: Equivalent time [h] of every scan that has a strain, (n,), not falling.
    """
    low, high = stretch(run)
    inside = equivalent_h[(equivalent_h >= low) & (equivalent_h <= high)]
    per_s = slope_error(inside * 3600.0, limit_noise(run))
    if per_s is None:
        return None
    rise = np.diff(run.spec.creep.envelope.strain(inside[[0, -1]]))
    return per_s * 3600.0, float(rise[0] / (inside[-1] - inside[0])) - run.truth.minimum_rate_per_h


def rate_as_indicated(run: Run) -> float:
    """Return the true least rate [1/h] of this specimen where its thermocouples *show* the set point.

    ``minimum_rate_per_h`` of the truth is at the true set point. Thermocouples that show d kelvin too much
    make every laboratory correct to a temperature d too low, which no program can know; this is what it
    would find if all else were perfect. Without thermocouples, or with those that are right: the same.
    """
    spec = run.spec
    if not spec.thermocouples:
        return run.truth.minimum_rate_per_h
    kelvin = spec.furnace.set_point_c + ZERO_C_IN_K
    off = sum(c.offset_k for c in spec.thermocouples) / len(spec.thermocouples)
    slower = (
        spec.activation_energy_j_per_mol / GAS_CONSTANT_J_PER_MOL_K * (1.0 / kelvin - 1.0 / (kelvin - off))
    )
    return run.truth.minimum_rate_per_h * math.exp(slower)


def rate_as_run(run: Run) -> float:
    """Return the true mean rate [1/h of lab time] over the stretch around the least rate, furnace and all."""
    truth = run.truth
    low, high = (float(np.interp(x, truth.equivalent_h, truth.t_h)) for x in stretch(run))
    if high <= low:
        return truth.minimum_rate_per_h
    smooth = run.spec.creep.envelope
    rise = np.diff(smooth.strain(np.interp([low, high], truth.t_h, truth.equivalent_h)))
    return float(rise[0]) / (high - low)
