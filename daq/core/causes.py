"""One cause, one alarm: what several sensors say of one thing is raised once.

Three thermocouples and their mean leave the band together, first its inner edge, then the
band: that is one hot furnace, not eight alarms. Here cues of such a family are counted, and only the
first that begins and the last that ends go on to the alarm machine, without a subject; which
sensors they were stays in the findings (``excursion``) and in the figures.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Final

from daq.codec import state
from daq.core.block import Cue

FAMILIES: Final = {
    "temperature_high": "",
    "temperature_low": "",
    "temperature_nearing_high": "temperature_high",
    "temperature_nearing_low": "temperature_low",
}
"""Alarms raised once a test whatever the subject -> the graver alarm that says the same and more."""


@state
@dataclass(frozen=True, slots=True)
class CausesState:
    """``held``: (alarm, subject) whose condition stands; ``told``: families that stand raised."""

    held: tuple[tuple[str, str], ...] = ()
    told: tuple[str, ...] = ()


def gather(s: CausesState, cues: Iterable[Cue]) -> tuple[CausesState, list[Cue]]:
    """Return what of ``cues`` (in the order of scans) the alarm machine is to hear."""
    heard: list[Cue] = []
    for cue in cues:
        if cue.alarm not in FAMILIES:
            heard.append(cue)
            continue
        rest = tuple(h for h in s.held if h != (cue.alarm, cue.subject))
        s = replace(s, held=(*rest, (cue.alarm, cue.subject)) if cue.active else rest)
        for alarm in FAMILIES:
            s = _settle(s, alarm, cue, heard)
    return s, heard


def _settle(s: CausesState, alarm: str, cue: Cue, heard: list[Cue]) -> CausesState:
    """Raise or let go one family after ``cue``; a warning gives way to the alarm it warned of, and comes
    back when that alarm ends while the edge is still near."""
    stands = any(a == alarm for a, _ in s.held)
    graver = FAMILIES[alarm]
    covered = bool(graver) and any(a == graver for a, _ in s.held)
    if alarm in s.told and (not stands or covered):
        heard.append(Cue(cue.scan, cue.tick, alarm, "", False))
        return replace(s, told=tuple(a for a in s.told if a != alarm))
    if alarm in s.told or not stands or covered:
        return s
    if cue.alarm == alarm and cue.active:
        figures = {**cue.figures, "channel": cue.subject}
        heard.append(replace(cue, subject="", figures=figures))
        return replace(s, told=(*s.told, alarm))
    if cue.alarm == graver:  # that one is over, and the warning that it had covered still holds
        near = tuple(subject for a, subject in s.held if a == alarm)
        message = f"{', '.join(near)}: back within the tolerance, still close to its edge"
        heard.append(Cue(cue.scan, cue.tick, alarm, "", True, message, None, {"channel": near[0]}))
        return replace(s, told=(*s.told, alarm))
    return s
