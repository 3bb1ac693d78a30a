"""The physics of a rig, free of sampling: temperatures, true strain and slow drifts over time.

Computed on any ascending grid and read between its points by linear interpolation. Each random
process has a stream of its own under the rig's seed, so that adding one thing (an event, a
channel) leaves the others as they were; on another grid the streams give other paths.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from simulator.creep import FloatArray
from simulator.onset import equivalent_time_h
from simulator.spec import Event, RigSpec

DAY_H: Final = 24.0
WEEK_H: Final = 168.0
WARMEST_HOUR: Final = 16.0
SETTLING_H: Final = 0.2
"""Time constant with which a furnace goes to another level (common practice, no source)."""

STREAM_FURNACE: Final = 1
STREAM_ROOM: Final = 2
STREAM_DRIFT: Final = 100
"""Numbers of the random streams under the seed; drifts take one each from here on."""


@dataclass(frozen=True)
class World:
    """True courses on the grid ``t_h`` [h], each of shape (n,) or (transducers, n).

    ``specimen_c``: true specimen temperature; ``indicated_k``: (thermocouples, n) what each shows beside
    the truth (offset and drift); ``room_c``; ``room_felt_k``: (transducers, n) lagged room temperature less
    its mean, as each transducer feels it; ``output``: controller output [%]; ``equivalent_h``: time at the
    set point; ``strain``, ``rate``: the true creep strain and rate per lab hour; ``drift``: (transducers, n).
    """

    t_h: FloatArray
    specimen_c: FloatArray
    indicated_k: FloatArray
    room_c: FloatArray
    room_felt_k: FloatArray
    output: FloatArray
    equivalent_h: FloatArray
    strain: FloatArray
    rate: FloatArray
    drift: FloatArray


def first_order_noise(rng: np.random.Generator, t_h: FloatArray, sd: float, memory_h: float) -> FloatArray:
    """Return a stationary Ornstein-Uhlenbeck path on ``t_h`` (uneven spacing exact), zero where sd is 0."""
    shocks = rng.standard_normal(t_h.size)
    if sd == 0.0:
        return np.zeros_like(t_h)
    keep = np.exp(-np.diff(t_h) / memory_h)
    shocks[1:] *= np.sqrt(-np.expm1(-2.0 * np.diff(t_h) / memory_h))
    return sd * _recursive(keep, shocks)


def lagged(t_h: FloatArray, x: FloatArray, lag_h: float) -> FloatArray:
    """Return ``x`` behind a first-order lag, starting settled; steps of ``x`` are taken as linear between."""
    if lag_h == 0.0 or x.size < 2:
        return x.copy()
    ratio = np.diff(t_h) / lag_h
    keep = np.exp(-ratio)
    mean = np.where(ratio > 1e-6, -np.expm1(-ratio) / np.maximum(ratio, 1e-300), 1.0 - 0.5 * ratio)
    into = np.empty_like(x)
    into[0] = x[0]
    into[1:] = (1.0 - mean) * x[1:] + (mean - keep) * x[:-1]
    return _recursive(keep, into)


def _recursive(keep: FloatArray, into: FloatArray) -> FloatArray:
    """Return y with y[0] = into[0], y[i] = keep[i-1] y[i-1] + into[i]."""
    y = float(into[0])
    out = [y]
    append = out.append
    for k, b in zip(keep.tolist(), into[1:].tolist(), strict=True):
        y = k * y + b
        append(y)
    return np.array(out)


def event_shape(e: Event, t_h: FloatArray) -> FloatArray:
    """Return the course [K] that a temperature event adds at ``t_h``."""
    since = t_h - e.at_h
    if e.kind == "furnace_step":
        rise = -np.expm1(-np.maximum(since, 0.0) / SETTLING_H)
        if e.hours > 0.0:
            rise = rise + np.expm1(-np.maximum(since - e.hours, 0.0) / SETTLING_H)
        return e.size * rise
    inside = np.clip(since / e.hours, 0.0, 1.0) if e.hours > 0.0 else np.zeros_like(t_h)
    if e.kind == "excursion":
        return e.size * np.clip(10.0 * np.minimum(inside, 1.0 - inside), 0.0, 1.0)
    if e.kind == "warm_afternoon":
        return e.size * np.sin(math.pi * inside)
    if e.kind == "thermocouple_drift":
        return e.size * (inside if e.hours > 0.0 else np.where(since >= 0.0, 1.0, 0.0))
    raise ValueError(f"event_shape: got {e.kind!r}, wanted a temperature event")


def event_edges(spec: RigSpec) -> list[float]:
    """Return the instants [h] at which temperature courses bend, for a grid that must not miss them."""
    edges: list[float] = []
    for e in spec.events:
        if e.kind == "furnace_step":
            for at in (e.at_h, e.at_h + e.hours):
                edges += [
                    at,
                    at + 0.5 * SETTLING_H,
                    at + SETTLING_H,
                    at + 2.0 * SETTLING_H,
                    at + 4.0 * SETTLING_H,
                ]
        elif e.kind in ("excursion", "warm_afternoon", "thermocouple_drift"):
            edges += [e.at_h + e.hours * x for x in (0.0, 0.1, 0.3, 0.5, 0.7, 0.9, 1.0)]
    return edges


def build_world(spec: RigSpec, t_h: FloatArray) -> World:
    """Work out every true course of ``spec`` on ``t_h`` [h], strictly ascending, at least two points."""
    rng_furnace = np.random.default_rng([spec.seed, STREAM_FURNACE])
    rng_room = np.random.default_rng([spec.seed, STREAM_ROOM])
    room, furnace = spec.room, spec.furnace

    waves: FloatArray = np.zeros_like(t_h)
    felt = np.zeros((len(spec.transducers), t_h.size))
    loose = first_order_noise(rng_room, t_h, room.wander_k, room.wander_memory_h)
    for e in spec.events:
        if e.kind == "warm_afternoon":
            loose = loose + event_shape(e, t_h)
    for amplitude, period, phase in (
        (room.day_k, DAY_H, (room.start_hour - WARMEST_HOUR) / DAY_H),
        (room.week_k, WEEK_H, (room.start_hour - 2.5 * DAY_H) / WEEK_H),
    ):
        if amplitude != 0.0:
            angle = 2.0 * math.pi * (t_h / period + phase)
            waves = waves + amplitude * np.cos(angle)
            for i, transducer in enumerate(spec.transducers):
                response = 1.0 / (1.0 + 2.0j * math.pi * transducer.room_lag_h / period)
                felt[i] += (
                    amplitude * abs(response) * np.cos(angle + math.atan2(response.imag, response.real))
                )
    for i, transducer in enumerate(spec.transducers):
        if transducer.per_room_k != 0.0:
            felt[i] += lagged(t_h, loose, transducer.room_lag_h)

    specimen = furnace.set_point_c + first_order_noise(
        rng_furnace, t_h, furnace.wander_k, furnace.wander_memory_h
    )
    if furnace.day_k != 0.0:
        specimen = specimen + furnace.day_k * np.cos(
            2.0 * math.pi * (t_h + room.start_hour - WARMEST_HOUR) / DAY_H
        )
    indicated = np.zeros((len(spec.thermocouples), t_h.size))
    for i, couple in enumerate(spec.thermocouples):
        indicated[i] = couple.offset_k
    names = [c.name for c in spec.thermocouples]
    for e in spec.events:
        if e.kind in ("furnace_step", "excursion"):
            specimen = specimen + event_shape(e, t_h)
        elif e.kind == "thermocouple_drift":
            course = event_shape(e, t_h)
            if e.channel in names:
                indicated[names.index(e.channel)] += course
            if e.channel == furnace.control:
                specimen = specimen - course

    equivalent = equivalent_time_h(t_h, specimen, furnace.set_point_c, spec.activation_energy_j_per_mol)
    speed = np.gradient(equivalent, t_h)
    drift = np.zeros((len(spec.transducers), t_h.size))
    stream = STREAM_DRIFT
    for i, transducer in enumerate(spec.transducers):
        for sd, memory_h in transducer.drifts:
            drift[i] += first_order_noise(np.random.default_rng([spec.seed, stream]), t_h, sd, memory_h)
            stream += 1
    output = (
        furnace.output_percent
        + furnace.output_per_k * (specimen - furnace.set_point_c)
        - furnace.output_per_room_k * (waves + loose)
    )
    return World(
        t_h=t_h,
        specimen_c=specimen,
        indicated_k=indicated,
        room_c=room.mean_c + waves + loose,
        room_felt_k=felt,
        output=output,
        equivalent_h=equivalent,
        strain=spec.creep.strain(equivalent),
        rate=spec.creep.rate(equivalent) * speed,
        drift=drift,
    )
