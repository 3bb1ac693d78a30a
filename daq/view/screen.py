"""The whole screen: banner, headline, page and foot, cut to any size down to one cell by one."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Final

from rich.text import Text

from daq.view.commands import Page, Prompt, ViewState, index_of
from daq.view.detail import detail
from daq.view.model import Place, Snapshot
from daq.view.overview import overview
from daq.view.sentences import ADVICE, banner, emulation, headline, sign, title
from daq.view.words import Words, beside, fit, folded, joined, say

HELP: Final = (
    ("Keys", ""),
    ("j k, arrows", "choose a test; g G first and last; n next unacknowledged alarm"),
    ("Enter, Esc", "one test in full, and back to the list"),
    ("a", "acknowledge: you have seen the alarm; asks initials"),
    ("s", "shelve an alarm for some hours; it comes back by itself"),
    ("u", "times in UTC or in local time; the top line says which"),
    ("q", "quit the view; tests and record go on without it"),
    ("Rows", ""),
    ("order", "time left to act, under headings that say how long that is"),
    ("now 4h18 3d4h", "time left; look: an alarm that names no time; -: nothing known"),
    ("! + -", "alarm unacknowledged; acknowledged and still so; put aside"),
    ("figures", "stage, hours in it, strain, rate with its interval, trend"),
    (
        "{rises} {level} {falls}  2.1{times}",
        "rate rising, not shown to move, falling; rate over minimum rate",
    ),
    ("[{dot}{dot}{bar}{pointer}{dot}]", "allowed band: {bar} set point, {pointer} specimen; < > outside"),
    ("rate {start}rupture{end}", "log rate from full load to now, then when rupture is expected;"),
    ("", "floor: the minimum rate so far, top: three times that, or now"),
    ("90 %", "share of cases that an interval is meant to hold"),
)
KEY_WIDTH: Final = 15
LEAST_HEIGHT: Final = 3
"""Lines below which there is only the gravest sign and the headline."""


def compose(
    state: ViewState,
    shot: Snapshot | None,
    rows: Sequence[Place],
    size: tuple[int, int],
    words: Words,
    error: str = "",
) -> list[Text]:
    """Return the screen as exactly ``size`` = (width, height): that many lines, none wider."""
    width, height = max(size[0], 1), max(size[1], 1)
    if shot is None:
        told = folded(words.clean(error) or "reading the record", width, max(height - 1, 1), words.glyphs.cut)
        lines = [say(("upturn", "name")), *[say((line, "press" if error else "")) for line in told]]
    elif height < LEAST_HEIGHT:
        lines = [_least(shot, rows, width, words), say((ADVICE, "unit"))]
    else:
        most = 1 if height < 10 else 2
        top = [banner(shot, words, width), *_headline(shot, rows, width, most, words, error)]
        foot = _foot(state, width, words)
        room = max(height - len(top) - 1, 0)
        lines = [*top, *_page(state, shot, rows, (width, room), words)[:room]]
        lines += [say() for _ in range(height - 1 - len(lines))]
        # a question or a notice lies over the page: what a person looks at must not move for it
        lines = [*lines[: max(height - len(foot), 0)], *foot]
    lines += [say() for _ in range(height - len(lines))]
    return [fit(line, width) for line in lines[:height]]


def _least(shot: Snapshot, rows: Sequence[Place], width: int, words: Words) -> Text:
    """Return the screen of one or two lines: the gravest sign, then the headline."""
    mark, style = sign([a for p in rows for a in p.alarms])
    label = emulation(shot, words, width)
    if width < 8:
        return say((mark if mark != " " else label.plain[:1] or ".", style))
    return beside(joined([say((mark, style)), *headline(shot, rows, words)], " "), label, width)


def _headline(
    shot: Snapshot, rows: Sequence[Place], width: int, most: int, words: Words, error: str
) -> list[Text]:
    """Return the headline on at most ``most`` lines, broken between its sentences where they fit."""
    cut = words.glyphs.cut
    if error:
        told = folded(f"What you see is old: {words.clean(error)}", width, most, cut)
        return [say((line, "press")) for line in told]
    sentences = headline(shot, rows, words)
    if any(s.cell_len > width for s in sentences):
        grave = any(p.need.left_s is not None and p.need.left_s <= 0 for p in rows)
        told = folded(" ".join(s.plain for s in sentences), width, most, cut)
        return [say((line, "press" if grave else "name")) for line in told]
    lines: list[Text] = []
    for sentence in sentences:
        if lines and (lines[-1].cell_len + 1 + sentence.cell_len <= width or len(lines) == most):
            lines[-1] = joined([lines[-1], sentence], " ")
        else:
            lines.append(sentence)
    return [fit(line, width, cut) for line in lines]


def _page(
    state: ViewState, shot: Snapshot, rows: Sequence[Place], size: tuple[int, int], words: Words
) -> list[Text]:
    at = index_of(state, rows)
    if state.page is Page.HELP:
        return _help(size[0], words)
    if state.page is Page.DETAIL and rows:
        return detail(shot, rows[at], (at + 1, len(rows)), size, words)
    return overview(shot, rows, rows[at].name if rows else None, size, words)


def _help(width: int, words: Words) -> list[Text]:
    signs = asdict(words.glyphs)
    lines = []
    for key, meaning in HELP:
        if key and not meaning:
            lines.append(say((key, "name")))
        else:
            lines.append(
                say((f"  {key.format(**signs):<{KEY_WIDTH}}", "name"), words.clean(meaning.format(**signs)))
            )
    return [fit(line, width, words.glyphs.cut) for line in lines]


def _foot(state: ViewState, width: int, words: Words) -> list[Text]:
    """Return the lowest line or lines: a question, a notice, or the keys; the advice always."""
    lowest = beside(_keys(state, width), say((ADVICE, "unit")), width)
    if state.prompt is not None:
        return [*_question(state.prompt, width, words), beside(say(), say((ADVICE, "unit")), width)]
    if state.notice:
        told = folded(words.clean(state.notice), width, 2, words.glyphs.cut)
        return [*[say((line, "name")) for line in told], lowest]
    return [lowest]


def _keys(state: ViewState, width: int) -> Text:
    room = width - len(ADVICE) - 2
    forms = {
        Page.LIST: (
            "j/k choose  Enter open  a acknowledge  n next alarm  ? help  q quit",
            "j/k Enter  a ack  ? help  q quit",
        ),
        Page.DETAIL: (
            "Esc list  j/k other test  a acknowledge  s shelve  ? help  q quit",
            "Esc list  a ack  ? help  q quit",
        ),
        Page.HELP: ("any key goes back",),
    }[state.page]
    return say(next((f for f in forms if len(f) <= room), "? help  q quit"))


def _question(p: Prompt, width: int, words: Words) -> list[Text]:
    """Return the question: which alarm of which test, and the fields to fill in."""
    several = ""
    if p.index == len(p.choices):
        what = f"all {len(p.choices)} unacknowledged alarms"
        several = "Tab: one of them"
    else:
        c = p.choices[p.index]
        what = words.clean(c.alarm.replace("_", " ") + (f" ({c.subject})" if c.subject else ""))
        if len(p.choices) > 1:
            several = f"Tab: another, this is {p.index + 1} of {len(p.choices)}"
    first = say((f"{p.entry.capitalize()} {words.clean(title(p.name))}: ", "name"), what)
    second = say()
    for i, (field, text) in enumerate(p.fields):
        second.append_text(say((f"{field}: ", "unit"), words.clean(text), "_  " if i == p.at else "  "))
    second.append_text(say((p.complaint, "press")))
    return [
        beside(first, say((several, "unit")), width) if several else fit(first, width),
        beside(second, say(("Enter sends, Esc drops", "unit")), width),
    ]
