"""The list: everything that may need a person, in the order in which it will.

The page is a timetable. Headings are lengths of time ("now", "within 8 hours", ...), below each stand the
tests that will need someone within it. How much is said of each depends on the room: the richest form that
fits is taken. Where even the barest does not, the list is turned in pages, so that rows keep their place
while the choice moves, and the chosen row is told in full at the foot.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from rich.text import Text

from daq.records import TICKS_PER_S
from daq.view.model import Place, Snapshot, section_of
from daq.view.rows import FORMS, GAP, INDENT, Form, line_count, lived, name_width_of, row_lines
from daq.view.sentences import alarm_line, next_line, title
from daq.view.words import Words, fit, folded, say

COLUMN: Final = 80
"""Width of a row whose first line is told in full."""
FOOT: Final = 5
"""Lines at the foot that tell the chosen row where the list is bare."""
FOOT_FROM: Final = 14
"""Height from which there is room for them."""


def overview(
    shot: Snapshot, rows: Sequence[Place], chosen: str | None, size: tuple[int, int], words: Words
) -> list[Text]:
    """Return the list as at most ``size`` = (width, height) of lines."""
    width, height = size
    if height < 1 or width < 1:
        return []
    if not rows:
        none = "No test is known yet. The list fills when the daemon has taken a first scan."
        return [say(line) for line in folded(none, width, height, words.glyphs.cut)]
    most = max((width + GAP) // (COLUMN + GAP), 1)
    for columns in range(1, most + 1):
        for form in FORMS:
            if not form.quiet and columns < most:
                break  # rather another column than less about each
            told = _columns(rows, form, (_column_width(width, columns), height), words)
            if told is not None and len(told) <= columns:
                return _draw(shot, rows, told, 0, columns, chosen, form, size, words)
    return _paged(shot, rows, chosen, size, most, words)


def _column_width(width: int, columns: int) -> int:
    return (width - GAP * (columns - 1)) // columns


def _columns(
    rows: Sequence[Place], form: Form, size: tuple[int, int], words: Words, *, cut: bool = False
) -> list[list[Place]] | None:
    """Return the rows dealt out to columns of ``size``, without drawing them.

    None where one of them fits into no column, unless such a row may be ``cut``.
    """
    width, height = size
    columns: list[list[Place]] = [[]]
    used, section = 0, ""
    for p in rows:
        own, count = section_of(p.need), line_count(p, form, width - INDENT, words)
        need = count + (own != section or not used)
        if used and used + need > height:
            columns.append([])
            used, need = 0, count + 1
        if need > height and not cut:
            return None
        columns[-1].append(p)
        used, section = used + need, own
    return columns


def _draw(
    shot: Snapshot,
    rows: Sequence[Place],
    columns: Sequence[Sequence[Place]],
    first: int,
    count: int,
    chosen: str | None,
    form: Form,
    size: tuple[int, int],
    words: Words,
) -> list[Text]:
    """Return ``count`` columns from the ``first`` on, side by side.

    A heading stands above the first row of its section, and again on top of each further column.
    """
    width, height = size
    column, name_width = _column_width(width, count), name_width_of(rows, words)
    told = []
    before = section_of(columns[first - 1][-1].need) if first else ""
    for places in columns[first : first + count]:
        lines: list[Text] = []
        for p in places:
            section = section_of(p.need)
            if height >= 4 and (section != before or not lines):
                size_of = sum(section_of(other.need) == section for other in rows)
                lines.append(
                    _rule(section, "continued" if section == before else f"{size_of}", column, words)
                )
            before = section
            lines += row_lines(shot, p, p.name == chosen, column, name_width, form, words)
        told.append(lines[:height])
    return _side_by_side(told, column)


def _paged(
    shot: Snapshot,
    rows: Sequence[Place],
    chosen: str | None,
    size: tuple[int, int],
    count: int,
    words: Words,
) -> list[Text]:
    """Return the page of the chosen row, a line about the other pages, and the chosen row told in full."""
    width, height = size
    own = next((p for p in rows if p.name == chosen), rows[0])
    foot = _foot(shot, own, width, words) if height >= FOOT_FROM else []
    room = max(height - 1 - len(foot), 1)
    form = FORMS[-1]
    columns = _columns(rows, form, (_column_width(width, count), room), words, cut=True) or [[]]
    holding = next((i for i, places in enumerate(columns) if own in places), 0)
    first = holding // count * count
    lines = _draw(shot, rows, columns, first, count, chosen, form, (width, room), words)
    lines += [say()] * (room - len(lines))
    if height >= 2:
        before = sum(len(places) for places in columns[:first])
        after = [p for places in columns[first + count :] for p in places]
        lines.append(fit(_rest(shot, before, after, words), width, words.glyphs.cut))
    return [*lines, *foot]


def _rest(shot: Snapshot, before: int, after: Sequence[Place], words: Words) -> Text:
    """Return what is not on this page: how many, whether any presses, when the first needs someone."""
    g = words.glyphs
    parts = []
    if before:
        parts.append(f"{g.less} {before} above")
    if after:
        alarmed = sum(p.need.unacknowledged for p in after)
        told = f"{g.more} {len(after)} below, {alarmed or 'none'} with an unacknowledged alarm"
        lefts = [p.need.left_s for p in after if p.need.left_s is not None]
        if lefts:
            at = shot.now_tick + int(max(min(lefts), 0.0) * TICKS_PER_S)
            told += f", first needed by {words.when(at, shot.now_tick)}"
        parts.append(told)
    return say(("   ".join(parts), "unit"))


def _foot(shot: Snapshot, p: Place, width: int, words: Words) -> list[Text]:
    """Return the chosen row in a few lines at the foot of the list."""
    cut = words.glyphs.cut
    lines = [_rule(words.clean(title(p.name)), "", width, words)]
    for a in p.alarms[: 1 if p.row is not None else 2]:
        lines.append(alarm_line(a, shot, words, width, message=False))
        lines += [say("  ", text) for text in folded(words.clean(a.message), width - 2, 1, cut)]
    if p.row is not None:
        lines += lived(p.row, width, 1, words)
        lines.append(fit(next_line(p.row, shot, words), width, cut))
    return (lines + [say()] * FOOT)[:FOOT]


def _rule(text: str, end: str, width: int, words: Words) -> Text:
    g = words.glyphs
    line = say((g.rule * 2 + " ", "rule"), (text, "name"), " ")
    tail = f" {end} " if end else ""
    fill = max(width - line.cell_len - len(tail) - (2 if tail else 0), 0)
    line.append_text(say((g.rule * fill, "rule"), (tail, "unit"), (g.rule * 2 if tail else "", "rule")))
    return fit(line, width)


def _side_by_side(columns: Sequence[list[Text]], each: int) -> list[Text]:
    """Return columns of ``each`` cells beside each other."""
    if len(columns) == 1:
        return columns[0]
    lines = []
    for i in range(max(len(c) for c in columns)):
        line = say()
        for j, column in enumerate(columns):
            line.append(" " * (j * (each + GAP) - line.cell_len))
            line.append_text(fit(column[i], each) if i < len(column) else say())
        lines.append(line)
    return lines
