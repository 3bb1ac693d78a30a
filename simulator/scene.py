"""Rigs playing in lab time: any channel's reading at any moment, for emulated instruments.

A scenario is a rig in plain JSON values (``spec.rig_from_json``) with three keys more:

- ``scenario``: the name of one of SCENARIOS, whose values the others override;
- ``starts_h``: lab hours after the scene's origin at which full load is on (default 0; before that the
  specimen hangs unstrained at temperature);
- ``grid_s``: step of the precomputed courses [s] (default 300).

The rig's ``sampling`` and its gaps and bursts are of no account here: scans are taken by whoever asks.
``seed`` defaults to the scene's seed and the rig's name. Example, a slip and a lost thermocouple::

    {"creep": {"family": "sum", "parts": [
        {"family": "exponential_primary", "amount": 0.002, "per_h": 0.05},
        {"family": "kachanov", "rate0_per_h": 5e-5, "n": 5, "phi": 7, "rupture_h": 400}]},
     "duration_h": 2000, "rupture_h": 398,
     "events": [{"kind": "slip", "at_h": 80, "size": 4e-4, "channel": "left"},
                {"kind": "lost", "at_h": 120, "channel": "top"}]}
"""

from __future__ import annotations

import copy
import math
import zlib
from collections.abc import Mapping
from typing import Any, Final

import numpy as np

from simulator.creep import FloatArray
from simulator.rig import JUMP_AT_RUPTURE
from simulator.spec import Event, RigSpec, Transducer, rig_from_json
from simulator.world import World, build_world, event_edges

_TWO_SIDES: Final = [
    {"name": "left", "side": "A", "white": 4e-6, "count": 2e-6, "drifts": [[2e-6, 8.0]],
     "per_room_k": 2e-6, "per_specimen_k": 4e-6, "gain": 1.03},
    {"name": "right", "side": "B", "white": 4e-6, "count": 2e-6, "drifts": [[2e-6, 8.0]],
     "per_room_k": 2e-6, "per_specimen_k": 4e-6, "gain": 0.97},
]  # fmt: skip
_QUIET_FURNACE: Final = {"set_point_c": 980.0, "wander_k": 0.2, "wander_memory_h": 2.0}


def _steady(primary: float, per_h: float, rate_per_h: float) -> dict[str, Any]:
    return {
        "family": "sum",
        "parts": [
            {"family": "exponential_primary", "amount": primary, "per_h": per_h},
            {"family": "steady", "rate_per_h": rate_per_h},
        ],
    }


SCENARIOS: Final[Mapping[str, Mapping[str, Any]]] = {
    # least rate at 23 h, 5 % above it at 33 h, 0.2 % offset at 71 h, rupture at 150 h with 13 % strain
    "tertiary_and_rupture": {
        "creep": {
            "family": "sum",
            "parts": [
                {"family": "exponential_primary", "amount": 0.004, "per_h": 0.2},
                {"family": "omega", "rate0_per_h": 1.6e-4, "omega": 41.5},
            ],
        },
        "duration_h": 400.0,
        "rupture_h": 150.0,
        "loading_strain": 0.002,
        "transducers": _TWO_SIDES,
        "furnace": _QUIET_FURNACE,
        "break_channel": True,
    },
    # secondary creep at 980 C; 8 K too hot for an hour and a half, and later a step inside the band
    "excursion": {
        "creep": _steady(0.003, 0.15, 2e-5),
        "duration_h": 5000.0,
        "loading_strain": 0.002,
        "transducers": _TWO_SIDES,
        "furnace": _QUIET_FURNACE,
        "events": [
            {"kind": "excursion", "at_h": 70.0, "size": 8.0, "hours": 1.5},
            {"kind": "furnace_step", "at_h": 150.0, "size": 2.0},
        ],
    },
    # secondary creep; the left side slips, later the right side is re-zeroed
    "slip": {
        "creep": _steady(0.003, 0.15, 2e-5),
        "duration_h": 5000.0,
        "loading_strain": 0.002,
        "transducers": _TWO_SIDES,
        "furnace": _QUIET_FURNACE,
        "events": [
            {"kind": "slip", "at_h": 60.0, "size": 6e-4, "channel": "left"},
            {"kind": "rezero", "at_h": 130.0, "size": 0.0, "channel": "right"},
        ],
    },
    # a long secondary stage, one transducer, in which nothing happens
    "quiet": {
        "creep": _steady(0.002, 0.08, 1e-5),
        "duration_h": 5000.0,
        "loading_strain": 0.0015,
        "transducers": [{"name": "strain", "side": "A", "white": 5e-6, "count": 2e-6, "per_room_k": 2e-6}],
        "thermocouples": [{"name": "mid"}],
        "furnace": _QUIET_FURNACE,
    },
}
"""Scenarios by name, made so that a bench at 3600 times real time shows them within five minutes."""


