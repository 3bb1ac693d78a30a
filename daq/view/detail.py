"""One test in full: what it does, what presses, what comes next, and its two curves over one time axis."""

from __future__ import annotations

from typing import Final

from rich.text import Text

from daq.view.curves import MARGIN, Axis, axis_of, chart, coming, hour_line, stage_line
from daq.view.model import HOST, Place, Snapshot, TestRow, band, ratio_to_minimum, trend
from daq.view.sentences import (
    alarm_line,
    expected_line,
    next_line,
    stage,
    stage_age_h,
    stage_style,
    title,
)
from daq.view.words import Words, beside, fit, folded, joined, say

LEAST_CHART: Final = 3
"""Lines below which a chart is not worth its room."""
STRIP: Final = 13


def detail(
    shot: Snapshot, p: Place, position: tuple[int, int], size: tuple[int, int], words: Words
) -> list[Text]:
    """Return one place in full, as at most ``size`` = (width, height) of lines.

    ``position`` is (n-th, of how many).
    """
    width, height = size
    if p.row is None:
        return _host(shot, p, size, words)
    lines = [_title(p, p.row, position, width, words), *_state(p.row, width, words)]
    lines += _next(p.row, shot, words, 1 if height < 30 else 3)
    charts = 2 * (LEAST_CHART + 1) + 2 if height >= 16 else 0
    room = height - len(lines) - charts
    lines += _alarms(shot, p, width, max(room, 1), words)
    room = height - len(lines)
    events = min(len(p.row.events), max((room - 24) // 2, 0), 12) if charts else room
    if charts:
        lines += _charts(p.row, width, room - (events + 1 if events else 0), words)
    if events > 0 and p.row.events:
        lines += _events(shot, p.row, width, height - len(lines), words)
    return [fit(line, width, words.glyphs.cut) for line in lines[:height]]


def _host(shot: Snapshot, p: Place, size: tuple[int, int], words: Words) -> list[Text]:
    lines = [say((title(HOST), "name"), "  the daemon's own alarms")]
    lines += _alarms(shot, p, size[0], size[1] - 1, words)
    return [fit(line, size[0]) for line in lines[: size[1]]]


def _title(p: Place, row: TestRow, position: tuple[int, int], width: int, words: Words) -> Text:
    age = stage_age_h(row)
    parts = [
        say((words.clean(title(p.name)), "name")),
        say((words.clean(row.specimen), "")),
        say(
            (stage(row, words), stage_style(row) or "name"),
            f" for {words.hours(age)}" if age is not None else "",
        ),
        say((f"{words.hours(row.test_h)} under load", "unit") if row.test_h is not None else ""),
    ]
    return beside(joined(parts), say((f"{position[0]} of {position[1]}", "unit")), width)


def _state(row: TestRow, width: int, words: Words) -> list[Text]:
    """Return strain and rate on one line, temperature on the next."""
    least = "" if row.minimum_rate_per_h is None else f" rate, {words.rate(row.minimum_rate_per_h)}"
    long = _motion(row, words, f", {100 * row.coverage:.0f} %", f"the minimum{least}")
    lines = [long if long.cell_len <= width else _motion(row, words, "", "min"), _heat(row, words)]
    if row.quarantined:
        lines.append(say((f"not evaluated any more: {words.clean(row.quarantined)}", "press")))
    return lines


def _motion(row: TestRow, words: Words, share: str, least: str) -> Text:
    line = say(("strain ", "unit"), (words.strain(row.strain), "name"))
    line.append_text(say(("  rate ", "unit"), (f"{words.rate(row.rate_per_h)} %/h", "name")))
    if row.rate_low_per_h is not None and row.rate_high_per_h is not None:
        low, high = words.rate(row.rate_low_per_h), words.rate(row.rate_high_per_h)
        line.append_text(say((f" ({low} to {high}{share})", "unit")))
    way = trend(row)
    if way is not None:
        line.append((", falling", ", steady", ", rising")[way + 1])
    ratio = ratio_to_minimum(row)
    if ratio is not None:
        line.append_text(say((f", {ratio:.2f} {words.glyphs.times} {least}", "unit")))
    return line


def _heat(row: TestRow, words: Words) -> Text:
    b = band(row)
    parts = [say((words.degrees(row.temperature_c), "name"))]
    if b is not None:
        parts.append(say(f"{words.off(b)} {words.strip(b, STRIP)}"))
        parts.append(say((words.in_band(b), "press" if b.beyond else "unit")))
        if b.below_k is not None and b.above_k is not None:
            set_c = row.set_point_c or 0.0
            limits = f"{set_c - b.below_k:.1f} to {words.degrees(set_c + b.above_k)}"
            parts.append(say((f"allowed {limits}", "unit")))
    return joined(parts)


def _next(row: TestRow, shot: Snapshot, words: Words, most: int) -> list[Text]:
    first = next_line(row, shot, words)
    lines = [first] if first.cell_len else []
    e = coming(row)
    for other in row.expected:
        if e is not None and other is not e and other.high_h > (row.test_h or 0.0) and len(lines) < most:
            lines.append(say("      ", (expected_line(other, row, shot, words), "unit")))
    return lines


def _alarms(shot: Snapshot, p: Place, width: int, most: int, words: Words) -> list[Text]:
    """Return the open alarms with their messages and what to do, as many lines as there is room for."""
    rows = [*p.alarms, *p.notices]
    if not rows:
        return [say(("no alarm is open", "unit"))][:most]
    lines: list[Text] = []
    for i, a in enumerate(rows):
        left = len(rows) - i
        if most - len(lines) <= 1 and left > 1:
            lines.append(say((f"+ {left} more", "seen")))
            break
        lines.append(alarm_line(a, shot, words, width, message=False))
        if a.notice or a.aside:
            continue
        room = most - len(lines) - (left - 1)
        told = folded(words.clean(a.message), width - 2, min(max(room, 0), 4), words.glyphs.cut)
        if a.to_do and room > len(told):
            told += folded(words.clean(f"To do: {a.to_do}"), width - 2, room - len(told), words.glyphs.cut)
        lines += [say("  ", text) for text in told]
    return lines[:most]


def _charts(row: TestRow, width: int, room: int, words: Words) -> list[Text]:
    """Return strain and log rate over one time axis, with the stages marked between them."""
    room = max(room, 0)
    axis = axis_of(row, max(width - MARGIN, 1)) or Axis(0.0, 1.0, max(width - MARGIN, 1))
    each = (room - 4) // 2
    if each < LEAST_CHART or width < MARGIN + 10:
        if room < LEAST_CHART + 2:
            return []
        return [*chart(row, "rate", axis, room - 2, words), hour_line(axis, words)]
    marks = say(" " * MARGIN)
    marks.append_text(stage_line(row, axis, words))
    return [
        *chart(row, "strain", axis, room - 4 - each, words),
        marks,
        *chart(row, "rate", axis, each, words),
        hour_line(axis, words),
    ]


def _events(shot: Snapshot, row: TestRow, width: int, room: int, words: Words) -> list[Text]:
    """Return the latest findings, newest first."""
    if room < 2:
        return []
    lines = [say(("what was found, newest first", "unit"))]
    for e in row.events[: room - 1]:
        when = words.when(e.at_tick, shot.now_tick)
        lines.append(
            fit(say((f"{when:>12}  {words.hours(e.test_h):>8}  ", "unit"), words.clean(e.text)), width)
        )
    return lines
