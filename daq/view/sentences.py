"""What the view says in sentences: the headline, an alarm, a forecast, a row at a glance."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from rich.text import Text

from daq.records import TICKS_PER_S
from daq.view.curves import coming
from daq.view.model import (
    HOST,
    AlarmRow,
    Expected,
    Place,
    Snapshot,
    TestRow,
    band,
    ratio_to_minimum,
    trend,
)
from daq.view.words import NONE, Piece, Words, beside, event_name, fit, joined, say, short_span, span

ADVICE: Final = "advisory; never wire it as the only protection"
MOST_NAMES: Final = 4

_STATES: Final = {
    "returned_unacknowledged": "over, unacknowledged",
    "latched_unacknowledged": "latched, unacknowledged",
    "latched_acknowledged": "latched, acknowledged",
}
_SHORT_STATES: Final = {
    "unacknowledged": "unack",
    "acknowledged": "ack",
    "returned_unacknowledged": "over, unack",
    "latched_unacknowledged": "latched, unack",
    "latched_acknowledged": "latched, ack",
}
_SHORT_STAGES: Final = {"inverse primary": "inverse p", "quarantined": "quarant."}


def title(name: str) -> str:
    """Return how a place is called on the screen."""
    return name if name != HOST else "host"


def banner(shot: Snapshot, words: Words, width: int) -> Text:
    """Return the first line: where, when, how old the record is, and at its right edge the bench's label."""
    label = emulation(shot, words, width)
    site = say((words.clean(shot.site) or "upturn", "name"))
    fresh = _freshness(shot, words)
    forms = (
        [site, say(words.clock(shot.now_tick)), fresh],
        [site, say(words.short_clock(shot.now_tick)), fresh],
        [site, fresh],
        [site],
    )
    lines = [joined(parts) for parts in forms]
    room = width - label.cell_len - 1
    return beside(next((line for line in lines if line.cell_len <= room), lines[-1]), label, width)


def _freshness(shot: Snapshot, words: Words) -> Text:
    if shot.commit_age_s is None:
        return say(("record of unknown age", "seen"))
    if shot.silent:
        return say((f"RECORD SILENT {span(shot.commit_age_s)}", "press"))
    return say((f"record {span(shot.commit_age_s)} old", "unit"))


