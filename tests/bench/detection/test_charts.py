"""The charts of the comparison against published examples and run lengths.

Examples: NIST/SEMATECH e-Handbook of Statistical Methods 6.3.2.3 and 6.3.2.4; Montgomery, Introduction to
Statistical Quality Control, section 9.1. Run lengths: Lucas & Crosier 1982, Table 1; Brook & Evans 1972;
Vance 1986; Waldmann 1986; Lucas & Saccucci 1990, Table 3; Crowder 1987, Table 1; Steiner 1999, Table 2, as
quoted in the manual of the open R package spc (0.7.2).
"""

from __future__ import annotations

import numpy as np
import pytest
from charts import (
    CusumDesign,
    EwmaDesign,
    cusum,
    cusum_since,
    ewma,
    ewma_spread,
    first_above,
    page_hinkley,
    run_lengths,
)
from run_lengths import exact
from scipy.stats import norm

# fmt: off
NIST_CUSUM = np.array([
    324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600,
    324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350])
NIST_HIGH = [0, 0, 0, 0, 0.03, 0, 0, 0, 0, 0, 0, 0, 3.01, 4.94, 7.45, 10.63, 11.99, 14.44, 16.00, 19.04]
NIST_LOW = [0, 0.01, 0, 0.33, 0, 0, 0.56, 0.72, 0.17, 0.25, 0.31, 0, 0, 0, 0, 0, 0, 0, 0, 0]
NIST_EWMA = np.array([
    52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5,
    49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
NIST_EWMA_OUT = [
    50.60, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33,
    50.11, 49.36, 49.52, 50.05, 49.38, 49.92, 50.73, 51.23, 51.94, 51.99]
MONTGOMERY = np.array([
    9.45, 7.99, 9.29, 11.66, 12.16, 10.18, 8.04, 11.46, 9.20, 10.34, 9.03, 11.47, 10.51, 9.40, 10.08,
    9.37, 10.62, 10.31, 8.52, 10.84, 10.90, 9.33, 12.29, 11.50, 10.60, 11.08, 10.38, 11.62, 11.31, 10.52])
MONTGOMERY_HIGH = [
    0, 0, 0, 1.16, 2.82, 2.50, 0.04, 1.00, 0, 0, 0, 0.97, 0.98, 0, 0,
    0, 0.12, 0, 0, 0.34, 0.74, 0, 1.79, 2.79, 2.89, 3.47, 3.35, 4.47, 5.28, 5.30]
SHIFTS = [0, 0.25, 0.5, 0.75, 1, 1.5, 2, 2.5, 3, 4, 5]
LUCAS_CROSIER = [168, 74.2, 26.6, 13.3, 8.38, 4.75, 3.34, 2.62, 2.19, 1.71, 1.31]
LUCAS_CROSIER_FIR = [149, 62.7, 20.1, 8.97, 5.29, 2.86, 2.01, 1.59, 1.32, 1.07, 1.01]
SACCUCCI_SHIFTS = [0, 0.25, 0.5, 0.75, 1, 1.5, 2, 2.5, 3, 3.5, 4, 5]
SACCUCCI_050 = [500, 255, 88.8, 35.9, 17.5, 6.53, 3.63, 2.50, 1.93, 1.58, 1.34, 1.07]
SACCUCCI_003 = [500, 76.7, 29.3, 17.6, 12.6, 8.07, 5.99, 4.80, 4.03, 3.49, 3.11, 2.55]
# fmt: on


def test_cusum_gives_the_handbook_columns() -> None:
    """NIST 6.3.2.3, in data units; printed to two digits, ties rounded either way."""
    high, low = cusum(NIST_CUSUM - 325.0, 0.3175), cusum(325.0 - NIST_CUSUM, 0.3175)
    assert np.abs(high - NIST_HIGH).max() <= 0.0051
    assert np.abs(low - NIST_LOW).max() <= 0.0051
    assert first_above(high, 4.1959) == 13  # group 14
    assert first_above(low, 4.1959) is None


def test_cusum_dates_the_change_of_the_textbook_example() -> None:
    """Montgomery 9.1: alarm at sample 29, seven samples above zero, so the change lies after sample 22."""
    high = cusum(MONTGOMERY - 10.0, 0.5)
    assert np.abs(high - MONTGOMERY_HIGH).max() <= 0.0051
    assert first_above(high, 5.0) == 28
    assert cusum_since(MONTGOMERY - 10.0, 0.5)[28] == 7
    assert 10.0 + 0.5 + high[28] / 7 == pytest.approx(11.25, abs=0.005)


def test_ewma_gives_the_handbook_column_and_no_alarm() -> None:
    """NIST 6.3.2.4: target 50, sigma 2.0539, weight 0.3, limits of 3 sigma."""
    out = ewma(NIST_EWMA, 0.3, 50.0)
    assert np.abs(out - NIST_EWMA_OUT).max() <= 0.0051
    half_width = 3.0 * 2.0539 * float(ewma_spread(0.3))
    assert 50.0 + half_width == pytest.approx(52.5884, abs=1e-4)
    assert np.abs(out - 50.0).max() < half_width


def test_ewma_with_limits_that_widen_alarms_where_the_textbook_data_do() -> None:
    """Montgomery 9.2: weight 0.1, L 2.7; exact limits, first alarm at sample 29."""
    out = ewma(MONTGOMERY, 0.1, 10.0)
    limits = 10.0 + 2.7 * np.asarray(ewma_spread(0.1, 30))
    assert out[[0, 1, 28]] == pytest.approx([9.945, 9.7495, 10.64682], abs=1e-5)
    assert limits[28] == pytest.approx(10.6187, abs=1e-4)
    assert first_above(out - limits, 0.0) == 28


def test_page_hinkley_with_a_known_mean_is_the_cusum() -> None:
    """Same recursion in other words: same values on noise, same alarm (sample 59, S = 4.5) on a step."""
    step = np.r_[np.zeros(50), np.ones(50)]
    for chart in (cusum(step, 0.5), page_hinkley(step, 0.0, 0.5)):
        assert first_above(chart, 4.0) == 58
        assert chart[58] == 4.5
    noise = np.random.default_rng(3).standard_normal((4, 500))
    assert np.allclose(cusum(noise, 0.3), page_hinkley(noise, 0.0, 0.3), atol=1e-12)


def test_charts_are_their_own_recursions() -> None:
    """The forms without a loop must give what the loop gives, head start and several series included."""
    z = np.random.default_rng(5).standard_normal((3, 200))
    begun = np.array([0.0, 1.5, 2.0])
    s, e = begun.copy(), begun.copy()
    high, smooth = cusum(z, 0.5, begun), ewma(z, 0.2, begun)
    for i in range(z.shape[1]):
        s = np.maximum(0.0, s + z[:, i] - 0.5)
        e = 0.2 * z[:, i] + 0.8 * e
        assert np.allclose(high[:, i], s, atol=1e-12)
        assert np.allclose(smooth[:, i], e, atol=1e-12)


def test_exact_cusum_run_lengths_are_the_published_ones() -> None:
    """Lucas & Crosier's printed digits, plain and with head start; Brook & Evans; Vance; Waldmann."""
    for shift, plain, quick in zip(SHIFTS, LUCAS_CROSIER, LUCAS_CROSIER_FIR, strict=True):
        assert exact(CusumDesign(0.5, 4.0), shift) == pytest.approx(plain, rel=0.0034)
        assert exact(CusumDesign(0.5, 4.0, head_start=2.0), shift) == pytest.approx(quick, rel=0.005)
    one = CusumDesign(0.5, 3.0, two_sided=False)
    assert [exact(one, s) for s in (0.0, 1.5)] == pytest.approx([117.5957, 3.7491], abs=5e-5)
    assert [exact(one, s) for s in (-0.5, 0.0, 0.5)] == pytest.approx([1963, 117.4, 17.35], rel=0.002)
    wide = CusumDesign(0.0, 10.0, two_sided=False)
    vance = [400.28, 124.66, 59.30, 36.71, 20.37, 14.06, 10.75]
    assert [exact(wide, s) for s in (-0.125, 0, 0.125, 0.25, 0.5, 0.75, 1)] == pytest.approx(
        vance, abs=0.0051
    )
    # values worked out before with another program, to their last digit
    assert exact(CusumDesign(0.5, 4.0, head_start=2.0)) == pytest.approx(148.6956, abs=5e-5)
    assert exact(CusumDesign(0.5, 5.0)) == pytest.approx(465.4435, abs=5e-5)
    assert exact(CusumDesign(0.5, 5.0, two_sided=False)) == pytest.approx(930.8870, abs=5e-5)


def test_exact_ewma_run_lengths_are_the_published_ones() -> None:
    """Lucas & Saccucci's and Crowder's printed digits, Steiner's, and one point known to eleven digits."""
    for shift, half, slow in zip(SACCUCCI_SHIFTS, SACCUCCI_050, SACCUCCI_003, strict=True):
        assert exact(EwmaDesign(0.5, 3.071), shift) == pytest.approx(half, rel=0.004)
        assert exact(EwmaDesign(0.03, 2.437), shift) == pytest.approx(slow, rel=0.004)
    for weight, lengths in ((0.5, [26.45, 4.91, 1.94, 1.05]), (0.05, [127.53, 8.38, 4.04, 2.15])):
        got = [exact(EwmaDesign(weight, 2.0), s) for s in (0, 1, 2, 4)]
        assert got == pytest.approx(lengths, abs=0.006)  # 1.9452 is printed 1.94
    steiner = [1379, 135, 37.4, 20.0, 13.5, 8.3, 6.0]
    got = [exact(EwmaDesign(0.05, 3.0), s) for s in (0, 0.25, 0.5, 0.75, 1, 1.5, 2)]
    assert got == pytest.approx(steiner, rel=0.011)  # by a Markov chain: 135 where the equation has 133.6
    assert exact(EwmaDesign(0.25, 3.0), 1.0) == pytest.approx(11.154267016, abs=1e-9)


@pytest.mark.parametrize(
    ("design", "shift"),
    [
        (CusumDesign(0.5, 4.0), 0.0),
        (CusumDesign(0.5, 4.0, head_start=2.0), 0.5),
        (CusumDesign(0.5, 5.0, two_sided=False), 0.25),
        (EwmaDesign(0.5, 2.0), 0.0),
        (EwmaDesign(0.05, 2.0), 0.5),
        (EwmaDesign(1.0, 3.0), 0.5),  # a single-reading chart: 155.224 in closed form
    ],
    ids=str,
)
def test_simulated_run_lengths_agree_with_the_integral_equation(
    design: CusumDesign | EwmaDesign, shift: float
) -> None:
    """Two ways that share no code; four standard errors of 3000 runs is 7 % at most."""
    n = run_lengths(design, 3000, 11, shift=shift)
    assert abs(n.mean() - exact(design, shift)) < 4.0 * n.std() / n.size**0.5
    if design == EwmaDesign(1.0, 3.0):
        assert exact(design, shift) == pytest.approx(155.224, abs=5e-4)


def test_first_order_noise_has_the_run_length_of_its_own_integral_equation() -> None:
    """A single-reading chart of +-2 on noise of coefficient 0.7: solved on nodes here, simulated there."""
    phi, limit = 0.7, 2.0
    node, weight = np.polynomial.legendre.leggauss(80)
    node, weight = limit * node, limit * weight
    kernel = norm.pdf(node[None, :], phi * node[:, None], (1.0 - phi**2) ** 0.5) * weight
    inside = np.linalg.solve(np.eye(80) - kernel, np.ones(80))
    wanted = 1.0 + float(norm.pdf(node) * weight @ inside)
    n = run_lengths(EwmaDesign(1.0, limit), 3000, 12, phi=phi)
    assert wanted > 30.0  # 21.98 on white noise
    assert abs(n.mean() - wanted) < 4.0 * n.std() / n.size**0.5


def test_memory_shortens_the_run_length_of_charts_designed_for_white_noise() -> None:
    """Why rates, whose noise has memory, are not watched with these charts: a tenth of the length at 0.5."""
    for design in (CusumDesign(0.5, 5.0), EwmaDesign(0.1, 2.814)):
        lengths = [run_lengths(design, 1000, 13, phi=phi).mean() for phi in (0.1, 0.25, 0.5)]
        assert exact(design) > lengths[0] > lengths[1] > lengths[2]
        assert lengths[2] < 0.15 * exact(design)
