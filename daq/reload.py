"""The lab file read again while the house runs: what changes at once, what needs a restart, what is refused.

What a test is judged by (its rules) may change at any time and enters the record as a fact. How readings
come in (instruments, ports, channels and their sources) and where things go (site, journal, broker) stays
as it was at the start; where the file says otherwise, it is said by name what waits for a restart. A file
with a mistake, or one with which a restart would fail, changes nothing.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any, Final

from daq import settings
from daq.clock import Clock
from daq.core.rules import TestRules, rules_to_json
from daq.records import ConditionChanged, Fact, RulesAdopted, UpturnError
from daq.settings import Frame, Instrument, Lab, SettingsError

HOST: Final = ""
SUBJECT: Final = "settings"
MOST: Final = 20
"""Mistakes or differences in one message; the log has all of them."""
_NOWHERE: Final = object()


@dataclass(frozen=True, slots=True)
class Comparison:
    """``lab``: the settings now in force. ``adopted``: the rules that are new; ``said``: what is new in them.

    ``restart``: what the file says otherwise, by name, and only a restart can change.
    """

    lab: Lab
    adopted: tuple[TestRules, ...]
    said: tuple[str, ...]
    restart: tuple[str, ...]


class Reloader:
    """Reads the lab file again when asked. For one thread.

    Args:
        news: Takes the facts; must only put them on a queue.
        line: Takes the lines of the log.
    """

    def __init__(
        self, lab: Lab, clock: Clock, news: Callable[[Fact], None], line: Callable[[str], None]
    ) -> None:
        self._lab = lab
        self._clock = clock
        self._news = news
        self._line = line
        self._refused = False
        self._waiting: tuple[str, ...] = ()

    def again(self) -> bool:
        """Read the file, and adopt what can be adopted; return False where it was refused.

        Nothing that a file may hold raises anything.
        """
        try:
            new = read(self._lab.path)
            compared = compare(self._lab, new)
        except SettingsError as error:
            self._refuse([p.say(error.file) for p in error.problems])
            return False
        except Exception as error:  # a fault of ours must not end the recording of all frames
            what = str(error) if isinstance(error, UpturnError) else f"fault of this program: {error!r}"
            self._refuse([f"{self._lab.path}: {what}"])
            return False
        self._lab = compared.lab
        stamp = self._clock.stamp()
        for rules in compared.adopted:
            self._news(RulesAdopted(stamp, rules.frame, rules.test, rules_to_json(rules)))
        if self._refused:
            self._refused = False
            self._condition("settings_refused", False, "the file is in order again")
        for text in (*compared.said, *(f"needs a restart: {name}" for name in compared.restart)):
            self._line(f"settings: {text}")
        message = in_words(compared)
        self._line(f"settings: {message}")
        if compared.said or compared.restart != self._waiting:
            self._waiting = compared.restart
            self._condition("settings_adopted", True, message)
        return True

    def _refuse(self, mistakes: list[str]) -> None:
        self._refused = True
        for mistake in mistakes:
            self._line(f"settings refused: {mistake}")
        message = f"the old settings stay in force; {_some(mistakes)}"
        self._condition("settings_refused", True, message)

    def _condition(self, condition: str, active: bool, message: str) -> None:
        self._news(ConditionChanged(self._clock.stamp(), HOST, SUBJECT, condition, active, message))


def read(path: Path) -> Lab:
    """Return the settings in ``path``, if the house could start with them.

    Raises:
        SettingsError: it could not; every mistake is named.
    """
    lab = settings.load(path)
    settings.must_be_ready(lab)
    return lab


def in_words(c: Comparison) -> str:
    """Return one line for people."""
    if not c.said and not c.restart:
        return "as they were"
    adopted = f"adopted: {_some(list(c.said))}" if c.said else "nothing was adopted"
    return adopted + (f"; needs a restart: {_some(list(c.restart))}" if c.restart else "")


def _some(texts: list[str]) -> str:
    more = f"; and {len(texts) - MOST} more, see the log" if len(texts) > MOST else ""
    return "; ".join(texts[:MOST]) + more


# --- what is new ------------------------------------------------------------------------


def compare(old: Lab, new: Lab) -> Comparison:
    """Return what ``new`` changes in a house that runs with ``old``."""
    restart = [
        f"{name} (now {was}, in the file {will})"
        for name, was, will in (("site", old.site, new.site), ("journal", old.journal, new.journal))
        if was != will
    ]
    restart += [name for name in ("broker", "bench") if getattr(old, name) != getattr(new, name)]
    restart += _instruments(old.instruments, new.instruments)
    names = {f.name for f in old.frames}
    restart += [f"frame {f.name} (new)" for f in new.frames if f.name not in names]
    by_name = {f.name: f for f in new.frames}
    frames, adopted, said = [], [], []
    for frame in old.frames:
        found = by_name.get(frame.name)
        if found is None:
            restart.append(f"frame {frame.name} (no longer in the file)")
        elif why := _shape(frame, found):
            restart.append(f"{why} of frame {frame.name}, whose rules all stay as they were until then")
        else:
            kept, fresh, words = _frame(frame, found)
            frames.append(kept)
            adopted += fresh
            said += words
            continue
        frames.append(frame)
    lab = replace(old, frames=tuple(frames))
    return Comparison(lab, tuple(adopted), tuple(said), tuple(restart))


def _instruments(old: tuple[Instrument, ...], new: tuple[Instrument, ...]) -> Iterator[str]:
    before, now = {i.name: i for i in old}, {i.name: i for i in new}
    for name in sorted({*before, *now}):
        if name not in before:
            yield f"instrument {name} (new)"
        elif name not in now:
            yield f"instrument {name} (no longer in the file)"
        elif before[name] != now[name]:
            a, b = _all(before[name]), _all(now[name])
            keys = sorted(k for k in {*a, *b} if a.get(k, _NOWHERE) != b.get(k, _NOWHERE))
            yield f"{', '.join(keys)} of instrument {name}"


def _all(i: Instrument) -> dict[str, Any]:
    return {**{f.name: getattr(i, f.name) for f in fields(i) if f.name != "options"}, **i.options}


def _shape(old: Frame, new: Frame) -> str:
    """Return what of a frame's scans is another now; their columns are fixed when the buses are started."""
    if {r.test for r in old.tests} != {r.test for r in new.tests}:
        return "positions"
    if set(old.columns) != set(new.columns):
        names = sorted(set(old.columns) ^ set(new.columns))
        return f"channels ({', '.join(names)})"
    if moved := sorted(c for c in old.columns if old.sources.get(c) != new.sources.get(c)):
        return f"sources of channels ({', '.join(moved)})"
    return ""


