"""Spikes, steps and jerks on single sides."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.core import clean

SD = 1e-5


def record(n: int = 80, seed: int = 0, slope: float = 1e-5) -> tuple[np.ndarray, np.ndarray]:
    """Return quarter-hourly scans of a creeping specimen."""
    t = 0.25 * np.arange(n) + 50.0
    return t, 0.01 + slope * t + np.random.default_rng(seed).normal(0.0, SD, n)


@pytest.mark.parametrize("at", [30, 45, 70])
@pytest.mark.parametrize("size", [2e-4, -1e-3])
def test_a_step_is_found_where_it_is_with_its_size(at: int, size: float) -> None:
    """Half a dozen scans fix a level to half of the noise."""
    t, v = record()
    v[at:] += size
    found = clean.judge(t, v, 24, SD, False)
    assert found.step_at == at - 24
    assert found.size == pytest.approx(size, abs=3 * SD)
    assert not found.spikes.any()


@pytest.mark.parametrize("at", [30, 31, 60])
def test_a_spike_is_masked_and_is_no_step(at: int) -> None:
    """One reading that comes back."""
    t, v = record()
    v[at] += 5e-4
    found = clean.judge(t, v, 24, SD, False)
    assert found.step_at is None
    assert np.flatnonzero(found.spikes).tolist() == [at - 24]


def test_two_neighbouring_spikes_are_masked() -> None:
    """A burst of interference hits more than one scan."""
    t, v = record()
    v[[40, 41]] += [8e-4, -6e-4]
    found = clean.judge(t, v, 24, SD, False)
    assert found.step_at is None
    assert set(np.flatnonzero(found.spikes)) == {16, 17}


def test_what_is_suspected_at_the_end_waits_for_five_scans() -> None:
    """Before that nobody can tell a spike from a step."""
    t, v = record()
    v[77:] += 5e-4
    assert clean.judge(t, v, 24, SD, False).hold_at == 77 - 24
    assert clean.judge(t, v, 24, SD, True).hold_at is None


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10_000), st.sampled_from([0.0, 1e-5, 1e-4]))
def test_clean_creep_is_left_alone(seed: int, slope: float) -> None:
    """Noise and creep alone give no spike and no step, whatever the rate."""
    t, v = record(150, seed, slope)
    found = clean.judge(t, v, 24, SD, False)
    assert found.step_at is None
    assert found.spikes.sum() == 0


def test_a_gap_in_fast_creep_is_not_a_step() -> None:
    """Over a gap of 60 h the specimen goes on creeping."""
    t, v = record(slope=1e-4)
    later = t >= t[50]
    t = t + 60.0 * later
    v = v + 60.0e-4 * later
    assert clean.judge(t, v, 24, SD, False).step_at is None


def test_counts_do_not_make_every_change_a_step() -> None:
    """A converter of 36 microstrain a count stands still and then jumps by one count."""
    t, v = record(200, 3)
    v = np.round(v / 36e-6) * 36e-6
    found = clean.judge(t, v, 24, float("nan"), False)
    assert found.step_at is None
    assert not found.spikes.any()


def test_what_is_explained_is_not_asked_again() -> None:
    """Rows cleared by whoever knows the other side and the temperature are no step; later ones may be."""
    t, v = record()
    v[40:] += 3e-4
    assert clean.judge(t, v, 24, SD, False, 17).step_at is None
    v[60:] -= 6e-4
    assert clean.judge(t, v, 24, SD, False, 17).step_at == 60 - 24


def test_a_jump_of_both_sides_alike_looks_like_creep_of_one_it_does_not() -> None:
    """What the sides agree on is the specimen, or a shock to it."""
    assert clean.looks_like_creep((3e-4, 2.8e-4), True)
    assert not clean.looks_like_creep((3e-4,), True)
    assert not clean.looks_like_creep((3e-4, -3e-4), True)
    assert clean.looks_like_creep((3e-4,), False)
    assert not clean.looks_like_creep((-3e-4,), False)
