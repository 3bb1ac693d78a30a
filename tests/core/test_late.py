"""Jumps below the noise of a scan, seen in the means of many."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from ladder_helper import rungs_of

from daq.core import intake, ladder, late

WHITE = 10e-6
BLOCKS = 150
T_H = np.linspace(0.0, 1000.0, 6001)[1:]
CURVES = {
    "primary": 0.004 * (T_H / 1000.0) ** (1.0 / 3.0),
    "secondary": 0.002 * (1.0 - np.exp(-T_H / 80.0)) + 2e-6 * T_H,
}


def models(drift: float = 0.0, memory_h: float = 10.0, white: float = WHITE) -> np.ndarray:
    """Return one noise model, the true one."""
    return np.array([[memory_h, drift**2, white**2, 1.0]])


def wander(rng: np.random.Generator, t_h: np.ndarray, sd: float, memory_h: float) -> np.ndarray:
    """Return first-order drift at ``t_h``."""
    keep = np.exp(-np.diff(t_h, prepend=t_h[0] - 50.0 * memory_h) / memory_h)
    out, level = np.empty(t_h.size), 0.0
    for i, (k, x) in enumerate(zip(keep.tolist(), rng.standard_normal(t_h.size).tolist(), strict=True)):
        level = k * level + sd * np.sqrt(1.0 - k * k) * x
        out[i] = level
    return out


@pytest.mark.parametrize("curve", CURVES)
@pytest.mark.parametrize(("sds", "scans"), [(1.5, 200), (-2.5, 40), (4.0, 40)])
def test_a_slip_of_a_few_noises_is_found_at_its_place_and_size(curve: str, sds: float, scans: int) -> None:
    """Two hundred scans a block make a jump of 1.5 s.d. of one scan 21 of a block's, forty make 2.5 some 16:
    parabolas on both sides and a block left out leave half of that."""
    t_h = np.linspace(0.0, 1000.0, BLOCKS * scans + 1)[1:]
    for seed in range(5):
        rng = np.random.default_rng([1, seed])
        at_h = float(rng.uniform(400.0, 800.0))
        e = np.interp(t_h, T_H, CURVES[curve]) + rng.normal(0.0, WHITE, t_h.size)
        found = late.find(rungs_of(t_h, e + sds * WHITE * np.heaviside(t_h - at_h, 1.0), BLOCKS), models())
        assert found is not None
        assert abs(found.time_h - at_h) < 1000.0 / BLOCKS
        assert abs(found.size - sds * WHITE) < 4.0 * found.error
        assert found.sds >= late.JUDGE_SDS


def test_the_block_that_holds_the_slip_is_known() -> None:
    """In the middle of a block its mean lies halfway, and both neighbours are clear."""
    edges = rungs_of(T_H, CURVES["secondary"], BLOCKS)
    at_h = float(edges[80, ladder.T])
    e = CURVES["secondary"] + np.random.default_rng(2).normal(0.0, WHITE, T_H.size)
    found = late.find(rungs_of(T_H, e + 3.0 * WHITE * np.heaviside(T_H - at_h, 1.0), BLOCKS), models())
    assert found is not None
    assert found.astride == 80
    assert found.first == 81


def test_noise_and_drift_hold_no_slips() -> None:
    """Of 200 records none, from white noise to drift five times that of a block with any memory."""
    for seed in range(200):
        rng = np.random.default_rng([3, seed])
        block = WHITE / np.sqrt(T_H.size / BLOCKS)
        drift = 0.0 if seed % 4 == 0 else float(rng.uniform(0.5, 5.0)) * block
        memory_h = 1000.0 * float(rng.choice([0.01, 0.03, 0.1, 0.25, 0.5]))
        e = list(CURVES.values())[seed % 2] + rng.normal(0.0, WHITE, T_H.size)
        if drift:
            e = e + wander(rng, T_H, drift, memory_h)
        assert late.find(rungs_of(T_H, e, BLOCKS), models(drift, memory_h)) is None, seed


def test_drift_that_the_model_does_not_know_holds_no_slips() -> None:
    """The record's own roughness counts, too: of 40 records none with white noise for the only model."""
    for seed in range(40):
        rng = np.random.default_rng([4, seed])
        e = CURVES["secondary"] + rng.normal(0.0, WHITE, T_H.size)
        e = e + wander(rng, T_H, 5.0 * WHITE / np.sqrt(40.0), 1000.0 * float(rng.uniform(0.01, 0.5)))
        assert late.find(rungs_of(T_H, e, BLOCKS), models()) is None, seed


