"""Rigs like one frame: its channels, settings and noise; what is not known of it as in ``population``.

``draw(frame, seed, index)`` returns rig ``index`` of those; any rig can be made alone, on any worker.
What is taken from the frame, and how:

- Channels: as many strain sides and thermocouples, and room, output and break switch if it has them.
- Set point and band: the frame's. Furnace steps and excursions are drawn in its band.
- Activation energy: the told one may be off by a log-normal factor of sigma 0.15 (0.6 .. 1.6), as in the
  population: the true one is drawn around it. Stress exponent: as told. Loading: under constant stress no
  curve is one of a shrinking section.
- Life: the told one times exp(N(0, 0.5)) (0.2 .. 5); without it log-uniform over the population's span.
- Curves: the population's families, unless ``kinds`` restricts them. Frames say nothing about materials.
- Scans: one every ``every_s``; without it as in the population. A record of more than ``most_scans`` is
  thinned: one simulated scan stands for k, its white noise is divided by sqrt(k). That is as much evidence
  for less work; what happens between two simulated scans (spikes above all) is rarer than on the frame.
- Noise: white and drift of the strain, wander of the furnace and swing of the room, as ``measured``; each
  that is None as in the population. A controlling thermocouple drifts only where the output is logged:
  nothing else could tell.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from simulator import population
from simulator.families import NEVER, TURNING, Drawn, Rng, draw_curve, log_normal, log_uniform
from simulator.spec import Event, Furnace, RigSpec, Room, Sampling, Thermocouple, Told, Transducer

KINDS: Final = (*TURNING, *NEVER, "stopped_before")
"""Families of curves that ``kinds`` may name."""
STREAM: Final = 1_000_003
"""Keeps these rigs apart from the population's of the same seed."""
MOST_DRAWS: Final = 20_000
LEAST_SCANS: Final = 50


@dataclass(frozen=True)
class Measured:
    """Noise as measured on a frame; None where it was not.

    ``white``: standard deviation of one scan of one side [1]. ``drift``: (standard deviation of one side [1],
    memory [h]). ``furnace_k``, ``room_k``: standard deviation of specimen and room temperature [K].
    """

    white: float | None = None
    drift: tuple[float, float] | None = None
    furnace_k: float | None = None
    room_k: float | None = None


@dataclass(frozen=True)
class Alike:
    """What rigs are to be like; see the module. ``told`` is what the lab file says of the test."""

    sides: int
    thermocouples: int
    set_point_c: float | None
    band_k: float | None
    told: Told
    room: bool = False
    output: bool = False
    broken: bool = False
    every_s: float | None = None
    most_scans: int = 6000
    kinds: tuple[str, ...] = ()
    measured: Measured = Measured()

    def __post_init__(self) -> None:
        if self.sides not in (1, 2):
            raise ValueError(f"alike.sides: got {self.sides}, wanted 1 or 2")
        if self.most_scans < LEAST_SCANS:
            raise ValueError(f"alike.most_scans: got {self.most_scans}, wanted at least {LEAST_SCANS}")
        for kind in self.kinds:
            if kind not in KINDS:
                raise ValueError(f"alike.kinds: got {kind!r}, wanted some of {', '.join(KINDS)}")


def draw(frame: Alike, seed: int, index: int) -> RigSpec:
    """Return rig ``index`` (>= 0) of those like ``frame``."""
    rng = np.random.default_rng([seed, STREAM, index])
    drawn = _curve(rng, frame, _life_h(rng, frame.told))
    record_h = drawn.duration_h if drawn.rupture_h is None else drawn.rupture_h
    couples = _thermocouples(rng, frame.thermocouples)
    furnace, true_q, furnace_events = _furnace(rng, frame, record_h, couples)
    room, room_events = population.room_of(rng, record_h, frame.room)
    transducers = _transducers(rng, frame)
    sampling, stands_for = _sampling(rng, frame, record_h)
    events = [*furnace_events, *room_events, *population.strain_events_of(rng, record_h, transducers, drawn)]
    return RigSpec(
        creep=drawn.curve,
        duration_h=drawn.duration_h,
        rupture_h=drawn.rupture_h,
        seed=int(rng.integers(1 << 62)),
        kind=drawn.kind,
        activation_energy_j_per_mol=true_q,
        loading_strain=log_uniform(rng, 5e-4, 5e-3) if rng.random() < 0.7 else 0.0,
        furnace=furnace,
        room=_swinging(room, frame.measured.room_k),
        transducers=tuple(_averaged(t, stands_for) for t in transducers),
        thermocouples=couples,
        sampling=sampling,
        events=tuple(sorted(events, key=lambda e: e.at_h)),
        room_channel=frame.room,
        output_channel=frame.output,
        break_channel=frame.broken,
        told=frame.told,
        after="jump" if rng.random() < 0.5 else "lost",
        after_scans=int(rng.integers(0, 6)),
    )


