"""Simulated rigs: what is injected is found again in the readings, and the truth is true."""

from __future__ import annotations

import csv
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from simulator.creep import ExponentialPrimary, FloatArray, Omega, Steady, Sum, Theta
from simulator.rig import Run, simulate, write_csv
from simulator.spec import (
    Event,
    Furnace,
    RigSpec,
    Room,
    Sampling,
    Thermocouple,
    Transducer,
    rig_from_json,
    rig_to_json,
)
from simulator.world import build_world, first_order_noise, lagged

STILL = Furnace(set_point_c=600.0, wander_k=0.0)
CALM = Room(day_k=0.0, week_k=0.0, wander_k=0.0, noise_k=0.0)
IDEAL = (Transducer("left", "A", white=0.0), Transducer("right", "B", white=0.0))
THETA = Theta(0.010, 0.010, 0.005, 0.002)


def rig(**changes: object) -> RigSpec:
    """An ideal rig on the constructed theta curve: no noise, no wander, nothing happens."""
    base = RigSpec(
        THETA, 1000.0, seed=11, furnace=STILL, room=CALM, transducers=IDEAL,
        thermocouples=(Thermocouple("mid", noise_k=0.0, display=0.0),), sampling=Sampling(every_s=900.0),
    )  # fmt: skip
    return replace(base, **changes)  # type: ignore[arg-type]


def at(run: Run, name: str, t_h: float) -> float:
    i = int(np.argmin(np.abs(run.columns["time_s"] / 3600.0 - t_h)))
    return float(run.columns[name][i])


def test_an_ideal_rig_records_the_true_curve_and_its_truth_is_the_curves() -> None:
    """Without nuisances the readings are the theta curve, and its events are where they were worked out."""
    run = simulate(rig())
    t_h = run.columns["time_s"] / 3600.0
    assert np.allclose(run.columns["left"], THETA.strain(t_h), atol=2e-9)
    truth = run.truth
    assert truth.minimum_h == pytest.approx(326.002, abs=0.01)
    assert truth.rise_5_percent_h == pytest.approx(403.644, abs=0.01)
    assert truth.offset_0p2_h == pytest.approx(673.459, abs=0.01)
    assert truth.turns_tertiary
    assert truth.rises
    assert truth.rupture_h is None


def test_the_same_specification_gives_the_same_digits_and_another_seed_does_not() -> None:
    """Every campaign must be repeatable from its seed, on any machine with any number of workers."""
    noisy = rig(furnace=Furnace(), room=Room(), transducers=(Transducer("left", drifts=((1e-5, 9.0),)),))
    one, again, other = simulate(noisy), simulate(noisy), simulate(replace(noisy, seed=12))
    for name, column in one.columns.items():
        assert np.array_equal(column, again.columns[name], equal_nan=True)
    assert not np.array_equal(one.columns["left"], other.columns["left"])


def test_adding_an_event_leaves_the_other_random_courses_as_they_were() -> None:
    """So that the same rig can be compared with and without one thing."""
    noisy = rig(transducers=(Transducer("left", drifts=((1e-5, 9.0),)),), room=Room())
    plain = simulate(noisy)
    slipped = simulate(replace(noisy, events=(Event("slip", 500.0, 1e-3),)))
    step = slipped.columns["left"] - plain.columns["left"]
    assert np.allclose(step[plain.columns["time_s"] / 3600.0 < 500.0], 0.0)
    assert np.allclose(step[plain.columns["time_s"] / 3600.0 >= 500.0], 1e-3)


@pytest.mark.parametrize(("offset_k", "ratio"), [(3.0, 1.15199), (-3.0, 0.86721)])
def test_a_hotter_specimen_creeps_faster_by_the_published_ratio(offset_k: float, ratio: float) -> None:
    """Q = 300 kJ/mol at 600 C: x1.15199 for +3 K, x0.86721 for -3 K; apparent strain of 17.3e-6 per K."""
    sides = tuple(replace(t, per_specimen_k=17.3e-6) for t in IDEAL)
    event = (Event("furnace_step", 200.0, offset_k),)
    run = simulate(
        rig(
            creep=Steady(1e-5),
            activation_energy_j_per_mol=300e3,
            transducers=sides,
            events=event,
        )
    )
    before = (at(run, "left", 190.0) - at(run, "left", 10.0)) / 180.0
    after = (at(run, "left", 900.0) - at(run, "left", 300.0)) / 600.0
    assert after / before == pytest.approx(ratio, rel=1e-3)
    jump = at(run, "left", 202.0) - at(run, "left", 199.0) - 3e-5
    assert jump == pytest.approx(17.3e-6 * offset_k, abs=4e-6)
    assert not run.truth.rises, "a furnace step is not tertiary creep"


