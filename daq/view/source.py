"""Snapshots from a journal folder, read-only: what the daemon last committed, and nothing of its own.

Each read is a few short transactions, none of which stays open while the view waits, so a viewer never
keeps the journal's log from being folded in. Whatever a status lacks is left unknown: an older daemon, or one
that has just begun, says less.
"""

from __future__ import annotations

import math
import time
from collections import deque
from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any, Final, TypeGuard

import numpy as np

from daq.lines import say
from daq.records import TICKS_PER_S, Finding, FloatArray, UpturnError
from daq.store.journal import JournalReader
from daq.store.schema import HOST_FILE
from daq.view.model import (
    HOST,
    AlarmRow,
    Curve,
    Event,
    Expected,
    Snapshot,
    TestRow,
    ViewError,
    finished,
)
from daq.view.words import event_name

EVENTS_MOST: Final = 100
TICKS_PER_H: Final = 3600 * TICKS_PER_S


class JournalSource:
    """Reads the journal in ``folder``, whether or not its daemon is running."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._reader: JournalReader | None = None
        self._history: _History | None = None
        self._age = _Age(folder / HOST_FILE)

    def read(self, detail: str | None) -> Snapshot:
        """Return what the journal says now.

        Raises:
            ViewError: it cannot be read; the message says why.
        """
        try:
            if self._reader is None:
                self._reader = JournalReader(self._folder)
            told = self._reader.status()
            history = self._follow(self._reader, detail)
        except (UpturnError, OSError) as error:
            self.close()
            raise ViewError(f"the journal cannot be read: {error}") from error
        age_s = self._age.seen([(d.get("at_tick"), d.get("now_tick")) for d in told.values() if _is_map(d)])
        return snapshot(told, age_s, history)

    def close(self) -> None:
        """Close the journal; the next read opens it again. May be repeated."""
        if self._reader is not None:
            self._reader.close()
            self._reader = None

    def _follow(self, reader: JournalReader, detail: str | None) -> _History | None:
        """Return the history of the test that is shown in full, brought up to date."""
        if detail is None or detail == HOST:
            return None
        if self._history is None or self._history.test != detail:
            self._history = _History(detail)
        for number, finding in reader.findings(test=detail, after=self._history.after):
            self._history.take(number, finding)
        return self._history


class _Age:
    """How long ago the daemon last committed, by this process's own steady clock.

    At first by the files' times of change; from then on by when what it says was last seen to move. The
    instants in the status themselves do not serve: a bench runs faster than a clock, and UTC may be set.
    """

    def __init__(self, host: Path) -> None:
        self._files = (host, host.with_name(host.name + "-wal"))
        self._last: object = None
        self._moved_at = 0.0

    def seen(self, instants: object) -> float:
        now = time.monotonic()
        if self._last is None:
            changed = [f.stat().st_mtime for f in self._files if f.exists()]
            self._moved_at = now - max(time.time() - max(changed, default=time.time()), 0.0)
        elif instants != self._last:
            self._moved_at = now
        self._last = instants
        return now - self._moved_at


class _History:
    """The stages and the latest findings of one test, followed by the numbers of its findings."""

    def __init__(self, test: str) -> None:
        self.test = test
        self.after = 0
        self.events: deque[Event] = deque(maxlen=EVENTS_MOST)
        self._stages: dict[str, tuple[float, str]] = {}
        self._specimen = ""

    def take(self, number: int, f: Finding) -> None:
        self.after = number
        specimen = "|".join(f.id.split("|")[:2])
        if specimen != self._specimen:  # another specimen hangs in the same place: another test
            self._specimen = specimen
            self._stages.clear()
            self.events.clear()
        self.events.append(Event(f.at_tick, f.test_h, _told(f)))
        if f.kind != "stage":
            return
        taken_back = f.fields.get("withdraws")
        if taken_back:
            self._stages.pop(str(taken_back), None)
        began = _number(f.fields, "onset_h")
        at = began if began is not None else f.test_h
        if at is not None and math.isfinite(at):
            self._stages[f.id] = (at, str(f.fields.get("stage", "")).replace("_", " "))

    @property
    def marks(self) -> tuple[tuple[float, str], ...]:
        return tuple(dict.fromkeys(self._stages.values()))


def _told(f: Finding) -> str:
    try:
        return say(f)
    except (KeyError, TypeError, ValueError):  # a finding of another version, with other fields
        return f.kind.replace("_", " ")


# --- a status as plain values -------------------------------------------------------------


def snapshot(told: Mapping[str, Any], age_s: float | None, history: _History | None = None) -> Snapshot:
    """Return the snapshot in the status of a journal: values by test, the host's own under ""."""
    host = told.get(HOST)
    host = host if _is_map(host) else {}
    tests = {name: d for name, d in told.items() if name != HOST and _is_map(d)}
    latest = max((t for d in tests.values() if (t := _tick(d, "at_tick")) is not None), default=0)
    now = _tick(host, "now_tick")
    speed = _number(host, "speed")
    return Snapshot(
        site=_text(host, "site"),
        now_tick=latest if now is None else now,
        speed=1.0 if speed is None else speed,
        emulated=bool(host.get("emulated", False)),
        commit_age_s=age_s,
        host_alarms=_alarms(host),
        tests=tuple(row_of(name, d, history) for name, d in tests.items()),
        version=_text(host, "version"),
    )


