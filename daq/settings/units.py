"""Units that a channel may be given in, and how they become the core's own."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

_TEMPERATURE: Final = {"degC": (1.0, 0.0), "degF": (1.0 / 1.8, -32.0 / 1.8), "K": (1.0, -273.15)}

UNITS: Final[Mapping[str, Mapping[str, tuple[float, float]]]] = {
    "strain": {"m/m": (1.0, 0.0), "percent": (0.01, 0.0), "microstrain": (1e-6, 0.0)},
    "extension": {"mm": (1.0, 0.0), "um": (1e-3, 0.0)},
    "specimen_temperature": _TEMPERATURE,
    "room_temperature": _TEMPERATURE,
    "cold_junction": _TEMPERATURE,
    "set_point": _TEMPERATURE,
    "controller_output": {"percent": (1.0, 0.0)},
    "force": {"N": (1.0, 0.0), "kN": (1000.0, 0.0)},
}
"""Role -> unit -> (factor, offset): core value = number * factor + offset. The first unit is the core's own.
Roles that are not here take any unit as a label."""

RAW: Final[Mapping[str, float]] = {"V": 1000.0, "mV": 1.0, "uV": 1e-3, "ohm": 1.0, "kohm": 1000.0}
"""Raw unit of a thermocouple or platinum resistance -> factor to mV or ohm."""