def test_jerky_creep_holds_no_slips() -> None:
    """A jump is a slip where it is alone; creep in jerks has many."""
    for seed in range(20):
        rng = np.random.default_rng([5, seed])
        jerks = np.sort(rng.uniform(0.0, 1000.0, 30))
        e = np.searchsorted(jerks, T_H) * 4.0 * WHITE + rng.normal(0.0, WHITE, T_H.size)
        assert late.find(rungs_of(T_H, e, BLOCKS), models()) is None, seed


@pytest.mark.parametrize("law", ["theta", "damage"])
def test_a_rising_rate_is_no_slip_from_its_beginning_to_rupture(law: str) -> None:
    """The danger of it: looked at after every fortieth of the life, with a scan's noise down to 2
    microstrain."""
    x = np.linspace(0.0, 1.0, 6002)[1:-1]
    if law == "theta":
        e = 0.004 * (1.0 - np.exp(-12.0 * x)) + 0.02 * np.expm1(4.0 * x) / np.expm1(4.0)
    else:
        e = 0.002 * x ** (1.0 / 3.0) + 0.02 * (1.0 - (1.0 - x) ** 0.2)
    for seed, white in enumerate((2e-6, 10e-6, 40e-6)):
        noisy = e + np.random.default_rng([6, seed]).normal(0.0, white, x.size)
        for share in np.arange(0.2, 1.001, 0.025):
            n = int(share * x.size)
            r = rungs_of(1000.0 * x[:n], noisy[:n], BLOCKS)
            assert late.find(r, models(white=white)) is None, (white, share)


@pytest.mark.parametrize("kind", ["corner", "parabola"])
def test_a_rise_that_has_just_begun_is_no_slip(kind: str) -> None:
    """However sudden: the rate doubles at once, or goes up evenly from an hour on; looked at every ten."""
    for seed in range(3):
        rng = np.random.default_rng([7, seed])
        since = np.maximum(T_H - 600.0, 0.0)
        e = 5e-6 * T_H + (5e-6 * since if kind == "corner" else 1e-7 * since**2)
        e = e + rng.normal(0.0, WHITE, T_H.size)
        for n in range(3600, 4800, 60):
            assert late.find(rungs_of(T_H[:n], e[:n], BLOCKS), models()) is None, n


def test_what_a_furnace_step_does_is_no_slip_where_the_temperature_is_logged() -> None:
    """Three kelvin of apparent strain, and creep a tenth faster from there on."""
    for seed in range(5):
        rng = np.random.default_rng([8, seed])
        hot = T_H >= 500.0
        e = 2e-6 * (T_H + 0.1 * np.maximum(T_H - 500.0, 0.0)) + 17e-6 * 3.0 * hot
        r = rungs_of(T_H, e + rng.normal(0.0, WHITE, T_H.size), BLOCKS)
        assert late.find(r, models()) is not None
        r[:, ladder.TEMP] = 600.0 + 3.0 * np.clip((r[:, ladder.END] - 500.0) / (1000.0 / BLOCKS), 0.0, 1.0)
        assert late.find(r, models()) is None


def test_what_an_excursion_crept_is_no_slip() -> None:
    """Twelve kelvin for an hour at a tenth more creep a kelvin is a jump, and it is strain: the integral of
    temperature tells."""
    e = 2e-5 * T_H + 3.0 * WHITE * (T_H >= 500.0) + np.random.default_rng(9).normal(0.0, WHITE, T_H.size)
    r = rungs_of(T_H, e, BLOCKS)
    assert late.find(r, models()) is not None
    r[:, ladder.Q] = 12.0 * (r[:, ladder.T] >= 500.0)
    assert late.find(r, models()) is None