def row_of(name: str, d: Mapping[str, Any], history: _History | None = None) -> TestRow:
    """Return one test from its status; ``history`` is used where it is this test's."""
    test_h, stage = _number(d, "test_h"), _text(d, "stage")
    expected, nothing = _expected(d.get("forecast"))
    own = history if history is not None and history.test == name else None
    since = _number(d, "stage_since_h", "since_h")
    marks = own.marks if own is not None else ((since, stage.replace("_", " ")),) if since is not None else ()
    row = TestRow(
        name=name,
        specimen=_text(d, "specimen"),
        stage=stage,
        stage_since_h=since,
        test_h=test_h,
        strain=_number(d, "strain"),
        rate_per_h=_number(d, "rate_per_h"),
        rate_low_per_h=_number(d, "rate_low_per_h"),
        rate_high_per_h=_number(d, "rate_high_per_h"),
        minimum_rate_per_h=_number(d, "minimum_rate_per_h"),
        ratio_to_minimum=_number(d, "ratio_to_minimum", "rise_ratio"),
        temperature_c=_number(d, "temperature_c"),
        set_point_c=_number(d, "set_point_c"),
        below_k=_number(d, "below_k"),
        above_k=_number(d, "above_k"),
        alarms=_alarms(d),
        next_event=nothing or _milestone(d),
        curve=_curve(d.get("curve")),
        marks=marks,
        events=tuple(reversed(own.events)) if own is not None else (),
        expected=expected,
        quarantined=str(d.get("quarantined") or ""),
    )
    return row if finished(row) else _with_deadline(row, _tick(d, "at_tick"))


def _with_deadline(row: TestRow, at_tick: int | None) -> TestRow:
    """Return the row with the instant from which its rupture must be reckoned with.

    That is the early edge of the forecast; once that is past, its median.
    """
    rupture = next((e for e in row.expected if e.of == "rupture"), None)
    if rupture is None or row.test_h is None or at_tick is None:
        return row
    at_h = next((h for h in (rupture.low_h, rupture.median_h) if h > row.test_h), row.test_h)
    until = at_tick + int((at_h - row.test_h) * TICKS_PER_H)
    return replace(row, can_wait_until_tick=until)


def _expected(value: Any) -> tuple[tuple[Expected, ...], str | None]:
    """Return the forecasts of a status, soonest first, and, where there are none, why."""
    found, why = [], None
    for d in _each_forecast(value):
        low, median, high = (_number(d, key) for key in ("low_h", "median_h", "high_h"))
        of = _text(d, "of")
        if low is not None and median is not None and high is not None:
            found.append(Expected(of, low, median, high, _number(d, "coverage")))
        elif d.get("none_because") and (why is None or of == "rupture"):
            why = f"{event_name(of)}: none yet, because {d['none_because']}"
    return tuple(sorted(found, key=lambda e: (e.low_h, e.median_h, e.of))), why


def _milestone(d: Mapping[str, Any]) -> str | None:
    """Return the next strain to be reached, for want of a forecast."""
    strain = _number(d, "next_milestone")
    return None if strain is None else f"strain {100.0 * strain:g} % is the next milestone"


def _each_forecast(value: Any) -> Iterator[Mapping[str, Any]]:
    """Yield the forecasts in a list, in a mapping by event, or in a single one."""
    if _is_map(value) and "of" in value:
        yield value
    elif _is_map(value):
        for of, d in value.items():
            if _is_map(d):
                yield {"of": of, **d}
    elif isinstance(value, list):
        yield from (d for d in value if _is_map(d))


def _alarms(d: Mapping[str, Any]) -> tuple[AlarmRow, ...]:
    listed = d.get("alarms")
    return tuple(_alarm(a) for a in listed if _is_map(a)) if isinstance(listed, list) else ()


def _alarm(a: Mapping[str, Any]) -> AlarmRow:
    return AlarmRow(
        alarm=_text(a, "alarm"),
        subject=_text(a, "subject"),
        state=_text(a, "state"),
        priority=_text(a, "priority"),
        message=_text(a, "message"),
        since_tick=_tick(a, "since_tick"),
        can_wait_until_tick=_tick(a, "can_wait_until_tick"),
        to_do=_text(a, "to_do"),
    )


def _curve(value: Any) -> Curve | None:
    if not _is_map(value):
        return None
    t_h, strain, rate = (_array(value.get(key)) for key in ("t_h", "strain", "rate_per_h"))
    n = t_h.size
    if n == 0:
        return None
    missing = np.full(n, np.nan)
    order = np.argsort(t_h, kind="stable")
    return Curve(
        t_h[order],
        (strain if strain.size == n else missing)[order],
        (rate if rate.size == n else missing)[order],
    )


def _array(value: Any) -> FloatArray:
    if not isinstance(value, list):
        return np.empty(0)
    return np.array([x if isinstance(x, int | float) else math.nan for x in value], dtype=np.float64)


def _is_map(value: Any) -> TypeGuard[Mapping[str, Any]]:
    return isinstance(value, Mapping)


def _number(d: Mapping[str, Any], key: str, other: str = "") -> float | None:
    """Return the number under ``key`` (or, where that is absent, under the ``other`` name for it)."""
    value = d.get(key if key in d else other)
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        return None
    return float(value)


def _tick(d: Mapping[str, Any], key: str) -> int | None:
    value = d.get(key)
    return value if isinstance(value, int) and not isinstance(value, bool) else None


def _text(d: Mapping[str, Any], key: str) -> str:
    value = d.get(key)
    return value if isinstance(value, str) else ""