def test_the_onset_is_dated_in_lab_time() -> None:
    """A furnace 3 K too hot from the start brings the minimum forward by the ratio of rates."""
    hot = (Event("furnace_step", 0.0, 3.0),)
    run = simulate(rig(activation_energy_j_per_mol=300e3, events=hot))
    assert run.truth.minimum_h == pytest.approx(326.002 / 1.15199, rel=2e-3)


def test_rupture_ends_the_record_with_what_the_channels_then_show() -> None:
    """Extensometer lost or jumped, break switch on, thermocouples as before."""
    curve = Sum((ExponentialPrimary(0.003, 0.05), Omega(4e-5, 60.0)))
    for after, check in (("lost", math.isnan), ("jump", lambda x: x > 0.15)):
        run = simulate(
            rig(
                creep=curve, rupture_h=415.0, duration_h=900.0, after=after, after_scans=4, break_channel=True
            )
        )
        assert run.truth.rupture_h == pytest.approx(415.0, abs=0.01)
        assert run.columns["broken"][-5:].tolist() == [0.0, 1.0, 1.0, 1.0, 1.0]
        assert all(check(x) for x in run.columns["left"][-4:])
        assert run.columns["mid"][-1] == 600.0


def test_noise_has_the_standard_deviation_and_the_memory_it_says() -> None:
    """White noise, counts and first-order drift, measured on long records."""
    sides = (Transducer("left", white=20e-6), Transducer("right", white=0.0, count=36e-6))
    run = simulate(rig(creep=Steady(1e-7), transducers=sides, duration_h=5000.0))
    t_h = run.columns["time_s"] / 3600.0
    assert np.std(run.columns["left"] - 1e-7 * t_h) == pytest.approx(20e-6, rel=0.03)
    # a ramp through many counts: the error of rounding is uniform
    assert np.std(run.columns["right"] - 1e-7 * t_h) == pytest.approx(36e-6 / 12.0**0.5, rel=0.03)
    assert set(np.round(run.columns["right"] / 36e-6, 3) % 1.0) == {0.0}
    drift = first_order_noise(np.random.default_rng(3), np.arange(40000) * 0.5, 2.0, 6.0)
    assert np.std(drift) == pytest.approx(2.0, rel=0.05)
    assert np.corrcoef(drift[:-12], drift[12:])[0, 1] == pytest.approx(math.exp(-1.0), abs=0.05)


def test_truth_says_what_noise_the_mean_of_the_sides_has() -> None:
    """Two sides halve the variance; unlogged room temperature is noise to whoever cannot see it."""
    sides = tuple(replace(t, white=20e-6, drifts=((8e-6, 30.0),), per_room_k=1e-5) for t in IDEAL)
    logged = simulate(rig(transducers=sides, room=Room(wander_k=0.5))).truth.noise
    assert logged.white == pytest.approx(20e-6 / 2.0**0.5)
    assert logged.drifts == (pytest.approx((8e-6 / 2.0**0.5, 30.0)),)
    unlogged = simulate(rig(transducers=sides, room=Room(wander_k=0.5), room_channel=False)).truth.noise
    assert len(unlogged.drifts) == 4
    assert unlogged.drifts[1] == pytest.approx((5e-6, 6.0))


def test_the_room_is_felt_later_and_weaker_through_a_slow_transducer() -> None:
    """First-order lag: amplitude 1/sqrt(1 + (w tau)^2), phase atan(w tau)."""
    room = Room(day_k=2.0, week_k=0.0, wander_k=0.0, start_hour=16.0)
    sides = (Transducer("left", white=0.0, per_room_k=10e-6, room_lag_h=6.0),)
    world = build_world(rig(room=room, transducers=sides), np.linspace(0.0, 96.0, 9601))
    w = 2.0 * math.pi * 6.0 / 24.0
    felt = world.room_felt_k[0]
    assert felt.max() == pytest.approx(2.0 / math.hypot(1.0, w), rel=1e-4)
    assert world.t_h[int(np.argmax(felt[:2400]))] == pytest.approx(
        math.atan(w) * 24.0 / (2.0 * math.pi), abs=0.02
    )
    t = np.linspace(0.0, 50.0, 501)
    settled = lagged(t, np.where(t > 0.0, 1.0, 0.0), 5.0)
    assert np.allclose(settled[1:], 1.0 - np.exp(-(t[1:] - 0.05) / 5.0), atol=2e-3)