class RigSignals:
    """One rig's channels as functions of lab hours after the scene's origin.

    ``read`` adds fresh white noise and counts at every call, as an instrument does. NaN means that the
    channel has nothing to show (extensometer lost), infinity an open sensor (thermocouple broken).
    """

    def __init__(self, scenario: Mapping[str, Any], seed: int, name: str) -> None:
        raw = _resolve(scenario, f"rigs.{name}")
        self._starts_h = _number(raw.pop("starts_h", 0.0), f"rigs.{name}.starts_h")
        grid_s = _number(raw.pop("grid_s", 300.0), f"rigs.{name}.grid_s")
        if not grid_s > 0.0:
            raise ValueError(f"rigs.{name}.grid_s: got {grid_s}, wanted > 0")
        own = zlib.crc32(name.encode()) ^ (seed & 0xFFFFFFFF)
        raw.setdefault("seed", own)
        self.spec: RigSpec = rig_from_json(raw, f"rigs.{name}")
        spec = self.spec
        steps = math.ceil(spec.longest_h * 3600.0 / grid_s) + 1
        nominal = np.arange(steps) * grid_s / 3600.0
        edges = [e for e in event_edges(spec) if 0.0 < e < nominal[-1]]
        self._world: World = build_world(spec, np.union1d(nominal, edges))
        self._t = self._world.t_h
        self._rng = np.random.default_rng([own, 77])
        self.rupture_h: float | None = None
        if spec.rupture_h is not None and self._world.equivalent_h[-1] >= spec.rupture_h:
            self.rupture_h = float(np.interp(spec.rupture_h, self._world.equivalent_h, self._t))
        self._strain = {t.name: (i, t) for i, t in enumerate(spec.transducers)}
        self._couples = {c.name: (i, c) for i, c in enumerate(spec.thermocouples)}
        self._slow = [
            self._world.drift[i] + t.per_room_k * self._world.room_felt_k[i]
            for i, t in enumerate(spec.transducers)
        ]
        self._shifts = {t.name: self._settle(t) for t in spec.transducers}
        self._lost: dict[str, list[Event]] = {}
        for e in spec.events:
            if e.kind == "lost":
                for channel in [e.channel] if e.channel else [t.name for t in spec.transducers]:
                    self._lost.setdefault(channel, []).append(e)

    def read(self, channel: str, lab_h: float) -> float:
        """Return the reading of ``channel`` at ``lab_h`` hours after the origin; NaN, inf as above.

        Raises:
            KeyError: no such channel on this rig.
        """
        h = max(lab_h - self._starts_h, 0.0)
        gone = self.rupture_h is not None and h > self.rupture_h
        lost = any(_during(e, h) for e in self._lost.get(channel, ()))
        if channel in self._strain:
            return math.nan if lost else self._read_strain(channel, h, gone)
        if channel in self._couples:
            if lost:
                return math.inf
            i, couple = self._couples[channel]
            x = self._at(self._world.specimen_c, h) + self._at(self._world.indicated_k[i], h)
            return _stepped(x + couple.noise_k * self._rng.standard_normal(), couple.display)
        if channel == "room":
            x = self._at(self._world.room_c, h)
            return _stepped(x + self.spec.room.noise_k * self._rng.standard_normal(), 0.01)
        if channel == "output":
            x = self._at(self._world.output, h)
            return _stepped(x + self.spec.furnace.output_noise * self._rng.standard_normal(), 0.01)
        if channel == "broken":
            return 1.0 if gone else 0.0
        raise KeyError(channel)

    def has(self, channel: str) -> bool:
        """Return whether ``channel`` can be read; room, output and broken always can."""
        return channel in self._strain or channel in self._couples or channel in ("room", "output", "broken")

    def _at(self, course: FloatArray, h: float) -> float:
        return float(np.interp(h, self._t, course))

    def _noise_free(self, channel: str, h: float) -> float:
        i, t = self._strain[channel]
        spec, world = self.spec, self._world
        x = t.gain * (spec.loading_strain + self._at(world.strain, h)) + t.zero + self._at(self._slow[i], h)
        return x + t.per_specimen_k * (self._at(world.specimen_c, h) - spec.furnace.set_point_c)

    def _settle(self, t: Transducer) -> list[tuple[float, float]]:
        """Return (time, total shift from then on) of slips and re-zeros, in order."""
        shifts: list[tuple[float, float]] = []
        total = 0.0
        for e in sorted(self.spec.events, key=lambda e: e.at_h):
            if e.channel not in ("", t.name):
                continue
            if e.kind == "slip":
                total += e.size
            elif e.kind == "rezero":
                total = e.size - self._noise_free(t.name, e.at_h)
            else:
                continue
            shifts.append((e.at_h, total))
        return shifts

    def _read_strain(self, channel: str, h: float, gone: bool) -> float:
        t = self._strain[channel][1]
        if gone and self.spec.after == "lost":
            return math.nan
        quiet = False
        for e in self.spec.events:
            if e.kind == "stuck" and e.channel in ("", channel) and _during(e, h):
                h, quiet = e.at_h, True
        if gone and self.rupture_h is not None:
            h, quiet = self.rupture_h, True
        x = self._noise_free(channel, h) + (JUMP_AT_RUPTURE if gone else 0.0)
        x += next((shift for at_h, shift in reversed(self._shifts[channel]) if h >= at_h), 0.0)
        if not quiet:
            x += t.white * self._rng.standard_normal()
            if t.spike_share > 0.0 and self._rng.random() < t.spike_share:
                x += t.spike_size * self._rng.standard_normal()
        return _stepped(_stepped(x, t.count), t.display)


