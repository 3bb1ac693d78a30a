"""Leaves and the ladder: moments survive merging, memory grows with the logarithm of the test."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.core import ladder


def rung(t: np.ndarray, e: np.ndarray) -> np.ndarray:
    """Return the rung of one leaf of scans (hours, strain)."""
    r = np.zeros((1, ladder.COLUMNS))
    r[0, ladder.N] = t.size
    r[0, ladder.T] = r[0, ladder.U] = np.mean(t)
    r[0, ladder.E] = np.mean(e)
    d, f = t - np.mean(t), e - np.mean(e)
    r[0, ladder.S_TT], r[0, ladder.S_TE], r[0, ladder.S_EE] = np.sum(d * d), np.sum(d * f), np.sum(f * f)
    r[0, ladder.START], r[0, ladder.END] = t.min(), t.max()
    return r


def climb(t: np.ndarray, e: np.ndarray, size: int) -> np.ndarray:
    """Return the ladder of scans in leaves of ``size``."""
    rungs = ladder.empty()
    for i, at in enumerate(range(0, t.size, size)):
        part = slice(at, at + size)
        rungs = np.concatenate((rungs, rung(t[part], e[part])))
        if i % ladder.SWEEP_EVERY == 0:
            rungs = ladder.sweep(rungs, float(t[part][-1]))
    return rungs


@pytest.mark.parametrize("offset", [0.0, 1e8])
def test_the_streaming_slope_ends_on_the_certified_norris_line(offset: float) -> None:
    """NIST StRD Norris in file order: B0 -0.262323073774029, B1 1.00211681802045, s 0.884796396144373.

    Again with 1e8 added to both: raw sums would cancel. Certified values: NIST, file as shipped by scipy.
    """
    import scipy.stats

    tests = Path(scipy.stats.__file__).parent / "tests"
    path = tests / "data" / "nist_linregress" / "Norris.dat"
    if not path.exists():
        pytest.skip(f"no {path.name} in this scipy")
    rows = [line.split() for line in path.read_text().splitlines()[60:] if len(line.split()) == 2]
    y, x = np.array([[float(v) for v in row] for row in rows]).T + offset
    assert x.size == 36
    slope, intercept, sd = ladder.slope_and_scatter(
        np.concatenate([rung(x[i : i + 3], y[i : i + 3]) for i in range(0, 36, 3)])
    )
    tight = 1e-11 if offset == 0.0 else 1e-6
    assert slope == pytest.approx(1.00211681802045, rel=tight)
    assert sd == pytest.approx(0.884796396144373, rel=tight)
    if offset == 0.0:
        assert intercept == pytest.approx(-0.262323073774029, rel=1e-9)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(1, 7))
def test_merging_keeps_every_moment(seed: int, size: int) -> None:
    """What two leaves say together is what one leaf of all their scans says."""
    rng = np.random.default_rng(seed)
    t = np.sort(rng.uniform(0.0, 5.0, 2 * size)) + 1e4
    e = rng.normal(0.1, 1e-5, 2 * size)
    both = ladder.merge(rung(t[:size], e[:size]), rung(t[size:], e[size:]))
    whole = rung(t, e)
    np.testing.assert_allclose(both, whole, rtol=1e-6, atol=1e-15)


def test_the_ladder_grows_with_the_logarithm_of_the_test() -> None:
    """A test forty times as long needs a few rungs more, never forty times as many."""
    short, long = (climb(np.arange(1.0, n), np.zeros(n - 1), 8) for n in (4_000, 160_000))
    assert long.shape[0] < 1.5 * short.shape[0] < 450
    assert np.sum(long[:, ladder.N]) == 159_999


def test_rungs_are_finer_near_now_and_near_the_beginning() -> None:
    """Both ends of a test change fastest."""
    rungs = climb(np.arange(1.0, 100_000.0), np.zeros(99_999), 8)
    width = rungs[:, ladder.END] - rungs[:, ladder.START]
    middle = width[rungs.shape[0] // 3 : 2 * rungs.shape[0] // 3].max()
    assert width[:5].max() < 0.1 * middle
    assert width[-5:].max() < 0.3 * middle


def test_steps_are_never_merged_across() -> None:
    """The level after a step is another one."""
    rungs = climb(np.arange(1.0, 2000.0), np.zeros(1999), 4)
    half = rungs.shape[0] // 2
    rungs[half:, ladder.SEGMENT] = 1.0
    swept = ladder.sweep(ladder.sweep(rungs, 1e6), 1e6)
    thin = ladder.thinned(rungs, 1.0, 1.0, 1.0)
    for r in (swept, thin):
        assert set(np.unique(r[:, ladder.SEGMENT])) == {0.0, 1.0}
        assert np.sum(r[r[:, ladder.SEGMENT] == 0.0, ladder.N]) == np.sum(rungs[:half, ladder.N])


def test_thinning_keeps_sums_and_slope() -> None:
    """Fits on thinned rungs see the same data."""
    rng = np.random.default_rng(1)
    t = np.arange(1.0, 3000.0)
    rungs = climb(t, 1e-5 * t + rng.normal(0, 1e-5, t.size), 4)
    thin = ladder.thinned(rungs, 0.1, 0.01, 0.1)
    assert thin.shape[0] < 0.7 * rungs.shape[0]
    np.testing.assert_allclose(ladder.slope_and_scatter(thin), ladder.slope_and_scatter(rungs), rtol=1e-9)


def test_white_noise_is_read_from_within_blocks() -> None:
    """The scale of the noise model, whatever the curve does from block to block."""
    rng = np.random.default_rng(2)
    t = np.arange(1.0, 20_000.0)
    rungs = climb(t, 1e-4 * np.sqrt(t) + rng.normal(0, 2e-5, t.size), 16)
    assert ladder.white_sd(rungs) == pytest.approx(2e-5, rel=0.05)


def test_a_leaf_closes_by_count_or_by_its_share_of_time() -> None:
    """Bursts of 1 s records close by count; slow records by time; the first instant alone."""
    burst = np.arange(0.0, 1000.0) + 1e6
    assert ladder.leaf_end(burst, 0) == ladder.LEAF_SCANS
    slow = np.arange(1.0, 100.0) * 3600.0
    assert ladder.leaf_end(slow, 50) == 52
    assert ladder.leaf_end(np.array([0.0, 60.0]), 0) == 1
    assert ladder.leaf_end(burst[:50], 0) is None
