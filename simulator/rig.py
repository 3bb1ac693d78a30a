"""A simulated run: what the instruments of a rig would have recorded, and the truth beside it.

``simulate(spec)`` is a pure function of the specification (which holds the seed). The readings
come as columns of a recording; the truth holds the true curve, the time of every event by each
definition, the noise parameters and what was injected. Readings that are missing are NaN.
"""

from __future__ import annotations

import csv
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

from simulator.creep import FloatArray, Jerky
from simulator.onset import curve_events
from simulator.spec import Event, RigSpec, Transducer
from simulator.world import World, build_world, event_edges

STREAM_SCANS: Final = 10
STREAM_READINGS: Final = 11
LEAST_GRID: Final = 400
"""Points that the true courses have at least, whatever the sampling."""
JUMP_AT_RUPTURE: Final = 0.1
AFTER_EVERY_S: Final = 60.0


@dataclass(frozen=True)
class NoiseTruth:
    """True noise of the mean strain of the rig's sides.

    ``white``: standard deviation [1] of one scan. ``count``: converter step of the mean; its error is
    uniform, variance count^2/12. ``drifts``: (standard deviation [1], memory [h]) of first-order processes;
    those of room and furnace that act but are not logged are among them, so that a bound worked out
    from this noise asks nothing impossible. The stairs of jerky creep, real strain but no change of stage,
    are there too, as a saw-tooth's standard deviation and a tenth of a stair's time.
    """

    white: float
    count: float
    drifts: tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class Truth:
    """What is really so on a simulated rig. Times are test hours (lab time), onset times too.

    The curve's events are those of the curve at the set point, dated in lab time through the equivalent
    time: a furnace wander is never an onset. ``rises``: the rate rises again after its least value, by 1 % or
    more, inside the record, or rose by 5 % over the least so far and fell lower still before the end (a peak
    late in life). ``turns_tertiary``: by 5 % or more after its least value. A detection is false where
    ``rises`` is not so or it comes before ``first_rise_h`` (see ``onset.CurveEvents``); ``minimum_h`` is the
    later one of the two on the rare curves with several minima. Before ``incubation_h`` (zero but for inverse
    primary) a rising rate is incubation; the best possible delay is worked out on what comes after.

    ``t_h``, ``equivalent_h``, ``strain``, ``rate_per_h``, ``specimen_c``: the true courses up to the end, on
    one grid. ``strain`` is as bent by the furnace; at the set point: ``spec.creep.strain(equivalent_h)``.
    """

    kind: str
    end_h: float
    rupture_h: float | None
    rises: bool
    turns_tertiary: bool
    incubation_h: float
    minimum_h: float
    minimum_rate_per_h: float
    first_rise_h: float | None
    rise_5_percent_h: float | None
    offset_0p2_h: float | None
    noise: NoiseTruth
    events: tuple[Event, ...]
    t_h: FloatArray
    equivalent_h: FloatArray
    strain: FloatArray
    rate_per_h: FloatArray
    specimen_c: FloatArray


@dataclass(frozen=True)
class Run:
    """A finished run: ``columns`` maps ``time_s`` and every channel to an array (n,); NaN = no reading."""

    spec: RigSpec
    columns: Mapping[str, FloatArray]
    truth: Truth


def simulate(spec: RigSpec) -> Run:
    """Return the run of ``spec``: the same digits every time."""
    world = build_world(spec, _grid(spec))
    end_h, rupture_h = _end(spec, world)
    t_h = _scan_times(spec, world, end_h, rupture_h is not None)
    columns: dict[str, FloatArray] = {"time_s": np.round(t_h * 3600.0, 2)}
    columns.update(_readings(spec, world, t_h, rupture_h))
    return Run(spec, columns, _truth(spec, world, end_h, rupture_h))


def write_csv(run: Run, path: Path) -> None:
    """Write the run as a recording: ``time_s`` and channels, an empty field where there is no reading."""
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(run.columns)
        for row in zip(*(c.tolist() for c in run.columns.values()), strict=True):
            writer.writerow(["" if v != v else repr(v) for v in row])


