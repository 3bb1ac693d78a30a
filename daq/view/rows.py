"""One row of the list, in a ladder of forms: from all that is known of a test down to a single line."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final, NamedTuple

from rich.text import Text

from daq.view.curves import axis_of, coming, life_line, mark_line
from daq.view.model import AlarmRow, Place, Snapshot, TestRow
from daq.view.sentences import alarm_line, head_pieces, next_line, short_next, title
from daq.view.words import Words, fit, folded, joined, lay, say

INDENT: Final = 9
"""Cells before what is said below a row: under the name."""
LABEL: Final = 6
"""Cells before a life line and what comes next, for the word that says which it is."""
GAP: Final = 2
NAME_MOST: Final = 12
AIRY_FROM: Final = 112
"""Width from which two blanks stand between figures, and a life line still fits beside them."""


class Form(NamedTuple):
    """How much is said of a row: alarms, lines of message for each, height of the life line, what comes next.

    ``quiet`` false: rows without an unacknowledged alarm get their first line only.
    """

    alarms: int
    message: int
    life: int
    marks: bool
    next: bool
    quiet: bool = True


FORMS: Final = (
    *(Form(8, 2, high, True, True) for high in (8, 6, 5, 4, 3, 2)),
    Form(8, 2, 1, True, True),
    Form(8, 2, 1, False, True),
    Form(3, 1, 1, False, True),
    Form(3, 0, 1, False, True),
    Form(2, 0, 1, False, False),
    Form(2, 0, 0, False, False),
    Form(2, 0, 0, False, False, quiet=False),
    Form(1, 0, 0, False, False, quiet=False),
)


def name_width_of(rows: Sequence[Place], words: Words) -> int:
    """Return the width of the column of names."""
    return min(max([2, *(len(words.clean(title(p.name))) for p in rows)]), NAME_MOST)


def line_count(p: Place, form: Form, width: int, words: Words) -> int:
    """Return the number of lines that :func:`row_lines` will make."""
    if not (form.quiet or p.need.unacknowledged):
        return 1
    shown = p.alarms[: form.alarms]
    count = 1 + len(shown) + sum(len(_message(a, form, width, words)) for a in shown)
    if p.row is not None:
        count += form.life
        count += bool(form.life and form.marks and p.row.marks and axis_of(p.row, 1) is not None)
        count += bool(form.next and (coming(p.row) is not None or p.row.next_event))
    return count


def _message(a: AlarmRow, form: Form, width: int, words: Words) -> list[str]:
    """Return an alarm's message below it; one that is put aside has said enough with its name."""
    if a.aside or not form.message:
        return []
    return folded(words.clean(a.message), width - 2, form.message, words.glyphs.cut)


def row_lines(
    shot: Snapshot, p: Place, chosen: bool, width: int, name_width: int, form: Form, words: Words
) -> list[Text]:
    """Return all that a form says of one row."""
    head = lay(head_pieces(p, words, name_width), width - 1, " " if width < AIRY_FROM else "  ")
    spare = width - 1 - head.cell_len - GAP
    if p.row is not None and spare >= 12:
        life = 0 if form.life else spare if spare < 40 else spare - 26
        if life:
            line = fit(life_line(p.row, life, 1, words)[0], life)
            head.append(" " * GAP).append_text(line).append(" " * (life - line.cell_len))
        if not form.next and spare - life >= 24:
            head.append(" " * GAP).append_text(short_next(p.row, shot, words, 24))
    lines = [head]
    if form.quiet or p.need.unacknowledged:
        lines += _below(shot, p, width - INDENT, form, words)
    edge = (words.glyphs.chosen, "chosen") if chosen else " "
    told = []
    for i, line in enumerate(lines):
        full = say(edge) if i == 0 or chosen else say(" ")
        full.append(" " * (INDENT - 1) if i else "")
        full.append_text(line)
        told.append(fit(full, width))
    return told


def _below(shot: Snapshot, p: Place, width: int, form: Form, words: Words) -> list[Text]:
    """Return what stands below the first line of a row."""
    lines = []
    shown, more = p.alarms[: form.alarms], len(p.alarms) - form.alarms
    for i, a in enumerate(shown):
        if more > 0 and i == len(shown) - 1:
            rest = say((f"+{more} more", "seen"))
            own = alarm_line(a, shot, words, width - rest.cell_len - 2, message=False)
            lines.append(joined([own, rest]))
        else:
            lines.append(alarm_line(a, shot, words, width, message=not form.message))
        lines += [say("  ", text) for text in _message(a, form, width, words)]
    row = p.row
    if row is None:
        return lines
    if form.life:
        lines += lived(row, width, form.life, words)
        axis = axis_of(row, width - LABEL)
        if form.marks and axis is not None and row.marks:
            lines.append(say(" " * LABEL).append_text(mark_line(row.marks, axis, words)))
    if form.next:
        told = next_line(row, shot, words)
        if told.cell_len:
            lines.append(fit(told, width, words.glyphs.cut))
    return lines


def lived(row: TestRow, width: int, height: int, words: Words) -> list[Text]:
    """Return the life line with its name before it."""
    lines = []
    for i, line in enumerate(life_line(row, max(width - LABEL, 1), height, words)):
        lines.append(say((f"{'' if i else 'rate':<{LABEL}}", "unit")).append_text(line))
    return lines
