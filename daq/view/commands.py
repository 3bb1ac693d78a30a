"""What the keys do: a pure function from (state of the view, key) to the next state, and maybe an order.

An order is an entry to be written; the loop does that. Nothing here touches the terminal or the record.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from enum import Enum
from typing import Any, Final

from daq.view import keys
from daq.view.model import Place

INITIALS_MOST: Final = 8
HOURS_MOST: Final = 6
SHELVE_MOST_H: Final = 72.0
"""A shelved alarm comes back by itself; three days reach over a weekend (common practice, no source)."""
PAGE: Final = 10


class Page(Enum):
    """Which page is shown."""

    LIST = "list"
    DETAIL = "detail"
    HELP = "help"


@dataclass(frozen=True, slots=True)
class Choice:
    """One alarm of one place, as an entry names it."""

    alarm: str
    subject: str


@dataclass(frozen=True, slots=True)
class Prompt:
    """A question at the foot of the screen. The alarms are those that were on the screen when it opened.

    ``index`` = len(choices) means all of them. ``fields`` are asked in turn.
    """

    entry: str
    name: str
    choices: tuple[Choice, ...]
    index: int
    fields: tuple[tuple[str, str], ...]
    at: int = 0
    complaint: str = ""


@dataclass(frozen=True, slots=True)
class Order:
    """Entries to be written, one for each alarm chosen."""

    frame: str
    entry: str
    initials: str
    values: tuple[dict[str, Any], ...]


@dataclass(frozen=True, slots=True)
class ViewState:
    """Everything the view remembers. ``chosen`` None follows the most urgent row."""

    page: Page = Page.LIST
    before_help: Page = Page.LIST
    chosen: str | None = None
    prompt: Prompt | None = None
    notice: str = ""
    utc: bool = False
    quit: bool = False
    order: Order | None = field(default=None)


def index_of(state: ViewState, rows: Sequence[Place]) -> int:
    """Return the place of the chosen row; where it is gone, the most urgent one."""
    return next((i for i, p in enumerate(rows) if p.name == state.chosen), 0)


def press(state: ViewState, key: str, rows: Sequence[Place]) -> ViewState:
    """Return the state after a key. ``order`` is set on the state that made one, and on no later one."""
    state = replace(state, notice="", order=None)
    if state.prompt is not None:
        return _answer(state, state.prompt, key)
    if key == "q":
        return replace(state, quit=True)
    if state.page is Page.HELP:
        return replace(state, page=state.before_help)
    if key == "?":
        return replace(state, page=Page.HELP, before_help=state.page)
    if key == "u":
        return replace(state, utc=not state.utc)
    if not rows:
        return state
    at = index_of(state, rows)
    if key in _MOVES:
        to = min(max(_MOVES[key](at, len(rows)), 0), len(rows) - 1)
        return replace(state, chosen=rows[to].name)
    if key == "n":
        after = [*rows[at + 1 :], *rows[: at + 1]]
        found = next((p for p in after if p.need.unacknowledged), None)
        if found is None:
            return replace(state, notice="no alarm is unacknowledged")
        return replace(state, chosen=found.name)
    if key == keys.ENTER and state.page is Page.LIST:
        return replace(state, page=Page.DETAIL, chosen=rows[at].name)
    if key in (keys.ESCAPE, keys.BACKSPACE, keys.ENTER):
        return replace(state, page=Page.LIST)
    if key in ("a", "s"):
        return _ask(state, rows[at], "acknowledge" if key == "a" else "shelve")
    return state


_MOVES: Final[dict[str, Callable[[int, int], int]]] = {
    keys.UP: lambda i, n: i - 1,
    "k": lambda i, n: i - 1,
    keys.DOWN: lambda i, n: i + 1,
    "j": lambda i, n: i + 1,
    keys.PAGE_UP: lambda i, n: i - PAGE,
    keys.PAGE_DOWN: lambda i, n: i + PAGE,
    keys.HOME: lambda i, n: 0,
    "g": lambda i, n: 0,
    keys.END: lambda i, n: n - 1,
    "G": lambda i, n: n - 1,
}


def _ask(state: ViewState, place: Place, entry: str) -> ViewState:
    open_ones = [a for a in place.alarms if (a.unacknowledged if entry == "acknowledge" else not a.aside)]
    if not open_ones:
        what = "unacknowledged alarm" if entry == "acknowledge" else "alarm to shelve"
        return replace(state, notice=f"{place.name or 'host'} has no {what}")
    asked = ("initials",) if entry == "acknowledge" else ("hours", "initials")
    choices = tuple(Choice(a.alarm, a.subject) for a in open_ones)
    prompt = Prompt(entry, place.name, choices, 0, tuple((name, "") for name in asked))
    return replace(state, prompt=prompt, chosen=place.name)


def _answer(state: ViewState, p: Prompt, key: str) -> ViewState:
    if key == keys.ESCAPE:
        return replace(state, prompt=None, notice=f"nothing was sent; {p.entry} dropped")
    if key in (keys.TAB, keys.DOWN, keys.UP):
        many = len(p.choices) + (p.entry == "acknowledge" and len(p.choices) > 1)
        step = -1 if key == keys.UP else 1
        return replace(state, prompt=replace(p, index=(p.index + step) % many, complaint=""))
    name, text = p.fields[p.at]
    if key == keys.ENTER:
        return _next_field(state, p, name, text)
    if key == keys.BACKSPACE:
        text = text[:-1]
    elif len(key) == 1 and _may_follow(name, text, key):
        text += key
    fields = tuple((n, text if i == p.at else t) for i, (n, t) in enumerate(p.fields))
    return replace(state, prompt=replace(p, fields=fields, complaint=""))


def _may_follow(name: str, text: str, key: str) -> bool:
    if name == "hours":
        return (
            len(text) < HOURS_MOST and (key.isdigit() or (key == "." and "." not in text)) and key.isascii()
        )
    return len(text) < INITIALS_MOST and (key.isalnum() or key in ".-")


def _next_field(state: ViewState, p: Prompt, name: str, text: str) -> ViewState:
    if name == "initials" and not any(c.isalnum() for c in text):
        return replace(state, prompt=replace(p, complaint="who are you? one letter at least"))
    if name == "hours" and not 0.0 < _number(text) <= SHELVE_MOST_H:
        return replace(state, prompt=replace(p, complaint=f"hours above 0, at most {SHELVE_MOST_H:g}"))
    if p.at + 1 < len(p.fields):
        return replace(state, prompt=replace(p, at=p.at + 1, complaint=""))
    return replace(state, prompt=None, order=_order(p))


def _number(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        return math.nan


def _order(p: Prompt) -> Order:
    answers = dict(p.fields)
    frame, _, position = p.name.partition("/")
    meant = p.choices if p.index == len(p.choices) else (p.choices[p.index],)
    values: list[dict[str, Any]] = []
    for c in meant:
        one: dict[str, Any] = {"alarm": c.alarm, "subject": c.subject}
        if position:
            one["position"] = position
        if "hours" in answers:
            one["hours"] = float(answers["hours"])
        values.append(one)
    return Order(frame, p.entry, answers["initials"], tuple(values))
