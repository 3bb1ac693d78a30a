"""Rigs in lab time: what a sensor gives at a moment, for emulated instruments."""

from __future__ import annotations

import math

import numpy as np
import pytest

from simulator.scene import SCENARIOS, RigSignals, Scene

IDEAL = {
    "creep": {"family": "steady", "rate_per_h": 1e-4},
    "duration_h": 500.0,
    "furnace": {"wander_k": 0.0},
    "room": {"day_k": 0.0, "week_k": 0.0, "wander_k": 0.0},
    "transducers": [
        {"name": "left", "side": "A", "white": 0.0},
        {"name": "right", "side": "B", "white": 0.0},
    ],
    "thermocouples": [{"name": "mid", "noise_k": 0.0}],
}


def test_a_rig_starts_creeping_when_its_load_goes_on() -> None:
    """Frames of a bench need not start together; before the load the specimen hangs unstrained."""
    rig = RigSignals(IDEAL | {"starts_h": 20.0}, 1, "H1")
    assert [rig.read("left", h) for h in (0.0, 20.0, 120.0)] == pytest.approx([0.0, 0.0, 0.01])
    assert rig.read("mid", 0.0) == pytest.approx(980.0)


def test_slips_and_rezeros_hold_from_their_moment() -> None:
    """Also when asked out of order: a reading is a function of time."""
    events = [
        {"kind": "slip", "at_h": 100, "size": 3e-4, "channel": "left"},
        {"kind": "rezero", "at_h": 200, "size": 0.0},
        {"kind": "stuck", "at_h": 300, "hours": 10, "channel": "right"},
    ]
    rig = RigSignals(IDEAL | {"events": events}, 1, "H1")
    assert rig.read("left", 201.0) == pytest.approx(1e-4)
    assert rig.read("left", 150.0) == pytest.approx(0.0153)
    assert rig.read("right", 150.0) == pytest.approx(0.015)
    assert rig.read("left", 50.0) == pytest.approx(0.005)
    assert rig.read("right", 309.0) == rig.read("right", 301.0)
    assert rig.read("right", 311.0) > rig.read("right", 309.0)


def test_lost_sensors_show_nothing_or_an_open_circuit() -> None:
    """An extensometer that fell off gives no reading, a broken thermocouple an over-range."""
    events = [
        {"kind": "lost", "at_h": 10, "hours": 5},
        {"kind": "lost", "at_h": 100, "channel": "mid"},
    ]
    rig = RigSignals(IDEAL | {"events": events}, 1, "H1")
    assert math.isnan(rig.read("left", 12.0))
    assert rig.read("mid", 12.0) == pytest.approx(980.0)
    assert math.isfinite(rig.read("left", 16.0))
    assert math.isinf(rig.read("mid", 400.0))


def test_every_named_scenario_plays_for_the_five_minutes_of_a_bench() -> None:
    """Three hundred lab hours; one of them ruptures, and only that one."""
    scene = Scene({name: {"scenario": name} for name in SCENARIOS}, 7)
    for name, rig in scene.rigs.items():
        for channel in rig.spec.channels:
            readings = [scene.read(f"{name}.{channel}", float(h)) for h in range(0, 140, 7)]
            assert all(math.isfinite(x) for x in readings)
    assert [n for n, r in scene.rigs.items() if r.rupture_h is not None] == ["tertiary_and_rupture"]
    broken = scene.rigs["tertiary_and_rupture"]
    assert broken.read("broken", 140.0) == 0.0
    assert broken.read("broken", 160.0) == 1.0
    assert math.isnan(broken.read("left", 160.0))
    hot = [scene.read("excursion.mid", 70.0 + x) for x in np.arange(0.3, 1.2, 0.1)]
    assert min(hot) > 985.5


def test_the_jump_at_rupture_stays_where_it_jumped_to() -> None:
    """An extensometer that hangs on the broken halves still reads something."""
    rig = RigSignals({"scenario": "tertiary_and_rupture", "after": "jump"}, 1, "H1")
    assert rig.read("left", 160.0) == rig.read("left", 300.0) > 0.2


def test_values_override_the_named_scenario_and_seeds_differ_by_rig() -> None:
    """Two frames with the same scenario must not have the same noise."""
    scene = Scene({"A": {"scenario": "quiet"}, "B": {"scenario": "quiet", "loading_strain": 0.01}}, 1)
    assert scene.read("B.strain", 0.0) == pytest.approx(0.01, abs=5e-5)
    a, b = scene.rigs["A"], scene.rigs["B"]
    assert a.spec.seed != b.spec.seed
    assert Scene({"A": {"scenario": "quiet"}}, 2).rigs["A"].spec.seed != a.spec.seed
    with pytest.raises(KeyError):
        a.read("nothing", 0.0)
