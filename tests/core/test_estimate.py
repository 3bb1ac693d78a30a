"""Rates and onsets on constructed curves whose truth is known in closed form."""

from __future__ import annotations

import numpy as np
import pytest
from ladder_helper import rungs_of

from daq.core import estimate, shape

WHITE = np.array([[1.0, 0.0, 1e-12, 1.0]])
"""White noise of one microstrain a scan."""


def theta(t: np.ndarray) -> np.ndarray:
    """Constructed theta set: 0.010, 0.010 /h, 0.005, 0.002 /h (closed form, CHECKVALUES 5.5)."""
    return 0.010 * (1 - np.exp(-0.010 * t)) + 0.005 * np.expm1(0.002 * t)


def kachanov(t: np.ndarray) -> np.ndarray:
    """Constructed set: least rate 1e-5 /h at once, rupture at 12 500 h, q 0.375 (closed form, CHECKVALUES
    5.6)."""
    return 1e-5 * 12_500.0 / 0.375 * (1 - (1 - t / 12_500.0) ** 0.375)


def found(t: np.ndarray, strain: np.ndarray) -> tuple[estimate.Minimum, float | None, float | None]:
    r = rungs_of(t, strain, 300)
    when, rates = shape.unimodal(r, WHITE)
    m = estimate.minimum(r, WHITE, when, rates)
    assert m is not None
    return m, estimate.rise_5_percent(r, WHITE, m), estimate.offset_0p2(r, m)


def test_theta_curve_gives_the_three_onsets_within_the_sampling_step() -> None:
    """326.002 h, 403.644 h, 673.459 h at a least rate of 2.3032597244e-5 /h: computed from the closed
    form."""
    t = np.arange(0.0, 1000.0, 1.0)
    m, rise, offset = found(t, theta(t))
    assert m.rate == pytest.approx(2.3032597244e-5, rel=1e-3)
    assert m.time_h == pytest.approx(326.002, abs=2.0)
    assert rise == pytest.approx(403.644, abs=1.0)
    assert offset == pytest.approx(673.459, abs=1.0)


def test_kachanov_curve_without_primary_has_its_least_rate_at_once() -> None:
    """+5 % at 938.688 h, 0.2 % offset at 2655.947 h: computed from the closed form."""
    t = np.arange(0.0, 4000.0, 10.0)
    m, rise, offset = found(t, kachanov(t))
    assert m.time_h < 40.0
    assert m.rate == pytest.approx(1e-5, rel=5e-3)
    assert rise == pytest.approx(938.688, abs=40.0)
    assert offset == pytest.approx(2655.947, abs=20.0)


def test_what_is_not_reached_is_said_so() -> None:
    """None is a result."""
    t = np.arange(0.0, 380.0, 1.0)
    _, rise, offset = found(t, theta(t))
    assert rise is None
    assert offset is None


def test_the_interval_of_the_least_rate_holds_the_truth_as_often_as_it_says() -> None:
    """90 % intervals under drift of 30 h memory: 40 records, 75-100 % allowed by chance (binomial, 3 sd)."""
    t = np.arange(0.0, 1000.0, 2.0)
    keep = np.exp(-2.0 / 30.0)
    models = np.array([[30.0, 25e-12, 100e-12, 1.0]])
    held = 0
    for seed in range(40):
        rng = np.random.default_rng(seed)
        drift = np.zeros(t.size)
        drift[0] = rng.normal(0, 5e-6)
        for i in range(1, t.size):
            drift[i] = keep * drift[i - 1] + rng.normal(0, 5e-6 * np.sqrt(1 - keep**2))
        r = rungs_of(t, theta(t) + drift + rng.normal(0, 1e-5, t.size), 120)
        when, rates = shape.unimodal(r, models)
        m = estimate.minimum(r, models, when, rates)
        assert m is not None
        held += m.low <= 2.3032597244e-5 <= m.high
    assert 30 <= held <= 40


@pytest.mark.parametrize("scale", [0.1, 10.0])
def test_scaling_time_scales_the_answers(scale: float) -> None:
    """Nothing is tuned in hours."""
    t = np.arange(0.0, 1000.0, 2.0)
    one, rise, offset = found(t, theta(t))
    two, rise2, offset2 = found(t * scale, theta(t))
    assert rise is not None
    assert offset is not None
    assert two.time_h == pytest.approx(scale * one.time_h, rel=0.02)
    assert two.rate * scale == pytest.approx(one.rate, rel=1e-3)
    assert rise2 == pytest.approx(scale * rise, rel=0.01)
    assert offset2 == pytest.approx(scale * offset, rel=1e-3)


def test_a_negative_rate_is_an_answer() -> None:
    """After a stress reduction the specimen runs back."""
    t = np.arange(0.0, 300.0, 1.0)
    rate, low, high = estimate.rate_now(rungs_of(t, 0.01 - 2e-6 * t), WHITE)
    assert rate == pytest.approx(-2e-6, rel=0.01)
    assert low < rate < high


def test_a_crossing_counts_only_when_it_is_for_good() -> None:
    """A wave that comes back is no onset."""
    t = np.arange(6.0)
    assert estimate.crossing(t, np.array([0, 3, 0, 1, 3, 4.0]), 2.0) == pytest.approx(3.5)
    assert estimate.crossing(t, np.array([0, 3, 0, 1, 3, 1.0]), 2.0) is None
