"""Facts of simulated rigs, as the daemon would have journalled them."""

from __future__ import annotations

import itertools
from collections.abc import Sequence

import numpy as np

from daq.core.rules import ChannelRules, Role, Specimen, TestRules, rules_to_json
from daq.records import Fact, Quality, RulesAdopted, ScansTaken, Stamp
from simulator.population import iso204_band_k
from simulator.rig import Run
from simulator.spec import RigSpec

ROLES = {"room": Role.ROOM_TEMPERATURE, "output": Role.CONTROLLER_OUTPUT, "broken": Role.BREAK_SWITCH}


def rules_of(spec: RigSpec, frame: str = "H1") -> TestRules:
    """Return the rules that the user of this rig would have written."""
    channels = [ChannelRules(t.name, Role.STRAIN, t.side) for t in spec.transducers]
    channels += [ChannelRules(t.name, Role.SPECIMEN_TEMPERATURE) for t in spec.thermocouples]
    channels += [ChannelRules(name, ROLES[name]) for name, on in spec.extra_channels if on]
    band = iso204_band_k(spec.furnace.set_point_c)
    told = spec.told
    return TestRules(
        "simulated", frame, frame, Specimen("S-1", "simulated", 25.0, 6.0), tuple(channels),
        stress_pa=told.stress_mpa * 1e6, set_point_c=spec.furnace.set_point_c, below_k=band, above_k=band,
        activation_energy_j_per_mol=told.activation_energy_j_per_mol, stress_exponent=told.stress_exponent,
        expected_rupture_h=told.expected_rupture_h,
    )  # fmt: skip


def scans_of(run: Run, frame: str = "H1") -> ScansTaken:
    """Return all scans of a run as one block."""
    names = run.spec.channels
    values = np.column_stack([run.columns[name] for name in names]).astype(float)
    tick = np.rint(run.columns["time_s"] * 1e4).astype(np.int64)
    quality = np.where(np.isnan(values), int(Quality.BAD_MISSING), 0).astype(np.uint8)
    return ScansTaken(frame, tuple(names), "", tick, tick, values, quality)


def facts_of(run: Run, cuts: Sequence[int] = (), frame: str = "H1", first: int | None = None) -> list[Fact]:
    """Return rules and scans, cut at the ordinals given; only the ``first`` scans where asked."""
    rules = rules_of(run.spec, frame)
    scans = scans_of(run, frame)
    n = len(scans) if first is None else min(first, len(scans))
    edges = sorted({0, n, *(c for c in cuts if 0 < c < n)})
    blocks = [scans.cut(a, b) for a, b in itertools.pairwise(edges)]
    return [RulesAdopted(Stamp(0, 0, ""), frame, rules.test, rules_to_json(rules)), *blocks]
