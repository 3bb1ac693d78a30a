"""What made a jump: a change of temperature, creep that goes in jerks, or a slip.

One side alone cannot tell. Both sides of an extensometer feel the furnace and the specimen alike, and a slip
mostly takes one of them; so the sides are held beside each other and beside the specimen temperature over the
same few scans before and after. Apparent strain of temperature is left in, for the regression that knows the
temperature to deal with, and so is creep.
"""

from __future__ import annotations

import math
from typing import Final, NamedTuple

import numpy as np

from daq.core import clean
from daq.records import FloatArray

HEAT_PER_K: Final = 25e-6
"""Most apparent strain [1/K] that temperature gives: expansion of metals goes up to this, and a transducer
feels at most the rods' or the specimen's (common practice, no source)."""
MOVED_SDS: Final = 5.0
"""Standard errors beyond which temperature, or a side, has moved."""
WITHIN_SDS: Final = 3.0
UNLIKE: Final = 0.35
"""Share by which sides of a bending specimen may differ."""
JERK_TIMES: Final = 4.0
"""How much larger than the largest jerk seen another one may be."""
GAP_SHARE: Final = 0.5
"""Interval, as a share of the stretch before that is known, over which jerks are not counted."""
LEAST_SCANS: Final = 3


class Seen(NamedTuple):
    """Jump of each side, NaN where it is not there, their standard errors, and the apparent strain that the
    change of temperature may have made, 0 where it did not change. ``over_gap``: between scans so far apart
    that creep may have gone through many jerks."""

    sizes: tuple[float, float]
    errors: tuple[float, float]
    heat: float
    over_gap: bool = False

    @property
    def there(self) -> list[float]:
        return [x for x in self.sizes if not math.isnan(x)]


def look(
    t_h: FloatArray,
    sides: tuple[FloatArray, FloatArray],
    temp_c: FloatArray,
    row: int,
    noises: tuple[float, float],
) -> Seen:
    """Measure the jump before ``row``; all arrays (n,), NaN where there is no reading; noises of one scan."""
    sizes, errors = [], []
    for v, noise in zip(sides, noises, strict=True):
        at = np.flatnonzero(np.isfinite(v))
        j = int(np.searchsorted(at, row))
        if j < LEAST_SCANS or at.size - j < LEAST_SCANS or not math.isfinite(noise):
            sizes.append(math.nan)
            errors.append(math.nan)
            continue
        jump = clean.jump_at(t_h[at], v[at], j, noise)
        sizes.append(jump.size)
        errors.append(jump.error)
    known = t_h[row - 1] - t_h[max(0, row - clean.CONTEXT)] if row > 0 else 0.0
    over_gap = row > 0 and bool(t_h[row] - t_h[row - 1] > GAP_SHARE * known)
    return Seen((sizes[0], sizes[1]), (errors[0], errors[1]), _heat(temp_c, row), over_gap)


def _heat(temp_c: FloatArray, row: int) -> float:
    before = temp_c[max(0, row - 8) : row]
    after = temp_c[row : row + clean.CONFIRM + 3]
    before, after = before[np.isfinite(before)], after[np.isfinite(after)]
    if before.size < LEAST_SCANS or after.size < LEAST_SCANS:
        return 0.0
    moved = abs(clean.median(after) - clean.median(before))
    noise = clean.scan_noise(temp_c[max(0, row - clean.CONTEXT) : row])
    if not math.isfinite(noise):
        return 0.0
    return (
        HEAT_PER_K * moved
        if moved > MOVED_SDS * noise * math.sqrt(1.57 * (1 / before.size + 1 / after.size))
        else 0.0
    )


def alike(s: Seen) -> bool:
    """Say whether the sides that are there jumped alike; one alone is like itself."""
    a, b = s.sizes
    if math.isnan(a) or math.isnan(b):
        return True
    return abs(a - b) <= WITHIN_SDS * math.hypot(*s.errors) + UNLIKE * max(abs(a), abs(b))


def by_heat(s: Seen) -> bool:
    """Say whether the change of temperature explains the jump of every side."""
    if s.heat == 0.0 or not alike(s):
        return False
    return all(
        abs(x) <= s.heat + WITHIN_SDS * e for x, e in zip(s.sizes, s.errors, strict=True) if not math.isnan(x)
    )


def by_creep(s: Seen, largest: float) -> bool:
    """Say whether it is one more jerk, ``largest`` having been seen."""
    return (
        bool(s.there)
        and alike(s)
        and min(s.there) > 0.0
        and (s.over_gap or sum(s.there) <= JERK_TIMES * largest * len(s.there))
    )


def slips(s: Seen, found: tuple[float, float]) -> tuple[float, float]:
    """Return how far each side slipped, where ``found`` holds what each was found to have jumped by, 0 for a
    side whose jump was too small to be seen on its own.

    Such a side takes part in the step if it jumped alike. If only temperature moved it, that is no part of
    the other's slip either.
    """
    a, b = s.sizes
    if math.isnan(a) or math.isnan(b):
        return found
    least = 0 if abs(a) < abs(b) else 1
    size, error = s.sizes[least], s.errors[least]
    if abs(size) <= MOVED_SDS * error:
        return found
    if alike(s):
        return found[0] or a, found[1] or b
    if s.heat > 0.0 and abs(size) <= s.heat + WITHIN_SDS * error:
        return (0.0, b - size) if least == 0 else (a - size, 0.0)
    return found