def _frame(old: Frame, new: Frame) -> tuple[Frame, list[TestRules], list[str]]:
    before = {r.test: r for r in old.tests}
    tests, adopted, said = [], [], []
    for found in new.tests:
        known = before[found.test]
        # the site and the pace of scans are the house's; they stay until it is started again
        rules = replace(found, site=known.site, scan_every_s=known.scan_every_s)
        tests.append(rules)
        if rules != known:
            adopted.append(rules)
            said += [f"{rules.test}: {text}" for text in _differences(known, rules)]
    return replace(old, tests=tuple(tests)), adopted, said


def _differences(old: TestRules, new: TestRules) -> Iterator[str]:
    """Say what is new in the words of the record: SI, strain in m/m."""
    if old.specimen.id != new.specimen.id:
        yield f"specimen {new.specimen.id} in place of {old.specimen.id}, a new test begins"
    a, b = dict(_flat(json.loads(rules_to_json(old)))), dict(_flat(json.loads(rules_to_json(new))))
    for key in sorted({*a, *b}):
        if a.get(key, _NOWHERE) != b.get(key, _NOWHERE) and key != "specimen.id":
            yield f"{key} {json.dumps(b.get(key))} (was {json.dumps(a.get(key))})"
    if [c.name for c in old.channels] != [c.name for c in new.channels]:
        yield "channels in another order"


def _flat(value: Any, place: str = "") -> Iterator[tuple[str, Any]]:
    if isinstance(value, Mapping):
        for key, inner in value.items():
            yield from _flat(inner, f"{place}.{key}" if place else key)
    elif place == "channels":
        for channel in value:
            yield from _flat(channel, f"channel {channel['name']}")
    else:
        yield place, value