def noise_truth(spec: RigSpec) -> NoiseTruth:
    """Return the noise of the mean of all strain channels of ``spec``."""
    n = len(spec.transducers)
    drifts: list[tuple[float, float]] = []
    for memory_h in sorted({m for c in spec.transducers for _, m in c.drifts}):
        power = sum(sd**2 for c in spec.transducers for sd, m in c.drifts if m == memory_h)
        drifts.append((power**0.5 / n, memory_h))
    if not spec.room_channel:
        k = abs(sum(c.per_room_k for c in spec.transducers)) / n
        room = spec.room
        drifts += [
            (k * room.wander_k, room.wander_memory_h),
            (k * room.day_k * 0.5**0.5, 24.0 / 6.0),
            (k * room.week_k * 0.5**0.5, 168.0 / 6.0),
        ]
    if not spec.thermocouples:
        k = abs(sum(c.per_specimen_k for c in spec.transducers)) / n
        drifts.append((k * spec.furnace.wander_k, spec.furnace.wander_memory_h))
    if isinstance(spec.creep, Jerky):
        pace = float(spec.creep.base.rate(0.5 * spec.longest_h))
        drifts.append((spec.creep.sharpness * spec.creep.step / 12.0**0.5, 0.1 * spec.creep.step / pace))
    return NoiseTruth(
        white=sum(c.white**2 for c in spec.transducers) ** 0.5 / n,
        count=sum(max(c.count, c.display) ** 2 for c in spec.transducers) ** 0.5 / n,
        drifts=tuple((sd, m) for sd, m in drifts if sd > 0.0),
    )


def _grid(spec: RigSpec) -> FloatArray:
    """Nominal scan instants, edges of events, and enough points in between where scans are few."""
    last = spec.longest_h
    step = min(spec.sampling.every_s / 3600.0, last / LEAST_GRID)
    nominal = np.arange(int(last / step) + 2) * step
    edges = [e for e in event_edges(spec) if 0.0 < e < last]
    return np.unique(np.concatenate([nominal, edges]))


def _end(spec: RigSpec, world: World) -> tuple[float, float | None]:
    if spec.rupture_h is not None and world.equivalent_h[-1] >= spec.rupture_h:
        rupture_h = float(np.interp(spec.rupture_h, world.equivalent_h, world.t_h))
        if rupture_h <= spec.duration_h:
            return rupture_h, rupture_h
    return spec.duration_h, None


def _scan_times(spec: RigSpec, world: World, end_h: float, ruptured: bool) -> FloatArray:
    rng = np.random.default_rng([spec.seed, STREAM_SCANS])
    sampling = spec.sampling
    step = sampling.every_s / 3600.0
    t = np.arange(int(end_h / step) + 1) * step
    if sampling.jitter > 0.0:
        t[1:] += step * sampling.jitter * rng.uniform(-0.5, 0.5, t.size - 1)
    pieces = [t]
    if sampling.strain_step > 0.0:
        seen = spec.loading_strain + np.maximum.accumulate(world.strain)
        least, most = seen[0], float(np.interp(end_h, world.t_h, seen))
        levels = np.arange(int(least / sampling.strain_step) + 1, int(most / sampling.strain_step) + 1)
        pieces.append(np.interp(levels * sampling.strain_step, seen, world.t_h))
    pieces += [
        np.arange(e.at_h, e.at_h + e.hours, max(e.size, 0.1) / 3600.0)
        for e in spec.events
        if e.kind == "burst"
    ]
    scans: FloatArray = np.sort(np.concatenate(pieces), kind="stable")
    scans = scans[scans <= end_h]
    for e in spec.events:
        if e.kind == "gap":
            scans = scans[(scans < e.at_h) | (scans >= e.at_h + e.hours)]
    if ruptured and spec.after_scans > 0:
        every = min(step, AFTER_EVERY_S / 3600.0)
        scans = np.concatenate([scans, end_h + np.arange(1, spec.after_scans + 1) * every])
    return scans


