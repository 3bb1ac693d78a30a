"""Quantities of ISO 204 that follow from others: extensions, elongation, reduction of area.

Extension (e) is measured by the extensometer and referred to its reference length; elongation (A) is
measured on the piece. All in per cent. Symbols as in DIN EN ISO 204:
et = ee + ei + ef, ep = ei + ef = et - ee, ei = eti - ee; at the end of loading ef = 0.
"""

from __future__ import annotations

import math
from typing import Final

from daq.core.rules import TestRules
from daq.records import CoreError

PASCAL_PER_MPA: Final = 1e6


def extensions_percent(
    total: float, at_loading: float | None, elastic: float | None
) -> dict[str, float | None]:
    """Return et, eti, ee, ei, ep, ef [%]; what cannot be known without an argument is None."""
    plastic = None if elastic is None else total - elastic
    initial = None if elastic is None or at_loading is None else at_loading - elastic
    creep = None if at_loading is None else total - at_loading
    return {"et": total, "eti": at_loading, "ee": elastic, "ei": initial, "ep": plastic, "ef": creep}


def elongation_percent(original_mm: float, final_mm: float) -> float:
    """Return A = 100 (Lu - Lo)/Lo: Au after rupture, Aper of an unbroken piece."""
    _positive(original_mm, "original gauge length [mm]")
    return 100.0 * (final_mm - original_mm) / original_mm


def reduction_percent(original_mm2: float, final_mm2: float) -> float:
    """Return Zu = 100 (So - Su)/So."""
    _positive(original_mm2, "original cross section [mm2]")
    return 100.0 * (original_mm2 - final_mm2) / original_mm2


def proportionality(reference_length_mm: float, area_mm2: float) -> float:
    """Return k = Lr/sqrt(So), about 5.65 for proportional test pieces."""
    _positive(area_mm2, "cross section [mm2]")
    return reference_length_mm / math.sqrt(area_mm2)


def circle_mm2(diameter_mm: float) -> float:
    """Return the area of a round section."""
    return 0.25 * math.pi * diameter_mm**2


def area_mm2(rules: TestRules) -> float | None:
    """Return So of the specimen [mm2]: as given, else from the diameter, else None."""
    if rules.specimen.area_mm2 is not None:
        return rules.specimen.area_mm2
    d = rules.specimen.diameter_mm
    return None if d is None else circle_mm2(d)


def _positive(value: float, what: str) -> None:
    if not value > 0.0:
        raise CoreError(f"{what}: got {value!r}, wanted > 0")
