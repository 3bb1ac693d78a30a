"""Evidence for a rise, the noise grid and the solver below them."""

from __future__ import annotations

import numpy as np
import pytest
from ladder_helper import rungs_of
from scipy.optimize import nnls as reference_nnls

from daq.core import evidence, noise


@pytest.mark.parametrize("seed", range(12))
def test_the_active_set_solver_agrees_with_the_reference(seed: int) -> None:
    """Against scipy.optimize.nnls, cold and from a wrong warm start."""
    rng = np.random.default_rng(seed)
    a, y = rng.normal(size=(40, 15)), rng.normal(size=40)
    expected, _ = reference_nnls(a, y)
    for start in (None, rng.random(15) < 0.5):
        z, passive = evidence.nnls(a.T @ a, a.T @ y, start)
        np.testing.assert_allclose(z, expected, atol=1e-8)
        assert np.array_equal(passive, z > 0)


def test_every_noise_model_whitens_what_it_describes() -> None:
    """The covariance rebuilt from the decomposition is the one of the model's words."""
    x = np.sort(np.random.default_rng(0).uniform(0.0, 1.0, 30))
    variance = np.linspace(0.1, 1.0, 30)
    grid = noise.Grid(x, variance, np.zeros((30, 1)))
    m = grid.model(2, 3)
    gap = np.abs(x[:, None] - x[None, :])
    wanted = np.diag(variance) + m.ratio * np.median(variance) * np.exp(-gap / m.memory)
    half = m.vectors / np.sqrt(m.weights)[None, :]
    rebuilt = np.sqrt(variance)[:, None] * (half @ half.T) * np.sqrt(variance)[None, :]
    np.testing.assert_allclose(rebuilt, wanted, rtol=1e-9, atol=1e-12)
    assert m.logdet == pytest.approx(np.linalg.slogdet(wanted)[1], rel=1e-9)


def test_neighbours_reach_the_whole_grid() -> None:
    """A model that matters must be found from any start."""
    grid = noise.Grid(np.arange(5.0), np.ones(5), np.zeros((5, 1)))
    seen, todo = set(), [(0, 0)]
    while todo:
        at = todo.pop()
        if at not in seen:
            seen.add(at)
            todo += grid.neighbours(*at)
    assert len(seen) == 1 + len(noise.MEMORY_SHARES) * len(noise.RATIOS)


def test_columns_and_their_slopes_belong_together() -> None:
    """Rates read from a fit are derivatives of what was fitted."""
    t = np.linspace(1.0, 500.0, 800)
    d = evidence.design(rungs_of(t, 1e-5 * t), has_temperature=False, has_room=False, q_error=0.0)
    values = np.concatenate((d.concave, d.departures), axis=1)
    inner = (d.x[1:] + d.x[:-1]) / 2
    rough = np.diff(values, axis=0) / np.diff(d.x)[:, None]
    gap = np.abs(rough - evidence.slopes(d, inner))
    assert np.median(gap) < 1e-3
    rates = evidence.slopes(d, d.x)
    c = d.concave.shape[1]
    assert np.all(np.diff(rates[:, :c], axis=0) <= 1e-12)
    assert np.all(np.diff(rates[:, c:], axis=0) >= -1e-12)


def look(strain: np.ndarray, t: np.ndarray) -> evidence.Evidence:
    d = evidence.design(rungs_of(t, strain), has_temperature=False, has_room=False, q_error=0.0)
    return evidence.weigh(d)


@pytest.mark.parametrize("seed", range(2))
def test_a_falling_rate_gives_no_evidence(seed: int) -> None:
    """Primary of any form is in the first family."""
    t = np.linspace(1.0, 500.0, 1500)
    rng = np.random.default_rng(seed)
    for curve in (1e-3 * t ** (1 / 3), 1e-3 * np.log1p(t), 2e-3 * (1 - np.exp(-t / 60)) + 5e-6 * t):
        assert look(curve + rng.normal(0, 1e-5, t.size), t).log_ratio < 3.0


@pytest.mark.parametrize("seed", range(2))
def test_a_rise_gives_evidence_that_grows(seed: int) -> None:
    """The plateau is left at 300 h."""
    t = np.linspace(1.0, 500.0, 1500)
    rng = np.random.default_rng(seed)
    curve = 2e-3 * (1 - np.exp(-t / 60)) + 5e-6 * t + 1e-8 * np.maximum(t - 300.0, 0.0) ** 2
    noisy = curve + rng.normal(0, 1e-5, t.size)
    early, late = (look(noisy[t < end], t[t < end]) for end in (390.0, 500.0))
    assert late.log_ratio > 20.0 > early.log_ratio - 15.0
    assert late.log_ratio > early.log_ratio
    assert late.rise_ratio > 1.2
    assert late.fall_gain > 10.0


def test_an_unseen_step_is_not_a_rise() -> None:
    """A slip that cleaning missed bends nothing but one place."""
    t = np.linspace(1.0, 500.0, 1500)
    rng = np.random.default_rng(1)
    curve = 2e-3 * (1 - np.exp(-t / 60)) + 5e-6 * t + 6e-5 * (t > 470.0) + rng.normal(0, 1e-5, t.size)
    e = look(curve, t)
    assert e.log_ratio < 3.0
    assert e.against_falling > e.log_ratio + 3.0