def _life_h(rng: Rng, told: Told) -> float:
    if told.expected_rupture_h is None:
        return log_uniform(rng, population.SHORTEST_H, population.LONGEST_H)
    return told.expected_rupture_h * log_normal(rng, 1.0, 0.5, 0.2, 5.0)


def _curve(rng: Rng, frame: Alike, life_h: float) -> Drawn:
    """Draw curves until one may be had on this frame; families are a few per cent each, so it comes soon."""
    for _ in range(MOST_DRAWS):
        drawn = draw_curve(rng, life_h)
        if frame.kinds and drawn.kind.split("/")[0] not in frame.kinds:
            continue
        if frame.told.constant_load or drawn.curve.family != "constant_load":
            return drawn
    raise ValueError(f"alike.kinds: got {frame.kinds}, of which none was drawn in {MOST_DRAWS} tries")


def _thermocouples(rng: Rng, count: int) -> tuple[Thermocouple, ...]:
    """Thermocouples as in the population; ``mid``, the controlling one where one drifts, comes first."""
    names = ("mid", "top", "bot", *(f"couple{i}" for i in range(4, count + 1)))[:count]
    noise = log_uniform(rng, 0.02, 0.2)
    return tuple(Thermocouple(n, float(rng.normal(0.0, 0.5)), noise, 0.1) for n in names)


def _furnace(
    rng: Rng, frame: Alike, record_h: float, couples: tuple[Thermocouple, ...]
) -> tuple[Furnace, float, list[Event]]:
    furnace, true_q, events, _ = population.furnace_of(
        rng, record_h, couples, frame.output, frame.set_point_c, frame.band_k
    )
    off = log_normal(rng, 1.0, 0.15, 0.6, 1.6)
    if frame.told.activation_energy_j_per_mol is not None:
        true_q = frame.told.activation_energy_j_per_mol / off
    if frame.measured.furnace_k is not None:
        # a day wave has 0.7 of its amplitude as standard deviation; the measured one holds both
        total = math.hypot(furnace.wander_k, furnace.day_k * 0.5**0.5)
        scale = frame.measured.furnace_k / total
        furnace = replace(furnace, wander_k=furnace.wander_k * scale, day_k=furnace.day_k * scale)
    if not frame.output:
        events = [e for e in events if e.kind != "thermocouple_drift"]
        furnace = replace(furnace, control="")
    return furnace, true_q, events


def _swinging(room: Room, sd_k: float | None) -> Room:
    """Return ``room`` with all its courses scaled to the standard deviation ``sd_k`` [K]."""
    if sd_k is None:
        return room
    total = math.hypot(room.day_k * 0.5**0.5, room.week_k * 0.5**0.5, room.wander_k)
    k = sd_k / total
    return replace(room, day_k=room.day_k * k, week_k=room.week_k * k, wander_k=room.wander_k * k)


def _transducers(rng: Rng, frame: Alike) -> tuple[Transducer, ...]:
    out = population.transducers_of(rng, frame.sides)
    white, drift = frame.measured.white, frame.measured.drift
    if white is not None:  # as measured it holds the counts too
        out = tuple(
            replace(t, white=white, count=0.0, spike_size=t.spike_size * white / t.white) for t in out
        )
    if drift is not None:
        out = tuple(replace(t, drifts=(drift,) if drift[0] > 0.0 else ()) for t in out)
    return out


def _sampling(rng: Rng, frame: Alike, record_h: float) -> tuple[Sampling, float]:
    """Return how the rig is scanned, and how many of the frame's scans one of these stands for."""
    sampling = population.sampling_of(rng, record_h)
    given = sampling.every_s if frame.every_s is None else frame.every_s
    every = max(given, record_h * 3600.0 / frame.most_scans)
    step = 0.0 if frame.every_s is not None else sampling.strain_step
    return replace(sampling, every_s=every, strain_step=step), every / given


def _averaged(t: Transducer, scans: float) -> Transducer:
    """Return ``t`` as the mean of so many scans sees it: white noise and errors of counts average out."""
    if scans <= 1.0:
        return t
    white = math.sqrt((t.white**2 + t.count**2 / 12.0) / scans)
    return replace(t, white=white, count=0.0)