def emulation(shot: Snapshot, words: Words, width: int) -> Text:
    """Return the label that is on every screen of a bench whose instruments are emulated, else nothing."""
    if not shot.emulated and shot.speed == 1.0:
        return say()
    speed = f"{words.glyphs.times}{shot.speed:g}"
    forms = [f" EMULATED BENCH  time {speed} ", f" EMULATED {speed} ", "EMULATED", "E"]
    return say((next((f for f in forms if len(f) <= max(width - 30, width // 2)), forms[-1]), "label"))


def headline(shot: Snapshot, rows: Sequence[Place], words: Words) -> list[Text]:
    """Return the sentences that a person on duty needs first."""
    if shot.silent:
        return [say(("The record stands still: what you see is old. Look whether the daemon runs.", "press"))]
    waiting = [p for p in rows if p.need.left_s is not None]
    now = [p for p in waiting if p.need.left_s is not None and p.need.left_s <= 0]
    later = next((p for p in waiting if p.need.left_s is not None and p.need.left_s > 0), None)
    parts = []
    if now:
        some = "needs" if len(now) == 1 else "need"
        parts.append(say((f"{_names(now, words)} {some} someone now.", "press")))
    if later is not None and later.need.left_s is not None:
        at = shot.now_tick + int(later.need.left_s * TICKS_PER_S)
        name = words.clean(title(later.name))
        if later.need.stated:
            when, left = words.when(at, shot.now_tick), span(later.need.left_s)
            parts.append(
                say((f"Then {name} by {when}, in {left}.", "name"))
                if now
                else say((f"Nobody is needed before {when} ({name}, in {left}), as far as is known.", "name"))
            )
        elif not now:
            left = span(later.need.left_s)
            parts.append(say((f"{name} has an alarm without a deadline: have a look within {left}.", "name")))
    if not waiting:
        parts.append(say("Nothing is known that needs anyone."))
    count = sum(a.unacknowledged and not a.aside for p in rows for a in p.alarms)
    if count:
        parts.append(say((f"{count} alarm{'s' if count > 1 else ''} unacknowledged.", "seen")))
    return parts


def _names(rows: Sequence[Place], words: Words) -> str:
    names = [words.clean(title(p.name)) for p in rows]
    if len(names) > MOST_NAMES:
        return f"{', '.join(names[:MOST_NAMES])} and {len(names) - MOST_NAMES} more"
    return " and ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)


# --- alarms -----------------------------------------------------------------------------


def sign(alarms: Sequence[AlarmRow]) -> tuple[str, str]:
    """Return the sign of the gravest of some alarms, and its style.

    ! unacknowledged, + acknowledged and still so, - put aside, i a notice.
    """
    if any(a.unacknowledged and not a.aside for a in alarms):
        return "!", "press"
    if any(not (a.aside or a.notice) for a in alarms):
        return "+", "seen"
    if any(a.aside for a in alarms):
        return "-", "quiet"
    return ("i", "quiet") if alarms else (" ", "")


def alarm_name(a: AlarmRow, words: Words) -> str:
    """Return the alarm's name in words, with what it concerns."""
    name = a.alarm.replace("_", " ")
    return words.clean(f"{name} ({a.subject})" if a.subject else name)


def alarm_line(a: AlarmRow, shot: Snapshot, words: Words, width: int, *, message: bool = True) -> Text:
    """Return an open alarm on one line: sign, name, state, age, until when it can wait, what it says.

    Where that is too long, first the message goes, then the words get short, last the name is cut: state
    and deadline stay.
    """
    mark, style = sign([a])
    named = say((f"{mark} {alarm_name(a, words)}", style))
    age = None if a.since_tick is None else (shot.now_tick - a.since_tick) / TICKS_PER_S
    state = words.clean(_STATES.get(a.state, a.state.replace("_", " ")) or "open")
    long = [named, say(state if age is None else f"{state}, {span(age)} old")]
    state = _SHORT_STATES.get(a.state, state)
    short = [say(f"{state} {short_span(age)}" if age is not None else state)]
    if a.can_wait_until_tick is not None:
        when = words.when(a.can_wait_until_tick, shot.now_tick)
        can = "can" if a.can_wait_until_tick > shot.now_tick else "could"
        long.append(say((f"{can} wait until {when}", "name")))
        short.append(say((f"until {when}", "name")))
    line = joined(long)
    if line.cell_len > width:
        rest = joined(short)
        return joined([fit(named, max(width - rest.cell_len - 2, 3), words.glyphs.cut), rest])
    if message and a.message and width - line.cell_len > 12:
        line = fit(joined([line, say(words.clean(a.message))]), width, words.glyphs.cut)
    return line


# --- a test -----------------------------------------------------------------------------


def left_of(p: Place) -> tuple[str, str]:
    """Return the time left to act, in five characters, and its style."""
    left = p.need.left_s
    if left is None:
        return NONE, "quiet"
    if left <= 0:
        return "now", "press"
    return (short_span(left), "name") if p.need.stated else ("look", "seen")


def stage(row: TestRow, words: Words) -> str:
    """Return the stage in words."""
    return "quarantined" if row.quarantined else words.clean(row.stage.replace("_", " ")) or NONE


def stage_style(row: TestRow) -> str:
    """Return the style of a stage."""
    if row.quarantined:
        return "press"
    return {"tertiary": "late", "ruptured": "late", "ended": "quiet"}.get(row.stage, "")


def stage_age_h(row: TestRow) -> float | None:
    """Return for how long the test has been in its stage [h]."""
    if row.test_h is None or row.stage_since_h is None:
        return None
    return row.test_h - row.stage_since_h


def trend_sign(row: TestRow, words: Words) -> str:
    """Return the arrow of the trend, and the ratio to the minimum: "↗2.1×"."""
    g, t, ratio = words.glyphs, trend(row), ratio_to_minimum(row)
    arrow = " " if t is None else (g.falls, g.level, g.rises)[t + 1]
    if ratio is None:
        return arrow
    return f"{arrow}{ratio:.1f}{g.times}" if ratio < 99.95 else f"{arrow}{min(ratio, 9999):.0f}{g.times}"


def head_pieces(p: Place, words: Words, name_width: int) -> list[Piece]:
    """Return the row of a place, in pieces of fixed widths."""
    left, left_style = left_of(p)
    mark, mark_style = sign(p.alarms)
    lead = [
        Piece(left, 5, left_style, 5, right=True),
        Piece(mark, 1, mark_style, 0),
        Piece(words.clean(title(p.name)), name_width, "name", 1),
    ]
    row = p.row
    if row is None:
        return [*lead, Piece("the daemon's own alarms", 30, "", 2)]
    name = stage(row, words)
    rate = words.rate(row.rate_per_h)
    b = band(row)
    hot = "press" if b is not None and b.beyond > 0 else "seen" if b is not None and b.beyond < 0 else ""
    return [
        *lead,
        Piece(_SHORT_STAGES.get(name, name), 9, stage_style(row), 2),
        Piece(words.hours(stage_age_h(row)), 7, "", 7, right=True),
        Piece(words.strain(row.strain), 7, "", 6, right=True),
        Piece(rate if rate == NONE else f"{rate} %/h", 11, "", 3, right=True),
        Piece(words.half_width(row.rate_low_per_h, row.rate_high_per_h, row.rate_per_h), 5, "unit", 10),
        Piece(trend_sign(row, words), 6, "late" if row.stage == "tertiary" else "", 4),
        Piece(words.off(b), 6, hot, 8, right=True),
        Piece(words.strip(b, 7), 7, hot, 9),
    ]


def expected_line(e: Expected, row: TestRow, shot: Snapshot, words: Words) -> str:
    """Return a forecast as a sentence: what, between when and when, at which coverage."""

    def at(h: float) -> str:
        return words.when(shot.now_tick + int((h - (row.test_h or 0.0)) * 3600 * TICKS_PER_S), shot.now_tick)

    low, high = at(e.low_h), at(e.high_h)
    when = f"before {high}" if e.low_h <= (row.test_h or 0.0) else f"{low} to {high}"
    share = "" if e.coverage is None else f", {100 * e.coverage:.0f} %"
    hours = f"{words.hours(e.low_h)[:-2]} to {words.hours(e.high_h)}"
    return f"{words.clean(event_name(e.of))} {when} ({hours}{share})"


def next_line(row: TestRow, shot: Snapshot, words: Words) -> Text:
    """Return what comes next, or why nothing can be said."""
    e = coming(row)
    if e is not None:
        return say(("next  ", "unit"), (expected_line(e, row, shot, words), "soon"))
    if row.next_event:
        return say(("next  ", "unit"), (words.clean(row.next_event), "unit"))
    return say()


def short_next(row: TestRow, shot: Snapshot, words: Words, width: int) -> Text:
    """Return what comes next in a few words for the end of a row."""
    e = coming(row)
    if e is None:
        return say()
    at = shot.now_tick + int((max(e.low_h, row.test_h or 0.0) - (row.test_h or 0.0)) * 3600 * TICKS_PER_S)
    name = words.clean(event_name(e.of))
    return fit(say((f"{name} from {words.when(at, shot.now_tick)}", "soon")), width, words.glyphs.cut)