def test_a_stretch_that_stood_still_holds_no_slip() -> None:
    """Blocks of one reading over and over: what is before and after goes on as it was."""
    for seed in range(10):
        e = CURVES["secondary"] + np.random.default_rng([10, seed]).normal(0.0, WHITE, T_H.size)
        e[3000:3160] = e[3000]
        assert late.find(rungs_of(T_H, e, BLOCKS), models()) is None, seed


def test_nothing_is_found_without_a_noise_model_or_with_few_blocks() -> None:
    """What is not known to be noise cannot be exceeded."""
    e = (
        CURVES["secondary"]
        + 4.0 * WHITE * (T_H >= 500.0)
        + np.random.default_rng(11).normal(0, WHITE, T_H.size)
    )
    r = rungs_of(T_H, e, BLOCKS)
    assert late.find(r, models()) is not None
    assert late.find(r, models()[:0]) is None
    assert late.find(r[:10], models()) is None
    assert late.find(r, models(), resolution=5.0 * WHITE) is None


def slipped() -> tuple[intake.IntakeState, np.ndarray, late.Late]:
    """Return an intake in its third segment, jerks having begun the second and third, and a slip in the
    second."""
    rng = np.random.default_rng(12)
    e = CURVES["secondary"] + rng.normal(0.0, WHITE, T_H.size) + 4.0 * WHITE * (T_H >= 500.0)
    r = rungs_of(T_H, e, BLOCKS)
    r[30:, ladder.SEGMENT] += 1.0
    r[110:, ladder.SEGMENT] += 1.0
    context = np.column_stack((T_H[-24:], e[-24:], e[-24:], np.full(24, 600.0)))
    s = intake.IntakeState(
        context=context, segment=2, offsets=(1e-4, 2e-4), jerks=((1, 4e-5, 4e-5), (2, 5e-5, 5e-5))
    )
    found = late.find(r, models())
    assert found is not None
    return s, r, found


def test_what_is_taken_out_is_gone_from_all_that_follows() -> None:
    """Ladder, offsets and context agree on the level, as after a slip that cleaning found."""
    s, r, found = slipped()
    fed, out = late.take_out(s, r, found)
    assert out.shape[0] == r.shape[0] - (found.astride is not None)
    later = out[:, ladder.T] > found.time_h
    assert np.array_equal(
        out[~later], r[r[:, ladder.T] < found.time_h][: int(np.sum(~later))], equal_nan=True
    )
    assert out[later, ladder.E] == pytest.approx(r[found.first :, ladder.E] - found.size, rel=1e-12)
    assert np.unique(out[:, ladder.SEGMENT]).tolist() == [0.0, 1.0, 2.0, 3.0]
    assert fed.segment == 3
    assert [n for n, _, _ in fed.jerks] == [1, 3]
    assert fed.offsets == pytest.approx((1e-4 + found.size, 2e-4 + found.size))
    assert fed.context[:, 1:3] == pytest.approx(s.context[:, 1:3] - found.size)
    assert late.find(out, models()) is None


def test_context_before_the_slip_stays() -> None:
    """The last two dozen scans may reach back beyond a slip where blocks hold a scan or two."""
    s, r, found = slipped()
    t = np.linspace(found.time_h - 3.0, found.time_h + 3.0, 24)
    s = replace(s, context=np.column_stack((t, s.context[:, 1:])))
    fed, _ = late.take_out(s, r, found)
    moved = s.context[:, 1] - fed.context[:, 1]
    assert moved == pytest.approx(np.where(t >= found.time_h, found.size, 0.0))


def test_jerks_are_given_back_alike_before_and_after_a_slip_is_taken_out() -> None:
    """The two touch the same numbers, so their order must not matter beyond rounding."""
    s, r, found = slipped()
    one_state, one = intake.give_back(*late.take_out(s, r, found))
    other_state, other = late.take_out(*intake.give_back(s, r), found)
    assert one == pytest.approx(other, rel=1e-12, abs=1e-18, nan_ok=True)
    assert one_state.segment == other_state.segment == 1
    assert one_state.offsets == pytest.approx(other_state.offsets, rel=1e-12)
    assert one_state.context == pytest.approx(other_state.context, rel=1e-12)
    assert one_state.jerks == other_state.jerks == ()
