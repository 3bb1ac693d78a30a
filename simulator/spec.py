"""What a simulated rig is: frozen numbers from which a run follows, and nothing else.

Hours under load, degrees Celsius, kelvin differences, strain in m/m. A specification plus its
seed determines every digit of the run; specifications travel as plain JSON values.
"""

from __future__ import annotations

import dataclasses
import types
import typing
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final, TypeVar

from simulator.creep import Curve, curve_from_json, curve_to_json

EVENT_KINDS: Final[Mapping[str, str]] = {
    "furnace_step": "specimen temperature goes to another level by size [K], for hours (0 = for good)",
    "excursion": "specimen temperature leaves by size [K] for hours and comes back (a tenth of it each way)",
    "thermocouple_drift": "indication of thermocouple `channel` drifts by size [K] over hours, then stays",
    "warm_afternoon": "room temperature rises by up to size [K] as a half sine over hours",
    "slip": "readings of strain `channel` (empty: all) step by size [1] and stay",
    "rezero": "strain `channel` (empty: all) is set to read size [1] at that instant",
    "spike": "one reading of strain `channel` (empty: all) is off by size [1]",
    "stuck": "strain `channel` (empty: all) repeats its last reading for hours",
    "lost": "no readings of `channel` (empty: all strain) for hours (0 = for good)",
    "gap": "no scans at all for hours",
    "burst": "scans every size [s] for hours",
}
"""Kinds of event and what each does; the vocabulary of scenarios."""


@dataclass(frozen=True)
class Event:
    """Something that happens at ``at_h``; ``size``, ``hours`` and ``channel`` as EVENT_KINDS says."""

    kind: str
    at_h: float
    size: float = 0.0
    hours: float = 0.0
    channel: str = ""

    def __post_init__(self) -> None:
        if self.kind not in EVENT_KINDS:
            raise ValueError(f"event.kind: got {self.kind!r}, wanted one of {sorted(EVENT_KINDS)}")
        if self.hours < 0.0:
            raise ValueError(f"event {self.kind} at {self.at_h} h: got hours {self.hours}, wanted >= 0")


@dataclass(frozen=True)
class Furnace:
    """True specimen temperature: set point + first-order wander + a share of the day, plus events.

    ``control`` names the thermocouple that the controller holds at the set point; if that one drifts,
    its indication stays and the true temperature moves the other way. Output rises by
    ``output_per_k`` per kelvin of true temperature and falls by ``output_per_room_k`` per kelvin of room.
    """

    set_point_c: float = 980.0
    wander_k: float = 0.2
    wander_memory_h: float = 2.0
    day_k: float = 0.0
    control: str = ""
    output_percent: float = 48.0
    output_per_k: float = 0.08
    output_per_room_k: float = 0.05
    output_noise: float = 0.1


@dataclass(frozen=True)
class Room:
    """Room temperature: mean, day and week waves (amplitudes), first-order wander; load went on at
    ``start_hour`` of a Monday (warmest at 16 h; the week wave coldest on Sunday)."""

    mean_c: float = 22.0
    day_k: float = 0.8
    week_k: float = 0.3
    wander_k: float = 0.2
    wander_memory_h: float = 6.0
    start_hour: float = 9.0
    noise_k: float = 0.05


@dataclass(frozen=True)
class Transducer:
    """One strain channel. ``drifts``: (standard deviation [1], memory [h]) of each first-order process.

    ``per_specimen_k`` and ``per_room_k`` are apparent strains per kelvin; the room acts through a
    first-order lag. ``gain`` is what share of the true strain this side sees (bending). ``count`` is
    the step of the converter, ``display`` the step of the printed number (0 = none).
    """

    name: str
    side: str = "A"
    white: float = 20e-6
    count: float = 0.0
    drifts: tuple[tuple[float, float], ...] = ()
    per_specimen_k: float = 0.0
    per_room_k: float = 0.0
    room_lag_h: float = 0.5
    gain: float = 1.0
    zero: float = 0.0
    spike_share: float = 0.0
    spike_size: float = 1e-3
    display: float = 0.0


@dataclass(frozen=True)
class Thermocouple:
    """One specimen thermocouple: constant offset, white noise, display step [K]."""

    name: str
    offset_k: float = 0.0
    noise_k: float = 0.05
    display: float = 0.1


@dataclass(frozen=True)
class Sampling:
    """A scan every ``every_s`` (jittered by that share), and one per ``strain_step`` of strain if > 0."""

    every_s: float = 300.0
    jitter: float = 0.0
    strain_step: float = 0.0


@dataclass(frozen=True)
class Told:
    """What the user tells the program about this rig: not always true, not always told (None)."""

    activation_energy_j_per_mol: float | None = None
    expected_rupture_h: float | None = None
    stress_mpa: float = 200.0
    stress_exponent: float | None = None
    constant_load: bool = True


