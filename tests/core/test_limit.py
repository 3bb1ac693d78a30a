"""The best possible delay against closed forms, an independent solver, and its own monotony."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import nnls

from daq.core.limit import Noise, block_covariance, detectable_at, energy, level_for
from daq.records import CoreError, FloatArray

HOUR = 3600.0


def theta_curve(t_h: FloatArray) -> FloatArray:
    """Constructed theta set whose least rate lies at 326.002 h."""
    return 0.010 * -np.expm1(-0.010 * t_h) + 0.005 * np.expm1(0.002 * t_h)


def test_white_noise_and_a_quadratic_departure_match_the_closed_form() -> None:
    """The nearest never-rising curve to a t^2 is its line; Legendre: E = n a^2 T^4 / (180 sigma^2)."""
    n, a, sigma, last = 6000, 3e-16, 2e-5, 4e5
    t = np.linspace(0.0, last, n)
    ends = np.array([last, 0.5 * last, 0.25 * last])
    wanted = n * a**2 * last**4 / (180.0 * sigma**2) * np.array([1.0, 0.5**5, 0.25**5])
    assert np.allclose(energy(t, a * t**2, Noise(sigma), ends), wanted, rtol=5e-3)
    level = float(wanted[1])
    assert detectable_at(t, a * t**2, Noise(sigma), level) == pytest.approx(0.5 * last, rel=2e-3)


def test_drift_of_endless_memory_and_a_quadratic_departure_match_the_closed_form() -> None:
    """Then it is a random walk of rate q = 2 sd^2/tau: E = integral of (y' - mean)^2 / q = a^2 T^3/(3 q)."""
    t = np.linspace(0.0, 1e6, 1500)
    a, sd, tau = 1e-16, 1e-3, 1e10
    found = energy(t, a * t**2, Noise(1e-10, drifts=((sd, tau),)), np.array([1e6]))
    assert found[0] == pytest.approx(a**2 * 1e18 * tau / (6.0 * sd**2), rel=1e-2)


def test_counts_are_uniform_noise() -> None:
    """A step q of the converter has variance q^2/12."""
    t = np.linspace(0.0, 1e5, 500)
    y = 1e-13 * t**2
    counted = energy(t, y, Noise(0.0, count=12e-6), np.array([1e5]))
    assert counted[0] == pytest.approx(
        energy(t, y, Noise(12e-6 / math.sqrt(12.0)), np.array([1e5]))[0], rel=1e-9
    )


@pytest.mark.parametrize("drifts", [(), ((2e-5, 40.0 * HOUR),), ((1e-5, 5.0 * HOUR), (3e-5, 900.0 * HOUR))])
def test_the_distance_agrees_with_least_squares_on_concave_hinges(
    drifts: tuple[tuple[float, float], ...],
) -> None:
    """The primal problem, whitened and solved by scipy's non-negative least squares, scan by scan."""
    rng = np.random.default_rng(5)
    t = np.linspace(0.0, 620.0, 90) + rng.uniform(-2.0, 2.0, 90)  # every scan its own block
    y = theta_curve(t)
    covariance = np.eye(t.size) * (3e-5) ** 2
    for sd, memory_s in drifts:
        covariance += sd**2 * np.exp(-np.abs(t[:, None] - t) * HOUR / memory_s)
    whiten = np.linalg.inv(np.linalg.cholesky(covariance))
    hinges = -np.maximum(t[:, None] - t[None, 1:-1], 0.0)
    line = np.column_stack([np.ones_like(t), -np.ones_like(t), t, -t])
    columns = whiten @ np.column_stack([line, hinges])
    size = np.linalg.norm(columns, axis=0)
    _, distance = nnls(columns / size, whiten @ y, maxiter=20000)
    found = energy(t * HOUR, y, Noise(3e-5, drifts=drifts), np.array([630.0 * HOUR]))
    assert found[0] == pytest.approx(distance**2, rel=1e-5)


@pytest.mark.parametrize("memory_s", [5.0, 300.0, 4e4, 1e9])
def test_blocks_have_the_covariance_of_the_means_of_their_scans(memory_s: float) -> None:
    """Averaged from the scan-by-scan covariance; for long memory it is the small differences that count."""
    sizes, spacings = [1, 7, 30, 2, 1], [1.0, 10.0, 2.0, 60.0, 1.0]
    starts = np.array([0.0, 50.0, 400.0, 500.0, 900.0])
    scans = np.concatenate([t + d * np.arange(n) for t, d, n in zip(starts, spacings, sizes, strict=True)])
    mean = np.repeat(np.arange(5), sizes)[None, :] == np.arange(5)[:, None]
    average = mean / np.array(sizes)[:, None]
    lost = -np.expm1(-np.abs(scans[:, None] - scans) / memory_s)  # 1 - correlation, without cancellation
    last = starts + np.array(spacings) * (np.array(sizes) - 1.0)
    found = block_covariance(
        starts, last, np.array(sizes, dtype=float), Noise(0.0, drifts=((1.0, memory_s),))
    )
    wanted = average @ lost @ average.T
    assert np.allclose(1.0 - found, wanted, rtol=2e-3 if memory_s < 1e9 else 2e-2, atol=3e-10)


def test_a_curve_that_never_rises_has_no_energy_however_it_is_sampled() -> None:
    """Primary creep, steep at first and unevenly sampled, is not evidence of anything."""
    rng = np.random.default_rng(2)
    dense = 50.0 + np.arange(600) / HOUR
    t = np.sort(np.concatenate([rng.uniform(0.0, 900.0, 1500), dense, [0.0, 0.0]]))
    y = 1e-3 * t ** (1.0 / 3.0) + 1e-6 * t
    noise = Noise(5e-6, 1e-6, ((1e-5, 20.0 * HOUR),))
    assert energy(t * HOUR, y, noise, np.array([900.0 * HOUR]))[0] < 1e-9
    assert detectable_at(t * HOUR, y, noise, 0.01) is None


@settings(max_examples=20, deadline=None)
@given(
    st.floats(3e-6, 2e-4),
    st.floats(1e-6, 1e-4),
    st.floats(1.0, 2000.0),
    st.floats(-8.0, -4.0),
    st.integers(0, 1000),
)
def test_energy_never_falls_with_time_and_grows_when_noise_shrinks(
    white: float, sd: float, memory_h: float, log_rate: float, seed: int
) -> None:
    """More scans can only add evidence; less noise too, by exactly the square of its scale."""
    rng = np.random.default_rng(seed)
    t = np.sort(rng.uniform(0.0, 1500.0, 400))
    y = theta_curve(t) + 10.0**log_rate * t
    ends = np.linspace(1.0, 1500.0, 12) * HOUR
    noise = Noise(white, drifts=((sd, memory_h * HOUR),))
    found = energy(t * HOUR, y, noise, ends)
    assert np.all(np.diff(found) >= -1e-9 * found[-1])
    quieter = energy(t * HOUR, y, Noise(white / 2.0, drifts=((sd / 2.0, memory_h * HOUR),)), ends)
    assert np.allclose(quieter, 4.0 * found, rtol=1e-6, atol=1e-9)


def test_the_limit_comes_later_with_more_noise_and_with_a_stricter_level() -> None:
    """What is harder to see, or asked for with more certainty, takes longer."""
    t = np.linspace(0.0, 900.0, 4000)
    found = [
        detectable_at(t * HOUR, theta_curve(t), Noise(white, drifts=((white / 3.0, 30.0 * HOUR),)), level)
        for white in (5e-6, 2e-5, 8e-5)
        for level in (level_for(0.05), level_for(0.005))
    ]
    times = [f / HOUR for f in found if f is not None]
    assert len(times) == 6
    assert 326.002 < times[0] < times[1] < times[3] < times[5]
    assert times[0] < times[2] < times[4]


def test_the_time_of_the_limit_is_where_the_energy_reaches_the_level() -> None:
    """Two ways to ask the same question."""
    t = np.linspace(0.0, 900.0, 3000)
    noise = Noise(3e-5, 5e-6, ((1e-5, 15.0 * HOUR),))
    level = level_for(1.0 / 200.0)
    at = detectable_at(t * HOUR, theta_curve(t), noise, level)
    assert at is not None
    assert energy(t * HOUR, theta_curve(t), noise, np.array([at]))[0] == pytest.approx(level, rel=0.05)
    assert level == pytest.approx(10.5966, abs=1e-4)


def test_a_constant_or_a_slope_added_to_strain_changes_nothing() -> None:
    """Zero strain is a matter of convention, and a steady rate is allowed."""
    t = np.linspace(0.0, 800.0, 700)
    noise, ends = Noise(2e-5), np.array([800.0 * HOUR])
    plain = energy(t * HOUR, theta_curve(t), noise, ends)
    assert np.allclose(energy(t * HOUR, theta_curve(t) + 0.05 + 3e-5 * t, noise, ends), plain, rtol=1e-6)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: level_for(1.0), "got false share 1.0"),
        (lambda: Noise(0.0), "got none at all"),
        (lambda: Noise(-1.0), "got white -1.0"),
        (lambda: Noise(1e-5, drifts=((1e-5, 0.0),)), "wanted sd >= 0 and memory > 0"),
        (lambda: energy(np.zeros(3), np.zeros(2), Noise(1e-5), np.zeros(1)), r"got times \(3,\)"),
        (lambda: energy(np.array([1.0, 0.0]), np.zeros(2), Noise(1e-5), np.zeros(1)), "times that fall"),
        (lambda: detectable_at(np.array([0.0, np.nan]), np.zeros(2), Noise(1e-5), 1.0), "not finite"),
        (lambda: detectable_at(np.zeros(2), np.zeros(2), Noise(1e-5), 0.0), "got level 0.0"),
    ],
)
def test_wrong_input_is_named(call: object, message: str) -> None:
    """A planner's typing error must not become a promise about delay."""
    assert callable(call)
    with pytest.raises(CoreError, match=message):
        call()


@pytest.mark.parametrize("n", [1, 2, 3])
def test_too_few_scans_give_no_evidence(n: int) -> None:
    """Two readings cannot show that a rate rose."""
    t = np.arange(n) * HOUR
    found = energy(t, 1e-3 * np.arange(n) ** 2.0, Noise(1e-5), np.array([0.0, 10.0 * HOUR]))
    assert found[0] == 0.0
    assert (found[1] > 0.0) == (n == 3)
