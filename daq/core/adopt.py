"""New rules in the middle of a test: what was learnt of a channel stays with its name.

A laboratory adds a thermocouple, renames a channel or moves a limit while the test runs. Watchers that
keep something for each channel get it back in the new order; a channel that is new begins anew, and one
that has left takes its standing alarms along.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TypeVar

from daq.core import drifting, tallies, watch
from daq.core.band import BandState
from daq.core.milestones import MilestoneState
from daq.core.results import ResultsState
from daq.core.rules import TestRules
from daq.core.sensors import SensorState
from daq.core.torn import NOTHING
from daq.core.watch import WatchState

T = TypeVar("T")


def adopt(
    seen: WatchState, told: ResultsState, old: TestRules, new: TestRules
) -> tuple[WatchState, ResultsState, tuple[tuple[str, str], ...]]:
    """Return the states of watch and results under ``new`` rules, and which cues of theirs end.

    Cues are (alarm, subject), the subject a channel that has left.
    """
    seen = replace(seen, milestones=_levels(seen.milestones, old, new))
    if _names(old) == _names(new):
        return seen, told, ()
    fresh = watch.begin(new)
    left = {c.name for c, name in zip(old.channels, _names(old), strict=True) if name not in _names(new)}
    # who drifts is told by what channels did together: with others it is asked anew
    gone = tuple(cue for cue in seen.standing if cue[1] in left or cue[0] == drifting.ALARM)
    band = _band(seen.band, fresh.band, left)
    seen = replace(
        seen,
        # leaves of sixteen scans, and a vote on what just happened, are of the old columns
        leaves=replace(fresh.leaves, scans=seen.leaves.scans),
        rupture=replace(seen.rupture, last=NOTHING, pending=None),
        band=band,
        sensors=_sensors(seen.sensors, fresh.sensors, old, new),
        drifting=fresh.drifting,
        standing=tuple(cue for cue in seen.standing if cue not in gone),
    )
    begun, t = tallies.begin(new), told.tallies
    names_old, names_new = _names(old), _names(new)
    signals_old = [s.name for s in watch.begin(old).band.signals]
    signals_new = [s.name for s in fresh.band.signals]
    told = replace(
        told,
        tallies=replace(
            t,
            temperatures=_moved(t.temperatures, signals_old, begun.temperatures, signals_new),
            good=_moved(t.good, names_old, begun.good, names_new),
            suspect=_moved(t.suspect, names_old, begun.suspect, names_new),
            bad=_moved(t.bad, names_old, begun.bad, names_new),
        ),
    )
    return seen, told, gone


def _names(rules: TestRules) -> list[str]:
    """Name with role and side: what means something else now is another channel, a calibration is not."""
    return [f"{c.name}|{c.role.value}|{c.side}" for c in rules.channels]


def _moved(
    kept: Sequence[T], names_old: Sequence[str], fresh: Sequence[T], names_new: Sequence[str]
) -> tuple[T, ...]:
    by_name: Mapping[str, T] = dict(zip(names_old, kept, strict=True))
    return tuple(by_name.get(name, begun) for name, begun in zip(names_new, fresh, strict=True))


def _band(s: BandState, fresh: BandState, left: set[str]) -> BandState:
    names_old = [x.name for x in s.signals]
    names_new = [x.name for x in fresh.signals]
    known = [x for x in names_old if x not in left]
    old = dict(zip(names_old, s.signals, strict=True))
    signals = tuple(old[x.name] if x.name in known else x for x in fresh.signals)
    output = "\0output"  # the controller's output stands behind the signals
    references = _moved(s.references, [*names_old, output], fresh.references, [*names_new, output])
    return replace(s, signals=signals, references=references, calm=False)


def _sensors(s: SensorState, fresh: SensorState, old: TestRules, new: TestRules) -> SensorState:
    before, now = _names(old), _names(new)
    return replace(
        s,
        holes=_moved(s.holes, before, fresh.holes, now),
        stills=_moved(s.stills, before, fresh.stills, now),
        travel=_moved(s.travel, before, fresh.travel, now),
        zero=_moved(s.zero, before, fresh.zero, now),
    )


def _levels(s: MilestoneState, old: TestRules, new: TestRules) -> MilestoneState:
    """Return the levels ahead: those kept, new milestones above the strain reached, a new limit always."""
    if (old.limits.milestones, old.limits.strain) == (new.limits.milestones, new.limits.strain):
        return s
    known = {(p.level, p.milestone): p for p in s.ahead}
    before = {(level, True) for level in old.limits.milestones} | {(old.limits.strain, False)}
    ahead = []
    for p in watch.begin(new).milestones.ahead:
        key = (p.level, p.milestone)
        passed = p.milestone and s.last == s.last and abs(p.level) <= abs(s.last)
        if key in known:
            ahead.append(known[key])
        elif key not in before and not passed:
            ahead.append(p)
    return replace(s, ahead=tuple(ahead))
