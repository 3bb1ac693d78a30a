"""The numbers in force for one test: what the core needs to know, and nothing else.

Rules come from the settings file and enter the record as facts (``RulesAdopted``), as
canonical JSON. So a replay of a journal needs no settings file, and a later, retroactive
calibration is a new fact beside the old one.

SI inside: pascal, metre, kelvin differences, J/mol; temperatures in degC because every
instrument and standard of the trade speaks it. Times of rules are hours of the test.
"""

from __future__ import annotations

import dataclasses
import json
import types
import typing
from dataclasses import dataclass
from enum import Enum
from typing import Any, Final, TypeVar

from daq.codec import canonical_json
from daq.records import CoreError

GAS_CONSTANT_J_PER_MOL_K: Final = 8.314462618
"""CODATA 2018, exact."""
ZERO_C_IN_K: Final = 273.15


class Role(Enum):
    """What a channel of a frame measures."""

    STRAIN = "strain"
    EXTENSION = "extension"
    SPECIMEN_TEMPERATURE = "specimen_temperature"
    ROOM_TEMPERATURE = "room_temperature"
    COLD_JUNCTION = "cold_junction"
    CONTROLLER_OUTPUT = "controller_output"
    SET_POINT = "set_point"
    FORCE = "force"
    BEAM = "beam"
    BREAK_SWITCH = "break_switch"
    LIMIT_SWITCH = "limit_switch"
    LEVELLING_MOTOR = "levelling_motor"
    OTHER = "other"


class Loading(Enum):
    """What is held constant: the force (usual with dead weights), or the true stress."""

    CONSTANT_LOAD = "constant_load"
    CONSTANT_STRESS = "constant_stress"


@dataclass(frozen=True, slots=True)
class Conversion:
    """From the instrument's raw number to the channel's own unit.

    In order: ``raw_scale`` (to mV or ohm, where the instrument speaks V or kohm), thermocouple or Pt100
    (emf in mV or resistance in ohm to degC), calibration points (raw, value; linear between, ends
    extended), polynomial (ascending powers), scale and offset. A thermocouple without cold junction is
    one whose instrument has compensated it already.
    Strain comes out in m/m, extension in mm, temperature in degC, force in N.
    """

    scale: float = 1.0
    offset: float = 0.0
    polynomial: tuple[float, ...] = ()
    points: tuple[tuple[float, float], ...] = ()
    thermocouple: str = ""
    cold_junction_c: float | None = None
    cold_junction_channel: str = ""
    pt100: bool = False
    raw_scale: float = 1.0


@dataclass(frozen=True, slots=True)
class ChannelRules:
    """One channel as a test sees it.

    ``rank``: strain sources of the same side are used in this order, least first.
    ``low``/``high``: converted values outside are ``BAD_RANGE``. ``travel_mm``: what an
    extensometer can still follow, for the travel-left watch.
    """

    name: str
    role: Role
    side: str = ""
    conversion: Conversion = Conversion()
    rank: int = 0
    low: float | None = None
    high: float | None = None
    travel_mm: float | None = None


@dataclass(frozen=True, slots=True)
class Specimen:
    """What hangs in the frame. ``extensometer_length_mm`` is the reference length Lr of strain."""

    id: str
    material: str = ""
    extensometer_length_mm: float | None = None
    diameter_mm: float | None = None
    area_mm2: float | None = None


@dataclass(frozen=True, slots=True)
class Limits:
    """Milestones and alarm limits of a test; empty or None where none is wanted."""

    milestones: tuple[float, ...] = (0.001, 0.002, 0.005, 0.01, 0.02, 0.05)
    strain: float | None = None
    rate_per_h: float | None = None
    gradient_k: float | None = None
    excursion_min_s: float = 60.0


@dataclass(frozen=True, slots=True)
class TestRules:
    """All of it, for one test. ``test`` is ``FRAME`` or ``FRAME/POSITION``.

    ``starts``: ``first_scan``, ``entry``, ``load_channel`` or an ISO 8601 instant. ``false_share``
    is the share of tests in which a false tertiary detection is accepted (sets the evidence asked for).
    ``monkman_grant_constant`` C and exponent m: rupture time [h] = C / (least rate [1/h])^m, where known.
    """

    __test__ = False  # not a test class, whatever a collector thinks of its name

    site: str
    frame: str
    test: str
    specimen: Specimen
    channels: tuple[ChannelRules, ...]
    stress_pa: float | None = None
    loading: Loading = Loading.CONSTANT_LOAD
    set_point_c: float | None = None
    below_k: float | None = None
    above_k: float | None = None
    tolerance: str = ""
    activation_energy_j_per_mol: float | None = None
    stress_exponent: float | None = None
    expected_rupture_h: float | None = None
    starts: str = "first_scan"
    scan_every_s: float | None = None
    limits: Limits = Limits()
    false_share: float = 1.0 / 200.0
    monkman_grant_constant: float | None = None
    monkman_grant_exponent: float = 1.0


def rules_to_json(rules: TestRules) -> str:
    """Return the canonical JSON text of ``rules``, as the record keeps it."""
    return canonical_json(_plain(rules))


def rules_from_json(text: str) -> TestRules:
    """Return the rules in ``text``; keys that are absent take their defaults.

    Raises:
        CoreError: a key this program does not know, or a value of the wrong kind.
    """
    return _build(TestRules, json.loads(text), "rules")


def _plain(v: Any) -> Any:
    if isinstance(v, Enum):
        return v.value
    if dataclasses.is_dataclass(v) and not isinstance(v, type):
        return {f.name: _plain(getattr(v, f.name)) for f in dataclasses.fields(v)}
    if isinstance(v, tuple):
        return [_plain(x) for x in v]
    return v


T = TypeVar("T")


def _build(cls: type[T], raw: dict[str, Any], place: str) -> T:
    hints = typing.get_type_hints(cls)
    unknown = set(raw) - set(hints)
    if unknown:
        raise CoreError(f"{place}: got unknown key {sorted(unknown)[0]!r}, wanted one of {sorted(hints)}")
    return cls(**{key: _value(hints[key], value, f"{place}.{key}") for key, value in raw.items()})


def _value(hint: Any, value: Any, place: str) -> Any:
    origin = typing.get_origin(hint)
    if origin is types.UnionType:
        inner = [a for a in typing.get_args(hint) if a is not type(None)]
        return None if value is None else _value(inner[0], value, place)
    if origin is tuple:
        args = typing.get_args(hint)
        if args[-1] is Ellipsis:
            return tuple(_value(args[0], v, f"{place}[{i}]") for i, v in enumerate(value))
        return tuple(_value(a, v, f"{place}[{i}]") for i, (a, v) in enumerate(zip(args, value, strict=True)))
    if isinstance(hint, type) and issubclass(hint, Enum):
        return hint(value)
    if dataclasses.is_dataclass(hint) and isinstance(hint, type):
        return _build(hint, value, place)
    if hint is float and isinstance(value, int) and not isinstance(value, bool):
        return float(value)
    if not isinstance(value, hint):
        raise CoreError(f"{place}: got {value!r}, wanted {hint.__name__}")
    return value