def _readings(spec: RigSpec, world: World, t_h: FloatArray, rupture_h: float | None) -> dict[str, FloatArray]:
    rng = np.random.default_rng([spec.seed, STREAM_READINGS])
    gone = np.zeros(t_h.size, dtype=bool) if rupture_h is None else t_h > rupture_h
    true = spec.loading_strain + np.interp(t_h, world.t_h, world.strain)
    hot = np.interp(t_h, world.t_h, world.specimen_c)
    out: dict[str, FloatArray] = {}
    for i, transducer in enumerate(spec.transducers):
        slow = world.drift[i] + transducer.per_room_k * world.room_felt_k[i]
        x = transducer.gain * true + transducer.zero + np.interp(t_h, world.t_h, slow)
        if transducer.per_specimen_k != 0.0:
            x += transducer.per_specimen_k * (hot - spec.furnace.set_point_c)
        x += transducer.white * rng.standard_normal(t_h.size)
        if transducer.spike_share > 0.0:
            hit = rng.random(t_h.size) < transducer.spike_share
            x[hit] += transducer.spike_size * rng.normal(0.0, 1.0, int(hit.sum()))
        x = _strain_events(spec, transducer, t_h, x)
        for step in (transducer.count, transducer.display):
            if step > 0.0:
                x = np.round(x / step) * step
        if spec.after == "jump":
            x[gone] += JUMP_AT_RUPTURE
        else:
            x[gone] = np.nan
        out[transducer.name] = np.round(x, 10)
    for i, couple in enumerate(spec.thermocouples):
        x = hot + np.interp(t_h, world.t_h, world.indicated_k[i])
        x += couple.noise_k * rng.standard_normal(t_h.size)
        if couple.display > 0.0:
            x = np.round(x / couple.display) * couple.display
        out[couple.name] = np.round(x, 4)
    if spec.room_channel:
        x = np.interp(t_h, world.t_h, world.room_c) + spec.room.noise_k * rng.standard_normal(t_h.size)
        out["room"] = np.round(x, 2)
    if spec.output_channel:
        x = np.interp(t_h, world.t_h, world.output)
        out["output"] = np.round(x + spec.furnace.output_noise * rng.standard_normal(t_h.size), 2)
    if spec.break_channel:
        out["broken"] = gone.astype(np.float64)
    for e in spec.events:
        if e.kind == "lost":
            lost = (t_h >= e.at_h) & ((t_h < e.at_h + e.hours) | (e.hours == 0.0))
            for name in [e.channel] if e.channel else [c.name for c in spec.transducers]:
                if name in out:
                    out[name][lost] = np.nan
    return out


def _strain_events(spec: RigSpec, transducer: Transducer, t_h: FloatArray, x: FloatArray) -> FloatArray:
    """Apply slips, re-zeros, single spikes and stuck stretches to one channel, in order of time."""
    for e in sorted(spec.events, key=lambda e: e.at_h):
        if e.channel not in ("", transducer.name) or e.kind not in ("slip", "rezero", "spike", "stuck"):
            continue
        first = int(np.searchsorted(t_h, e.at_h))
        if first >= t_h.size:
            continue
        if e.kind == "slip":
            x[first:] += e.size
        elif e.kind == "rezero":
            x[first:] += e.size - x[first]
        elif e.kind == "spike":
            x[first] += e.size
        else:
            held: NDArray[np.bool_] = (t_h >= e.at_h) & (t_h < e.at_h + e.hours)
            x[held] = x[max(first - 1, 0)]
    return x


def _truth(spec: RigSpec, world: World, end_h: float, rupture_h: float | None) -> Truth:
    last = float(np.interp(end_h, world.t_h, world.equivalent_h))
    found = curve_events(spec.creep, last)

    def dated(equivalent: float | None) -> float | None:
        if equivalent is None:
            return None
        return min(float(np.interp(equivalent, world.equivalent_h, world.t_h)), end_h)

    final = float(spec.creep.envelope.rate(last))
    inside = world.t_h < end_h
    t_h = np.append(world.t_h[inside], end_h)
    over = found.first_rise_h is not None or found.rise_5_percent_h is not None
    rises = over or final > 1.01 * found.minimum_rate_per_h
    first = found.first_rise_h if found.first_rise_h is not None else found.minimum_h
    return Truth(
        kind=spec.kind or spec.creep.family,
        end_h=end_h,
        rupture_h=rupture_h,
        rises=rises,
        turns_tertiary=found.rise_5_percent_h is not None,
        incubation_h=dated(spec.creep.incubation_h) or 0.0,
        minimum_h=dated(found.minimum_h) or 0.0,
        minimum_rate_per_h=found.minimum_rate_per_h,
        first_rise_h=dated(first) if rises else None,
        rise_5_percent_h=dated(found.rise_5_percent_h),
        offset_0p2_h=dated(found.offset_0p2_h),
        noise=noise_truth(spec),
        events=spec.events,
        t_h=t_h,
        equivalent_h=np.interp(t_h, world.t_h, world.equivalent_h),
        strain=np.interp(t_h, world.t_h, world.strain),
        rate_per_h=np.interp(t_h, world.t_h, world.rate),
        specimen_c=np.interp(t_h, world.t_h, world.specimen_c),
    )
