"""The population for campaigns: repeatable, as wide as it says, and with a truth that can be relied on."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest

from simulator.families import NEVER
from simulator.population import draw, iso204_band_k, lab_settings, simulate
from simulator.rig import Run
from simulator.spec import rig_from_json, rig_to_json

COUNT = 150


@pytest.fixture(scope="module")
def runs() -> list[Run]:
    return [simulate(draw(7, i)) for i in range(COUNT)]


def test_a_rig_can_be_drawn_alone_and_again() -> None:
    """Workers draw rigs by number, in any order."""
    assert draw(7, 31) == draw(7, 31)
    assert draw(7, 31) != draw(7, 32)
    assert draw(7, 31) != draw(8, 31)
    assert rig_from_json(rig_to_json(draw(7, 31))) == draw(7, 31)


def test_the_population_is_as_wide_as_it_says(runs: list[Run]) -> None:
    """Lives of 30 to 19 000 h, 200 to 37 000 records, noise of 4 to 260 microstrain, a third never turns."""
    never = sum(not r.truth.turns_tertiary for r in runs) / COUNT
    assert 0.25 < never < 0.45
    records = [r.columns["time_s"].size for r in runs]
    assert min(records) >= 150
    assert max(records) < 40_000
    ends = np.array([r.truth.end_h for r in runs])
    assert ends.min() < 60.0
    assert ends.max() > 8_000.0
    white = [t.white for r in runs for t in r.spec.transducers]
    assert min(white) >= 4e-6
    assert max(white) <= 260e-6
    kinds = Counter(r.truth.kind.split("/")[0] for r in runs)
    assert len(kinds) >= 12
    for told in ("activation_energy_j_per_mol", "expected_rupture_h"):
        share = sum(getattr(r.spec.told, told) is None for r in runs) / COUNT
        assert 0.02 < share < 0.6


def test_the_truth_is_in_order_and_within_the_record(runs: list[Run]) -> None:
    """First rise, least rate, +5 %, 0.2 % offset, rupture: never the other way round."""
    for run in runs:
        truth = run.truth
        assert truth.turns_tertiary <= truth.rises
        assert not (truth.rises and truth.kind.split("/")[0] in (*NEVER, "stopped_before"))
        assert (truth.first_rise_h is not None) == truth.rises
        assert truth.rupture_h is None or (truth.turns_tertiary and truth.offset_0p2_h is not None)
        times = [truth.minimum_h, truth.rise_5_percent_h, truth.end_h]
        known = [t for t in times if t is not None]
        assert known == sorted(known)
        if truth.first_rise_h is not None:
            assert truth.incubation_h <= truth.first_rise_h <= truth.minimum_h + 1e-9
        if truth.offset_0p2_h is not None:
            assert truth.minimum_h < truth.offset_0p2_h <= truth.end_h


def test_rigs_that_never_turn_have_a_rate_at_the_set_point_that_never_rises(runs: list[Run]) -> None:
    """Their detections are all false; a hidden rise would make the count a lie."""
    for run in runs:
        if run.truth.rises:
            continue
        grid = np.linspace(run.truth.incubation_h, run.truth.end_h, 3000)
        equivalent = np.interp(grid, run.truth.t_h, run.truth.equivalent_h)
        rate = run.spec.creep.envelope.rate(equivalent)
        assert np.all(rate <= 1.01 * np.minimum.accumulate(rate))


def test_readings_follow_the_true_curve(runs: list[Run]) -> None:
    """Beside slips and re-zeros, the recorded change of strain is the true one but for noise and bending."""
    for run in runs:
        if any(e.kind in ("slip", "rezero", "stuck", "lost") for e in run.spec.events):
            continue
        t_h = run.columns["time_s"] / 3600.0
        inside = t_h <= run.truth.end_h
        mean = np.mean([run.columns[t.name][inside] for t in run.spec.transducers], axis=0)
        middle = np.median(mean[-9:]) - np.median(mean[:9])
        true = np.interp(t_h[inside], run.truth.t_h, run.truth.strain)
        wanted = np.median(true[-9:]) - np.median(true[:9])
        assert middle == pytest.approx(wanted, rel=0.02, abs=8e-4)


def test_the_lab_file_of_a_rig_names_exactly_its_channels(runs: list[Run]) -> None:
    """The program is told what a laboratory would tell it, and the recording fits."""
    for run in runs[:40]:
        frame = lab_settings(run.spec)["frames"]["H1"]
        assert list(frame["channels"]) == [c for c in run.columns if c != "time_s"]
        assert ("activation_energy_kj_per_mol" in frame) == (
            run.spec.told.activation_energy_j_per_mol is not None
        )


def test_furnace_steps_of_the_population_stay_inside_the_band(runs: list[Run]) -> None:
    """They are the ones that must never be called a stage; ISO 204 bands from memory."""
    assert [iso204_band_k(t) for t in (600.0, 601.0, 800.0, 801.0, 1000.0, 1001.0)] == [3, 4, 4, 5, 5, 6]
    for run in runs:
        levels = np.cumsum([e.size for e in run.spec.events if e.kind == "furnace_step"])
        assert np.all(np.abs(levels) <= 0.8 * iso204_band_k(run.spec.furnace.set_point_c) + 1e-9)
