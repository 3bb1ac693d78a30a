"""Curves from characters: numpy rasters, drawn in braille or, where that is missing, in ASCII.

A curve is rasterised column by column as the span between its least and its greatest value there
(min/max decimation), so a spike of one sample is still seen when thousands of samples share a column,
and neighbouring columns join without holes. NaN breaks the line.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np
import numpy.typing as npt

from daq.records import FloatArray

Mask = npt.NDArray[np.bool_]

DOTS_WIDE: Final = 2
DOTS_HIGH: Final = 4
"""Dots of one braille cell (Unicode block 2800-28FF, eight dots)."""
ASCII_HIGH: Final = 3
"""Levels that ASCII can tell apart in one cell: ' above, - middle, . below."""

_BRAILLE_BITS: Final = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]])
_ASCII_CELLS: Final = np.array([" ", "'", "-", "'", ".", ":", ".", "|"])


def raster(
    x: FloatArray,
    y: FloatArray,
    shape: tuple[int, int],
    x_range: tuple[float, float],
    y_range: tuple[float, float],
) -> Mask:
    """Return the dots that the line through (x, y) touches.

    Args:
        x, y: Points, shape (n,), ``x`` not falling; a non-finite value ends the line, which begins anew
            after it.
        shape: (rows, columns) of the raster; row 0 is on top.
        x_range, y_range: What the outer edges of the raster stand for, low < high. Points beyond
            ``x_range`` are cut off; values beyond ``y_range`` are drawn on the edge.

    Returns:
        Mask of ``shape``, in each column set from the least to the greatest value of the line there.
    """
    rows, columns = shape
    mask = np.zeros(shape, dtype=np.bool_)
    if rows <= 0 or columns <= 0 or x.size == 0:
        return mask
    u = (x - x_range[0]) / (x_range[1] - x_range[0]) * columns
    v = (1.0 - (y - y_range[0]) / (y_range[1] - y_range[0])) * rows
    for run in _runs(np.isfinite(u) & np.isfinite(v)):
        _draw(mask, u[run], np.clip(v[run], 0.0, np.nextafter(rows, 0.0)))
    return mask


def _runs(good: Mask) -> list[slice]:
    """Return the stretches of consecutive true elements."""
    edges = np.flatnonzero(np.diff(np.concatenate(([False], good, [False])).astype(np.int8)))
    return [slice(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def _draw(mask: Mask, u: FloatArray, v: FloatArray) -> None:
    """Mark one unbroken line, in dot coordinates, on the mask."""
    rows, columns = mask.shape
    if u[-1] < 0.0 or u[0] > columns:
        return
    left, right = max(u[0], 0.0), min(u[-1], float(columns))
    borders = np.arange(math.ceil(left), math.floor(right) + 1, dtype=float)
    ends = np.concatenate(([left, right], borders))
    inside = (u >= left) & (u <= right)
    at = np.concatenate((u[inside], ends))
    row = np.floor(np.concatenate((v[inside], np.interp(ends, u, v)))).astype(np.int64)
    top, bottom = np.full(columns, rows, dtype=np.int64), np.full(columns, -1, dtype=np.int64)
    # what lies on a border belongs to the columns on both sides of it, so that they join
    for column in (np.floor(at).astype(np.int64), np.ceil(at).astype(np.int64) - 1):
        keep = (column >= 0) & (column < columns)
        np.minimum.at(top, column[keep], row[keep])
        np.maximum.at(bottom, column[keep], row[keep])
    level = np.arange(rows)[:, None]
    mask |= (level >= top) & (level <= bottom)


def braille(mask: Mask) -> list[str]:
    """Return the mask as lines of braille, two by four dots a character; edges are filled up with blanks."""
    cells = _cells(mask, DOTS_HIGH, DOTS_WIDE)
    codes = 0x2800 + np.einsum("rcij,ij->rc", cells.astype(np.int64), _BRAILLE_BITS)
    return ["".join(" " if c == 0x2800 else chr(c) for c in line) for line in codes]


def ascii_cells(mask: Mask) -> list[str]:
    """Return the mask as lines of ASCII, one by three dots a character."""
    cells = _cells(mask, ASCII_HIGH, 1)[..., 0]
    return ["".join(line) for line in _ASCII_CELLS[cells.astype(np.int64) @ np.array([1, 2, 4])]]


def _cells(mask: Mask, high: int, wide: int) -> Mask:
    """Return the mask cut into cells, shape (rows, columns, high, wide)."""
    rows, columns = mask.shape
    full = np.zeros((-(-rows // high) * high, -(-columns // wide) * wide), dtype=np.bool_)
    full[:rows, :columns] = mask
    return full.reshape(full.shape[0] // high, high, full.shape[1] // wide, wide).transpose(0, 2, 1, 3)


def line_plot(
    x: FloatArray,
    y: FloatArray,
    size: tuple[int, int],
    x_range: tuple[float, float],
    y_range: tuple[float, float],
    *,
    plain: bool,
) -> list[str]:
    """Return the curve as ``size`` = (lines, characters) of text; ``plain`` asks for ASCII."""
    lines, width = size
    if plain:
        return ascii_cells(raster(x, y, (lines * ASCII_HIGH, width), x_range, y_range))
    return braille(raster(x, y, (lines * DOTS_HIGH, width * DOTS_WIDE), x_range, y_range))


def widened(low: float, high: float) -> tuple[float, float]:
    """Return a range that is not empty."""
    if high > low:
        return low, high
    pad = abs(low) * 0.05 or 1.0
    return low - pad, high + pad


def round_ticks(low: float, high: float, most: int) -> list[float]:
    """Return at most ``most`` round values (1, 2, 5 times a power of ten) within [low, high]."""
    if most < 1 or not (math.isfinite(low) and math.isfinite(high)) or high <= low:
        return []
    power = 10.0 ** math.floor(math.log10((high - low) / most))
    for step in (power * m for m in (1, 2, 5, 10, 20, 50)):
        first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
        if last - first + 1 <= most:
            return [i * step for i in range(first, last + 1)]
    return []


def log_ticks(low: float, high: float, most: int) -> list[float]:
    """Return at most ``most`` values within [low, high], both > 0: decades, or 1-2-5 where they are few."""
    if most < 1 or low <= 0 or high <= low:
        return []
    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    for parts in ((1, 2, 5), (1, 3), (1,)):
        ticks = [m * 10.0**p for p in range(first, last + 1) for m in parts]
        ticks = [t for t in ticks if low * (1 - 1e-9) <= t <= high * (1 + 1e-9)]
        if len(ticks) <= most:
            return ticks
    return ticks[:: -(-len(ticks) // most)]
