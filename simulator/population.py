"""The population of rigs for campaigns, written down with its distributions.

``draw(seed, index)`` returns rig number ``index`` of the population ``seed``; any rig can be made alone,
on any worker, in any order. Each distribution stands below with its reason. "Common practice, no source"
holds where nothing else is said; figures said to be seen come from measured creep curves that are open.

- Life: log-uniform 30 h .. 19 000 h, what measured curves span.
- Records: log-normal about 2 000, 200 .. 6 000; one rig in fifty 6 000 .. 37 000, as open recordings
  hold.
- Curve: ``families.py``; 65 % of rigs turn tertiary, 35 % do not within their record.
- Set point 450 .. 1100 degC; activation energy log-normal about 330 kJ/mol, 140 .. 600 (self-diffusion
  in pure metals to dispersion-hardened alloys), held to 10 % of the rate per K at most.
- Told activation energy: wrong by a log-normal factor of sigma 0.15 (0.6 .. 1.6), as a handbook value
  of a related alloy is; not told for one rig in ten. Told life: the true one times exp(N(0, 0.5)), for
  60 % of rigs.
- White noise 4 .. 260 microstrain a side, log-normal about 22; counts 1 .. 36 microstrain: seen.
- Drift: first order, sd log-normal about 8 microstrain (1 .. 80), memory log-uniform 1 h .. 2000 h, on
  90 % of rigs; a second one on a quarter: hours (electronics, draughts) to months (the extensometer's
  own parts creep).
- Room: day wave 0.2 .. 2.5 K, week wave 0.1 .. 1.5 K, wander 0.1 .. 0.6 K; warm afternoons of 2 .. 7 K
  on a third of rigs; felt as 1 .. 25 microstrain/K behind a lag of 5 min .. 4 h. Logged on 70 % of
  rigs; where it is not, a laboratory that knows its hall keeps it steadier: half of everything.
- Furnace: wander 0.05 .. 0.8 K with memory 0.3 .. 12 h; steps inside the ISO 204 band on a third and
  excursions out of it on a fifth of rigs; apparent strain 0 .. 18 microstrain/K (alumina 5.4,
  austenitic steel 17.3). Where no temperature is logged: a furnace that keeps within 0.2 K, no steps,
  no excursions; nothing in such a record could tell a step from creep, so it would measure nothing but
  luck.
- Sides: two on 60 % of rigs; bending makes them diverge by up to 15 % of strain.
- Slips on a quarter of rigs, 1 .. 3 of 30 .. 3000 microstrain, mostly of one side; re-zeros on 4 %;
  spikes on 40 %; stuck readings, lost sides and gaps (up to 60 h or 8 % of the record) on 6, 4 and 30
  %; bursts of 1 s records on 12 %; records at each 0.01 mm or so on a quarter. Extensometer taken off
  at 5 .. 10 % strain on 4 %.
- Thermocouples: none, one or three (15, 30, 55 %); offsets of 0.5 K; on 4 % of those rigs the
  controlling one drifts by up to 2 K, with the controller output logged.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from simulator.creep import time_of_strain_h
from simulator.families import Drawn, Rng, draw_curve, log_normal, log_uniform
from simulator.rig import Run, simulate, write_csv
from simulator.spec import Event, Furnace, RigSpec, Room, Sampling, Thermocouple, Told, Transducer

__all__ = ["Run", "draw", "lab_settings", "simulate", "write_csv"]

MICRO: Final = 1e-6
SHORTEST_H: Final = 30.0
LONGEST_H: Final = 19_000.0
GAS_CONSTANT_J_PER_MOL_K: Final = 8.314462618


def draw(seed: int, index: int) -> RigSpec:
    """Return rig ``index`` (>= 0) of the population ``seed``."""
    rng = np.random.default_rng([seed, index])
    drawn = draw_curve(rng, log_uniform(rng, SHORTEST_H, LONGEST_H))
    record_h = drawn.duration_h if drawn.rupture_h is None else drawn.rupture_h
    sides = 2 if rng.random() < 0.6 else 1
    thermocouples = thermocouples_of(rng)
    room_logged = bool(rng.random() < 0.7)
    output_logged = bool(rng.random() < 0.3)
    furnace, true_q, furnace_events, output_logged = furnace_of(rng, record_h, thermocouples, output_logged)
    room, room_events = room_of(rng, record_h, room_logged)
    transducers = transducers_of(rng, sides)
    events = [*furnace_events, *room_events, *strain_events_of(rng, record_h, transducers, drawn)]
    return RigSpec(
        creep=drawn.curve,
        duration_h=drawn.duration_h,
        rupture_h=drawn.rupture_h,
        seed=int(rng.integers(1 << 62)),
        kind=drawn.kind,
        activation_energy_j_per_mol=true_q,
        loading_strain=log_uniform(rng, 5e-4, 5e-3) if rng.random() < 0.7 else 0.0,
        furnace=furnace,
        room=room,
        transducers=transducers,
        thermocouples=thermocouples,
        sampling=sampling_of(rng, record_h),
        events=tuple(sorted(events, key=lambda e: e.at_h)),
        room_channel=room_logged,
        output_channel=output_logged,
        break_channel=bool(rng.random() < 0.2),
        told=told_of(rng, drawn, record_h, true_q),
        after="jump" if rng.random() < 0.5 else "lost",
        after_scans=int(rng.integers(0, 6)),
    )


def lab_settings(spec: RigSpec, frame: str = "H1") -> dict[str, Any]:
    """Return the least lab file for this rig as a plain dictionary, ready for a YAML writer."""
    channels: dict[str, Mapping[str, Any]] = {
        c.name: {"role": "strain", "side": c.side} for c in spec.transducers
    }
    channels.update({c.name: {"role": "specimen_temperature"} for c in spec.thermocouples})
    roles = {"room": "room_temperature", "output": "controller_output", "broken": "break_switch"}
    channels.update({name: {"role": roles[name]} for name, on in spec.extra_channels if on})
    told = spec.told
    out: dict[str, Any] = {
        "specimen": {
            "id": "S-1",
            "material": "simulated",
            "extensometer_length_mm": 25.0,
            "diameter_mm": 6.0,
        },
        "stress_mpa": told.stress_mpa,
        "loading": "constant_load" if told.constant_load else "constant_stress",
        "temperature_c": spec.furnace.set_point_c,
        "tolerance": "iso204",
        "starts": "first_scan",
        "channels": channels,
    }
    if told.activation_energy_j_per_mol is not None:
        out["activation_energy_kj_per_mol"] = round(told.activation_energy_j_per_mol / 1e3, 1)
    if told.stress_exponent is not None:
        out["stress_exponent"] = told.stress_exponent
    if told.expected_rupture_h is not None:
        out["expected_rupture_h"] = float(f"{told.expected_rupture_h:.2g}")
    return {"site": "simulated", "journal": "var/simulated", "frames": {frame: out}}


def iso204_band_k(set_point_c: float) -> float:
    """Return the permitted deviation of ISO 204 [K]: 3, 4, 5, 6 to 600, 800, 1000, 1100 C (from memory)."""
    return (
        3.0
        if set_point_c <= 600.0
        else 4.0
        if set_point_c <= 800.0
        else 5.0
        if set_point_c <= 1000.0
        else 6.0
    )


def told_of(rng: Rng, drawn: Drawn, record_h: float, true_q: float) -> Told:
    """Draw what the user tells of the rig."""
    q = None if rng.random() < 0.10 else true_q * log_normal(rng, 1.0, 0.15, 0.6, 1.6)
    life_h = drawn.rupture_h
    if life_h is None:
        life_h = min(record_h * log_uniform(rng, 1.2, 4.0), drawn.curve.end_h)
    expected = life_h * log_normal(rng, 1.0, 0.5, 0.2, 5.0) if rng.random() < 0.6 else None
    return Told(
        activation_energy_j_per_mol=q,
        expected_rupture_h=expected,
        stress_mpa=float(rng.choice([80, 100, 120, 140, 170, 200, 230, 300])),
        stress_exponent=float(round(rng.uniform(3.0, 9.0), 1)) if rng.random() < 0.4 else None,
        constant_load=drawn.curve.family == "constant_load" or bool(rng.random() < 0.5),
    )


def thermocouples_of(rng: Rng) -> tuple[Thermocouple, ...]:
    """Draw none, one or three thermocouples."""
    names = {0: (), 1: ("mid",), 3: ("top", "mid", "bot")}[int(rng.choice([0, 1, 3], p=[0.15, 0.30, 0.55]))]
    noise = log_uniform(rng, 0.02, 0.2)
    return tuple(Thermocouple(n, float(rng.normal(0.0, 0.5)), noise, 0.1) for n in names)


def furnace_of(
    rng: Rng,
    record_h: float,
    thermocouples: tuple[Thermocouple, ...],
    output_logged: bool,
    set_point_c: float | None = None,
    band_k: float | None = None,
) -> tuple[Furnace, float, list[Event], bool]:
    """Draw furnace, true activation energy and temperature events; say whether the output is logged.

    ``set_point_c`` and ``band_k`` [K] take the place of the drawn one and of ISO 204's.
    """
    set_point = float(round(rng.uniform(450.0, 1100.0)))
    set_point = set_point if set_point_c is None else set_point_c
    most = 0.10 * GAS_CONSTANT_J_PER_MOL_K * (set_point + 273.15) ** 2
    true_q = min(log_normal(rng, 330e3, 0.3, 140e3, 600e3), most)
    wander, memory = log_uniform(rng, 0.05, 0.8), log_uniform(rng, 0.3, 12.0)
    day = float(rng.uniform(0.0, 0.3))
    band = iso204_band_k(set_point) if band_k is None else band_k
    events: list[Event] = []
    if not thermocouples:
        return Furnace(set_point, min(wander, 0.2), memory, min(day, 0.05)), true_q, events, output_logged
    if rng.random() < 0.33:
        level = 0.0
        for at in sorted(rng.uniform(0.03, 0.97, int(rng.integers(1, 4)))):
            goal = float(rng.uniform(-0.8, 0.8)) * band
            events.append(Event("furnace_step", float(at) * record_h, goal - level))
            level = goal
    if rng.random() < 0.20:
        hours = min(log_uniform(rng, 0.3, 6.0), 0.03 * record_h)
        size = float(rng.choice([-1.0, 1.0])) * band * float(rng.uniform(1.1, 2.5))
        events.append(Event("excursion", float(rng.uniform(0.05, 0.95)) * record_h, size, hours))
    control = ""
    if rng.random() < 0.04:
        control = "mid"
        output_logged = True
        start = float(rng.uniform(0.0, 0.5)) * record_h
        size = float(rng.uniform(-2.0, 2.0))
        events.append(Event("thermocouple_drift", start, size, record_h - start, control))
    return Furnace(set_point, wander, memory, day, control), true_q, events, output_logged


def room_of(rng: Rng, record_h: float, logged: bool) -> tuple[Room, list[Event]]:
    """Draw the room, and its warm afternoons."""
    scale = 1.0 if logged else 0.5
    room = Room(
        mean_c=float(rng.uniform(18.0, 27.0)),
        day_k=scale * log_uniform(rng, 0.2, 2.5),
        week_k=scale * log_uniform(rng, 0.1, 1.5),
        wander_k=scale * log_uniform(rng, 0.1, 0.6),
        wander_memory_h=log_uniform(rng, 2.0, 30.0),
        start_hour=float(rng.uniform(0.0, 168.0)),
    )
    events: list[Event] = []
    if rng.random() < 0.33:
        for at in rng.uniform(0.0, 1.0, int(rng.integers(1, 4))):
            hours = float(rng.uniform(5.0, 10.0))
            size = scale * float(rng.uniform(2.0, 7.0))
            events.append(Event("warm_afternoon", float(at) * record_h, size, hours))
    return room, events


def transducers_of(rng: Rng, sides: int) -> tuple[Transducer, ...]:
    """Draw one transducer or two."""
    white = log_normal(rng, 22.0, 0.9, 4.0, 260.0) * MICRO
    count = (log_uniform(rng, 1.0, 36.0) if rng.random() < 0.6 else 1.0) * MICRO
    drifts: list[tuple[float, float]] = []
    for share in (0.9, 0.25):
        if rng.random() < share:
            sd = log_normal(rng, 8.0, 0.9, 1.0, 80.0) * MICRO
            drifts.append((sd, log_uniform(rng, 1.0, 2000.0)))
    per_specimen = float(rng.uniform(0.0, 18.0)) * MICRO
    per_room = float(rng.choice([-1.0, 1.0])) * log_uniform(rng, 1.0, 25.0) * MICRO
    lag_h = log_uniform(rng, 5.0 / 60.0, 4.0)
    spikes = log_uniform(rng, 1e-4, 3e-3) if rng.random() < 0.4 else 0.0
    bending = float(rng.normal(0.0, 0.05))
    bending = min(max(bending, -0.15), 0.15)
    names = ("left", "right") if sides == 2 else ("strain",)
    return tuple(
        Transducer(
            name=name,
            side="AB"[i],
            white=white,
            count=count,
            drifts=tuple(drifts),
            per_specimen_k=per_specimen,
            per_room_k=per_room * float(rng.uniform(0.5, 1.0)),
            room_lag_h=lag_h,
            gain=1.0 if sides == 1 else 1.0 + (bending if i == 0 else -bending),
            zero=float(rng.normal(0.0, 1e-3)),
            spike_share=spikes,
            spike_size=log_uniform(rng, 10.0, 100.0) * white,
        )
        for i, name in enumerate(names)
    )


def strain_events_of(
    rng: Rng, record_h: float, transducers: tuple[Transducer, ...], drawn: Drawn
) -> list[Event]:
    """Draw slips, re-zeros, losses, gaps and bursts."""
    events: list[Event] = []

    def sometime() -> float:
        return float(rng.uniform(0.01, 0.98)) * record_h

    def one_of_them(both: float) -> str:
        return "" if rng.random() < both else str(rng.choice([c.name for c in transducers]))

    if rng.random() < 0.25:
        for _ in range(int(rng.integers(1, 4))):
            size = float(rng.choice([-1.0, 1.0])) * log_uniform(rng, 30.0, 3000.0) * MICRO
            events.append(Event("slip", sometime(), size, channel=one_of_them(0.25)))
    if rng.random() < 0.04:
        events.append(Event("rezero", sometime(), 0.0, channel=one_of_them(0.5)))
    if rng.random() < 0.06:
        events.append(
            Event("stuck", sometime(), 0.0, record_h * log_uniform(rng, 0.002, 0.03), one_of_them(0.3))
        )
    if rng.random() < 0.04:
        events.append(
            Event("lost", sometime(), 0.0, record_h * log_uniform(rng, 0.002, 0.05), one_of_them(0.3))
        )
    if rng.random() < 0.30:
        for _ in range(int(rng.integers(1, 4))):
            hours = min(log_uniform(rng, 0.5, 60.0), 0.08 * record_h)
            events.append(Event("gap", sometime(), 0.0, hours))
    if rng.random() < 0.12:
        events.append(Event("burst", sometime(), 1.0, log_uniform(rng, 0.03, 0.25)))
    if rng.random() < 0.04 and drawn.rupture_h is not None:
        off_h = time_of_strain_h(drawn.curve, float(rng.uniform(0.05, 0.10)), drawn.rupture_h)
        if off_h < drawn.rupture_h:
            events.append(Event("lost", off_h))
    return events


def sampling_of(rng: Rng, record_h: float) -> Sampling:
    """Draw how the rig is scanned."""
    records = log_normal(rng, 2000.0, 0.7, 200.0, 6000.0)
    if rng.random() < 0.02:
        records = log_uniform(rng, 6000.0, 37_000.0)
    return Sampling(
        every_s=float(f"{max(record_h * 3600.0 / records, 5.0):.3g}"),
        jitter=float(rng.choice([0.0, 0.02, 0.2])),
        strain_step=4e-4 * float(rng.uniform(0.8, 2.0)) if rng.random() < 0.25 else 0.0,
    )