class Scene:
    """All rigs of a bench. ``read("H1.left", lab_h)`` is what a sensor of rig H1 gives at that moment."""

    def __init__(self, rigs: Mapping[str, Any], seed: int) -> None:
        self.rigs: dict[str, RigSignals] = {}
        for name, scenario in rigs.items():
            if not isinstance(scenario, Mapping):
                raise ValueError(f"rigs.{name}: got {scenario!r}, wanted an object")
            self.rigs[name] = RigSignals(scenario, seed, name)

    def check(self, source: str, place: str) -> None:
        """Raise ValueError unless ``source`` is RIG.CHANNEL of this scene, or a number to be shown."""
        rig, _, channel = source.rpartition(".")
        if rig not in self.rigs:
            raise ValueError(f"{place}: got {source!r}, wanted RIG.CHANNEL with RIG of {sorted(self.rigs)}")
        if not self.rigs[rig].has(channel):
            known = [*self.rigs[rig].spec.channels]
            raise ValueError(
                f"{place}: got {source!r}, wanted a channel of {rig}: {known}, room, output, broken"
            )

    def read(self, source: str, lab_h: float) -> float:
        """Return the reading of ``source`` (RIG.CHANNEL) at ``lab_h`` [h after the origin]."""
        rig, _, channel = source.rpartition(".")
        return self.rigs[rig].read(channel, lab_h)


def _resolve(scenario: Mapping[str, Any], place: str) -> dict[str, Any]:
    raw = dict(scenario)
    name = raw.pop("scenario", None)
    if name is None:
        return raw
    if name not in SCENARIOS:
        raise ValueError(f"{place}.scenario: got {name!r}, wanted one of {sorted(SCENARIOS)}")
    return {**copy.deepcopy(dict(SCENARIOS[name])), **raw}


def _number(v: object, place: str) -> float:
    if isinstance(v, bool) or not isinstance(v, int | float):
        raise ValueError(f"{place}: got {v!r}, wanted a number")
    return float(v)


def _during(e: Event, h: float) -> bool:
    return e.at_h <= h and (e.hours == 0.0 or h < e.at_h + e.hours)


def _stepped(x: float, step: float) -> float:
    return round(x / step) * step if step > 0.0 else float(x)