def test_slips_rezeros_spikes_stuck_and_lost_readings_are_where_they_were_put() -> None:
    """Each fault of a transducer touches its channel, its time and nothing else."""
    events = (
        Event("slip", 100.0, 4e-4, channel="left"),
        Event("rezero", 300.0, 0.0, channel="right"),
        Event("spike", 400.0, 2e-3, channel="left"),
        Event("stuck", 500.0, hours=20.0, channel="left"),
        Event("lost", 600.0, hours=10.0, channel="mid"),
        Event("lost", 700.0, hours=5.0),
        Event("gap", 800.0, hours=30.0),
    )
    plain, run = simulate(rig()), simulate(rig(events=events))
    off = run.columns["left"] - np.interp(
        run.columns["time_s"], plain.columns["time_s"], plain.columns["left"]
    )
    t_h = run.columns["time_s"] / 3600.0
    assert np.allclose(off[t_h < 100.0], 0.0, atol=1e-9)
    assert np.allclose(off[(t_h >= 100.0) & (t_h < 400.0)], 4e-4, atol=1e-9)
    assert off[t_h == 400.0] == pytest.approx([2.4e-3])
    assert np.ptp(run.columns["left"][(t_h >= 500.0) & (t_h < 520.0)]) == 0.0
    assert at(run, "right", 300.0) == 0.0
    assert np.isnan(run.columns["mid"]).sum() == 40
    assert np.isnan(run.columns["left"]).sum() == np.isnan(run.columns["right"]).sum() == 20
    assert not np.any((t_h >= 800.0) & (t_h < 830.0))
    assert run.truth.events == events


def test_a_drifting_thermocouple_under_control_shows_in_the_output_only() -> None:
    """Indication steady, controller output and strain move: not tertiary creep."""
    events = (Event("thermocouple_drift", 100.0, 3.0, 500.0, "mid"),)
    furnace = replace(STILL, control="mid", output_noise=0.0)
    run = simulate(
        rig(creep=Steady(1e-5), events=events, furnace=furnace, output_channel=True, duration_h=900.0)
    )
    assert np.ptp(run.columns["mid"]) < 1e-9
    fallen = at(run, "output", 800.0) - at(run, "output", 50.0)
    assert fallen == pytest.approx(-3.0 * furnace.output_per_k, abs=0.011)
    assert run.truth.specimen_c[-1] == pytest.approx(597.0)
    assert not run.truth.rises


def test_records_come_at_each_step_of_strain_and_in_bursts() -> None:
    """Displacement-triggered records and one-second bursts make real records uneven, with equal stamps."""
    sampling = Sampling(every_s=3600.0, strain_step=4e-4)
    events = (Event("burst", 10.0, 1.0, 0.1),)
    run = simulate(rig(sampling=sampling, events=events))
    t_s = run.columns["time_s"]
    extra = t_s.size - 1001 - 360
    assert extra == int(THETA.strain(1000.0) / 4e-4)
    assert np.all(np.diff(t_s) >= 0.0)
    assert np.isclose(np.diff(t_s), 1.0, atol=0.011).sum() >= 359


def test_a_recording_on_disk_is_plain_csv_and_reads_back_equal(tmp_path: Path) -> None:
    """First column time_s, other columns by name, empty where there is no reading."""
    run = simulate(rig(events=(Event("lost", 500.0, hours=10.0),)))
    path = tmp_path / "run.csv"
    write_csv(run, path)
    with path.open(encoding="utf-8", newline="") as file:
        header, *rows = list(csv.reader(file))
    assert header == ["time_s", "left", "right", "mid", "room"]
    assert any(row[1] == "" for row in rows)
    columns: list[FloatArray] = [
        np.array([float(x) if x else math.nan for x in c]) for c in zip(*rows, strict=True)
    ]
    for name, column in zip(header, columns, strict=True):
        assert np.array_equal(column, run.columns[name], equal_nan=True)


def test_a_rig_survives_its_json() -> None:
    """Scenarios and campaign records are JSON."""
    spec = rig(events=(Event("slip", 1.0, 1e-4),), transducers=(Transducer("x", drifts=((1e-6, 3.0),)),))
    assert rig_from_json(rig_to_json(spec)) == spec


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"duration_h": -1.0}, "rig.duration_h: got -1.0"),
        ({"after": "explodes"}, "rig.after: got 'explodes'"),
        ({"transducers": [{"name": "mid"}]}, "channel names must differ"),
        (
            {"transducers": [{"name": "a", "drifts": [[1e-6]]}]},
            r"rig.transducers\[0\].drifts\[0\]: got 1 values",
        ),
        ({"furnace": {"set_point": 980}}, "rig.furnace.set_point: unknown"),
        ({"furnace": {"set_point_c": "hot"}}, "rig.furnace.set_point_c: got 'hot', wanted float"),
        ({"events": {"kind": "slip"}}, "rig.events: got"),
        ({"events": [{"kind": "slip", "at_h": 1, "hours": -2}]}, "got hours -2"),
    ],
)
def test_a_wrong_rig_is_refused_by_place(change: dict[str, object], message: str) -> None:
    """Scenarios are written by hand."""
    with pytest.raises(ValueError, match=message):
        rig_from_json(rig_to_json(rig()) | change)
