"""The curves of a test: the life line of the list, and the two charts of one test.

A life line is the whole test on one line, from full load at its left edge: log rate up to now, then what
is expected next, as an interval. Its height runs from the least rate so far to three times that (more
where the rate has risen further), so every test at its minimum lies flat on the floor and a turn upwards
looks alike whatever the material and the time scale; the fast rates of primary creep run along the top.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from itertools import pairwise
from typing import Final, NamedTuple

import numpy as np
from rich.cells import cell_len
from rich.text import Text

from daq.view.model import Curve, Expected, TestRow, finished
from daq.view.plot import line_plot, log_ticks, round_ticks, widened
from daq.view.words import Words, event_name, say

LEAST_SPAN: Final = 3.0
"""Ratio of rates that the height of a life line stands for at least."""
MARGIN: Final = 10
"""Cells at the left of a chart, for the figures of its scale."""
LEAST_H: Final = 1e-6
"""A test younger than this (a few milliseconds) has no time axis yet."""
CHART_DECADES: Final = 4.0
"""Most decades of rate on one chart, downwards from the greatest: noise about zero must not own the scale."""


class Axis(NamedTuple):
    """The time axis of a picture: hours at both edges, and cells."""

    start_h: float
    end_h: float
    width: int

    def cell(self, t_h: float) -> int:
        """Return the cell in which ``t_h`` lies; one far off the axis is put a width beside it."""
        at = (t_h - self.start_h) / (self.end_h - self.start_h) * self.width
        return math.floor(min(max(at, -float(self.width)), 2.0 * self.width))


def coming(row: TestRow) -> Expected | None:
    """Return the forecast that comes first and is not past, None where there is none."""
    if finished(row) or row.test_h is None:
        return None
    return next((e for e in row.expected if e.high_h > (row.test_h or 0.0)), None)


def axis_of(row: TestRow, width: int) -> Axis | None:
    """Return the time axis: full load to now, and on to the end of the next forecast, up to twice the age."""
    if row.test_h is None or not LEAST_H < row.test_h < math.inf or width < 1:
        return None
    e = coming(row)
    end = row.test_h if e is None else min(max(e.high_h, row.test_h), 2.0 * row.test_h)
    return Axis(0.0, end, width)


def life_line(row: TestRow, width: int, height: int, words: Words) -> list[Text]:
    """Return ``height`` lines of ``width`` cells: the rate so far, now, and the next forecast."""
    axis = axis_of(row, width)
    if axis is None or row.test_h is None:
        return [say(("not under load yet", "quiet")), *[say() for _ in range(height - 1)]][:height]
    past = width if axis.end_h <= row.test_h else min(max(axis.cell(row.test_h), 1), width - 1)
    lines = [""] * height if row.curve is None else _rate_lines(row, row.curve, past, height, words)
    told = []
    for i, text in enumerate(lines):
        line = say((f"{text:<{past}}", "curve"))
        if past < width:
            line.append_text(say((words.glyphs.now, "unit")))
            if i == height - 1:
                line.append_text(_future(row, axis, past + 1, words))
        told.append(line)
    return told


def _rate_lines(row: TestRow, c: Curve, width: int, height: int, words: Words) -> list[str]:
    with np.errstate(divide="ignore", invalid="ignore"):
        y = np.log(np.where(c.rate_per_h > 0, c.rate_per_h, np.nan))
    known = y[np.isfinite(y)]
    if known.size == 0:
        return [""] * height
    floor = float(known.min())
    if row.minimum_rate_per_h is not None and row.minimum_rate_per_h > 0:
        floor = math.log(row.minimum_rate_per_h)
    top = max(floor + math.log(LEAST_SPAN), float(known[-1]) + 0.1)
    end = row.test_h or 1.0
    return line_plot(c.t_h, y, (height, width), (0.0, end), (floor, top), plain=words.glyphs.plain)


def _future(row: TestRow, axis: Axis, first: int, words: Words) -> Text:
    """Return the cells from ``first`` to the end of the axis: the interval of the next forecast, named."""
    e, g = coming(row), words.glyphs
    room = axis.width - first
    if e is None or room < 1:
        return say()
    name = words.clean(event_name(e.of))
    low, high = axis.cell(e.low_h) - first, axis.cell(e.high_h) - first
    if high >= room + 1:  # the interval ends beyond the line
        high = room + 1
    if low >= room - 1:
        return say((f"{name} later {g.level}"[:room], "soon"))
    low, high = max(low, 0), min(high, room - 1)
    inner = high - low - 1
    bar = g.start + (name.center(inner, g.rule) if len(name) <= inner else g.rule * max(inner, 0)) + g.end
    text = " " * low + bar[: room - low]
    if len(name) > inner and len(name) + 1 <= low:
        text = (name + " ").rjust(low) + bar
    return say((text[:room], "soon"))


def mark_line(marks: Sequence[tuple[float, str]], axis: Axis, words: Words) -> Text:
    """Return one line with a tick and a word at each mark; in little room its first letter, or the tick."""
    g = words.glyphs
    at = sorted(
        (axis.cell(min(max(t, axis.start_h), axis.end_h)), words.clean(word))
        for t, word in marks
        if _shown(t, axis)
    )
    line = [" "] * axis.width
    for i, (place, word) in enumerate(at):
        cell = min(place, axis.width - 1)
        stop = at[i + 1][0] if i + 1 < len(at) else axis.width
        room = stop - cell - 1
        text = g.tick + (word if cell_len(word) <= room else word[:1].upper() if room >= 1 else "")
        if room < 1 and cell == axis.width - 1:  # right at the edge: the letter says more than the tick
            text = word[:1].upper()
        for k, char in enumerate(text[: axis.width - cell]):
            line[cell + k] = char
    return say(("".join(line).rstrip(), "late"))


def stage_line(row: TestRow, axis: Axis, words: Words) -> Text:
    """Return the marks of a test and, right of now, its next forecast, for the axis between two charts."""
    line = mark_line(row.marks, axis, words)
    first = max(axis.cell(row.test_h or 0.0), line.cell_len) + 1
    e = coming(row)
    if e is not None and (line.cell_len < axis.cell(row.test_h or 0.0) or axis.cell(e.low_h) >= first):
        line.append(" " * (first - line.cell_len)).append_text(_future(row, axis, first, words))
    return line


def _shown(t: float, axis: Axis) -> bool:
    return math.isfinite(t) and t <= axis.end_h


# --- charts -----------------------------------------------------------------------------


def chart(row: TestRow, quantity: str, axis: Axis, height: int, words: Words) -> list[Text]:
    """Return one chart: a title line, then ``height`` lines of scale and curve.

    ``quantity`` is "strain" (in percent, linear) or "rate" (in percent per hour, logarithmic). The
    stages' beginnings run through the chart as dotted columns.
    """
    g = words.glyphs
    log = quantity == "rate"
    title = "strain rate, %/h, log scale" if log else "strain, %"
    head = say((f"{title:>{MARGIN + cell_len(title)}}", "quiet"))
    c = row.curve
    y = np.empty(0) if c is None else 100.0 * (c.rate_per_h if log else c.strain)
    if log:
        y = np.where(y > 0, y, np.nan)
    if c is None or not np.isfinite(y).any():
        return [head, say((" " * MARGIN + "no curve yet", "quiet")), *[say() for _ in range(height - 1)]][
            : height + 1
        ]
    low, high = float(np.nanmin(y)), float(np.nanmax(y))
    if log:
        low = max(low, high / 10.0**CHART_DECADES)
        ticks = log_ticks(low / 1.1, high * 1.1, min(max(height // 2, 2), 8))
        y, (bottom, top) = np.log10(y), widened(math.log10(low / 1.1), math.log10(high * 1.1))
        places = [(math.log10(t), f"{t:g}".replace("e-0", "e-")) for t in ticks]
    else:
        low = min(low, 0.0)
        bottom, top = widened(low, high)
        ticks = round_ticks(bottom, top, min(max(height - 1, 2), 8))
        places = [(t, f"{t:.{_decimals(ticks)}f}") for t in ticks]
    now = row.test_h if row.test_h is not None and axis.end_h > row.test_h else None
    lines = line_plot(
        c.t_h, y, (height, axis.width), (axis.start_h, axis.end_h), (bottom, top), plain=g.plain
    )
    labels: dict[int, str] = {}
    for value, text in places:
        labels.setdefault(min(int((top - value) / (top - bottom) * height), height - 1), text)
    columns = {axis.cell(t) for t, _ in row.marks if _shown(t, axis)} - {0}
    told = [head]
    for i, text in enumerate(lines):
        label = labels.get(i, "")
        line = say((f"{label:>{MARGIN - 2}} ", "unit"), (g.notch if label else g.bar, "rule"))
        line.append_text(
            _through(text.ljust(axis.width), columns, None if now is None else axis.cell(now), words)
        )
        told.append(line)
    return told


def _through(text: str, columns: set[int], now: int | None, words: Words) -> Text:
    """Return a line of the chart with the marked columns dotted where the curve leaves them free."""
    parts: list[tuple[str, str]] = []
    for i, char in enumerate(text):
        if char == " " and i == now:
            parts.append((words.glyphs.now, "unit"))
        elif char == " " and i in columns:
            parts.append((words.glyphs.dot, "rule"))
        elif parts and parts[-1][1] == "curve":
            parts[-1] = (parts[-1][0] + char, "curve")
        else:
            parts.append((char, "curve"))
    return say(*parts)


def _decimals(ticks: Sequence[float]) -> int:
    steps = [b - a for a, b in pairwise(ticks)]
    least = min(steps) if steps else max((abs(t) for t in ticks), default=1.0)
    return 0 if least <= 0 else min(max(-math.floor(math.log10(least) + 1e-9), 0), 6)


def hour_line(axis: Axis, words: Words) -> Text:
    """Return the figures of the time axis, in test hours."""
    ticks = round_ticks(axis.start_h, axis.end_h, max(axis.width // 12, 2))
    decimals = _decimals(ticks)
    line = list("hours".rjust(MARGIN - 2).ljust(MARGIN + axis.width))
    for t in ticks:
        text = f"{t:.{decimals}f}"
        at = min(MARGIN + axis.cell(t) - len(text) // 2, len(line) - len(text))
        if at >= MARGIN - 1 and all(c == " " for c in line[max(at - 2, MARGIN - 2) : at + len(text) + 1]):
            line[at : at + len(text)] = text
    return say(("".join(line).rstrip(), "unit"))