@dataclass(frozen=True)
class RigSpec:
    """A rig and its test.

    The record ends at ``duration_h`` or, earlier, at rupture. ``rupture_h`` is the life at the set point (a
    hot furnace shortens it; None: no rupture within the record). After rupture come ``after_scans`` scans in
    which strain has jumped by a tenth (``after`` = "jump") or is missing ("lost"). ``room_channel`` and the
    like say what is logged; what is not logged acts all the same. ``activation_energy_j_per_mol`` is the
    true one. ``kind`` is a label for tables.
    """

    creep: Curve
    duration_h: float
    rupture_h: float | None = None
    seed: int = 0
    kind: str = ""
    activation_energy_j_per_mol: float = 330e3
    loading_strain: float = 0.0
    furnace: Furnace = Furnace()
    room: Room = Room()
    transducers: tuple[Transducer, ...] = (Transducer("left", "A"), Transducer("right", "B"))
    thermocouples: tuple[Thermocouple, ...] = (Thermocouple("top"), Thermocouple("mid"), Thermocouple("bot"))
    sampling: Sampling = Sampling()
    events: tuple[Event, ...] = ()
    room_channel: bool = True
    output_channel: bool = False
    break_channel: bool = False
    told: Told = Told()
    after: str = "lost"
    after_scans: int = 3

    def __post_init__(self) -> None:
        if not self.duration_h > 0.0:
            raise ValueError(f"rig.duration_h: got {self.duration_h}, wanted > 0")
        if self.rupture_h is not None and not 0.0 < self.rupture_h <= self.creep.end_h * 1.000001:
            raise ValueError(f"rig.rupture_h: got {self.rupture_h}, wanted in (0, {self.creep.end_h}]")
        if self.after not in ("lost", "jump"):
            raise ValueError(f"rig.after: got {self.after!r}, wanted 'lost' or 'jump'")
        names = self.channels
        if len(set(names)) != len(names):
            raise ValueError(f"rig: channel names must differ, got {names}")

    @property
    def extra_channels(self) -> tuple[tuple[str, bool], ...]:
        """Return the channels beside strain and thermocouples, with whether each is logged."""
        return (("room", self.room_channel), ("output", self.output_channel), ("broken", self.break_channel))

    @property
    def channels(self) -> tuple[str, ...]:
        """Return the names of all logged channels in the order of the record."""
        names = [c.name for c in self.transducers] + [c.name for c in self.thermocouples]
        return (*names, *(n for n, on in self.extra_channels if on))

    @property
    def longest_h(self) -> float:
        """Return the time by which the record ends [h]; a cool furnace may add a quarter to the life."""
        return self.duration_h if self.rupture_h is None else min(self.duration_h, 1.25 * self.rupture_h)


def rig_to_json(spec: RigSpec) -> dict[str, Any]:
    """Return ``spec`` as plain JSON values."""
    out: dict[str, Any] = _plain(spec)
    return out


def rig_from_json(raw: Mapping[str, Any], place: str = "rig") -> RigSpec:
    """Build a rig from plain JSON values; absent keys take their defaults.

    Raises:
        ValueError: naming the place, what was got and what was wanted.
    """
    return _build(RigSpec, raw, place)


def _plain(v: Any) -> Any:
    if isinstance(v, Curve):
        return curve_to_json(v)
    if dataclasses.is_dataclass(v) and not isinstance(v, type):
        return {f.name: _plain(getattr(v, f.name)) for f in dataclasses.fields(v)}
    return [_plain(x) for x in v] if isinstance(v, tuple) else v


T = TypeVar("T")


def _build(cls: type[T], raw: Any, place: str) -> T:
    if not isinstance(raw, Mapping):
        raise ValueError(f"{place}: got {raw!r}, wanted an object")
    hints = typing.get_type_hints(cls)
    for key in raw:
        if key not in hints:
            raise ValueError(f"{place}.{key}: unknown; wanted one of {sorted(hints)}")
    values = {key: _value(hints[key], v, f"{place}.{key}") for key, v in raw.items()}
    try:
        return cls(**values)
    except TypeError as missing:
        raise ValueError(f"{place}: {str(missing).split('() ')[-1]}") from missing


def _value(hint: Any, v: Any, place: str) -> Any:
    if hint is Curve:
        return curve_from_json(v, place)
    origin, args = typing.get_origin(hint), typing.get_args(hint)
    if origin is types.UnionType:
        inner = next(a for a in args if a is not type(None))
        return None if v is None else _value(inner, v, place)
    if origin is tuple:
        if not isinstance(v, list | tuple):
            raise ValueError(f"{place}: got {v!r}, wanted a list")
        kinds = [args[0]] * len(v) if args[-1] is Ellipsis else list(args)
        if len(kinds) != len(v):
            raise ValueError(f"{place}: got {len(v)} values, wanted {len(kinds)}")
        return tuple(
            _value(kind, x, f"{place}[{i}]") for i, (kind, x) in enumerate(zip(kinds, v, strict=True))
        )
    if dataclasses.is_dataclass(hint) and isinstance(hint, type):
        return _build(hint, v, place)
    if hint is float and isinstance(v, int) and not isinstance(v, bool):
        return float(v)
    if not isinstance(v, hint) or (hint is int and isinstance(v, bool)):
        raise ValueError(f"{place}: got {v!r}, wanted {hint.__name__}")
    return v
