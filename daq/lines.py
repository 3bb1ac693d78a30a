"""Findings as text: one JSON line each, as outside programs read them, or one line for people."""

from __future__ import annotations

from collections.abc import Callable
from datetime import UTC, datetime
from typing import Any

from daq.codec import canonical_json
from daq.records import TICKS_PER_S, Finding

HowAt = Callable[[int], Any]
"""Turns a UTC tick into what stands under ``at``: a number of seconds or an ISO 8601 text."""


def iso_utc(tick: int) -> str:
    """Return a UTC tick as ISO 8601 text to 0.1 ms, exactly (no float on the way)."""
    whole, part = divmod(tick, TICKS_PER_S)
    return f"{datetime.fromtimestamp(whole, UTC):%Y-%m-%dT%H:%M:%S}.{part:04d}Z"


def json_line(f: Finding, how_at: HowAt) -> str:
    """Return the JSON text of one finding, without the line's end."""
    line: dict[str, Any] = {
        "id": f.id, "at": how_at(f.at_tick), "test_h": f.test_h, "frame": f.frame, "kind": f.kind, **f.fields,
    }  # fmt: skip
    if line.get("can_wait_until") is not None:
        line["can_wait_until"] = how_at(line["can_wait_until"])
    return canonical_json(line)


def plain_line(f: Finding, how_at: HowAt | None = None) -> str:
    """Return one line for a log or a terminal: when, where, what, in the words of the trade.

    ``how_at`` says how a recording dates its scans; a recording may count seconds from any origin.
    """
    at = "        -" if f.test_h is None else f"{f.test_h:9.2f}"
    when = f"{iso_utc(f.at_tick)[:19]}Z" if how_at is None else f"{how_at(f.at_tick):>20}"
    return f"{when} {at} h  {f.frame or 'host':<10} {say(f)}"


def say(f: Finding) -> str:
    """Return what a finding says, in a few words."""
    teller = _TELL.get(f.kind)
    return teller(f.fields) if teller else f"{f.kind} {canonical_json(f.fields)}"


def percent(x: float | None, digits: int = 3) -> str:
    """Return a strain as text in per cent."""
    return "-" if x is None else f"{100.0 * x:.{digits}f} %"


def rate(x: float | None) -> str:
    """Return a rate [1/h] as text in per cent per hour."""
    return "-" if x is None else f"{100.0 * x:.3g} %/h"


def _span(low: float | None, high: float | None) -> str:
    return "" if low is None or high is None else f" (90 %: {low:.2f} to {high:.2f} h)"


def _stage(f: Any) -> str:
    onset = "" if f.get("onset_h") is None else f", since {f['onset_h']:.2f} h"
    taken = "; an earlier detection is taken back" if f.get("withdraws") else ""
    why = f": {f['why']}" if f.get("why") else ""
    return f"stage {f['stage']}{onset}{_span(f.get('onset_low_h'), f.get('onset_high_h'))}{taken}{why}"


def _minimum(f: Any) -> str:
    return (
        f"minimum rate {rate(f['rate_per_h'])} (90 %: {rate(f['low_per_h'])} to {rate(f['high_per_h'])})"
        f" at {f['time_h']:.2f} h"
    )


def _onset(f: Any) -> str:
    at = "not reached" if f.get("time_h") is None else f"{f['time_h']:.2f} h"
    return f"tertiary onset by {f['definition']}: {at}"


def _excursion(f: Any) -> str:
    return (
        f"temperature {f['channel']} out of band from {f['from_h']:.2f} to {f['to_h']:.2f} h,"
        f" worst {f['worst_c']:.2f} degC against {f['limit_c']:.2f}"
    )


def _step(f: Any) -> str:
    where = ", ".join(f["channels"])
    return f"step of {f['size'] * 1e6:+.0f}e-6 in {where} at {f['time_h']:.2f} h: {f['cause']}"


def _forecast(f: Any) -> str:
    if f.get("none_because"):
        return f"forecast of {f['of']}: none yet, because {f['none_because']}"
    return (
        f"forecast of {f['of']}: {f['median_h']:.1f} h"
        f" ({100 * f['coverage']:.0f} %: {f['low_h']:.1f} to {f['high_h']:.1f} h)"
    )


def _alarm(f: Any) -> str:
    subject = f" {f['subject']}" if f.get("subject") else ""
    by = f" by {f['initials']}" if f.get("initials") else ""
    return f"alarm {f['alarm']}{subject} {f['state']}{by} ({f['priority']}): {f['message']}"


_TELL: dict[str, Callable[[Any], str]] = {
    "stage": _stage,
    "minimum_rate": _minimum,
    "onset": _onset,
    "milestone": lambda f: f"strain {percent(f['strain'])} reached at {f['time_h']:.2f} h",
    "excursion": _excursion,
    "step": _step,
    "forecast": _forecast,
    "alarm": _alarm,
    "entry": lambda f: f"entry {f['entry']} by {f['initials']} {f['note']}".rstrip(),
    "outage": lambda f: f"outage: {f['words']}",
    "summary": lambda f: f"summary {canonical_json(f)}",
}
